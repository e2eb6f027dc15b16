"""Device laws against closed forms, and their temperature laws against ngspice and textbook figures."""

from __future__ import annotations

import math

import numba
import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.circuit.devices import (
    base_charge,
    bjt_charge_values,
    bjt_charges,
    bjt_currents,
    bjt_values,
    depletion_charge,
    diode_charge,
    diode_charge_values,
    diode_values,
    junction_current,
)
from drivers.circuit.temperature import bjt_law, diode_law, thermal_volts

_GERMANIUM = {
    "is": 0.7e-6,
    "bf": 75.0,
    "br": 8.0,
    "vaf": 60.0,
    "var": 30.0,
    "ikf": 0.05,
    "ikr": 0.1,
    "ise": 0.3e-6,
    "ne": 1.8,
    "isc": 1.5e-6,
    "nc": 1.2,
    "eg": 0.67,
    "cje": 40e-12,
    "vje": 0.3,
    "mje": 0.4,
    "cjc": 14e-12,
    "vjc": 0.4,
    "mjc": 0.4,
    "tf": 60e-9,
    "tr": 200e-9,
}
LAW = bjt_law(_GERMANIUM, polarity=-1, area=1.0, celsius=27.0, tnom_celsius=27.0)


def slope(function: object, at: float, step: float) -> float:
    """Central difference of fourth order."""
    f = function
    assert callable(f)
    return float((8 * (f(at + step) - f(at - step)) - (f(at + 2 * step) - f(at - 2 * step))) / (12 * step))


def test_a_shockley_junction_carries_what_the_equation_says() -> None:
    # SOURCE: closed form IS (exp(V/VT) - 1) with IS = 1e-14 A, V = 0.6 V, 27 °C, SI constants: 1.18718694e-4
    # A
    amps, siemens = junction_current(0.6, 1e-14, thermal_volts(27.0))
    assert amps == pytest.approx(1.18718694e-4, rel=5e-9)
    assert siemens == pytest.approx((amps + 1e-14) / thermal_volts(27.0), rel=1e-12)


def test_ngspice_agrees_on_the_shockley_junction() -> None:
    # SOURCE: ngspice 39, D(IS=1e-14 N=1) at 0.6 V and 27 °C: 1.187196e-4 A; its k and q are those of CODATA
    # 2014, which moves VT by 3e-7 and the current by 7.6e-6
    amps, _ = junction_current(0.6, 1e-14, thermal_volts(27.0))
    assert amps == pytest.approx(1.187196e-4, rel=2e-5)


def test_thermal_voltage_is_kt_over_q() -> None:
    # SOURCE: k and q exact in SI 2019: 25.692579 mV at 25 °C
    assert thermal_volts(25.0) == pytest.approx(25.692579e-3, rel=4e-8)


def test_the_collector_current_follows_the_ideal_law_at_low_level() -> None:
    # SOURCE: closed form, IS = 1e-16, BF = 100, Vbe = 0.7 V at 27 °C: 5.670295e-5 A (no Early effect)
    law = bjt_law({"is": 1e-16, "bf": 100.0}, polarity=1, area=1.0, celsius=27.0, tnom_celsius=27.0)
    ic, ib, gm, _, _, _ = bjt_currents(0.7, -4.3, *bjt_values(law))
    assert ic == pytest.approx(5.670295e-5, rel=1e-7)
    assert ib == pytest.approx(ic / 100.0, rel=1e-6)
    assert gm == pytest.approx(ic / thermal_volts(27.0), rel=1e-6)


def test_early_voltage_gives_the_output_conductance_of_the_textbook() -> None:
    # SOURCE: closed form: Ic = IS exp(Vbe/VT) (1 - Vbc/VAF), so dIc/dVbc = -IS exp(Vbe/VT)/VAF
    law = bjt_law({"is": 1e-15, "vaf": 80.0}, polarity=1, area=1.0, celsius=27.0, tnom_celsius=27.0)
    ideal, _ = junction_current(0.65, 1e-15, thermal_volts(27.0))
    ic, _, _, by_vbc, _, _ = bjt_currents(0.65, -8.0, *bjt_values(law))
    assert ic == pytest.approx(ideal * 1.1, rel=1e-9)
    assert by_vbc == pytest.approx(-ideal / 80.0, rel=1e-6)


