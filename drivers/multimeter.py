"""The driver of a multimeter: range by expectation, integration in mains cycles, uncertainty by accuracy."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from drivers.dialect import AccuracyRow, MultimeterDialect, load_dialect
from drivers.errors import BackendUnavailable, Overload
from drivers.link import Address, LinkState, open_link
from drivers.roles import Clock, Identity, Measured
from drivers.scpi import ScpiExchange

_SLOWEST_MAINS_HZ = 50.0


class MultimeterDriver:
    """A multimeter (`drivers.roles.Multimeter`).

    The configuration is sent only when it changes, and again after the link had to be recovered.

    Parameters
    ----------
    exchange : ScpiExchange
        The conversation; the driver owns it.
    dialect : MultimeterDialect
        How the meter says things, and how well it measures.
    clock : Clock
        Bench time; a reading takes its time inside the instrument, so nothing waits here.
    """

    def __init__(self, exchange: ScpiExchange, dialect: MultimeterDialect, clock: Clock) -> None:
        self._exchange = exchange
        self._dialect = dialect
        self._clock = clock
        self._configured: tuple[tuple[str, ...], int] | None = None

    @property
    def dialect(self) -> MultimeterDialect:
        """How the meter says things, and how well it measures."""
        return self._dialect

    @property
    def input_ohms(self) -> float:
        """What the meter loads a node with, on DC volts."""
        return self._dialect.input.ohms

    def identify(self) -> Identity:
        """Return who answers; where nobody can say, the dialect's title stands for the model."""
        return self._exchange.identify() or Identity("", self._dialect.title, "", "")

    def read_dc_volts(self, *, expect_volts: float | None = None, power_line_cycles: float = 1.0) -> Measured:
        """Take one DC reading.

        Parameters
        ----------
        expect_volts : float, optional
            What is expected (volts, any sign): picks the range. None: the meter chooses.
        power_line_cycles : float
            Integration time in mains cycles; the next longer one that the meter has is taken.

        Raises
        ------
        Overload
            Beyond the range.
        ReplyGarbled, InstrumentError, LinkError
            No usable answer.
        """
        commands = self._dialect.commands
        cycles = self._choose_cycles(power_line_cycles)
        wanted = _choose_range(self._dialect.dc_volts, expect_volts) if commands.dc_range else None
        messages = [commands.dc_range.format(range=wanted.up_to) if wanted else commands.dc_auto]
        if commands.dc_cycles:
            messages.append(commands.dc_cycles.format(cycles=cycles))
        return self._read(tuple(messages), self._dialect.dc_volts, wanted, "V", cycles)

    def read_ac_volts(self, *, expect_volts: float | None = None) -> Measured:
        """Take one reading of AC volts (rms). Raises as `read_dc_volts`, BackendUnavailable without AC."""
        commands = self._dialect.commands
        self._require(commands.ac_auto, "AC volts")
        wanted = _choose_range(self._dialect.ac_volts, expect_volts) if commands.ac_range else None
        message = commands.ac_range.format(range=wanted.up_to) if wanted else commands.ac_auto
        return self._read((message,), self._dialect.ac_volts, wanted, "V", 1.0)

    def read_ohms(self, *, expect_ohms: float | None = None) -> Measured:
        """Take one reading of resistance. Raises as `read_dc_volts`, BackendUnavailable without ohms."""
        commands = self._dialect.commands
        self._require(commands.ohms_auto, "ohms")
        wanted = _choose_range(self._dialect.ohms, expect_ohms) if commands.ohms_range else None
        message = commands.ohms_range.format(range=wanted.up_to) if wanted else commands.ohms_auto
        return self._read((message,), self._dialect.ohms, wanted, "Ω", 1.0)

    def close(self) -> None:
        """Close the link."""
        self._exchange.close()

    # -- inside --------------------------------------------------------------------------------------------

    def _choose_cycles(self, wanted: float) -> float:
        choices = sorted(self._dialect.input.cycles)
        return next((cycles for cycles in choices if cycles >= wanted), choices[-1])

    def _require(self, command: str, what: str) -> None:
        if not command:
            raise BackendUnavailable(f"{self._exchange.where}: {self._dialect.title} does not measure {what}")

    def _configure(self, messages: tuple[str, ...]) -> None:
        link = self._exchange.link
        if self._configured == (messages, link.recoveries) and link.state is LinkState.CLEAN:
            return
        self._configured = None
        self._exchange.command(*messages)
        self._configured = (messages, link.recoveries)

    def _read(
        self,
        messages: tuple[str, ...],
        rows: Sequence[AccuracyRow],
        wanted: AccuracyRow | None,
        unit: str,
        cycles: float,
    ) -> Measured:
        self._configure(messages)
        allowed_s = self._dialect.link.timeout_s + self._dialect.input.reading_s + cycles / _SLOWEST_MAINS_HZ
        value = self._exchange.ask_number(self._dialect.commands.read, retry=False, timeout_s=allowed_s)
        over = self._dialect.input.over_range_ratio
        possible = [wanted] if wanted else self._possible_ranges(rows, value)
        possible = [row for row in possible if abs(value) <= over * row.up_to]
        if not possible:
            limit = (wanted or rows[-1]).up_to
            raise Overload(
                f"{self._exchange.where}: {value:g} {unit} is beyond the range of {limit:g} {unit}"
            )
        u = max(row.standard_uncertainty(value, averaged=cycles) for row in possible)
        return Measured(value, unit, u)

    def _possible_ranges(self, rows: Sequence[AccuracyRow], value: float) -> list[AccuracyRow]:
        """Return the ranges that a meter left to itself may have read on: not told which, take the worst."""
        down = self._dialect.input.down_range_ratio
        reachable = [row for row in rows if abs(value) >= down * row.up_to]
        smallest = [row for row in rows if abs(value) <= row.up_to][:1]
        return reachable + smallest


def _choose_range(rows: Sequence[AccuracyRow], expected: float | None) -> AccuracyRow | None:
    """Return the smallest range with 5 % to spare, the largest when none has; None lets the meter choose."""
    if expected is None:
        return None
    return next((row for row in rows if row.up_to >= 1.05 * abs(expected)), rows[-1])


def open_multimeter(address: Address, *, dialect: str | Path, clock: Clock) -> MultimeterDriver:
    """Open a multimeter; nothing is sent yet. Parameters and errors as `drivers.supply.open_supply`."""
    found = load_dialect(dialect, MultimeterDialect)
    return MultimeterDriver(ScpiExchange(open_link(address, found.link), found.scpi), found, clock)
