"""Doubles of bench and records for the sequence; `line` puts them together."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import pytest

from fixture.domain.model import StepSpec
from fixture.domain.run import RunResult
from fixture.sequence.run_unit import run_unit
from fixture.sequence.stopping import StopFlag
from tests.sequence.bench_double import (
    MIDDAY,
    GivenReadings,
    NotingBench,
    NotingJournal,
    ToldEvents,
    judge_plainly,
    model_with,
)


@dataclass
class Line:
    """A test line of doubles; everything that happens is in `log`."""

    log: list[str] = field(default_factory=list)
    bench: NotingBench = field(init=False)
    journal: NotingJournal = field(init=False)
    told: ToldEvents = field(init=False)
    stop: StopFlag = field(default_factory=StopFlag)
    listeners: list[Any] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.bench = NotingBench(self.log)
        self.journal = NotingJournal(self.log)
        self.told = ToldEvents(self.log)

    def test(self, kinds: dict[str, list[Any]], *steps: StepSpec, **more: Any) -> RunResult:
        model = model_with(*steps)
        made = {
            name: given if hasattr(given, "run") else GivenReadings(name, given)
            for name, given in kinds.items()
        }
        return run_unit(
            model=model,
            procedure=model.procedures["line"],
            serial="PT-2612-0001",
            scanned="pt-2612-0001",
            bench=self.bench,
            journal=self.journal,
            kinds=made,
            judge=judge_plainly,
            operator="A. Tester",
            now=lambda: MIDDAY,
            software="toeline test",
            listeners=[self.told, *self.listeners],
            stop=self.stop,
            **more,
        )


@pytest.fixture
def line() -> Line:
    return Line()
