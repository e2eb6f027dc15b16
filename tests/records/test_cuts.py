"""A cut at any moment: what was told is on the disk, what was torn is kept aside, nothing is invented."""

from __future__ import annotations

import random
import shutil
import subprocess
import sys
import time
from pathlib import Path

import pytest

from fixture.errors import BenchInUse
from fixture.records import read_rows, runs_of, verify_journal
from fixture.records.codec import header_end, split_rows
from tests.records.station import SIMULATED, Station, bad_node, good_current

REPOSITORY = Path(__file__).parents[2]
KILLS = 30
DAY = "logs/simulated/demo/2026-01-12.csv"


def write_runs(station: Station) -> Path:
    with station.open() as journal:
        station.run_unit(journal)
        nasty = good_current(said='a line\r\nbreak, "quotes" and Ω')
        station.run_unit(journal, "PT-2612-0002", steps=(("all", (nasty, bad_node())),))
    return station.root / DAY


def quarantined(root: Path) -> list[bytes]:
    return [path.read_bytes() for path in sorted(root.glob("logs/*/*/quarantine/*.bin"))]


@pytest.mark.slow
def test_a_journal_cut_at_any_byte_of_its_last_rows_keeps_every_whole_row_and_sets_the_rest_aside(
    tmp_path: Path,
) -> None:
    path = write_runs(Station(tmp_path / "whole"))
    data = path.read_bytes()
    pieces = list(split_rows(data, header_end(data)))
    assert [piece.whole for piece in pieces] == [True] * 8
    rows = list(read_rows(path))
    for cut in range(pieces[5].start, len(data) + 1):
        station = Station(tmp_path / str(cut))
        torn_file = station.root / DAY
        torn_file.parent.mkdir(parents=True)
        torn_file.write_bytes(data[:cut])
        kept = sum(piece.end <= cut for piece in pieces)
        end = pieces[kept - 1].end
        assert list(read_rows(torn_file)) == rows[:kept]
        assert torn_file.read_bytes() == data[:cut]  # reading changes nothing
        with station.open() as journal:
            after = torn_file.read_bytes()
            assert after[:end] == data[:end]
            assert quarantined(station.root) == ([data[end:cut]] if cut > end else [])
            assert any("torn row" in said for said in journal.recovered) == (cut > end)
            added = list(read_rows(torn_file))[kept:]
            expected = ["recovered"] * (cut > end) + ["closed"] * (kept in (5, 6, 7))
            assert [row.row for row in added] == expected
            station.run_unit(journal)
        assert verify_journal(torn_file.parent) is None
        verdicts = [run.verdict.value for run in runs_of(station.root, "PT-2612-0002")]
        assert verdicts == (["PASS"] if kept == 8 else ["CUT SHORT"] if kept > 4 else [])
        shutil.rmtree(station.root)


@pytest.mark.parametrize("zeros", [1, 100, 5000])
def test_a_tail_of_nul_bytes_is_set_aside(station: Station, zeros: int) -> None:
    path = write_runs(station)
    whole = path.read_bytes()
    path.write_bytes(whole + bytes(zeros))
    with station.open() as journal:
        assert f"{zeros} bytes of a torn row" in journal.recovered[0]
    assert path.read_bytes()[: len(whole)] == whole
    assert quarantined(station.root) == [bytes(zeros)]
    assert verify_journal(path.parent) is None


def test_rows_of_a_lost_block_before_whole_rows_are_passed_over_but_not_hidden(station: Station) -> None:
    path = write_runs(station)
    data = path.read_bytes()
    piece = list(split_rows(data, header_end(data)))[5]
    path.write_bytes(data[: piece.start] + bytes(piece.end - piece.start) + data[piece.end :])
    assert [row.sequence for row in read_rows(path)] == [1, 2, 3, 4, 5, 7, 8]
    fault = verify_journal(path.parent)
    assert fault is not None
    assert fault.row == 6
    (run,) = runs_of(station.root, "PT-2612-0002")
    assert (run.closed, run.complete) == (True, False)
    with station.open() as journal:
        assert journal.recovered == ()


def test_a_torn_first_row_of_a_day_is_set_aside_and_the_chain_goes_on(station: Station) -> None:
    path = write_runs(station)
    station.clocks.advance(86400)
    with station.open() as journal:
        station.run_unit(journal)
    new = path.with_name("2026-01-13.csv")
    data = new.read_bytes()
    for cut in (0, 10, header_end(data), header_end(data) + 1, header_end(data) + 200):
        new.write_bytes(data[:cut])
        with station.open() as journal:
            assert bool(journal.recovered) == (cut not in (0, header_end(data)))
            station.run_unit(journal)
        assert verify_journal(path.parent) is None
        for file in path.parent.glob("2026-01-13*.csv"):
            file.unlink()
        written = list(read_rows(path))
        assert [row.sequence for row in written] == list(range(1, len(written) + 1))


