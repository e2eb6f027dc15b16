"""Limits from a pilot: what is proposed, what is refused, what stays."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from fixture.domain.limits import Limits, Mask
from fixture.domain.reading import Curve
from fixture.modelfile import find_model
from fixture.quality.pilot import Pilot, PilotReading
from fixture.quality.tuning import LEAST_UNITS, Proposal, Tuning, TuningAim, tune
from fixture.steps.registry import step_kinds

ROOT = Path(__file__).parents[2]
PEAT = find_model(ROOT, "peat")
LINE = PEAT.procedures["line"]
HZ = np.geomspace(20.0, 16000.0, 40)


def serials(count: int) -> tuple[str, ...]:
    return tuple(f"PT-2612-{n:04d}" for n in range(1, count + 1))


def pilot_of(count: int, seed: int = 1, **others: np.ndarray) -> Pilot:
    """Normal readings where `others` (by reading's name) does not say otherwise."""
    rng = np.random.default_rng(seed)
    readings = []
    for step in LINE.steps:
        for name, limits in step.limits.items():
            curves: tuple[Curve, ...] = ()
            if isinstance(limits, Mask):
                curves = tuple(Curve(name, HZ, rng.normal(0.0, 0.1, HZ.size)) for _ in range(count))
                values = np.ones(count)
            else:
                ends = [end for end in (limits.low, limits.high) if end is not None]
                width = abs(ends[-1] - ends[0]) or 10.0
                middle = float(np.mean(ends)) - (0.0 if len(ends) == 2 else 3.0 * width)
                values = others.get(name, rng.normal(middle, width / 12.0, count))
            readings.append(PilotReading(step.name, name, serials(count), tuple(values), curves))
    return Pilot(serials(count), tuple(readings))


def tuned(pilot: Pilot, aim: TuningAim | None = None) -> Tuning:
    return tune(PEAT, LINE, pilot, step_kinds(), aim or TuningAim())


def proposal(tuning: Tuning, name: str, step: str = "") -> Proposal:
    return next(p for p in tuning.proposals if p.reading == name and p.step.startswith(step))


def test_a_normal_reading_gets_its_tolerance_interval_rounded_outward() -> None:
    values = np.random.default_rng(2).normal(-1.05, 0.05, 150)
    found = proposal(tuned(pilot_of(150, q2_emitter=values)), "q2_emitter")
    assert found.distribution is not None and found.distribution.shape == "normal" and found.why_not == ""
    assert isinstance(found.proposed, Limits)
    low, high = found.proposed.low, found.proposed.high
    assert low is not None and high is not None
    # at least the exact normal interval: 9 limits are set by data, 0.2 % / 9 for each
    assert found.coverage == pytest.approx(1 - 0.002 / 9)
    mean, sigma = values.mean(), values.std(ddof=1)
    assert low <= mean - 4.09 * sigma and high >= mean + 4.09 * sigma
    assert high - low < 2 * 8 * sigma
    assert found.capability is not None and found.capability.cpk.value > 1.3


def test_what_is_the_bench_s_or_one_sided_is_left_alone() -> None:
    tuning = tuned(pilot_of(100))
    assert proposal(tuning, "rail").why_not == "tells of the bench, not of the unit"
    assert proposal(tuning, "gain", "Volume off").why_not == "one-sided: an engineering limit"
    assert all(proposal(tuning, name).proposed is None for name in ("rail",))


def test_engineering_limits_are_never_passed() -> None:
    wide = np.random.default_rng(3).normal(-4.6, 0.8, 100)  # nodes go to -7.2 V and -2 V, no further
    found = proposal(tuned(pilot_of(100, q2_collector=wide)), "q2_collector")
    assert isinstance(found.proposed, Limits) and found.clipped
    assert (found.proposed.low, found.proposed.high) == (-7.2, -2.0)
    assert (found.proposed.least, found.proposed.most) == (-7.2, -2.0)


def test_too_few_units_propose_nothing() -> None:
    tuning = tuned(pilot_of(LEAST_UNITS - 1))
    assert all(p.proposed is None for p in tuning.proposals)
    assert (
        f"{LEAST_UNITS - 1} units are too few: {LEAST_UNITS} at least" in proposal(tuning, "q1_base").why_not
    )


def test_two_lots_in_one_are_told_apart_from_a_shape_that_is_known() -> None:
    rng = np.random.default_rng(4)
    mixed = np.concatenate([rng.normal(-1.3, 0.01, 60), rng.normal(-1.1, 0.01, 60)])
    found = proposal(tuned(pilot_of(120, q1_collector=mixed)), "q1_collector")
    if found.distribution is not None and found.distribution.shape == "other":
        assert found.proposed is None
        # smallest to largest of n hold p with 95 %: n p^(n-1) - (n-1) p^n = 0.05; p = 1 - 0.002/9
        assert found.needed_units == pytest.approx(21346, abs=2)
        assert "21346 units would hold" in found.why_not
    else:  # a flat top passes for light tails: the interval then only holds more
        assert isinstance(found.proposed, Limits)


def test_an_outlier_is_named_by_its_serial_and_does_not_widen_the_limits() -> None:
    values = np.random.default_rng(5).normal(-0.16, 0.002, 100)
    clean = proposal(tuned(pilot_of(100, q1_base=values)), "q1_base")
    values[41] = -0.05
    found = proposal(tuned(pilot_of(100, q1_base=values)), "q1_base")
    assert found.outliers == (("PT-2612-0042", -0.05),)
    assert isinstance(found.proposed, Limits) and isinstance(clean.proposed, Limits)
    assert found.proposed.high is not None and found.proposed.high < -0.14
    tuning = tuned(pilot_of(100, q1_base=values))
    assert tuning.refused == ("PT-2612-0042",)
    # Clopper and Pearson for 1 of 100 (published: 0.03 % to 5.45 %)
    assert tuning.reject_bound == pytest.approx(0.0545, abs=5e-5)


def test_the_family_shares_what_may_be_refused() -> None:
    strict = proposal(tuned(pilot_of(100), TuningAim(reject_ratio=0.0002)), "q1_base").proposed
    loose = proposal(tuned(pilot_of(100), TuningAim(reject_ratio=0.02)), "q1_base").proposed
    assert isinstance(strict, Limits) and isinstance(loose, Limits)
    assert strict.low is not None and loose.low is not None and strict.low < loose.low


def test_a_mask_holds_its_pilot_and_catches_what_is_far_off() -> None:
    from fixture.judge.mask import nearest_point

    pilot = pilot_of(100)
    found = proposal(tuned(pilot), "response")
    assert isinstance(found.proposed, Mask)
    reading = pilot.reading(found.step, "response")
    assert reading is not None
    for curve in reading.curves:
        worst = nearest_point(found.proposed, curve)
        assert worst is not None and worst.distance_db > 0.0
    off = dataclasses.replace(reading.curves[0], db=reading.curves[0].db + 2.0)
    worst = nearest_point(found.proposed, off)
    assert worst is not None and worst.distance_db < 0.0
