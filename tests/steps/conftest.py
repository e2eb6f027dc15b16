"""A bench of formulas: a filter in closed form, a cubic, white noise; DC that creeps towards its end value."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from drivers.roles import Measured
from fixture.bench.facade import Capture, FixtureState
from fixture.domain.model import Model, NodeSpec, Revision, StepSpec, SupplySpec
from fixture.domain.run import BenchIdentity
from fixture.steps.registry import get_kind


@dataclass
class FakeClock:
    now_s: float = 0.0

    def monotonic_s(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds


def band_pass(hz: np.ndarray) -> np.ndarray:
    """Two RC corners, 30 Hz and 6 kHz, and a gain of 100: closed form at any frequency."""
    return 100.0 * (1j * hz / 30.0) / (1.0 + 1j * hz / 30.0) / (1.0 + 1j * hz / 6000.0)


@dataclass
class FakeBench:
    """`cubic`: e becomes e + cubic e^3 before the filter, computed at four times the rate so that nothing folds back."""

    transfer: Callable[[np.ndarray], np.ndarray] = band_pass
    cubic: float = 0.0
    noise_volts: float = 0.0
    clipped: bool = False
    u_gain_ratio: float = 0.003
    rate_hz: int = 48000
    mains_hz: float = 50.0
    nodes: Mapping[str, Callable[[float], float]] = field(default_factory=dict)
    rail_volts: float = -8.99
    u_volts: float = 1e-4
    failure: Exception | None = None
    clock: FakeClock = field(default_factory=FakeClock)
    calls: list[tuple[str, Any]] = field(default_factory=list)
    identity: BenchIdentity = field(default_factory=lambda: BenchIdentity("formulas", "simulated", {}))
    seed: int = 1

    def set_controls(self, positions: Mapping[str, float]) -> None:
        self.calls.append(("controls", dict(positions)))

    def set_state(self, state: FixtureState) -> None:
        self.calls.append(("state", state))

    def read_node(self, node: NodeSpec, *, expect_volts: float | None = None) -> Measured:
        return Measured(self.nodes[node.name](self.clock.now_s), "V", self.u_volts)

    def read_rail(self) -> Measured:
        return Measured(self.rail_volts, "V", 1e-3)

    def read_supply_current(self) -> Measured:
        return Measured(self.nodes["amps"](self.clock.now_s), "A", 1e-7)

    def play_record(self, emf_volts: np.ndarray) -> Capture:
        if self.failure is not None:
            raise self.failure
        size = 1 << (2 * emf_volts.size).bit_length()
        times = 4
        fine = np.zeros(times * size // 2 + 1, dtype=complex)
        fine[: size // 2 + 1] = np.fft.rfft(emf_volts, size)
        bent = np.fft.irfft(fine, times * size) * times
        bent += self.cubic * bent**3
        hz = np.fft.rfftfreq(times * size, 1.0 / (times * self.rate_hz))
        heard = (np.fft.rfft(bent) * self.transfer(hz))[: size // 2 + 1] / times
        rng = np.random.default_rng(self.seed)
        noise = self.noise_volts * rng.standard_normal(emf_volts.size)
        output = np.fft.irfft(heard, size)[: emf_volts.size] + noise
        return Capture(emf_volts.copy(), output, self.rate_hz, self.u_gain_ratio, self.clipped, 1.0)


@pytest.fixture
def model() -> Model:
    return Model(
        name="Peat",
        title="Peat fuzz",
        maker="Brindlecombe Pedal Works",
        serial_pattern=r"PT-\d{4}-\d{4}",
        serial_example="PT-2612-0001",
        revision=Revision(1, "A. Fell", date(2026, 11, 30), "test", "engineering"),
        supply=SupplySpec(9.0, "positive", 0.02, 10.0),
        nodes={name: NodeSpec(name, name, f"TP{index}") for index, name in enumerate(("q1", "q2"), 1)},
        controls={},
        circuit=None,
        spreads=(),
        procedures={},
        default_procedure="line",
        path=Path("limits.toml"),
        digest="0" * 64,
    )


@pytest.fixture
def run_step(model: Model) -> Callable[..., list[Any]]:
    """Run a step kind on a bench with its declared defaults, but for the options given."""

    def run(bench: FakeBench, kind_name: str, *, limits: Any = None, **given: Any) -> list[Any]:
        kind = get_kind(kind_name)
        options = {option.name: option.default for option in kind.options} | given
        step = StepSpec("step", kind_name, kind.options_type(**options), {"fuzz": 1.0}, limits or {})
        return list(kind.run(step, model, bench))  # type: ignore[arg-type]

    return run


@pytest.fixture
def make_bench() -> type[FakeBench]:
    return FakeBench


@pytest.fixture
def closed_form_db() -> Callable[[Any], Any]:
    """Gain of the filter in dB."""
    return lambda hz: 20.0 * np.log10(np.abs(band_pass(np.asarray(hz, float))))
