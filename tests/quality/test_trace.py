"""The history of a serial, in text and as JSON, and the way out to pandas and DuckDB."""

from __future__ import annotations

import argparse
import csv
import json
from pathlib import Path

import duckdb
import pandas as pd
import pytest

from fixture.cli import trace as command
from fixture.domain.limits import Limits
from fixture.domain.reading import Reading
from fixture.domain.run import BenchIdentity, JudgedReading
from fixture.domain.verdict import Verdict
from fixture.errors import BadInput, UnknownSerial
from fixture.quality import load
from fixture.quality.trace import nearest_serials, trace
from tests.records.station import REAL, SIMULATED, Station, bad_node, good_current

SERIAL = "PT-2612-0001"


def run_command(root: Path, *words: str) -> int:
    parser = argparse.ArgumentParser()
    command.add_arguments(parser)
    return command.execute(parser.parse_args(words), root)


def write_history(station: Station) -> None:
    """One failing and one passing run on a real bench, one on a simulated bench, other units between."""
    with station.open(REAL) as journal:
        station.run_unit(journal, verdict=Verdict.FAIL)
        station.run_unit(journal, "PT-2612-0002")
        station.clocks.advance(3600)
        station.run_unit(journal, steps=(("current", (good_current(),)),))
    with station.open(SIMULATED) as journal:
        station.run_unit(journal, planted=("open R3",), verdict=Verdict.FAIL)


def test_the_trace_has_all_runs_oldest_first_and_what_failed_by_how_much(station: Station) -> None:
    write_history(station)
    history = trace(station.root, SERIAL)
    assert [(run.kind, run.verdict.value, run.attempt) for run in history.runs] == [
        ("real", "FAIL", 1),
        ("real", "PASS", 2),
        ("simulated", "FAIL", 1),
    ]
    (failed,) = history.runs[0].failed
    assert (failed.step, failed.name, failed.value, failed.unit) == ("nodes", "q2_collector", -8.71, "V")
    assert (failed.low, failed.high, failed.distance) == (-6.0, -3.2, -2.71)
    assert history.runs[1].failed == ()
    assert history.runs[2].planted == ("open R3",)


def test_a_serial_that_begins_like_another_or_stands_in_a_note_is_not_taken_for_it(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal, "PT-2612-00011")
        mention = good_current(said=f"compare,{SERIAL},with this\r\nor,{SERIAL},that")
        station.run_unit(journal, "PT-2612-0009", scanned=SERIAL, steps=(("a", (mention,)),))
    with pytest.raises(UnknownSerial):
        trace(station.root, SERIAL)
    assert len(trace(station.root, "PT-2612-0009").runs) == 1


@pytest.mark.parametrize("typed", [" pt-2612-0001 ", "PT\u20132612\u20130001"])
def test_a_serial_is_found_as_people_type_it(station: Station, typed: str) -> None:
    write_history(station)
    assert trace(station.root, typed).serial == SERIAL


def test_an_unknown_serial_is_refused_and_the_nearest_are_offered(station: Station) -> None:
    write_history(station)
    with pytest.raises(UnknownSerial, match="the most alike: PT-2612-000") as caught:
        run_command(station.root, "PT-2612-0011")
    assert caught.value.exit_code == 2
    with pytest.raises(UnknownSerial, match="2 serials are known, none is like it"):
        trace(station.root, "GK-9999")


def test_without_any_records_the_trace_says_where_it_looked(tmp_path: Path) -> None:
    with pytest.raises(UnknownSerial, match="no records below"):
        trace(tmp_path, SERIAL)


