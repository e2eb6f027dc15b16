"""The program on a terminal of its own: live view, scans, prompts, Ctrl-C."""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

SOURCES = Path(__file__).parents[2]
PATIENCE_S = 120  # the first run on a machine compiles the engine

pytestmark = [
    pytest.mark.skipif(sys.platform == "win32", reason="there are no pseudo-terminals"),
    pytest.mark.filterwarnings("ignore:This process .* is multi-threaded:DeprecationWarning"),
]

Start = Callable[..., Any]


@pytest.fixture
def start(root: Path) -> Iterator[Start]:
    """Start the program on a pseudo-terminal."""
    import pexpect

    started = []

    def spawn(*arguments: str, **environment: str) -> Any:
        around = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "TERM")}
        child = pexpect.spawn(
            sys.executable,
            ["-m", "fixture.cli", "--root", str(root), *arguments],
            cwd=str(SOURCES),
            env={**around, "TERM": "xterm-256color", "PYTHONIOENCODING": "utf-8", **environment},
            encoding="utf-8",
            dimensions=(40, 140),
            timeout=PATIENCE_S,
        )
        started.append(child)
        return child

    yield spawn
    for child in started:
        child.close(force=True)


def exit_code(child: Any) -> int | None:
    import pexpect

    child.expect(pexpect.EOF)
    child.wait()
    code: int | None = child.exitstatus
    return code


def test_the_live_view_shows_each_reading_and_the_verdict_by_word_and_sign(start: Start) -> None:
    child = start("test", "PT-2612-0001")
    child.expect("PT-2612-0001  Peat")
    child.expect("SIMULATED BENCH")
    child.expect("supply current")
    child.expect(r"\+ PASS  PT-")
    assert exit_code(child) == 0


@pytest.mark.parametrize("plain", [{"NO_COLOR": "1"}, {"TERM": "dumb"}])
def test_whoever_wants_no_colour_gets_no_escape_sequence(start: Start, plain: dict[str, str]) -> None:
    child = start("test", "PT-2612-0001", **plain)
    child.expect(r"\+ PASS  PT-")
    assert "\x1b" not in child.before
    assert exit_code(child) == 0


def test_units_are_scanned_one_after_another_and_a_scan_in_between_is_not_used(start: Start) -> None:
    child = start("test")
    child.expect("scan the next serial")
    child.sendline("PT-2612-0001")
    child.expect("attempt 1")  # the run is open
    child.sendline("PT-2612-0099")
    child.expect(r"PASS  PT-")
    child.expect("'PT-2612-0099' was scanned during the test and not used")
    child.expect("scan the next serial")
    child.sendline("pt-2612-0002")
    child.expect("PT-2612-0002  Peat")
    child.expect("scan the next serial")
    child.sendeof()
    assert exit_code(child) == 0


def test_a_person_answers_prompts_with_enter_and_a_scan_is_no_answer(start: Start) -> None:
    child = start("test", "PT-2612-0001", "--hands", "terminal")
    child.expect("press Enter when done")
    child.sendline("PT-2612-0002")
    child.expect("is no answer")
    for _ in range(3):
        child.expect("press Enter when done")
        child.sendline("")
    child.expect(r"\+ PASS  PT-")
    assert exit_code(child) == 0


def test_ctrl_c_at_a_prompt_switches_off_and_closes_the_run_as_stopped(start: Start, root: Path) -> None:
    child = start("test", "PT-2612-0001", "--hands", "terminal")
    child.expect("press Enter when done")
    child.sendintr()
    child.expect("outputs off, verified")
    child.expect("! STOPPED  PT-2612-0001: Ctrl-C was pressed")
    assert exit_code(child) == 130
    history = start("trace", "PT-2612-0001")
    history.expect("! STOPPED")
    assert exit_code(history) == 0


@pytest.mark.parametrize("pause_s", [0.0, 0.05, 0.15])
def test_a_second_ctrl_c_changes_nothing(start: Start, pause_s: float) -> None:
    child = start("test", "PT-2612-0001", "--hands", "terminal")
    child.expect("press Enter when done")
    child.sendintr()
    time.sleep(pause_s)  # into the cleaning up, the words, the end of Python
    child.sendintr()
    child.expect("outputs off, verified")
    child.expect("! STOPPED  PT-2612-0001: Ctrl-C was pressed")
    assert exit_code(child) == 130


def test_ctrl_c_while_a_scan_is_waited_for_ends_the_session(start: Start) -> None:
    child = start("test")
    child.expect("scan the next serial")
    child.sendintr()
    assert exit_code(child) == 130


def test_a_second_test_is_refused_while_one_holds_the_bench(start: Start) -> None:
    first = start("test")
    first.expect("scan the next serial")
    second = start("test", "PT-2612-0001")
    second.expect("bench demo is in use")
    assert exit_code(second) == 3
    first.sendeof()
    assert exit_code(first) == 0


@pytest.mark.parametrize(
    ("sent", "code", "words"),
    [
        (signal.SIGTERM, 143, r"the system ended the program \(SIGTERM\)"),
        (signal.SIGHUP, 129, r"the terminal was closed \(SIGHUP\)"),
    ],
)
def test_termination_closes_the_run(start: Start, sent: signal.Signals, code: int, words: str) -> None:
    child = start("test", "PT-2612-0001", "--hands", "terminal")
    child.expect("press Enter when done")
    os.kill(child.pid, sent)
    child.expect(f"! STOPPED  PT-2612-0001: .*{words}")
    assert exit_code(child) == code
