"""Models are found by name and by serial, and listed and checked from the command line."""

from __future__ import annotations

import argparse
import json
import shutil
from pathlib import Path
from typing import Any

import pytest

from fixture.cli import limits as limits_command
from fixture.cli import models as models_command
from fixture.errors import BadFile, BadInput, UnknownModel, UnknownSerial
from fixture.modelfile import find_model, model_for_serial, model_names


def add_model(root: Path, name: str, letters: str) -> Path:
    folder = root / "limits" / name.lower()
    shutil.copytree(root / "limits" / "peat", folder)
    path = folder / "limits.toml"
    text = path.read_text(encoding="utf-8").replace("PT-", f"{letters}-").replace('"Peat"', f'"{name}"')
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture
def three(root: Path) -> Path:
    add_model(root, "Marl", "ML")
    add_model(root, "Grike", "GK")
    return root


def test_models_are_listed_by_folder_in_order(three: Path) -> None:
    assert model_names(three) == ("grike", "marl", "peat")


@pytest.mark.parametrize("name", ["peat", "Peat", " PEAT "])
def test_a_model_is_found_by_name_in_whatever_case(name: str, three: Path, kinds: Any) -> None:
    assert find_model(three, name, kinds).name == "Peat"


def test_for_an_unknown_model_the_nearest_is_offered(three: Path, kinds: Any) -> None:
    with pytest.raises(UnknownModel, match=r'^no model "Pete": did you mean peat\?$'):
        find_model(three, "Pete", kinds)
    with pytest.raises(UnknownModel, match=r'^no model "xyz": there are: grike, marl, peat$'):
        find_model(three, "xyz", kinds)


def test_without_any_limits_files_that_is_said(tmp_path: Path, kinds: Any) -> None:
    with pytest.raises(UnknownModel, match="there are no limits files under"):
        find_model(tmp_path, "Peat", kinds)
    with pytest.raises(UnknownSerial, match="there are no limits files under"):
        model_for_serial(tmp_path, "PT-2612-0001", kinds)


@pytest.mark.parametrize(
    ("serial", "name"), [("PT-2612-0001", "Peat"), ("ML-2612-0001", "Marl"), ("GK-2612-0001", "Grike")]
)
def test_a_serial_finds_its_model(serial: str, name: str, three: Path, kinds: Any) -> None:
    assert model_for_serial(three, serial, kinds).name == name


def test_for_an_unknown_serial_all_patterns_are_named(three: Path, kinds: Any) -> None:
    with pytest.raises(UnknownSerial) as caught:
        model_for_serial(three, "XX-2612-0001", kinds)
    text = str(caught.value)
    assert (
        text.startswith("XX-2612-0001: no model owns this serial; grike has serials like ")
        and "\n" not in text
    )
    assert "peat has serials like PT-2612-0001" in text and "GK-2612-0001" in text


def test_a_broken_file_of_another_model_stops_no_test(three: Path, kinds: Any) -> None:
    (three / "limits" / "marl" / "limits.toml").write_text("format = ", encoding="utf-8")
    assert model_for_serial(three, "PT-2612-0001", kinds).name == "Peat"
    with pytest.raises(UnknownSerial, match=r"not readable: .*marl"):
        model_for_serial(three, "ML-2612-0001", kinds)


def test_the_broken_file_of_the_serials_own_model_is_reported(three: Path, kinds: Any) -> None:
    path = three / "limits" / "marl" / "limits.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('"9 V"', '"9 A"'), encoding="utf-8")
    with pytest.raises(BadFile, match="is not a voltage"):
        model_for_serial(three, "ML-2612-0001", kinds)


def test_a_serial_that_two_models_claim_is_refused(three: Path, kinds: Any) -> None:
    path = add_model(three, "Till", "PT")
    assert path.is_file()
    with pytest.raises(BadInput, match="belongs to peat and till alike: name one with --model"):
        model_for_serial(three, "PT-2612-0001", kinds)


def run_models(root: Path, kinds: Any, *words: str) -> int:
    parser = argparse.ArgumentParser()
    models_command.add_arguments(parser)
    return models_command.execute(parser.parse_args(words), root, kinds=kinds)


def test_models_shows_a_row_for_each_model(
    three: Path, kinds: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run_models(three, kinds) == 0
    heading, *rows = capsys.readouterr().out.splitlines()
    assert heading.split() == ["model", "title", "serials", "revision", "basis", "procedures"]
    assert [row.split()[0] for row in rows] == ["Grike", "Marl", "Peat"]
    assert "PT-2612-0001  3, 2026-11-30  predicted  line (4 steps), short (1 step)" in rows[2]


def test_models_lists_a_broken_file_with_its_first_fault(
    three: Path, kinds: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    path = three / "limits" / "marl" / "limits.toml"
    text = path.read_text(encoding="utf-8").replace('"9 V"', '"9 A"').replace('"20 mA"', '"20 mV"')
    path.write_text(text, encoding="utf-8")
    assert run_models(three, kinds) == 2
    shown = capsys.readouterr()
    assert "Peat" in shown.out and "Marl" not in shown.out
    assert shown.err.startswith(f"marl: broken: {path}:") and "(and 1 more: toeline limits check" in shown.err
    assert run_models(three, kinds, "--json") == 2
    told = json.loads(capsys.readouterr().out)
    assert [model["name"] for model in told["models"]] == ["Grike", "Peat"]
    assert told["models"][1]["procedures"] == {"line": 4, "short": 1}
    assert told["broken"][0]["name"] == "marl" and told["broken"][0]["more"] == 1


def check(root: Path, kinds: Any, *words: str) -> int:
    parser = argparse.ArgumentParser()
    limits_command.add_arguments(parser)
    arguments = parser.parse_args(["check", *words])
    assert arguments.action is limits_command.check_files
    return limits_command.check_files(arguments, root, kinds=kinds)


def test_limits_check_says_ok_for_every_good_file(
    three: Path, kinds: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    assert check(three, kinds) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 3
    assert lines[2].endswith("limits.toml: ok: Peat, revision 3, 5 steps, 6 limits")


def test_limits_check_says_every_fault_of_the_files_named(
    three: Path, kinds: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    path = three / "limits" / "marl" / "limits.toml"
    text = path.read_text(encoding="utf-8").replace('"9 V"', '"9 A"').replace('"20 mA"', '"20 mV"')
    path.write_text(text, encoding="utf-8")
    assert check(three, kinds, str(path), str(three / "limits" / "peat")) == 2
    shown = capsys.readouterr()
    assert [line.split(": ")[0].rpartition(":")[0] for line in shown.err.splitlines()] == [str(path)] * 2
    assert shown.out.endswith("peat/limits.toml: ok: Peat, revision 3, 5 steps, 6 limits\n")


def test_limits_check_of_nothing_is_refused(tmp_path: Path, kinds: Any) -> None:
    with pytest.raises(BadInput, match="nothing to check"):
        check(tmp_path, kinds)
