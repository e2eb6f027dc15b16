"""Whatever is done to a file, the answer is a model or faults with lines: never another error."""

from __future__ import annotations

import shutil
import tempfile
import tomllib
from pathlib import Path
from typing import Any

import tomlkit
from hypothesis import given, settings
from hypothesis import strategies as st

from fixture.bench.benchfile import read_bench_file
from fixture.errors import BadFile
from fixture.modelfile import load_model

SAMPLE = Path(__file__).parent / "sample" / "limits" / "peat"
SAMPLE_TEXT = (SAMPLE / "limits.toml").read_text(encoding="utf-8")
BENCH_TEXT = (Path(__file__).parents[2] / "bench.toml").read_text(encoding="utf-8")

ODD_VALUES = st.sampled_from(
    [
        0,
        -1,
        1.5,
        float("inf"),
        float("nan"),
        True,
        "",
        "-",
        "low",
        "9 V",
        "0.5",
        [],
        [[]],
        [1, "a"],
        {},
        {"x": 1},
        10**30,
    ]
)


def expect_faults_or_nothing(read: Any, path: Path) -> None:
    try:
        read()
    except BadFile as error:
        assert error.faults
        for fault in error.faults:
            assert "\n" not in fault.text
            assert fault.line is None or 1 <= fault.line <= path.read_bytes().count(b"\n") + 1


def damage(data: st.DataObject, value: Any) -> Any:
    """Exchange, drop or rename something at a random depth."""
    if isinstance(value, dict) and value and data.draw(st.integers(0, 4)):
        key = data.draw(st.sampled_from(sorted(value)))
        act = data.draw(st.sampled_from(["deeper", "deeper", "deeper", "drop", "rename"]))
        if act == "deeper":
            return {**value, key: damage(data, value[key])}
        rest = {k: v for k, v in value.items() if k != key}
        return rest if act == "drop" else {**rest, f"{key}x": value[key]}
    if isinstance(value, list) and value and data.draw(st.integers(0, 4)):
        index = data.draw(st.integers(0, len(value) - 1))
        return [*value[:index], damage(data, value[index]), *value[index + 1 :]]
    return data.draw(ODD_VALUES)


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_a_limits_file_with_odd_values_gives_faults(kinds: Any, data: st.DataObject) -> None:
    values: Any = tomllib.loads(SAMPLE_TEXT)
    for _ in range(data.draw(st.integers(1, 3))):
        values = damage(data, values)
        if not isinstance(values, dict):
            return
    with tempfile.TemporaryDirectory() as folder:
        shutil.copy(SAMPLE / "circuit.cir", folder)
        path = Path(folder) / "limits.toml"
        path.write_text(tomlkit.dumps(values), encoding="utf-8")
        expect_faults_or_nothing(lambda: load_model(path, kinds), path)


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_a_bench_file_with_odd_values_gives_faults(data: st.DataObject) -> None:
    values = damage(data, tomllib.loads(BENCH_TEXT))
    if not isinstance(values, dict):
        return
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "bench.toml"
        path.write_text(tomlkit.dumps(values), encoding="utf-8")
        expect_faults_or_nothing(lambda: read_bench_file(path), path)


@settings(max_examples=150, deadline=None)
@given(at=st.integers(0, len(SAMPLE_TEXT)), length=st.integers(0, 40), piece=st.text(max_size=5))
def test_a_limits_file_cut_anywhere_gives_faults(kinds: Any, at: int, length: int, piece: str) -> None:
    with tempfile.TemporaryDirectory() as folder:
        shutil.copy(SAMPLE / "circuit.cir", folder)
        path = Path(folder) / "limits.toml"
        text = SAMPLE_TEXT[:at] + piece + SAMPLE_TEXT[at + length :]
        path.write_bytes(text.encode("utf-8", errors="surrogateescape"))
        expect_faults_or_nothing(lambda: load_model(path, kinds), path)
