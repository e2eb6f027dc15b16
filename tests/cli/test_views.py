"""What is seen while a unit is tested: lines for files, a live view for terminals."""

from __future__ import annotations

import io
from collections.abc import Sequence

import pytest

from fixture.cli.plain import PlainView
from fixture.cli.reading_words import gauge, limits_words, value_words
from fixture.cli.terminal import LiveView, reading_lines
from fixture.cli.views import View, make_view, suits_live_view
from fixture.domain.events import (
    BenchTrouble,
    Event,
    OperatorAsked,
    RunClosed,
    RunOpened,
    SafeStateReached,
    StepClosed,
    StepStarted,
)
from fixture.domain.limits import Limits, Mask
from fixture.domain.reading import Reading
from fixture.domain.run import JudgedReading, RunHeader, RunResult
from fixture.domain.verdict import Verdict
from tests.sequence.bench_double import IDENTITY, MIDDAY, model_with

MODEL = model_with()
HEADER = RunHeader(
    run="bench-a-20260302-S000001",
    serial="PT-2612-0001",
    scanned="PT-2612-0001",
    model="peat",
    revision=3,
    limits_digest="0" * 64,
    procedure="line",
    bench=IDENTITY,
    operator="A. Tester",
    attempt=2,
    started=MIDDAY,
    started_monotonic_s=100.0,
    ambient_celsius=23.0,
    software="toeline test",
    planted=("open C1",),
)
MASK = Mask(((20.0, -3.0, None), (20000.0, -6.0, 1.0)))


def judged(
    name: str,
    value: float | None,
    unit: str,
    verdict: Verdict,
    limits: Limits | Mask | None = None,
    why_not: str | None = None,
) -> JudgedReading:
    reading = Reading(name, value, unit, why_not=why_not)
    return JudgedReading("Bias", reading, limits, verdict, None, f"{name} said in words", 1.0)


COLLECTOR = judged("q2_collector", -8.71, "V", Verdict.FAIL, Limits(-6.0, -3.2, "V"))
CURRENT = judged("supply_current", 702.1e-6, "A", Verdict.PASS, Limits(500e-6, 900e-6, "A"))
RESPONSE = judged("response", None, "dB", Verdict.NOT_MEASURED, MASK, why_not="too little output to judge it")
READINGS = (CURRENT, COLLECTOR, RESPONSE)


def whole_run(verdict: Verdict = Verdict.FAIL, problems: Sequence[str] = ()) -> list[Event]:
    result = RunResult(HEADER, READINGS, verdict, "1 of 3 readings outside the limits", 12.0)
    return [
        RunOpened(HEADER, ("power on", "Bias")),
        StepStarted(0, "power on", "power on"),
        StepClosed(0, "power on", Verdict.PASS, (), 0.1),
        StepStarted(1, "Bias", "node_voltages"),
        OperatorAsked("Fuzz fully right."),
        BenchTrouble("Bias: the meter does not answer"),
        StepClosed(1, "Bias", Verdict.FAIL, READINGS, 3.0),
        SafeStateReached(tuple(problems)),
        RunClosed(result),
    ]


class FakeTerminal(io.StringIO):
    encoding = "utf-8"

    def isatty(self) -> bool:
        return True


def show(view: View, events: Sequence[Event]) -> None:
    for event in events:
        view(event)
    view.close()


def plain_text(events: Sequence[Event]) -> str:
    stream = io.StringIO()
    show(PlainView(MODEL, stream), events)
    return stream.getvalue()


def live_text(events: Sequence[Event], monkeypatch: pytest.MonkeyPatch, width: int = 80) -> str:
    monkeypatch.setenv("COLUMNS", str(width))
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    stream = FakeTerminal()
    show(LiveView(MODEL, stream), events)
    return stream.getvalue()


