"""Rows as bytes: RFC 4180, the check, the chain; read by programs nobody here wrote."""

from __future__ import annotations

import csv
import hashlib
import io
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import duckdb
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.domain.verdict import Verdict
from fixture.records import COLUMNS, Row, read_rows, verify_chain, verify_journal
from fixture.records.codec import GENESIS, RowDecoder, clean_text, encode_cell, seal, split_rows
from fixture.records.columns import HEADER
from tests.records.station import Station, bad_node, good_current

NASTY = [
    'comma, quote " and ""two""',
    "line\nbreak",
    "line\r\nbreak",
    "lone \r return",
    "\r\n",
    '"',
    '""',
    ",",
    "=1+1",
    "=cmd|' /C calc'!A0",
    "+1",
    "-1",
    "@SUM(A1)",
    "NA",
    "NULL",
    "nan",
    "None",
    "true",
    "007",
    "1e5",
    "#comment",
    " space around ",
    "\ttab\t",
    "Ω µ ° − 名 🎸",
    "\ufeffmark",
    "é e\u0301",
    "back\\slash\\n",
    "'single'",
    "\u2028line separator\x85",
    "\x00 nul",
]
TEXT_COLUMNS = [c.name for c in COLUMNS[:-2] if c.type == "str" and c.name not in ("bench", "run", "serial")]
NAMES = [column.name for column in COLUMNS]


# SOURCE: RFC 4180, section 2, rules 5, 6 and 7 with their own examples.
@pytest.mark.parametrize(
    ("cells", "line"),
    [
        (["aaa", "bbb", "ccc"], "aaa,bbb,ccc"),
        (["aaa", "b\r\nbb", "ccc"], 'aaa,"b\r\nbb",ccc'),
        (["aaa", 'b"bb', "ccc"], 'aaa,"b""bb",ccc'),
    ],
)
def test_cells_are_quoted_as_in_the_examples_of_rfc_4180(cells: list[str], line: str) -> None:
    assert ",".join(encode_cell(cell) for cell in cells) == line


@given(st.lists(st.text(), min_size=2, max_size=6))
def test_the_csv_module_reads_every_text_back(texts: list[str]) -> None:
    line = ",".join(encode_cell(text) for text in texts)
    read = list(csv.reader(io.StringIO(line + "\r\n", newline=""), strict=True))
    assert read == [[clean_text(text) for text in texts]]


def test_what_no_csv_reader_takes_becomes_the_replacement_character() -> None:
    assert clean_text("a\0b") == "a\ufffdb"
    assert "\ufffd" in clean_text("x\ud800y")
    assert clean_text("Ω🎸") == "Ω🎸"


texts = st.text().map(clean_text)
numbers = st.none() | st.floats(allow_nan=False)
zones = st.integers(-14 * 60, 14 * 60).map(lambda minutes: timezone(timedelta(minutes=minutes)))
rows = st.builds(
    Row,
    row=st.sampled_from(["opened", "reading", "closed", "recovered"]),
    bench=st.just("demo"),
    bench_kind=st.sampled_from(["real", "simulated", "mixed"]),
    run=st.just("demo-1"),
    sequence=st.integers(0, 10**12),
    serial=texts,
    scanned=texts,
    model=texts,
    revision=st.none() | st.integers(),
    step=texts,
    reading=texts,
    value=numbers,
    unit=texts,
    low=numbers,
    high=numbers,
    u=numbers,
    verdict=st.none() | st.sampled_from(Verdict),
    distance=numbers,
    said=texts,
    note=texts,
    time=st.none() | st.datetimes(timezones=zones),
    monotonic_s=numbers,
    clock_suspect=st.booleans(),
    operator=texts,
    attempt=st.none() | st.integers(1, 9),
    rows=st.none() | st.integers(2, 99),
)


@given(st.lists(rows, min_size=1, max_size=5))
def test_rows_come_back_from_their_bytes_as_they_were(written: list[Row]) -> None:
    data, previous = b"", GENESIS
    for row in written:
        sealed = seal(row, previous)
        data, previous = data + sealed.line, sealed.digest
    pieces = list(split_rows(data, 0))
    assert [piece.whole for piece in pieces] == [True] * len(written)
    decoder = RowDecoder(NAMES)
    for row, piece in zip(written, pieces, strict=True):
        read = decoder.decode(data[piece.start : piece.end - 2])
        for column in COLUMNS[:-2]:
            assert getattr(read, column.name) == getattr(row, column.name), column.name


@given(rows, st.integers(min_value=0), st.integers(1, 255))
def test_a_row_with_any_changed_byte_is_not_whole(row: Row, place: int, flip: int) -> None:
    line = bytearray(seal(row, GENESIS).line)
    line[place % len(line)] ^= flip
    assert [piece.whole for piece in split_rows(bytes(line), 0)] != [True]


