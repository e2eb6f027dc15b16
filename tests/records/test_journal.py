"""DESIGN of the records: what is in a journal, and that it is durable before anybody is told."""

from __future__ import annotations

import csv
import os
import re
import signal
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest

from fixture.domain.reading import Reading
from fixture.domain.run import BenchIdentity, JudgedReading, RunResult
from fixture.domain.verdict import Verdict
from fixture.errors import BadInput, BenchInUse, RecordsUnsafe
from fixture.records import COLUMNS, Journal, read_rows, runs_of, verify_chain, verify_journal
from fixture.records.curves import curve_path, read_curve
from fixture.records.disk import Disk
from tests.records.station import REAL, SIMULATED, Station, bad_node, good_current, response


def cells(path: Path | None) -> list[dict[str, str]]:
    assert path is not None
    with path.open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file, strict=True))


class LoggingDisk(Disk):
    """Remembers what was asked of the disk, and how big the file was at each sync."""

    def __init__(self) -> None:
        self.calls: list[tuple[str, int]] = []

    def write(self, descriptor: int, data: bytes) -> int:
        self.calls.append(("write", len(data)))
        return super().write(descriptor, data)

    def sync(self, descriptor: int) -> None:
        super().sync(descriptor)
        self.calls.append(("sync", os.fstat(descriptor).st_size))

    def sync_folder(self, folder: Path) -> None:
        super().sync_folder(folder)
        self.calls.append(("folder", 0))


class FullDisk(Disk):
    """Takes `room` more bytes, then says that it is full; can also fail the sync or the truncation."""

    def __init__(self, room: int = 10**9) -> None:
        self.room = room
        self.sync_fails = False
        self.truncate_fails = False

    def write(self, descriptor: int, data: bytes) -> int:
        if self.room <= 0:
            raise OSError(28, "No space left on device")
        taken = super().write(descriptor, data[: self.room])
        self.room -= taken
        return taken

    def sync(self, descriptor: int) -> None:
        if self.sync_fails:
            raise OSError(5, "Input/output error")
        super().sync(descriptor)

    def truncate(self, descriptor: int, size: int) -> None:
        if self.truncate_fails:
            raise OSError(5, "Input/output error")
        super().truncate(descriptor, size)


def test_a_run_has_one_opening_row_one_row_per_reading_and_one_closing_row_that_counts_them(
    station: Station, journal: Journal
) -> None:
    header = station.run_unit(journal)
    rows = cells(journal.path)
    assert [row["row"] for row in rows] == ["opened", "reading", "reading", "closed"]
    assert rows[-1]["rows"] == "4"
    assert [row["sequence"] for row in rows] == ["1", "2", "3", "4"]
    assert {row["run"] for row in rows} == {header.run}
    assert {(row["serial"], row["model"], row["revision"]) for row in rows} == {("PT-2612-0001", "peat", "1")}
    assert rows[0]["instruments"] == '{"supply": "toeline,simulated supply,S-0001,1.0"}'
    assert rows[2]["value"] == "-8.71"
    assert (rows[2]["low"], rows[2]["high"], rows[2]["unit"]) == ("-6.0", "-3.2", "V")
    assert (rows[2]["verdict"], rows[2]["distance"], rows[2]["u"]) == ("FAIL", "-2.71", "0.004")
    assert rows[3]["verdict"] == "PASS"
    assert rows[0]["time"] == "2026-01-12T08:00:00.000000+00:00"


def test_there_is_one_journal_per_bench_kind_and_day(station: Station) -> None:
    for bench in (SIMULATED, REAL, BenchIdentity("demo", "mixed", {})):
        with station.open(bench) as journal:
            station.run_unit(journal)
    station.clocks.advance(86400)
    with station.open() as journal:
        station.run_unit(journal)
    found = sorted(str(path.relative_to(station.root).as_posix()) for path in station.root.rglob("*.csv"))
    assert found == [
        "logs/mixed/demo/2026-01-12.csv",
        "logs/real/north/2026-01-12.csv",
        "logs/simulated/demo/2026-01-12.csv",
        "logs/simulated/demo/2026-01-13.csv",
    ]


def test_the_chain_goes_on_from_file_to_file(station: Station) -> None:
    for _ in range(3):
        with station.open() as journal:
            station.run_unit(journal)
        station.clocks.advance(86400)
    assert verify_journal(journal.folder) is None
    sequences = [row.sequence for path in sorted(journal.folder.glob("*.csv")) for row in read_rows(path)]
    assert sequences == list(range(1, 13))


