"""New limits go into the file; everything else stays as a person wrote it."""

from __future__ import annotations

import dataclasses
import difflib
import shutil
import tempfile
from datetime import date
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fixture.domain.limits import Limits, Mask
from fixture.domain.model import Model, Revision
from fixture.errors import BadFile, BadInput
from fixture.modelfile import load_model
from fixture.modelfile.writer import write_limits

NEXT = Revision(4, "B. Tor", date(2026, 12, 1), "third lot", "measured", "")


def step_limits(model: Model, step: str) -> list[Any]:
    return [s.limits for p in model.procedures.values() for s in p.steps if s.name == step]


def test_a_new_bound_is_read_back_and_only_its_lines_and_the_revision_change(
    peat_file: Path, kinds: Any
) -> None:
    before = peat_file.read_text(encoding="utf-8")
    write_limits(peat_file, {("Bias", "q1_collector"): Limits(-1.35, -0.25, "V")}, NEXT, kinds)
    after = peat_file.read_text(encoding="utf-8")
    model = load_model(peat_file, kinds)
    assert step_limits(model, "Bias")[0]["q1_collector"] == Limits(-1.35, -0.25, "V")
    assert model.revision == NEXT
    changed = [line for line in difflib.ndiff(before.splitlines(), after.splitlines()) if line[:2] == "- "]
    assert changed == [
        "- number = 3",
        '- author = "A. Fell"',
        "- date = 2026-11-30",
        '- reason = "wider current after the second lot of transistors"',
        '- basis = "predicted"',
        '- made_by = "toeline limits predict Peat --units 200 --seed 1"',
        '- limits.q1_collector = { low = "-1.2 V", high = "-0.3 V" }',
    ]


def test_comments_are_kept(peat_file: Path, kinds: Any) -> None:
    before = peat_file.read_text(encoding="utf-8")
    new = {
        ("Supply current", "supply_current"): Limits(0.00041, 0.00112, "A"),
        ("Gain, fuzz up", "gain"): Limits(50.0, 52.5, "dB", "guarded", 1.0),
        ("Response, fuzz up", "response"): Mask(
            ((40, -9.5, 1.0), (997, -0.2, 0.2), (5e3, -3.0, 1.0), (9e3, -4.0, None))
        ),
    }
    write_limits(peat_file, new, NEXT, kinds)
    after = peat_file.read_text(encoding="utf-8")
    comments = [line.partition("#")[2] for line in before.splitlines() if "#" in line]
    assert len(comments) == 8
    assert all(comment in after for comment in comments)


def test_the_old_revision_moves_into_the_history(peat_file: Path, kinds: Any) -> None:
    write_limits(peat_file, {}, NEXT, kinds)
    write_limits(peat_file, {}, dataclasses.replace(NEXT, number=5, made_by="a command"), kinds)
    text = peat_file.read_text(encoding="utf-8")
    assert text.count("[[history]]") == 3
    assert "wider current after the second lot of transistors" in text and "third lot" in text
    assert load_model(peat_file, kinds).revision.number == 5


def test_a_first_history_stands_apart_at_the_end(peat_file: Path, kinds: Any) -> None:
    text = peat_file.read_text(encoding="utf-8")
    start, end = text.index("[[history]]"), text.index("[supply]")
    peat_file.write_text(text[:start] + text[end:], encoding="utf-8")
    write_limits(peat_file, {}, NEXT, kinds)
    after = peat_file.read_text(encoding="utf-8")
    assert '\n\n[[history]]\nnumber = 3\nauthor = "A. Fell"\n' in after[after.index("[procedures.short]") :]
    assert load_model(peat_file, kinds).revision == NEXT


def test_a_step_that_stands_in_two_procedures_is_set_in_both(peat_file: Path, kinds: Any) -> None:
    limits = Limits(None, 0.002, "A")
    write_limits(peat_file, {("Supply current", "supply_current"): limits}, NEXT, kinds)
    found = step_limits(load_model(peat_file, kinds), "Supply current")
    assert found == [{"supply_current": limits}, {"supply_current": limits}]


def test_limits_are_added_where_there_were_none(peat_file: Path, kinds: Any) -> None:
    text = peat_file.read_text(encoding="utf-8")
    start = text.index("\n[procedures.line.steps.limits.response]")
    end = text.index("\n[procedures.short]")
    text = (text[:start] + text[end:]).replace('limits.gain = { low = "49.5 dB", high = "-" }', "")
    peat_file.write_text(text, encoding="utf-8")
    mask = Mask(((40.0, -9.5, None), (997.0, -0.2, 0.2)), "guarded", 0.5)
    new = {("Response, fuzz up", "response"): mask, ("Gain, fuzz up", "gain"): Limits(49.0, None, "dB")}
    write_limits(peat_file, new, NEXT, kinds)
    model = load_model(peat_file, kinds)
    assert step_limits(model, "Response, fuzz up") == [{"response": mask}]
    assert step_limits(model, "Gain, fuzz up") == [{"gain": Limits(49.0, None, "dB")}]