def test_nearest_serials_are_found_quickly_among_many() -> None:
    known = [f"PT-{week:04d}-{number:04d}" for week in range(2600, 2650) for number in range(1000)]
    assert nearest_serials("PT-2612-O001", known)[0] == "PT-2612-0001"  # the letter O for a zero
    assert nearest_serials("PT-2612-001", known)[0] == "PT-2612-0001"  # a zero left out
    assert nearest_serials("PT-2612-0132", ["PT-2612-0123", "PT-2644-0999"]) == ["PT-2612-0123"]  # swapped
    near = nearest_serials("RT-2612-0O01", known)  # two signs wrong
    assert [(one[:9], one[-2:]) for one in near] == [("PT-2612-0", "01")] * 3
    assert nearest_serials("GK-1", known) == []


def test_the_json_has_the_run_and_the_failed_readings(
    station: Station, capsys: pytest.CaptureFixture[str]
) -> None:
    write_history(station)
    assert run_command(station.root, SERIAL, "--json") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["serial"] == SERIAL
    first = told["runs"][0]
    assert first["started"] == "2026-01-12T08:00:00+00:00"
    assert (first["verdict"], first["bench"], first["kind"]) == ("FAIL", "north", "real")
    assert first["failed"] == [
        {
            "step": "nodes",
            "name": "q2_collector",
            "value": -8.71,
            "unit": "V",
            "low": -6.0,
            "high": -3.2,
            "u": 0.004,
            "distance": -2.71,
            "by": 2.71,
            "verdict": "FAIL",
            "said": "Q2 collector -8.71 V, allowed -6.00 to -3.20 V",
        }
    ]
    assert [run["failed"] for run in told["runs"]][1] == []


def test_what_is_not_a_number_is_null_in_json(station: Station, capsys: pytest.CaptureFixture[str]) -> None:
    odd = Reading("odd", float("inf"), "V", float("nan"))
    judged = JudgedReading("a", odd, Limits(None, 1.0, "V"), Verdict.FAIL, float("-inf"), "odd", 0.0)
    with station.open() as journal:
        station.run_unit(journal, steps=(("a", (judged,)),))
    assert run_command(station.root, SERIAL, "--json") == 0
    (failed,) = json.loads(capsys.readouterr().out)["runs"][0]["failed"]
    assert [failed[key] for key in ("value", "low", "high", "u", "by")] == [None, None, 1.0, None, None]


def test_the_text_is_readable_and_keeps_simulated_runs_apart(
    station: Station, capsys: pytest.CaptureFixture[str]
) -> None:
    write_history(station)
    assert run_command(station.root, SERIAL) == 0
    assert capsys.readouterr().out.splitlines() == [
        "PT-2612-0001: 3 runs",
        "",
        "== REAL BENCH ==",
        "",
        "x FAIL  2026-01-12 08:00:00 +0000  attempt 1",
        "  bench north (real), peat, limits revision 1, run north-20260112-R000001",
        "  a reason",
        "  x nodes: Q2 collector -8.71 V, allowed -6.00 to -3.20 V",
        "",
        "+ PASS  2026-01-12 09:00:02 +0000  attempt 2",
        "  bench north (real), peat, limits revision 1, run north-20260112-R000009",
        "  a reason",
        "",
        "== SIMULATED BENCH: no real pedal was tested ==",
        "",
        "x FAIL  2026-01-12 09:00:02 +0000  attempt 1",
        "  bench demo (simulated), peat, limits revision 1, run demo-20260112-S000001",
        "  planted: open R3",
        "  a reason",
        "  x nodes: Q2 collector -8.71 V, allowed -6.00 to -3.20 V",
    ]


def test_a_run_that_goes_on_or_was_broken_off_says_so(
    station: Station, capsys: pytest.CaptureFixture[str]
) -> None:
    with station.open() as journal:
        journal.open_run(station.header(journal))
        assert run_command(station.root, SERIAL) == 0
    out = capsys.readouterr().out
    assert "! CUT SHORT" in out
    assert "broken off, or still going on" in out


