from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

import pytest

REFERENCE = Path(__file__).parents[1] / "reference"


@pytest.fixture
def read_reference() -> Callable[[str], list[dict[str, str]]]:
    """Read a table of tests/reference; its source stands in the comment at its top."""

    def read(name: str) -> list[dict[str, str]]:
        with (REFERENCE / name).open(encoding="utf-8", newline="") as lines:
            return list(csv.DictReader(line for line in lines if not line.startswith("#")))

    return read
