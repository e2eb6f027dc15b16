from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.domain.limits import Limits, Mask
from fixture.domain.reading import Curve, Reading
from fixture.domain.verdict import Verdict
from fixture.judge.decide import judge_reading

finite = st.floats(-1e6, 1e6, allow_nan=False)


def judge(value, low, high, *, unit="V", u=0.0, name="q2_collector", **rest):
    return judge_reading("Bias", Reading(name, value, unit, u), Limits(low, high, unit, **rest), 1.5)


# --- simple acceptance


@given(finite, finite)
def test_both_bounds_are_inclusive(a: float, b: float) -> None:
    low, high = sorted((a, b))
    for value in (low, high):
        judged = judge(value, low, high)
        assert judged.verdict is Verdict.PASS and judged.distance == 0.0


@given(finite, finite)
def test_the_next_number_beyond_a_bound_fails(a: float, b: float) -> None:
    low, high = sorted((a, b))
    for value in (math.nextafter(low, -math.inf), math.nextafter(high, math.inf)):
        judged = judge(value, low, high)
        assert judged.verdict is Verdict.FAIL
        assert judged.distance is not None and judged.distance < 0


@given(finite, st.none() | finite, st.none() | finite)
def test_a_verdict_says_the_same_as_the_comparison(value, low, high) -> None:
    inside = (low is None or value >= low) and (high is None or value <= high)
    assert judge(value, low, high).verdict is (Verdict.PASS if inside else Verdict.FAIL)


@given(finite, finite, finite, st.floats(0, 1e3))
def test_the_simple_rule_does_not_look_at_the_uncertainty(value, low, high, u) -> None:
    assert judge(value, low, high, u=u).verdict is judge(value, low, high).verdict


# --- guarded acceptance: w = r U, U = 2 u (ILAC-G8:09/2019, JCGM 106:2012, 8.3.2)


@pytest.mark.parametrize(
    ("value", "verdict"),
    [
        (1.0, Verdict.CONDITIONAL),
        (1.1249, Verdict.CONDITIONAL),
        (1.125, Verdict.PASS),
        (1.875, Verdict.PASS),
        (1.8751, Verdict.CONDITIONAL),
        (2.0, Verdict.CONDITIONAL),
        (2.0001, Verdict.FAIL),
        (0.9999, Verdict.FAIL),
    ],
)
def test_guarded_pass_needs_the_expanded_uncertainty(value: float, verdict: Verdict) -> None:
    assert judge(value, 1.0, 2.0, u=0.0625, rule="guarded").verdict is verdict


@pytest.mark.parametrize(
    ("ratio", "false_accept"),
    [(0.0, 0.5), (0.83, 0.0484572), (1.0, 0.0227501), (1.5, 0.00134990)],
)
def test_worst_false_acceptance_is_that_of_the_guideline(ratio: float, false_accept: float) -> None:
    # ILAC-G8:09/2019, table 1: < 50 % at w = 0, < 2.5 % at w = U, < 0.16 % at w = 1.5 U; digits by the normal
    # distribution. A true value on the bound is accepted when the noise exceeds the narrowest passing distance.
    passing = [d for d in np.arange(0.0, 4.0, 1e-3) if _passes(float(d), ratio)]
    tail = 0.5 * math.erfc(min(passing) / math.sqrt(2.0))
    assert tail == pytest.approx(false_accept, rel=4e-3)  # one step of the search


def _passes(distance: float, ratio: float) -> bool:
    return judge(distance, 0.0, None, u=1.0, rule="guarded", guard_ratio=ratio).verdict is Verdict.PASS


@given(finite, finite, finite, st.floats(0, 1e3), st.floats(0, 3))
def test_guarding_never_turns_a_failure_into_anything_better(value, low, high, u, ratio) -> None:
    simple = judge(value, low, high).verdict
    guarded = judge(value, low, high, u=u, rule="guarded", guard_ratio=ratio).verdict
    assert (guarded is Verdict.FAIL) == (simple is Verdict.FAIL)


# --- what is no value


