"""Circuits in time against closed forms: steps, settling, runs, changes, trials."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.constants import Boltzmann, elementary_charge
from scipy.special import lambertw

from drivers.circuit.elements import (
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
    VoltageSource,
)
from drivers.circuit.errors import CircuitError, NoConvergence, UnknownName
from drivers.circuit.netlist import elaborate, read_netlist
from drivers.circuit.transient import Simulator

FloatArray = NDArray[np.float64]
VT_27C = Boltzmann * 300.15 / elementary_charge
PEAT = Path(__file__).parents[2] / "limits" / "peat" / "circuit.cir"


def circuit(*elements: Element, gmin: float = 0.0) -> Circuit:
    return Circuit("test", elements, celsius=27.0, gmin_siemens=gmin)


def diode(name: str, anode: str, cathode: str, charge: JunctionCharge | None = None, n: float = 1.0) -> Diode:
    return Diode(name, anode, cathode, DiodeLaw(1e-14, n, VT_27C, 0.0, charge or JunctionCharge()))


def rc(ohms: float = 1e3, farads: float = 1e-6) -> Circuit:
    return circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "out", ohms),
        Capacitor("C1", "out", "0", farads),
    )


def rc_simulator(ohms: float = 1e3, farads: float = 1e-6) -> Simulator:
    return Simulator(rc(ohms, farads), inputs=["V1"], outputs=["out", "i(V1)"])


# --- single steps


def test_one_backward_euler_step_of_an_rc_is_its_closed_form() -> None:
    # SOURCE: v1 = V x / (1 + x), x = dt / RC
    out, amps = rc_simulator().step(0.5e-3, [2.0])
    assert out == pytest.approx(2.0 * 0.5 / 1.5, rel=1e-8)
    assert amps == pytest.approx(-(2.0 - out) / 1e3, rel=1e-8)


def test_a_tried_step_changes_nothing_until_it_is_accepted() -> None:
    simulator = rc_simulator()
    before = simulator.state()
    trial = simulator.try_step(1e-3, [5.0])
    simulator.try_step(1e-3, [-5.0])
    assert simulator.state().reactive == pytest.approx(before.reactive, abs=0.0)
    simulator.accept(trial)
    other = rc_simulator()
    assert trial.outputs == pytest.approx(other.step(1e-3, [5.0]), abs=0.0)
    assert simulator.step(1e-4, [1.0]) == pytest.approx(other.step(1e-4, [1.0]), abs=0.0)


def test_a_state_that_was_kept_can_be_gone_back_to() -> None:
    simulator = Simulator(elaborate(read_netlist(PEAT)), inputs=["Vin"], outputs=["jack_out", "q2c"])
    simulator.start_at_operating_point()
    kept = simulator.state()
    samples = 0.01 * np.sin(np.arange(200) / 7.0)[:, None]
    first = simulator.run(samples, 48_000)
    simulator.restore(kept)
    assert simulator.run(samples, 48_000) == pytest.approx(first, abs=0.0)


# --- runs


def test_the_trapezoidal_rule_on_an_rc_is_its_closed_form_after_two_half_steps() -> None:
    # SOURCE: decay per trapezoidal step (1 - x/2)/(1 + x/2), per backward Euler half step 1/(1 + x/2), x = T / RC
    rate_hz = 4000.0
    x = 1.0 / rate_hz / 1e-3
    wanted = 1.0 - (1.0 + x / 2) ** -2 * ((1 - x / 2) / (1 + x / 2)) ** np.arange(20)
    found = rc_simulator().run(np.ones((20, 1)), rate_hz, oversample=1)[:, 0]
    assert found == pytest.approx(wanted, rel=1e-8)


def test_a_run_in_two_parts_is_the_same_run() -> None:
    samples = np.sin(np.arange(300) / 5.0)[:, None]
    whole = rc_simulator().run(samples, 48_000, oversample=1)
    simulator = rc_simulator()
    parts = [
        simulator.run(samples[:100], 48_000, oversample=1),
        simulator.run(samples[100:], 48_000, oversample=1),
    ]
    assert np.concatenate(parts) == pytest.approx(whole, abs=1e-15)


def test_a_long_run_is_not_disturbed_by_the_blocks_it_is_worked_in() -> None:
    t = np.arange(10_000) / 48_000
    samples = np.sin(2 * np.pi * 997.0 * t)[:, None]
    out = rc_simulator(1e3, 1e-8).run(samples, 48_000)[2000:-100, 0]
    basis = np.column_stack([f(2 * np.pi * 997.0 * t[2000:-100]) for f in (np.sin, np.cos)])
    fit, residual, _, _ = np.linalg.lstsq(basis, out, rcond=None)
    assert math.sqrt(residual[0] / out.size) < 2e-5
    # SOURCE: |H| = 1 / sqrt(1 + (2 pi f RC)^2)
    assert math.hypot(*fit) == pytest.approx((1 + (2 * np.pi * 997.0 * 1e-5) ** 2) ** -0.5, rel=1e-4)


@pytest.mark.parametrize("oversample", [1, 2, 4, 8])
def test_the_output_of_a_plain_divider_is_in_time_with_its_input(oversample: int) -> None:
    divider = circuit(
        VoltageSource("V1", "in", "0", 0.0), Resistor("R1", "in", "out", 1e3), Resistor("R2", "out", "0", 1e3)
    )
    samples = np.sin(2 * np.pi * 0.35 * np.arange(500))[:, None]
    out = Simulator(divider, inputs=["V1"], outputs=["out"]).run(samples, 48_000, oversample=oversample)
    assert out.shape == samples.shape
    # two passes of a filter flat within 0.01 dB
    assert out[50:-50] == pytest.approx(0.5 * samples[50:-50], abs=0.5 * 0.0023)


def test_an_rl_rises_with_its_time_constant() -> None:
    # SOURCE: i = V/R (1 - exp(-t R/L)); 2 V, 100 ohm, 10 mH
    rl = circuit(
        VoltageSource("V1", "in", "0", 0.0), Resistor("R1", "in", "a", 100.0), Inductor("L1", "a", "0", 10e-3)
    )
    simulator = Simulator(rl, inputs=["V1"], outputs=["i(V1)", "a"])
    amps = simulator.settle(1e-4, [2.0])[0]
    assert -amps == pytest.approx(0.02 * (1 - math.exp(-1.0)), rel=1e-4)
    assert simulator.state().reactive[0] == pytest.approx(-amps, rel=1e-4)


def test_an_rlc_rings_at_its_frequency_and_with_its_decay() -> None:
    # SOURCE: v = 1 - exp(-a t)(cos w t + a/w sin w t), a = R/2L, w = sqrt(1/LC - a^2)
    rlc = circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "a", 100.0),
        Inductor("L1", "a", "b", 0.1),
        Capacitor("C1", "b", "0", 1e-6),
    )
    rate_hz = 192_000
    found = Simulator(rlc, inputs=["V1"], outputs=["b"]).run(np.ones((2000, 1)), rate_hz, oversample=1)[:, 0]
    t = (np.arange(2000) + 1) / rate_hz
    a = 500.0
    w = math.sqrt(1e7 - a * a)
    wanted = 1.0 - np.exp(-a * t) * (np.cos(w * t) + a / w * np.sin(w * t))
    assert found == pytest.approx(wanted, abs=2e-4)


def test_a_diode_behind_a_resistor_follows_lambert_s_function_at_every_sample() -> None:
    stage = circuit(
        VoltageSource("V1", "in", "0", 0.0), Resistor("R1", "in", "a", 1e3), diode("D1", "a", "0")
    )
    volts = 5.0 * np.sin(np.arange(400) / 9.0)
    found = Simulator(stage, inputs=["V1"], outputs=["a"]).run(volts[:, None], 48_000, oversample=1)[:, 0]
    forward = volts > 0.0  # in reverse SPICE replaces Shockley's curve by its own tail
    offset = volts[forward] + 1e-11
    wanted = offset - VT_27C * lambertw(1e-11 / VT_27C * np.exp(offset / VT_27C)).real
    assert found[forward] == pytest.approx(wanted, abs=5e-9)


def test_more_junctions_than_are_unrolled_give_the_same_answer() -> None:
    # SOURCE: sixteen equal diodes in series are one with n = 16
    nodes = ["a", *(f"m{i}" for i in range(15)), "0"]
    string = circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "a", 1e3),
        *(diode(f"D{i}", nodes[i], nodes[i + 1]) for i in range(16)),
    )
    single = circuit(
        VoltageSource("V1", "in", "0", 0.0), Resistor("R1", "in", "a", 1e3), diode("D1", "a", "0", n=16.0)
    )
    volts = (15.0 + 15.0 * np.sin(np.arange(200) / 9.0))[:, None]
    many = Simulator(string, inputs=["V1"], outputs=["a"]).run(volts, 48_000, oversample=1)
    one = Simulator(single, inputs=["V1"], outputs=["a"]).run(volts, 48_000, oversample=1)
    assert many == pytest.approx(one, abs=1e-6)


def test_a_junction_s_charge_is_the_current_that_flowed_into_it() -> None:
    # SOURCE: charge balance I t = Q(v) - Q(0), Q = CJ VJ (1 - (1 - v/VJ)^(1-M)) / (1 - M) in reverse (SPICE)
    charge = JunctionCharge(cj_farads=10e-12, vj_volts=0.7, m=0.4, fc=0.5)
    stage = circuit(CurrentSource("I1", "0", "k", 0.0), diode("D1", "0", "k", charge))
    simulator = Simulator(stage, inputs=["I1"], outputs=["k"])
    rate_hz = 1e6
    amps = 1e-6
    volts = simulator.run(np.full((40, 1), amps), rate_hz, oversample=1)[:, 0]
    coulombs = 10e-12 * 0.7 * (1 - (1 + volts / 0.7) ** 0.6) / 0.6
    elapsed = (np.arange(40) + 1) / rate_hz
    # the leakage of 1e-14 A and the node's 1e-12 S are all that is lost
    assert coulombs == pytest.approx(-amps * elapsed, rel=1e-4)


# --- changes


def two_tanks(ohms: float) -> Circuit:
    return circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "a", 1e12),
        Capacitor("C1", "a", "0", 3e-6),
        Resistor("Rk", "a", "b", ohms),
        Capacitor("C2", "b", "0", 1e-6),
    )


def test_a_contact_that_closes_between_two_capacitors_conserves_their_charge() -> None:
    simulator = Simulator(two_tanks(1e12), inputs=["V1"], outputs=["a", "b"])
    state = simulator.state()
    simulator.restore(replace(state, reactive=np.array([4.0, 0.0])))
    simulator.change(two_tanks(0.05))
    a, b = simulator.settle(1e-3, [0.0])
    # SOURCE: 3 uF at 4 V shared with 1 uF is 3 V
    assert (a, b) == (pytest.approx(3.0, rel=1e-7), pytest.approx(3.0, rel=1e-7))
    for _ in range(50):
        simulator.change(two_tanks(1e12))
        simulator.step(1e-9, [0.0])
        simulator.change(two_tanks(0.05))
        a, b = simulator.step(1e-9, [0.0])
    assert 3e-6 * a + 1e-6 * b == pytest.approx(12e-6, rel=1e-7)


def test_a_change_in_the_middle_of_a_run_does_not_make_a_capacitor_jump() -> None:
    simulator = rc_simulator(1e3, 1e-6)
    before = simulator.run(np.ones((48, 1)), 48_000, oversample=1)[-1, 0]
    simulator.change(rc(100e3, 1e-6))
    after = simulator.run(np.ones((48, 1)), 48_000, oversample=1)[:, 0]
    closed = 1.0 - (1.0 - before) * np.exp(-(np.arange(48) + 1) / 48_000 / 0.1)
    assert after == pytest.approx(closed, abs=1e-6)


def test_a_change_of_wiring_is_refused_and_named() -> None:
    simulator = rc_simulator()
    other = circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "out", 1e3),
        Capacitor("C1", "in", "0", 1e-6),
    )
    with pytest.raises(CircuitError, match="C1"):
        simulator.change(other)


def test_unknown_inputs_and_outputs_are_named_with_the_nearest_that_there_are() -> None:
    with pytest.raises(UnknownName, match=r"V2.*V1"):
        Simulator(rc(), inputs=["V2"], outputs=["out"])
    with pytest.raises(UnknownName, match=r"ouu.*out"):
        Simulator(rc(), inputs=["V1"], outputs=["ouu"])


# --- settling


def test_an_rc_is_right_all_along_its_settling() -> None:
    simulator = rc_simulator(1e3, 1e-6)
    elapsed = 0.0
    for part in (1e-6, 1e-4, 5e-4, 1e-3, 1e-3, 5e-3):
        elapsed += part
        out = simulator.settle(part, [9.0])[0]
        assert out == pytest.approx(9.0 * (1 - math.exp(-elapsed / 1e-3)), abs=1e-4), elapsed


def test_a_pedal_is_right_all_along_its_settling_after_power_on() -> None:
    peat = elaborate(read_netlist(PEAT))
    nodes = ["q1c", "q2c", "q2e", "jack_out"]
    fine = Simulator(peat, inputs=["Vsup"], outputs=nodes)
    coarse = Simulator(peat, inputs=["Vsup"], outputs=nodes)
    done = 0.0
    for until in (0.001, 0.004, 0.02, 0.1):
        steps = round((until - done) * 500_000)
        by_steps = fine.run(np.full((steps, 1), -9.0), 500_000, oversample=1)[-1]
        assert coarse.settle(until - done, [-9.0]) == pytest.approx(by_steps, abs=3e-4), until
        done = until


def test_settling_ends_at_the_operating_point() -> None:
    peat = elaborate(read_netlist(PEAT))
    settled = Simulator(peat, inputs=["Vsup"], outputs=["q1c", "q2c", "i(Vsup)"])
    at_rest = Simulator(peat, inputs=["Vsup"], outputs=["q1c", "q2c", "i(Vsup)"])
    at_rest.start_at_operating_point()
    assert settled.settle(60.0, [-9.0]) == pytest.approx(at_rest.step(1e-3, [-9.0]), abs=2e-6)


def test_a_longest_step_can_be_asked_for() -> None:
    simulator = rc_simulator(1e3, 1e-6)
    assert simulator.settle(2e-3, [1.0], max_step=1e-5)[0] == pytest.approx(1 - math.exp(-2.0), abs=1e-5)


# --- what cannot be solved


def test_an_enormous_jump_into_a_clipper_is_solved() -> None:
    # SOURCE: closed form as above; 1 mohm and 60 V put 59 kA through the diode, where Newton's start is far away
    stage = circuit(
        VoltageSource("V1", "in", "0", 0.0),
        Resistor("R1", "in", "a", 1e-3),
        diode("D1", "a", "0"),
        diode("D2", "0", "a"),
    )
    simulator = Simulator(stage, inputs=["V1"], outputs=["a"])
    for volts in (60.0, -60.0, 0.0, 60.0):
        found = simulator.step(1e-6, [volts])[0]
        wanted = _clipped(abs(volts)) * np.sign(volts)
        assert found == pytest.approx(wanted, abs=1e-7)


def _clipped(volts: float) -> float:
    if volts == 0.0:
        return 0.0
    low, high = 0.0, 2.0
    for _ in range(80):
        middle = 0.5 * (low + high)
        if (volts - middle) / 1e-3 > 1e-14 * math.expm1(middle / VT_27C):
            low = middle
        else:
            high = middle
    return low


def test_a_step_without_a_solution_is_reported_and_never_answered() -> None:
    # a negative conductance whose line never meets the diode's curve
    impossible = circuit(
        CurrentSource("I1", "a", "0", 0.0),
        Vccs("G1", "0", "a", "a", "0", 1e-3),
        diode("D1", "a", "0"),
    )
    simulator = Simulator(impossible, inputs=["I1"], outputs=["a"])
    with pytest.raises(NoConvergence):
        simulator.step(1e-3, [1.0])
    with pytest.raises(NoConvergence):
        simulator.run(np.ones((10, 1)), 48_000)
    with pytest.raises(NoConvergence):
        simulator.settle(1e-3, [1.0])


@pytest.mark.parametrize("samples", [np.zeros((5, 2)), np.zeros((0, 1)), np.full((5, 1), np.nan)])
def test_samples_of_the_wrong_shape_or_not_finite_are_refused(samples: FloatArray) -> None:
    with pytest.raises(ValueError, match="samples"):
        rc_simulator().run(samples, 48_000)
