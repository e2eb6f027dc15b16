"""Simulated instruments behind TCP sockets, and behind a pseudo-terminal (not on Windows)."""

from __future__ import annotations

import contextlib
import os
import selectors
import socket
import sys
import threading
from types import TracebackType

from drivers.errors import BackendUnavailable
from drivers.simulated.scpi_device import ByteDevice

_CHUNK_BYTES = 4096


class _Server:
    """A thread that carries bytes between a file and a device until it is closed."""

    def __init__(self, device: ByteDevice, lock: threading.Lock | None) -> None:
        self._device = device
        self._lock = threading.Lock() if lock is None else lock
        self._wake_read, self._wake_write = socket.socketpair()
        self._selector = selectors.DefaultSelector()
        self._selector.register(self._wake_read, selectors.EVENT_READ)
        self._thread = threading.Thread(target=self._run, name=type(self).__name__, daemon=True)

    def _answer(self, data: bytes) -> bytes:
        with self._lock:
            self._device.receive(data)
            return self._device.transmit(1 << 20)

    def _run(self) -> None:
        while True:
            for key, _ in self._selector.select():
                if key.fileobj is self._wake_read:
                    return
                self._serve(key)

    def _serve(self, key: selectors.SelectorKey) -> None:
        raise NotImplementedError

    def close(self) -> None:
        """Stop serving; returns when the thread has ended."""
        if self._thread.is_alive():
            self._wake_write.send(b"x")
            self._thread.join()
        for key in list(self._selector.get_map().values()):
            if isinstance(key.fileobj, socket.socket):
                key.fileobj.close()
        self._wake_write.close()
        self._selector.close()

    def __enter__(self) -> _Server:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


class TcpServer(_Server):
    """One device on a TCP port of this computer (raw socket, as most instruments offer on port 5025).

    Parameters
    ----------
    device : ByteDevice
        Who answers.
    port : int
        0 takes a free one; see `port`.
    lock : threading.Lock, optional
        Shared by the servers of devices that live in one world.
    """

    def __init__(self, device: ByteDevice, *, port: int = 0, lock: threading.Lock | None = None) -> None:
        super().__init__(device, lock)
        self._listener = socket.create_server(("127.0.0.1", port))
        self.port: int = self._listener.getsockname()[1]
        self._selector.register(self._listener, selectors.EVENT_READ)
        self._thread.start()

    @property
    def resource(self) -> str:
        """The VISA resource name of this server."""
        return f"TCPIP0::127.0.0.1::{self.port}::SOCKET"

    def _serve(self, key: selectors.SelectorKey) -> None:
        if key.fileobj is self._listener:
            connection, _ = self._listener.accept()
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._selector.register(connection, selectors.EVENT_READ)
            return
        client = key.fileobj
        assert isinstance(client, socket.socket)
        with contextlib.suppress(OSError):  # a client gone without a word is the same as its end of file
            data = client.recv(_CHUNK_BYTES)
            if data:
                client.sendall(self._answer(data))
                return
        self._selector.unregister(client)
        client.close()


def _open_pseudo_terminal() -> tuple[int, int, str]:
    if sys.platform != "win32":
        import pty
        import tty

        master, slave = pty.openpty()
        tty.setraw(slave)
        return master, slave, os.ttyname(slave)
    raise BackendUnavailable(
        "a simulated serial port needs pseudo-terminals, which this system does not have; "
        "use the TCP server or the in-process library instead"
    )


class PtyServer(_Server):
    """One device on a pseudo-terminal; `port` is what a serial library opens.

    Raises
    ------
    BackendUnavailable
        This system has no pseudo-terminals.
    """

    def __init__(self, device: ByteDevice, *, lock: threading.Lock | None = None) -> None:
        self._master, self._slave, self.port = _open_pseudo_terminal()
        super().__init__(device, lock)
        self._selector.register(self._master, selectors.EVENT_READ)
        self._thread.start()

    def _serve(self, key: selectors.SelectorKey) -> None:
        with contextlib.suppress(OSError):  # nobody has the other end open just now
            answer = self._answer(os.read(self._master, _CHUNK_BYTES))
            while answer:
                answer = answer[os.write(self._master, answer) :]

    def close(self) -> None:
        """Stop serving and take the port away."""
        super().close()
        with contextlib.suppress(OSError):
            os.close(self._master)
            os.close(self._slave)
