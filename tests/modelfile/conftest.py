"""Step kinds that only declare, and a root with the sample model."""

from __future__ import annotations

import shutil
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from fixture.bench.facade import Bench
from fixture.domain.model import Model, StepSpec
from fixture.domain.options import Option, ReadingSpec
from fixture.domain.reading import Reading
from fixture.steps.base import StepKind

SAMPLE = Path(__file__).parent / "sample"


@dataclass(frozen=True)
class NoOptions:
    pass


@dataclass(frozen=True)
class NodeOptions:
    nodes: tuple[str, ...]
    settled_within: float
    passes: int
    quick: bool


@dataclass(frozen=True)
class GainOptions:
    frequency: float
    level: float
    source: str
    remark: str


@dataclass(frozen=True)
class DeclaredKind:
    """A step kind as far as a limits file needs it."""

    kind: str
    title: str
    options: tuple[Option, ...]
    options_type: type[Any]
    fixed: tuple[ReadingSpec, ...] = ()
    doc: str = ""

    def readings(self, options: Any, model_nodes: tuple[str, ...]) -> tuple[ReadingSpec, ...]:
        if isinstance(options, NodeOptions):
            return tuple(ReadingSpec(node, "V") for node in options.nodes or model_nodes)
        return self.fixed

    def run(self, step: StepSpec, model: Model, bench: Bench) -> Iterator[Reading]:
        raise NotImplementedError("these kinds only declare")


KINDS: Mapping[str, StepKind] = {
    kind.kind: kind
    for kind in (
        DeclaredKind(
            "supply_current", "Supply current", (), NoOptions, (ReadingSpec("supply_current", "A"),)
        ),
        DeclaredKind(
            "node_voltages",
            "Node voltages",
            (
                Option("nodes", "nodes", ()),
                Option("settled_within", "quantity", 0.002, "V", low=0.0, high=1.0),
                Option("passes", "count", 1, low=1, high=10),
                Option("quick", "flag", False),
            ),
            NodeOptions,
        ),
        DeclaredKind(
            "gain",
            "Gain",
            (
                Option("frequency", "quantity", None, "Hz", low=20, high=20000),
                Option("level", "quantity", 1e-4, "V"),
                Option("source", "choice", "line", choices=("line", "coil")),
                Option("remark", "text", ""),
            ),
            GainOptions,
            (ReadingSpec("gain", "dB"),),
        ),
        DeclaredKind(
            "frequency_response", "Response", (), NoOptions, (ReadingSpec("response", "dB", is_curve=True),)
        ),
    )
}


@pytest.fixture(scope="session")
def kinds() -> Mapping[str, StepKind]:
    return KINDS


@pytest.fixture
def root(tmp_path: Path) -> Path:
    shutil.copytree(SAMPLE / "limits", tmp_path / "limits")
    return tmp_path


@pytest.fixture
def peat_file(root: Path) -> Path:
    return root / "limits" / "peat" / "limits.toml"
