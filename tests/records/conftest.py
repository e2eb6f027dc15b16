"""A station whose records go to a folder of the test's own."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from fixture.records import Journal
from tests.records.station import Station


@pytest.fixture
def station(tmp_path: Path) -> Station:
    return Station(tmp_path)


@pytest.fixture
def journal(station: Station) -> Iterator[Journal]:
    with station.open() as journal:
        yield journal
