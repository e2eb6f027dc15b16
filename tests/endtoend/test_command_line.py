"""The command as a user types it, on a copy of the demo bench: verdicts, records, stops and what is refused."""

from __future__ import annotations

import csv
import json
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def bench_root(tmp_path: Path) -> Path:
    """A folder with the demo bench and the model Peat."""
    shutil.copy(ROOT / "bench.toml", tmp_path)
    shutil.copytree(ROOT / "limits", tmp_path / "limits")
    return tmp_path


def command(*words: str, root: Path) -> list[str]:
    return [sys.executable, "-m", "fixture.cli", "--root", str(root), *words]


def toeline(*words: str, root: Path, stdin: str | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        command(*words, root=root),
        cwd=ROOT,
        input=stdin,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def rows(root: Path) -> list[dict[str, str]]:
    found: list[dict[str, str]] = []
    for path in sorted((root / "logs" / "simulated" / "demo").glob("*.csv")):
        with path.open(encoding="utf-8", newline="") as file:
            found += list(csv.DictReader(file))
    return found


def answer(result: subprocess.CompletedProcess[str]) -> dict[str, Any]:
    parsed: dict[str, Any] = json.loads(result.stdout)
    return parsed


def test_a_good_unit_passes_and_every_reading_is_on_record(bench_root: Path) -> None:
    result = toeline("test", "PT-2612-0001", "--json", root=bench_root)
    assert result.returncode == 0, result.stderr
    said = answer(result)
    assert (said["serial"], said["model"], said["verdict"], said["bench"]) == (
        "PT-2612-0001",
        "peat",
        "PASS",
        "demo",
    )
    assert len(said["readings"]) == 11
    assert set(said["readings"][0]) >= {"step", "name", "value", "unit", "low", "high", "verdict"}
    (curve,) = said["curves"].values()
    assert len(curve["hz"]) == len(curve["db"]) == len(curve["low_db"]) == len(curve["high_db"]) > 100
    recorded = rows(bench_root)
    assert {row["run"] for row in recorded} == {said["run"]}
    for reading in said["readings"]:
        (row,) = [r for r in recorded if (r["step"], r["reading"]) == (reading["step"], reading["name"])]
        assert float(row["value"]) == reading["value"]
        assert row["verdict"] == reading["verdict"]


def test_a_planted_fault_fails_stays_with_the_serial_and_goes_when_mended(bench_root: Path) -> None:
    failed = toeline("test", "PT-2612-0002", "--plant", "open C2", root=bench_root)
    assert failed.returncode == 1
    assert "FAIL" in failed.stdout and "too low" in failed.stdout
    again = toeline("test", "pt-2612-0002 ", "--json", root=bench_root)
    assert again.returncode == 1
    mended = toeline("test", "PT-2612-0002", "--mend", "--json", root=bench_root)
    assert mended.returncode == 0
    history = answer(toeline("trace", "PT-2612-0002", "--json", root=bench_root))
    assert [run["verdict"] for run in history["runs"]] == ["FAIL", "FAIL", "PASS"]
    gain = next(f for f in history["runs"][0]["failed"] if f["name"] == "gain")
    assert gain["value"] < gain["low"]


def test_scans_come_one_after_the_other_until_the_input_ends(bench_root: Path) -> None:
    result = toeline("test", root=bench_root, stdin="PT-2612-0001\n")
    assert result.returncode == 0, result.stderr
    assert "PASS" in result.stdout


@pytest.mark.skipif(os.name == "nt", reason="SIGKILL is POSIX")
def test_a_killed_run_is_closed_as_cut_short_at_the_next_start(bench_root: Path) -> None:
    running = subprocess.Popen(
        command("test", "PT-2612-0001", "--pace", "real", root=bench_root),
        cwd=ROOT,
        stdout=subprocess.DEVNULL,
    )
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and not any(row["step"] == "Bias" for row in rows(bench_root)):
        time.sleep(0.05)
    running.kill()
    running.wait()
    assert toeline("test", "PT-2612-0001", root=bench_root).returncode == 0
    history = answer(toeline("trace", "PT-2612-0001", "--json", root=bench_root))
    assert [run["verdict"] for run in history["runs"]] == ["CUT SHORT", "PASS"]


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (("test", "PT-2612-0001", "--procedure", "lnie"), 2, "line"),
        (("trace", "PT-9999-0001"), 2, "PT-9999-0001"),
        (("limits", "check", "no/such/limits.toml"), 2, "no/such"),
        (("circuit", "limits/peat/circuit.cir", "--probe", "nowhere"), 2, "nowhere"),
        (("tset",), 2, "test"),
    ],
)
def test_bad_input_is_one_clear_line(bench_root: Path, words: tuple[str, ...], code: int, said: str) -> None:
    result = toeline(*words, root=bench_root)
    assert result.returncode == code, result.stderr
    assert said in result.stderr
    assert "Traceback" not in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1, result.stderr
