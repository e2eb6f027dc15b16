"""The circuit command on circuits that can be worked out by hand."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest

from fixture.cli.main import main

DIVIDER = """A divider with a low-pass behind it
V1 in 0 DC 10 AC 1
R1 in mid 1k
R2 mid 0 {lower}
C1 mid 0 1u
.param lower=3k
.end
"""


@pytest.fixture
def divider(tmp_path: Path) -> str:
    path = tmp_path / "divider.cir"
    path.write_text(DIVIDER, encoding="utf-8")
    return str(path)


def run_json(argv: list[str], capsys: pytest.CaptureFixture[str]) -> dict[str, object]:
    assert main(["circuit", *argv, "--json"]) == 0
    found: dict[str, object] = json.loads(capsys.readouterr().out)
    return found


def test_bias_currents_and_response_are_those_of_the_divider(
    divider: str, capsys: pytest.CaptureFixture[str]
) -> None:
    found = run_json([divider, "--probe", "mid", "--hz", "10,1k,20 kHz"], capsys)
    # Ohm's law: 10 V * 3k / 4k, and 10 V / 4 kΩ into the source's first terminal with SPICE's sign
    assert found["nodes"] == pytest.approx({"in": 10.0, "mid": 7.5})
    assert found["currents"] == pytest.approx({"V1": -2.5e-3})
    response = found["response"]
    assert isinstance(response, list)
    for hz, db in response:
        # 0.75 with a pole of 750 Ω and 1 µF
        ratio = 0.75 / math.hypot(1.0, 2 * math.pi * hz * 750.0 * 1e-6)
        assert db == pytest.approx(20 * math.log10(ratio), abs=1e-6)
    assert [hz for hz, _ in response] == [10.0, 1000.0, 20000.0]
    assert found["sines"] == []


def test_parameters_can_be_set(divider: str, capsys: pytest.CaptureFixture[str]) -> None:
    found = run_json([divider, "--probe", "mid", "--set", "lower=1k"], capsys)
    assert found["nodes"] == pytest.approx({"in": 10.0, "mid": 5.0})


def test_sines_have_level_and_no_distortion_in_a_linear_circuit(
    divider: str, capsys: pytest.CaptureFixture[str]
) -> None:
    found = run_json([divider, "--probe", "mid", "--sine", "100:0.2", "--sine", "1 kHz:10 mV"], capsys)
    sines = found["sines"]
    assert isinstance(sines, list)
    assert [(sine["hz"], sine["volts"]) for sine in sines] == [(100.0, 0.2), (1000.0, 0.01)]
    for sine in sines:
        ratio = 0.75 / math.hypot(1.0, 2 * math.pi * sine["hz"] * 750.0 * 1e-6)
        assert sine["rms_volts"] == pytest.approx(sine["volts"] * ratio / math.sqrt(2), rel=2e-3)
        assert sine["thd_ratio"] < 1e-4


def test_what_does_not_come_through_is_null(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "apart.cir"
    path.write_text("Held by a battery\nV1 a 0 AC 1\nV2 b 0 DC 3\nR1 a b 1k\n.end\n", encoding="utf-8")
    assert run_json([str(path), "--probe", "b", "--hz", "100"], capsys)["response"] == [[100.0, None]]


def test_without_a_driving_source_the_bias_is_shown_alone(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "bias.cir"
    path.write_text("Bias\nV1 a 0 5\nR1 a b 1k\nR2 b 0 1k\n.end\n", encoding="utf-8")
    assert main(["circuit", str(path), "--probe", "b"]) == 0
    shown = capsys.readouterr().out
    assert "2.50000 V" in shown and "response" not in shown
    assert main(["circuit", str(path), "--probe", "b", "--hz", "100"]) == 2


def test_the_tables_have_every_figure_with_its_unit(divider: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["circuit", divider, "--probe", "mid", "--hz", "1000"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("A divider with a low-pass behind it")
    assert any(line.split() == ["mid", "7.50000", "V"] for line in lines)
    assert any(line.split() == ["V1", "-2.50000", "mA"] for line in lines)
    # 0.75 at a pole of 212 Hz (750 Ω, 1 µF): -2.499 dB - 13.656 dB
    assert any(line.split() == ["1", "kHz", "-16.15", "dB"] for line in lines)


@pytest.mark.parametrize(
    ("more", "said"),
    [
        (["--probe", "midd"], "nearest: mid"),
        (["--probe", "mid", "--hz", "loud"], '--hz: "loud" is not a frequency'),
        (["--probe", "mid", "--sine", "1000"], "with a colon are accepted"),
        (["--probe", "mid", "--sine", "1000:x"], "--sine"),
        (["--probe", "mid", "--set", "lower"], "name=value is accepted"),
        (["--probe", "mid", "--set", "lowr=1k"], "nearest: lower"),
        (["--probe", "mid", "--source", "V2"], "V1"),
        (["--probe", "mid", "--oversample", "0"], "1 to 64"),
        (["--probe", "mid", "--hz", "0"], "greater than zero"),
    ],
)
def test_a_bad_question_is_one_line(
    divider: str, more: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["circuit", divider, *more]) == 2
    shown = capsys.readouterr()
    assert said in shown.err
    assert shown.err.count("\n") == 1
    assert shown.out == ""


@pytest.mark.parametrize(
    ("netlist", "said"),
    [
        ("t\nV1 a 0 1\nR1 a b 1k\nC1 b c 1u\nC2 c 0 1u\n.end\n", "bad.cir"),
        ("t\nV1 a 0 1\nZ1 a 0 1k\n.end\n", "bad.cir:3"),
        ("t\nV1 a 0 1\nR1 a 0 0\n.end\n", "bad.cir:3"),
        ("t\nV1 a 0 1\nQ1 a a 0 QX\n.end\n", "bad.cir:3"),
    ],
    ids=["floating node", "unknown element", "zero resistor", "missing model"],
)
def test_a_bad_netlist_names_its_file(
    netlist: str, said: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "bad.cir"
    path.write_text(netlist, encoding="utf-8")
    assert main(["circuit", str(path), "--probe", "a"]) == 2
    assert said in capsys.readouterr().err


def test_a_missing_file_is_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["circuit", "nowhere.cir", "--probe", "a"]) == 2
    assert capsys.readouterr().err.startswith("nowhere.cir: cannot be read")
