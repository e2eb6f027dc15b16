"""The simulated world: time, ambient, relays and the circuit of fixture and pedal together.

The instruments touch it at their terminals (`drivers.simulated.terminals`); nobody else changes it but the hands
that turn the knobs (`drivers.simulated.hands`). Time passes only when somebody waits or measures; an optional pacer
makes the world keep to the wall clock.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from drivers.circuit.transient import Simulator, Trial
from drivers.roles import Samples
from drivers.simulated.pedal import UnitInFixture
from drivers.simulated.terminals import TerminalState

AUDIO_STEPS_HZ = 192_000
"""Internal step rate of takes up to 96 kHz; a take at 48 kHz is oversampled four times."""

_RELAY_OPERATE_S = 0.002
_INPUTS = ("Vline__fx", "Vreg__fx", "Imeter__fx")
_OUTPUTS: tuple[str | tuple[str, str], ...] = (
    "jack_out",
    "line",
    ("meter_hi", "meter_lo"),
    ("sup_plus", "sup_minus"),
    "i(Vreg__fx)",
)
_JACK_OUT, _LINE, _METER, _SUPPLY, _SUPPLY_AMPS = range(5)
_WATCH_S = 0.1
"""After a change of the supply the current limit is watched in short steps for this long."""
_FINE_STEP_S = 0.0005
_LONG_STEP_S = 0.016
_TONE_RATE_HZ = 48_000


@dataclass(frozen=True)
class Wiring:
    """Which relay channel does what: channel number -> name of the relay's parameter."""

    relay_of_channel: Mapping[int, str]


