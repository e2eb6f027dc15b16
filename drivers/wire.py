"""The wires under a message link: a VISA resource or a serial port.

What real wires do was measured with pyvisa 1.16 and pyvisa-py 0.8: a raw socket "opens" with nobody there, an
end of file looks like a timeout, small writes wait for Nagle unless TCP_NODELAY is set, serial reads return
short without a word. The wires turn all of it into the errors of `drivers.errors`.
"""

from __future__ import annotations

import select
import socket
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

from drivers.errors import BackendUnavailable, DriverError, LinkDown, LinkTimeout
from drivers.foreign import mapped_errors

if TYPE_CHECKING:
    from pyvisa.highlevel import VisaLibraryBase

_DRAIN_LIMIT_BYTES = 1 << 20
_DRAIN_LIMIT_S = 5.0


@dataclass(frozen=True)
class LinkSettings:
    """How a link talks: part of a dialect.

    `confirm` is the harmless question by which a link that lost step is found in step again ("": none).
    `quiet_s`: so long nothing may arrive before leftovers count as read away.
    """

    write_termination: str = "\n"
    read_termination: str = "\n"
    timeout_s: float = 2.0
    quiet_s: float = 0.1
    confirm: str = "*IDN?"
    baud: int = 9600


@dataclass(frozen=True)
class VisaAddress:
    """An instrument behind VISA; `library` is "" (the system's), "@py", a path, or a library object."""

    resource: str
    library: str | VisaLibraryBase = ""

    def __str__(self) -> str:
        return self.resource


@dataclass(frozen=True)
class SerialAddress:
    """An instrument on a serial port, spoken to with pyserial; `baud` None takes the dialect's."""

    port: str
    baud: int | None = None

    def __str__(self) -> str:
        return self.port


Address = VisaAddress | SerialAddress


class Wire(Protocol):
    """What carries bytes; all methods raise errors of `drivers.errors` only."""

    @property
    def where(self) -> str:
        """The address, for messages."""

    def send(self, data: bytes) -> None:
        """Send all of it. Raises LinkDown, LinkTimeout."""

    def receive(self, timeout_s: float) -> bytes:
        """Return what arrives up to and with the termination. Raises LinkDown, LinkTimeout."""

    def pending(self) -> bool:
        """Whether bytes wait that nobody asked for just now (False where the wire cannot tell)."""

    def drain(self, quiet_s: float) -> None:
        """Throw away what has arrived or is arriving."""

    def dead(self) -> bool:
        """Whether the other end is known to have gone (False: alive, or it cannot be told)."""

    def reopen(self) -> None:
        """Close and open again. Raises LinkDown, BackendUnavailable."""

    def close(self) -> None:
        """Close; never raises."""


class VisaWire:
    """A VISA resource of any backend, opened at once.

    Raises
    ------
    BackendUnavailable
        No such library, or the resource name means nothing to it.
    LinkDown
        Nobody is at the other end.
    """

    def __init__(self, address: VisaAddress, settings: LinkSettings) -> None:
        self._address = address
        self._settings = settings
        self._resource: Any = None
        self._socket: socket.socket | None = None
        self._open()

    @property
    def where(self) -> str:
        """The resource name."""
        return self._address.resource

    def _open(self) -> None:
        manager = _open_manager(self._address)
        try:
            with mapped_errors(self.where):
                self._set_up(manager)
        except DriverError:
            self.close()
            raise
        if self.dead():
            self.close()
            raise LinkDown(f"{self.where}: nobody answers there; check power, cable and address")

    def _set_up(self, manager: Any) -> None:
        milliseconds = round(self._settings.timeout_s * 1000)
        self._resource = manager.open_resource(self.where, open_timeout=milliseconds)
        self._resource.timeout = milliseconds
        self._resource.read_termination = self._settings.read_termination[-1:] or None
        if self.where.upper().startswith("ASRL"):
            self._resource.baud_rate = self._settings.baud
        self._find_socket(manager)

    def _find_socket(self, manager: Any) -> None:
        """Find the plain socket under pyvisa-py, which alone can tell a dead line from a slow one."""
        session = getattr(manager.visalib, "sessions", {}).get(self._resource.session)
        interface = getattr(session, "interface", None)
        self._socket = interface if isinstance(interface, socket.socket) else None
        if self._socket is not None:
            self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def send(self, data: bytes) -> None:
        """Send all of it."""
        with mapped_errors(self.where):
            self._resource.write_raw(data)

    def receive(self, timeout_s: float) -> bytes:
        """Return one message with its termination."""
        with mapped_errors(self.where):
            self._set_timeout(timeout_s)
            return bytes(self._resource.read_raw())

    def _set_timeout(self, timeout_s: float) -> None:
        milliseconds = max(1, round(timeout_s * 1000))
        if self._resource.timeout != milliseconds:
            self._resource.timeout = milliseconds

    def pending(self) -> bool:
        """Whether a socket holds unread bytes; message-based interfaces drop an unread answer themselves."""
        if self._socket is None:
            return False
        with mapped_errors(self.where):
            return bool(self._held_back()) or bool(self._peek())

    def _held_back(self) -> bytearray:
        """Return what pyvisa-py has read from the socket beyond the last message."""
        session = self._resource.visalib.sessions.get(self._resource.session)
        return getattr(session, "_pending_buffer", bytearray())

    def _peek(self) -> bytes | None:
        """Look at the socket: the bytes that wait, b"" at the end of file, None when nothing is there."""
        assert self._socket is not None
        if not select.select([self._socket], [], [], 0)[0]:
            return None
        return self._socket.recv(4096, socket.MSG_PEEK)

    def dead(self) -> bool:
        """Whether the socket reports an error or its end."""
        if self._socket is None:
            return False
        try:
            return self._socket.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR) != 0 or self._peek() == b""
        except OSError:
            return True

    def drain(self, quiet_s: float) -> None:
        """Read a socket until it is quiet; ask other interfaces to clear."""
        with mapped_errors(self.where):
            if self._socket is None:
                self._resource.clear()
                return
            self._held_back().clear()
            end = time.monotonic() + _DRAIN_LIMIT_S
            while time.monotonic() < end and select.select([self._socket], [], [], quiet_s)[0]:
                if not self._socket.recv(4096):
                    raise LinkDown(f"{self.where}: the instrument has closed the connection")

    def reopen(self) -> None:
        """Close and open again."""
        self.close()
        self._open()

    def close(self) -> None:
        """Close; what goes wrong meanwhile no longer matters."""
        resource, self._resource, self._socket = self._resource, None, None
        if resource is not None:
            _close_quietly(resource)