def test_a_reading_without_a_value_is_not_measured_and_says_why() -> None:
    judged = judge_reading("Gain", Reading("gain", None, "dB", why_not="no tone"), Limits(1, 2, "dB"), 0.1)
    assert judged.verdict is Verdict.NOT_MEASURED
    assert (judged.said, judged.distance) == ("gain not measured: no tone", None)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
@pytest.mark.parametrize("limits", [None, Limits(None, None, "V"), Limits(-1.0, None, "V")])
def test_what_is_no_finite_number_is_not_measured(value: float, limits: Limits | None) -> None:
    judged = judge_reading("Bias", Reading("rail", value, "V"), limits, 0.1)
    assert judged.verdict is Verdict.NOT_MEASURED and judged.reading.value is None


def test_a_guard_band_without_an_uncertainty_is_not_measured() -> None:
    assert judge(1.5, 1.0, 2.0, u=math.nan, rule="guarded").verdict is Verdict.NOT_MEASURED


def test_without_limits_a_measured_value_passes_and_says_so() -> None:
    judged = judge_reading("Bias", Reading("rail", -8.99, "V"), None, 0.1)
    assert (judged.verdict, judged.distance) == (Verdict.PASS, None)
    assert judged.said == "rail -8.990 V (no limits)"


def test_limits_of_another_unit_are_refused() -> None:
    with pytest.raises(ValueError, match="reading in V, limits in A"):
        judge_reading("Bias", Reading("rail", 1.0, "V"), Limits(0, 2, "A"), 0.1)


# --- words


@pytest.mark.parametrize(
    ("judged", "said"),
    [
        (
            judge(-8.71, -6.0, -3.2),
            "q2 collector -8.71 V, allowed -6.00 V to -3.20 V: 2.71 V too negative",
        ),
        (
            judge(-1.2, -6.0, -3.2),
            "q2 collector -1.20 V, allowed -6.00 V to -3.20 V: 2.00 V not negative enough",
        ),
        (judge(-4.9, -6.0, -3.2), "q2 collector -4.90 V, allowed -6.00 V to -3.20 V"),
        (
            judge(3.1, 44.3, None, unit="dB", name="gain"),
            "gain 3.10 dB, allowed at least 44.3 dB: 41.2 dB too low",
        ),
        (
            judge(0.0012, None, 0.0011, unit="A", name="supply_current"),
            "supply current 1.20 mA, allowed at most 1.10 mA: 100 µA too high",
        ),
        (
            judge(-6.00012, -6.0, -3.2),
            "q2 collector -6.0001 V, allowed -6.0000 V to -3.2000 V: 120 µV too negative",
        ),
        (
            judge(1.99, 1.0, 2.0, u=0.02, rule="guarded", name="bias"),
            "bias 1.99 V, allowed 1.00 V to 2.00 V: inside by 10.0 mV only, with an uncertainty of 40 mV (95 %)",
        ),
    ],
)
def test_the_sentence_gives_value_bounds_and_by_how_much(judged, said: str) -> None:
    assert judged.said == said


def test_a_remark_of_the_step_is_in_the_sentence() -> None:
    reading = Reading("gain", -60.0, "dB", note="no signal: below -60.0 dB")
    said = judge_reading("Gain", reading, Limits(40.0, None, "dB"), 0.1).said
    assert said == "gain -60.0 dB, allowed at least 40.0 dB: 100 dB too low (no signal: below -60.0 dB)"


@given(finite, finite, finite)
def test_a_value_that_fails_never_reads_as_one_of_its_bounds(value, low, high) -> None:
    low, high = sorted((round(low, 3), round(high, 3)))
    judged = judge(round(value, 3), low, high)
    if judged.verdict is Verdict.FAIL:
        shown, allowed = judged.said.removeprefix("q2 collector ").split(", allowed ")
        assert shown not in allowed.split(":")[0].split(" to ")


# --- masks


MASK = Mask(((100.0, -3.0, 1.0), (1000.0, -1.0, 1.0), (10000.0, None, 2.0)))


