"""The DC operating point against closed forms and worked textbook examples."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.constants import Boltzmann, elementary_charge
from scipy.special import lambertw

from drivers.circuit.elements import (
    Bjt,
    BjtLaw,
    Capacitor,
    Circuit,
    CurrentSource,
    Diode,
    DiodeLaw,
    Element,
    Inductor,
    JunctionCharge,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from drivers.circuit.errors import CircuitError, NoConvergence
from drivers.circuit.operating_point import solve_operating_point

VT_27C = Boltzmann * 300.15 / elementary_charge
NO_CHARGE = JunctionCharge()
NEVER = math.inf


def circuit(*elements: Element, gmin: float = 1e-12) -> Circuit:
    return Circuit("test", elements, celsius=27.0, gmin_siemens=gmin)


def diode_law(is_amps: float = 1e-14, n: float = 1.0) -> DiodeLaw:
    return DiodeLaw(is_amps, n, VT_27C, 0.0, NO_CHARGE)


def bjt_law(is_amps: float, bf: float, polarity: int = 1, vaf: float = NEVER) -> BjtLaw:
    return BjtLaw(
        polarity=polarity,
        is_amps=is_amps,
        bf=bf,
        br=1.0,
        nf=1.0,
        nr=1.0,
        vaf_volts=vaf,
        var_volts=NEVER,
        ikf_amps=NEVER,
        ikr_amps=NEVER,
        ise_amps=0.0,
        ne=1.5,
        isc_amps=0.0,
        nc=2.0,
        rb_ohms=0.0,
        re_ohms=0.0,
        rc_ohms=0.0,
        vt_volts=VT_27C,
        be=NO_CHARGE,
        bc=NO_CHARGE,
    )


def test_a_diode_at_600_millivolts_carries_shockley_s_current() -> None:
    # SOURCE: Shockley's equation, IS 1e-14 A, n 1, 27 °C, k and q of the SI of 2019: 1.18718694e-4 A
    point = solve_operating_point(
        circuit(VoltageSource("V1", "a", "0", 0.6), Diode("D1", "a", "0", diode_law()), gmin=0.0)
    )
    assert -point.source_amps["V1"] == pytest.approx(1.18718694e-4, rel=5e-9)


def test_a_diode_behind_a_resistor_sits_where_lambert_s_function_puts_it() -> None:
    # SOURCE: closed form v = V + IS R - n VT W(IS R / (n VT) exp((V + IS R)/(n VT))); 5 V, 1 kohm:
    # 0.692887832 V, 4.307112168 mA
    point = solve_operating_point(
        circuit(
            VoltageSource("V1", "in", "0", 5.0),
            Resistor("R1", "in", "a", 1e3),
            Diode("D1", "a", "0", diode_law()),
            gmin=0.0,
        )
    )
    scale = 1e-14 * 1e3 / VT_27C
    closed = 5.0 + 1e-11 - VT_27C * float(lambertw(scale * math.exp((5.0 + 1e-11) / VT_27C)).real)
    assert point.node_volts["a"] == pytest.approx(closed, abs=1e-10)
    assert point.node_volts["a"] == pytest.approx(0.692887832, abs=5e-10)
    assert -point.source_amps["V1"] == pytest.approx(4.307112168e-3, abs=5e-13)
    assert point.port_volts["D1"] == (pytest.approx(0.692887832, abs=5e-10),)


def test_a_transistor_at_700_millivolts_carries_the_ebers_moll_current() -> None:
    # SOURCE: closed form IS (exp(VBE/VT) - 1), IS 1e-16 A, BF 100, 27 °C: IC 5.670295e-5 A
    point = solve_operating_point(
        circuit(
            VoltageSource("Vb", "b", "0", 0.7),
            VoltageSource("Vc", "c", "0", 5.0),
            Bjt("Q1", "c", "b", "0", bjt_law(1e-16, 100.0)),
            gmin=0.0,
        )
    )
    assert -point.source_amps["Vc"] == pytest.approx(5.670295e-5, rel=1e-7)
    assert -point.source_amps["Vb"] == pytest.approx(5.670295e-7, rel=1e-6)


def test_fixed_base_bias_is_the_worked_example() -> None:
    # SOURCE: textbook example 4.16 in the FOSSEE Scilab textbook companions (2150/CH4): Vcc 12 V, RB 240 kohm,
    # RC 2.2 kohm, beta 50, VBE 0.7 V: IB 47.0833 uA, IC 2.354167 mA, VCE 6.820833 V. IS is chosen for VBE = 0.7 V.
    is_amps = 2.354166667e-3 / math.expm1(0.7 / VT_27C)
    point = solve_operating_point(
        circuit(
            VoltageSource("Vcc", "vcc", "0", 12.0),
            Resistor("RB", "vcc", "b", 240e3),
            Resistor("RC", "vcc", "c", 2.2e3),
            Bjt("Q1", "c", "b", "0", bjt_law(is_amps, 50.0)),
        )
    )
    assert point.node_volts["c"] == pytest.approx(6.820833, abs=2e-6)
    assert (12.0 - point.node_volts["b"]) / 240e3 == pytest.approx(47.0833e-6, abs=5e-11)


def test_voltage_divider_bias_is_the_worked_example() -> None:
    # SOURCE: widely used textbook example (from memory), recomputed by Thevenin's theorem: 39k/3.9k, RC 10k, RE 1.5k,
    # beta 140, 22 V, VBE 0.7 V: IB 6.045234 uA, IC 0.846333 mA, VCE 12.258106 V
    is_amps = 0.8463327e-3 / math.expm1(0.7 / VT_27C)
    point = solve_operating_point(
        circuit(
            VoltageSource("Vcc", "vcc", "0", 22.0),
            Resistor("R1", "vcc", "b", 39e3),
            Resistor("R2", "b", "0", 3.9e3),
            Resistor("RC", "vcc", "c", 10e3),
            Resistor("RE", "e", "0", 1.5e3),
            Bjt("Q1", "c", "b", "e", bjt_law(is_amps, 140.0)),
        )
    )
    volts = point.node_volts
    assert volts["c"] - volts["e"] == pytest.approx(12.258106, abs=5e-6)
    assert (22.0 - volts["c"]) / 10e3 == pytest.approx(0.846333e-3, abs=5e-10)


def test_a_pnp_stage_is_the_mirror_of_an_npn_stage() -> None:
    def stage(polarity: int) -> Circuit:
        return circuit(
            VoltageSource("V1", "s", "0", 9.0 * polarity),
            Resistor("R1", "s", "b", 470e3),
            Resistor("R2", "s", "c", 4.7e3),
            Resistor("R3", "e", "0", 100.0),
            Bjt("Q1", "c", "b", "e", bjt_law(1e-14, 90.0, polarity, vaf=50.0)),
        )

    up = solve_operating_point(stage(1)).node_volts
    down = solve_operating_point(stage(-1)).node_volts
    assert {n: -v for n, v in down.items()} == pytest.approx(dict(up), abs=1e-9)


def test_capacitors_are_open_and_inductors_are_shorts() -> None:
    point = solve_operating_point(
        circuit(
            VoltageSource("V1", "in", "0", 6.0),
            Resistor("R1", "in", "a", 1e3),
            Inductor("L1", "a", "b", 0.1),
            Resistor("R2", "b", "0", 2e3),
            Capacitor("C1", "a", "out", 1e-6),
            Resistor("R3", "out", "0", 1e6),
        )
    )
    assert point.node_volts["b"] == pytest.approx(4.0, abs=1e-9)
    assert point.node_volts["out"] == pytest.approx(0.0, abs=1e-12)
    assert point.inductor_amps["L1"] == pytest.approx(2e-3, abs=1e-12)
    assert point.capacitor_volts["C1"] == pytest.approx(4.0, abs=1e-9)
    assert point.source_amps["V1"] == pytest.approx(-2e-3, abs=1e-12)


def test_controlled_sources_and_current_sources_have_the_signs_of_spice() -> None:
    point = solve_operating_point(
        circuit(
            CurrentSource("I1", "0", "a", 1e-3),  # out of ground, into a
            Resistor("R1", "a", "0", 1e3),
            Vcvs("E1", "b", "0", "a", "0", 3.0),
            Resistor("R2", "b", "0", 1e3),
            Vccs("G1", "c", "0", "a", "0", 1e-3),  # out of c
            Resistor("R3", "c", "0", 1e3),
        )
    )
    assert dict(point.node_volts) == pytest.approx({"a": 1.0, "b": 3.0, "c": -1.0}, abs=1e-12)
    assert point.source_amps["E1"] == pytest.approx(-3e-3, abs=1e-15)


def test_a_node_between_capacitors_is_named_as_undetermined() -> None:
    floating = circuit(
        VoltageSource("V1", "in", "0", 6.0),
        Capacitor("C1", "in", "mid", 1e-6),
        Capacitor("C2", "mid", "0", 1e-6),
    )
    with pytest.raises(CircuitError, match="node 'mid'"):
        solve_operating_point(floating)


def test_a_loop_of_voltage_sources_is_named() -> None:
    clash = circuit(
        VoltageSource("V1", "a", "0", 6.0), VoltageSource("V2", "a", "0", 5.0), Resistor("R1", "a", "0", 1e3)
    )
    with pytest.raises(CircuitError, match=r"V1|V2"):
        solve_operating_point(clash)


def test_a_resistor_of_nothing_is_refused() -> None:
    with pytest.raises(CircuitError, match="R1"):
        solve_operating_point(circuit(VoltageSource("V1", "a", "0", 6.0), Resistor("R1", "a", "0", 0.0)))


def test_a_stage_without_a_solution_is_reported_and_not_answered() -> None:
    # a negative conductance of 1 mS and a draw of 1 A: the line 1 mS v - 1 A never meets the diode's curve
    impossible = circuit(
        CurrentSource("I1", "a", "0", 1.0),
        Vccs("G1", "0", "a", "a", "0", 1e-3),
        Diode("D1", "a", "0", diode_law()),
    )
    with pytest.raises((NoConvergence, CircuitError)):
        solve_operating_point(impossible)


def test_a_string_of_diodes_at_a_stiff_hundred_volts_converges() -> None:
    # SOURCE: closed form as for one diode with n = 12
    elements: list[Element] = [VoltageSource("V1", "n0", "0", 100.0)]
    nodes = [f"n{i}" for i in range(13)]
    elements += [Diode(f"D{i}", nodes[i], nodes[i + 1], diode_law()) for i in range(12)]
    elements.append(Resistor("R1", nodes[12], "0", 10.0))
    point = solve_operating_point(circuit(*elements, gmin=0.0))
    nvt = 12 * VT_27C
    amps = point.node_volts["n12"] / 10.0
    assert 100.0 - amps * 10.0 == pytest.approx(nvt * math.log(amps / 1e-14), abs=1e-6)


def test_a_guess_near_the_answer_saves_work_and_changes_nothing() -> None:
    def stage(ohms: float) -> Circuit:
        return circuit(
            VoltageSource("V1", "s", "0", 9.0),
            Resistor("R1", "s", "b", 470e3),
            Resistor("R2", "s", "c", ohms),
            Bjt("Q1", "c", "b", "0", bjt_law(1e-14, 90.0)),
        )

    near = solve_operating_point(stage(4.7e3))
    cold = solve_operating_point(stage(4.8e3))
    warm = solve_operating_point(stage(4.8e3), guess=near)
    assert dict(warm.node_volts) == pytest.approx(dict(cold.node_volts), abs=1e-9)
    assert warm.rounds < cold.rounds


@pytest.mark.parametrize("seed", range(20))
def test_every_solution_keeps_kirchhoff_s_current_law_at_the_collector(seed: int) -> None:
    rng = np.random.default_rng(seed)
    collector, base = 10 ** rng.uniform(2, 5), 10 ** rng.uniform(3, 6.5)
    law = bjt_law(10 ** rng.uniform(-16, -6), 10 ** rng.uniform(1, 2.7), vaf=rng.uniform(20, 200))
    point = solve_operating_point(
        circuit(
            VoltageSource("V1", "s", "0", rng.uniform(1, 30)),
            VoltageSource("Vsense", "c0", "c", 0.0),
            Resistor("R1", "s", "b", base),
            Resistor("R2", "s", "c0", collector),
            Bjt("Q1", "c", "b", "0", law),
        )
    )
    volts = point.node_volts
    through_resistor = (volts["s"] - volts["c0"]) / collector
    assert point.source_amps["Vsense"] == pytest.approx(through_resistor, rel=1e-9)
    vbe, vbc = point.port_volts["Q1"]
    assert vbe - vbc == pytest.approx(volts["c"], abs=1e-9)