def test_a_reading_is_added_beside_those_that_have_limits(peat_file: Path, kinds: Any) -> None:
    text = peat_file.read_text(encoding="utf-8")
    text = text.replace('limits.q1_collector = { low = "-1.2 V", high = "-0.3 V" }', "", 1)
    peat_file.write_text(text, encoding="utf-8")
    write_limits(peat_file, {("Bias", "q1_collector"): Limits(-1.0, -0.5, "V")}, NEXT, kinds)
    (found,) = step_limits(load_model(peat_file, kinds), "Bias")
    assert found == {
        "q1_collector": Limits(-1.0, -0.5, "V"),
        "q2_collector": Limits(-6.0, -3.2, "V", "guarded", 1.0),
    }


@pytest.mark.parametrize(
    ("new", "revision", "wanted"),
    [
        ({("Bais", "q1_collector"): Limits(0, 1, "V")}, NEXT, 'no step "Bais": did you mean "Bias"'),
        ({}, dataclasses.replace(NEXT, number=3), "revision 3 is not later than 3"),
        ({("Bias", "q1_colector"): Limits(0, 1, "V")}, NEXT, 'no reading "q1_colector"'),
        ({("Bias", "q1_collector"): Limits(0, 1, "A")}, NEXT, "is not a voltage"),
        ({("Bias", "q1_collector"): Limits(1, 0, "V")}, NEXT, "is above high"),
    ],
)
def test_what_would_break_the_file_is_refused_and_the_good_file_stays(
    new: Any, revision: Revision, wanted: str, peat_file: Path, kinds: Any
) -> None:
    before = peat_file.read_bytes()
    with pytest.raises(BadInput, match=wanted):
        write_limits(peat_file, new, revision, kinds)
    assert peat_file.read_bytes() == before
    assert sorted(path.name for path in peat_file.parent.iterdir()) == ["circuit.cir", "limits.toml"]


def test_a_file_that_is_broken_already_is_not_touched(peat_file: Path, kinds: Any) -> None:
    peat_file.write_text("format = ", encoding="utf-8")
    with pytest.raises(BadFile):
        write_limits(peat_file, {}, NEXT, kinds)
    assert peat_file.read_text(encoding="utf-8") == "format = "


RULES = st.sampled_from([("simple", 1.0), ("guarded", 1.0), ("guarded", 0.0), ("guarded", 2.5)])


@st.composite
def bounds(draw: st.DrawFn, unit: str, most: float = 1e6) -> Limits:
    values = st.floats(-1e6, most, allow_subnormal=False)
    low, high = sorted((draw(values), draw(values)))
    side = draw(st.sampled_from(["both", "low", "high"]))
    rule, ratio = draw(RULES)
    return Limits(low if side != "high" else None, high if side != "low" else None, unit, rule, ratio)  # type: ignore[arg-type]


@st.composite
def masks(draw: st.DrawFn) -> Mask:
    hz = sorted(draw(st.lists(st.floats(0.01, 1e5), min_size=2, max_size=6, unique=True)))
    points = []
    for f in hz:
        one = draw(bounds("dB"))
        points.append((f, one.low, one.high))
    rule, ratio = draw(RULES)
    return Mask(tuple(points), rule, ratio)  # type: ignore[arg-type]


@st.composite
def revisions(draw: st.DrawFn) -> Revision:
    text = st.text(st.characters(exclude_categories=["Cs", "Cc"]), min_size=1).filter(str.strip)
    return Revision(
        draw(st.integers(4, 10**6)),
        draw(text),
        draw(st.dates()),
        draw(text),
        draw(text),
        draw(st.just("") | text),
    )


@settings(max_examples=40, deadline=None)
@given(
    current=bounds("A", most=0.019),
    node=bounds("V", most=0.0),
    gain=bounds("dB"),
    mask=masks(),
    revision=revisions(),
)
def test_whatever_is_written_is_read_back_equal(
    kinds: Any, current: Limits, node: Limits, gain: Limits, mask: Mask, revision: Revision
) -> None:
    with tempfile.TemporaryDirectory() as folder:
        shutil.copytree(Path(__file__).parent / "sample" / "limits", Path(folder) / "limits")
        path = Path(folder) / "limits" / "peat" / "limits.toml"
        old = load_model(path, kinds)
        new = {
            ("Supply current", "supply_current"): current,
            ("Bias", "q2_collector"): node,
            ("Gain, fuzz up", "gain"): gain,
            ("Response, fuzz up", "response"): mask,
        }
        write_limits(path, new, revision, kinds)
        read = load_model(path, kinds)
    for procedure in read.procedures.values():
        before = old.procedures[procedure.name]
        for step, step_before in zip(procedure.steps, before.steps, strict=True):
            wanted = {
                reading: new.get((step.name, reading), limits)
                for reading, limits in step_before.limits.items()
            }
            assert step == dataclasses.replace(step_before, limits=wanted)
    assert read.revision == revision
    kept = dataclasses.replace(read, procedures=old.procedures, revision=old.revision, digest=old.digest)
    assert kept == old
