"""Which lines of an input are scans, which are answers, and which belong to nobody."""

from __future__ import annotations

import io
import os
import queue
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from fixture.cli.input_lines import InputLines


class Typist:
    """Hands chunks of bytes over when the test says so; `wait_until_read` returns when all were sorted."""

    def __init__(self) -> None:
        self._chunks: queue.Queue[bytes] = queue.Queue()
        self._handed_over = False

    def read(self) -> bytes:
        if self._handed_over:
            self._chunks.task_done()
        chunk = self._chunks.get()
        self._handed_over = True
        return chunk

    def type(self, text: str) -> None:
        self.send(text.encode())

    def send(self, chunk: bytes) -> None:
        self._chunks.put(chunk)

    def wait_until_read(self) -> None:
        self._chunks.join()

    def end(self) -> None:
        self.send(b"")


@pytest.fixture
def typist() -> Iterator[Typist]:
    typing = Typist()
    yield typing
    typing.end()


def terminal(typist: Typist) -> InputLines:
    return InputLines(typist.read, live=True, discards=True)


def pipe(typist: Typist) -> InputLines:
    return InputLines(typist.read, live=False, discards=True)


def test_scans_come_one_after_another_until_the_end() -> None:
    lines = InputLines.of(io.StringIO("PT-2612-0001\r\n\n   \npt-2612-0002"))
    assert [lines.next_scan() for _ in range(6)] == ["PT-2612-0001", "", "   ", "pt-2612-0002", None, None]


def test_a_file_of_serials_is_tested_to_its_end(tmp_path: Path) -> None:
    path = tmp_path / "serials.txt"
    path.write_text("PT-2612-0001\nPT-2612-0002\n")
    with path.open() as stream:
        lines = InputLines.of(stream)
        assert lines.next_scan() == "PT-2612-0001"
        with lines.testing() as unused:
            pass
        assert unused == []
        assert (lines.next_scan(), lines.next_scan()) == ("PT-2612-0002", None)


def test_nothing_is_read_before_somebody_waits(typist: Typist) -> None:
    lines = pipe(typist)
    typist.type("PT-2612-0001\n")
    with lines.testing() as unused:
        pass
    assert unused == []
    assert lines.next_scan() == "PT-2612-0001"


@pytest.mark.parametrize("make", [terminal, pipe])
def test_a_scan_during_a_test_belongs_to_no_unit(typist: Typist, make: type) -> None:
    lines: InputLines = make(typist)
    typist.type("PT-2612-0001\n")
    assert lines.next_scan() == "PT-2612-0001"
    with lines.testing() as unused:
        typist.type("PT-2612-0002\n\n")
        typist.wait_until_read()
    assert unused == ["PT-2612-0002"]
    typist.type("PT-2612-0003\n")
    assert lines.next_scan() == "PT-2612-0003"


def test_what_was_piped_in_before_is_tested_in_order(typist: Typist) -> None:
    lines = pipe(typist)
    typist.type("PT-2612-0001\nPT-2612-0002\n")
    assert lines.next_scan() == "PT-2612-0001"
    with lines.testing() as unused:
        pass
    assert unused == []
    assert lines.next_scan() == "PT-2612-0002"


def test_what_was_typed_ahead_on_a_terminal_is_not(typist: Typist) -> None:
    lines = terminal(typist)
    typist.type("PT-2612-0001\nPT-2612-0002\n")
    assert lines.next_scan() == "PT-2612-0001"
    typist.wait_until_read()
    with lines.testing() as unused:
        pass
    assert unused == ["PT-2612-0002"]


def test_an_answer_is_taken_only_when_it_was_asked_for(typist: Typist) -> None:
    lines = terminal(typist)
    typist.type("PT-2612-0001\n")
    assert lines.next_scan() == "PT-2612-0001"
    with lines.testing() as unused:
        typist.type("too early\n")
        typist.wait_until_read()
        later = threading.Timer(0.1, typist.type, ("4.7\n",))
        later.start()
        assert lines.readline() == "4.7\n"
        later.join()
    assert unused == ["too early"]


def test_answers_may_be_piped_in_beforehand(typist: Typist) -> None:
    lines = pipe(typist)
    typist.type("\n4.7\n")
    typist.end()
    with lines.testing():
        assert [lines.readline(), lines.readline(), lines.readline()] == ["\n", "4.7\n", ""]


def test_a_chunk_may_end_in_the_middle_of_a_line_and_of_a_letter(typist: Typist) -> None:
    lines = pipe(typist)
    whole = "PT-2612–0001\n".encode()
    for part in (whole[:8], whole[8:]):
        typist.send(part)
    assert lines.next_scan() == "PT-2612–0001"


def test_bytes_that_are_no_text_are_a_scan_that_no_model_owns() -> None:
    reader, writer = os.pipe()
    os.write(writer, b"\xff\xfe\x00\n")
    os.close(writer)
    with os.fdopen(reader) as stream:
        assert InputLines.of(stream).next_scan() == "\ufffd\ufffd\x00"


def test_a_terminal_that_was_closed_has_ended() -> None:
    def read() -> bytes:
        raise OSError("hung up")

    assert InputLines(read, live=True, discards=True).next_scan() is None


def test_waiting_can_be_broken_off(typist: Typist) -> None:
    import signal

    class Enough(Exception):
        pass

    def raise_it(*_: object) -> None:
        raise Enough

    before = signal.signal(signal.SIGINT, raise_it)
    try:
        threading.Timer(0.1, signal.raise_signal, (signal.SIGINT,)).start()
        started = time.monotonic()
        with pytest.raises(Enough):
            terminal(typist).next_scan()
        assert time.monotonic() - started < 2.0
    finally:
        signal.signal(signal.SIGINT, before)
