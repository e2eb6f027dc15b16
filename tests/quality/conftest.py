"""A station whose records go to a folder of the test's own."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.records.station import Station


@pytest.fixture
def station(tmp_path: Path) -> Station:
    return Station(tmp_path)
