"""The real audio device on a PortAudio that is played: the same functions, blocks handed over by a thread.

The codes of errors are those of PortAudio's own header (paInvalidSampleRate -9997, paInvalidDevice -9996; from memory).
"""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from drivers.errors import AudioDead, AudioError, AudioXrun, BackendUnavailable, DriverError
from drivers.portaudio import PortAudioDevice
from drivers.roles import AudioDevice

RATE_HZ = 48_000


class PlayedPortAudioError(Exception):
    """Carries text and code as the library's own error does."""


@dataclass
class Flags:
    input_overflow: bool = False
    output_underflow: bool = False

    def __bool__(self) -> bool:
        return self.input_overflow or self.output_underflow

    def __str__(self) -> str:
        return "input overflow" if self.input_overflow else "output underflow"


@dataclass
class PlayedStream:
    callback: Any
    closed: bool = False

    def start(self) -> None: ...

    def close(self, ignore_errors: bool = True) -> None:
        self.closed = True


def one(name: str, hostapi: int, inputs: int, outputs: int) -> dict[str, Any]:
    return {
        "name": name,
        "hostapi": hostapi,
        "max_input_channels": inputs,
        "max_output_channels": outputs,
    }


@dataclass
class PlayedPortAudio:
    """A wire from the output to both inputs. `stops_at` cuts the stream off, `hangs` names the functions that never
    return, `fails` what a function raises."""

    apis: tuple[str, ...] = ("ALSA", "JACK Audio Connection Kit")
    devices: tuple[dict[str, Any], ...] = (
        one("USB interface: line (hw:1,0)", 0, 4, 4),
        one("Mic (hw:2,0)", 0, 1, 0),
    )
    rates_hz: tuple[int, ...] = (44_100, 48_000)
    status: Flags = field(default_factory=Flags)
    stops_at: int | None = None
    hangs: tuple[str, ...] = ()
    fails: dict[str, Exception] = field(default_factory=dict)
    strict: list[dict[str, Any]] = field(default_factory=list)
    asked: list[dict[str, Any]] = field(default_factory=list)
    streams: list[PlayedStream] = field(default_factory=list)
    released: threading.Event = field(default_factory=threading.Event)

    def _enter(self, name: str) -> None:
        if name in self.hangs:
            self.released.wait(20.0)
        if name in self.fails:
            raise self.fails[name]

    def query_hostapis(self) -> tuple[dict[str, Any], ...]:
        self._enter("query_hostapis")
        return tuple({"name": name} for name in self.apis)

    def query_devices(self) -> tuple[dict[str, Any], ...]:
        self._enter("query_devices")
        return self.devices

    def check_input_settings(self, device: int, *, samplerate: float, **asked: Any) -> None:
        self._enter("check_input_settings")
        if samplerate not in self.rates_hz:
            raise PlayedPortAudioError("Invalid sample rate", -9997)
        self.asked.append(asked)

    def check_output_settings(self, device: int, *, samplerate: float, **asked: Any) -> None:
        self._enter("check_output_settings")

    def CoreAudioSettings(self, **settings: Any) -> object:  # noqa: N802 - the library's name
        self.strict.append(settings)
        return object()

    def playrec(self, data: Any, *, out: Any, **asked: Any) -> None:
        self._enter("playrec")
        self.asked.append(asked)
        frames = len(data) if self.stops_at is None else self.stops_at
        out[:frames] = data[:frames]

    def get_status(self) -> Flags:
        return self.status

    def OutputStream(self, *, callback: Any, **asked: Any) -> PlayedStream:  # noqa: N802 - the library's name
        self._enter("OutputStream")
        self.streams.append(PlayedStream(callback))
        return self.streams[-1]


def open_device(played: PlayedPortAudio, name: str = "USB interface", host_api: str = "") -> PortAudioDevice:
    return PortAudioDevice(name, host_api, RATE_HZ, portaudio=played, grace_s=0.2)


def test_it_plays_its_role() -> None:
    assert isinstance(open_device(PlayedPortAudio()), AudioDevice)


def test_what_is_played_is_recorded_on_both_inputs_of_the_named_device() -> None:
    played = PlayedPortAudio()
    samples = 0.5 * np.sin(np.arange(4800) / 7.0)
    captured = open_device(played).play_record(samples)
    assert captured.shape == (4800, 2) and captured.dtype == np.float64
    # single precision holds 24 bits: half a step of 2**-24 at half scale
    assert np.max(np.abs(captured - samples[:, np.newaxis])) <= 2.0**-25
    assert played.asked[-1]["device"] == (0, 0)


def test_an_interface_that_the_host_lists_as_input_and_output_apart_is_taken_as_a_pair() -> None:
    played = PlayedPortAudio(
        apis=("Windows WASAPI",),
        devices=(one("Speakers (X two)", 0, 0, 2), one("Line in (X two)", 0, 2, 0), one("Mic (Y)", 0, 2, 0)),
    )
    open_device(played, "X two").play_record(np.zeros(48))
    assert played.asked[-1]["device"] == (1, 0)


def test_an_exact_name_wins_over_a_part_of_another() -> None:
    played = PlayedPortAudio(devices=(one("Line 12", 0, 2, 2), one("Line 1", 0, 2, 2)))
    assert open_device(played, "line 1").identify().model == "Line 1"


