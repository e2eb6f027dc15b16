"""How an instrument family says things: terminations, commands, accuracy by range, settle times, quirks.

A dialect is a TOML file; the dataclasses below are its schema (a table per dataclass, a key per field). An
empty command means that the instrument cannot do it. Numbers are in SI units, named in the keys.
"""

from __future__ import annotations

import dataclasses
import math
import tomllib
import typing
from collections.abc import Mapping
from dataclasses import MISSING, dataclass, field
from importlib import resources
from pathlib import Path
from types import MappingProxyType
from typing import Any, Final, Literal, TypeVar

from drivers.errors import BadDialect
from drivers.tables import TableReader, syntax_fault
from drivers.wire import LinkSettings

_FORMAT = 1


def _template(*names: str, default: Any = MISSING) -> Any:
    """Return a field for a command template that may use the placeholders `names`."""
    return field(default=default, metadata={"names": names})


def _number(low: float, default: Any = MISSING) -> Any:
    """Return a field for a number of at least `low`."""
    return field(default=default, metadata={"low": low})


@dataclass(frozen=True)
class ScpiQuirks:
    """What an instrument does of SCPI; empty text: it does not."""

    identify: str = _template(default="*IDN?")
    next_error: str = _template(default="SYST:ERR?")
    clear_status: str = _template(default="*CLS")
    wait_complete: str = _template(default="*OPC?")


@dataclass(frozen=True)
class AccuracyRow:
    """Accuracy of one range: +-(ratio of reading + offset), resolution, repeatability (1 sd)."""

    up_to: float = _number(1e-12)
    ratio: float = _number(0.0)
    offset: float = _number(0.0)
    resolution: float = _number(0.0)
    repeatability: float = _number(0.0, 0.0)

    def standard_uncertainty(self, value: float, *, averaged: float = 1.0) -> float:
        """Return the standard uncertainty of a reading of `value` on this range, in its unit.

        Limits of error count as a rectangular distribution (JCGM 100:2008, 4.3.7), a step of resolution as
        one half as wide (F.2.2.1); `averaged`: how many mains cycles the reading integrates over.
        """
        limit = self.ratio * abs(value) + self.offset
        noise = self.repeatability / math.sqrt(averaged)
        return math.sqrt(limit**2 / 3.0 + self.resolution**2 / 12.0 + noise**2)


@dataclass(frozen=True)
class SupplyCommands:
    """What a supply is told and asked."""

    set_volts: str = _template("volts")
    set_amps: str = _template("amps")
    output_on: str = _template()
    output_off: str = _template()
    measure_volts: str = _template()
    measure_amps: str = _template()
    ask_volts: str = _template(default="")
    ask_amps: str = _template(default="")
    set_over_volts: str = _template("volts", default="")
    ask_over_volts: str = _template(default="")
    ask_output: str = _template(default="")
    ask_condition: str = _template(default="")
    ask_tripped: str = _template(default="")
    clear_protection: str = _template(default="")


@dataclass(frozen=True)
class SupplyLimits:
    """What a supply can be set to, in which steps, and which bit of its condition says "current limit"."""

    max_volts: float = _number(0.0)
    max_amps: float = _number(0.0)
    step_volts: float = _number(1e-9)
    step_amps: float = _number(1e-9)
    max_over_volts: float = _number(0.0, math.inf)
    current_limit_bit: int = _number(0, 0)


@dataclass(frozen=True)
class SupplySettle:
    """Seconds that the output needs."""

    volts_s: float = _number(0.0)
    on_s: float = _number(0.0)
    off_s: float = _number(0.0)


@dataclass(frozen=True)
class SupplyDialect:
    """A family of supplies."""

    name: str
    title: str
    link: LinkSettings
    scpi: ScpiQuirks
    commands: SupplyCommands
    limits: SupplyLimits
    settle: SupplySettle
    read_volts: tuple[AccuracyRow, ...]
    read_amps: tuple[AccuracyRow, ...]


@dataclass(frozen=True)
class MultimeterCommands:
    """What a multimeter is told and asked; without a range command it always chooses its range itself."""

    read: str = _template()
    dc_auto: str = _template()
    dc_range: str = _template("range", default="")
    dc_cycles: str = _template("cycles", default="")
    ac_auto: str = _template(default="")
    ac_range: str = _template("range", default="")
    ohms_auto: str = _template(default="")
    ohms_range: str = _template("range", default="")


@dataclass(frozen=True)
class MultimeterInput:
    """Input resistance, how far a range reaches beyond its name, integration times that can be chosen."""

    ohms: float = _number(1.0)
    over_range_ratio: float = _number(1.0, 1.0)
    down_range_ratio: float = _number(0.0, 0.1)
    cycles: tuple[float, ...] = field(default=(1.0,))
    reading_s: float = _number(0.0, 1.0)


@dataclass(frozen=True)
class MultimeterDialect:
    """A family of multimeters; `reading_s` of the input comes on top of the integration."""

    name: str
    title: str
    link: LinkSettings
    scpi: ScpiQuirks
    commands: MultimeterCommands
    input: MultimeterInput
    dc_volts: tuple[AccuracyRow, ...]
    ac_volts: tuple[AccuracyRow, ...] = ()
    ohms: tuple[AccuracyRow, ...] = ()


@dataclass(frozen=True)
class SwitchboxCommands:
    """What a switchbox is told and asked.

    ``{channels}`` takes a list joined by commas, ``{channel}`` one each time. With ``frames = "hex"`` these
    are bytes in hexadecimal in which ``{channel:02X}`` and ``{sum}`` may stand: the low byte of the sum of
    all bytes before it.
    """

    close: str = _template("channels", "channel", "sum")
    open: str = _template("channels", "channel", "sum")
    open_all: str = _template(default="")
    ask_closed: str = _template("channels", "channel", default="")
    frames: Literal["text", "hex"] = "text"


