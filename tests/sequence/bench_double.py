"""A bench, a journal, step kinds and a judge that note what is asked of them, in one common list."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

import numpy as np

from drivers.roles import Measured
from fixture.bench.facade import Capture, FixtureState
from fixture.domain.events import Event
from fixture.domain.limits import Limits, Mask
from fixture.domain.model import Model, NodeSpec, Procedure, Revision, StepSpec, SupplySpec
from fixture.domain.options import Option, ReadingSpec
from fixture.domain.reading import Reading
from fixture.domain.run import BenchIdentity, JudgedReading, RunHeader, RunResult
from fixture.domain.verdict import Verdict

IDENTITY = BenchIdentity("bench-a", "simulated", {"supply": "a supply", "multimeter": "a meter"})
MIDDAY = datetime(2026, 3, 2, 12, 0, tzinfo=UTC)


@dataclass
class BenchClock:
    seconds: float = 100.0

    def monotonic_s(self) -> float:
        return self.seconds

    def sleep(self, seconds: float) -> None:
        self.seconds += seconds


@dataclass
class NotingBench:
    """Does nothing but note; `on` maps a method's name to what happens when it is called."""

    log: list[str] = field(default_factory=list)
    on: Mapping[str, Callable[[], Any]] = field(default_factory=dict)
    limited: bool = False
    identity: BenchIdentity = IDENTITY
    clock: BenchClock = field(default_factory=BenchClock)
    mains_hz: float = 50.0
    rate_hz: int = 48000
    safe_problems: tuple[str, ...] = ()
    powered: bool = False

    def _note(self, what: str) -> Any:
        self.log.append(f"bench.{what}")
        happens = self.on.get(what)
        return happens() if happens is not None else None

    def check_identities(self) -> None:
        self._note("check_identities")

    def read_ambient_celsius(self) -> float | None:
        return 23.0

    def set_state(self, state: FixtureState) -> None:
        self._note("set_state")

    def set_controls(self, positions: Mapping[str, float]) -> None:
        self._note("set_controls")

    def power_on(self, supply: SupplySpec) -> None:
        self.powered = True
        self._note("power_on")

    def power_off(self) -> None:
        self.powered = False

    def read_node(self, node: NodeSpec, *, expect_volts: float | None = None) -> Measured:
        return Measured(-4.5, "V", 1e-3)

    def read_rail(self) -> Measured:
        return Measured(-9.0, "V", 1e-3)

    def read_supply_current(self) -> Measured:
        return Measured(0.7e-3, "A", 1e-6)

    def in_current_limit(self) -> bool:
        return self.limited

    def play_record(self, emf_volts: Any) -> Capture:
        return Capture(emf_volts, np.zeros_like(emf_volts), self.rate_hz, 0.0, False, 1.0)

    def safe_state(self) -> tuple[str, ...]:
        self.powered = False
        self._note("safe_state")
        return self.safe_problems

    def close(self) -> None:
        self._note("close")


@dataclass
class NotingJournal:
    """Keeps everything in lists; `on` maps a method's name to what happens before it is kept."""

    log: list[str] = field(default_factory=list)
    on: Mapping[str, Callable[[], Any]] = field(default_factory=dict)
    rows: dict[str, list[JudgedReading]] = field(default_factory=dict)
    opened: list[RunHeader] = field(default_factory=list)
    closed: list[RunResult] = field(default_factory=list)

    def _happens(self, what: str) -> None:
        self.log.append(f"journal.{what}")
        if what in self.on:
            self.on[what]()

    def next_run(self) -> str:
        return f"bench-a-20260302-S{len(self.opened) + 1:06d}"

    def next_attempt(self, serial: str) -> int:
        return 1 + sum(header.serial == serial for header in self.opened)

    def open_run(self, header: RunHeader) -> None:
        self._happens("open_run")
        self.opened.append(header)

    def append_step(self, header: RunHeader, step: str, judged: Sequence[JudgedReading]) -> None:
        self._happens("append_step")
        self.rows.setdefault(step, []).extend(judged)

    def close_run(self, result: RunResult) -> None:
        self._happens("close_run")
        self.closed.append(result)


@dataclass(frozen=True)
class NoOptions:
    pass


@dataclass
class GivenReadings:
    """A step kind that yields what it was given; a callable among the readings is called instead."""

    kind: str
    given: Sequence[Reading | Callable[[], Any]]
    promised: Sequence[str | ReadingSpec] = ()
    title: str = "given readings"
    doc: str = ""
    options: tuple[Option, ...] = ()
    options_type: type[Any] = NoOptions

    def readings(self, options: Any, model_nodes: tuple[str, ...]) -> tuple[ReadingSpec, ...]:
        names = self.promised or [one.name for one in self.given if isinstance(one, Reading)]
        return tuple(name if isinstance(name, ReadingSpec) else ReadingSpec(name, "V") for name in names)

    def run(self, step: StepSpec, model: Model, bench: Any) -> Iterator[Reading]:
        for one in self.given:
            if isinstance(one, Reading):
                bench.clock.sleep(0.5)
                yield one
            else:
                one()


def judge_plainly(
    step: str, reading: Reading, limits: Limits | Mask | None, *, elapsed_s: float
) -> JudgedReading:
    """Simple acceptance, written out here so that these tests rest on nothing else."""
    verdict, distance = Verdict.PASS, None
    if reading.value is None:
        verdict = Verdict.NOT_MEASURED
    elif isinstance(limits, Limits):
        distances = [
            *([reading.value - limits.low] if limits.low is not None else []),
            *([limits.high - reading.value] if limits.high is not None else []),
        ]
        distance = min(distances)
        verdict = Verdict.PASS if distance >= 0 else Verdict.FAIL
    said = f"{reading.name} {reading.value} {reading.unit}"
    return JudgedReading(step, reading, limits, verdict, distance, said, elapsed_s)


def volts(name: str, value: float | None) -> Reading:
    return Reading(name, value, "V", u=1e-3)


def step(
    name: str,
    kind: str,
    limits: Mapping[str, Limits | Mask] | None = None,
    **more: Any,
) -> StepSpec:
    return StepSpec(name, kind, NoOptions(), limits=limits or {}, **more)


def model_with(*steps: StepSpec) -> Model:
    procedure = Procedure("line", "On the line", steps)
    return Model(
        name="peat",
        title="Peat",
        maker="Brindlecombe Pedal Works",
        serial_pattern=r"PT-\d{4}-\d{4}",
        serial_example="PT-2612-0001",
        revision=Revision(3, "A. Tester", date(2026, 3, 1), "first limits", "predicted"),
        supply=SupplySpec(9.0, "positive", 0.02, 9.6),
        nodes={},
        controls={},
        circuit=None,
        spreads=(),
        procedures={"line": procedure},
        default_procedure="line",
        path=Path("limits/peat/limits.toml"),
        digest="0" * 64,
    )


class ToldEvents:
    """A listener that notes the type of each event in the common list and keeps the event."""

    def __init__(self, log: list[str]) -> None:
        self.log = log
        self.events: list[Event] = []

    def __call__(self, event: Event) -> None:
        self.log.append(f"told.{type(event).__name__}")
        self.events.append(event)
