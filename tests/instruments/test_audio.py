"""Audio: volts and samples, and the simulated converters against what their figures say."""

from __future__ import annotations

import math

import numpy as np
import pytest

from drivers.audio import CalibratedAudio
from drivers.errors import AudioError, AudioXrun, BackendUnavailable
from drivers.portaudio import PortAudioDevice
from drivers.roles import AudioDevice, AudioInterface, Identity, Samples
from drivers.simulated.audio import ConverterSpec, SimulatedAudioDevice
from drivers.simulated.terminals import TerminalState

RATE_HZ = 48_000


class Wire:
    """A world that is a piece of wire: the line output is both inputs."""

    def __init__(self) -> None:
        self.time_s = 0.0
        self.tone = (0.0, 0.0)

    def now_s(self) -> float:
        return self.time_s

    def advance(self, seconds: float) -> None:
        self.time_s += seconds

    def drive_supply(self, *, volts: float, limit_amps: float, on: bool) -> None:
        raise AssertionError("audio has nothing to do with the supply")

    def supply_terminals(self) -> TerminalState:
        raise AssertionError("audio has nothing to do with the supply")

    def set_relay(self, channel: int, closed: bool) -> None:
        raise AssertionError("audio has nothing to do with relays")

    def meter_dc_volts(self, aperture_s: float) -> float:
        return 0.0

    def meter_ac_volts(self, aperture_s: float) -> float:
        return 0.0

    def meter_ohms(self, test_amps: float, aperture_s: float) -> float:
        return 0.0

    def play_record(self, line_volts: Samples, rate_hz: int) -> Samples:
        self.time_s += line_volts.size / rate_hz
        return np.column_stack([line_volts, line_volts])

    def hold_tone(self, hz: float, peak_volts: float) -> None:
        self.tone = (hz, peak_volts)


def converters(wire: Wire | None = None, *, seed: int = 5, **spec: float) -> SimulatedAudioDevice:
    return SimulatedAudioDevice(
        wire or Wire(),
        rate_hz=RATE_HZ,
        noise=np.random.default_rng(seed),
        spec=ConverterSpec(**spec),  # type: ignore[arg-type]
    )


def calibrated(device: AudioDevice) -> CalibratedAudio:
    return CalibratedAudio(
        device, full_scale_out_volts=2.0, full_scale_in_volts=4.0, full_scale_monitor_volts=2.2
    )


def tone(peak: float, frames: int = RATE_HZ, hz: float = 997.0) -> Samples:
    return np.asarray(peak * np.sin(2 * math.pi * hz * np.arange(frames) / RATE_HZ))


def test_both_play_their_roles() -> None:
    assert isinstance(converters(), AudioDevice)
    assert isinstance(calibrated(converters()), AudioInterface)


def test_volts_out_come_back_as_the_same_volts_in_both_channels() -> None:
    """Closed form: on a wire, output and monitor are the stimulus, later by the converters' delay."""
    take = calibrated(converters(least_delay_frames=100, most_delay_frames=100)).play_record(tone(1.5))
    late = tone(1.5)[:-100]
    assert take.volts.shape == (RATE_HZ, 2)
    assert np.max(np.abs(take.volts[100:, 0] - late)) < 40e-6
    assert np.max(np.abs(take.volts[100:, 1] - late)) < 40e-6


def test_the_delay_differs_between_takes_and_is_the_same_for_both_channels() -> None:
    audio = calibrated(converters())
    click = np.zeros(4000)
    click[0] = 1.0
    takes = [audio.play_record(click).volts for _ in range(6)]
    delays = {int(np.argmax(volts[:, 0])) for volts in takes}
    assert len(delays) > 1
    assert all(np.argmax(volts[:, 0]) == np.argmax(volts[:, 1]) for volts in takes)


