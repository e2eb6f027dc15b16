"""Exchanges of SCPI-1999 / IEEE 488.2 over a message link: error queue, completion, strict numbers, blocks.

What an instrument lacks (an error queue, ``*OPC?``, ``*IDN?``) its dialect says; the exchange does without.
"""

from __future__ import annotations

import contextlib
import re
from collections.abc import Callable
from typing import Final, TypeVar

from drivers.dialect import ScpiQuirks
from drivers.errors import (
    InstrumentError,
    LinkDesync,
    LinkDown,
    LinkTimeout,
    Overload,
    ReplyGarbled,
    WrongInstrument,
)
from drivers.link import MessageLink
from drivers.roles import Identity

INFINITY: Final = 9.9e37
"""SCPI-1999 volume 1, 7.2.1.4: what stands for infinity; an overloaded input reads so."""
NOT_A_NUMBER: Final = 9.91e37
"""SCPI-1999 volume 1, 7.2.1.5."""

_T = TypeVar("_T")
_MOST_ERRORS = 32
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[Ee][+-]?\d+)?", re.ASCII)
_ERROR = re.compile(r'([+-]?\d+)\s*(?:,\s*"?(.*?)"?)?')


def parse_number(text: str, where: str) -> float:
    """Read one number of an answer, strictly.

    Raises
    ------
    Overload
        ±9.9E37: beyond the range.
    ReplyGarbled
        9.91E37 (not a number), or anything that is no decimal number.
    """
    if not _NUMBER.fullmatch(text):
        raise ReplyGarbled(f"{where}: {text!r} is not a number")
    value = float(text)
    if abs(value) > INFINITY * (1 + 1e-6):
        raise ReplyGarbled(f"{where}: the instrument answers {text} (not a number)")
    if abs(value) >= INFINITY * (1 - 1e-6):
        raise Overload(f"{where}: overload ({text}); the reading is beyond the range")
    return value


def parse_block(data: bytes, where: str) -> bytes:
    """Return the content of an IEEE 488.2 block (8.7.9, 8.7.10). Raises ReplyGarbled."""
    if data[:2] == b"#0":
        return data[2:].removesuffix(b"\n")
    start, length = _block_header(data, where)
    if len(data) < start + length:
        raise ReplyGarbled(f"{where}: block of {length} bytes cut short at {len(data) - start}")
    return data[start : start + length]


def _block_header(data: bytes, where: str) -> tuple[int, int]:
    if not re.match(rb"#[1-9]", data):
        raise ReplyGarbled(f"{where}: {data[:12]!r} is no block of IEEE 488.2")
    start = 2 + int(data[1:2])
    digits = data[2:start]
    if not digits.isdigit():
        raise ReplyGarbled(f"{where}: {data[:12]!r} has no block length")
    return start, int(digits)


def _block_complete(where: str) -> Callable[[bytes], bool]:
    def complete(data: bytes) -> bool:
        if data[:2] == b"#0":
            return True
        digits = int(data[1:2]) if data[1:2].isdigit() else 0
        if len(data) < 2 + digits:
            return False
        start, length = _block_header(data, where)
        return len(data) > start + length  # the newline after it belongs to the answer

    return complete


def parse_identity(answer: str, where: str) -> Identity:
    """Split the four fields of ``*IDN?`` (IEEE 488.2, 10.14). Raises ReplyGarbled."""
    fields = [field.strip() for field in answer.split(",")]
    if len(fields) < 4 or not fields[0]:
        raise ReplyGarbled(f"{where}: {answer!r} is no identity of four fields (maker,model,serial,firmware)")
    return Identity(fields[0], fields[1], fields[2], ",".join(fields[3:]))


def check_identity(identity: Identity, expected: str, *, where: str = "bench") -> None:
    """Compare who answers with who should; a field ``*`` of `expected` accepts anything, so does empty text.

    Raises
    ------
    WrongInstrument
        Both identities side by side, and which fields differ.
    """
    if not expected.strip():
        return
    found = (identity.maker, identity.model, identity.serial, identity.firmware)
    wanted = [field.strip() for field in expected.split(",", 3)]
    wanted += ["*"] * (4 - len(wanted))
    names = ("maker", "model", "serial", "firmware")
    differ = [
        name for name, have, want in zip(names, found, wanted, strict=True) if want != "*" and have != want
    ]
    if differ:
        raise WrongInstrument(
            f"{where}: another instrument answers ({', '.join(differ)} differ)\n"
            f"  answers : {identity}\n"
            f"  expected: {expected}\n"
            "connect the instrument that the bench file names, or correct its identity there"
        )