def test_the_check_and_the_chain_are_sha_256_as_the_column_table_says(station: Station) -> None:
    with station.open() as journal:
        station.run_unit(journal)
        assert journal.path is not None
        lines = journal.path.read_bytes().split(b"\r\n")
    assert lines[0] == HEADER
    previous = "0" * 64
    for line in lines[1:-1]:
        body, check = line[:-16], line[-16:].decode()
        assert hashlib.sha256(body).hexdigest()[:16] == check
        assert line.split(b",")[-2].decode() == previous
        previous = hashlib.sha256(line).hexdigest()
    assert lines[-1] == b""


def write_nasty(station: Station) -> Path:
    with station.open() as journal:
        for text in NASTY:
            station.run_unit(
                journal,
                scanned=text,
                operator=text,
                software=text,
                procedure=text,
                model=text,
                planted=(text,),
                steps=((text, (good_current(said=text), bad_node())),),
            )
        assert journal.path is not None
        return journal.path


def test_csv_module_pandas_and_duckdb_read_equal_cells_from_nasty_text(station: Station) -> None:
    path = write_nasty(station)
    with path.open(newline="", encoding="utf-8") as file:
        by_csv = list(csv.reader(file, strict=True))[1:]
    assert len(by_csv) == 4 * len(NASTY)
    told = [row[NAMES.index("said")] for row in by_csv if row[0] == "reading"][::2]
    assert told == [clean_text(text) for text in NASTY]

    by_pandas = pd.read_csv(path, dtype=str, keep_default_na=False, encoding="utf-8")
    assert by_pandas.to_numpy().tolist() == by_csv

    query = "SELECT * FROM read_csv(?, header=true, all_varchar=true, quote='\"', escape='\"', delim=',', {})"
    settings = "auto_detect=false, nullstr=chr(1), columns=" + repr(dict.fromkeys(NAMES, "VARCHAR"))
    by_duckdb = duckdb.execute(query.format(settings), [str(path)]).fetchall()
    assert [["" if cell is None else cell for cell in row] for row in by_duckdb] == by_csv

    ours = list(read_rows(path))
    assert [[encode_raw(getattr(row, name)) for name in NAMES] for row in ours] == by_csv
    assert verify_chain(path) is None


def encode_raw(value: object) -> str:
    return value if isinstance(value, str) else encode_cell(value)


def lines_of(path: Path) -> list[bytes]:
    return path.read_bytes().split(b"\r\n")


def write_two_runs(station: Station) -> Path:
    with station.open() as journal:
        station.run_unit(journal)
        station.run_unit(journal, "PT-2612-0002")
        assert journal.path is not None
        return journal.path


def test_an_edited_cell_is_found(station: Station) -> None:
    path = write_two_runs(station)
    path.write_bytes(path.read_bytes().replace(b"-8.71", b"-4.71", 1))
    fault = verify_chain(path)
    assert fault is not None
    assert fault.row == 3
    assert "not as it was written" in str(fault)
    assert len(list(read_rows(path))) == 7  # the rows around it are still read


def test_an_edited_cell_with_a_new_check_is_found_by_the_row_after_it(station: Station) -> None:
    path = write_two_runs(station)
    lines = lines_of(path)
    body = lines[3][:-16].replace(b"-8.71", b"-4.71")
    lines[3] = body + hashlib.sha256(body).hexdigest()[:16].encode()
    path.write_bytes(b"\r\n".join(lines))
    fault = verify_chain(path)
    assert fault is not None
    assert (fault.row, "the row before was changed" in fault.text) == (4, True)


def test_a_removed_row_is_found(station: Station) -> None:
    path = write_two_runs(station)
    lines = lines_of(path)
    del lines[3]
    path.write_bytes(b"\r\n".join(lines))
    fault = verify_chain(path)
    assert fault is not None
    assert (fault.row, "removed" in fault.text) == (3, True)


def test_a_removed_first_row_is_found_in_the_whole_journal(station: Station) -> None:
    path = write_two_runs(station)
    lines = lines_of(path)
    del lines[1]
    path.write_bytes(b"\r\n".join(lines))
    fault = verify_journal(path.parent)
    assert fault is not None
    assert fault.row == 1


def test_swapped_rows_are_found(station: Station) -> None:
    path = write_two_runs(station)
    lines = lines_of(path)
    lines[2], lines[3] = lines[3], lines[2]
    path.write_bytes(b"\r\n".join(lines))
    fault = verify_chain(path)
    assert fault is not None
    assert (fault.row, "moved" in fault.text) == (2, True)


def test_a_removed_file_is_found_in_the_journal(station: Station) -> None:
    for _ in range(3):
        write_two_runs(station)
        station.clocks.advance(86400)
    folder = station.root / "logs/simulated/demo"
    assert verify_journal(folder) is None
    (folder / "2026-01-13.csv").unlink()
    fault = verify_journal(folder)
    assert fault is not None
    assert fault.path.name == "2026-01-14.csv"


def test_an_untouched_time_reads_back_with_its_offset() -> None:
    moment = datetime(2026, 1, 12, 9, 0, 0, 5, tzinfo=timezone(timedelta(hours=1)))
    assert encode_cell(moment) == "2026-01-12T09:00:00.000005+01:00"
    assert datetime.fromisoformat(encode_cell(moment)) == moment.astimezone(UTC)
