"""Reading netlists and resolving them into circuits."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from drivers.circuit.elements import (
    Bjt,
    Capacitor,
    CurrentSource,
    Diode,
    Inductor,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from drivers.circuit.errors import BadNetlist, CircuitError, UnknownName
from drivers.circuit.netlist import elaborate, parse_netlist, read_netlist
from drivers.circuit.operating_point import solve_operating_point

DECKS = Path(__file__).parent / "decks"
PEAT = Path(__file__).parents[2] / "limits" / "peat" / "circuit.cir"
ODD_PIECES = [
    "0",
    "-1",
    "1e999",
    "nan",
    "1e-300",
    "{",
    "}",
    "=",
    "(",
    "+",
    "\n+",
    "\n.param a={a}",
    ".end\n",
    "9" * 40,
]


def faults_of(text: str) -> list[str]:
    with pytest.raises(BadNetlist) as caught:
        elaborate(parse_netlist(text, "deck.cir"))
    return str(caught.value).splitlines()


def test_every_kind_of_part_is_read_with_its_signs_and_scale_factors() -> None:
    circuit = elaborate(
        parse_netlist(
            """every kind
R1 a 0 4.7k
C1 a 0 33u
L1 a 0 100mH
V1 s 0 DC -9 AC 2 90
R2 s a 1
I1 0 a 1m
E1 e 0 a s 10
R3 e 0 1
G1 e 0 a 0 2m
D1 a 0 DX
Q1 a e 0 NX
.model DX D(IS=1f)
.model NX NPN(IS=2f)
.end
"""
        )
    )
    kinds = (
        Resistor("R1", "a", "0", 4700.0),
        Capacitor("C1", "a", "0", 33e-6),
        Inductor("L1", "a", "0", 0.1),
        VoltageSource("V1", "s", "0", -9.0, 2.0, 90.0),
        Resistor("R2", "s", "a", 1.0),
        CurrentSource("I1", "0", "a", 1e-3),
        Vcvs("E1", "e", "0", "a", "s", 10.0),
        Resistor("R3", "e", "0", 1.0),
        Vccs("G1", "e", "0", "a", "0", 2e-3),
    )
    assert circuit.elements[:9] == kinds
    diode, transistor = circuit.elements[9:]
    assert isinstance(diode, Diode) and diode.law.is_amps == pytest.approx(1e-15)
    assert isinstance(transistor, Bjt) and transistor.law.polarity == 1
    assert (transistor.collector, transistor.base, transistor.emitter) == ("a", "e", "0")
    assert circuit.title == "every kind"
    assert circuit.nodes == ("a", "s", "e")


def test_the_first_line_is_a_title_even_if_it_looks_like_a_part() -> None:
    netlist = parse_netlist("R9 a 0 0\nR1 a 0 1\nR2 a 0 1\n")
    assert netlist.title == "R9 a 0 0"
    assert [part.name for part in netlist.parts] == ["R1", "R2"]


def test_comments_continuations_case_and_ground_by_name_are_understood() -> None:
    netlist = parse_netlist(
        """title
* a comment
   * an indented comment
