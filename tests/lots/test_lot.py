"""A lot through the real sequence: the same in parallel as one by one, resumable, and no worker's death loses a unit."""

from __future__ import annotations

import csv
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from fixture.cli.main import main
from fixture.lots.pool import try_units
from fixture.lots.trial import Trial, try_unit

SOURCES = Path(__file__).parents[2]
LOT = ("lot", "peat", "--units", "4", "--seed", "5", "--faults", "50%", "--ambient", "21..25")

Run = Callable[..., tuple[int, Any]]


@pytest.fixture
def root(tmp_path: Path) -> Path:
    shutil.copy(SOURCES / "bench.toml", tmp_path)
    shutil.copytree(SOURCES / "limits", tmp_path / "limits")
    return tmp_path


@pytest.fixture
def run(root: Path, capsys: pytest.CaptureFixture[str]) -> Run:
    def run_json(*arguments: str) -> tuple[int, Any]:
        code = main(["--root", str(root), *arguments, "--json"])
        return code, json.loads(capsys.readouterr().out)

    return run_json


def rows_of(root: Path) -> list[dict[str, str]]:
    rows = []
    for path in sorted(root.glob("logs/simulated/demo/*.csv")):
        with path.open(encoding="utf-8", newline="") as file:
            rows += list(csv.DictReader(file))
    return rows


def readings_of(root: Path) -> dict[tuple[str, str, str], str]:
    return {
        (r["serial"], r["step"], r["reading"]): r["value"] for r in rows_of(root) if r["row"] == "reading"
    }


def test_a_lot_is_recorded_like_any_unit_and_its_truth_stands_apart(root: Path, run: Run) -> None:
    code, done = run(*LOT, "--jobs", "2")
    assert code == 0
    assert (done["units"], done["tested"], sum(done["verdicts"].values())) == (4, 4, 4)
    rows = rows_of(root)
    assert [row["row"] for row in rows].count("opened") == [row["row"] for row in rows].count("closed") == 4
    truth = [json.loads(line) for line in (root / done["truth"]).read_text(encoding="utf-8").splitlines()]
    assert [unit["serial"] for unit in truth] == [f"PT-9005-{n:04d}" for n in range(1, 5)]
    faulty = [unit for unit in truth if unit["planted"]]
    assert faulty and all(not row["planted"] for row in rows)
    rooms = {row["serial"]: float(row["ambient_celsius"]) for row in rows if row["row"] == "opened"}
    assert rooms == {unit["serial"]: unit["ambient_celsius"] for unit in truth}
    assert run("trace", truth[0]["serial"])[1]["runs"][0]["verdict"] in done["verdicts"]

    # the same lot again: nothing is doubled
    code, again = run(*LOT)
    assert (code, again["tested_now"], again["verdicts"]) == (0, 0, done["verdicts"])
    assert again["failures_by_step"] == done["failures_by_step"]
    assert rows_of(root) == rows

    # a larger one goes on
    code, larger = run(*LOT[:3], "5", *LOT[4:])
    assert (larger["tested_now"], larger["tested"]) == (1, 5)


def test_units_in_parallel_read_what_they_read_one_by_one(root: Path, run: Run) -> None:
    run(*LOT, "--jobs", "2")
    found = readings_of(root)
    lines = next(root.glob("logs/truth/*.jsonl")).read_text(encoding="utf-8").splitlines()
    unit = json.loads(lines[1])
    alone = try_unit(root, "peat", Trial(unit["serial"], tuple(unit["planted"]), unit["ambient_celsius"]))
    for judged in alone.readings:
        value = found[unit["serial"], judged.step, judged.reading.name]
        assert value == ("" if judged.reading.value is None else repr(judged.reading.value))


@pytest.mark.skipif(sys.platform == "win32", reason="processes are killed by signal")
def test_a_worker_that_is_killed_costs_nothing_and_doubles_nothing() -> None:
    trials = [Trial(f"PT-9006-{n:04d}") for n in range(1, 7)]
    results: dict[str, float | None] = {}
    for trial, result in try_units(SOURCES, "peat", trials, jobs=2):
        assert trial.serial not in results
        results[trial.serial] = result.readings[0].reading.value
        if len(results) == 2:
            kill_a_worker()
    assert sorted(results) == [trial.serial for trial in trials]
    for trial in trials:
        assert results[trial.serial] == try_unit(SOURCES, "peat", trial).readings[0].reading.value


def kill_a_worker() -> None:
    import multiprocessing

    children = multiprocessing.active_children()
    assert children
    os.kill(children[0].pid or 0, signal.SIGKILL)


@pytest.mark.skipif(sys.platform == "win32", reason="there is no SIGINT to send")
def test_ctrl_c_keeps_what_is_done_and_the_lot_can_be_taken_up_again(root: Path, run: Run) -> None:
    command = [
        sys.executable,
        "-m",
        "fixture.cli",
        "--root",
        str(root),
        "lot",
        "peat",
        "--units",
        "30",
        "--seed",
        "8",
    ]
    process = subprocess.Popen(
        [*command, "--jobs", "1", "--json"], cwd=SOURCES, stdout=subprocess.PIPE, text=True
    )
    deadline_s = time.monotonic() + 120.0
    while not any(row["row"] == "closed" for row in rows_of(root)) and time.monotonic() < deadline_s:
        time.sleep(0.1)
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=60)
    stopped = json.loads(out)
    assert process.returncode == 130
    rows = [row["row"] for row in rows_of(root)]
    assert 1 <= stopped["tested"] == rows.count("closed") == rows.count("opened") < 30
    _, more = run("lot", "peat", "--units", str(stopped["tested"] + 1), "--seed", "8")
    assert more["tested_now"] == 1


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("lot", "peet", "--units", "3", "--seed", "1"), "did you mean peat"),
        (("lot", "peat", "--units", "0", "--seed", "1"), "1 to 100000 is accepted"),
        (("lot", "peat", "--units", "3", "--seed", "1000"), "0 to 999"),
        (("lot", "peat", "--units", "3", "--seed", "1", "--faults", "120%"), "0 % to 100 % is accepted"),
        (("lot", "peat", "--units", "3", "--seed", "1", "--faults", "many"), "--faults"),
        (("lot", "peat", "--units", "3", "--seed", "1", "--ambient", "28..18"), "the colder first"),
        (("lot", "peat", "--units", "3", "--seed", "1", "--ambient", "warm"), "such as 18..28"),
        (("lot", "peat", "--units", "3", "--seed", "1", "--jobs", "0"), "at least 1"),
    ],
)
def test_what_is_no_lot_is_one_line(
    root: Path, capsys: pytest.CaptureFixture[str], arguments: tuple[str, ...], said: str
) -> None:
    assert main(["--root", str(root), *arguments]) == 2
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1 and said in err
    assert not list(root.glob("logs/**/*.csv"))


def test_a_real_bench_tests_no_lots(root: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = root / "bench.toml"
    path.write_text(path.read_text(encoding="utf-8").replace('device = "simulated"', 'device = "Line 1"'))
    assert main(["--root", str(root), *LOT]) == 2
    assert "lots are for a simulated bench" in capsys.readouterr().err
