"""Every key of a TOML file is found on its line."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import tomlkit
from hypothesis import given
from hypothesis import strategies as st

from fixture.errors import BadFile
from fixture.tomlfile.document import open_document
from fixture.tomlfile.locator import KeyPath, locate_keys

# Forms of TOML v1.0.0 (toml.io/en/v1.0.0), one of each: keys bare, quoted, dotted; strings of four kinds with
# signs of other forms inside; arrays over lines; inline tables; tables, sub-tables, arrays of tables.
ALL_FORMS = '''\
# a comment = "with signs" [not a table]
bare = 1
"quoted key" = 2
'literal.key' = 3
dotted . "inner" . x = 4
basic = "a # no comment, \\" no end, [no] {no} = no"
literal = 'C:\\path\\'
multi = """
line ] one = 1
line "two" \\""" = 2""""
literal_multi = \'\'\'
[no.table]
key = 'x' \'\'\'
array = [ 1, # one ]
  [2, 3], "four, ]",

  { five = 5, six = [6, 7] },
]
inline = { a.b = 1, c = { d = "}" } }
[table] # ] comment
day = 1979-05-27T07:32:00Z
[table.sub."q]x"]
key = inf
[[fruit]]
name = "apple"
[fruit.shape]
round = true
[[fruit.kind]]
name = "red"
[[fruit.kind]]
name = "green"
[[fruit]]
[[fruit.kind]]
name = "yellow"
'''


def paths_of(value: Any, path: KeyPath = ()) -> Iterator[KeyPath]:
    yield path
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from paths_of(inner, (*path, key))
    elif isinstance(value, list):
        for index, inner in enumerate(value):
            yield from paths_of(inner, (*path, index))


def test_all_forms_of_keys_are_found_and_nothing_else() -> None:
    lines = locate_keys(ALL_FORMS)
    assert set(lines) == set(paths_of(tomllib.loads(ALL_FORMS)))


@pytest.mark.parametrize(
    ("path", "piece"),
    [
        (("bare",), "bare = 1"),
        (("quoted key",), '"quoted key"'),
        (("literal.key",), "'literal.key'"),
        (("dotted", "inner", "x"), "dotted . "),
        (("array",), "array = ["),
        (("array", 0), "array = ["),
        (("array", 1, 1), "[2, 3]"),
        (("array", 3, "six", 1), "{ five"),
        (("inline", "c", "d"), "inline ="),
        (("table",), "[table]"),
        (("table", "sub", "q]x", "key"), "key = inf"),
        (("fruit", 0, "shape", "round"), "round = true"),
        (("fruit", 0, "kind", 1, "name"), '"green"'),
        (("fruit", 1, "kind", 0, "name"), '"yellow"'),
    ],
)
def test_a_key_is_found_on_its_line(path: KeyPath, piece: str) -> None:
    (wanted,) = [n for n, line in enumerate(ALL_FORMS.splitlines(), start=1) if piece in line]
    assert locate_keys(ALL_FORMS)[path] == wanted


KEYS = st.text(st.characters(codec="utf-8", exclude_categories=["Cc", "Cs"]), max_size=6)
VALUES = st.recursive(
    st.integers(-(2**60), 2**60)
    | st.booleans()
    | st.text(max_size=8)
    | st.dates()
    | st.floats(allow_nan=False),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner, max_size=3),
    max_leaves=12,
)


@given(st.dictionaries(KEYS, VALUES, max_size=4))
def test_whatever_an_independent_writer_writes_every_key_has_a_line(values: dict[str, Any]) -> None:
    text = tomlkit.dumps(values)
    lines = locate_keys(text)
    assert set(lines) == set(paths_of(tomllib.loads(text)))
    assert all(1 <= line <= text.count("\n") + 1 for line in lines.values())


@pytest.mark.parametrize(
    ("text", "line"),
    [("a = 1\nb == 2\n", 2), ("a = 1\nb = [1,\n2\n", 3), ('a = "x\n', 1), ("[t]\n[t]\n", 2), ("a = \n", 1)],
)
def test_a_fault_of_toml_itself_has_file_and_line(tmp_path: Path, text: str, line: int) -> None:
    path = tmp_path / "broken.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(BadFile) as caught:
        open_document(path)
    (fault,) = caught.value.faults
    assert (fault.file, fault.line) == (path, line)
    assert fault.text.startswith("not TOML: ")
