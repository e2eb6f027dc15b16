"""Part faults in plain words."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from ngspice_bench import spell_out

from drivers.circuit.elements import Bjt, Circuit, Resistor
from drivers.circuit.errors import BadPartFault
from drivers.circuit.faults import apply_faults, parse_fault
from drivers.circuit.netlist import Netlist, elaborate, parse_netlist, read_netlist
from drivers.circuit.operating_point import solve_operating_point
from drivers.circuit.tolerance import Spread, draw_unit

DECKS = Path(__file__).parent / "decks"
PAIR = DECKS / "germanium_pair.cir"

# The faults of a two-transistor feedback pair as a workbench meets them, and the words that plant them.
FAULTS_OF_A_FEEDBACK_PAIR = [
    ("Q1 collector resistor ten times too small", ["value Rc1 /10"]),
    ("Q1 collector resistor open", ["open Rc1"]),
    ("feedback resistor ten times too small", ["value Rfb 10k"]),
    ("feedback resistor open (cold joint)", ["open Rfb"]),
    ("Q2 collector resistor ten times too small", ["value Rc2 820"]),
    ("output tap resistor ten times too large", ["value Rtap 4k7"]),
    ("tap resistor and Q2 collector resistor swapped", ["swap Rtap Rc2"]),
    ("transistor gains in the wrong order", ["swap Q1 Q2"]),
    ("Q1 collector and emitter swapped", ["swap pins Q1 c e"]),
    ("Q2 collector and emitter swapped", ["swap pins Q2 collector emitter"]),
    ("Q1 base and collector swapped", ["swap pins Q1 b c"]),
    ("Q1 leaks five times too much", ["leaky Q1 x5"]),
    ("Q2 leaks five times too much", ["leaky Q2 x5"]),
    ("Q1 leaks ten times too much", ["leaky Q1 x10"]),
    ("Q1 gain too low (about 30)", ["gain Q1 30"]),
    ("silicon transistor in Q1", ["wrong part Q1 silicon pnp"]),
    ("silicon transistors in both", ["wrong part Q1 silicon pnp", "wrong part Q2 silicon pnp"]),
    ("Q1 base open", ["lift Q1 b"]),
    ("Q1 emitter ground missing", ["lift Q1 e"]),
    ("Q2 emitter open", ["lift Q2 emitter"]),
    ("solder bridge Q1 base-emitter", ["bridge b1 ground"]),
    ("solder bridge Q1 base-collector", ["bridge b1 c1"]),
    ("solder bridge Q2 collector-emitter", ["bridge c2 e2"]),
    ("solder bridge output tap to supply", ["bridge tap supply"]),
    ("output jack short", ["bridge out 0"]),
    ("emitter bypass capacitor open", ["open Cbyp"]),
    ("emitter bypass capacitor a tenth", ["value Cbyp /10"]),
    ("emitter bypass capacitor short", ["short Cbyp"]),
    ("emitter bypass capacitor reversed (leaks)", ["reversed Cbyp"]),
    ("input capacitor open", ["open Cin"]),
    ("input capacitor a hundredth", ["value Cin /100"]),
    ("input capacitor shorted", ["short Cin"]),
    ("input capacitor reversed (leaks)", ["leaky Cin 100k"]),
    ("output capacitor open", ["open Cout"]),
    ("output capacitor a tenth", ["value Cout 1n"]),
    ("output capacitor ten times", ["value Cout x10"]),
    ("volume pot wired backwards", ["backwards level"]),
    ("fuzz pot wired backwards", ["backwards gain"]),
    ("fuzz pot ten times too large", ["value gain x10"]),
    ("volume pot a tenth", ["value level_ohms /10"]),
    ("volume ground lug missing", ["lift Rlevel_b"]),
    ("supply electrolytic reversed (leaks)", ["leaky Cres 470"]),
    ("supply reservoir missing", ["open Cres"]),
    ("wrong-polarity transistor in Q1", ["wrong part Q1 germanium npn"]),
]


def planted(*words: str, deck: Path = PAIR) -> Netlist:
    return apply_faults(read_netlist(deck), [parse_fault(said) for said in words])


def ohms(circuit: Circuit, name: str) -> float:
    return next(e.ohms for e in circuit.elements if isinstance(e, Resistor) and e.name == name)


def volts(netlist: Netlist) -> dict[str, float]:
    return dict(solve_operating_point(elaborate(netlist, celsius=25.0)).node_volts)


@pytest.mark.parametrize(
    ("fault", "words"), FAULTS_OF_A_FEEDBACK_PAIR, ids=[f for f, _ in FAULTS_OF_A_FEEDBACK_PAIR]
)
def test_every_fault_of_a_feedback_pair_can_be_said_and_leaves_a_circuit_that_solves(
    fault: str, words: list[str]
) -> None:
    good = elaborate(read_netlist(PAIR))
    bad = elaborate(planted(*words))
    assert good.elements != bad.elements
    solution = solve_operating_point(bad).node_volts
    assert all(abs(value) < 9.5 for value in solution.values())


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("fault", "words"), FAULTS_OF_A_FEEDBACK_PAIR, ids=[f for f, _ in FAULTS_OF_A_FEEDBACK_PAIR]
)
def test_a_unit_with_a_fault_has_the_node_voltages_that_ngspice_gives_it(
    fault: str, words: list[str], ngspice: Any, tmp_path: Path
) -> None:
    spreads = [Spread("R*", "value", "uniform", 0.05), Spread("Q*", "isc", "lognormal", 0.3)]
    unit = draw_unit(read_netlist(PAIR), spreads, fault)
    netlist = apply_faults(unit, [parse_fault(said) for said in words])
    deck = tmp_path / "unit.cir"
    deck.write_text(spell_out(netlist), encoding="utf-8")
    wanted = ngspice.op(deck, celsius=30.0)
    found = solve_operating_point(elaborate(netlist, celsius=30.0)).node_volts
    for node in read_netlist(PAIR).nodes:
        # SOURCE: ngspice 39 .op; the bar is 0.1 mV
        assert found[node] == pytest.approx(wanted[node], abs=1e-4), node


# How the faults show at direct current: what the trade knows about such a pair, from the supply at -9 V.
def test_an_open_collector_resistor_leaves_the_second_transistor_off() -> None:
    found = volts(planted("open Rc1"))
    assert found["c2"] == pytest.approx(-9.0, abs=0.1)


def test_an_open_feedback_resistor_saturates_the_second_transistor() -> None:
    found = volts(planted("open Rfb"))
    assert abs(found["c2"] - found["e2"]) < 0.15


def test_a_second_emitter_that_is_open_puts_the_first_collector_at_the_rail() -> None:
    leaks = 2e-6 * 33e3 * 8  # what the leaky transistors themselves pull through the resistor
    assert volts(planted("lift Q2 e"))["c1"] == pytest.approx(-9.0, abs=leaks)


def test_a_bridge_puts_both_nodes_at_one_voltage() -> None:
    found = volts(planted("bridge c2 e2"))
    assert found["c2"] == pytest.approx(found["e2"], abs=1e-3)
    assert volts(planted("bridge b1 ground"))["b1"] == pytest.approx(0.0, abs=1e-4)


def test_a_silicon_transistor_shows_by_its_base_voltage() -> None:
    assert volts(read_netlist(PAIR))["b1"] > -0.2
    assert volts(planted("wrong part Q1 silicon pnp"))["b1"] == pytest.approx(-0.6, abs=0.08)


def test_a_transistor_that_leaks_more_biases_the_pair_colder() -> None:
    good, leaky = volts(read_netlist(PAIR)), volts(planted("leaky Q1 x5"))
    assert leaky["c2"] < good["c2"] - 0.5


def test_a_pot_wired_backwards_is_its_own_mirror_image() -> None:
    backwards = elaborate(planted("backwards gain"), params={"gain": 0.2})
    right = elaborate(read_netlist(PAIR), params={"gain": 0.8})
    assert ohms(backwards, "Rgain_a") == pytest.approx(ohms(right, "Rgain_a"))
    assert ohms(backwards, "Rgain_b") == pytest.approx(ohms(right, "Rgain_b"))


def test_a_pot_of_the_wrong_value_keeps_its_wiper_where_it_is() -> None:
    ten_times = elaborate(planted("value level x10"), params={"level": 0.3})
    total = ohms(ten_times, "Rlevel_a") + ohms(ten_times, "Rlevel_b")
    assert total == pytest.approx(10 * 250002.0)
    by_value = elaborate(planted("value gain 10k"), params={"gain": 0.3})
    assert ohms(by_value, "Rgain_a") + ohms(by_value, "Rgain_b") == pytest.approx(10e3)


@pytest.mark.parametrize(
    ("said", "value"),
    [
        # SOURCE: IEC 60062 letter codes: R, K, M stand for the decimal point of ohms, kilohms, megohms
        ("4k7", 4700.0),
        ("4K7", 4700.0),
        ("4R7", 4.7),
        ("1M5", 1.5e6),
        ("1M", 1e6),
        ("2.2Meg", 2.2e6),
        ("470", 470.0),
        ("4.7k", 4700.0),
    ],
)
def test_values_are_understood_as_they_stand_on_parts(said: str, value: float) -> None:
    assert ohms(elaborate(planted(f"value Rc1 {said}")), "Rc1") == pytest.approx(value)


def test_swapped_parts_keep_their_places_and_exchange_what_they_are() -> None:
    netlist = planted("swap Q1 Q2")
    assert (netlist.part("Q1").model, netlist.part("Q2").model) == ("gb", "ga")
    assert netlist.part("Q1").nodes == read_netlist(PAIR).part("Q1").nodes


def test_faults_can_be_stacked_on_one_part() -> None:
    circuit = elaborate(planted("leaky Q1 x5", "gain Q1 30", "swap pins Q1 b c", "lift Q1 e"))
    first = next(e for e in circuit.elements if isinstance(e, Bjt))
    assert first.law.bf == pytest.approx(30.0)
    assert first.law.isc_amps == pytest.approx(10e-6)


def test_diodes_can_be_open_shorted_reversed_or_of_the_wrong_kind() -> None:
    deck = DECKS / "diode_clipper.cir"
    good = volts(read_netlist(deck))
    assert volts(planted("short D1", deck=deck))["a"] == pytest.approx(0.0, abs=1e-4)
    assert volts(planted("open D1", deck=deck))["a"] > good["a"] + 1e-6
    assert planted("reversed D1", deck=deck).part("D1").nodes == ("0", "a")
    assert volts(planted("wrong part D1 germanium diode", deck=deck))["a"] < good["a"] - 1e-3
    assert volts(planted("wrong part D1 red led", deck=deck))["a"] > good["a"] + 1e-6


def test_a_silicon_transistor_without_written_leakage_can_leak_too() -> None:
    netlist = parse_netlist("t\nV1 c 0 5\nR1 c b 1Meg\nQ1 c b 0 N\n.model N NPN(IS=1e-14 BR=2)\n")
    leaky = apply_faults(netlist, [parse_fault("leaky Q1 x1000")])
    law = next(e for e in elaborate(leaky).elements if isinstance(e, Bjt)).law
    assert law.isc_amps == pytest.approx(999 * 0.5e-14)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (
            "break R3",
            "'break R3': not a fault, did you mean 'open R3'. .accepted: swap pins Q1 b c; wrong part",
        ),
        ("", "not a fault"),
        ("R3 open", "did you mean 'open R3'"),
        ("missing R3", "did you mean 'open R3'"),
        ("open", "too short: write it like 'open R3'"),
        ("open R1 R2", "too long: write it like 'open R3'"),
        ("value Rc1", "the amount is missing: write it like 'value R3 4k7"),
        ("leaky Q1", "the amount is missing"),
        ("value Rc1 lots", "'lots' is not an amount"),
        ("value Rc1 0", "greater than zero"),
        ("value Rc1 x-2", "greater than zero"),
        ("swap pins Q1 b", "too short: write it like 'swap pins Q1 b c'"),
    ],
)
def test_words_that_are_no_fault_are_answered_with_what_is_accepted(words: str, said: str) -> None:
    with pytest.raises(BadPartFault, match=said):
        parse_fault(words)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ("open Rc9", "no part 'Rc9' .nearest: Rc"),
        ("short Q1", "only R, L, C and D"),
        ("open Q1", "lift Q1 c"),
        ("open Vsup", "only R, L, C and D can be open"),
        ("swap Rc1 Cin", "two different parts of one kind"),
        ("swap Rc1 rc1", "two different parts of one kind"),
        ("swap pins Rc1 b c", "'Rc1' is no transistor"),
        ("swap pins Q1 b x", "no pin 'x' .accepted: c, b, e"),
        ("swap pins Q1 b base", "the same pin"),
        ("wrong part Q1 selenium", "no model 'selenium' .accepted: ga, gb, silicon npn"),
        ("wrong part Q1 silicon diode", "does not fit"),
        ("wrong part R1 silicon npn", "no part 'R1'"),
        ("leaky Cin x5", "in ohms"),
        ("leaky Q1 100k", "as a factor"),
        ("gain Rc1 30", "is no transistor"),
        ("backwards volume", "no pot 'volume' .known: gain, gain_ohms, level, level_ohms"),
        ("bridge c2 c9", "no node 'c9' .nearest: c"),
        ("bridge c2 C2", "the same node"),
        ("lift Q1", "say which pin"),
        ("lift Rc1 b", "only a transistor's pin"),
        ("value tone x10", "no part, pot or parameter 'tone'"),
        ("reversed Rc1", "only D and C"),
    ],
)
def test_a_fault_that_the_netlist_cannot_have_is_one_line_with_the_nearest_names(
    words: str, said: str
) -> None:
    with pytest.raises(BadPartFault, match=said) as caught:
        planted(words)
    assert str(caught.value).startswith(f"'{words}': ")
    assert "\n" not in str(caught.value)


def test_the_netlist_that_faults_are_planted_in_is_left_alone() -> None:
    netlist = read_netlist(PAIR)
    before = repr(netlist)
    for _, words in FAULTS_OF_A_FEEDBACK_PAIR:
        apply_faults(netlist, [parse_fault(said) for said in words])
    assert repr(netlist) == before
