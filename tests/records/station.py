"""A bench, its clocks and what a run says, for the tests of the records."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from fixture.domain.limits import Limits, Mask
from fixture.domain.reading import Curve, Reading
from fixture.domain.run import BenchIdentity, JudgedReading, RunHeader, RunResult
from fixture.domain.verdict import Verdict
from fixture.records import Journal
from fixture.records.disk import Disk

SIMULATED = BenchIdentity("demo", "simulated", {"supply": "toeline,simulated supply,S-0001,1.0"})
REAL = BenchIdentity("north", "real", {"supply": "maker,model,1,1"})


@dataclass
class Clocks:
    """A wall clock and a steady clock that move when told to."""

    wall: datetime = datetime(2026, 1, 12, 8, 0, tzinfo=UTC)
    steady_s: float = 100.0

    def now(self) -> datetime:
        return self.wall

    def monotonic(self) -> float:
        return self.steady_s

    def advance(self, seconds: float) -> None:
        self.wall = (self.wall.astimezone(UTC) + timedelta(seconds=seconds)).astimezone(self.wall.tzinfo)
        self.steady_s += seconds


@dataclass
class Station:
    """Runs units on a journal in `root`."""

    root: Path
    clocks: Clocks = field(default_factory=Clocks)

    def open(self, bench: BenchIdentity = SIMULATED, disk: Disk | None = None) -> Journal:
        return Journal.open(self.root, bench, now=self.clocks.now, monotonic=self.clocks.monotonic, disk=disk)

    def header(self, journal: Journal, serial: str = "PT-2612-0001", **given: object) -> RunHeader:
        what: dict[str, object] = {
            "run": journal.next_run(),
            "serial": serial,
            "scanned": f" {serial.lower()}",
            "model": "peat",
            "revision": 1,
            "limits_digest": "ab" * 32,
            "procedure": "line",
            "bench": journal.bench,
            "operator": "Ada",
            "attempt": journal.next_attempt(serial),
            "started": self.clocks.now(),
            "started_monotonic_s": self.clocks.monotonic(),
            "ambient_celsius": 23.0,
            "software": "0.1.0",
        }
        return RunHeader(**{**what, **given})  # type: ignore[arg-type]

    def run_unit(
        self,
        journal: Journal,
        serial: str = "PT-2612-0001",
        steps: tuple[tuple[str, tuple[JudgedReading, ...]], ...] | None = None,
        verdict: Verdict = Verdict.PASS,
        **given: object,
    ) -> RunHeader:
        header = self.header(journal, serial, **given)
        journal.open_run(header)
        steps = steps if steps is not None else (("current", (good_current(),)), ("nodes", (bad_node(),)))
        for name, judged in steps:
            self.clocks.advance(0.5)
            journal.append_step(header, name, judged)
        readings = tuple(one for _, judged in steps for one in judged)
        journal.close_run(RunResult(header, readings, verdict, "a reason", 1.0))
        return header


def good_current(said: str = "Supply current 0.83 mA, allowed 0.40 to 1.60 mA") -> JudgedReading:
    reading = Reading("supply current", 0.00083, "A", 2e-6, raw={"shunt_volts": 0.0083})
    return JudgedReading("current", reading, Limits(0.0004, 0.0016, "A"), Verdict.PASS, 0.00043, said, 0.1)


def bad_node() -> JudgedReading:
    said = "Q2 collector -8.71 V, allowed -6.00 to -3.20 V"
    reading = Reading("q2_collector", -8.71, "V", 0.004, note="settled")
    return JudgedReading("nodes", reading, Limits(-6.0, -3.2, "V"), Verdict.FAIL, -2.71, said, 0.2)


def response() -> JudgedReading:
    curve = Curve("response", np.array([20.0, 1000.0, 20000.0]), np.array([-0.1, 0.0, -1 / 3]))
    mask = Mask(((20.0, -3.0, 3.0), (20000.0, -3.0, None)))
    reading = Reading("response", 2.5, "dB", 0.05, curve=curve)
    return JudgedReading("response", reading, mask, Verdict.PASS, 2.5, "Response inside by 2.50 dB", 2.0)
