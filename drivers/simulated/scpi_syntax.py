"""Program messages of IEEE 488.2 clause 7 and SCPI-1999 volume 1 chapter 6: headers, paths and parameters."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Protocol

from drivers.simulated.scpi_status import ScpiError

_PAIRS = {'"': '"', "'": "'", "(": ")"}
_HEADER = re.compile(r":?[A-Z][A-Z0-9_]*(?::[A-Z][A-Z0-9_]*)*\??|\*[A-Z]+\??")
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))(?:\s*E\s*([+-]?\d+))?\s*([A-Z/]*)")
_RADIX = {"#H": 16, "#Q": 8, "#B": 2}
_MULTIPLIERS = {
    "EX": 1e18, "PE": 1e15, "T": 1e12, "G": 1e9, "MA": 1e6, "K": 1e3, "": 1.0,
    "M": 1e-3, "U": 1e-6, "N": 1e-9, "P": 1e-12, "F": 1e-15, "A": 1e-18,
}  # fmt: skip
"""IEEE 488.2 table 7-2; MOHM and MHZ are mega by its note."""


@dataclass(frozen=True)
class Unit:
    """One message unit: its header with the full path, upper case, and its parameters as typed."""

    header: str
    parameters: tuple[str, ...]


def split_outside(text: str, separator: str) -> list[str]:
    """Split at a separator that stands outside strings and parentheses.

    Raises
    ------
    ScpiError
        -151 for a string that does not end, -171 for an expression that does not.
    """
    parts, start, closing = [], 0, ""
    for place, char in enumerate(text):
        if closing:
            if char == closing:
                closing = ""
        elif char in _PAIRS:
            closing = _PAIRS[char]
        elif char == separator:
            parts.append(text[start:place])
            start = place + 1
    if closing:
        raise ScpiError(-171 if closing == ")" else -151)
    parts.append(text[start:])
    return parts


def message_units(message: str) -> Iterator[Unit]:
    """Yield the units of a message with the header path of each resolved.

    Without a leading colon a header goes on from the path of the one before it; common commands leave the
    path alone (SCPI-1999 volume 1, 6.2.4).

    Raises
    ------
    ScpiError
        A command error, after the units before it have been yielded.
    """
    path = ""
    for text in split_outside(message, ";"):
        typed = text.strip()
        if not typed:
            continue
        header, parameters = _split_header(typed)
        if not header.startswith("*"):
            header = header[1:] if header.startswith(":") else path + header
            path = header.rpartition(":")[0] + ":" if ":" in header else ""
        yield Unit(header, parameters)


def _split_header(typed: str) -> tuple[str, tuple[str, ...]]:
    if not all(" " <= char <= "~" or char == "\t" for char in typed):
        raise ScpiError(-101)
    first, _, rest = typed.replace("\t", " ").partition(" ")
    header = first.upper()
    if "," in header:
        raise ScpiError(-111)
    if not _HEADER.fullmatch(header):
        raise ScpiError(-102)
    if any(len(word) > 12 for word in header.strip("*:?").split(":")):
        raise ScpiError(-112)
    parameters = tuple(part.strip() for part in split_outside(rest, ",")) if rest.strip() else ()
    if "" in parameters:
        raise ScpiError(-103 if len(parameters) > 1 else -109)
    return header, parameters


def short_form(mnemonic: str) -> str:
    """Return the short form of a mnemonic written as in a manual: the upper-case part of ``VOLTage``."""
    return "".join(char for char in mnemonic if not char.islower())


def header_pattern(header: str) -> re.Pattern[str]:
    """Compile a header written as in a manual: ``[SOURce:]VOLTage[:LEVel]?`` in long and short form.

    Every mnemonic takes a numeric suffix (group per mnemonic); the device allows 1 only, the value that an
    absent suffix stands for (SCPI-1999 volume 1, 6.2.5.2).
    """
    parts = []
    for token in re.findall(r"[A-Za-z]+|.", header):
        if token.isalpha():
            short = short_form(token)
            rest = token[len(short) :].upper()
            parts.append(f"{short}(?:{rest})?(\\d*)" if rest else f"{short}(\\d*)")
        else:
            parts.append({"[": "(?:", "]": ")?", "?": r"\?", "*": r"\*"}.get(token, token))
    return re.compile("".join(parts))


class Parameter(Protocol):
    """How one parameter is read; `optional` ones may be left out and are then None."""

    @property
    def optional(self) -> bool:
        """Whether it may be left out."""

    def parse(self, text: str) -> object:
        """Return the value. Raises ScpiError."""


def _refuse_type(text: str) -> None:
    if text[0] in "\"'":
        raise ScpiError(-158)
    if text[0] == "(":
        raise ScpiError(-178)
    if text[0] == "#" and text[:2].upper() not in _RADIX:
        raise ScpiError(-168)


def parse_number(text: str, unit: str) -> float:
    """Read decimal numeric program data with an optional suffix in `unit` ("" allows none).

    Raises
    ------
    ScpiError
        -104, -121, -123, -131, -138, -141, -158, -168 or -178.
    """
    _refuse_type(text)
    upper = text.upper()
    if upper[:2] in _RADIX:
        try:
            return float(int(upper[2:], _RADIX[upper[:2]]))
        except ValueError:
            raise ScpiError(-121) from None
    if upper[0].isalpha():
        raise ScpiError(-141)
    match = _NUMBER.fullmatch(upper)
    if match is None:
        raise ScpiError(-121)
    mantissa, exponent, suffix = match.groups()
    if exponent is not None and abs(int(exponent)) > 32000:
        raise ScpiError(-123)
    return float(f"{mantissa}E{exponent or 0}") * _suffix_factor(suffix, unit)


def _suffix_factor(suffix: str, unit: str) -> float:
    if not suffix:
        return 1.0
    if not unit:
        raise ScpiError(-138)
    if suffix in ("MOHM", "MHZ") and suffix[1:] == unit:
        return 1e6
    if not suffix.endswith(unit) or suffix[: -len(unit)] not in _MULTIPLIERS:
        raise ScpiError(-131)
    return _MULTIPLIERS[suffix[: -len(unit)]]


Bound = Callable[[], float]


@dataclass(frozen=True)
class Number:
    """A number within bounds, or MINimum, MAXimum, DEFault, or one of further `words` (returned as NaN)."""

    unit: str
    low: Bound
    high: Bound
    default: Bound
    optional: bool = False
    words: tuple[str, ...] = ()

    def parse(self, text: str) -> float:
        """Return the value in base units. Raises ScpiError (-222 out of bounds)."""
        upper = text.upper()
        for word, bound in (("MINimum", self.low), ("MAXimum", self.high), ("DEFault", self.default)):
            if upper in (word.upper(), short_form(word)):
                return bound()
        if upper in self.words:
            return float("nan")
        value = parse_number(text, self.unit)
        if not self.low() <= value <= self.high():
            raise ScpiError(-222)
        return value


@dataclass(frozen=True)
class Whole:
    """A whole number within bounds, rounded as IEEE 488.2 asks."""

    low: int
    high: int
    optional: bool = False

    def parse(self, text: str) -> int:
        """Return the value. Raises ScpiError (-222 out of bounds)."""
        value = round(parse_number(text, ""))
        if not self.low <= value <= self.high:
            raise ScpiError(-222)
        return value


@dataclass(frozen=True)
class Boolean:
    """ON, OFF, or a number: what rounds to zero is off (SCPI-1999 volume 1, 7.3)."""

    optional: bool = False

    def parse(self, text: str) -> bool:
        """Return the value. Raises ScpiError."""
        upper = text.upper()
        if upper in ("ON", "OFF"):
            return upper == "ON"
        return round(parse_number(text, "")) != 0


@dataclass(frozen=True)
class Choice:
    """Character data out of a list written as in a manual (``IMMediate``); returns the short form."""

    words: tuple[str, ...]
    optional: bool = False

    def parse(self, text: str) -> str:
        """Return the short form of the word. Raises ScpiError (-128, -141, -158, -178)."""
        _refuse_type(text)
        if text[0] in "+-.0123456789":
            raise ScpiError(-128)
        for word in self.words:
            if text.upper() in (word.upper(), short_form(word)):
                return short_form(word)
        raise ScpiError(-141)


@dataclass(frozen=True)
class Text:
    """String data in single or double quotes."""

    optional: bool = False

    def parse(self, text: str) -> str:
        """Return what stands between the quotes. Raises ScpiError (-104, -151)."""
        if text[0] not in "\"'":
            raise ScpiError(-104)
        if len(text) < 2 or text[-1] != text[0]:
            raise ScpiError(-151)
        return text[1:-1].replace(text[0] * 2, text[0])


_CHANNELS = re.compile(r"\(\s*@\s*(\d+(?:\s*:\s*\d+)?(?:\s*,\s*\d+(?:\s*:\s*\d+)?)*)\s*\)")


@dataclass(frozen=True)
class ChannelList:
    """Channels as ``(@101,103:105)``; every one must exist."""

    channels: tuple[int, ...]
    optional: bool = False

    def parse(self, text: str) -> tuple[int, ...]:
        """Return the channels in the order given. Raises ScpiError (-104, -171, -222)."""
        if text[0] != "(":
            raise ScpiError(-104)
        match = _CHANNELS.fullmatch(text)
        if match is None:
            raise ScpiError(-171)
        found: list[int] = []
        for part in match.group(1).split(","):
            first, _, last = part.partition(":")
            low, high = int(first), int(last or first)
            if low not in self.channels or high not in self.channels:
                raise ScpiError(-222)
            inside = [channel for channel in self.channels if min(low, high) <= channel <= max(low, high)]
            found.extend(inside if low <= high else reversed(inside))
        return tuple(found)