def curve(*points: tuple[float, float]) -> Reading:
    hz, db = np.array(points).T
    return Reading("response", 0.0, "dB", 0.1, curve=Curve("response", hz, db))


def test_a_curve_is_as_good_as_its_worst_point() -> None:
    judged = judge_reading("Response", curve((100, 0), (316.2277660168379, -2.5), (1e4, 0)), MASK, 1.0)
    assert judged.verdict is Verdict.FAIL
    assert judged.distance == pytest.approx(-0.5)  # the bound half way over log f is -2 dB
    assert judged.reading.value == judged.distance and judged.reading.unit == "dB"
    assert judged.said == "response at 316 Hz -2.50 dB, allowed -2.00 dB to 1.00 dB: 0.50 dB too low"


def test_points_outside_the_first_and_last_row_are_not_judged() -> None:
    judged = judge_reading("Response", curve((20, -40), (1000, 0), (15000, -40)), MASK, 1.0)
    assert judged.verdict is Verdict.PASS and judged.distance == 1.0


def test_where_a_bound_is_left_out_only_the_other_one_counts() -> None:
    assert judge_reading("R", curve((100, 0), (3000, -30), (1e4, 0)), MASK, 1.0).verdict is Verdict.PASS
    assert judge_reading("R", curve((3000, 2)), MASK, 1.0).verdict is Verdict.FAIL


def test_a_curve_off_the_mask_altogether_is_not_measured() -> None:
    judged = judge_reading("Response", curve((20, 0), (50, 0)), MASK, 1.0)
    assert judged.verdict is Verdict.NOT_MEASURED
    assert judged.said == "response not measured: no point of the curve lies within the mask"


@pytest.mark.parametrize(
    ("points", "said"),
    [
        (((100, 0), (5000, 0)), "the mask wants 5 kHz to 10 kHz too, where there is no curve"),
        (((200, 0), (10000, 0)), "the mask wants 100 Hz to 200 Hz too, where there is no curve"),
    ],
)
def test_a_good_curve_that_does_not_reach_all_of_its_mask_is_not_measured(points, said: str) -> None:
    judged = judge_reading("Response", curve(*points), MASK, 1.0)
    assert judged.verdict is Verdict.NOT_MEASURED and judged.reading.value is None
    assert judged.said == f"response not measured: {said}"


def test_a_bad_curve_fails_even_where_it_does_not_reach_all_of_its_mask() -> None:
    assert judge_reading("Response", curve((100, 0), (500, -5)), MASK, 1.0).verdict is Verdict.FAIL


def test_a_curve_may_end_one_step_of_its_grid_before_the_mask() -> None:
    assert judge_reading("R", curve((105, 0), (9500, 0)), MASK, 1.0).verdict is Verdict.PASS


def test_rows_without_any_bound_ask_for_no_curve() -> None:
    mask = Mask(((20.0, None, None), (100.0, -1.0, 1.0), (1000.0, -1.0, 1.0), (20e3, None, None)))
    assert judge_reading("R", curve((100, 0), (1000, 0)), mask, 1.0).verdict is Verdict.PASS


def test_a_point_without_a_figure_is_not_measured() -> None:
    judged = judge_reading("Response", curve((200, -90), (500, math.nan)), MASK, 1.0)
    assert judged.verdict is Verdict.NOT_MEASURED and "no figure at 500 Hz" in judged.said


def test_a_mask_without_a_curve_is_not_measured() -> None:
    assert judge_reading("R", Reading("response", 0.0, "dB"), MASK, 1.0).verdict is Verdict.NOT_MEASURED


def test_a_mask_can_be_guarded() -> None:
    guarded = Mask(MASK.points, "guarded")
    assert judge_reading("R", curve((100, 0), (1000, 0.7), (1e4, 0)), guarded, 1.0).verdict is Verdict.PASS
    assert (
        judge_reading("R", curve((100, 0), (1000, 0.9), (1e4, 0)), guarded, 1.0).verdict
        is Verdict.CONDITIONAL
    )
    assert judge_reading("R", curve((1000, 1.1)), guarded, 1.0).verdict is Verdict.FAIL
