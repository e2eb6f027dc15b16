"""The roles of a bench played by a person: the operator sets, switches, reads and types.

What is typed is checked for plausibility only (`Operator.ask_value` repeats until it is plausible). The
uncertainty of a typed value is what the bench file says of the instrument that the operator reads.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from drivers.errors import DriverError, ReadbackMismatch
from drivers.roles import Identity, Measured, Operator, Prompt


@dataclass(frozen=True)
class HandAccuracy:
    """Limits of error of what the operator reads: +-(ratio of reading + offset), and the last digit shown."""

    ratio: float = 0.01
    offset: float = 0.0
    resolution: float = 0.01

    def measured(self, value: float, unit: str) -> Measured:
        """Return the value with its standard uncertainty (rectangular, JCGM 100:2008, 4.3.7)."""
        limit = self.ratio * abs(value) + self.offset
        return Measured(value, unit, math.sqrt(limit**2 / 3.0 + self.resolution**2 / 12.0))


def _identity(role: str) -> Identity:
    return Identity("by hand", role, "", "")


class SupplyByHand:
    """A supply set and read by the operator (`drivers.roles.Supply`)."""

    def __init__(
        self,
        operator: Operator,
        *,
        max_volts: float = 30.0,
        max_amps: float = 3.0,
        volts: HandAccuracy | None = None,
        amps: HandAccuracy | None = None,
    ) -> None:
        self._operator = operator
        self._max_volts = max_volts
        self._max_amps = max_amps
        self._volts_accuracy = HandAccuracy(0.01, 0.0, 0.01) if volts is None else volts
        self._amps_accuracy = HandAccuracy(0.01, 0.0, 0.001) if amps is None else amps
        self._protected = False
        self._limit_amps = 0.0
        self._over_volts = 0.0
        self._on: bool | None = None

    def identify(self) -> Identity:
        """Return that a person plays the supply."""
        return _identity("supply")

    def set_protection(self, *, over_volts: float, limit_amps: float) -> None:
        """Have both set, and the limit read back. Raises ReadbackMismatch, DriverError."""
        self._protected = False
        if not 0.0 <= limit_amps <= self._max_amps:
            raise DriverError(
                f"a current limit of {limit_amps:g} A; this supply goes to {self._max_amps:g} A"
            )
        text = f"Supply: output off. Set the current limit to {limit_amps:g} A and the over-voltage"
        self._operator.ask(Prompt(f"{text} protection, if there is one, to {over_volts:g} V."))
        shown = self._operator.ask_value(
            Prompt("Which current limit does the supply show?"), unit="A", low=0.0, high=self._max_amps
        )
        if abs(shown - limit_amps) > 0.1 * limit_amps + self._amps_accuracy.resolution:
            raise ReadbackMismatch(f"the current limit should be {limit_amps:g} A; {shown:g} A was typed")
        self._on = False
        self._protected, self._limit_amps, self._over_volts = True, limit_amps, over_volts

    def set_volts(self, volts: float) -> None:
        """Have the voltage set. Raises DriverError beyond the supply or its protection."""
        ceiling = min(self._max_volts, self._over_volts) if self._protected else self._max_volts
        if not 0.0 <= volts <= ceiling:
            raise DriverError(f"an output voltage of {volts:g} V; allowed is 0 to {ceiling:g} V")
        self._operator.ask(Prompt(f"Supply: set the voltage to {volts:g} V."))

    def output_on(self) -> None:
        """Have the output switched on. Raises DriverError before `set_protection`."""
        if not self._protected:
            raise DriverError("supply by hand: the output stays off: no protection has been set yet")
        self._on = True
        self._operator.ask(Prompt("Supply: switch the output ON."))

    def output_off(self) -> None:
        """Have the output switched off, and its voltage read. Raises ReadbackMismatch when it is not off."""
        if self._on is False:
            return
        self._operator.ask(Prompt("Supply: switch the output OFF."))
        shown = self._operator.ask_value(
            Prompt("Which voltage does the supply's output show now?"),
            unit="V",
            low=0.0,
            high=self._max_volts,
        )
        if shown > 0.5:
            raise ReadbackMismatch(f"the output was switched off but shows {shown:g} V: it may still be ON")
        self._on = False

    def output_is_on(self) -> bool:
        """Return what the operator was last asked to do; on as long as nothing is known."""
        return self._on is not False

    def read_volts(self) -> Measured:
        """Have the voltage read and typed."""
        prompt = Prompt("Which voltage does the supply show?")
        value = self._operator.ask_value(prompt, unit="V", low=0.0, high=self._max_volts)
        return self._volts_accuracy.measured(value, "V")

    def read_amps(self) -> Measured:
        """Have the current read and typed."""
        prompt = Prompt("Which current does the supply show?")
        value = self._operator.ask_value(prompt, unit="A", low=0.0, high=self._max_amps)
        return self._amps_accuracy.measured(value, "A")

    def in_current_limit(self) -> bool:
        """Ask whether the supply shows that its current limit is at work (1 yes, 0 no)."""
        prompt = Prompt("Does the supply show that its current limit is at work? 1 for yes, 0 for no.")
        return self._operator.ask_value(prompt, unit="", low=0.0, high=1.0) >= 0.5

    def close(self) -> None:
        """Do nothing: there is no link."""


class MultimeterByHand:
    """A multimeter read by the operator (`drivers.roles.Multimeter`)."""

    def __init__(
        self,
        operator: Operator,
        *,
        input_ohms: float = 10e6,
        max_volts: float = 1000.0,
        dc: HandAccuracy | None = None,
        ac: HandAccuracy | None = None,
        ohms: HandAccuracy | None = None,
    ) -> None:
        self._operator = operator
        self._input_ohms = input_ohms
        self._max_volts = max_volts
        self._dc = HandAccuracy(0.005, 0.0, 0.001) if dc is None else dc
        self._ac = HandAccuracy(0.01, 0.0, 0.001) if ac is None else ac
        self._ohms = HandAccuracy(0.01, 0.0, 0.1) if ohms is None else ohms
        self._of = ""

    @property
    def input_ohms(self) -> float:
        """What the meter loads a node with."""
        return self._input_ohms

    def point_at(self, what: str) -> None:
        """Hear what the next readings are of, for the prompts."""
        self._of = f" at {what}"

    def identify(self) -> Identity:
        """Return that a person plays the multimeter."""
        return _identity("multimeter")

    def read_dc_volts(self, *, expect_volts: float | None = None, power_line_cycles: float = 1.0) -> Measured:
        """Have a DC voltage read and typed."""
        prompt = Prompt(
            f"Multimeter{self._of}, DC volts{_expectation(expect_volts, 'V')}: which voltage does it show?"
        )
        value = self._operator.ask_value(prompt, unit="V", low=-self._max_volts, high=self._max_volts)
        return self._dc.measured(value, "V")

    def read_ac_volts(self, *, expect_volts: float | None = None) -> Measured:
        """Have an AC voltage read and typed."""
        prompt = Prompt(
            f"Multimeter{self._of}, AC volts{_expectation(expect_volts, 'V')}: which voltage does it show?"
        )
        value = self._operator.ask_value(prompt, unit="V", low=0.0, high=self._max_volts)
        return self._ac.measured(value, "V")

    def read_ohms(self, *, expect_ohms: float | None = None) -> Measured:
        """Have a resistance read and typed."""
        prompt = Prompt(
            f"Multimeter{self._of}, ohms{_expectation(expect_ohms, 'Ω')}: which resistance does it show?"
        )
        value = self._operator.ask_value(prompt, unit="Ω", low=0.0, high=1e9)
        return self._ohms.measured(value, "Ω")

    def close(self) -> None:
        """Do nothing: there is no link."""


def _expectation(expected: float | None, unit: str) -> str:
    return "" if expected is None else f" (range for {expected:g} {unit})"


@dataclass
class SwitchboxByHand:
    """Switches set by the operator (`drivers.roles.Switchbox`); `names` says what each channel is called."""

    operator: Operator
    names: Mapping[int, str] = field(default_factory=dict)
    _known: dict[int, bool] = field(default_factory=dict)
    _all_open: bool = False

    def identify(self) -> Identity:
        """Return that a person plays the switchbox."""
        return _identity("switchbox")

    def set_channels(self, *, close: Sequence[int], open: Sequence[int]) -> None:
        """Have switches opened, then closed; asks only for what is not there already. Raises DriverError."""
        both = sorted(set(close) & set(open))
        if both:
            raise DriverError(f"channels {both} cannot be open and closed at once")
        to_open = [channel for channel in open if self._known.get(channel, not self._all_open)]
        if to_open:
            self.operator.ask(Prompt(f"Switches: open {self._named(to_open)}."))
            self._known.update(dict.fromkeys(to_open, False))
        to_close = [channel for channel in close if not self._known.get(channel, False)]
        if to_close:
            self._known.update(dict.fromkeys(to_close, True))
            self.operator.ask(Prompt(f"Switches: close {self._named(to_close)}."))

    def closed_channels(self, channels: Sequence[int]) -> frozenset[int]:
        """Return which of the channels the operator was asked to close."""
        return frozenset(channel for channel in channels if self._known.get(channel, False))

    def open_all(self) -> None:
        """Have every switch opened, unless they are known to be open."""
        if self._all_open and not any(self._known.values()):
            return
        self.operator.ask(Prompt("Switches: open all of them."))
        self._known.clear()
        self._all_open = True

    def close(self) -> None:
        """Do nothing: there is no link."""

    def _named(self, channels: Sequence[int]) -> str:
        return ", ".join(self.names.get(channel, f"channel {channel}") for channel in channels)