r1 A gnd 1K ; a comment
R2 a GND $ a comment
+ 2k // another
R3 a 0
* between
+ {2*X}
.PARAM x = 1.5k
.END
this is not read
"""
    )
    circuit = elaborate(netlist)
    assert [(e.name, e.a, e.b, e.ohms) for e in circuit.elements if isinstance(e, Resistor)] == [
        ("r1", "a", "0", 1000.0),
        ("R2", "a", "0", 2000.0),
        ("R3", "a", "0", 3000.0),
    ]


def test_parameters_may_stand_in_any_order_and_can_be_overridden() -> None:
    netlist = parse_netlist(
        "t\nR1 a 0 {total}\nR2 a 0 'half*1'\n.param total = half*2 half={base/2}\n.param base=10k\n"
    )
    ohms = [e.ohms for e in elaborate(netlist).elements if isinstance(e, Resistor)]
    assert ohms == [10e3, 5e3]
    ohms = [e.ohms for e in elaborate(netlist, params={"BASE": 4.0}).elements if isinstance(e, Resistor)]
    assert ohms == [4.0, 2.0]
    with pytest.raises(UnknownName, match=r"no parameter 'bass'.*nearest: base"):
        elaborate(netlist, params={"bass": 1.0})


def test_a_source_keeps_dc_and_ac_and_its_waveform_is_noted() -> None:
    netlist = parse_netlist(
        "t\nV1 a 0 SIN(0.5 1 1k) AC 2\nV2 b 0 3\nV3 c 0 DC 1 PULSE(0 5 0 1n 1n 1m 2m)\nV4 d 0 AC\n"
        "V5 e 0 PWL(0 7 1 8)\n"
        "R1 a 0 1\nR2 b 0 1\nR3 c 0 1\nR4 d 0 1\nR5 e 0 1\n",
        "f.cir",
    )
    sources = [e for e in elaborate(netlist).elements if isinstance(e, VoltageSource)]
    assert [(s.dc_volts, s.ac_volts) for s in sources] == [
        (0.5, 2.0),
        (3.0, 0.0),
        (1.0, 0.0),
        (0.0, 1.0),
        (7.0, 0.0),
    ]
    assert [note.split(":")[1] for note in netlist.notes] == ["2", "4", "6"]
    assert "SIN waveform passed over" in netlist.notes[0]


def test_cards_that_do_not_change_the_circuit_are_passed_over_with_a_note() -> None:
    netlist = parse_netlist(
        """t
R1 a 0 1
R2 a 0 1
.options reltol=1e-6 method=gear
.ac dec 10 20 20k
.tran 1u 1m
.control
run
quit
.endc
.print v(a)
.end
""",
        "f.cir",
    )
    assert len(netlist.parts) == 2
    assert [note.split(" ", 1)[0] for note in netlist.notes] == [
        "f.cir:4:",
        "f.cir:5:",
        "f.cir:6:",
        "f.cir:7:",
        "f.cir:11:",
    ]


def test_options_that_change_the_answers_are_heeded() -> None:
    netlist = parse_netlist("t\nR1 a 0 1\nR2 a 0 1\n.options temp=40 gmin=1e-10 tnom=25 reltol=1u\n")
    circuit = elaborate(netlist)
    assert circuit.celsius == 40.0
    assert circuit.gmin_siemens == 1e-10
    assert netlist.tnom_celsius == "25"
    assert elaborate(netlist, celsius=10.0).celsius == 10.0


def test_series_resistances_of_devices_become_resistors_on_inner_nodes_divided_by_the_area() -> None:
    circuit = elaborate(
        parse_netlist(
            "t\nV1 c 0 1\nQ1 c b 0 N 2\nR1 c b 1\nD1 b 0 D\n.model N NPN(RB=10 RE=2 RC=4)\n.model D D(RS=3)\n"
        )
    )
    resistors = {e.name: (e.a, e.b, e.ohms) for e in circuit.elements if isinstance(e, Resistor)}
    assert resistors["Q1#rb"] == ("b", "q1#base", 5.0)
    assert resistors["Q1#re"] == ("0", "q1#emitter", 1.0)
    assert resistors["Q1#rc"] == ("c", "q1#collector", 2.0)
    assert resistors["D1#rs"] == ("b", "d1#anode", 3.0)


def test_all_faults_of_a_file_are_reported_together_each_with_its_line() -> None:
    lines = faults_of(
        """ten faults