def test_a_run_over_midnight_stays_in_the_file_in_which_it_was_opened(station: Station) -> None:
    station.clocks.wall = datetime(2026, 1, 12, 23, 59, 59, 900000, tzinfo=UTC)
    with station.open() as journal:
        station.run_unit(journal)
        assert station.clocks.wall.day == 13
        assert len(cells(journal.folder / "2026-01-12.csv")) == 4
        station.run_unit(journal)
        assert len(cells(journal.folder / "2026-01-13.csv")) == 4
    assert verify_journal(journal.folder) is None


def test_a_group_is_one_write_and_one_sync_before_anything_returns(station: Station) -> None:
    disk = LoggingDisk()
    with station.open(disk=disk) as journal:
        header = station.header(journal)
        journal.open_run(header)
        assert journal.path is not None
        assert ("folder", 0) in disk.calls  # the new file's name is durable too
        judged = (good_current(), bad_node())
        for act in (
            lambda: journal.append_step(header, "all", judged),
            lambda: journal.close_run(RunResult(header, judged, Verdict.FAIL, "", 1.0)),
        ):
            before = journal.path.stat().st_size
            disk.calls.clear()
            act()
            after = journal.path.stat().st_size
            assert disk.calls == [("write", after - before), ("sync", after)]


def test_a_curve_is_durable_beside_the_journal_before_the_row_that_names_it(station: Station) -> None:
    disk = LoggingDisk()
    with station.open(disk=disk) as journal:
        header = station.header(journal)
        journal.open_run(header)
        disk.calls.clear()
        journal.append_step(header, "response", (response(),))
        kinds = [kind for kind, _ in disk.calls]
        assert kinds[-5:] == ["write", "sync", "folder", "write", "sync"]
        digest = cells(journal.path)[-1]["curve"]
    assert curve_path(journal.folder, digest).exists()
    curve, wanted = read_curve(journal.folder, digest, "response"), response().reading.curve
    assert wanted is not None
    np.testing.assert_array_equal(curve.hz, wanted.hz)
    np.testing.assert_array_equal(curve.db, wanted.db)


def test_a_curve_that_was_changed_is_refused(station: Station, journal: Journal) -> None:
    station.run_unit(journal, steps=(("response", (response(),)),))
    digest = cells(journal.path)[1]["curve"]
    path = curve_path(journal.folder, digest)
    path.write_bytes(path.read_bytes().replace(b"1000.0", b"1001.0"))
    with pytest.raises(BadInput, match="changed since it was recorded"):
        read_curve(journal.folder, digest, "response")


def test_a_reading_that_was_not_taken_has_an_empty_value_and_says_why(
    station: Station, journal: Journal
) -> None:
    lost = JudgedReading(
        "gain", Reading("gain", None, "dB", why_not="meter lost"), None, Verdict.NOT_MEASURED, None, "no", 0.0
    )
    station.run_unit(journal, steps=(("gain", (lost,)),))
    row = cells(journal.path)[1]
    assert (row["value"], row["low"], row["high"], row["note"]) == ("", "", "", "meter lost")
    assert runs_of(station.root, "PT-2612-0001")[0].doubtful[0].value is None


def test_values_from_numpy_are_written_as_plain_numbers(station: Station, journal: Journal) -> None:
    value = np.float64(0.1) + np.float64(0.2)
    judged = JudgedReading("a", Reading("b", value, "V"), None, Verdict.PASS, np.float64(1e-300), "", 0.0)
    station.run_unit(journal, steps=(("a", (judged,)),))
    row = cells(journal.path)[1]
    assert (row["value"], row["distance"]) == ("0.30000000000000004", "1e-300")


def test_run_ids_are_unique_and_sort_in_the_order_of_the_runs(station: Station) -> None:
    runs = []
    for _ in range(3):
        with station.open() as journal:
            runs += [station.run_unit(journal).run for _ in range(4)]
        station.clocks.advance(86400)
    assert len(set(runs)) == 12
    assert sorted(runs) == runs
    assert re.fullmatch(r"demo-20260112-S\d{6}", runs[0])


