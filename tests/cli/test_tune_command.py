"""From a tested lot to a revision with its reason, and what the revision changed."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import pytest

from fixture.cli.main import main
from fixture.lots.lot import record
from fixture.lots.trial import Trial, try_unit
from fixture.modelfile import find_model
from fixture.records import Journal

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture(scope="module")
def results() -> list[Any]:
    """One unit through the real sequence; the pilot is it again and again with scattered readings."""
    root = Path(__file__).parents[2]
    return [try_unit(root, "peat", Trial("PT-9001-0001"))]


@pytest.fixture
def pilot_root(root: Path, results: list[Any]) -> Path:
    """A folder whose records hold forty scattered units, and one that was planted a fault."""
    import dataclasses
    import time
    from datetime import UTC, datetime

    import numpy as np

    rng = np.random.default_rng(7)
    (one,) = results
    with Journal.open(
        root, one.header.bench, now=lambda: datetime.now(UTC), monotonic=time.monotonic
    ) as journal:
        for number in range(1, 41):
            readings = []
            for judged in one.readings:
                reading = judged.reading
                value = reading.value * (1 + rng.normal(0.0, 0.001 if reading.name == "rail" else 0.02))
                curve = reading.curve
                if curve is not None:
                    curve = dataclasses.replace(curve, db=curve.db + rng.normal(0.0, 0.1, curve.db.size))
                readings.append(
                    dataclasses.replace(
                        judged, reading=dataclasses.replace(reading, value=value, curve=curve)
                    )
                )
            header = dataclasses.replace(one.header, serial=f"PT-9001-{number:04d}")
            result = dataclasses.replace(one, header=header, readings=tuple(readings))
            record(
                journal,
                result,
                started=datetime.now(UTC),
                begun_s=time.monotonic(),
                operator="A. Tester",
                software="test",
            )
    return root


@pytest.fixture
def run(pilot_root: Path, capsys: pytest.CaptureFixture[str]) -> Run:
    def run_it(*arguments: str) -> tuple[int, str, str]:
        code = main(["--root", str(pilot_root), *arguments])
        out, err = capsys.readouterr()
        return code, out, err

    return run_it


def test_nothing_is_written_without_being_told_to(run: Run, pilot_root: Path) -> None:
    before = (pilot_root / "limits" / "peat" / "limits.toml").read_bytes()
    code, out, _ = run("tune", "peat")
    assert code == 0
    assert "nothing written: --apply --by NAME --why TEXT makes it revision 3" in out
    assert "  stays      tells of the bench, not of the unit" in out
    assert (pilot_root / "limits" / "peat" / "limits.toml").read_bytes() == before


def test_json_has_every_reading_and_only_the_one_asked_for(run: Run) -> None:
    everything = json.loads(run("tune", "peat", "--json")[1])
    assert (everything["units"], len(everything["readings"])) == (40, 11)
    assert everything["reject_bound"] < 0.1
    (one,) = json.loads(run("tune", "peat", "--json", "--reading", "q1_base")[1])["readings"]
    assert one["name"] == "q1_base" and one["units"] == 40 and one["proposed"]["unit"] == "V"


def test_applied_limits_are_the_next_revision_with_reason_history_and_statistics(
    run: Run, pilot_root: Path
) -> None:
    path = pilot_root / "limits" / "peat" / "limits.toml"
    old = path.read_text(encoding="utf-8")
    code, out, _ = run("tune", "peat", "--apply", "--by", "A. Fell", "--why", "forty units of spring")
    assert code == 0 and "revision 3 written" in out
    model = find_model(pilot_root, "peat")
    revision = model.revision
    assert (revision.number, revision.author, revision.basis) == (3, "A. Fell", "pilot")
    assert "40 units, PT-9001-0001 to PT-9001-0040" in revision.statistics[0]
    assert len(revision.statistics) == 1 + 9
    bias = next(step for step in model.procedures["line"].steps if step.name == "Bias")
    q2 = bias.limits["q2_collector"]
    assert (getattr(q2, "least", None), getattr(q2, "most", None)) == (-7.2, -2.0)
    text = path.read_text(encoding="utf-8")
    assert "# of the bench, not of the unit" in text and "[[history]]" in text  # comments are kept
    assert (path.parent / "history" / "r2.toml").read_text(encoding="utf-8") == old
    assert run("limits", "check")[0] == 0

    code, out, _ = run("limits", "diff", "peat")
    assert code == 0
    assert out.startswith("peat: revision 2 -> 3 (pilot)\n") and "A. Fell: forty units of spring" in out
    assert re.search(
        r"^Bias: q1 base: .* -> .*: low .* (tighter|wider), high .* (tighter|wider)$", out, re.MULTILINE
    )
    assert "rail" not in out
    found = json.loads(run("limits", "diff", "peat", "--old", "2", "--new", "3", "--json")[1])
    assert (found["old"], found["new"], len(found["changes"])) == (2, 3, 9)
    assert run("limits", "diff", "peat", "--old", "3")[1].endswith("no limit changed\n")
    code, out, err = run("limits", "diff", "peat", "--old", "7")
    assert (code, out, err) == (2, "", "peat: revision 7 is not kept; there are: 2, 3\n")


def test_pictures_are_drawn_for_each_reading(run: Run, pilot_root: Path, tmp_path: Path) -> None:
    code, out, _ = run("tune", "peat", "--plot", str(tmp_path / "pictures"))
    pictures = sorted((tmp_path / "pictures").glob("*.svg"))
    assert code == 0 and len(pictures) == 11 == out.count("picture: ")
    for picture in pictures:
        ElementTree.parse(picture)


def test_a_unit_can_be_left_out_and_patterns_choose(run: Run) -> None:
    found = json.loads(
        run("tune", "peat", "--json", "--without", "PT-9001-0003", "--serials", "PT-9001-00[0-3]?")[1]
    )
    assert found["units"] == 38


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("peet",), "did you mean peat"),
        (("peat", "--apply"), "--apply needs --by NAME and --why TEXT"),
        (("peat", "--reading", "gane"), "--reading gane: no reading of that name"),
        (("peat", "--procedure", "lyne"), "--procedure lyne: there are: line"),
        (("peat", "--rejects", "120 %"), "more than 0 % and less than 100 %"),
        (("peat", "--confidence", "sure"), "--confidence"),
        (("peat", "--without", "PT-0000-0000"), "no such unit is in this pilot"),
        (
            ("peat", "--serials", "ML-*"),
            "no unit of peat has a complete run of line on bench demo (simulated)",
        ),
        (
            ("peat", "--serials", "PT-9001-000*", "--apply", "--by", "A. Fell", "--why", "nine"),
            "nothing to apply: ",
        ),
    ],
)
def test_what_cannot_be_tuned_is_one_line(run: Run, arguments: tuple[str, ...], said: str) -> None:
    code, out, err = run("tune", *arguments)
    assert (code, out, err.count("\n")) == (2, "", 1) and said in err