def test_the_noise_floor_is_what_the_converter_s_figure_says() -> None:
    """Closed form: rms = ratio * full scale; three standard errors of 48000 draws are 1 %."""
    take = calibrated(converters(input_noise_ratio=1e-5, output_noise_ratio=0.0)).play_record(
        np.zeros(RATE_HZ)
    )
    assert np.std(take.volts[:, 0]) == pytest.approx(4.0e-5, rel=0.01)
    assert np.std(take.volts[:, 1]) == pytest.approx(2.2e-5, rel=0.01)


def test_word_length_gives_the_quantisation_noise_of_theory() -> None:
    """Quantisation noise is LSB/sqrt(12) (IEEE 1241, definition from memory), seen at 12 bits; both converters add it."""
    device = converters(
        bits=12,
        full_scale_in_volts=3.3,
        input_noise_ratio=0.0,
        output_noise_ratio=0.0,
        least_delay_frames=0,
        most_delay_frames=0,
    )
    sent = tone(0.9, hz=997.0)
    heard = device.play_record(sent)[:, 0] * 3.3 / 2.0
    lsb_out, lsb_in = 2.0**-11, 3.3 / 2.0 * 2.0**-11
    expected = math.hypot(lsb_out, lsb_in) / math.sqrt(12)
    assert np.std(heard - sent) == pytest.approx(expected, rel=0.03)


def test_an_input_beyond_full_scale_clips() -> None:
    take = calibrated(converters(full_scale_in_volts=1.0)).play_record(tone(1.9))
    assert np.max(take.volts[:, 0]) == pytest.approx(
        4.0, rel=1e-6
    )  # believed 4 V where the converter has 1 V


def test_a_stimulus_beyond_full_scale_is_refused_and_nothing_is_played() -> None:
    wire = Wire()
    with pytest.raises(AudioError, match=r"2\.1 V peak .* full scale is 2 V"):
        calibrated(converters(wire)).play_record(tone(2.1))
    assert wire.time_s == 0.0


def test_values_that_are_no_numbers_are_refused() -> None:
    with pytest.raises(AudioError, match="no numbers"):
        calibrated(converters()).play_record(np.array([0.0, np.nan]))


def test_a_take_takes_its_time_in_the_world() -> None:
    wire = Wire()
    calibrated(converters(wire)).play_record(tone(0.1, frames=24_000))
    assert wire.time_s == pytest.approx(0.5)


def test_a_held_tone_stops_when_muted_and_when_closed() -> None:
    wire = Wire()
    audio = calibrated(converters(wire))
    audio.start_tone(397.0, 1.0)
    assert wire.tone == (397.0, 1.0)
    audio.mute()
    assert wire.tone == (0.0, 0.0)
    audio.start_tone(397.0, 1.0)
    audio.close()
    assert wire.tone == (0.0, 0.0)


def test_a_rate_that_the_converters_do_not_have_is_named_with_those_they_have() -> None:
    with pytest.raises(AudioError, match=r"32000 Hz .* 44\.1 kHz, 48 kHz"):
        SimulatedAudioDevice(Wire(), rate_hz=32_000, noise=np.random.default_rng(1))


class ShortDevice:
    """A device that loses the last frame."""

    rate_hz = RATE_HZ

    def identify(self) -> Identity:
        return Identity("", "", "", "")

    def play_record(self, samples: Samples) -> Samples:
        return np.zeros((samples.size - 1, 2))

    def start_tone(self, hz: float, peak: float) -> None: ...

    def mute(self) -> None: ...

    def close(self) -> None: ...


def test_a_take_of_another_length_is_an_xrun() -> None:
    with pytest.raises(AudioXrun, match="480 frames of two channels"):
        calibrated(ShortDevice()).play_record(np.zeros(480))


def test_a_device_that_is_not_there_is_named_and_those_that_are_there_are_listed() -> None:
    with pytest.raises(
        BackendUnavailable, match=r"audio: (no device named \"no such interface\"|PortAudio cannot)"
    ):
        PortAudioDevice("no such interface", "", 48_000)
