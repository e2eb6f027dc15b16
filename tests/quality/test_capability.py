"""Capability against the worked values of the handbook."""

from __future__ import annotations

import pytest

from fixture.quality.capability import capability


def test_the_example_of_the_handbook() -> None:
    # NIST/SEMATECH e-Handbook 6.1.6: USL 20, LSL 8, mean 16, s 2: Cp 1.0, Cpk 0.6667
    found = capability(16.0, 2.0, 30, 8.0, 20.0)
    assert found.cp is not None
    assert (found.cp.value, found.cpk.value) == (pytest.approx(1.0), pytest.approx(0.6667, abs=5e-5))
    # the intervals by the formulas of the sources (chi-square; Bissell 1990), computed independently
    assert (found.cp.low, found.cp.high) == (
        pytest.approx(0.743873, abs=1e-6),
        pytest.approx(1.255639, abs=1e-6),
    )
    assert (found.cpk.low, found.cpk.high) == (
        pytest.approx(0.457707, abs=1e-6),
        pytest.approx(0.875626, abs=1e-6),
    )


def test_a_textbook_interval() -> None:
    # Montgomery, "Introduction to Statistical Quality Control" (from memory): USL 62, LSL 38, s 1.75, n 20: 1.57 to 3.01
    found = capability(50.0, 1.75, 20, 38.0, 62.0).cp
    assert found is not None and found.value == pytest.approx(2.2857, abs=5e-5)
    assert (found.low, found.high) == (pytest.approx(1.565, abs=0.01), pytest.approx(3.01, abs=0.01))


def test_one_bound_has_a_cpk_alone() -> None:
    found = capability(1.0, 0.1, 50, None, 1.6)
    assert found.cp is None and found.cpk.value == pytest.approx(2.0)


@pytest.mark.parametrize(("sigma", "size", "low"), [(0.0, 10, 1.0), (1.0, 1, 1.0), (1.0, 10, None)])
def test_without_spread_values_or_limits_there_is_none(sigma: float, size: int, low: float | None) -> None:
    with pytest.raises(ValueError, match="a capability needs"):
        capability(0.0, sigma, size, low, None)