class ScpiExchange:
    """Questions and commands to one instrument, each followed by a look into its error queue.

    Parameters
    ----------
    link : MessageLink
        The conversation; the exchange owns it.
    quirks : ScpiQuirks
        What the instrument can do of SCPI.
    """

    def __init__(self, link: MessageLink, quirks: ScpiQuirks | None = None) -> None:
        self.link = link
        self._quirks = ScpiQuirks() if quirks is None else quirks
        self._recoveries = link.recoveries

    @property
    def where(self) -> str:
        """The address, for messages."""
        return self.link.where

    def identify(self) -> Identity | None:
        """Ask who it is; None when the instrument cannot say."""
        if not self._quirks.identify:
            return None
        answer = self.link.query(self._quirks.identify, retry=True)
        identity = self._judged(lambda: parse_identity(answer, self.where))
        self.link.remember_identity(answer)
        return identity

    def command(self, *messages: str) -> None:
        """Send commands, then empty the error queue once.

        Raises
        ------
        InstrumentError
            The first error that the instrument queued; the rest is thrown away with it.
        LinkError
            The conversation failed; no command is repeated.
        """
        for message in messages:
            self.link.write(message)
        self.check_errors()

    def ask(self, message: str, *, retry: bool = True, timeout_s: float | None = None) -> str:
        """Ask for text. Raises LinkError, or InstrumentError when the instrument says why it is silent."""
        try:
            return self.link.query(message, retry=retry, timeout_s=timeout_s)
        except LinkDown:
            raise
        except LinkTimeout as silent:
            self._explain(message, silent)
            raise

    def ask_number(self, message: str, *, retry: bool = True, timeout_s: float | None = None) -> float:
        """Ask for one number. Raises Overload, ReplyGarbled, and as `ask`."""
        answer = self.ask(message, retry=retry, timeout_s=timeout_s)
        return self._judged(lambda: parse_number(answer, f'{self.where}, "{message}"'))

    def ask_flag(self, message: str, *, retry: bool = True) -> bool:
        """Ask for a state: 0 or 1, ON or OFF. Raises ReplyGarbled, and as `ask`."""
        answer = self.ask(message, retry=retry).upper()
        if answer in ("ON", "OFF"):
            return answer == "ON"
        number = self._judged(lambda: parse_number(answer, f'{self.where}, "{message}"'))
        if number not in (0.0, 1.0):
            self.link.mark_dirty()
            raise ReplyGarbled(f'{self.where}, "{message}": {answer!r} is neither 0 nor 1, ON nor OFF')
        return number == 1.0

    def ask_block(self, message: str, *, timeout_s: float | None = None) -> bytes:
        """Ask for an IEEE 488.2 block and return its content. Raises ReplyGarbled, and as `ask`."""
        raw = self.link.query_bytes(message, _block_complete(self.where), timeout_s=timeout_s)
        return self._judged(lambda: parse_block(raw, self.where))

    def wait_complete(self, *, timeout_s: float | None = None) -> None:
        """Wait until the instrument has done what it was told (``*OPC?``), where it can say so."""
        if self._quirks.wait_complete:
            self.ask(self._quirks.wait_complete, timeout_s=timeout_s)

    def clear_status(self) -> None:
        """Empty error queue and event registers (``*CLS``), where there are any."""
        if self._quirks.clear_status:
            self.link.write(self._quirks.clear_status)

    def read_errors(self) -> tuple[tuple[int, str], ...]:
        """Empty the error queue, at most 32 entries; without one, nothing. Raises LinkError."""
        if not self._quirks.next_error:
            return ()
        found: list[tuple[int, str]] = []
        while len(found) < _MOST_ERRORS:
            answer = self.link.query(self._quirks.next_error)
            code, text = self._parse_error(answer)
            if code == 0:
                break
            found.append((code, text))
        if self.link.recoveries != self._recoveries:  # its own complaints about a conversation cut short
            self._recoveries = self.link.recoveries
            found = [(code, text) for code, text in found if not -499 <= code <= -400]
        return tuple(found)

    def check_errors(self) -> None:
        """Raise what stands in the error queue. Raises InstrumentError, LinkError."""
        errors = self.read_errors()
        if errors:
            code, text = errors[0]
            others = "".join(f'; {code},"{text}"' for code, text in errors[1:])
            raise InstrumentError(self.where, code, text + others)

    def close(self) -> None:
        """Close the link."""
        self.link.close()

    def _parse_error(self, answer: str) -> tuple[int, str]:
        match = _ERROR.fullmatch(answer)
        if match is None:
            self.link.mark_dirty()
            raise ReplyGarbled(f"{self.where}: {answer!r} is no entry of an error queue")
        return int(match.group(1)), match.group(2) or ""

    def _judged(self, parse: Callable[[], _T]) -> _T:
        """Parse; an answer that makes no sense makes the whole conversation suspect."""
        try:
            return parse()
        except ReplyGarbled:
            self.link.mark_dirty()
            raise

    def _explain(self, message: str, silent: LinkTimeout) -> None:
        """Look whether the error queue says why no answer came."""
        errors: list[tuple[int, str]] = []
        with contextlib.suppress(LinkTimeout, LinkDesync):  # still silent: then the first silence is the news
            errors = [entry for entry in self.read_errors() if not -499 <= entry[0] <= -400]
        if errors:
            raise InstrumentError(f'{self.where}, "{message}"', *errors[0]) from silent