def test_high_injection_halves_the_slope_of_the_logarithm() -> None:
    # SOURCE: Gummel and Poon 1970: far above IKF the collector current goes as exp(Vbe / 2 VT)
    law = bjt_law({"is": 1e-15, "ikf": 1e-6}, polarity=1, area=1.0, celsius=27.0, tnom_celsius=27.0)
    values = bjt_values(law)
    low, high = bjt_currents(1.00, 0.0, *values)[0], bjt_currents(1.02, 0.0, *values)[0]
    assert math.log(high / low) == pytest.approx(0.02 / (2 * thermal_volts(27.0)), rel=2e-4)


@given(st.floats(-2.0, 0.35), st.floats(-9.0, 0.35))
def test_slopes_of_currents_are_the_derivatives_of_the_currents(vbe: float, vbc: float) -> None:
    values = bjt_values(LAW)
    step = 1e-5
    _, _, *slopes = bjt_currents(vbe, vbc, *values)
    numeric = [
        slope(lambda v: bjt_currents(v, vbc, *values)[0], vbe, step),
        slope(lambda v: bjt_currents(vbe, v, *values)[0], vbc, step),
        slope(lambda v: bjt_currents(v, vbc, *values)[1], vbe, step),
        slope(lambda v: bjt_currents(vbe, v, *values)[1], vbc, step),
    ]
    assert slopes == pytest.approx(numeric, rel=1e-4, abs=1e-9)


@given(st.floats(-2.0, 0.35).filter(lambda v: abs(v) > 1e-3), st.floats(-9.0, 0.35))
def test_capacitances_are_the_derivatives_of_the_charges(vbe: float, vbc: float) -> None:
    values = bjt_charge_values(LAW)
    step = 1e-5
    _, _, *farads = bjt_charges(vbe, vbc, *values)
    numeric = [
        slope(lambda v: bjt_charges(v, vbc, *values)[0], vbe, step),
        slope(lambda v: bjt_charges(vbe, v, *values)[0], vbc, step),
        slope(lambda v: bjt_charges(vbe, v, *values)[1], vbc, step),
    ]
    assert farads == pytest.approx(numeric, rel=1e-3, abs=2e-14)


@pytest.mark.parametrize("at", [-3.0, 80.0])
def test_the_junction_law_has_no_step_where_it_changes_form(at: float) -> None:
    nvt = 0.026
    below = junction_current(at * nvt * (1 - 1e-9), 1e-12, nvt)
    above = junction_current(at * nvt * (1 + 1e-9), 1e-12, nvt)
    assert below == pytest.approx(above, rel=1e-6)


def test_the_depletion_layer_follows_the_power_law_and_then_its_tangent() -> None:
    # SOURCE: closed form C = CJ / (1 - V/VJ)^M below FC VJ; straight above (SPICE3 manual, section 3.4.1)
    assert depletion_charge(-3.0, 1e-12, 0.75, 0.5, 0.5)[1] == pytest.approx(
        1e-12 / math.sqrt(5.0), rel=1e-12
    )
    at_corner = depletion_charge(0.375, 1e-12, 0.75, 0.5, 0.5)
    just_below = depletion_charge(0.375 - 1e-9, 1e-12, 0.75, 0.5, 0.5)
    assert at_corner == pytest.approx(just_below, rel=1e-7)
    beyond = depletion_charge(0.475, 1e-12, 0.75, 0.5, 0.5)[1]
    tangent = slope(lambda v: depletion_charge(v, 1e-12, 0.75, 0.5, 0.5)[1], 0.374, 1e-5)
    assert beyond == pytest.approx(at_corner[1] + 0.1 * tangent, rel=1e-3)


