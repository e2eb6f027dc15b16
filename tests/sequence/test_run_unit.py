"""One run on doubles of bench and records."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from typing import Any

import pytest

from drivers.errors import LinkDown, ProtectionTripped, WrongInstrument
from fixture.domain.events import (
    BenchTrouble,
    RunClosed,
    RunOpened,
    SafeStateReached,
    StepClosed,
    StepStarted,
)
from fixture.domain.limits import Limits
from fixture.domain.verdict import Verdict
from fixture.errors import CannotMeasure, RecordsUnsafe
from fixture.sequence.stopping import StopRequested, stop_signals
from tests.sequence.bench_double import GivenReadings, step, volts
from tests.sequence.conftest import Line

NINE = {"rail": Limits(-9.2, -8.8, "V")}
GOOD = [volts("rail", -9.0)]
BAD = [volts("rail", -5.0)]


def raising(error: BaseException) -> Callable[[], None]:
    def act() -> None:
        raise error

    return act


def test_identities_come_before_power_and_rows_before_words(line: Line) -> None:
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert result.verdict is Verdict.PASS
    assert line.log == [
        "bench.check_identities",
        "bench.safe_state",
        "journal.open_run",
        "told.RunOpened",
        "told.StepStarted",
        "bench.power_on",
        "told.StepClosed",
        "told.StepStarted",
        "journal.append_step",
        "told.StepClosed",
        "bench.safe_state",
        "told.SafeStateReached",
        "journal.close_run",
        "told.RunClosed",
    ]


def test_events_carry_what_the_records_have(line: Line) -> None:
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE), planted=("open R3",))
    opened, closed = line.told.events[0], line.told.events[-1]
    assert isinstance(opened, RunOpened) and isinstance(closed, RunClosed)
    assert opened.steps == ("power on", "rails")
    assert opened.header == line.journal.opened[0]
    assert opened.header.planted == ("open R3",)
    assert (opened.header.attempt, opened.header.ambient_celsius) == (1, 23.0)
    assert closed.result == result == line.journal.closed[0]
    told = [event for event in line.told.events if isinstance(event, StepClosed)]
    assert list(told[1].readings) == line.journal.rows["rails"] == list(result.readings)
    started = [event for event in line.told.events if isinstance(event, StepStarted)]
    assert [(event.index, event.name) for event in started] == [(0, "power on"), (1, "rails")]


def test_elapsed_time_is_the_time_of_the_bench(line: Line) -> None:
    result = line.test({"nodes": [volts("a", 1.0), volts("b", 1.0)]}, step("rails", "nodes"))
    assert [one.elapsed_s for one in result.readings] == [0.5, 1.0]
    assert result.elapsed_s == 1.0


def test_knobs_are_set_before_their_step(line: Line) -> None:
    line.test({"nodes": GOOD}, step("rails", "nodes", controls={"fuzz": 1.0}))
    order = [
        entry
        for entry in line.log
        if entry in ("bench.set_controls", "bench.power_on", "journal.append_step")
    ]
    assert order == ["bench.power_on", "bench.set_controls", "journal.append_step"]


def test_a_failed_step_lets_the_others_run_on_unless_it_says_stop(line: Line) -> None:
    kinds = {"bad": BAD, "good": GOOD}
    first = line.test(kinds, step("one", "bad", NINE), step("two", "good", NINE))
    assert first.verdict is Verdict.FAIL
    assert {reading.step for reading in first.readings} == {"one", "two"}
    again = line.test(kinds, step("one", "bad", NINE, on_fail="stop"), step("two", "good", NINE))
    assert again.verdict is Verdict.FAIL
    assert {reading.step for reading in again.readings} == {"one"}
    assert "1 step not done" in again.reason


def test_a_bench_that_breaks_down_says_nothing_of_the_unit(line: Line) -> None:
    kinds = {"dies": [volts("a", 1.0), raising(LinkDown("meter: gone")), volts("b", 1.0)], "good": GOOD}
    result = line.test(kinds, step("one", "dies"), step("two", "good"))
    assert result.verdict is Verdict.NOT_MEASURED
    assert "meter: gone" in result.reason
    rows = {row.reading.name: row for row in line.journal.rows["one"]}
    assert rows["a"].verdict is Verdict.PASS
    assert rows["b"].verdict is Verdict.NOT_MEASURED
    assert rows["b"].reading.why_not == "meter: gone"
    assert "two" not in line.journal.rows
    assert BenchTrouble("one: meter: gone") in line.told.events
    assert not line.bench.powered


def test_the_outputs_go_off_before_the_rows_of_a_broken_step_are_written(line: Line) -> None:
    line.test({"dies": [raising(LinkDown("gone"))]}, step("one", "dies"))
    safe = len(line.log) - 1 - line.log[::-1].index("bench.safe_state")
    assert line.log.count("bench.safe_state") == 2  # once before the run, once for it
    assert safe < line.log.index("journal.close_run")


def test_a_measured_failure_outweighs_a_bench_that_breaks_down_later(line: Line) -> None:
    kinds = {"bad": BAD, "dies": [raising(CannotMeasure("no probe TP9"))]}
    result = line.test(kinds, step("one", "bad", NINE), step("two", "dies"))
    assert result.verdict is Verdict.FAIL
    assert "no probe TP9" in result.reason


def test_a_step_that_is_not_required_may_be_left_unmeasured(line: Line) -> None:
    kinds = {
        "dies": GivenReadings("dies", [raising(LinkDown("gone"))], promised=["a"]),
        "good": GOOD,
    }
    result = line.test(kinds, step("one", "dies", required=False), step("two", "good", NINE))
    assert result.verdict is Verdict.PASS
    assert line.journal.rows["one"][0].verdict is Verdict.NOT_MEASURED


def test_a_required_step_that_gives_less_than_promised_never_passes(line: Line) -> None:
    kinds = {"short": GivenReadings("short", [volts("a", 1.0)], promised=["a", "b"])}
    result = line.test(kinds, step("one", "short"))
    assert result.verdict is Verdict.NOT_MEASURED
    assert line.journal.rows["one"][1].reading.why_not == "the step ended without it"


def test_a_run_that_measured_nothing_does_not_pass(line: Line) -> None:
    assert line.test({"none": []}, step("one", "none")).verdict is Verdict.NOT_MEASURED


def test_a_unit_that_holds_the_supply_in_its_limit_fails(line: Line) -> None:
    line.bench.limited = True
    wanted = {"supply_current": Limits(0.5e-3, 0.9e-3, "A")}
    result = line.test({"nodes": GOOD}, step("current", "nodes", wanted))
    assert result.verdict is Verdict.FAIL
    (reading,) = result.readings
    assert (reading.step, reading.reading.name) == ("power on", "supply_current")
    assert reading.reading.note == "draws at least the limit of 20 mA"
    assert reading.distance == pytest.approx(0.9e-3 - 20e-3)
    assert line.bench.clock.seconds >= 101.0  # a good unit's capacitors were given their time
    assert "bench.set_state" not in line.log and not line.bench.powered


def test_inrush_that_ends_is_no_failure(line: Line) -> None:
    limited = iter([True, True, False])
    line.bench.in_current_limit = lambda: next(limited)  # type: ignore[method-assign]
    assert line.test({"nodes": GOOD}, step("rails", "nodes", NINE)).verdict is Verdict.PASS


@pytest.mark.parametrize(("limited", "verdict"), [(True, Verdict.FAIL), (False, Verdict.NOT_MEASURED)])
def test_a_tripped_protection_blames_the_unit_only_with_the_current_limit_at_work(
    line: Line, limited: bool, verdict: Verdict
) -> None:
    line.bench.limited = limited
    line.bench.on = {"power_on": raising(ProtectionTripped("supply: the protection has acted"))}
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert result.verdict is verdict
    assert not line.bench.powered
    assert line.journal.closed == [result]


def test_another_instrument_than_the_bench_file_says_powers_and_records_nothing(line: Line) -> None:
    line.bench.on = {"check_identities": raising(WrongInstrument("supply: somebody else"))}
    with pytest.raises(WrongInstrument):
        line.test({"nodes": GOOD}, step("rails", "nodes"))
    assert line.log == ["bench.check_identities"]


def test_an_output_that_cannot_be_seen_off_stops_the_test_before_it_begins(line: Line) -> None:
    line.bench.safe_problems = ("SUPPLY MAY BE ON",)
    with pytest.raises(CannotMeasure, match="SUPPLY MAY BE ON"):
        line.test({"nodes": GOOD}, step("rails", "nodes"))
    assert "journal.open_run" not in line.log and "bench.power_on" not in line.log


def test_what_could_not_be_verified_at_the_end_stands_in_the_closing_row(line: Line) -> None:
    answers = iter([(), ("relays not opened: gone",)])
    line.bench.safe_state = lambda: next(answers)  # type: ignore[method-assign]
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert line.journal.closed[0].bench_problems == ("relays not opened: gone",)
    assert SafeStateReached(("relays not opened: gone",)) in line.told.events
    assert result.verdict is Verdict.PASS


def test_a_safe_state_that_raises_is_tried_again_and_then_told_plainly(line: Line) -> None:
    attempts: list[int] = []

    def fail_from_the_second_on() -> None:
        attempts.append(1)
        if len(attempts) > 1:
            raise OSError("no such device")

    line.bench.on = {"safe_state": fail_from_the_second_on}
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert len(attempts) == 4
    assert "THE SUPPLY MAY STILL BE ON" in result.bench_problems[0]


@pytest.mark.parametrize("where", ["open_run", "append_step", "close_run"])
def test_no_verdict_is_told_when_records_are_unsafe(line: Line, where: str) -> None:
    line.journal.on = {where: raising(RecordsUnsafe("disk full"))}
    with pytest.raises(RecordsUnsafe):
        line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert not any(isinstance(event, RunClosed) for event in line.told.events)
    assert not any(isinstance(event, StepClosed) and event.readings for event in line.told.events[:3])
    assert not line.bench.powered
    if where == "open_run":
        assert "bench.power_on" not in line.log
    else:
        assert line.log.count("bench.safe_state") == 2


def test_a_programming_error_in_a_step_switches_off_closes_and_is_not_hidden(line: Line) -> None:
    with pytest.raises(ZeroDivisionError):
        line.test({"breaks": [volts("a", 1.0), lambda: 1 / 0]}, step("one", "breaks"))
    assert not line.bench.powered
    assert line.journal.closed[0].verdict is Verdict.NOT_MEASURED
    assert "internal error: ZeroDivisionError" in line.journal.closed[0].reason
    assert [row.reading.name for row in line.journal.rows["one"]] == ["a"]


def test_a_programming_error_in_the_journal_switches_off(line: Line) -> None:
    line.journal.on = {"append_step": raising(ValueError("no such run"))}
    with pytest.raises(ValueError, match="no such run"):
        line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert not line.bench.powered


def test_a_broken_listener_is_dropped_and_stops_no_test(line: Line) -> None:
    calls: list[Any] = []

    def breaks(event: Any) -> None:
        calls.append(event)
        raise BrokenPipeError("nobody reads")

    line.listeners = [breaks]
    assert line.test({"nodes": GOOD}, step("rails", "nodes", NINE)).verdict is Verdict.PASS
    assert len(calls) == 1
    assert isinstance(line.told.events[-1], RunClosed)


@pytest.mark.parametrize("by", ["SIGINT", "SIGTERM"])
def test_a_stop_requested_in_a_step_closes_the_run_as_stopped(line: Line, by: str) -> None:
    kinds = {"long": [volts("a", 1.0), lambda: line.stop.request(by), volts("b", 1.0), volts("c", 1.0)]}
    result = line.test(kinds, step("one", "long"), step("two", "long"))
    assert result.verdict is Verdict.STOPPED
    assert [row.reading.name for row in line.journal.rows["one"]] == ["a", "b"]
    assert "two" not in line.journal.rows
    assert line.journal.closed == [result]
    assert not line.bench.powered
    assert line.stop.by == by


@pytest.mark.parametrize("where", ["power_on", "set_controls"])
def test_ctrl_c_in_the_bench_closes_the_run_as_stopped(line: Line, where: str) -> None:
    line.bench.on = {where: raising(KeyboardInterrupt())}
    result = line.test({"nodes": GOOD}, step("rails", "nodes", controls={"fuzz": 1.0}))
    assert result.verdict is Verdict.STOPPED
    assert result.reason == "Ctrl-C was pressed"
    assert line.journal.closed == [result]
    assert not line.bench.powered


def test_ctrl_c_while_the_outputs_are_switched_off_does_not_keep_them_on(line: Line) -> None:
    calls: list[int] = []

    def interrupted_once() -> None:
        calls.append(1)
        if len(calls) == 2:
            line.bench.powered = True
            raise KeyboardInterrupt

    line.bench.on = {"safe_state": interrupted_once}
    result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
    assert len(calls) == 3
    assert not line.bench.powered
    assert result.verdict is Verdict.STOPPED
    assert line.journal.closed == [result]


def test_a_stop_before_the_run_is_opened_leaves_no_row(line: Line) -> None:
    line.stop.request("SIGTERM")
    with pytest.raises(StopRequested) as stopped:
        line.test({"nodes": GOOD}, step("rails", "nodes"))
    assert stopped.value.by == "SIGTERM"
    assert line.log == []


@pytest.mark.skipif(os.name == "nt", reason="signals of another process are a matter of POSIX")
@pytest.mark.parametrize(
    "moment", ["check_identities", "power_on", "set_controls", "safe_state", "append_step", "close_run"]
)
def test_a_real_signal_at_any_moment_leaves_everything_off_and_the_run_closed(
    line: Line, moment: str
) -> None:
    def press() -> None:
        os.kill(os.getpid(), signal.SIGINT)
        os.kill(os.getpid(), signal.SIGINT)  # impatient

    line.bench.on = line.journal.on = {moment: press}
    opened = moment not in ("check_identities", "safe_state")  # the first safe state comes before the run
    with stop_signals(line.stop):
        if opened:
            result = line.test({"nodes": GOOD}, step("rails", "nodes", NINE, controls={"fuzz": 0.0}))
            assert line.journal.closed == [result]
            assert result.verdict is (Verdict.PASS if moment == "close_run" else Verdict.STOPPED)
        else:
            with pytest.raises(StopRequested):
                line.test({"nodes": GOOD}, step("rails", "nodes", NINE))
            assert line.journal.opened == []
    assert line.stop.by == "SIGINT"
    assert not line.bench.powered


def test_signal_handlers_are_put_back(line: Line) -> None:
    before = signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)
    with stop_signals(line.stop):
        assert signal.getsignal(signal.SIGINT) != before[0]
    assert (signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)) == before
