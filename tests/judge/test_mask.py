from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.domain.limits import Mask
from fixture.judge.decide import mask_bounds

MASK = Mask(((100.0, -3.0, 1.0), (1000.0, -1.0, None), (10000.0, None, 2.0)))


def test_a_row_gives_its_own_bounds() -> None:
    low, high = mask_bounds(MASK, [100.0, 1000.0, 10000.0])
    np.testing.assert_array_equal(low, [-3.0, -1.0, math.nan])
    np.testing.assert_array_equal(high, [1.0, math.nan, 2.0])


def test_there_is_no_bound_beyond_the_rows_nor_beside_an_open_one() -> None:
    low, high = mask_bounds(MASK, [50.0, 0.0, 2e4, 300.0, 3000.0])
    assert np.all(np.isnan(high)) and np.all(np.isnan(low[[0, 1, 2, 4]]))
    assert low[3] == pytest.approx(-3.0 + 2.0 * math.log10(3.0))


@given(st.floats(0.0, 1.0), st.floats(-20, 20), st.floats(-20, 20))
def test_between_rows_bounds_run_straight_over_log_frequency(part: float, first: float, last: float) -> None:
    mask = Mask(((20.0, first, None), (20e3, last, None)))
    low, _ = mask_bounds(mask, [20.0 * 1000.0**part])
    assert low[0] == pytest.approx(first + part * (last - first), abs=1e-7)


def test_a_frequency_that_rounding_moved_off_the_last_row_is_still_judged() -> None:
    low, _ = mask_bounds(Mask(((20.0, -1.0, None), (16e3, -2.0, None))), [math.nextafter(16e3, math.inf)])
    assert low[0] == -2.0