def test_the_laws_compile_and_give_the_same_numbers() -> None:
    # the compiled laws are what the transient runs on; they may call one another only when all are compiled
    compiled = numba.njit(junction_current)
    assert compiled(0.3, 1e-6, 0.026) == pytest.approx(junction_current(0.3, 1e-6, 0.026), rel=1e-14)
    assert compiled(-1.0, 1e-6, 0.026) == pytest.approx(junction_current(-1.0, 1e-6, 0.026), rel=1e-14)
    compiled = numba.njit(depletion_charge)
    assert compiled(0.3, 1e-12, 0.5, 0.4, 0.5) == pytest.approx(depletion_charge(0.3, 1e-12, 0.5, 0.4, 0.5))
    compiled = numba.njit(base_charge)
    arguments = (0.2, -1.0, 1e-3, 4e-2, 1e-9, 1e-8, 0.01, 0.02, 20.0, 10.0)
    assert compiled(*arguments) == pytest.approx(base_charge(*arguments), rel=1e-14)


def test_a_diode_stores_depletion_and_diffusion_charge() -> None:
    law = diode_law({"is": 1e-12, "cjo": 2e-12, "tt": 1e-8}, area=2.0, celsius=27.0, tnom_celsius=27.0)
    values = diode_charge_values(law)
    _, farads = diode_charge(0.3, *values)
    assert farads == pytest.approx(slope(lambda v: diode_charge(v, *values)[0], 0.3, 1e-5), rel=1e-7)
    _, siemens = junction_current(0.3, *diode_values(law))
    assert farads == pytest.approx(2 * 2e-12 / math.sqrt(0.7) + 1e-8 * siemens, rel=1e-9)


@pytest.mark.parametrize(
    ("eg_ev", "ratio"),
    [
        # SOURCE: closed form of the SPICE law, 25 -> 35 °C with XTI = 3: silicon 4.4861, germanium 2.5734
        (1.11, 4.4861),
        (0.67, 2.5734),
    ],
)
def test_saturation_current_grows_with_temperature_as_spice_says(eg_ev: float, ratio: float) -> None:
    laws = [
        bjt_law({"is": 1e-15, "eg": eg_ev}, polarity=1, area=1.0, celsius=c, tnom_celsius=25.0)
        for c in (25.0, 35.0)
    ]
    assert laws[0].is_amps == pytest.approx(1e-15, rel=1e-12)
    assert laws[1].is_amps / laws[0].is_amps == pytest.approx(ratio, abs=5e-5)


def test_base_emitter_voltage_falls_as_the_closed_form_says() -> None:
    # SOURCE: d/dT of VT ln(Ic/IS(T)) for IS = 1e-15 A at 27 °C, EG 1.11, XTI 3, 1 mA, 22 -> 32 °C: -1.57560
    # mV/K
    volts = []
    for celsius in (22.0, 32.0):
        law = bjt_law({"is": 1e-15}, polarity=1, area=1.0, celsius=celsius, tnom_celsius=27.0)
        volts.append(law.vt_volts * math.log(1e-3 / law.is_amps))
    assert (volts[1] - volts[0]) / 10.0 * 1e3 == pytest.approx(-1.57560, abs=5e-6)


def test_area_multiplies_currents_and_capacitances_and_divides_resistances() -> None:
    one = bjt_law(
        {"ise": 1e-15, "ikf": 0.01, "rb": 10.0, "cje": 1e-12},
        polarity=1,
        area=1.0,
        celsius=27.0,
        tnom_celsius=27.0,
    )
    three = bjt_law(
        {"ise": 1e-15, "ikf": 0.01, "rb": 10.0, "cje": 1e-12},
        polarity=1,
        area=3.0,
        celsius=27.0,
        tnom_celsius=27.0,
    )
    for name in ("is_amps", "ise_amps", "ikf_amps"):
        assert getattr(three, name) == pytest.approx(3.0 * getattr(one, name))
    assert three.rb_ohms == pytest.approx(10.0 / 3.0)
    assert three.be.cj_farads == pytest.approx(3e-12)
