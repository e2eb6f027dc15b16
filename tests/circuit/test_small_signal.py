"""Small-signal response against closed forms and ngspice."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from drivers.circuit.errors import NumericBreakdown, UnknownName
from drivers.circuit.netlist import elaborate, parse_netlist, read_netlist
from drivers.circuit.operating_point import solve_operating_point
from drivers.circuit.small_signal import impedance, linearise, response

DECKS = Path(__file__).parent / "decks"
PEAT = Path(__file__).parents[2] / "limits" / "peat" / "circuit.cir"
HZ = np.geomspace(20.0, 20e3, 31)


def linear_of(text: str) -> Any:
    return linearise(elaborate(parse_netlist(text)), {})


def test_an_rc_low_pass_has_its_closed_form() -> None:
    found = response(linear_of("t\nV1 in 0 AC 1\nR1 in out 10k\nC1 out 0 10n\n"), "out", HZ)
    assert found == pytest.approx(1.0 / (1.0 + 2j * np.pi * HZ * 10e3 * 10e-9), rel=1e-12)


def test_an_rl_high_pass_has_its_closed_form() -> None:
    found = response(linear_of("t\nV1 in 0 AC 1\nR1 in out 1k\nL1 out 0 0.1\n"), "out", HZ)
    s = 2j * np.pi * HZ
    assert found == pytest.approx(s * 0.1 / (1e3 + s * 0.1), rel=1e-12)


def test_a_series_rlc_resonates_where_and_as_high_as_its_closed_form() -> None:
    # SOURCE: at f0 = 1/(2 pi sqrt(LC)) the capacitor of a series RLC has Q = sqrt(L/C)/R times the source,
    # at -90°
    henries, farads, ohms = 0.1, 100e-9, 50.0
    linear = linear_of(f"t\nV1 in 0 AC 1\nR1 in a {ohms}\nL1 a out {henries}\nC1 out 0 {farads}\n")
    f0 = 1.0 / (2.0 * math.pi * math.sqrt(henries * farads))
    assert response(linear, "out", f0)[0] == pytest.approx(-1j * math.sqrt(henries / farads) / ohms, rel=1e-9)


def test_phase_and_amplitude_of_the_source_are_heeded() -> None:
    found = response(linear_of("t\nV1 in 0 AC 2 90\nR1 in out 1k\nR2 out 0 1k\n"), "out", 1000.0)
    assert found[0] == pytest.approx(1j, rel=1e-12)


def test_a_current_source_pushes_from_its_first_node_through_itself_to_its_second() -> None:
    found = response(linear_of("t\nI1 0 a AC 1m\nR1 a 0 1k\n"), "a", 1000.0)
    assert found[0] == pytest.approx(1.0, rel=1e-12)


def test_controlled_sources_have_the_signs_of_spice() -> None:
    # SOURCE: SPICE3 user's manual, sections 3.2.2.1 (G: current from n+ through the source to n-) and
    # 3.2.2.2 (E)
    linear = linear_of("t\nV1 in 0 AC 1\nR1 in 0 1\nE1 e 0 0 in 3\nR2 e 0 1\nG1 0 g in 0 2m\nR3 g 0 1k\n")
    assert response(linear, "e", 1.0)[0] == pytest.approx(-3.0)
    assert response(linear, "g", 1.0)[0] == pytest.approx(2.0)


def test_the_impedance_between_two_nodes_is_that_of_the_network_with_sources_at_rest() -> None:
    linear = linear_of("t\nV1 in 0 DC 5 AC 1\nR1 in a 3k\nR2 a b 6k\nR3 b 0 1k\nC1 a b 1n\n")
    s = 2j * np.pi * HZ
    across = 1.0 / (1.0 / 6e3 + s * 1e-9)
    outer = 4e3
    assert impedance(linear, ("a", "b"), HZ) == pytest.approx(across * outer / (across + outer), rel=1e-10)
    assert impedance(linear, "a", HZ) == pytest.approx(3e3 * (across + 1e3) / (across + 4e3), rel=1e-10)


def test_a_pair_of_nodes_gives_their_difference_and_ground_gives_nothing() -> None:
    linear = linear_of("t\nV1 in 0 AC 1\nR1 in out 1k\nR2 out 0 3k\n")
    assert response(linear, ("in", "out"), 100.0)[0] == pytest.approx(0.25)
    assert response(linear, "0", 100.0)[0] == 0.0


def test_one_source_alone_can_drive_with_one_volt() -> None:
    linear = linear_of("t\nV1 a 0 AC 5\nV2 b 0 DC 9\nR1 a x 1k\nR2 b x 1k\n")
    assert response(linear, "x", 100.0, source="v2")[0] == pytest.approx(0.5)


def test_a_degenerate_stage_has_the_gain_of_the_textbook() -> None:
    # SOURCE: common emitter without feedback: gain = -gm Rc with gm = Ic/VT; no Early effect, base driven
    # stiffly
    circuit = elaborate(
        parse_netlist(
            "t\nVcc v 0 10\nVb b 0 DC 0.7742305 AC 1\nRc v c 5k\nQ1 c b 0 N\n.model N NPN(IS=1e-16 BF=100)\n"
        )
    )
    op = solve_operating_point(circuit)
    amps = (10.0 - op.node_volts["c"]) / 5e3
    assert amps == pytest.approx(1e-3, rel=1e-5)
    gain = response(linearise(circuit, op.node_volts), "c", 1000.0)[0]
    # SOURCE: gm(1 mA, 27 °C) = 38.66240 mS, computed from SI constants
    assert gain.real == pytest.approx(-38.66240e-3 * 5e3, rel=2e-5)


def test_an_unknown_node_or_source_is_answered_with_the_nearest() -> None:
    linear = linear_of("t\nVin in 0 AC 1\nR1 in output 1k\nR2 output 0 1k\n")
    with pytest.raises(UnknownName, match=r"no node 'outptu' .nearest: output"):
        response(linear, "outptu", 1.0)
    with pytest.raises(UnknownName, match=r"no source 'Vinn' .nearest: Vin"):
        response(linear, "output", 1.0, source="Vinn")


def test_a_circuit_without_an_answer_says_so() -> None:
    linear = linear_of(
        "t\nV1 a 0 AC 1\nR1 a 0 1\nE1 a 0 a 0 1\n".replace("E1 a 0", "E1 b c") + "R2 b 0 1\nR3 c 0 1\n"
    )
    assert response(linear, "b", 1.0)[0] == pytest.approx(0.5)
    singular = linear_of("t\nV1 a 0 AC 1\nR1 a b 1\nR2 b 0 1\nG1 0 b b 0 2\n")
    with pytest.raises(NumericBreakdown):
        response(singular, "b", 1.0)


@pytest.mark.ngspice
@pytest.mark.parametrize("celsius", [5.0, 27.0, 50.0])
@pytest.mark.parametrize(
    "deck", [*sorted(DECKS.glob("*.cir")), PEAT], ids=lambda deck: f"{deck.parent.name}-{deck.stem}"
)
def test_every_node_responds_within_a_hundredth_of_a_decibel_of_ngspice(
    deck: Path, celsius: float, ngspice: Any
) -> None:
    circuit = elaborate(read_netlist(deck), celsius=celsius)
    linear = linearise(circuit, solve_operating_point(circuit).node_volts)
    table = ngspice.ac_decade(deck, 3, 20.0, 1e6, celsius=celsius)
    compared = 0
    for node in circuit.nodes:
        if "#" in node or np.max(np.abs(table.of(node))) < 1e-9:
            continue
        ratio = response(linear, node, table.scale) / table.of(node)
        # SOURCE: ngspice 39 .ac; the bar is 0.01 dB. What is left comes from its older k and q (VT differs
        # by 3e-7)
        assert np.max(np.abs(20.0 * np.log10(np.abs(ratio)))) < 3e-3, node
        assert np.max(np.abs(np.angle(ratio))) < 3e-4, node
        compared += 1
    assert compared >= 3
