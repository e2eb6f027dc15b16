"""Draws of parts."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from drivers.circuit.elements import Resistor
from drivers.circuit.errors import BadSpread, UnknownName
from drivers.circuit.netlist import Netlist, elaborate, parse_netlist, read_netlist
from drivers.circuit.tolerance import Spread, draw_probability, draw_unit

PAIR = Path(__file__).parent / "decks" / "germanium_pair.cir"


def ohms(netlist: Netlist, name: str) -> float:
    return next(e.ohms for e in elaborate(netlist).elements if isinstance(e, Resistor) and e.name == name)


def test_the_same_key_is_the_same_unit_for_ever() -> None:
    # SOURCE: snapshot (regression only): what was once sold as a serial must stay that serial
    assert draw_probability("PT-2612-0001", "R1", "value") == draw_probability("PT-2612-0001", "r1", "VALUE")
    assert draw_probability("PT-2612-0001", "R1", "value") == pytest.approx(0.6609732386994533, rel=1e-12)
    netlist = read_netlist(PAIR)
    spreads = [Spread("R*", "value", "uniform", 0.05), Spread("Q*", "bf", "normal", 0.2)]
    assert draw_unit(netlist, spreads, "a") == draw_unit(netlist, spreads, "a")
    assert draw_unit(netlist, spreads, "a") != draw_unit(netlist, spreads, "b")


def test_a_new_spread_leaves_the_other_draws_where_they_were() -> None:
    netlist = read_netlist(PAIR)
    few = draw_unit(netlist, [Spread("Rc1", "value", "uniform", 0.05)], "k")
    many = draw_unit(
        netlist, [Spread("C*", "value", "normal", 0.2), Spread("R*", "value", "uniform", 0.05)], "k"
    )
    assert few.part("Rc1") == many.part("Rc1")


def test_a_uniform_draw_fills_its_limits_evenly() -> None:
    # SOURCE: uniform on ±5 %: sigma = 0.05/sqrt(3); 2000 draws: standard error of the mean 0.00065, of sigma
    # 1.0 %
    spread = Spread("R1", "value", "uniform", 0.05)
    factors = np.array([spread.factor(draw_probability(f"unit {i}", "R1", "value")) for i in range(2000)])
    assert np.all(np.abs(factors - 1.0) <= 0.05)
    assert np.mean(factors) == pytest.approx(1.0, abs=3 * 0.00065)
    assert np.std(factors) == pytest.approx(0.05 / math.sqrt(3.0), rel=0.04)


def test_a_normal_draw_has_half_its_spread_as_sigma() -> None:
    spread = Spread("R1", "value", "normal", 0.2)
    factors = np.array([spread.factor(draw_probability(f"unit {i}", "R1", "value")) for i in range(2000)])
    assert np.mean(factors) == pytest.approx(1.0, abs=3 * 0.1 / math.sqrt(2000))
    assert np.std(factors) == pytest.approx(0.1, rel=0.06)
    # SOURCE: quantile of the normal law, z(0.975) = 1.959964
    assert spread.factor(0.975) == pytest.approx(1.1959964, abs=5e-8)


def test_a_lognormal_draw_has_its_spread_as_sigma_of_the_logarithm() -> None:
    spread = Spread("Q1", "isc", "lognormal", 0.4)
    assert spread.factor(0.5) == pytest.approx(1.0)
    assert math.log(spread.factor(0.975)) == pytest.approx(0.4 * 1.959964, abs=5e-7)


def test_a_model_parameter_scatters_for_each_part_alone() -> None:
    netlist = parse_netlist("t\nR1 a 0 1\nQ1 a a 0 N\nQ2 a a 0 N\n.model N NPN(BF=100 ISC=1u)\n")
    drawn = draw_unit(netlist, [Spread("Q*", "BF", "uniform", 0.3), Spread("Q*", "isc", "uniform", 0.3)], "k")
    gains = [elaborate(drawn).elements[i].law.bf for i in (1, 2)]  # type: ignore[union-attr]
    assert gains[0] != gains[1]
    assert all(70.0 <= gain <= 130.0 for gain in gains)
    assert drawn.model("n") == netlist.model("n")


def test_a_drawn_pot_scales_both_halves_alike_through_its_parameter() -> None:
    netlist = read_netlist(PAIR).with_param("gain", "0.25")
    rules = [
        Spread("R*", "value", "uniform", 0.05),
        Spread("Rgain_*", "value", "uniform", 0.0),
        Spread("param:gain_ohms", "value", "uniform", 0.2),
    ]
    drawn = draw_unit(netlist, rules, "k")
    top, bottom = ohms(drawn, "Rgain_a") - 1.0, ohms(drawn, "Rgain_b") - 1.0
    assert top / bottom == pytest.approx(3.0, rel=1e-12)
    assert top + bottom != pytest.approx(1000.0, rel=1e-3)
    assert abs((top + bottom) / 1000.0 - 1.0) <= 0.2


def test_the_last_spread_that_hits_a_part_counts() -> None:
    netlist = read_netlist(PAIR)
    drawn = draw_unit(
        netlist, [Spread("R*", "value", "uniform", 0.05), Spread("rc2", "value", "uniform", 0.0)], "k"
    )
    assert ohms(drawn, "Rc2") == 8200.0
    assert ohms(drawn, "Rc1") != 33000.0


def test_a_spread_that_matches_nothing_is_an_error() -> None:
    netlist = read_netlist(PAIR)
    with pytest.raises(UnknownName, match="'Rx9' matches no part"):
        draw_unit(netlist, [Spread("Rx9", "value", "uniform", 0.05)], "k")
    with pytest.raises(UnknownName, match=r"matches no \.param .nearest: param:gain_ohms"):
        draw_unit(netlist, [Spread("param:gain_ohm", "value", "uniform", 0.05)], "k")
    with pytest.raises(UnknownName, match="no part of that name has a model with BF"):
        draw_unit(netlist, [Spread("R*", "bf", "uniform", 0.05)], "k")


@pytest.mark.parametrize(
    "law, spread", [("uniform", 1.0), ("normal", 0.5), ("uniform", -0.1), ("triangle", 0.1)]
)
def test_a_spread_that_could_make_a_part_negative_is_refused(law: str, spread: float) -> None:
    with pytest.raises(BadSpread, match="accepted"):
        Spread("R1", "value", law, spread)  # type: ignore[arg-type]
