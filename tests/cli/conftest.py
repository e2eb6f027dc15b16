"""A folder with the demo bench and the models that come along, for tests of the whole program."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

SOURCES = Path(__file__).parents[2]


@pytest.fixture
def root(tmp_path: Path) -> Path:
    shutil.copy(SOURCES / "bench.toml", tmp_path)
    shutil.copytree(SOURCES / "limits", tmp_path / "limits")
    return tmp_path