R1 a 0 0
R2 a 0 -5
X1 a b sub
Q1 a b 0 NOSUCH
C1 a 0 {cc}
R1 a 0 5
.model N NPN(BF=100 XTF=2 FOO=1)
.ic v(a)=1
D1 a 0 N
.foo
J1 a b c
R7 a 0 1k tc=0.1
V2 a 0 WOBBLE 3
R8 a
R9 a 0 4k7
"""
    )
    assert [int(line.split(":")[1]) for line in lines] == [
        2,
        3,
        4,
        5,
        6,
        7,
        8,
        8,
        9,
        10,
        11,
        12,
        13,
        14,
        15,
        16,
    ]
    wanted = [
        "zero resistor",
        "negative resistor",
        "unknown element 'X1' (accepted: R C L V I E G D Q)",
        "missing .model 'nosuch'",
        "no parameter 'cc'",
        "stands twice (first in line 2)",
        "XTF=2 is not modelled",
        "unknown parameter FOO",
        "initial conditions",
        "is a NPN, accepted: D",
        "unknown card '.foo'",
        "unknown element 'J1'",
        "'tc = 0.1' is not accepted",
        "'WOBBLE' is not accepted",
        "needs 2 nodes",
        "'4k7' is not a number",
    ]
    for line, words in zip(lines, wanted, strict=True):
        assert line.startswith("deck.cir:")
        assert words in line


@pytest.mark.parametrize(
    ("cards", "line", "words"),
    [
        (
            "R1 a 0 1\nR2 a 0 1\nC1 a x 1u\nC2 x 0 1u",
            4,
            "node 'x' floats: it has no DC path to node 0 (touched by C1, C2)",
        ),
        ("R1 a 0 1\nR2 a b 1", 3, "node 'b' floats: only R2 touches it, with one terminal"),
        ("R1 a b 1\nR2 a b 1", 0, "no element touches node 0"),
        ("I1 0 a 1\nC1 a 0 1u\nR1 b 0 1\nR2 b 0 1", 2, "node 'a' floats"),
        ("V1 a 0 1\nV2 a 0 1\nR1 a 0 1", 3, "'V2' closes a loop of voltage sources"),
        ("V1 a 0 1\nL1 a b 1\nL2 b 0 1\nR1 b 0 1", 2, "'V1' closes a loop of voltage sources (or inductors)"),
        ("R1 a 0 {b}\nR2 a 0 1\n.param a={b} b={a}", 4, "circle: a, b"),
        ("R1 a 0 1\nR2 a 0 1\n.param q={zz}", 4, "no parameter 'zz'"),
        ("R1 a 0 1\nR2 a 0 1\n.param q=1\n.param q=2", 5, "given twice (first in line 4)"),
        ("R1 a 0 1\nR2 a 0 1\n.temp -300", 0, "below absolute zero"),
        ("R1 a 0 1\nR2 a 0 1\nL1 a 0 0", 4, "zero inductor"),
        ("R1 a 0 1\nD1 a 0 D\n.model D D(BV=50)", 4, "BV=50 is not modelled (accepted: 0, or leave it out)"),
        ("R1 a 0 1\nD1 a 0 D\n.model D D(IS=0)", 4, "IS=0 must be greater than zero"),
        ("R1 a 0 1\nQ1 a a 0 N\n.model N NPN(RB=10 RBM=2)", 4, "RBM other than RB"),
        ("R1 a 0 1\nQ1 a a 0 0 N\n.model N NPN", 3, "substrate"),
        ("R1 a 0 1\nM1 a 0 N\n.model N NMOS", 4, "unknown kind 'NMOS' (accepted: D, NPN, PNP)"),
        ("R1 a 0 1\nR2 a 0 x", 3, "a parameter is written {x}"),
        ("R1 a 0 {1 + 2", 2, "unmatched brace"),
        ("R1 a 0 1\n.control\nrun", 3, ".control without .endc"),
        ("R1 a 0 1\nD1 a 0 DX\n.model DX D(TNOM=-300)", 4, "TNOM=-300 lies below absolute zero"),
        ("R1 a 0 1\nD1 a 0 DX\n.model DX D(EG=1e6)\n.temp 60", 3, "has no finite values"),
    ],
)
def test_each_fault_of_wiring_or_values_is_one_line_that_names_what_is_to_blame(
    cards: str, line: int, words: str
) -> None:
    lines = faults_of(f"title\n{cards}\n")
    where = f"deck.cir:{line}: " if line else "deck.cir: "
    assert any(said.startswith(where) and words in said for said in lines), lines


def test_a_model_parameter_without_effect_here_is_accepted_at_its_neutral_value() -> None:
    circuit = elaborate(
        parse_netlist(
            "t\nR1 a 0 1\nQ1 a a 0 N\n.model N NPN(XTF=0 VTF=4 XCJC=1 CJS=0 KF=1e-16 AF=1 RB=5 RBM=5)\n"
        )
    )
    assert any(isinstance(e, Bjt) for e in circuit.elements)


def test_initial_values_are_passed_over_with_a_note() -> None:
    netlist = parse_netlist(
        "t\nR1 a 0 1k\nC1 a 0 1u ic=2\nL1 a 0 1m IC = 1m\nQ1 a a 0 N IC=0.6, 5\nD1 a 0 DX off ic=0.7\n"
        ".model N NPN\n.model DX D\n"
    )
    assert len(netlist.notes) == 4
    assert "'C1': IC passed over: it counts only for a transient with UIC" in netlist.notes[0]
    assert len(elaborate(netlist).elements) == 5


def test_a_file_that_is_not_there_or_empty_is_one_clear_line(tmp_path: Path) -> None:
    with pytest.raises(BadNetlist, match=r"none\.cir: cannot be read \(No such file or directory\)"):
        read_netlist(tmp_path / "none.cir")
    empty = tmp_path / "empty.cir"
    empty.write_text("")
    with pytest.raises(BadNetlist, match="has no parts"):
        read_netlist(empty)


@pytest.mark.parametrize("deck", sorted(DECKS.glob("*.cir")), ids=lambda deck: deck.stem)
def test_the_test_circuits_read_without_a_fault(deck: Path) -> None:
    assert elaborate(read_netlist(deck)).nodes


def test_joined_netlists_share_nodes_of_equal_name_and_report_parts_that_stand_twice() -> None:
    first = parse_netlist("t\nR1 a 0 1\n", "first.cir")
    second = parse_netlist("t\nR2 a 0 2\n", "second.cir")
    assert elaborate(first.joined_with(second)).nodes == ("a",)
    with pytest.raises(BadNetlist, match="'R1' stands twice"):
        elaborate(first.joined_with(first))


def test_edits_leave_the_netlist_they_start_from_alone() -> None:
    netlist = read_netlist(PEAT)
    before = repr(netlist)
    changed = netlist.without_parts(["vsup"]).with_param("fuzz", "0.5").with_own_model("q1", "bf", "30")
    assert repr(netlist) == before
    assert changed.part("Q1").model == "ge1@q1"
    assert changed.model("GE1").parameter("bf", "") == "75"
    assert changed.model("ge1@q1").parameter("bf", "") == "30"
    with pytest.raises(UnknownName, match="no part 'Vsup'"):
        changed.part("Vsup")


@given(
    st.lists(
        st.tuples(
            st.integers(0, 40), st.sampled_from(["delete", "double", "cut", "stir"]), st.integers(0, 60)
        ),
        max_size=5,
    ),
    st.text(max_size=20),
)
@settings(max_examples=200, deadline=None)
def test_whatever_a_file_holds_the_answer_is_a_circuit_or_a_list_of_faults(
    edits: list[tuple[int, str, int]], stray: str
) -> None:
    lines = PEAT.read_text(encoding="utf-8").splitlines()
    for number, kind, column in edits:
        line = lines[number % len(lines)]
        changed = {
            "delete": [],
            "double": [line, line],
            "cut": [line[: column % (len(line) + 1)]],
            "stir": [line[: column % (len(line) + 1)] + stray],
        }[kind]
        lines[number % len(lines) : number % len(lines) + 1] = changed
    try:
        assert elaborate(parse_netlist("\n".join(lines), "f.cir")).elements
    except BadNetlist as bad:
        assert bad.faults
        assert all(str(fault).startswith("f.cir:") and "\n" not in str(fault) for fault in bad.faults)


@settings(max_examples=200, deadline=None)
@given(data=st.data())
def test_whatever_is_done_to_a_netlist_the_answer_is_a_circuit_or_faults_with_lines(
    data: st.DataObject,
) -> None:
    text = (DECKS / "silicon_amplifier.cir").read_text(encoding="utf-8")
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(text)))
        piece = data.draw(st.text(max_size=4) | st.sampled_from(ODD_PIECES))
        text = text[:at] + piece + text[at + data.draw(st.integers(0, 30)) :]
    try:
        solve_operating_point(elaborate(parse_netlist(text)))
    except CircuitError as error:
        assert str(error)