@dataclass(frozen=True)
class SwitchboxRelays:
    """The relays: settle time after switching, and which there are (needed when no command opens all)."""

    operate_s: float = _number(0.0)
    channels: tuple[int, ...] = field(default=())


@dataclass(frozen=True)
class SwitchboxDialect:
    """A family of switchboxes."""

    name: str
    title: str
    link: LinkSettings
    scpi: ScpiQuirks
    commands: SwitchboxCommands
    relays: SwitchboxRelays


Dialect = TypeVar("Dialect", SupplyDialect, MultimeterDialect, SwitchboxDialect)
_ROLES: Final[Mapping[type, str]] = MappingProxyType(
    {SupplyDialect: "supply", MultimeterDialect: "multimeter", SwitchboxDialect: "switchbox"}
)


def load_dialect(name: str | Path, kind: type[Dialect]) -> Dialect:
    """Read a dialect by its name among those that come with toeline, or from a file.

    Parameters
    ----------
    name : str or Path
        A bare name, or a path to a file (recognised by ``.toml``).
    kind : type
        `SupplyDialect`, `MultimeterDialect` or `SwitchboxDialect`.

    Raises
    ------
    BadDialect
        Every fault of the file, one line each: file:line, what was found, what is accepted.
    """
    if isinstance(name, Path) or name.endswith(".toml"):
        try:
            text = Path(name).read_text(encoding="utf-8")
        except (OSError, UnicodeError) as error:
            raise BadDialect(f"{name}: this dialect file cannot be read: {error}") from error
        return parse_dialect(text, str(name), kind)
    folder = resources.files("drivers") / "dialects"
    file = folder / f"{name}.toml"
    if not file.is_file():
        known = sorted(
            entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml")
        )
        raise BadDialect(
            f'no dialect "{name}"; there are {", ".join(known)}, or give the path of a .toml file'
        )
    return parse_dialect(file.read_text(encoding="utf-8"), f"{name}.toml", kind)


def parse_dialect(text: str, file: str, kind: type[Dialect]) -> Dialect:
    """Read a dialect from the text of a file. Raises BadDialect as `load_dialect`."""
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise BadDialect(syntax_fault(error, file)) from error
    reader = _DialectReader(text, file, _SAMPLES)
    found = reader.read_root(table, kind)
    if reader.faults:
        raise BadDialect("\n".join(line for _, line in sorted(reader.faults)))
    return found


class _DialectReader(TableReader):
    """Reads a dialect and checks what its keys ask of each other."""

    def read_root(self, table: dict[str, Any], kind: type[Dialect]) -> Dialect:
        """Return the dialect; meaningless when faults were found."""
        table = dict(table)
        self.derived = ("confirm",)
        found = table.pop("format", None)
        if found != _FORMAT:
            self.fault(["format"], f"format = {found!r}; this version reads format = {_FORMAT}")
        role = table.pop("role", None)
        if role != _ROLES[kind]:
            self.fault(["role"], f'role = {role!r}; needed here is a dialect with role = "{_ROLES[kind]}"')
        for name in ("link", "scpi"):
            table.setdefault(name, {})
        dialect = self.read_table({"name": Path(self._file).stem, **table}, kind, [])
        if dialect is not None and not self.faults:
            link = dataclasses.replace(dialect.link, confirm=dialect.scpi.identify)
            dialect = dataclasses.replace(dialect, link=link)
            self._check(dialect)
        return typing.cast(Dialect, dialect)

    def _check(self, dialect: Any) -> None:
        for name in ("read_volts", "read_amps", "dc_volts", "ac_volts", "ohms"):
            rows = getattr(dialect, name, ())
            for index in range(1, len(rows)):
                if rows[index].up_to <= rows[index - 1].up_to:
                    self.fault(
                        [name, index, "up_to"], f"up_to = {rows[index].up_to:g}; accepted are rising ranges"
                    )
        if isinstance(dialect, SupplyDialect) and dialect.commands.set_over_volts:
            for name in ("ask_tripped", "clear_protection"):
                if not getattr(dialect.commands, name):
                    self.fault(["commands", "set_over_volts"], f'set_over_volts needs "{name}" as well')
        if isinstance(dialect, SwitchboxDialect):
            if not dialect.commands.open_all and not dialect.relays.channels:
                self.fault(["relays"], 'without "open_all" the relays must be listed: channels = [1, 2, ...]')
            if dialect.commands.frames == "hex":
                self._check_frames(dialect.commands)
        if isinstance(dialect, MultimeterDialect):
            for rows, command in (("ac_volts", "ac_auto"), ("ohms", "ohms_auto")):
                if getattr(dialect.commands, command) and not getattr(dialect, rows):
                    self.fault(
                        ["commands", command], f"{command} needs the accuracy of its ranges: [[{rows}]]"
                    )

    def _check_frames(self, commands: SwitchboxCommands) -> None:
        for name in ("close", "open", "open_all"):
            try:
                bytes.fromhex(getattr(commands, name).format(**_SAMPLES))
            except ValueError:
                self.fault(
                    ["commands", name],
                    f"{name} is no row of bytes; accepted is like A0 {{channel:02X}} 01 {{sum}}",
                )


_SAMPLES: Final[Mapping[str, Any]] = MappingProxyType(
    {"volts": 1.0, "amps": 0.1, "range": 10.0, "cycles": 1.0, "channels": "1,2", "channel": 1, "sum": "00"}
)
"""What templates are tried with."""
