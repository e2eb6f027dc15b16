"""A SCPI instrument down to its bytes: takes program messages, keeps status, gives response messages.

A device subclasses `ScpiDevice` and declares its commands in a table (`Command`). The transports
of `drivers.simulated.visa` and `drivers.simulated.served` carry the bytes. Reading without a question is
reported as -420, asking again without reading as -410 (IEEE 488.2, 6.3.2); a stream takes every answer at
once and sees neither.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Protocol

from drivers.simulated.scpi_status import CME, OPC, Register, ScpiError, Status, event_bit
from drivers.simulated.scpi_syntax import (
    Bound,
    Choice,
    Number,
    Parameter,
    Unit,
    Whole,
    header_pattern,
    message_units,
)

_INPUT_BUFFER_BYTES = 65536
_JOURNAL_LENGTH = 10_000


class ByteDevice(Protocol):
    """What a transport needs of a device."""

    def receive(self, data: bytes) -> None:
        """Take bytes from the computer; whole messages are carried out at once."""

    def transmit(self, count: int) -> bytes:
        """Give at most `count` bytes of what is ready."""

    def end_of_message(self) -> None:
        """The transport marks the end of a message (END of VISA); a stream has none."""

    def talk(self) -> None:
        """The computer reads by message: a chance to report -420 when there is nothing to say."""

    def clear(self) -> None:
        """Device clear: forget unread bytes in both directions."""

    def status_byte(self) -> int:
        """What a serial poll sees."""


@dataclass(frozen=True)
class Command:
    """One header (written as in a manual, ``?`` at the end of a query), its parameters, and what it does."""

    header: str
    run: Callable[..., str | None]
    parameters: tuple[Parameter, ...] = ()


def format_number(value: float) -> str:
    """Write a number as instruments do (NR3, nine digits)."""
    return f"{value:+.8E}"


@dataclass(frozen=True)
class JournalEntry:
    """One message unit that an instrument has carried out, and when by its own clock."""

    time_s: float
    text: str


class ScpiDevice:
    """Parser, dispatcher, status and queues; subclasses add commands and `reset`.

    Parameters
    ----------
    identity : str
        The answer to ``*IDN?``.
    commands : iterable of Command
        Beyond the common and required ones.
    now_s : callable
        The instrument's clock, for its journal.
    """

    def __init__(
        self,
        identity: str,
        commands: Iterable[Command],
        *,
        now_s: Callable[[], float],
        interrupts: bool = True,
    ) -> None:
        self.identity = identity
        self.status = Status()
        self.journal: deque[JournalEntry] = deque(maxlen=_JOURNAL_LENGTH)
        self._now_s = now_s
        self._input = bytearray()
        self._output = bytearray()
        table = (*commands, *self._common_commands(), *self._required_commands())
        self._table = [(header_pattern(command.header), command) for command in table]
        self._found: dict[str, Command] = {}

    def reset(self) -> None:
        """``*RST``: back to the settings of power-on; status is not touched."""

    def refresh(self) -> None:
        """Bring conditions up to date; called before every message unit."""

    # -- transport side ------------------------------------------------------------------------------------

    def receive(self, data: bytes) -> None:
        """Take bytes; every line is a program message."""
        self._input += data
        while b"\n" in self._input:
            line, _, rest = bytes(self._input).partition(b"\n")
            self._input = bytearray(rest)
            self._execute(line.decode("latin-1").strip())
        if len(self._input) > _INPUT_BUFFER_BYTES:
            self._input.clear()
            self.status.add_error(-363)

    def end_of_message(self) -> None:
        """Carry out what stands in the input buffer without its newline."""
        if self._input:
            self.receive(b"\n")

    def transmit(self, count: int) -> bytes:
        """Give at most `count` bytes of the output queue."""
        data = bytes(self._output[:count])
        del self._output[:count]
        return data

    def talk(self) -> None:
        """Report -420 when asked to talk with nothing to say."""
        if not self._output:
            self.status.add_error(-420)

    def clear(self) -> None:
        """Device clear (IEEE 488.2, 5.8): both buffers are emptied, settings and status stay."""
        self._input.clear()
        self._output.clear()

    def status_byte(self) -> int:
        """Return the status byte."""
        self.refresh()
        return self.status.byte(message_available=bool(self._output))

    # -- executing -----------------------------------------------------------------------------------------

    def _execute(self, message: str) -> None:
        if not message:
            return
        if self._output:
            self._output.clear()
            self.status.add_error(-410)
        answers: list[str] = []
        ended = False
        try:
            for unit in message_units(message):
                if ended and unit.header.endswith("?"):
                    raise ScpiError(-440)
                self._execute_unit(unit, answers)
                ended = ended or unit.header == "*IDN?"
        except ScpiError as error:  # a command error ends the message
            self.status.add_error(error.code, error.text)
        if answers:
            self._output += (";".join(answers) + "\n").encode("latin-1")

    def _execute_unit(self, unit: Unit, answers: list[str]) -> None:
        command = self._find(unit.header)
        typed = " ".join((unit.header, ",".join(unit.parameters))).strip()
        self.refresh()
        try:
            values = _parse_parameters(command, unit.parameters)
            self.journal.append(JournalEntry(self._now_s(), typed))
            answer = command.run(*values)
        except ScpiError as error:
            if event_bit(error.code) == CME:
                raise
            self.status.add_error(error.code, error.text)  # an execution error spoils its own unit only
            return
        if answer is not None:
            answers.append(answer)

    def _find(self, header: str) -> Command:
        if header in self._found:
            return self._found[header]
        for pattern, command in self._table:
            match = pattern.fullmatch(header)
            if match is None:
                continue
            if any(suffix and int(suffix) != 1 for suffix in match.groups()):
                raise ScpiError(-114)
            self._found[header] = command
            return command
        raise ScpiError(-113)

    # -- commands that every device has --------------------------------------------------------------------

    def _common_commands(self) -> tuple[Command, ...]:
        status = self.status
        byte = (Whole(0, 255),)
        return (
            Command("*IDN?", lambda: self.identity),
            Command("*RST", self.reset),
            Command("*CLS", status.clear),
            Command("*TST?", lambda: "0"),
            Command("*WAI", lambda: None),  # nothing here overlaps
            Command("*OPC", lambda: _set(status, "events", status.events | OPC)),
            Command("*OPC?", lambda: "1"),
            Command("*ESE", lambda mask: _set(status, "event_enable", mask), byte),
            Command("*ESE?", lambda: str(status.event_enable)),
            Command("*ESR?", lambda: str(status.take_events())),
            Command("*SRE", lambda mask: _set(status, "service_enable", mask & ~64), byte),
            Command("*SRE?", lambda: str(status.service_enable)),
            Command("*STB?", lambda: str(status.byte(message_available=bool(self._output)))),
        )

    def _required_commands(self) -> tuple[Command, ...]:
        status = self.status
        return (
            Command("SYSTem:ERRor[:NEXT]?", status.next_error),
            Command("SYSTem:ERRor:COUNt?", lambda: str(len(status.errors))),
            Command("SYSTem:VERSion?", lambda: "1999.0"),
            Command("STATus:PRESet", status.preset),
            *_register_commands("STATus:QUEStionable", status.questionable),
            *_register_commands("STATus:OPERation", status.operation),
        )


def _set(target: object, name: str, value: object) -> None:
    setattr(target, name, value)


def _register_commands(root: str, register: Register) -> Iterable[Command]:
    mask = (Whole(0, 65535),)
    yield Command(f"{root}[:EVENt]?", lambda: str(register.take_event()))
    yield Command(f"{root}:CONDition?", lambda: str(register.condition))
    for word, name in (("ENABle", "enable"), ("PTRansition", "positive"), ("NTRansition", "negative")):
        yield Command(f"{root}:{word}", lambda value, name=name: _set(register, name, value & 0x7FFF), mask)
        yield Command(f"{root}:{word}?", lambda name=name: str(getattr(register, name)))


def _parse_parameters(command: Command, texts: tuple[str, ...]) -> list[Any]:
    if len(texts) > len(command.parameters):
        raise ScpiError(-108)
    if len(texts) < sum(not parameter.optional for parameter in command.parameters):
        raise ScpiError(-109)
    values: list[Any] = [
        parameter.parse(text) for parameter, text in zip(command.parameters, texts, strict=False)
    ]
    return values + [None] * (len(command.parameters) - len(texts))


def number_setting(
    header: str,
    unit: str,
    *,
    low: Bound,
    high: Bound,
    default: Bound,
    get: Bound,
    put: Callable[[float], None],
) -> tuple[Command, Command]:
    """Return the two commands of a numeric setting: ``X <n|MIN|MAX|DEF>`` and ``X? [MIN|MAX|DEF]``."""

    def ask(which: str | None) -> str:
        return format_number({"MIN": low, "MAX": high, "DEF": default, None: get}[which]())

    return (
        Command(header, put, (Number(unit, low, high, default),)),
        Command(header + "?", ask, (Choice(("MINimum", "MAXimum", "DEFault"), optional=True),)),
    )
