"""A real audio interface through PortAudio (sounddevice), chosen by name and host API."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Any, TypeVar

import numpy as np

from drivers.errors import AudioDead, AudioError, AudioXrun, BackendUnavailable
from drivers.roles import Identity, Samples

_T = TypeVar("_T")
_GRACE_S = 5.0
"""How much longer than the take itself a device may need before it counts as dead."""


class PortAudioDevice:
    """An audio device with one output and two inputs in use; plays `drivers.roles.AudioDevice`.

    PortAudio's list of devices is frozen when it starts: a device that was plugged in later is found after a restart. The
    stream is opened anew for each take at exactly the asked rate; where the host resamples silently, only the content of a
    take can show it, which the bench checks.

    Parameters
    ----------
    name : str
        Name of the device, or a part of it that no other device has.
    host_api : str
        Name of the host API ("" when the device's name is unique).
    rate_hz : int
        Sample rate.

    Raises
    ------
    BackendUnavailable
        When PortAudio or the device is not there, or lacks the channels or the rate.
    """

    def __init__(self, name: str, host_api: str, rate_hz: int) -> None:
        try:
            import sounddevice
        except (ImportError, OSError) as error:
            raise BackendUnavailable(f"audio: PortAudio cannot be loaded ({error})") from error
        self._sd = sounddevice
        self._rate_hz = rate_hz
        self._index, self._label = self._find(name, host_api)
        self._tone: Any = None
        self._ask(
            lambda: self._sd.check_input_settings(
                self._index, channels=2, dtype="float32", samplerate=rate_hz
            )
        )
        self._ask(
            lambda: self._sd.check_output_settings(
                self._index, channels=1, dtype="float32", samplerate=rate_hz
            )
        )

    def identify(self) -> Identity:
        """Return host API and device name; audio devices tell no serial number."""
        host_api, device = self._label
        return Identity(host_api, device, "", "")

    @property
    def rate_hz(self) -> int:
        """Sample rate in hertz."""
        return self._rate_hz

    def play_record(self, samples: Samples) -> Samples:
        """Play shape (frames,), record shape (frames, 2).

        Raises
        ------
        AudioXrun
            When PortAudio reports lost samples.
        AudioDead
            When the take does not end in time.
        """
        self.mute()

        def take() -> tuple[Any, Any]:
            captured = self._sd.playrec(
                np.asarray(samples, dtype=np.float32)[:, np.newaxis],
                samplerate=self._rate_hz,
                channels=2,
                device=(self._index, self._index),
                blocking=True,
            )
            return captured, self._sd.get_status()

        captured, status = self._within(take, samples.size / self._rate_hz + _GRACE_S)
        if status and (status.input_overflow or status.output_underflow):
            raise AudioXrun(f"audio: {self._label[1]}: samples were lost in the take ({status})")
        return np.asarray(captured, dtype=np.float64)

    def start_tone(self, hz: float, peak: float) -> None:
        """Hold a sine of that peak until `mute`. Raises AudioDead, AudioError."""
        self.mute()
        phase = 0.0
        step = 2.0 * np.pi * hz / self._rate_hz

        def fill(out: Any, frames: int, _time: Any, _status: Any) -> None:
            nonlocal phase
            angles = phase + step * np.arange(frames)
            out[:, 0] = peak * np.sin(angles)
            phase = float((angles[-1] + step) % (2.0 * np.pi))

        def start() -> Any:
            stream = self._sd.OutputStream(
                samplerate=self._rate_hz, device=self._index, channels=1, dtype="float32", callback=fill
            )
            stream.start()
            return stream

        self._tone = self._within(start, _GRACE_S)

    def mute(self) -> None:
        """Stop whatever plays. Raises AudioDead."""
        tone, self._tone = self._tone, None
        if tone is not None:
            self._within(lambda: tone.close(ignore_errors=True), _GRACE_S)

    def close(self) -> None:
        """Give the device back. Raises AudioDead."""
        self.mute()

    def _find(self, name: str, host_api: str) -> tuple[int, tuple[str, str]]:
        apis = [api["name"] for api in self._ask(self._sd.query_hostapis)]
        found: list[tuple[int, tuple[str, str]]] = []
        everything: list[str] = []
        for index, device in enumerate(self._ask(self._sd.query_devices)):
            label = (apis[device["hostapi"]], device["name"])
            everything.append(f"{label[1]} ({label[0]})")
            fits = name.lower() in label[1].lower() and (not host_api or host_api.lower() == label[0].lower())
            if fits and device["max_input_channels"] >= 2 and device["max_output_channels"] >= 1:
                found.append((index, label))
        exact = [entry for entry in found if entry[1][1].lower() == name.lower()]
        found = exact or found
        if len(found) != 1:
            wanted = f'"{name}"' + (f" ({host_api})" if host_api else "")
            what = "no device" if not found else f"{len(found)} devices"
            there = "; ".join(everything) or "none at all"
            raise BackendUnavailable(
                f"audio: {what} named {wanted} with two inputs and an output; there are: {there}"
            )
        return found[0]

    def _ask(self, call: Callable[[], _T]) -> _T:
        try:
            return call()
        except self._sd.PortAudioError as error:
            raise BackendUnavailable(f"audio: {_words(error, self._rate_hz)}") from error
        except ValueError as error:
            raise BackendUnavailable(f"audio: {error}") from error

    def _within(self, call: Callable[[], _T], seconds: float) -> _T:
        """Run a call that may hang in a thread of its own, and give it up when it does."""
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
            raise AudioDead(
                f"audio: {self._label[1]} does not answer within {seconds:.0f} s; restart the audio server"
            )
        if errors:
            if isinstance(errors[0], self._sd.PortAudioError):
                raise AudioError(f"audio: {_words(errors[0], self._rate_hz)}") from errors[0]
            raise errors[0]
        return results[0]


def _words(error: BaseException, rate_hz: int) -> str:
    """Say PortAudio's error with its usual true cause: -9997 is a wrong rate, and so is -9996 on shared-mode hosts."""
    code = error.args[1] if len(error.args) > 1 else None
    if code == -9997:
        return f"the device does not run at {rate_hz} Hz; set the rate in its own control panel or in the bench file"
    if code == -9996:
        return f"the host API refuses the device; the usual cause is a system rate other than {rate_hz} Hz ({error})"
    return str(error)
