"""The driver of the audio interface: samples to volts and back, with the calibration of the bench file."""

from __future__ import annotations

import numpy as np

from drivers.errors import AudioError, AudioXrun
from drivers.roles import AudioDevice, Identity, Samples, Take


class CalibratedAudio:
    """An audio interface calibrated in volts; plays `drivers.roles.AudioInterface` on any `AudioDevice`.

    Parameters
    ----------
    device : AudioDevice
        PortAudio or the simulated converters.
    full_scale_out_volts, full_scale_in_volts, full_scale_monitor_volts : float
        Peak volts of a full-scale sample at the line output, at the pedal-output input and at the monitor input.
    """

    def __init__(
        self,
        device: AudioDevice,
        *,
        full_scale_out_volts: float,
        full_scale_in_volts: float,
        full_scale_monitor_volts: float,
    ) -> None:
        self._device = device
        self._out_volts = full_scale_out_volts
        self._in_volts = np.array([full_scale_in_volts, full_scale_monitor_volts])

    def identify(self) -> Identity:
        """Return who answers."""
        return self._device.identify()

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""
        return self._device.rate_hz

    @property
    def max_output_volts(self) -> float:
        """Peak volts at the line output for a full-scale sample."""
        return self._out_volts

    @property
    def max_input_volts(self) -> float:
        """Peak volts at the pedal-output input for a full-scale sample."""
        return float(self._in_volts[0])

    def play_record(self, stimulus_volts: Samples) -> Take:
        """Play shape (frames,) volts at the line output and record as long.

        Raises
        ------
        AudioError
            When the stimulus is beyond full scale or not finite: it is never clipped silently.
        AudioXrun
            When the device gives another number of frames than it was given, or samples that are no numbers.
        AudioDead
            When the device does not answer.
        """
        samples = self._to_samples(stimulus_volts)
        captured = self._device.play_record(samples)
        if captured.shape != (samples.size, 2):
            raise AudioXrun(
                f"audio: {samples.size} frames of two channels were asked for, {captured.shape} arrived"
            )
        if not np.all(np.isfinite(captured)):
            raise AudioXrun("audio: the device gave samples that are no numbers")
        return Take(volts=captured * self._in_volts, rate_hz=self._device.rate_hz)

    def start_tone(self, hz: float, peak_volts: float) -> None:
        """Hold a sine at the line output until `mute`. Raises AudioError as `play_record`."""
        self._device.start_tone(hz, float(self._to_samples(np.array([peak_volts]))[0]))

    def mute(self) -> None:
        """Silence the output. Raises AudioDead."""
        self._device.mute()

    def close(self) -> None:
        """Give the device back."""
        self._device.close()

    def _to_samples(self, volts: Samples) -> Samples:
        samples = np.ascontiguousarray(volts, dtype=np.float64) / self._out_volts
        peak = float(np.max(np.abs(samples), initial=0.0))
        if not np.isfinite(peak):
            raise AudioError("audio: the stimulus has values that are no numbers")
        if peak > 1.0:
            raise AudioError(
                f"audio: {peak * self._out_volts:.4g} V peak asked of the line output, "
                f"full scale is {self._out_volts:.4g} V; use the coarse pad or a lower level"
            )
        return samples