def test_attempts_of_a_serial_are_counted_over_the_benches_of_one_kind(station: Station) -> None:
    with station.open() as journal:
        assert journal.next_attempt("PT-2612-0001") == 1
        station.run_unit(journal)
        station.run_unit(journal, "PT-2612-00011")
        assert journal.next_attempt("PT-2612-0001") == 2
    with station.open(BenchIdentity("second", "simulated", {})) as journal:
        assert journal.next_attempt("PT-2612-0001") == 2
    with station.open(REAL) as journal:
        assert journal.next_attempt("PT-2612-0001") == 1


def test_a_second_holder_of_the_bench_is_refused_and_told_who_holds_it(station: Station) -> None:
    with station.open():
        with pytest.raises(BenchInUse, match=rf"process {os.getpid()} since 2026-01-12T08:00:00\+00:00"):
            station.open()
        with station.open(REAL):
            pass  # another bench is free
    with station.open():
        pass  # and this one is again


@pytest.mark.parametrize("name", ["", "..", "a/b", "a\\b", "über", "a b", "x" * 41])
def test_a_bench_name_that_is_no_folder_name_is_refused(station: Station, name: str) -> None:
    with pytest.raises(BadInput, match="bench name"):
        station.open(BenchIdentity(name, "real", {}))


def test_a_folder_that_cant_be_written_is_refused(tmp_path: Path) -> None:
    (tmp_path / "logs").write_text("a file where the folder should be")
    with pytest.raises(RecordsUnsafe, match="logs"):
        Station(tmp_path).open()


def test_a_disk_that_is_nearly_full_is_refused_and_leaves_nothing_behind(station: Station) -> None:
    with pytest.raises(RecordsUnsafe, match="No space left on device"):
        station.open(disk=FullDisk(room=99_999))
    assert [path.name for path in (station.root / "logs/simulated/demo").iterdir()] == ["lock"]
    with station.open(disk=FullDisk(room=100_000)):
        pass


@pytest.mark.parametrize("room", [0, 1, 50, 700])
def test_a_disk_that_fills_up_leaves_only_whole_groups_and_the_run_can_be_closed_later(
    station: Station, room: int
) -> None:
    disk = FullDisk()
    with station.open(disk=disk) as journal:
        header = station.header(journal)
        journal.open_run(header)
        assert journal.path is not None
        before = journal.path.read_bytes()
        disk.room = room
        with pytest.raises(RecordsUnsafe, match="No space left on device"):
            journal.append_step(header, "all", (good_current(), bad_node()))
        assert journal.path.read_bytes() == before
        disk.room = 10**9
        journal.close_run(RunResult(header, (), Verdict.NOT_MEASURED, "disk full", 1.0))
    assert verify_journal(journal.folder) is None
    run = runs_of(station.root, "PT-2612-0001")[0]
    assert (run.verdict, run.complete) == (Verdict.NOT_MEASURED, True)


def test_a_short_write_is_continued(station: Station) -> None:
    class Nibbling(Disk):
        def write(self, descriptor: int, data: bytes) -> int:
            return super().write(descriptor, data[:7])

    with station.open(disk=Nibbling()) as journal:
        station.run_unit(journal)
    assert verify_journal(journal.folder) is None


@pytest.mark.parametrize("call", ["write", "sync"])
def test_ctrl_c_while_a_group_is_written_comes_after_it_and_the_run_can_be_closed(
    station: Station, call: str
) -> None:
    class Interrupted(Disk):
        at = ""

        def write(self, descriptor: int, data: bytes) -> int:
            taken = super().write(descriptor, data)
            self.interrupt("write")
            return taken

        def sync(self, descriptor: int) -> None:
            super().sync(descriptor)
            self.interrupt("sync")

        def interrupt(self, place: str) -> None:
            if self.at == place:
                self.at = ""
                signal.raise_signal(signal.SIGINT)

    disk = Interrupted()
    with station.open(disk=disk) as journal:
        header = station.header(journal)
        journal.open_run(header)
        disk.at = call
        with pytest.raises(KeyboardInterrupt):
            journal.append_step(header, "all", (good_current(), bad_node()))
        journal.close_run(RunResult(header, (), Verdict.STOPPED, "stopped by a person", 1.0))
    (run,) = runs_of(station.root, "PT-2612-0001")
    assert (run.verdict, run.complete, len(run.readings)) == (Verdict.STOPPED, True, 2)
    assert verify_journal(journal.folder) is None
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_after_a_failed_sync_nothing_more_is_written(station: Station) -> None:
    disk = FullDisk()
    with station.open(disk=disk) as journal:
        header = station.header(journal)
        journal.open_run(header)
        disk.sync_fails = True
        with pytest.raises(RecordsUnsafe, match="durable"):
            journal.append_step(header, "current", (good_current(),))
        disk.sync_fails = False
        with pytest.raises(RecordsUnsafe, match="start again"):
            journal.close_run(RunResult(header, (), Verdict.PASS, "", 1.0))
    with station.open() as journal:
        assert journal.recovered == (f"run {header.run} of PT-2612-0001 was CUT SHORT",)


