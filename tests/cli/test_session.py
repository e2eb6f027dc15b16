"""``toeline test`` on doubles of bench and records: serials, views, JSON, scans, prompts, exit codes."""

from __future__ import annotations

import io
import json
from collections.abc import Callable, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from drivers.errors import LinkDown
from drivers.roles import Operator, Prompt
from fixture.bench.placing import Placement
from fixture.bench.planted import plant_faults
from fixture.cli.session import TestSession, TestWishes
from fixture.cli.surroundings import Surroundings
from fixture.domain.model import Model, Procedure
from fixture.domain.options import ReadingSpec
from fixture.domain.reading import Curve, Reading
from fixture.domain.run import BenchIdentity
from fixture.errors import BadInput, CannotMeasure, RecordsUnsafe, UnknownModel, UnknownSerial
from fixture.judge.decide import judge_reading
from fixture.sequence.stopping import StopFlag, StopRequested
from tests.sequence.bench_double import MIDDAY, GivenReadings, NotingBench, NotingJournal, volts

LIMITS = """
format = 1
[model]
name = "peat"
title = "Peat germanium fuzz"
maker = "Brindlecombe Pedal Works"
serial_pattern = 'PT-\\d{4}-\\d{4}'
serial_example = "PT-2612-0001"
default_procedure = "line"
[revision]
number = 4
author = "A. Tester"
date = 2026-12-01
reason = "for a test"
basis = "predicted"
[supply]
volts = "9 V"
ground = "positive"
current_limit = "20 mA"
over_voltage = "10 V"
[controls.fuzz]
param = "fuzz"
[procedures.line]
title = "On the line"
[[procedures.line.steps]]
name = "Rails"
kind = "given"
controls = { fuzz = "high" }
limits.rail = { low = "-9.2 V", high = "-8.8 V" }
limits.open_end = { low = "-", high = "1 V" }
"""

GOOD = (volts("rail", -9.0), volts("open_end", 0.5))


class AskingBench(NotingBench):
    """A bench whose controls are set by asking the operator."""

    operator: Operator | None = None

    def set_controls(self, positions: Mapping[str, float]) -> None:
        super().set_controls(positions)
        assert self.operator is not None
        self.operator.ask(Prompt("Fuzz fully right.", positions))


@dataclass
class Counter:
    """A counter in front of a session: what is typed, shown and complained of."""

    root: Path
    typed: str = ""
    given: tuple[Any, ...] = GOOD
    promised: tuple[Any, ...] = ("rail", "open_end")
    kind: Any = "simulated"
    bench: AskingBench = field(default_factory=AskingBench)
    journal: NotingJournal = field(default_factory=NotingJournal)
    stop: StopFlag = field(default_factory=StopFlag)
    out: io.StringIO = field(default_factory=io.StringIO)
    err: io.StringIO = field(default_factory=io.StringIO)
    opened: list[Placement | None] = field(default_factory=list)
    fails_to_open: list[Exception] = field(default_factory=list)
    journal_fails: Exception | None = None

    def session(self, **wishes: Any) -> TestSession:
        kind = GivenReadings("given", self.given, promised=self.promised)
        return TestSession(
            Surroundings(
                root=self.root,
                identity=BenchIdentity("bench-a", self.kind, {}),
                kinds={"given": kind},
                judge=judge_reading,
                open_bench=self.open_bench,
                open_journal=self.open_journal,
                now=lambda: MIDDAY,
                stdin=io.StringIO(self.typed),
                stdout=self.out,
                stderr=self.err,
            ),
            TestWishes(operator="A. Tester", **wishes),
            self.stop,
        )

    def open_bench(
        self,
        place: Placement | None,
        *,
        model: Model,
        procedure: Procedure,
        operator: Operator,
        pace: str,
        notice: Callable[[str], None],
    ) -> AskingBench:
        if self.fails_to_open:
            raise self.fails_to_open.pop(0)
        self.opened.append(place)
        self.bench.operator = operator
        notice("compiling something")
        return self.bench

    @contextmanager
    def open_journal(self, bench: BenchIdentity, *, monotonic: Callable[[], float]) -> Any:
        if self.journal_fails is not None:
            raise self.journal_fails
        yield self.journal


