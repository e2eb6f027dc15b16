"""Status model and error queue of a SCPI instrument (IEEE 488.2 clause 11, SCPI-1999 volume 1 chapter 9)."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

PON, URQ, CME, EXE, DDE, QYE, RQC, OPC = 128, 64, 32, 16, 8, 4, 2, 1
"""Bits of the standard event status register (IEEE 488.2, 11.5.1)."""

ERROR_AVAILABLE, QUESTIONABLE, MESSAGE_AVAILABLE, EVENT_SUMMARY, MASTER_SUMMARY, OPERATION = (
    4,
    8,
    16,
    32,
    64,
    128,
)
"""Bits of the status byte (IEEE 488.2, 11.2; SCPI-1999 volume 1, 9.2)."""

STANDARD_ERRORS: Final = MappingProxyType(
    {
        0: "No error",
        -100: "Command error",
        -101: "Invalid character",
        -102: "Syntax error",
        -103: "Invalid separator",
        -104: "Data type error",
        -108: "Parameter not allowed",
        -109: "Missing parameter",
        -111: "Header separator error",
        -112: "Program mnemonic too long",
        -113: "Undefined header",
        -114: "Header suffix out of range",
        -121: "Invalid character in number",
        -123: "Exponent too large",
        -128: "Numeric data not allowed",
        -131: "Invalid suffix",
        -138: "Suffix not allowed",
        -141: "Invalid character data",
        -148: "Character data not allowed",
        -151: "Invalid string data",
        -158: "String data not allowed",
        -161: "Invalid block data",
        -168: "Block data not allowed",
        -171: "Invalid expression",
        -178: "Expression data not allowed",
        -200: "Execution error",
        -221: "Settings conflict",
        -222: "Data out of range",
        -224: "Illegal parameter value",
        -230: "Data corrupt or stale",
        -240: "Hardware error",
        -300: "Device-specific error",
        -350: "Queue overflow",
        -363: "Input buffer overrun",
        -410: "Query INTERRUPTED",
        -420: "Query UNTERMINATED",
        -440: "Query UNTERMINATED after indefinite response",
    }
)
"""SCPI-1999 volume 2, 21.8: the standard errors that these devices report."""

_BIT_OF_HUNDRED = MappingProxyType({1: CME, 2: EXE, 3: DDE, 4: QYE, 5: PON, 6: URQ, 7: RQC, 8: OPC})
_MASK_16 = 0x7FFF  # bit 15 is never used (SCPI-1999 volume 1, 9.1)


class ScpiError(Exception):
    """A command went wrong inside a simulated instrument; becomes an entry of its error queue."""

    def __init__(self, code: int, text: str | None = None) -> None:
        self.code = code
        self.text = STANDARD_ERRORS[code] if text is None else text
        super().__init__(f'{code},"{self.text}"')


def event_bit(code: int) -> int:
    """Return the bit of the standard event register that an error of this number sets."""
    if code > 0:
        return DDE
    return _BIT_OF_HUNDRED.get(-code // 100, 0)


@dataclass
class Register:
    """One SCPI status register set: condition, transition filters, event, enable."""

    condition: int = 0
    event: int = 0
    enable: int = 0
    positive: int = _MASK_16
    negative: int = 0

    def set_condition(self, value: int) -> None:
        """Take a new condition; edges that a filter lets through are latched in the event register."""
        rose, fell = value & ~self.condition, self.condition & ~value
        self.event |= (rose & self.positive) | (fell & self.negative)
        self.condition = value

    def take_event(self) -> int:
        """Return the event register and clear it, as a query of it does."""
        event, self.event = self.event, 0
        return event

    def preset(self) -> None:
        """STATus:PRESet."""
        self.enable, self.positive, self.negative = 0, _MASK_16, 0

    @property
    def summary(self) -> bool:
        """Whether an enabled event is latched."""
        return bool(self.event & self.enable)


class Status:
    """Everything that an instrument remembers of what went wrong or came to pass."""

    def __init__(self, queue_length: int = 20) -> None:
        self.queue_length = queue_length
        self.errors: deque[tuple[int, str]] = deque()
        self.events = PON
        self.event_enable = 0
        self.service_enable = 0
        self.questionable = Register()
        self.operation = Register()

    def add_error(self, code: int, text: str | None = None) -> None:
        """Queue an error and set its event bit; a full queue ends in -350 (SCPI-1999 volume 2, 21.8.1)."""
        self.events |= event_bit(code)
        if len(self.errors) < self.queue_length:
            self.errors.append((code, STANDARD_ERRORS[code] if text is None else text))
        else:
            self.events |= DDE
            self.errors[-1] = (-350, STANDARD_ERRORS[-350])

    def next_error(self) -> str:
        """Take the oldest error from the queue, in the form that SYSTem:ERRor? answers."""
        code, text = self.errors.popleft() if self.errors else (0, STANDARD_ERRORS[0])
        return f'{code},"{text}"'

    def take_events(self) -> int:
        """Return the standard event register and clear it (``*ESR?``)."""
        events, self.events = self.events, 0
        return events

    def preset(self) -> None:
        """Set the enables and filters of both SCPI registers as STATus:PRESet does."""
        self.questionable.preset()
        self.operation.preset()

    def clear(self) -> None:
        """``*CLS``: event registers and the error queue; enables stay."""
        self.errors.clear()
        self.events = 0
        self.questionable.event = 0
        self.operation.event = 0

    def byte(self, *, message_available: bool) -> int:
        """Return the status byte with the master summary in bit 6 (``*STB?``)."""
        value = 0
        if self.errors:
            value |= ERROR_AVAILABLE
        if self.questionable.summary:
            value |= QUESTIONABLE
        if message_available:
            value |= MESSAGE_AVAILABLE
        if self.events & self.event_enable:
            value |= EVENT_SUMMARY
        if self.operation.summary:
            value |= OPERATION
        if value & self.service_enable:
            value |= MASTER_SUMMARY
        return value
