"""Strict reading of TOML tables into dataclasses; every fault with its line, all of them together.

A dataclass is the schema of its table. A text field may carry ``names`` in its metadata (the placeholders of
a template), a number ``low``. tomllib gives values without lines, so a small locator finds those.
"""

from __future__ import annotations

import dataclasses
import math
import re
import string
import tomllib
import typing
from collections.abc import Mapping, Sequence
from dataclasses import MISSING
from typing import Any, Literal

_TABLE = re.compile(r"\s*(\[\[?)\s*([\w.\-]+)\s*\]\]?")
_KEY = re.compile(r'\s*"?([\w\-]+)"?\s*=')
_POSITION = re.compile(r"\(at line (\d+), column \d+\)|\(at end of document\)")


def line_of(text: str, path: Sequence[str | int]) -> int:
    """Return the line (from 1) of a key, or of the nearest table above it that the file has.

    Parameters
    ----------
    text : str
        The file.
    path : sequence of str or int
        Names of tables and key; a number picks the entry of an array of tables.
    """
    best, best_depth = 1, 0
    counts: dict[str, int] = {}
    here: tuple[str | int, ...] = ()
    for number, line in enumerate(text.splitlines(), 1):
        if table := _TABLE.match(line):
            here = tuple(table.group(2).split("."))
            if table.group(1) == "[[":
                counts[table.group(2)] = counts.get(table.group(2), -1) + 1
                here += (counts[table.group(2)],)
            place = here
        elif key := _KEY.match(line):
            place = (*here, key.group(1))
        else:
            continue
        depth = len(place)
        if place == tuple(path[:depth]) and depth > best_depth:
            best, best_depth = number, depth
    return best


def syntax_fault(error: tomllib.TOMLDecodeError, file: str) -> str:
    """Return ``file:line: what`` for a file that is no TOML."""
    text = str(error)
    position = _POSITION.search(text)
    line = position.group(1) if position and position.group(1) else None
    what = _POSITION.sub("", text).strip()
    return f"{file}:{line}: {what}" if line else f"{file}: {what} at the end of the file"


class TableReader:
    """Turns tables into dataclasses and collects what is wrong on the way.

    Parameters
    ----------
    text, file : str
        The file and its name, for messages.
    samples : mapping
        Values that templates are tried with, by placeholder.

    Attributes
    ----------
    derived : tuple of str
        Fields that are not read from files.
    faults : list of (int, str)
        Line and message of everything found wrong so far.
    """

    def __init__(self, text: str, file: str, samples: Mapping[str, Any]) -> None:
        self._text = text
        self._file = file
        self._samples = samples
        self.derived: tuple[str, ...] = ()
        self.faults: list[tuple[int, str]] = []

    def fault(self, path: Sequence[str | int], text: str) -> None:
        """Note what is wrong at a key."""
        line = line_of(self._text, path)
        self.faults.append((line, f"{self._file}:{line}: {text}"))

    def read_table(self, table: Any, kind: type, path: list[str | int]) -> Any:
        """Return an instance of `kind`, or None after a fault."""
        if not isinstance(table, dict):
            self.fault(path, f"{path[-1]} = {table!r}; accepted is a table [{path[-1]}]")
            return None
        hints = typing.get_type_hints(kind)
        known = {entry.name: entry for entry in dataclasses.fields(kind) if entry.name not in self.derived}
        for name in table.keys() - known.keys():
            self.fault([*path, name], f'unknown key "{name}"; accepted are {", ".join(known)}')
        values: dict[str, Any] = {}
        before = len(self.faults)
        for name, entry in known.items():
            if name in table:
                values[name] = self.read_value(table[name], hints[name], entry.metadata, [*path, name])
            elif entry.default is MISSING:
                self.fault(path, f'"{name}" is missing' + (f" in [{path[0]}]" if path else ""))
        return kind(**values) if len(self.faults) == before else None

    def read_value(self, value: Any, hint: Any, meta: Mapping[str, Any], path: list[str | int]) -> Any:
        """Return the value that a field's type asks for, or something like it after a fault."""
        if dataclasses.is_dataclass(hint):
            return self.read_table(value, typing.cast(type, hint), path)
        if typing.get_origin(hint) is tuple:
            return self._read_array(value, typing.get_args(hint)[0], path)
        if typing.get_origin(hint) is Literal:
            choices = typing.get_args(hint)
            if value not in choices:
                self.fault(path, f"{path[-1]} = {value!r}; accepted are {', '.join(map(repr, choices))}")
            return value
        if hint is str:
            return self._read_text(value, meta, path)
        return self._read_number(value, hint, meta, path)

    def _read_array(self, value: Any, item: Any, path: list[str | int]) -> tuple[Any, ...]:
        if not isinstance(value, list) or not value:
            wanted = (
                "[[" + str(path[-1]) + "]] tables" if dataclasses.is_dataclass(item) else "a list of numbers"
            )
            self.fault(path, f"{path[-1]} = {value!r}; accepted are {wanted}, at least one")
            return ()
        return tuple(
            self.read_value(entry, item, {"low": 0}, [*path, index]) for index, entry in enumerate(value)
        )

    def _read_text(self, value: Any, meta: Mapping[str, Any], path: list[str | int]) -> str:
        if not isinstance(value, str) or not value.isascii():
            self.fault(path, f"{path[-1]} = {value!r}; accepted is text in ASCII")
            return ""
        if "names" in meta:
            self._check_template(value, meta["names"], path)
        return value

    def _check_template(self, value: str, names: Sequence[str], path: list[str | int]) -> None:
        accepted = ", ".join(f"{{{name}}}" for name in names) or "no placeholder"
        try:
            used = {name for _, name, _, _ in string.Formatter().parse(value) if name is not None}
            if used - set(names):
                found = ", ".join(f"{{{name}}}" for name in sorted(used - set(names)))
                self.fault(path, f"{path[-1]} uses {found}; accepted: {accepted}")
            elif value and names and not used:
                self.fault(path, f"{path[-1]} = {value!r} has no place for its value; accepted: {accepted}")
            else:
                value.format(**self._samples)
        except (ValueError, IndexError) as error:
            self.fault(path, f"{path[-1]} = {value!r} is no usable template ({error}); accepted: {accepted}")

    def _read_number(self, value: Any, hint: Any, meta: Mapping[str, Any], path: list[str | int]) -> Any:
        kinds = (int,) if hint is int else (int, float)
        low = meta.get("low", 0)
        if isinstance(value, bool) or not isinstance(value, kinds) or not value >= low or value == math.inf:
            wanted = "a whole number" if hint is int else "a number"
            self.fault(path, f"{path[-1]} = {value!r}; accepted is {wanted} of at least {low:g}")
            return low
        return value if hint is int else float(value)