@pytest.fixture
def counter(tmp_path: Path) -> Counter:
    folder = tmp_path / "limits" / "peat"
    folder.mkdir(parents=True)
    (folder / "limits.toml").write_text(LIMITS, encoding="utf-8")
    return Counter(tmp_path)


def test_a_good_unit_is_zero_and_shown_beside_its_limits(counter: Counter) -> None:
    assert counter.session().test_one(" pt-2612-0001 ") == 0
    shown = counter.out.getvalue()
    lines = shown.splitlines()
    assert lines[0] == "... compiling something"
    assert lines[1] == "PT-2612-0001  Peat germanium fuzz, limits revision 4 (predicted)"
    assert "SIMULATED BENCH: no real pedal is tested" in lines[2]
    assert "[0/1] power on" in lines and "[1/1] Rails" in lines
    assert "  > Fuzz fully right." in lines
    (rail,) = (line for line in lines if " rail " in line)
    assert rail.split() == ["+", "PASS", "rail", "-9.000", "V", "-9.200", "V", "to", "-8.800", "V"]
    assert "outputs off, verified" in lines
    assert lines[-1].startswith("+ PASS  PT-")
    header = counter.journal.opened[0]
    assert (header.serial, header.scanned, header.operator) == ("PT-2612-0001", " pt-2612-0001 ", "A. Tester")
    assert counter.bench.log[-1] == "bench.close"


def test_a_failed_unit_is_one_and_says_what_failed_in_words(counter: Counter) -> None:
    counter.given = (volts("rail", -5.0), volts("open_end", 0.5))
    assert counter.session().test_one("PT-2612-0001") == 1
    lines = counter.out.getvalue().splitlines()
    assert any(line.startswith("x FAIL  PT-") for line in lines)
    (said,) = (line for line in lines if line.startswith("  x Rails: rail "))
    assert "allowed" in said
    assert lines[-2] == "history of this unit: toeline trace PT-2612-0001"


def test_a_bench_that_breaks_down_is_three(counter: Counter) -> None:
    def gone() -> None:
        raise LinkDown("meter: gone")

    counter.given = (gone,)
    assert counter.session().test_one("PT-2612-0001") == 3
    assert "? NOT MEASURED  PT-2612-0001: Rails: meter: gone" in counter.out.getvalue()
    assert "! bench: Rails: meter: gone" in counter.out.getvalue()


@pytest.mark.parametrize(("by", "code"), [("SIGINT", 130), ("SIGTERM", 143), ("SIGHUP", 129)])
def test_a_stopped_run_has_the_code_of_its_signal(counter: Counter, by: str, code: int) -> None:
    counter.given = (GOOD[0], lambda: counter.stop.request(by), GOOD[1])
    assert counter.session().test_one("PT-2612-0001") == code
    assert "! STOPPED  PT-" in counter.out.getvalue()
    assert counter.journal.closed[0].verdict.value == "STOPPED"


def test_json_is_one_object_with_what_was_promised(counter: Counter) -> None:
    assert counter.session(as_json=True).test_one("PT-2612-0001") == 0
    found = json.loads(counter.out.getvalue())
    assert {name: found[name] for name in ("serial", "model", "verdict", "bench", "run")} == {
        "serial": "PT-2612-0001",
        "model": "peat",
        "verdict": "PASS",
        "bench": "bench-a",
        "run": "bench-a-20260302-S000001",
    }
    rail, open_end = found["readings"]
    wanted = ("step", "name", "value", "unit", "low", "high", "verdict")
    assert [rail[key] for key in wanted] == ["Rails", "rail", -9.0, "V", -9.2, -8.8, "PASS"]
    assert [open_end[key] for key in wanted] == ["Rails", "open_end", 0.5, "V", None, 1.0, "PASS"]
    assert found["curves"] == {}


