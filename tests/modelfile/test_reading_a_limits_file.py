"""A limits file becomes a model, or a list of all its faults."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from datetime import date
from pathlib import Path
from typing import Any

import pytest

from fixture.domain.limits import Limits, Mask
from fixture.domain.model import ControlSpec, NodeSpec, PartSpread, SupplySpec
from fixture.errors import BadFile
from fixture.modelfile import load_model

Edits = dict[str, str]


def edit(path: Path, edits: Edits) -> dict[str, int]:
    """Exchange pieces of the file; return the line of each new piece."""
    text = path.read_text(encoding="utf-8")
    lines = {}
    for old, new in edits.items():
        before, found, after = text.partition(old)
        assert found, old
        lines[new] = before.count("\n") + 1
        text = before + new + after
    path.write_text(text, encoding="utf-8")
    return lines


def faults_of(path: Path, kinds: Any) -> list[tuple[int | None, str]]:
    with pytest.raises(BadFile) as caught:
        load_model(path, kinds)
    assert all(fault.file == path for fault in caught.value.faults)
    return [(fault.line, fault.text) for fault in caught.value.faults]


def test_the_sample_file_says_what_it_says(peat_file: Path, kinds: Any) -> None:
    model = load_model(peat_file, kinds)
    assert (model.name, model.maker, model.default_procedure) == ("Peat", "Brindlecombe Pedal Works", "line")
    assert model.owns_serial("PT-2612-0001") and not model.owns_serial("ML-2612-0001")
    assert model.revision.number == 3 and model.revision.date == date(2026, 11, 30)
    assert model.supply == SupplySpec(9.0, "positive", 0.02, 10.0)
    assert model.supply.rail_volts == -9.0
    assert model.nodes["q2_collector"] == NodeSpec("q2_collector", "q2c", "TP2")
    assert model.controls["volume"] == ControlSpec("volume", "volume")
    assert model.spreads == (
        PartSpread("R*", "value", "uniform", 0.05),
        PartSpread("Q1", "bf", "lognormal", 0.2),
    )
    assert model.circuit is not None and model.circuit.file == peat_file.parent / "circuit.cir"
    assert model.circuit.footswitch_param == "engaged"
    assert model.digest == hashlib.sha256(peat_file.read_bytes()).hexdigest()


def test_steps_carry_options_positions_and_limits_in_si_units(peat_file: Path, kinds: Any) -> None:
    current, bias, gain, response = load_model(peat_file, kinds).procedures["line"].steps
    assert current.on_fail == "stop" and current.required
    assert current.limits == {"supply_current": Limits(0.0004, 0.0011, "A")}
    assert bias.options.nodes == ("q1_collector", "q2_collector") and bias.options.settled_within == 0.002
    assert bias.limits["q2_collector"] == Limits(-6.0, -3.2, "V", "guarded", 1.0)
    assert gain.options.frequency == 997.0 and gain.options.level == 1e-4
    assert gain.controls == {"fuzz": 1.0, "volume": 1.0}
    assert gain.limits == {"gain": Limits(49.5, None, "dB")}
    assert response.controls == {"fuzz": 0.5, "volume": 1.0} and not response.required
    assert response.limits == {"response": Mask(((40, -9.0, 1.0), (1000, -0.5, 0.5), (5000.0, None, 1.0)))}


def test_ten_faults_at_once_are_all_reported_with_their_lines(peat_file: Path, kinds: Any) -> None:
    edits = {
        'maker = "Brindlecombe Pedal Works"': 'makr = "Brindlecombe Pedal Works"',
        'serial_example = "PT-2612-0001"': 'serial_example = "PT-2612-1"',
        "number = 3": "number = 0",
        'volts = "9 V"': 'volts = "9 A"',
        'ground = "positive" ': 'ground = "plus" ',
        'supply_source = "Vsup"': 'supply_source = "Vsupp"',
        'probe = "TP2"': 'probe = "TP1" # twice',
        'kind = "node_voltages"': 'kind = "node_voltage"',
        'low = "49.5 dB"': 'low = "49.5 mV"',
        "[1000,  -0.5, 0.5]": "[10,  -0.5, 0.5]",
    }
    lines = edit(peat_file, edits)
    found = faults_of(peat_file, kinds)
    assert [line for line, _ in found] == sorted(lines.values())
    texts = dict(found)
    expected = {
        'makr = "Brindlecombe Pedal Works"': 'unknown key "makr" in [model]: did you mean "maker"?',
        'serial_example = "PT-2612-1"': r'does not match serial_pattern "PT-\d{4}-\d{4}"',
        "number = 0": "0 is out of range, accepted is 1 or more",
        'volts = "9 A"': 'supply.volts: "9 A" is not a voltage: a number with pV, nV',
        'ground = "plus" ': '"plus" is unknown: accepted: positive, negative',
        'supply_source = "Vsupp"': 'no voltage source "Vsupp" in circuit.cir: did you mean "Vsup"?',
        'probe = "TP1" # twice': '"TP1" is the probe point of node "q1_collector" already',
        'kind = "node_voltage"': '"node_voltage" is unknown: did you mean "node_voltages"?',
        'low = "49.5 mV"': 'steps[3].limits.gain.low: "49.5 mV" is not a level',
        "[10,  -0.5, 0.5]": "row 2 of the mask: 10 Hz after 40 Hz: frequencies must be above 0 and ascend",
    }
    for piece, text in expected.items():
        assert text in texts[lines[piece]]


ONE_FAULT = {
    "an unknown control": ('{ fuzz = "high" }', '{ fuz = "high" }', 'no such control: did you mean "fuzz"?'),
    "a position beyond the end": ("fuzz = 0.5", "fuzz = 1.5", '"low", "high" or a fraction from 0 to 1'),
    "an unknown node": ('nodes = ["q1_collector"', 'nodes = ["q1_colector"', 'did you mean "q1_collector"?'),
    "an unknown reading": ("limits.gain =", "limits.gane =", 'no reading "gane": did you mean "gain"?'),
    "bounds upside down": ('{ low = "-1.2 V"', '{ low = "1.2 V"', "1.200 V is above high = -300.0 mV"),
    "a limit without bounds": ('low = "49.5 dB"', 'low = "-"', "no bound on either side judges nothing"),
    "a bad bound": ('low = "49.5 dB"', 'low = "none"', '"-" means no bound'),
    "a guard without a rule": ('rule = "guarded", ', "", 'has no effect without rule = "guarded"'),
    "two steps of one name": (
        'name = "Bias"',
        'name = "Supply current"',
        'named "Supply current" stands above',
    ),
    "an option out of range": ('"997 Hz"', '"1 Hz"', "accepted is 20 Hz to 20 kHz"),
    "an option of the wrong unit": ('"997 Hz"', '"997 mV"', "is not a frequency"),
    "an option missing": ('frequency = "997 Hz"', "", '"frequency" is missing'),
    "an option unknown": ('level = "0.1 mV"', 'levl = "0.1 mV"', 'did you mean "level"?'),
    "an option unlike its type": (
        'level = "0.1 mV"',
        "remark = 3",
        "3 was found, a text in quotes is wanted",
    ),
    "a value with a mask": (
        'low = "49.5 dB", high = "-"',
        "mask = [[1, 2, 3], [4, 5, 6]]",
        "this reading is one value: low and high are wanted",
    ),
    "a mask of one row": ('    [1000,  -0.5, 0.5],\n    ["5 kHz", "-", 1.0],\n', "", "two rows"),
    "a mask row too short": ("[1000,  -0.5, 0.5]", "[1000,  -0.5]", "[hz, low_db, high_db] is wanted"),
    "a mask upside down": ("[1000,  -0.5, 0.5]", "[1000,  0.5, -0.5]", "low 0.50 dB is above high -0.50 dB"),
    "a curve with plain bounds": (
        "mask = [               # [hz, low_db, high_db]\n"
        '    [40,    -9.0, 1.0],\n    [1000,  -0.5, 0.5],\n    ["5 kHz", "-", 1.0],\n]',
        'low = "1 dB"',
        "this reading is a curve: mask = [[hz, low_db, high_db], ...] is wanted",
    ),
    "a current limit that holds a good unit back": (
        'current_limit = "20 mA"',
        'current_limit = "1 mA"',
        "1.000 mA would hold a good unit back, which may draw 1.100 mA",
    ),
    "a node's limits of the wrong sign": (
        '{ low = "-1.2 V", high = "-0.3 V" }',
        '{ low = "0.3 V", high = "1.2 V" }',
        'with supply.ground = "positive" its volts are negative',
    ),
    "an engineering limit inside the limit": (
        '{ low = "-1.2 V", high = "-0.3 V" }',
        '{ low = "-1.2 V", high = "-0.3 V", least = "-1 V" }',
        "least: -1.000 V is narrower than the limit on its side",
    ),
    "an engineering limit where there is none": (
        'low = "49.5 dB", high = "-"',
        'low = "49.5 dB", high = "-", most = "60 dB"',
        "most: 60.00 dB is narrower than the limit on its side",
    ),
    "over-voltage under the volts": ('"10 V"', '"8 V"', "8 V must exceed volts = 9 V"),
    "a pattern that does not compile": (r"'PT-\d{4}-\d{4}'", "'PT-('", "is not a regular expression"),
    "a serial in lower case": ('"PT-2612-0001"', '"pt-2612-0001"', 'is scanned as "PT-2612-0001"'),
    "a circuit that is not there": ('"circuit.cir"', '"circus.cir"', 'there is no file "circus.cir"'),
    "an unknown net": ('net = "q1c"', 'net = "q1cc"', 'no net "q1cc" in circuit.cir: did you mean "q1c"?'),
    "an unknown parameter": ('param = "fuzz"', 'param = "fizz"', 'no .param "fizz"'),
    "a replaced part unknown": ('"Rsrc", ', '"Rscr", ', 'no part "Rscr"'),
    "a spread of no part": ('part = "R*"', 'part = "L*"', 'no part "L*" in circuit.cir'),
    "a spread of no .param": ('part = "R*"', 'part = "param:fizz"', 'did you mean "param:fuzz"?'),
    "a spread of no parameter": ('parameter = "bf"', 'parameter = "bff"', '"Q1" has no "bff"'),
    "a spread too wide": ('"5 %"', '"500 %"', "accepted is 0 % to 99 %"),
    "a date in quotes": ("date = 2026-11-30", 'date = "2026-11-30"', "a date without quotes"),
    "a future revision in the history": ("number = 2", "number = 3", "not an earlier revision than 3"),
    "another format": ("format = 1", "format = 2", "this program reads format 1"),
    "a procedure unknown": (
        'default_procedure = "line"',
        'default_procedure = "lin"',
        'did you mean "line"?',
    ),
    "an unknown section": ("[[history]]", "[[histery]]", 'did you mean "history"?'),
    "a name unlike the folder": ('name = "Peat"', 'name = "Marl"', "both must have the same name"),
    "a flag in quotes": ("required = false", 'required = "no"', "true or false (without quotes) is wanted"),
    "a text that is empty": ('author = "A. Fell"', 'author = ""', "is empty, a text is wanted"),
    "not TOML": ('title = "Peat fuzz"', 'title = "Peat fuzz', "not TOML:"),
    "a key given twice": ('title = "Peat fuzz"', 'name = "Pea"', "not TOML: Cannot overwrite a value"),
}


@pytest.mark.parametrize("case", ONE_FAULT)
def test_each_fault_is_one_line_that_says_where_and_what_is_accepted(
    case: str, peat_file: Path, kinds: Any
) -> None:
    old, new, wanted = ONE_FAULT[case]
    lines = edit(peat_file, {old: new})
    ((line, text),) = faults_of(peat_file, kinds)
    assert wanted in text and "\n" not in text
    header_is_blamed = case in ("an option missing", "a curve with plain bounds", "a mask of one row")
    assert line == lines[new] or (header_is_blamed and line is not None and line < lines[new])


def test_faults_of_the_netlist_come_with_its_own_lines(peat_file: Path, kinds: Any) -> None:
    netlist = peat_file.parent / "circuit.cir"
    edit(netlist, {"Rc1   q1c supply 30k": "Rc1   q1c supply 0"})
    with pytest.raises(BadFile) as caught:
        load_model(peat_file, kinds)
    (fault,) = caught.value.faults
    assert (fault.file, fault.line) == (netlist, 9)


@pytest.mark.parametrize(
    ("part", "parameter"),
    [("param:fuzz", "value"), ("q*", "is"), ("Q2", "br"), ("Q1", "value"), ("C*", "value")],
)
def test_a_spread_may_move_values_params_and_parameters_of_models(
    part: str, parameter: str, peat_file: Path, kinds: Any
) -> None:
    edit(peat_file, {'part = "Q1"': f'part = "{part}"', 'parameter = "bf"': f'parameter = "{parameter}"'})
    assert load_model(peat_file, kinds).spreads[1] == PartSpread(part, parameter, "lognormal", 0.2)


def test_a_model_without_a_circuit_is_complete(peat_file: Path, kinds: Any) -> None:
    text = peat_file.read_text(encoding="utf-8")
    start, end = text.index("[circuit]"), text.index("[nodes.q1_collector]")
    peat_file.write_text(text[:start] + text[end:], encoding="utf-8")
    model = load_model(peat_file, kinds)
    assert model.circuit is None and model.nodes["q1_collector"].probe == "TP1"


def test_a_file_that_is_missing_or_not_utf8_is_one_fault(tmp_path: Path, kinds: Any) -> None:
    path = tmp_path / "limits.toml"
    with pytest.raises(BadFile, match="there is no such file"):
        load_model(path, kinds)
    path.write_bytes(b'format = 1\n[model]\nname = "P\xe4at"\n')
    with pytest.raises(BadFile, match=r"limits\.toml:3: is not UTF-8 text"):
        load_model(path, kinds)


def test_an_empty_file_names_every_section_that_is_missing(tmp_path: Path, kinds: Any) -> None:
    path = tmp_path / "limits.toml"
    path.write_text("", encoding="utf-8")
    texts = [text for _, text in faults_of(path, kinds)]
    for section in ("format", "model", "revision", "supply", "procedures"):
        assert f'"{section}" is missing' in texts


def test_a_mark_from_an_editor_and_other_line_ends_do_no_harm(
    peat_file: Path, kinds: Mapping[str, Any]
) -> None:
    text = peat_file.read_text(encoding="utf-8")
    peat_file.write_bytes(b"\xef\xbb\xbf" + text.replace("\n", "\r\n").encode())
    assert load_model(peat_file, kinds).name == "Peat"


def test_the_wrong_ground_is_refused_by_the_limits_that_it_contradicts(peat_file: Path) -> None:
    edit(peat_file, {'ground = "positive"': 'ground = "negative"'})
    with pytest.raises(BadFile) as caught:
        load_model(peat_file)
    assert len(caught.value.faults) == 2
    assert all("its volts are positive" in fault.text for fault in caught.value.faults)


@pytest.mark.parametrize(
    ("old", "new"),
    [("Vsup  supply 0   DC -9", "Vsup  0 supply   DC -9"), ("DC -9", "DC -12"), ("DC -9", "DC 9")],
)
def test_a_netlist_of_another_supply_is_refused(peat_file: Path, old: str, new: str) -> None:
    edit(peat_file.parent / "circuit.cir", {old: new})
    with pytest.raises(BadFile, match=r"Vsup holds supply at .* mean -9\.000 V"):
        load_model(peat_file)


def test_engineering_limits_and_statistics_are_read(peat_file: Path) -> None:
    edit(
        peat_file,
        {
            '{ low = "-1.2 V", high = "-0.3 V" }': '{ low = "-1.2 V", high = "-0.3 V", least = "-1.5 V", most = "-" }',
            'basis = "predicted"\nmade_by': 'basis = "pilot"\nstatistics = ["60 units", "Bias: normal"]\nmade_by',
        },
    )
    model = load_model(peat_file)
    limits = model.procedures["line"].steps[1].limits["q1_collector"]
    assert isinstance(limits, Limits) and (limits.least, limits.most) == (-1.5, None)
    assert limits.within_engineering(-2.0, -0.2) == (-1.5, -0.2)
    assert model.revision.statistics == ("60 units", "Bias: normal")