def _open_manager(address: VisaAddress) -> Any:
    import pyvisa

    try:
        return pyvisa.ResourceManager(address.library)
    except Exception as error:
        raise BackendUnavailable(
            f'no VISA library "{address.library}": {error}; "@py" is pyvisa-py, "" the VISA of your system'
        ) from error


def _close_quietly(resource: Any) -> None:
    try:
        resource.close()
    except Exception:  # the backends raise what they like; the line is given up anyway
        return


class SerialWire:
    """A serial port by pyserial, opened at once.

    Raises
    ------
    BackendUnavailable
        No such port, or it is in use.
    """

    def __init__(self, address: SerialAddress, settings: LinkSettings) -> None:
        self._address = address
        self._settings = settings
        self._end = settings.read_termination.encode("latin-1")[-1:] or b"\n"
        self._port: Any = None
        self._open()

    @property
    def where(self) -> str:
        """The name of the port."""
        return self._address.port

    def _open(self) -> None:
        import serial

        baud = self._address.baud or self._settings.baud
        try:
            self._port = serial.Serial(
                self.where, baud, timeout=self._settings.timeout_s, write_timeout=self._settings.timeout_s
            )
        except (OSError, ValueError) as error:
            raise BackendUnavailable(f"serial port {self.where} cannot be opened: {error}") from error

    def send(self, data: bytes) -> None:
        """Send all of it."""
        with mapped_errors(self.where):
            self._port.write(data)
            self._port.flush()

    def receive(self, timeout_s: float) -> bytes:
        """Return one message with its termination; on a timeout pyserial gives short bytes without a word."""
        with mapped_errors(self.where):
            self._port.timeout = timeout_s
            data = bytes(self._port.read_until(self._end, _DRAIN_LIMIT_BYTES))
        if not data.endswith(self._end):
            raise LinkTimeout(f"{self.where}: no whole answer within {timeout_s:g} s (got {data!r})")
        return data

    def pending(self) -> bool:
        """Whether unread bytes wait."""
        with mapped_errors(self.where):
            return bool(self._port.in_waiting)

    def dead(self) -> bool:
        """Whether the port has gone (an adapter unplugged)."""
        try:
            return self._port is None or self._port.in_waiting < 0
        except (OSError, TypeError):
            return True

    def drain(self, quiet_s: float) -> None:
        """Read until it is quiet."""
        with mapped_errors(self.where):
            self._port.timeout = quiet_s
            end = time.monotonic() + _DRAIN_LIMIT_S
            while time.monotonic() < end and self._port.read(4096):
                pass

    def reopen(self) -> None:
        """Close and open again. Raises LinkDown when the port has gone."""
        self.close()
        try:
            self._open()
        except BackendUnavailable as error:
            raise LinkDown(f"{self.where}: {error}") from error

    def close(self) -> None:
        """Close; what goes wrong meanwhile no longer matters."""
        port, self._port = self._port, None
        if port is not None:
            _close_quietly(port)


def open_wire(address: Address, settings: LinkSettings) -> Wire:
    """Open the wire that an address names. Raises BackendUnavailable, LinkDown."""
    if isinstance(address, SerialAddress):
        return SerialWire(address, settings)
    return VisaWire(address, settings)