def test_a_torn_end_that_could_not_be_cut_off_is_found_at_the_next_start(station: Station) -> None:
    disk = FullDisk()
    with station.open(disk=disk) as journal:
        station.run_unit(journal)
        header = station.header(journal)
        journal.open_run(header)
        disk.room, disk.truncate_fails = 100, True
        with pytest.raises(RecordsUnsafe, match="No space left"):
            journal.append_step(header, "current", (good_current(),))
    with station.open() as journal:
        assert "100 bytes of a torn row" in journal.recovered[0]
        assert "CUT SHORT" in journal.recovered[1]
    assert verify_journal(journal.folder) is None


def test_a_file_that_another_program_saved_over_in_a_run_is_noticed(station: Station) -> None:
    with station.open() as journal:
        header = station.header(journal)
        journal.open_run(header)
        assert journal.path is not None
        copy = journal.path.with_name("copy")
        copy.write_bytes(journal.path.read_bytes())
        copy.replace(journal.path)
        with pytest.raises(RecordsUnsafe, match="replaced by another program"):
            journal.append_step(header, "current", (good_current(),))


def test_between_runs_a_file_that_was_replaced_is_left_alone_and_a_new_one_begun(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal)
        assert journal.path is not None
        first = journal.path
        copy = first.with_name("copy")
        copy.write_bytes(first.read_bytes())
        copy.replace(first)
        station.run_unit(journal)
        assert journal.path.name == "2026-01-12.2.csv"
        assert "replaced by another program" in journal.recovered[-1]
    assert verify_journal(journal.folder) is None
    assert len(runs_of(station.root, "PT-2612-0001")) == 2


def test_a_file_that_a_spreadsheet_holds_stops_no_test(station: Station) -> None:
    class Held(Disk):
        def open_append(self, path: Path) -> int:
            if path.name == "2026-01-12.csv":
                raise PermissionError(13, "held by another program")
            return super().open_append(path)

    with station.open() as journal:
        journal.open_run(station.header(journal))
    with station.open(disk=Held()) as journal:
        assert "held by another program" in journal.recovered[0]
        station.run_unit(journal)
    assert verify_journal(journal.folder) is None
    assert [run.verdict.value for run in runs_of(station.root, "PT-2612-0001")] == ["CUT SHORT", "PASS"]


def test_a_file_that_a_spreadsheet_rewrote_is_left_alone_and_numbers_go_on(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal)
        path = journal.path
    assert path is not None
    spoiled = path.read_bytes().replace(b"\r\n", b"\n").replace(b"0.00083", b"8.3E-4")
    path.write_bytes(spoiled)
    with station.open() as journal:
        assert "saved over by another program" in journal.recovered[0]
        station.run_unit(journal)
        assert [row["sequence"] for row in cells(journal.path)] == ["5", "6", "7", "8"]
    assert path.read_bytes() == spoiled
    assert verify_journal(journal.folder) is not None


def test_a_file_of_a_version_with_fewer_columns_is_read_but_not_continued(station: Station) -> None:
    from fixture.records.codec import check_of

    names = ["row", "bench", "bench_kind", "run", "sequence", "serial", "verdict", "previous", "check"]
    old = station.root / "logs/simulated/demo/2026-01-12.csv"
    old.parent.mkdir(parents=True)
    lines = b""
    for number, (kind, verdict) in enumerate((("opened", ""), ("closed", "PASS")), start=1):
        body = f"{kind},demo,simulated,r1,{number},PT-2612-0001,{verdict},{'0' * 64},".encode()
        lines += body + check_of(body) + b"\r\n"
    old.write_bytes(",".join(names).encode() + b"\r\n" + lines)
    before = old.read_bytes()
    with station.open() as journal:
        station.run_unit(journal)
        assert journal.path is not None
        assert journal.path.name == "2026-01-12.2.csv"
        assert cells(journal.path)[0]["sequence"] == "3"
    assert old.read_bytes() == before
    assert [run.verdict for run in runs_of(station.root, "PT-2612-0001")] == [Verdict.PASS, Verdict.PASS]


