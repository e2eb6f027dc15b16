from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import pytest

# With importlib import mode neighbouring modules are not importable; this one is support, not a test.
_SPEC = importlib.util.spec_from_file_location("ngspice_bench", Path(__file__).parent / "ngspice_bench.py")
assert _SPEC is not None and _SPEC.loader is not None
ngspice_bench = importlib.util.module_from_spec(_SPEC)
sys.modules.setdefault("ngspice_bench", ngspice_bench)
_SPEC.loader.exec_module(ngspice_bench)


@pytest.fixture
def ngspice(tmp_path: Path) -> object:
    """ngspice, or a skip when it is not installed."""
    if not ngspice_bench.installed():
        pytest.skip("ngspice is not installed")
    return ngspice_bench.Ngspice(tmp_path)