def test_a_missing_row_of_a_run_is_told(station: Station, capsys: pytest.CaptureFixture[str]) -> None:
    with station.open() as journal:
        station.run_unit(journal)
        path = journal.path
    assert path is not None
    lines = path.read_bytes().split(b"\r\n")
    del lines[3]
    path.write_bytes(b"\r\n".join(lines))
    run_command(station.root, SERIAL)
    assert "rows of this run are missing or damaged" in capsys.readouterr().out


def test_runs_of_two_benches_are_merged_by_time(station: Station) -> None:
    second = BenchIdentity("second", "real", {})
    for bench in (REAL, second, REAL):
        with station.open(bench) as journal:
            station.run_unit(journal)
        station.clocks.advance(60)
    assert [run.bench for run in trace(station.root, SERIAL).runs] == ["north", "second", "north"]


def test_a_frame_has_text_as_text_and_quantities_as_numbers(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal, "NA", operator="007", steps=(("null", (good_current("NA"), bad_node())),))
        station.run_unit(journal, model="grike")
    frame = load(station.root, kind="simulated")
    assert len(frame) == 8
    assert frame["serial"].tolist()[:4] == ["NA"] * 4
    assert frame["operator"][0] == "007"
    assert frame["said"][1] == "NA"
    assert frame["note"][1] == ""
    readings = frame[frame["row"] == "reading"]
    assert readings["value"].tolist()[:2] == [0.00083, -8.71]
    assert pd.isna(frame["value"][0])
    assert frame["attempt"].tolist() == [1] * 8
    assert frame["clock_suspect"].tolist() == [False] * 8
    assert frame["time"][0] == pd.Timestamp("2026-01-12T08:00:00Z")
    assert load(station.root, kind="simulated", models=["grike"])["model"].unique().tolist() == ["grike"]


def test_a_frame_never_mixes_kinds_of_benches(station: Station) -> None:
    write_history(station)
    assert set(load(station.root, kind="real")["bench_kind"]) == {"real"}
    assert set(load(station.root, kind="simulated")["bench_kind"]) == {"simulated"}
    empty = load(station.root, kind="mixed")
    assert len(empty) == 0
    assert empty.dtypes.to_dict() == load(station.root, kind="real").dtypes.to_dict()
    assert len(load(station.root, kind="real", benches=["south"])) == 0


def test_a_frame_leaves_torn_rows_out(station: Station) -> None:
    write_history(station)
    path = station.root / "logs/real/north/2026-01-12.csv"
    data = path.read_bytes()
    # one digit off the end: other readers take the row as whole
    path.write_bytes(data[:-3])
    assert len(list(csv.reader(data[:-3].decode().splitlines()))) == 12
    assert len(load(station.root, kind="real")) == 10
    assert path.read_bytes() == data[:-3]


def test_duckdb_computes_the_same_from_the_files_as_pandas_from_the_frame(station: Station) -> None:
    with station.open() as journal:
        for number in range(20):
            value = 0.001 + number * 1e-5 / 3
            judged = JudgedReading(
                "current",
                Reading("current", value, "A"),
                Limits(0.0, 1.0, "A"),
                Verdict.PASS,
                0.1,
                "a, b",
                0.0,
            )
            station.run_unit(journal, f"PT-2612-{number:04d}", steps=(("current", (judged,)),))
    frame = load(station.root, kind="simulated")
    frame = frame[frame["row"] == "reading"]
    query = "SELECT serial, value FROM read_csv(?) WHERE row = 'reading' ORDER BY sequence"
    files = str(station.root / "logs" / "simulated" / "demo" / "*.csv")
    wanted = list(zip(frame["serial"], frame["value"], strict=True))
    assert duckdb.execute(query, [files]).fetchall() == wanted


def test_a_journal_that_cant_be_read_is_one_clear_line(station: Station) -> None:
    (station.root / "logs/real/north/2026-01-12.csv").mkdir(parents=True)
    with pytest.raises(BadInput, match="can't be read"):
        trace(station.root, SERIAL)
