from __future__ import annotations

import math

import pytest

from fixture.judge.budget import Combined, Contribution, combine_contributions, expand

# SOURCE: JCGM 100:2008 (GUM), H.1, the end gauge of 50 mm: uncertainties in nm, degrees of freedom. Sensitivities
# to the differences of expansion and temperature are l_s theta and l_s alpha (H.1.4).
LENGTH_NM = 50.000623e6
END_GAUGE = (
    Contribution("standard", 25.0, 1.0, 18),
    Contribution("comparison", 9.7, 1.0, 25.6),
    Contribution("difference of expansion", 0.58e-6, LENGTH_NM * 0.1, 50),
    Contribution("difference of temperature", 0.029, LENGTH_NM * 11.5e-6, 2),
)


def test_the_end_gauge_of_the_guide_combines_to_its_printed_uncertainty() -> None:
    combined = combine_contributions(END_GAUGE)
    assert combined.u == pytest.approx(32.0, abs=0.5)  # printed: 32 nm
    assert math.floor(combined.dof) == 16  # printed: 16
    assert combined.dof == pytest.approx(16.66, abs=0.05)  # an independent program (GTC): 16.65606


def test_the_end_gauge_of_the_guide_expands_to_its_printed_uncertainty() -> None:
    combined = combine_contributions(END_GAUGE)
    assert expand(combined, 0.99) / combined.u == pytest.approx(2.92, abs=0.005)  # printed: t = 2.92
    assert expand(combined, 0.99) == pytest.approx(93.0, abs=0.5)  # printed: 93 nm


@pytest.mark.parametrize(
    ("dof", "coverage", "factor"),
    [  # SOURCE: JCGM 100:2008, table G.2 (figures from memory)
        (1, 0.9545, 13.97),
        (5, 0.95, 2.57),
        (10, 0.99, 3.17),
        (50, 0.9545, 2.05),
        (math.inf, 0.95, 1.96),
        (math.inf, 0.9545, 2.0),
    ],
)
def test_coverage_factors_are_those_of_the_table(dof: float, coverage: float, factor: float) -> None:
    assert expand(Combined(1.0, dof), coverage) == pytest.approx(factor, abs=0.0051)


def test_three_and_four_make_five_and_a_sensitivity_of_minus_one_changes_nothing() -> None:
    combined = combine_contributions([Contribution("a", 3e-90), Contribution("b", 4e-90, -1.0)])
    assert combined.u == pytest.approx(5e-90) and combined.dof == math.inf


def test_an_empty_budget_has_no_uncertainty() -> None:
    assert combine_contributions([]) == Combined(0.0, math.inf)


@pytest.mark.parametrize(
    "bad", [Contribution("x", -1.0), Contribution("x", math.nan), Contribution("x", 1, 1, 0)]
)
def test_an_impossible_line_is_refused_by_name(bad: Contribution) -> None:
    with pytest.raises(ValueError, match="x: u ="):
        combine_contributions([bad])


def test_a_coverage_of_one_is_refused() -> None:
    with pytest.raises(ValueError, match="between 0 and 1"):
        expand(Combined(1.0, 5), 1.0)
