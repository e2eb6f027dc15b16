"""The wheel carries the two packages and nothing else."""

from __future__ import annotations

import subprocess
import sys
import zipfile
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]


def test_a_wheel_contains_exactly_fixture_and_drivers_with_their_data(tmp_path: Path) -> None:
    built = subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert built.returncode == 0, built.stderr
    (wheel,) = tmp_path.glob("*.whl")
    names = zipfile.ZipFile(wheel).namelist()
    assert {name.split("/")[0] for name in names if ".dist-info/" not in name} == {"fixture", "drivers"}
    assert "drivers/simulated/fixture.cir" in names
    assert any(name.startswith("drivers/dialects/") and name.endswith(".toml") for name in names)


def test_no_folder_of_tests_limits_or_logs_is_a_package() -> None:
    for folder in ("tests", "limits", "logs"):
        assert not list((ROOT / folder).rglob("__init__.py"))
