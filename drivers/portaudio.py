"""A real audio interface through PortAudio (sounddevice), chosen by name and host API."""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np

from drivers.errors import AudioDead, AudioError, AudioXrun, BackendUnavailable, DriverError
from drivers.roles import Identity, Samples

_T = TypeVar("_T")

_GRACE_S = 5.0
"""How much longer than the take itself a device may need before it counts as dead."""

_RESAMPLING_HOSTS = ("MME", "Windows DirectSound", "PulseAudio")
_RESAMPLING_ALSA_DEVICES = ("default", "pulse", "pipewire")
"""They convert the sample rate without a word; common practice."""

_WRONG_RATE = -9997
_WRONG_DEVICE = -9996


@dataclass(frozen=True)
class _Ends:
    """Where PortAudio has the interface: one device, or, on hosts that part them, an input and an output."""

    host_api: str
    name: str
    input_index: int
    output_index: int


class PortAudioDevice:
    """An audio device with one output and two inputs in use; plays `drivers.roles.AudioDevice`.

    PortAudio's list of devices is frozen when it starts: a device that was plugged in later is found after a restart. The
    stream is opened anew for each take at exactly the asked rate. Host APIs that resample silently are refused; where
    something else resamples, only the content of a take can show it, which the bench checks. Every call has a deadline;
    once a device has missed one, it is not asked again.

    Parameters
    ----------
    name : str
        Name of the device, or a part of it that no other device has. On hosts that list inputs and outputs as devices of
        their own, a part that both have.
    host_api : str
        Name of the host API ("" when the device's name is unique).
    rate_hz : int
        Sample rate.
    portaudio : module, optional
        What speaks to PortAudio with the functions of ``sounddevice``; None loads it.
    grace_s : float
        How long a call may take, beyond the length of what is played.

    Raises
    ------
    BackendUnavailable
        When PortAudio or the device is not there, lacks the channels or the rate, or would be resampled.
    AudioDead
        When PortAudio does not answer.
    """

    def __init__(
        self, name: str, host_api: str, rate_hz: int, *, portaudio: Any = None, grace_s: float = _GRACE_S
    ) -> None:
        self._rate_hz = rate_hz
        self._grace_s = grace_s
        self._who = f'"{name}"'
        self._dead = False
        self._tone: Any = None
        self._sd: Any = self._within(_load, grace_s) if portaudio is None else portaudio
        self._ends = self._ask(lambda: self._find(name, host_api))
        self._who = f"{self._ends.name} ({self._ends.host_api})"
        self._extra = self._extra_settings()
        self._ask(self._check_settings)

    def identify(self) -> Identity:
        """Return host API and device name; audio devices tell no serial number."""
        return Identity(self._ends.host_api, self._ends.name, "", "")

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""
        return self._rate_hz

    def play_record(self, samples: Samples) -> Samples:
        """Play shape (frames,), record shape (frames, 2).

        Raises
        ------
        AudioXrun
            When PortAudio reports lost samples, or the take ends before its last frame.
        AudioDead
            When the take does not end in time.
        AudioError
            When PortAudio refuses.
        """
        self.mute()
        # What the device never filled stays NaN, so that a stream that was cut off cannot pass for silence.
        captured = np.full((samples.size, 2), np.nan, dtype=np.float32)

        def take() -> Any:
            self._sd.playrec(
                np.asarray(samples, dtype=np.float32)[:, np.newaxis],
                samplerate=self._rate_hz,
                out=captured,
                device=(self._ends.input_index, self._ends.output_index),
                extra_settings=self._extra,
                blocking=True,
            )
            return self._sd.get_status()

        status = self._within(take, samples.size / self._rate_hz + self._grace_s)
        if status and (status.input_overflow or status.output_underflow):
            raise AudioXrun(f"audio: {self._who}: samples were lost in the take ({status})")
        missing = int(np.count_nonzero(np.isnan(captured[:, 0])))
        if missing:
            raise AudioXrun(
                f"audio: {self._who}: the take ended {missing} frames early; look at the cable of the interface"
            )
        return np.asarray(captured, dtype=np.float64)

    def start_tone(self, hz: float, peak: float) -> None:
        """Hold a sine of that peak until `mute`. Raises AudioDead, AudioError."""
        self.mute()
        phase = 0.0
        step = 2.0 * np.pi * hz / self._rate_hz

        def fill(out: Any, frames: int, _time: Any, _status: Any) -> None:
            nonlocal phase
            out[:, 0] = peak * np.sin(phase + step * np.arange(frames))
            phase = float((phase + step * frames) % (2.0 * np.pi))

        def start() -> Any:
            stream = self._sd.OutputStream(
                samplerate=self._rate_hz,
                device=self._ends.output_index,
                channels=1,
                dtype="float32",
                extra_settings=None if self._extra is None else self._extra[1],
                callback=fill,
            )
            stream.start()
            return stream

        self._tone = self._within(start, self._grace_s)

    def mute(self) -> None:
        """Stop whatever plays. Raises AudioDead, also when it cannot be told because the device is dead already."""
        tone, self._tone = self._tone, None
        if self._dead:
            raise AudioDead(
                f"audio: {self._who} did not answer before: it may still play; restart the audio server"
            )
        if tone is not None:
            self._within(lambda: tone.close(ignore_errors=True), self._grace_s)

    def close(self) -> None:
        """Give the device back. Raises AudioDead."""
        self.mute()

    # --- finding it

    def _find(self, name: str, host_api: str) -> _Ends:
        apis = [api["name"] for api in self._sd.query_hostapis()]
        devices = [(index, apis[one["hostapi"]], one) for index, one in enumerate(self._sd.query_devices())]
        named = [
            (index, api, one)
            for index, api, one in devices
            if name.lower() in one["name"].lower() and (not host_api or host_api.lower() == api.lower())
        ]
        named = [entry for entry in named if entry[2]["name"].lower() == name.lower()] or named
        inputs = [(index, api) for index, api, one in named if one["max_input_channels"] >= 2]
        outputs = [(index, api) for index, api, one in named if one["max_output_channels"] >= 1]
        pairs = [(source, sink) for source in inputs for sink in outputs if source == sink] or [
            (source, sink) for source in inputs for sink in outputs if source[1] == sink[1]
        ]
        if len(pairs) != 1:
            wanted = f'"{name}"' + (f" ({host_api})" if host_api else "")
            there = "; ".join(f"{one['name']} ({api})" for _, api, one in devices) or "none at all"
            count = "no device" if not pairs else f"{len(pairs)} devices"
            raise BackendUnavailable(
                f"audio: {count} named {wanted} with two inputs and an output; there are: {there}"
            )
        (input_index, api), (output_index, _) = pairs[0]
        _refuse_resampling(api, devices[input_index][2]["name"])
        return _Ends(api, devices[input_index][2]["name"], input_index, output_index)

    def _extra_settings(self) -> tuple[Any, Any] | None:
        if self._ends.host_api != "Core Audio":
            return None
        strict = self._sd.CoreAudioSettings(change_device_parameters=True, fail_if_conversion_required=True)
        return (strict, strict)

    def _check_settings(self) -> None:
        at = {"dtype": "float32", "samplerate": self._rate_hz}
        extra_in, extra_out = self._extra or (None, None)
        self._sd.check_input_settings(self._ends.input_index, channels=2, extra_settings=extra_in, **at)
        self._sd.check_output_settings(self._ends.output_index, channels=1, extra_settings=extra_out, **at)

    # --- deadlines and errors

    def _ask(self, call: Callable[[], _T]) -> _T:
        """As `_within`, for questions at the start: what is refused there is not available."""
        try:
            return self._within(call, self._grace_s)
        except (AudioDead, BackendUnavailable):
            raise
        except AudioError as error:
            raise BackendUnavailable(str(error)) from error.__cause__

    def _within(self, call: Callable[[], _T], seconds: float) -> _T:
        """Run a call that may hang in a thread of its own, give it up when it does, and map what it raises."""
        if self._dead:
            raise AudioDead(
                f"audio: {self._who} did not answer before; restart the audio server, then this program"
            )
        results: list[_T] = []
        errors: list[BaseException] = []

        def work() -> None:
            try:
                results.append(call())
            except BaseException as error:
                errors.append(error)

        worker = threading.Thread(target=work, daemon=True)
        worker.start()
        worker.join(seconds)
        if worker.is_alive():
            self._dead = True
            raise AudioDead(
                f"audio: {self._who} does not answer within {seconds:.0f} s; restart the audio server"
            )
        if not errors:
            return results[0]
        error = errors[0]
        if isinstance(error, DriverError) or not isinstance(error, Exception):
            raise error
        raise AudioError(f"audio: {self._who}: {_words(error, self._rate_hz)}") from error


def _load() -> Any:
    try:
        import sounddevice
    except (ImportError, OSError) as error:
        raise BackendUnavailable(f"audio: PortAudio cannot be loaded ({error})") from error
    return sounddevice


def _refuse_resampling(host_api: str, name: str) -> None:
    on_alsa = host_api == "ALSA" and name.lower() in _RESAMPLING_ALSA_DEVICES
    if host_api in _RESAMPLING_HOSTS or on_alsa:
        raise BackendUnavailable(
            f"audio: {name} ({host_api}) resamples silently; name the interface itself, "
            "on ALSA, JACK, Core Audio, Windows WASAPI, Windows WDM-KS or ASIO"
        )


def _words(error: BaseException, rate_hz: int) -> str:
    """Say PortAudio's error with its usual true cause: -9997 is a wrong rate, and so is -9996 on shared-mode hosts."""
    code = error.args[1] if len(error.args) > 1 else None
    if code == _WRONG_RATE:
        return f"it does not run at {rate_hz} Hz; set the rate in its own control panel or in the bench file"
    if code == _WRONG_DEVICE:
        return f"the host API refuses it; the usual cause is a system rate other than {rate_hz} Hz ({error})"
    return str(error) or type(error).__name__