def test_in_json_what_is_not_a_number_is_null_and_a_curve_has_its_mask(counter: Counter) -> None:
    file = counter.root / "limits" / "peat" / "limits.toml"
    text = file.read_text(encoding="utf-8").replace(
        'limits.open_end = { low = "-", high = "1 V" }',
        'limits.response = { mask = [[100, -3, 3], [1000, -1, 1], [10000, "-", 3]] }',
    )
    file.write_text(text, encoding="utf-8")
    curve = Curve("response", np.array([50.0, 100.0, 10**2.5, 2000.0]), np.array([0.5, 0.0, 0.0, -np.inf]))
    counter.given = (Reading("rail", float("nan"), "V"), Reading("response", 0.0, "dB", curve=curve))
    counter.promised = (ReadingSpec("rail", "V"), ReadingSpec("response", "dB", is_curve=True))
    assert counter.session(as_json=True).test_one("PT-2612-0001") == 3
    found = json.loads(counter.out.getvalue(), parse_constant=pytest.fail)
    assert found["readings"][0]["value"] is None
    assert found["readings"][0]["verdict"] == "NOT MEASURED"
    response = found["curves"]["response"]
    assert response["hz"] == pytest.approx([50.0, 100.0, 10**2.5, 2000.0])
    assert response["db"] == [0.5, 0.0, 0.0, None]
    # straight over log frequency: half way between 100 Hz and 1 kHz, half way between the bounds
    assert response["low_db"] == [None, -3.0, pytest.approx(-2.0), None]
    assert response["high_db"][:3] == [None, 3.0, pytest.approx(2.0)]
    assert response["high_db"][3] == pytest.approx(1.0 + 2.0 * np.log10(2.0))


@pytest.mark.parametrize(
    ("scanned", "wishes", "error", "said"),
    [
        ("QQ-1", {}, UnknownSerial, "PT-2612-0001"),
        ("???", {}, BadInput, "not a serial"),
        ("PT-2612-0001", {"model": "peet"}, UnknownModel, "did you mean peat"),
        ("QQ-1", {"model": "peat"}, UnknownSerial, "look like PT-2612-0001"),
        ("PT-2612-0001", {"procedure": "lime"}, BadInput, "did you mean line"),
        ("PT-2612-0001", {"plant": ("open R3",)}, CannotMeasure, "no \\[circuit\\]"),
    ],
)
def test_bad_input_touches_neither_bench_nor_records(
    counter: Counter, scanned: str, wishes: dict[str, Any], error: type[Exception], said: str
) -> None:
    with pytest.raises(error, match=said):
        counter.session(**wishes).test_one(scanned)
    assert counter.opened == [] and counter.journal.opened == [] and counter.bench.log == []


@pytest.mark.parametrize("wishes", [{"plant": ("open R3",)}, {"mend": True}])
def test_faults_are_refused_on_a_real_bench(counter: Counter, wishes: dict[str, Any]) -> None:
    counter.kind = "real"
    with pytest.raises(BadInput, match="bench bench-a is real"):
        counter.session(hands="scripted", **wishes).test_one("PT-2612-0001")
    assert counter.opened == []


def test_planted_faults_stay_with_the_serial_until_mended(counter: Counter) -> None:
    plant_faults(counter.root, "PT-2612-0001", ["open R3"])
    counter.session().test_one("PT-2612-0001")
    counter.session().test_one("PT-2612-0002")
    counter.session(mend=True).test_one("PT-2612-0001")
    counter.session().test_one("PT-2612-0001")
    placed = [place.plant for place in counter.opened if place is not None]
    assert placed == [("open R3",), (), (), ()]
    assert [header.planted for header in counter.journal.opened] == placed
    assert "planted in this unit: open R3" in counter.out.getvalue()


def test_records_that_cannot_be_kept_start_no_test(counter: Counter) -> None:
    counter.journal_fails = RecordsUnsafe("logs is read-only")
    with pytest.raises(RecordsUnsafe):
        counter.session().test_one("PT-2612-0001")
    assert counter.opened == []


def test_scans_are_tested_one_after_another_until_the_input_ends(counter: Counter) -> None:
    counter.typed = "PT-2612-0001\n\n  \nPT-2612-0002\r\nPT-2612-0003"
    assert counter.session().test_scans() == 0
    assert [header.serial for header in counter.journal.opened] == [
        "PT-2612-0001",
        "PT-2612-0002",
        "PT-2612-0003",
    ]


