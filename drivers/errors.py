"""What can go wrong between the computer and a bench.

::

    DriverError
    ├── LinkError                 the conversation itself failed
    │   ├── LinkDown              nobody is there (any more)
    │   ├── LinkTimeout           no answer in time
    │   ├── LinkDesync            an answer that belongs to another question
    │   └── ReplyGarbled          bytes that do not mean what was asked for
    ├── WrongInstrument           somebody else answers
    ├── InstrumentError           the instrument refused (code and text from its error queue)
    ├── Overload                  the reading is beyond the range; it is not a value
    ├── ReadbackMismatch          what was commanded is not what is read back
    ├── ProtectionTripped         a protection of the supply has acted
    ├── AudioError
    │   ├── AudioXrun             samples were lost
    │   ├── AudioNoSignal         the stimulus never arrived
    │   └── AudioDead             the audio device or its server does not answer
    ├── BackendUnavailable        a library or a port that the bench file asks for is not there
    └── BadDialect                a dialect file cannot be used

Every error says who can mend it: ``"bench"``, ``"operator"`` or ``"unit"``.
"""

from __future__ import annotations

from typing import ClassVar


class DriverError(Exception):
    """Root of all errors of a bench; `mend` says who can mend it."""

    mend: ClassVar[str] = "bench"


class LinkError(DriverError):
    """The conversation with an instrument failed."""


class LinkDown(LinkError):
    """Nobody is at the other end (any more)."""

    mend = "operator"


class LinkTimeout(LinkError):
    """No answer in time; the link counts as dirty until it has been drained and confirmed."""


class LinkDesync(LinkError):
    """An answer arrived that belongs to another question."""


class ReplyGarbled(LinkError):
    """The bytes that arrived do not mean what was asked for."""


class WrongInstrument(DriverError):
    """The identity that answers is not the one that the bench file names."""

    mend = "operator"


class InstrumentError(DriverError):
    """The instrument put an error in its queue.

    Attributes
    ----------
    code : int
        SCPI-1999 error number, negative for standard ones.
    text : str
        The text that came with it.
    """

    def __init__(self, where: str, code: int, text: str) -> None:
        self.code = code
        self.text = text
        super().__init__(f'{where}: the instrument reports {code},"{text}"')


class Overload(DriverError):
    """The reading is beyond the range (IEEE 488.2 / SCPI ±9.9E37): never a value."""


class ReadbackMismatch(DriverError):
    """What was commanded is not what is read back."""


class ProtectionTripped(DriverError):
    """An over-voltage or over-current protection of the supply has acted."""

    mend = "unit"


class AudioError(DriverError):
    """The audio interface could not do a take."""


class AudioXrun(AudioError):
    """Samples were lost during a take."""


class AudioNoSignal(AudioError):
    """The stimulus never arrived at the monitor input."""

    mend = "operator"


class AudioDead(AudioError):
    """The audio device or its server does not answer."""


class BackendUnavailable(DriverError):
    """A library, port or device that the bench file asks for is not there."""

    mend = "operator"


class BadDialect(DriverError):
    """A dialect file cannot be used; the message names file, line and what is accepted."""