def test_a_run_without_its_closing_row_is_closed_as_cut_short_at_the_next_start(station: Station) -> None:
    with station.open() as journal:
        header = station.header(journal)
        journal.open_run(header)
        journal.append_step(header, "current", (good_current(),))
    (run,) = runs_of(station.root, "PT-2612-0001")
    assert (run.verdict.value, run.closed) == ("CUT SHORT", False)
    with station.open() as journal:
        assert journal.recovered == (f"run {header.run} of PT-2612-0001 was CUT SHORT",)
    (run,) = runs_of(station.root, "PT-2612-0001")
    assert (run.verdict.value, run.closed, run.complete, len(run.readings)) == ("CUT SHORT", True, True, 1)
    with station.open() as journal:
        assert journal.recovered == ()


def test_a_second_cut_while_the_first_is_mended_loses_nothing(station: Station) -> None:
    path = write_runs(station)
    whole = path.read_bytes()
    path.write_bytes(whole + b"half a ro")
    aside = path.parent / "quarantine"
    with station.open():
        pass
    kept = quarantined(station.root)
    path.write_bytes(whole + b"half a ro")  # as if the cut came after the side file, before the truncation
    with station.open():
        pass
    assert quarantined(station.root) == kept == [b"half a ro"]
    assert len(list(aside.iterdir())) == 1


WRITER = """
import sys, time
from datetime import UTC, datetime
from pathlib import Path
from fixture.records import Journal
from fixture.domain.run import RunResult
from fixture.domain.verdict import Verdict
from tests.records.station import SIMULATED, Station, bad_node, good_current, response

class Now:
    def now(self): return datetime.now(UTC)
    def monotonic(self): return time.monotonic()

station = Station(Path(sys.argv[1]), Now())
with station.open() as journal:
    print("ready", flush=True)
    while True:
        header = station.header(journal)
        journal.open_run(header)
        print("opened", header.run, flush=True)
        judged = (good_current(), bad_node()) * 20
        journal.append_step(header, "all", judged)
        print("rows", header.run, flush=True)
        journal.close_run(RunResult(header, judged, Verdict.FAIL, "", 1.0))
        print("closed", header.run, flush=True)
"""


def start_writer(root: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", WRITER, str(root)], stdout=subprocess.PIPE, text=True, cwd=REPOSITORY
    )


@pytest.mark.slow
def test_whatever_a_killed_process_had_told_is_in_the_records(tmp_path: Path) -> None:
    generator = random.Random(20260112)
    told: list[str] = []
    torn_or_cut = 0
    for _ in range(KILLS):
        with start_writer(tmp_path) as writer:
            assert writer.stdout is not None
            assert writer.stdout.readline() == "ready\n"
            heard = [writer.stdout.readline().rstrip("\n") for _ in range(generator.randrange(9))]
            time.sleep(generator.uniform(0.0, 0.005))
            writer.kill()
            heard += [line.rstrip("\n") for line in writer.stdout if line.endswith("\n")]
        told += heard
        station = Station(tmp_path)
        with station.open() as journal:
            torn_or_cut += bool(journal.recovered)
        assert verify_journal(journal.folder) is None
    runs = {run.run: run for run in runs_of(tmp_path, "PT-2612-0001")}
    assert all(run.closed and run.complete for run in runs.values())
    assert sum(line.startswith("closed") for line in told) > 0
    for line in told:
        what, _, name = line.partition(" ")
        run = runs[name]
        if what == "rows":
            assert len(run.readings) == 40
        if what == "closed":
            assert run.verdict.value == "FAIL"
    assert torn_or_cut > 0


def test_another_process_is_refused_while_one_tests_and_free_when_it_is_killed(tmp_path: Path) -> None:
    with start_writer(tmp_path) as writer:
        assert writer.stdout is not None
        assert writer.stdout.readline() == "ready\n"
        with pytest.raises(BenchInUse, match=rf"bench demo is in use by process {writer.pid} since 20"):
            Station(tmp_path).open()
        writer.kill()
        writer.wait()
        with Station(tmp_path).open(SIMULATED):
            pass