def test_a_bad_scan_or_a_bench_that_does_not_answer_does_not_end_the_session(counter: Counter) -> None:
    counter.typed = "QQ-1\nPT-2612-0001\nPT-2612-0002\n"
    counter.fails_to_open = [LinkDown("supply: nobody answers")]
    assert counter.session().test_scans() == 3
    complaints = counter.err.getvalue()
    assert "QQ-1" in complaints and "supply: nobody answers" in complaints
    assert [header.serial for header in counter.journal.opened] == ["PT-2612-0002"]


def test_the_gravest_code_of_many_units_counts(counter: Counter) -> None:
    counter.typed = "PT-2612-0001\nPT-2612-0002\n"
    counter.given = (volts("rail", -5.0), GOOD[1])
    assert counter.session().test_scans() == 1


def test_records_that_become_unsafe_end_the_session(counter: Counter) -> None:
    def full() -> None:
        raise RecordsUnsafe("disk full")

    counter.typed = "PT-2612-0001\nPT-2612-0002\n"
    counter.journal.on = {"append_step": full}
    with pytest.raises(RecordsUnsafe):
        counter.session().test_scans()
    assert len(counter.journal.opened) == 1
    assert "PASS  PT-" not in counter.out.getvalue()


def test_a_stop_ends_the_session_after_the_run_was_closed(counter: Counter) -> None:
    counter.typed = "PT-2612-0001\nPT-2612-0002\n"
    counter.given = (lambda: counter.stop.request("SIGTERM"), *GOOD)
    assert counter.session().test_scans() == 143
    assert len(counter.journal.closed) == 1


def test_a_stop_while_nothing_runs_leaves_no_run(counter: Counter) -> None:
    counter.stop.request("SIGINT")
    with pytest.raises(StopRequested):
        counter.session().test_scans()
    assert counter.journal.opened == []


def test_faults_need_a_serial(counter: Counter) -> None:
    with pytest.raises(BadInput, match="go with a serial"):
        counter.session(plant=("open R3",)).test_scans()


def test_a_person_confirms_prompts_with_enter_and_a_scan_is_no_answer(counter: Counter) -> None:
    counter.typed = "PT-2612-0009\n\n"
    assert counter.session(hands="terminal").test_one("PT-2612-0001") == 0
    shown = counter.out.getvalue()
    assert "press Enter when done" in shown
    assert "'PT-2612-0009' is no answer" in shown
    assert [header.serial for header in counter.journal.opened] == ["PT-2612-0001"]


def test_without_anybody_to_answer_the_unit_is_not_measured(counter: Counter) -> None:
    assert counter.session(hands="terminal").test_one("PT-2612-0001") == 3
    assert "nobody answers the prompts" in counter.out.getvalue()


def test_json_with_prompts_keeps_stdout_for_the_object(counter: Counter) -> None:
    counter.typed = "\n"
    assert counter.session(as_json=True, hands="terminal").test_one("PT-2612-0001") == 0
    assert json.loads(counter.out.getvalue())["verdict"] == "PASS"
    assert "Fuzz fully right." in counter.err.getvalue()


def test_a_view_that_breaks_is_said_and_stops_no_test(counter: Counter) -> None:
    class Broken(io.StringIO):
        def write(self, text: str) -> int:
            if "power on" in text:
                raise BrokenPipeError("nobody reads")
            return super().write(text)

    counter.out = Broken()
    assert counter.session().test_one("PT-2612-0001") == 0
    assert len(counter.journal.closed) == 1
    assert "recorded: PASS" in counter.err.getvalue()


def test_outputs_that_could_not_be_seen_off_are_no_success(counter: Counter) -> None:
    bench = counter.bench
    bench.on = {"power_on": lambda: setattr(bench, "safe_problems", ("SUPPLY MAY BE ON",))}
    assert counter.session().test_one("PT-2612-0001") == 3
    assert "! SUPPLY MAY BE ON" in counter.out.getvalue()
    assert "PASS" in counter.out.getvalue()
