"""What the simulated instruments see of the world: their own terminals, and time.

The instruments know nothing of circuits or pedals; the world (`drivers.simulated.world`) plays this protocol,
and tests of the instruments play it with a resistor.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from drivers.roles import Samples


@dataclass(frozen=True)
class TerminalState:
    """The supply's terminals now: volts across, amps out of them, and whether the current limit is at work."""

    volts: float
    amps: float
    limited: bool


class Terminals(Protocol):
    """The places where simulated instruments touch the world."""

    def now_s(self) -> float:
        """Return the world's time in seconds."""

    def advance(self, seconds: float) -> None:
        """Let time pass: capacitors settle, a held tone plays on."""

    def drive_supply(self, *, volts: float, limit_amps: float, on: bool) -> None:
        """Set what the supply's regulator tries to do from now on."""

    def supply_terminals(self) -> TerminalState:
        """Return what is at the supply's terminals now."""

    def set_relay(self, channel: int, closed: bool) -> None:
        """Command a relay of the switchbox; contacts follow within the relay's own operate time."""

    def meter_dc_volts(self, aperture_s: float) -> float:
        """Return the mean voltage at the meter's terminals over the aperture; takes that much time."""

    def meter_ac_volts(self, aperture_s: float) -> float:
        """Return the true rms of the AC part at the meter's terminals over the aperture; takes that much time."""

    def meter_ohms(self, test_amps: float, aperture_s: float) -> float:
        """Return volts over amps at the meter's terminals with the test current on; takes that much time."""

    def play_record(self, line_volts: Samples, rate_hz: int) -> Samples:
        """Drive the fixture's line input with shape (frames,) volts; return shape (frames, 2) volts.

        Column 0 is the fixture's line output (pedal output), column 1 the monitor of the line input. The world's
        time moves by frames / rate_hz.
        """

    def hold_tone(self, hz: float, peak_volts: float) -> None:
        """Keep a sine on the line input from now on (0 V: silence)."""
