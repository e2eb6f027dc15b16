"""The roles of a bench: what a step may ask of supply, multimeter, switchbox, audio interface, clock and operator.

Whoever plays a role (a real instrument, a simulated one, a person) is hidden behind these protocols.
All methods may raise the errors of `drivers.errors`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

Samples = NDArray[np.float64]


@dataclass(frozen=True)
class Identity:
    """Who plays a role: the four fields of ``*IDN?`` (IEEE 488.2 10.14) or their equivalent."""

    maker: str
    model: str
    serial: str
    firmware: str

    def __str__(self) -> str:
        return ",".join((self.maker, self.model, self.serial, self.firmware))


@dataclass(frozen=True)
class Measured:
    """One value from an instrument.

    `value` in the SI unit `unit`; `u` the standard uncertainty (JCGM 100) in the same unit, from the
    accuracy, resolution and repeatability that the dialect states.
    """

    value: float
    unit: str
    u: float


@dataclass(frozen=True)
class Take:
    """What the audio interface captured.

    `volts` has shape (frames, 2), float64: column 0 the pedal's output, column 1 the monitor of the
    stimulus (both in volts at the interface's inputs). Same frame count as the stimulus played plus `tail`.
    """

    volts: Samples
    rate_hz: int


@runtime_checkable
class Supply(Protocol):
    """A bench supply with one output. Volts and amps are magnitudes at the terminals."""

    def identify(self) -> Identity:
        """Return who answers."""

    def set_protection(self, *, over_volts: float, limit_amps: float) -> None:
        """Set over-voltage protection and current limit, verified by read-back. Call before `output_on`."""

    def set_volts(self, volts: float) -> None:
        """Set the output voltage, verified by read-back."""

    def output_on(self) -> None:
        """Switch the output on; never re-sent by the link. Refuses if `set_protection` was not called."""

    def output_off(self) -> None:
        """Switch the output off and verify by read-back. Idempotent."""

    def output_is_on(self) -> bool:
        """Read back whether the output is on."""

    def read_volts(self) -> Measured:
        """Read the volts at the terminals."""

    def read_amps(self) -> Measured:
        """Read the amps out of the terminals."""

    def in_current_limit(self) -> bool:
        """Tell whether the current limit is at work."""

    def close(self) -> None:
        """Give the instrument back."""


@runtime_checkable
class Multimeter(Protocol):
    """A multimeter. A reading integrates over whole mains cycles and takes bench time."""

    def identify(self) -> Identity:
        """Return who answers."""

    def read_dc_volts(self, *, expect_volts: float | None = None, power_line_cycles: float = 1.0) -> Measured:
        """One DC reading; `expect_volts` picks the range (None: autorange). Raises Overload beyond the range."""

    def read_ac_volts(self, *, expect_volts: float | None = None) -> Measured:
        """Return the rms of the AC part. Raises Overload beyond the range."""

    def read_ohms(self, *, expect_ohms: float | None = None) -> Measured:
        """Return a resistance. Raises Overload beyond the range."""

    @property
    def input_ohms(self) -> float:
        """What the meter loads a node with."""

    def close(self) -> None:
        """Give the instrument back."""


@runtime_checkable
class Switchbox(Protocol):
    """A box of relays, numbered channels. `set_channels` verifies by read-back where the box can read back."""

    def identify(self) -> Identity:
        """Return who answers."""

    def set_channels(self, *, close: Sequence[int], open: Sequence[int]) -> None:
        """Open first, then close (break before make), wait the settle time of the dialect, verify."""

    def closed_channels(self, channels: Sequence[int]) -> frozenset[int]:
        """Return which of the channels are closed."""

    def open_all(self) -> None:
        """Open every relay and verify. Idempotent."""

    def close(self) -> None:
        """Give the instrument back."""


@runtime_checkable
class AudioInterface(Protocol):
    """An audio interface with one output and two inputs, calibrated in volts by the bench file."""

    def identify(self) -> Identity:
        """Return who answers."""

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""

    @property
    def max_output_volts(self) -> float:
        """Peak volts at the line output for a full-scale sample."""

    @property
    def max_input_volts(self) -> float:
        """Peak volts at the pedal-output input for a full-scale sample."""

    def play_record(self, stimulus_volts: Samples) -> Take:
        """Play shape (frames,) volts (peak, at the line output) and record as long. Raises AudioError."""

    def start_tone(self, hz: float, peak_volts: float) -> None:
        """Hold a sine at the line output until `mute` (for readings with the multimeter)."""

    def mute(self) -> None:
        """Silence the output."""

    def close(self) -> None:
        """Give the instrument back."""


@runtime_checkable
class Clock(Protocol):
    """Bench time. Every wait goes through it; the simulated clock advances the world instead of sleeping."""

    def monotonic_s(self) -> float:
        """Return seconds that never run backwards."""

    def sleep(self, seconds: float) -> None:
        """Let bench time pass."""


@dataclass(frozen=True)
class Prompt:
    """What the operator is asked: a short text, and in `controls` which control shall go where.

    `controls` maps the name of a control to its position as a fraction of its travel (0 fully left, 1 fully
    right); a scripted operator turns the simulated knobs by it.
    """

    text: str
    controls: Mapping[str, float] = field(default_factory=dict)


@runtime_checkable
class Operator(Protocol):
    """The person at the bench, or who plays one."""

    def ask(self, prompt: Prompt) -> None:
        """Show the prompt and return when it has been done."""

    def ask_value(self, prompt: Prompt, *, unit: str, low: float, high: float) -> float:
        """Ask for a number typed by hand; repeat until it is between `low` and `high` (plausibility, not limits)."""

    def tell(self, text: str) -> None:
        """Say something that needs no answer."""


@runtime_checkable
class AudioDevice(Protocol):
    """Raw blocks of samples, as a converter sees them: 1.0 is full scale. `drivers.audio` makes volts of it."""

    def identify(self) -> Identity:
        """Return who answers."""

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""

    def play_record(self, samples: Samples) -> Samples:
        """Play shape (frames,), record shape (frames, 2): pedal output, stimulus monitor. Delay included."""

    def start_tone(self, hz: float, peak: float) -> None:
        """Hold a sine of that peak until `mute`."""

    def mute(self) -> None:
        """Silence the output."""

    def close(self) -> None:
        """Give the instrument back."""