@pytest.mark.parametrize(
    ("devices", "words"),
    [
        ((), "no device named .* there are: none at all"),
        ((one("Mic", 0, 1, 0),), r"no device named .* Mic \(ALSA\)"),
        ((one("USB interface A", 0, 2, 2), one("USB interface B", 0, 2, 2)), "2 devices named"),
        ((one("USB interface", 0, 2, 0), one("USB interface", 1, 0, 2)), "no device named"),
    ],
)
def test_what_cannot_be_the_one_interface_is_refused_and_the_list_is_shown(
    devices: tuple[dict[str, Any], ...], words: str
) -> None:
    with pytest.raises(BackendUnavailable, match=words):
        open_device(PlayedPortAudio(devices=devices))


def test_the_host_api_tells_devices_of_one_name_apart() -> None:
    played = PlayedPortAudio(devices=(one("USB interface", 0, 2, 2), one("USB interface", 1, 2, 2)))
    assert open_device(played, host_api="jack audio connection kit").identify().maker.startswith("JACK")


@pytest.mark.parametrize(
    ("api", "name"),
    [
        ("MME", "USB interface"),
        ("Windows DirectSound", "USB interface"),
        ("ALSA", "default"),
        ("ALSA", "pulse"),
    ],
)
def test_hosts_and_devices_that_resample_silently_are_refused(api: str, name: str) -> None:
    with pytest.raises(BackendUnavailable, match="resamples silently"):
        open_device(PlayedPortAudio(apis=(api,), devices=(one(name, 0, 2, 2),)), name)


def test_core_audio_is_told_to_fail_rather_than_to_convert() -> None:
    played = PlayedPortAudio(apis=("Core Audio",))
    open_device(played)
    assert played.strict == [{"change_device_parameters": True, "fail_if_conversion_required": True}]
    assert played.asked[0]["extra_settings"] is not None


def test_a_rate_that_the_device_does_not_run_at_is_said_in_words() -> None:
    with pytest.raises(BackendUnavailable, match="does not run at 48000 Hz; set the rate"):
        open_device(PlayedPortAudio(rates_hz=(44_100,)))


@pytest.mark.parametrize(
    ("flags", "words"),
    [(Flags(input_overflow=True), "input overflow"), (Flags(output_underflow=True), "output underflow")],
)
def test_flags_of_lost_samples_are_an_xrun(flags: Flags, words: str) -> None:
    with pytest.raises(AudioXrun, match=words):
        open_device(PlayedPortAudio(status=flags)).play_record(np.zeros(480))


def test_a_stream_that_is_cut_off_is_an_xrun_and_never_silence() -> None:
    with pytest.raises(AudioXrun, match="ended 80 frames early"):
        open_device(PlayedPortAudio(stops_at=400)).play_record(np.zeros(480))


@pytest.mark.parametrize(
    "call", ["query_hostapis", "query_devices", "check_input_settings", "check_output_settings"]
)
def test_a_portaudio_that_hangs_at_the_start_is_given_up(call: str) -> None:
    played = PlayedPortAudio(hangs=(call,))
    began = time.monotonic()
    with pytest.raises(AudioDead, match="does not answer"):
        open_device(played)
    assert time.monotonic() - began < 5.0
    played.released.set()


def test_a_take_that_hangs_is_given_up_and_the_device_is_not_asked_again() -> None:
    played = PlayedPortAudio(hangs=("playrec",))
    device = open_device(played)
    with pytest.raises(AudioDead, match="does not answer within"):
        device.play_record(np.zeros(480))
    played.released.set()
    began = time.monotonic()
    for call in (
        lambda: device.play_record(np.zeros(480)),
        lambda: device.start_tone(997.0, 0.1),
        device.mute,
    ):
        with pytest.raises(AudioDead, match="did not answer before"):
            call()
    assert time.monotonic() - began < 0.15


@pytest.mark.parametrize("call", ["query_devices", "check_output_settings", "playrec", "OutputStream"])
@pytest.mark.parametrize(
    "foreign",
    [PlayedPortAudioError("Unanticipated host error", -9999), ValueError("no"), OSError(), TypeError("t")],
)
def test_every_foreign_error_arrives_as_a_driver_error_that_keeps_its_cause(
    call: str, foreign: Exception
) -> None:
    played = PlayedPortAudio(fails={call: foreign})
    with pytest.raises(DriverError, match=r"audio: .+: .+") as caught:
        device = open_device(played)
        device.start_tone(997.0, 0.5)
        device.play_record(np.zeros(480))
    assert caught.value.__cause__ is foreign
    assert isinstance(caught.value, AudioError | BackendUnavailable)


def test_a_held_tone_goes_on_in_phase_from_block_to_block_and_ends_when_muted() -> None:
    played = PlayedPortAudio()
    device = open_device(played)
    device.start_tone(997.0, 0.25)
    blocks = []
    for frames in (64, 100, 1000):
        block = np.zeros((frames, 1))
        played.streams[0].callback(block, frames, None, None)
        blocks.append(block[:, 0])
    expected = 0.25 * np.sin(2 * np.pi * 997.0 / RATE_HZ * np.arange(1164))
    assert np.max(np.abs(np.concatenate(blocks) - expected)) < 1e-12
    assert not played.streams[0].closed
    device.mute()
    assert played.streams[0].closed