@pytest.fixture(params=["plain", "live"])
def text(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> str:
    return plain_text(whole_run()) if request.param == "plain" else live_text(whole_run(), monkeypatch)


@pytest.mark.parametrize(
    "words",
    [
        "PT-2612-0001  Peat, limits revision 3 (predicted)",
        "SIMULATED BENCH",
        "planted in this unit: open C1",
        "Bias",
        "> Fuzz fully right.",
        "! bench: Bias: the meter does not answer",
        "+ PASS",
        "702.1 µA",
        "500.0 µA to 900.0 µA",
        "x FAIL",
        "-8.710 V",
        "? NOT MEASURED",
        "not measured",
        "mask 20 Hz to 20 kHz",
        "too little output to judge it",
        "outputs off, verified",
        "x FAIL  PT-2612-0001: 1 of 3 readings outside the limits",
        "  x Bias: q2_collector said in words",
        "toeline trace PT-2612-0001",
    ],
)
def test_both_views_say_everything_in_words(text: str, words: str) -> None:
    assert words in text


def test_a_unit_that_passes_is_not_sent_to_its_history() -> None:
    assert "toeline trace" not in plain_text(whole_run(Verdict.PASS))


def test_outputs_that_may_be_on_are_said(monkeypatch: pytest.MonkeyPatch) -> None:
    events = whole_run(problems=["SUPPLY MAY BE ON, switch it off by hand: link down"])
    for shown in (plain_text(events), live_text(events, monkeypatch, 200)):
        assert "! SUPPLY MAY BE ON, switch it off by hand" in shown
        assert "outputs off, verified" not in shown


@pytest.mark.parametrize("width", [80, 100, 140])
@pytest.mark.parametrize("one", READINGS)
def test_no_word_and_no_figure_is_cut_on_a_terminal(one: JudgedReading, width: int) -> None:
    lines = list(reading_lines(one, width))
    shown = "\n".join(line.plain for line in lines)
    for words in (one.verdict.value, value_words(one), limits_words(one.limits), one.reading.why_not or ""):
        assert words in shown
    assert all(line.cell_len <= width for line in lines)


def test_readings_stand_in_the_same_columns() -> None:
    first, second = (next(iter(reading_lines(one, 80))).plain for one in (CURRENT, COLLECTOR))
    assert first.index("500.0 µA to") == second.index("-6.000 V to")


@pytest.mark.parametrize(
    ("value", "drawn"),
    [
        (0.0, " |o--------| "),
        (8.0, " |--------o| "),
        (4.0, " |----o----| "),
        (-0.1, "<|---------| "),
        (8.1, " |---------|>"),
    ],
)
def test_the_gauge_shows_where_a_reading_lies_between_its_limits(value: float, drawn: str) -> None:
    assert gauge(judged("a", value, "V", Verdict.PASS, Limits(0.0, 8.0, "V")), 9) == drawn


def test_there_is_no_gauge_without_two_limits_and_a_value() -> None:
    both, one_side = Limits(0.0, 1.0, "V"), Limits(None, 1.0, "V")
    assert gauge(judged("a", None, "V", Verdict.NOT_MEASURED, both), 9) == ""
    assert gauge(judged("a", 0.5, "V", Verdict.PASS, one_side), 9) == ""
    assert gauge(judged("a", 0.5, "dB", Verdict.PASS, MASK), 9) == ""


@pytest.mark.parametrize(
    ("limits", "words"),
    [
        (None, ""),
        (Limits(None, None, "V"), ""),
        (Limits(None, 5e-3, "A"), "at most 5.000 mA"),
        (Limits(1.0, None, "V"), "at least 1.000 V"),
        (MASK, "mask 20 Hz to 20 kHz"),
    ],
)
def test_limits_are_said_as_a_person_would(limits: Limits | Mask | None, words: str) -> None:
    assert limits_words(limits) == words


@pytest.mark.parametrize(
    ("stream", "environment", "live"),
    [
        (FakeTerminal(), {"TERM": "xterm"}, True),
        (FakeTerminal(), {"TERM": "dumb"}, False),
        (FakeTerminal(), {"TERM": "xterm", "NO_COLOR": "1"}, False),
        (
            FakeTerminal(),
            {"TERM": "xterm", "NO_COLOR": ""},
            True,
        ),  # no-color.org: "when present and not empty"
        (io.StringIO(), {"TERM": "xterm"}, False),
    ],
)
def test_the_live_view_is_for_capable_terminals_only(
    stream: io.StringIO, environment: dict[str, str], live: bool
) -> None:
    assert suits_live_view(stream, environment) is live
    view = make_view(MODEL, stream, environment=environment)
    view.close()
    assert isinstance(view, LiveView if live else PlainView)


def test_a_wait_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = io.StringIO()
    PlainView(MODEL, stream).notice("compiling")
    assert stream.getvalue() == "... compiling\n"
    monkeypatch.setenv("COLUMNS", "80")
    monkeypatch.setenv("TERM", "xterm")
    terminal = FakeTerminal()
    view = LiveView(MODEL, terminal)
    view.notice("compiling")
    view.close()
    assert "compiling" in terminal.getvalue()
