"""The driver of a bench supply: protection comes before output, and off means verified off."""

from __future__ import annotations

import math
from pathlib import Path

from drivers.dialect import AccuracyRow, SupplyDialect, load_dialect
from drivers.errors import (
    DriverError,
    InstrumentError,
    LinkError,
    Overload,
    ProtectionTripped,
    ReadbackMismatch,
)
from drivers.link import Address, open_link
from drivers.roles import Clock, Identity, Measured
from drivers.scpi import ScpiExchange

_OFF_ATTEMPTS = 2
_OFF_VOLTS = 0.5  # below this the terminals count as dead where the output state cannot be asked


class SupplyDriver:
    """A supply with one output (`drivers.roles.Supply`).

    Parameters
    ----------
    exchange : ScpiExchange
        The conversation; the driver owns it.
    dialect : SupplyDialect
        How the supply says things.
    clock : Clock
        Where waiting goes.
    """

    def __init__(self, exchange: ScpiExchange, dialect: SupplyDialect, clock: Clock) -> None:
        self._exchange = exchange
        self._dialect = dialect
        self._clock = clock
        self._over_volts: float | None = None
        self._limit_amps: float | None = None

    @property
    def dialect(self) -> SupplyDialect:
        """How the supply says things, and how well it does them."""
        return self._dialect

    def identify(self) -> Identity:
        """Return who answers; where nobody can say, the dialect's title stands for the model."""
        return self._exchange.identify() or Identity("", self._dialect.title, "", "")

    def set_protection(self, *, over_volts: float, limit_amps: float) -> None:
        """Set over-voltage protection and current limit and read both back.

        A supply without over-voltage protection of its own is watched by the driver: it is never set above
        `over_volts`, and a reading above it switches the output off. That is slower than a real protection.

        Raises
        ------
        DriverError
            A value that this supply cannot take.
        ReadbackMismatch
            The supply has kept another value.
        InstrumentError, LinkError
            It refused, or the conversation failed.
        """
        limits, commands = self._dialect.limits, self._dialect.commands
        self._over_volts = self._limit_amps = None
        _check_range("over-voltage protection", over_volts, limits.max_over_volts, "V")
        _check_range("current limit", limit_amps, limits.max_amps, "A")
        if not self._may_be_on():  # a voltage left over from before must not meet the new protection
            self._set_and_verify(commands.set_volts, commands.ask_volts, 0.0, limits.step_volts, "V")
        if commands.clear_protection:
            self._exchange.command(commands.clear_protection)
        if commands.set_over_volts:
            self._set_and_verify(
                commands.set_over_volts, commands.ask_over_volts, over_volts, limits.step_volts, "V"
            )
        self._set_and_verify(commands.set_amps, commands.ask_amps, limit_amps, limits.step_amps, "A")
        self._over_volts, self._limit_amps = over_volts, limit_amps

    def set_volts(self, volts: float) -> None:
        """Set the output voltage, read it back, wait until it has settled.

        Raises
        ------
        DriverError
            Beyond the supply, or beyond the over-voltage protection that was set.
        ReadbackMismatch, InstrumentError, LinkError
            The supply has kept another value, refused, or the conversation failed.
        """
        commands, limits = self._dialect.commands, self._dialect.limits
        ceiling = limits.max_volts if self._over_volts is None else min(limits.max_volts, self._over_volts)
        _check_range("output voltage", volts, ceiling, "V")
        self._set_and_verify(commands.set_volts, commands.ask_volts, volts, limits.step_volts, "V")
        self._clock.sleep(self._dialect.settle.volts_s)

    def output_on(self) -> None:
        """Switch the output on, once; verify by read-back.

        Raises
        ------
        DriverError
            `set_protection` was not called (successfully) before.
        ProtectionTripped, ReadbackMismatch, InstrumentError, LinkError
            The protection acted, the output stayed off, the supply refused, or the conversation failed: then
            the output may be on; call `output_off`.
        """
        if self._over_volts is None:
            raise DriverError(f"{self._exchange.where}: the output stays off: no protection has been set yet")
        commands = self._dialect.commands
        self._raise_if_tripped()
        self._exchange.command(commands.output_on)
        self._clock.sleep(self._dialect.settle.on_s)
        self._raise_if_tripped()
        if commands.ask_output and not self._exchange.ask_flag(commands.ask_output):
            raise ReadbackMismatch(
                f"{self._exchange.where}: the output was switched on but reads back as off"
            )

    def output_off(self) -> None:
        """Switch the output off and verify; goes on after failures, opens a lost link again. Idempotent.

        Raises
        ------
        DriverError
            The last of the failures, with the plain word that the output may still be on.
        """
        failure: DriverError | None = None
        for _ in range(_OFF_ATTEMPTS):
            try:
                self._exchange.link.write(self._dialect.commands.output_off)
                self._clock.sleep(self._dialect.settle.off_s)
                if self._ask_output(retry=False):
                    raise ReadbackMismatch(f"{self._exchange.where}: switched off but reads back as on")
            except DriverError as error:
                failure = error
                continue
            self._forget_errors()
            return
        assert failure is not None
        raise type(failure)(*_also(failure, "THE SUPPLY MAY STILL BE ON: switch it off by hand")) from failure

    def output_is_on(self) -> bool:
        """Return whether the output is on, by read-back (by its voltage where the state cannot be asked)."""
        return self._ask_output(retry=True)

    def read_volts(self) -> Measured:
        """Return the voltage at the terminals. Raises ProtectionTripped, Overload, LinkError."""
        measured = self._read(self._dialect.commands.measure_volts, self._dialect.read_volts, "V")
        if self._over_volts is not None and not self._dialect.commands.set_over_volts:
            self._watch_over_volts(measured.value)
        return measured

    def read_amps(self) -> Measured:
        """Return the current out of the terminals. Raises ProtectionTripped, Overload, LinkError."""
        return self._read(self._dialect.commands.measure_amps, self._dialect.read_amps, "A")

    def in_current_limit(self) -> bool:
        """Return whether the current limit is at work; without a status, whether the current is there."""
        commands = self._dialect.commands
        if commands.ask_condition:
            condition = round(self._exchange.ask_number(commands.ask_condition))
            return bool(condition >> self._dialect.limits.current_limit_bit & 1)
        if self._limit_amps is None:
            return False
        measured = self.read_amps()
        return measured.value >= self._limit_amps - max(2.0 * measured.u, self._dialect.limits.step_amps)

    def close(self) -> None:
        """Close the link; the output stays as it is."""
        self._exchange.close()

    # -- inside --------------------------------------------------------------------------------------------

    def _set_and_verify(self, template: str, question: str, value: float, step: float, unit: str) -> None:
        message = template.format(volts=value, amps=value)
        self._exchange.command(message)
        if not question:
            return
        kept = self._exchange.ask_number(question)
        if not math.isclose(kept, value, rel_tol=1e-6, abs_tol=step):
            raise ReadbackMismatch(f'{self._exchange.where}: after "{message}" it reads back {kept:g} {unit}')

    def _may_be_on(self) -> bool:
        return self._dialect.commands.ask_output == "" or self.output_is_on()

    def _ask_output(self, *, retry: bool) -> bool:
        commands = self._dialect.commands
        if commands.ask_output:
            return self._exchange.ask_flag(commands.ask_output, retry=retry)
        return abs(self._exchange.ask_number(commands.measure_volts, retry=retry)) > _OFF_VOLTS

    def _forget_errors(self) -> None:
        """Empty the error queue; an old complaint is no reason to doubt an output that reads back as off."""
        try:
            self._exchange.read_errors()
        except LinkError:
            return

    def _raise_if_tripped(self) -> None:
        question = self._dialect.commands.ask_tripped
        if question and self._exchange.ask_flag(question):
            raise ProtectionTripped(
                f"{self._exchange.where}: the over-voltage protection ({self._over_volts} V) has acted; "
                "the output is off until it is set up again"
            )

    def _watch_over_volts(self, volts: float) -> None:
        assert self._over_volts is not None
        if volts > self._over_volts:
            self.output_off()
            raise ProtectionTripped(
                f"{self._exchange.where}: {volts:g} V exceeds the allowed {self._over_volts:g} V; off now"
            )

    def _read(self, question: str, rows: tuple[AccuracyRow, ...], unit: str) -> Measured:
        value = self._exchange.ask_number(question)
        self._raise_if_tripped()
        for row in rows:
            if abs(value) <= row.up_to:
                return Measured(value, unit, row.standard_uncertainty(value))
        raise Overload(
            f"{self._exchange.where}: reads {value:g} {unit}, accuracy is known to {rows[-1].up_to:g} {unit}"
        )


def _check_range(what: str, value: float, high: float, unit: str) -> None:
    if not 0.0 <= value <= high:
        raise DriverError(f"{what} of {value:g} {unit}; allowed is 0 to {high:g} {unit}")


def _also(failure: DriverError, text: str) -> tuple[object, ...]:
    """Return the arguments for an error like `failure` that says `text` as well."""
    if isinstance(failure, InstrumentError):
        return (text, failure.code, failure.text)
    return (f"{failure}\n{text}",)


def open_supply(address: Address, *, dialect: str | Path, clock: Clock) -> SupplyDriver:
    """Open a supply; nothing is sent yet.

    Parameters
    ----------
    address : VisaAddress or SerialAddress
        Where it is.
    dialect : str or Path
        Name or file of a supply dialect.
    clock : Clock
        Where waiting goes.

    Raises
    ------
    BadDialect, BackendUnavailable, LinkDown
        The dialect cannot be used, a library or port is not there, nobody answers.
    """
    found = load_dialect(dialect, SupplyDialect)
    return SupplyDriver(ScpiExchange(open_link(address, found.link), found.scpi), found, clock)
