"""The cache of compiled kernels: one compile per machine, told beforehand, and no folder that stops the work."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[2]
LOAD = """
from drivers.circuit import kernels
kernels.compile_notice = lambda text: print("told:", text)
kernel = kernels.load_kernel(kernels.KernelKey(bjts=0, diodes=0, charged=False))
print("loaded", kernel.advance.__name__)
"""


def load_in_new_process(cache: Path) -> str:
    environment = {**os.environ, "TOELINE_CACHE": str(cache), "PYTHONPATH": str(ROOT)}
    done = subprocess.run(
        [sys.executable, "-c", LOAD], capture_output=True, text=True, env=environment, cwd=ROOT, check=False
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_a_person_is_told_before_the_first_compile_on_a_machine_and_not_again(tmp_path: Path) -> None:
    first = load_in_new_process(tmp_path / "cache")
    assert "told: compiling the circuit kernel, once per machine" in first
    assert first.index("told") < first.index("loaded")
    assert "told" not in load_in_new_process(tmp_path / "cache")


def test_a_cache_that_cannot_be_written_costs_a_compile_but_stops_nothing(tmp_path: Path) -> None:
    in_the_way = tmp_path / "cache"
    in_the_way.write_text("a file where the folder should be")
    assert "loaded advance" in load_in_new_process(in_the_way)
