"""The simulated audio interface: converters with their own full scale, noise, delay, clipping and word length."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from drivers.errors import AudioError
from drivers.roles import Identity, Samples
from drivers.simulated.terminals import Terminals

RATES_HZ = (44_100, 48_000, 88_200, 96_000, 176_400, 192_000)


@dataclass(frozen=True)
class ConverterSpec:
    """What the converters really do; the bench file holds what is believed of them.

    Full scales in peak volts of a full-scale sample. `input_noise_ratio` and `output_noise_ratio` are rms over full scale
    in the whole band (-120 dB is common practice for a good 24-bit interface). The delay is drawn anew for each take
    between the two bounds, the same for both inputs. `lost_frames` drops that many frames in the middle of each take (a
    fault, 0 on a good day).
    """

    full_scale_out_volts: float = 2.000
    full_scale_in_volts: float = 4.000
    full_scale_monitor_volts: float = 2.200
    input_noise_ratio: float = 1.0e-6
    output_noise_ratio: float = 1.0e-6
    bits: int = 24
    least_delay_frames: int = 620
    most_delay_frames: int = 980
    lost_frames: int = 0


class SimulatedAudioDevice:
    """An audio device in the simulated world; plays `drivers.roles.AudioDevice`.

    Parameters
    ----------
    terminals : Terminals
        The world.
    rate_hz : int
        One of `RATES_HZ`.
    noise : numpy.random.Generator
        Draws noise and delays.
    spec : ConverterSpec, optional
        What the converters really do.

    Raises
    ------
    AudioError
        For a rate that the converters do not have.
    """

    def __init__(
        self,
        terminals: Terminals,
        *,
        rate_hz: int,
        noise: np.random.Generator,
        spec: ConverterSpec | None = None,
    ) -> None:
        if rate_hz not in RATES_HZ:
            raise AudioError(
                f"audio: {rate_hz} Hz is not a rate of the simulated interface; it has {_words(RATES_HZ)}"
            )
        self._terminals = terminals
        self._rate_hz = rate_hz
        self._noise = noise
        self._spec = ConverterSpec() if spec is None else spec

    def identify(self) -> Identity:
        """Return the identity of the simulated interface."""
        return Identity("toeline", "simulated audio interface", "A-0001", "1.0")

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""
        return self._rate_hz

    def play_record(self, samples: Samples) -> Samples:
        """Play shape (frames,), record shape (frames, 2); both delayed by the converters."""
        spec = self._spec
        sent = self._quantise(np.clip(samples, -1.0, 1.0))
        sent += spec.output_noise_ratio * self._noise.standard_normal(sent.size)
        heard = self._terminals.play_record(sent * spec.full_scale_out_volts, self._rate_hz)
        captured = heard / np.array([spec.full_scale_in_volts, spec.full_scale_monitor_volts])
        captured = self._lose(self._delay(captured))
        captured += spec.input_noise_ratio * self._noise.standard_normal(captured.shape)
        return self._quantise(np.clip(captured, -1.0, 1.0 - 2.0 ** (1 - spec.bits)))

    def start_tone(self, hz: float, peak: float) -> None:
        """Hold a sine of that peak (1.0 is full scale)."""
        self._terminals.hold_tone(hz, min(peak, 1.0) * self._spec.full_scale_out_volts)

    def mute(self) -> None:
        """Silence the output."""
        self._terminals.hold_tone(0.0, 0.0)

    def close(self) -> None:
        """Silence the output; there is nothing to give back."""
        self.mute()

    def _quantise(self, samples: Samples) -> Samples:
        steps = 2.0 ** (self._spec.bits - 1)
        return np.asarray(np.round(samples * steps) / steps, dtype=np.float64)

    def _delay(self, captured: Samples) -> Samples:
        frames = int(self._noise.integers(self._spec.least_delay_frames, self._spec.most_delay_frames + 1))
        frames = min(frames, captured.shape[0])
        late = np.zeros_like(captured)
        late[frames:] = captured[: captured.shape[0] - frames]
        return late

    def _lose(self, captured: Samples) -> Samples:
        lost = self._spec.lost_frames
        if lost == 0:
            return captured
        middle = captured.shape[0] // 2
        short = np.concatenate([captured[:middle], captured[middle + lost :]])
        return np.concatenate([short, np.zeros((captured.shape[0] - short.shape[0], 2))])


def _words(rates_hz: Sequence[int]) -> str:
    return ", ".join(f"{rate / 1000:g} kHz" for rate in rates_hz)