class World:
    """One bench with one pedal in its fixture.

    Parameters
    ----------
    unit : UnitInFixture
        The circuit of pedal and fixture.
    wiring : Wiring
        Channel numbers of the switchbox.
    pacer : callable, optional
        Called with every stretch of world time in seconds as it passes; sleeps when bench time shall be wall time.
    """

    def __init__(
        self, unit: UnitInFixture, wiring: Wiring, *, pacer: Callable[[float], None] | None = None
    ) -> None:
        self._unit = unit
        self._wiring = wiring
        self._pacer = pacer
        self._now_s = 0.0
        self._volts_set = 0.0
        self._limit_amps = 0.0
        self._on = False
        self._regulator_volts = 0.0
        self._limited = False
        self._watch_until_s = 0.0
        self._tone_hz = 0.0
        self._tone_peak_volts = 0.0
        self._meter_amps = 0.0
        self._simulator = Simulator(unit.circuit(), inputs=_INPUTS, outputs=_OUTPUTS)
        self._simulator.start_discharged()
        self._outputs: Samples = np.zeros(len(_OUTPUTS))
        self._dirty = True

    # --- time

    def now_s(self) -> float:
        """Return the world's time in seconds."""
        return self._now_s

    def advance(self, seconds: float) -> None:
        """Let time pass: capacitors settle, a held tone plays on."""
        if seconds <= 0.0:
            return
        if self._tone_peak_volts > 0.0:
            self._play_tone(seconds)
        else:
            self._let_settle(seconds)

    def _spend(self, seconds: float) -> None:
        self._now_s += seconds
        if self._pacer is not None:
            self._pacer(seconds)

    # --- supply

    def drive_supply(self, *, volts: float, limit_amps: float, on: bool) -> None:
        """Set what the supply's regulator tries to do from now on."""
        if (volts, limit_amps, on) == (self._volts_set, self._limit_amps, self._on):
            return
        if on != self._on:
            self._unit.set_param("regulator_on", 1.0 if on else 0.0)
            self._dirty = True
        self._volts_set, self._limit_amps, self._on = volts, limit_amps, on
        if not on:
            self._limited = False
        if not self._limited:
            self._regulator_volts = volts if on else 0.0
        self._watch_until_s = self._now_s + _WATCH_S

    def supply_terminals(self) -> TerminalState:
        """Return volts, amps and limiting at the supply's terminals now."""
        self._refresh()
        return TerminalState(
            volts=float(self._outputs[_SUPPLY]),
            amps=-float(self._outputs[_SUPPLY_AMPS]) if self._on else 0.0,
            limited=self._limited,
        )

    # --- relays and knobs

    def set_relay(self, channel: int, closed: bool) -> None:
        """Command a relay; its contact has moved after the operate time."""
        name = self._wiring.relay_of_channel.get(channel)
        if name is None:
            return  # a relay that nothing is wired to
        if self._unit.set_param(name, 1.0 if closed else 0.0):
            self.advance(_RELAY_OPERATE_S)
            self._dirty = True
            self._watch_until_s = self._now_s + _WATCH_S

    def turn_control(self, name: str, travel: float) -> None:
        """Turn a control of the pedal to a fraction of its travel."""
        if self._unit.turn_control(name, travel):
            self._dirty = True

    # --- multimeter

    def meter_dc_volts(self, aperture_s: float) -> float:
        """Return the mean voltage at the meter's terminals over the aperture."""
        if self._tone_peak_volts > 0.0:
            return float(np.mean(self._play_tone(aperture_s)[:, _METER]))
        pieces = 4
        self._refresh()
        readings = [float(self._outputs[_METER])]
        for _ in range(pieces):
            self._let_settle(aperture_s / pieces)
            readings.append(float(self._outputs[_METER]))
        return float(np.trapezoid(readings)) / pieces

    def meter_ac_volts(self, aperture_s: float) -> float:
        """Return the rms of the AC part at the meter's terminals over the aperture."""
        if self._tone_peak_volts <= 0.0:
            self._let_settle(aperture_s)
            return 0.0
        return float(np.std(self._play_tone(aperture_s)[:, _METER]))

    def meter_ohms(self, test_amps: float, aperture_s: float) -> float:
        """Return volts over amps at the meter's terminals with the test current on."""
        self._meter_amps = test_amps
        self._dirty = True
        try:
            # the test current charges what it finds before the reading counts, as on a real meter
            self._let_settle(aperture_s)
            volts = self.meter_dc_volts(aperture_s)
        finally:
            self._meter_amps = 0.0
            self._dirty = True
        return volts / test_amps

    # --- audio

    def play_record(self, line_volts: Samples, rate_hz: int) -> Samples:
        """Drive the line input with shape (frames,) volts; return shape (frames, 2): line output, monitor."""
        outputs = self._run(np.asarray(line_volts, dtype=np.float64), rate_hz)
        return np.ascontiguousarray(outputs[:, [_JACK_OUT, _LINE]])

    def hold_tone(self, hz: float, peak_volts: float) -> None:
        """Keep a sine on the line input from now on (0 V: silence)."""
        self._tone_hz, self._tone_peak_volts = hz, peak_volts
        self._dirty = True

    def _play_tone(self, seconds: float) -> Samples:
        frames = max(1, round(seconds * _TONE_RATE_HZ))
        t = self._now_s + np.arange(frames) / _TONE_RATE_HZ
        return self._run(self._tone_peak_volts * np.sin(2 * math.pi * self._tone_hz * t), _TONE_RATE_HZ)

    def _run(self, line_volts: Samples, rate_hz: int) -> Samples:
        self._apply_changes()
        samples = np.empty((line_volts.size, len(_INPUTS)))
        samples[:, 0] = line_volts
        samples[:, 1] = self._regulator_volts
        samples[:, 2] = self._meter_amps
        oversample = max(1, min(8, AUDIO_STEPS_HZ // rate_hz))
        outputs = self._simulator.run(samples, rate_hz, oversample=oversample)
        self._outputs = outputs[-1]
        self._spend(line_volts.size / rate_hz)
        return outputs

    # --- settling

    def _inputs(self, regulator_volts: float) -> Samples:
        return np.array([0.0, regulator_volts, self._meter_amps])

    def _apply_changes(self) -> None:
        if self._dirty:
            self._simulator.change(self._unit.circuit())
            self._dirty = False

    def _refresh(self) -> None:
        """Bring the outputs up to date after a change without letting noticeable time pass."""
        if self._dirty:
            self._apply_changes()
            self._step(1e-9)

    def _let_settle(self, seconds: float) -> None:
        self._apply_changes()
        end_s = self._now_s + seconds
        while self._now_s < end_s - 1e-12:
            left_s = end_s - self._now_s
            if self._on and (self._limited or self._now_s < self._watch_until_s):
                long = self._limited and self._now_s > self._watch_until_s
                self._step(min(left_s, _LONG_STEP_S if long else _FINE_STEP_S))
            else:
                self._outputs = self._simulator.settle(left_s, self._inputs(self._regulator_volts))
                self._spend(left_s)
                if self._on and self._excess(self._outputs) > 0.0:
                    self._limited = True  # from here on the limiter is followed step by step

    def _step(self, dt_s: float) -> None:
        """One backward Euler step in which the regulator keeps to its current limit."""
        target = self._volts_set if self._on else 0.0
        trial = self._simulator.try_step(dt_s, self._inputs(target))
        if not self._on or self._excess(trial.outputs) <= 0.0:
            self._limited, self._regulator_volts = False, target
        else:
            trial, volts = self._limit_current(dt_s, target, self._excess(trial.outputs))
            self._limited, self._regulator_volts = True, volts
        self._simulator.accept(trial)
        self._outputs = trial.outputs
        self._spend(dt_s)

    def _limit_current(self, dt_s: float, target: float, excess: float) -> tuple[Trial, float]:
        """Lower the regulator's voltage until the current is at the limit; current rises with voltage."""
        high, excess_high = target, excess
        low = 0.0
        trial = self._simulator.try_step(dt_s, self._inputs(low))
        excess_low = self._excess(trial.outputs)
        volts = low
        if excess_low >= 0.0:
            return trial, volts
        for _ in range(40):
            # false position keeps the bracket; the circuit is nearly linear over one step, so few rounds are needed
            volts = low - excess_low * (high - low) / (excess_high - excess_low)
            trial = self._simulator.try_step(dt_s, self._inputs(volts))
            excess = self._excess(trial.outputs)
            if abs(excess) <= 1e-4 * self._limit_amps or high - low < 1e-9:
                break
            if excess > 0.0:
                high, excess_high, excess_low = volts, excess, 0.5 * excess_low
            else:
                low, excess_low, excess_high = volts, excess, 0.5 * excess_high
        return trial, volts

    def _excess(self, outputs: Samples) -> float:
        return float(-outputs[_SUPPLY_AMPS]) - self._limit_amps


class WorldClock:
    """The bench's clock on the simulated world: waiting advances the world instead of sleeping."""

    def __init__(self, world: World) -> None:
        self._world = world

    def monotonic_s(self) -> float:
        """Return the world's time in seconds."""
        return self._world.now_s()

    def sleep(self, seconds: float) -> None:
        """Let the world's time pass."""
        self._world.advance(seconds)
