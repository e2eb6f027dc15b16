"""The commands on a simulated bench of their own, from the command line to the records."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

import pytest

from fixture.cli.main import main


class Done(NamedTuple):
    code: int
    out: str
    err: str

    @property
    def json(self) -> Any:
        def refuse(name: str) -> None:
            raise ValueError(f"{name} is no JSON")

        return json.loads(self.out, parse_constant=refuse)


Toeline = Callable[..., Done]


@pytest.fixture
def toeline(root: Path, capsys: pytest.CaptureFixture[str]) -> Toeline:
    def run(*arguments: str) -> Done:
        code = main(["--root", str(root), *arguments])
        out, err = capsys.readouterr()
        return Done(code, out, err)

    return run


def edit(path: Path, pattern: str, by: str) -> None:
    text, count = re.subn(pattern, by, path.read_text(encoding="utf-8"), flags=re.MULTILINE)
    assert count == 1, f"{pattern} is {count} times in {path}"
    path.write_text(text, encoding="utf-8")


def test_a_good_unit_passes_and_the_json_has_all_that_was_promised(toeline: Toeline) -> None:
    done = toeline("test", "pt-2612-0001", "--json")
    assert done.code == 0, done.err
    run = done.json
    assert (run["serial"], run["model"], run["verdict"], run["bench"]) == (
        "PT-2612-0001",
        "peat",
        "PASS",
        "demo",
    )
    assert run["kind"] == "simulated"
    readings = {(one["step"], one["name"]): one for one in run["readings"]}
    current = readings["Supply current", "supply_current"]
    assert {"step", "name", "value", "unit", "low", "high", "verdict"} <= current.keys()
    assert current["low"] <= current["value"] <= current["high"]
    assert (current["unit"], current["verdict"]) == ("A", "PASS")
    assert run["curves"]
    for curve in run["curves"].values():
        assert len(curve["hz"]) == len(curve["db"]) == len(curve["low_db"]) == len(curve["high_db"]) > 20
        assert any(bound is not None for bound in curve["low_db"])
    history = toeline("trace", "PT-2612-0001", "--json").json
    assert [one["run"] for one in history["runs"]] == [run["run"]]


def test_a_planted_fault_fails_in_words_stays_with_the_serial_and_is_mended(
    toeline: Toeline, root: Path
) -> None:
    failed = toeline("test", "PT-2612-0002", "--plant", "open C1")
    assert failed.code == 1
    assert "planted in this unit: open C1" in failed.out
    assert "x FAIL  PT-" in failed.out
    assert re.search(r"^  x .*gain .*allowed", failed.out, re.MULTILINE)
    assert "toeline trace PT-2612-0002" in failed.out
    assert toeline("test", "PT-2612-0002", "--json").json["planted"] == ["open C1"]
    assert toeline("test", "PT-2612-0001", "--json").json["planted"] == []
    mended = toeline("test", "PT-2612-0002", "--mend", "--json")
    assert (mended.code, mended.json["verdict"], mended.json["planted"]) == (0, "PASS", [])
    runs = toeline("trace", "PT-2612-0002", "--json").json["runs"]
    assert [one["verdict"] for one in runs] == ["FAIL", "FAIL", "PASS"]
    assert runs[0]["planted"] == ["open C1"]
    assert runs[0]["failed"]


def test_a_shorted_supply_is_the_units_fault_and_ends_the_test(toeline: Toeline) -> None:
    done = toeline("test", "PT-2612-0003", "--plant", "short C4", "--json")
    assert done.code == 1
    run = done.json
    assert run["verdict"] == "FAIL"
    (current,) = run["readings"]
    assert current["name"] == "supply_current"
    assert "draws at least the limit of 20 mA" in current["said"]


@pytest.mark.parametrize(
    ("words", "said"),
    [("opn C1", "not a fault"), ("open R99", "no part 'R99'"), ("short C11", "nearest: C1")],
)
def test_words_that_are_no_fault_are_not_kept(toeline: Toeline, root: Path, words: str, said: str) -> None:
    done = toeline("test", "PT-2612-0001", "--plant", words)
    assert (done.code, done.out, done.err.count("\n")) == (2, "", 1)
    assert said in done.err
    assert not list(root.glob("logs/**/planted.json"))


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("XX-1",), r"no model owns this serial; peat has serials like PT-"),
        (("PT-2612-0001", "--model", "peet"), "did you mean peat"),
        (("XX-1", "--model", "peat"), "PT-2612-0001"),
        (("PT-2612-0001", "--procedure", "lin"), "did you mean line"),
        (("",), "is not a serial"),
        (("--plant", "open C1"), "go with a serial"),
    ],
)
def test_what_cannot_be_tested_is_one_line_and_leaves_no_record(
    toeline: Toeline, root: Path, arguments: tuple[str, ...], said: str
) -> None:
    done = toeline("test", *arguments)
    assert (done.code, done.out, done.err.count("\n")) == (2, "", 1)
    assert re.search(said, done.err)
    assert not list(root.glob("logs/**/*.csv"))


def test_a_verdict_that_could_not_be_kept_is_not_given(toeline: Toeline, root: Path) -> None:
    (root / "logs").write_text("a file where the folder should be")
    done = toeline("test", "PT-2612-0001", "--json")
    assert (done.code, done.out, done.err.count("\n")) == (3, "", 1)
    assert str(root / "logs") in done.err


def test_another_instrument_than_the_bench_file_says_is_found_before_anything_is_recorded(
    toeline: Toeline, root: Path
) -> None:
    edit(root / "bench.toml", "simulated multimeter,M-0001", "simulated multimeter,M-0002")
    done = toeline("test", "PT-2612-0001", "--json")
    assert (done.code, done.out) == (3, "")
    assert "M-0002" in done.err and "M-0001" in done.err and "multimeter" in done.err
    assert not any("PT-2612-0001" in path.read_text() for path in root.glob("logs/**/*.csv"))


def test_a_bench_file_without_an_instrument_names_it(toeline: Toeline, root: Path) -> None:
    edit(root / "bench.toml", r"^\[supply\]\n(?:\w.*\n)+", "")
    done = toeline("test", "PT-2612-0001")
    assert (done.code, done.out) == (2, "")
    assert "bench.toml" in done.err and "supply" in done.err


def test_all_faults_of_a_limits_file_are_told_with_their_lines(toeline: Toeline, root: Path) -> None:
    path = root / "limits" / "peat" / "limits.toml"
    edit(path, r'^volts = "9 V"', 'volts = "nine"')
    edit(path, r'^ground = "positive"', 'ground = "left"')
    edit(path, r'^net = "q2e"', 'net = "q9e"')
    done = toeline("test", "PT-2612-0001")
    assert (done.code, done.out) == (2, "")
    for wrong in ("nine", "left", "q9e"):
        line = next(n for n, text in enumerate(path.read_text().splitlines(), 1) if wrong in text)
        assert f"{path}:{line}: " in done.err


@pytest.mark.parametrize(
    ("card", "said"),
    [
        ("Rx lonely 0x 1k", "lonely"),
        ("Xx q1b 0 thing", "Xx"),
        ("Rx q1b 0 0", "Rx"),
        ("Qx q1c q1b 0 GHOST", "GHOST"),
    ],
)
def test_a_fault_of_the_models_netlist_is_told_with_its_line(
    toeline: Toeline, root: Path, card: str, said: str
) -> None:
    path = root / "limits" / "peat" / "circuit.cir"
    lines = path.read_text(encoding="utf-8").splitlines()
    where = next(n for n, text in enumerate(lines) if text.startswith("R2"))
    path.write_text("\n".join([*lines[:where], card, *lines[where:]]) + "\n", encoding="utf-8")
    done = toeline("test", "PT-2612-0001")
    assert (done.code, done.out) == (2, "")
    assert f"{path}:{where + 1}: " in done.err
    assert said.lower() in done.err.lower()


@pytest.mark.parametrize("words", ["open Rload", "value Rsrc x10"])
def test_a_fault_in_a_part_whose_place_the_bench_takes_is_refused(toeline: Toeline, words: str) -> None:
    done = toeline("test", "PT-2612-0001", "--plant", words)
    assert (done.code, done.out) == (2, "")
    assert "stands outside the pedal, the bench takes its place" in done.err


def test_a_bench_without_a_probe_that_the_procedure_reads_is_refused_before_power(
    toeline: Toeline, root: Path
) -> None:
    edit(root / "bench.toml", r"^TP3 = 123\b", "TP9 = 123")
    done = toeline("test", "PT-2612-0001")
    assert (done.code, done.out, done.err.count("\n")) == (2, "", 1)
    assert "[switchbox.probes] lacks TP3 (q2_collector)" in done.err
    assert not any("PT-2612-0001" in path.read_text() for path in root.glob("logs/**/*.csv"))


def test_two_models_that_take_the_same_serials_are_found_by_the_check(toeline: Toeline, root: Path) -> None:
    shutil.copytree(root / "limits" / "peat", root / "limits" / "marl")
    edit(root / "limits" / "marl" / "limits.toml", r'^name = "peat"', 'name = "marl"')
    done = toeline("limits", "check")
    assert done.code == 2 and done.err.count("\n") == 1
    assert "a scan would not tell the model" in done.err