def test_a_clock_that_goes_back_is_marked_and_the_order_stays(station: Station) -> None:
    with station.open(REAL) as journal:
        first = station.run_unit(journal, verdict=Verdict.FAIL)
        station.clocks.wall -= timedelta(hours=1)  # set back, the steady clock goes on
        second = station.run_unit(journal, verdict=Verdict.PASS)
    rows = list(read_rows(journal.folder / "2026-01-12.csv"))
    assert [row.clock_suspect for row in rows] == [False] * 4 + [True] * 4
    runs = runs_of(station.root, "PT-2612-0001")
    assert [run.run for run in runs] == [first.run, second.run]
    assert [run.clock_suspect for run in runs] == [False, True]
    assert verify_chain(journal.folder / "2026-01-12.csv") is None


def test_a_clock_set_back_over_a_pause_is_marked_by_the_steady_clock(station: Station) -> None:
    with station.open(REAL) as journal:
        station.run_unit(journal)
        station.clocks.advance(7200)
        station.clocks.wall -= timedelta(hours=1)  # still later than the last row
        station.run_unit(journal)
    assert [run.clock_suspect for run in runs_of(station.root, "PT-2612-0001")] == [False, True]


def test_a_simulated_bench_whose_clock_runs_ahead_is_not_marked(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal)
        station.clocks.steady_s += 3600
        station.run_unit(journal)
    assert not any(run.clock_suspect for run in runs_of(station.root, "PT-2612-0001"))


def test_a_clock_at_its_epoch_after_a_flat_battery_is_marked_and_the_chain_holds(station: Station) -> None:
    wall = station.clocks.wall
    for moment in (wall, datetime(1970, 1, 1, 0, 1, tzinfo=UTC), wall + timedelta(hours=1)):
        station.clocks.wall = moment
        with station.open(REAL) as journal:
            station.run_unit(journal)
    names = sorted(path.name for path in journal.folder.glob("*.csv"))
    assert names == ["1970-01-01.csv", "2026-01-12.2.csv", "2026-01-12.csv"]
    assert verify_journal(journal.folder) is None
    runs = runs_of(station.root, "PT-2612-0001")
    assert [run.sequence for run in runs] == [1, 5, 9]
    assert [run.clock_suspect for run in runs] == [False, True, False]


def test_times_keep_their_offset_and_the_end_of_summer_time_is_no_step_back(station: Station) -> None:
    from zoneinfo import ZoneInfo

    zone = ZoneInfo("Europe/Vienna")
    station.clocks.wall = datetime(2026, 10, 25, 0, 59, 59, tzinfo=UTC).astimezone(zone)
    with station.open(REAL) as journal:
        station.run_unit(journal)
        station.clocks.wall = datetime(2026, 10, 25, 1, 0, 1, tzinfo=UTC).astimezone(zone)
        station.run_unit(journal)
        rows = cells(journal.path)
    assert rows[0]["time"].startswith("2026-10-25T02:59:59") and rows[0]["time"].endswith("+02:00")
    assert rows[4]["time"].startswith("2026-10-25T02:00:01") and rows[4]["time"].endswith("+01:00")
    assert {row["clock_suspect"] for row in rows} == {"false"}


def test_calls_out_of_order_are_programming_errors(station: Station, journal: Journal) -> None:
    header = station.header(journal)
    with pytest.raises(ValueError, match="not open"):
        journal.append_step(header, "a", (good_current(),))
    journal.open_run(header)
    with pytest.raises(ValueError, match="not closed yet"):
        journal.open_run(header)
    with pytest.raises(ValueError, match="offset"), station.open(REAL) as other:
        other.open_run(station.header(other, started=datetime(2026, 1, 1)))


def test_the_column_table_is_what_logs_readme_says() -> None:
    readme = (Path(__file__).parents[2] / "logs" / "README.md").read_text("utf-8")
    told = re.findall(r"^\| `(\w+)` \| (.+) \|$", readme, re.MULTILINE)
    assert told == [(column.name, column.doc) for column in COLUMNS]
