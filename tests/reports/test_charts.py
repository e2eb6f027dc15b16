"""Charts: where things stand on the paper, and that any reader of SVG can take them."""

from __future__ import annotations

import re
from xml.etree import ElementTree

import numpy as np
import pytest

from fixture.domain.limits import Limits, Mask
from fixture.domain.reading import Curve
from fixture.reports.canvas import Axis, round_ticks
from fixture.reports.charts import histogram, response_lot

SVG = "{http://www.w3.org/2000/svg}"
SAMPLE = np.random.default_rng(1).normal(-4.9, 0.3, 150)
HZ = np.geomspace(20.0, 16000.0, 60)


def test_ticks_are_round_and_inside() -> None:
    assert round_ticks(0.0, 10.0, 5) == [0.0, 2.0, 4.0, 6.0, 8.0, 10.0]
    assert round_ticks(-0.013, 0.027, 8) == pytest.approx(
        [-0.01, -0.005, 0.0, 0.005, 0.01, 0.015, 0.02, 0.025]
    )
    assert round_ticks(41.3, 43.9, 6) == [41.5, 42.0, 42.5, 43.0, 43.5]
    with pytest.raises(ValueError, match="no axis"):
        round_ticks(1.0, 1.0)


def test_an_axis_is_monotone_and_meets_its_ends() -> None:
    straight, logarithmic = Axis(-2.0, 3.0, 70.0, 740.0), Axis(20.0, 20000.0, 70.0, 740.0, logarithmic=True)
    assert (straight.place(-2.0), straight.place(3.0)) == (70.0, 740.0)
    assert logarithmic.place(np.sqrt(20.0 * 20000.0)) == pytest.approx(405.0)


def lines_of(picture: str, style: str) -> list[ElementTree.Element]:
    return [
        line for line in ElementTree.fromstring(picture).iter(f"{SVG}line") if style in line.attrib["style"]
    ]


def test_limits_stand_where_their_values_stand_and_are_named_in_words() -> None:
    old = Limits(-6.0, -3.5, "V")
    new = Limits(-5.9, None, "V")
    picture = histogram(SAMPLE, title="Bias: q2 collector", unit="V", old=old, new=new)
    dotted, solid = lines_of(picture, "dasharray"), lines_of(picture, "stroke:#000")
    assert len(dotted) == 2 and len(solid) == 1
    # old and new low are 0.1 V apart, old low and high 2.5 V
    x_low, x_high = sorted(float(line.attrib["x1"]) for line in dotted)
    assert float(solid[0].attrib["x1"]) - x_low == pytest.approx((x_high - x_low) * 0.1 / 2.5, abs=0.15)
    words = " ".join(ElementTree.fromstring(picture).itertext())
    assert "in force -6.000 V" in words and "proposed -5.900 V" in words and "150 units" in words


def test_the_bars_hold_all_units() -> None:
    picture = histogram(SAMPLE, title="t", unit="V")
    bars = [
        box
        for box in ElementTree.fromstring(picture).iter(f"{SVG}rect")
        if "b9c7d6" in box.attrib.get("style", "")
    ]
    heights = np.array([float(bar.attrib["height"]) for bar in bars])
    one = heights.min() / round(heights.min() / (heights.sum() / SAMPLE.size))
    assert heights.sum() / one == pytest.approx(SAMPLE.size, rel=0.01)


def test_outliers_are_marked_and_named_and_titles_are_escaped() -> None:
    picture = histogram([*SAMPLE, -9.0], title="a < b & c", unit="V", outliers=[("PT-2612-0007", -9.0)])
    root = ElementTree.fromstring(picture)
    assert root.findtext(f"{SVG}title") == "a < b & c"
    assert len(list(root.iter(f"{SVG}circle"))) == 1
    assert "PT-2612-0007" in "".join(root.itertext())


@pytest.mark.parametrize("values", [[0.0] * 12, [1e-9], [3.0, 3.0, 3.1]])
def test_few_or_equal_values_are_drawn(values: list[float]) -> None:
    ElementTree.fromstring(histogram(values, title="t", unit="A"))


@pytest.mark.parametrize("values", [[], [1.0, float("nan")]])
def test_what_is_no_number_is_refused(values: list[float]) -> None:
    with pytest.raises(ValueError, match="finite"):
        histogram(values, title="t", unit="V")


def test_a_mask_is_drawn_straight_over_log_frequency_through_its_rows() -> None:
    mask = Mask(((20.0, -30.0, -9.0), (200.0, None, 0.5), (2000.0, -0.3, 0.3), (16000.0, -1.6, 0.3)))
    curves = [Curve("response", HZ, np.zeros(60) + level) for level in (-0.1, 0.0, 0.1)]
    root = ElementTree.fromstring(response_lot(curves, mask, title="t"))
    drawn = [line for line in root.iter(f"{SVG}polyline") if "dasharray" in line.attrib["style"]]
    # the lower bound is missing at one row: only its last stretch is left; the upper one goes through all rows
    assert sorted(len(line.attrib["points"].split()) for line in drawn) == [2, 4]
    upper = next(line for line in drawn if len(line.attrib["points"].split()) == 4)
    x = [float(pair.split(",")[0]) for pair in upper.attrib["points"].split()]
    assert x[1] - x[0] == pytest.approx(x[2] - x[1], abs=0.15)  # a decade each
    assert len([line for line in root.iter(f"{SVG}polyline") if "opacity" in line.attrib["style"]]) == 3


def test_a_large_lot_is_drawn_as_median_and_outermost_values() -> None:
    rng = np.random.default_rng(2)
    curves = [Curve("response", HZ, rng.normal(0.0, 0.2, 60)) for _ in range(100)]
    picture = response_lot(curves, None, title="t", named=[("PT-2612-0009", curves[0])])
    assert len(re.findall("<polygon", picture)) == 1
    assert "100 units, outermost and median" in picture and "PT-2612-0009" in picture
    assert len(picture) < 30_000


def test_curves_must_be_there_and_agree() -> None:
    with pytest.raises(ValueError, match="no curves"):
        response_lot([], None, title="t")
    other = Curve("response", HZ[:-1], np.zeros(59))
    with pytest.raises(ValueError, match="different frequencies"):
        response_lot([Curve("response", HZ, np.zeros(60)), other], None, title="t")
