"""One message link to an instrument: questions and answers that stay together, whatever the wire does.

After a timeout or anything else odd the link counts as dirty. Before its next use a dirty link is drained and
asked who it is; only the known answer makes it clean. A link that has gone down is opened again once per use.
Commands are never sent twice; a question is asked again only when its caller says that this does no harm.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from enum import Enum
from typing import TYPE_CHECKING, TypeVar

from drivers.errors import LinkDesync, LinkDown, LinkTimeout, WrongInstrument
from drivers.wire import Address, LinkSettings, SerialAddress, VisaAddress, Wire, open_wire

if TYPE_CHECKING:
    from pyvisa.highlevel import VisaLibraryBase

_CONFIRM_TRIES = 3
_T = TypeVar("_T")


class LinkState(Enum):
    """What is known of the conversation."""

    CLEAN = "in step"
    DIRTY = "an answer may be on its way"
    DOWN = "nobody at the other end"
    CLOSED = "closed"


class MessageLink:
    """A conversation over one wire, safe to use from several threads.

    Parameters
    ----------
    wire : Wire
        What carries the bytes; the link owns it.
    settings : LinkSettings
        Terminations, deadlines, and the question that confirms a link.

    Attributes
    ----------
    recoveries : int
        How often the link had to find its step again; the instrument's settings may have been lost then.
    """

    def __init__(self, wire: Wire, settings: LinkSettings) -> None:
        self._wire = wire
        self._settings = settings
        self._lock = threading.RLock()
        self._state = LinkState.CLEAN
        self._reopened = False
        self._identity: str | None = None
        self.recoveries = 0

    @property
    def where(self) -> str:
        """The address, for messages."""
        return self._wire.where

    @property
    def state(self) -> LinkState:
        """What is known of the conversation now."""
        return self._state

    def remember_identity(self, identity: str) -> None:
        """Keep the answer by which the link knows its instrument again."""
        self._identity = identity

    def mark_dirty(self) -> None:
        """Distrust the conversation: drain and confirm before the next use."""
        if self._state is LinkState.CLEAN:
            self._state = LinkState.DIRTY

    def write(self, message: str) -> None:
        """Send a command; never repeated. Raises LinkDown, LinkTimeout, LinkDesync, WrongInstrument."""
        self.write_bytes((message + self._settings.write_termination).encode("latin-1"))

    def write_bytes(self, data: bytes) -> None:
        """Send bytes as they are; never repeated. Raises as `write`."""
        with self._lock:
            self._make_ready()
            self._guarded(lambda: self._wire.send(data))

    def query(self, message: str, *, retry: bool = False, timeout_s: float | None = None) -> str:
        """Ask and return the answer without its termination and without NULs, decoded byte by byte (latin-1).

        Parameters
        ----------
        message : str
            The question.
        retry : bool
            Whether asking twice does no harm: once more after a timeout or a stale answer.
        timeout_s : float, optional
            The deadline of this answer; None takes the settings'.

        Raises
        ------
        LinkDown, LinkTimeout, LinkDesync, WrongInstrument
            The conversation failed; the next use recovers it first.
        """
        raw = self.query_bytes(message, lambda data: True, retry=retry, timeout_s=timeout_s)
        return raw.decode("latin-1").replace("\0", "").strip()

    def query_bytes(
        self,
        message: str,
        complete: Callable[[bytes], bool],
        *,
        retry: bool = False,
        timeout_s: float | None = None,
    ) -> bytes:
        """Ask and return the raw answer; reads on until `complete` says so (blocks may hold any byte)."""
        with self._lock:
            try:
                return self._exchange(message, complete, timeout_s)
            except (LinkTimeout, LinkDesync):
                if not retry:
                    raise
            return self._exchange(message, complete, timeout_s)

    def close(self) -> None:
        """Close the wire; a closed link stays closed."""
        with self._lock:
            self._state = LinkState.CLOSED
            self._wire.close()

    # -- inside --------------------------------------------------------------------------------------------

    def _exchange(self, message: str, complete: Callable[[bytes], bool], timeout_s: float | None) -> bytes:
        self._make_ready()
        if self._wire.pending():
            self._state = LinkState.DIRTY
            if self._wire.dead():
                self._went_down()
            raise LinkDesync(f'{self.where}: an answer was waiting before "{message}" was asked')
        return self._guarded(lambda: self._ask(message, complete, timeout_s))

    def _ask(self, message: str, complete: Callable[[bytes], bool], timeout_s: float | None) -> bytes:
        deadline_s = self._settings.timeout_s if timeout_s is None else timeout_s
        self._wire.send((message + self._settings.write_termination).encode("latin-1"))
        data = self._wire.receive(deadline_s)
        while not complete(data):
            data += self._wire.receive(deadline_s)
        return data

    def _guarded(self, act: Callable[[], _T]) -> _T:
        """Do something with the wire; whatever ends it early (Ctrl-C too) leaves the link dirty or down."""
        before = self._state
        self._state = LinkState.DIRTY
        try:
            result = act()
        except LinkTimeout as error:
            if self._wire.dead():
                self._went_down(error)
            raise
        except LinkDown:
            self._state = LinkState.DOWN
            raise
        self._state = before
        return result

    def _went_down(self, cause: Exception | None = None) -> None:
        self._state = LinkState.DOWN
        raise LinkDown(f"{self.where}: the instrument has gone; check power and cable") from cause

    def _make_ready(self) -> None:
        if self._state is LinkState.CLEAN:
            return
        if self._state is LinkState.CLOSED:
            raise LinkDown(f"{self.where}: this link is closed")
        if self._state is LinkState.DOWN:
            self._wire.reopen()
            self._state = LinkState.DIRTY
            self._reopened = True
        self._guarded(self._find_step)
        self.recoveries += 1
        self._reopened = False
        self._state = LinkState.CLEAN

    def _find_step(self) -> None:
        """Drain, then ask who it is until the known answer comes (twice the same when none is known)."""
        quiet_s = self._settings.quiet_s
        self._wire.drain(quiet_s)
        if not self._settings.confirm:
            return
        expected, answers = self._identity, list[str]()
        for attempt in range(_CONFIRM_TRIES):
            try:
                raw = self._ask(self._settings.confirm, lambda data: True, None)
            except LinkTimeout:
                if attempt > 0 or self._wire.dead():  # a silent instrument must not hold up a safe state
                    raise
                continue
            answer = raw.decode("latin-1").replace("\0", "").strip()
            if answer == expected or (expected is None and answer in answers):
                self._identity = answer
                return
            answers.append(answer)
            self._wire.drain(max(quiet_s, self._settings.timeout_s / 4) if expected else quiet_s)
        if self._reopened and expected is not None and answers:
            raise WrongInstrument(f'{self.where}: came back as "{answers[-1]}", was "{expected}"')
        raise LinkDesync(f"{self.where}: cannot find step with the instrument again (answers {answers})")


def open_link(address: Address, settings: LinkSettings | None = None) -> MessageLink:
    """Open a link to a VISA resource or a serial port.

    Raises
    ------
    BackendUnavailable
        The library or port is not there.
    LinkDown
        Nobody answers at that address.
    """
    settings = LinkSettings() if settings is None else settings
    return MessageLink(open_wire(address, settings), settings)


def open_visa_link(
    resource: str, *, library: str | VisaLibraryBase = "", settings: LinkSettings | None = None
) -> MessageLink:
    """Open a link over a VISA library, by its name for pyvisa or as an object. Raises as `open_link`."""
    return open_link(VisaAddress(resource, library), settings)


def open_serial_link(
    port: str, *, baud: int | None = None, settings: LinkSettings | None = None
) -> MessageLink:
    """Open a link over a serial port by pyserial. Raises as `open_link`."""
    return open_link(SerialAddress(port, baud), settings)


__all__ = [
    "Address",
    "LinkSettings",
    "LinkState",
    "MessageLink",
    "SerialAddress",
    "VisaAddress",
    "open_link",
    "open_serial_link",
    "open_visa_link",
]
