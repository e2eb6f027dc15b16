"""An in-process VISA library: simulated instruments behind ``pyvisa.ResourceManager``, without a wire.

``pyvisa.ResourceManager(SimulatedVisaLibrary.create({"TCPIP0::supply.bench::5025::SOCKET": device}))`` opens
them like any other. There is no waiting: a read with nothing to read times out at once.
"""

from __future__ import annotations

import itertools
import threading
from collections.abc import Mapping
from typing import Any, Final

from pyvisa import constants, rname
from pyvisa.constants import ResourceAttribute, StatusCode
from pyvisa.highlevel import VisaLibraryBase
from pyvisa.util import LibraryPath

from drivers.foreign import mapped_errors
from drivers.simulated.scpi_device import ByteDevice

_numbers: Final = itertools.count(1)
_DEFAULTS: Final = (
    (ResourceAttribute.timeout_value, 2000),
    (ResourceAttribute.termchar, ord("\n")),
    (ResourceAttribute.termchar_enabled, False),
    (ResourceAttribute.send_end_enabled, True),
)


class _Session:
    def __init__(self, device: ByteDevice, resource_name: str) -> None:
        parsed = rname.parse_resource_name(resource_name)
        self.device = device
        self.attributes: dict[Any, Any] = dict(_DEFAULTS)
        self.attributes[ResourceAttribute.resource_name] = resource_name
        self.attributes[ResourceAttribute.interface_type] = parsed.interface_type_const
        self.attributes[ResourceAttribute.resource_class] = parsed.resource_class
        self.unread = bytearray()

    def write(self, data: bytes) -> None:
        self.unread.clear()  # a new message ends the answer to the last one (IEEE 488.2, 6.3.2.3)
        self.device.receive(data)
        if self.attributes[ResourceAttribute.send_end_enabled]:
            self.device.end_of_message()

    def read(self, count: int) -> tuple[bytes, StatusCode]:
        if not self.unread:
            self.unread += self.device.transmit(1 << 20)
        if not self.unread:
            self.device.talk()
            return b"", StatusCode.error_timeout
        end, status = len(self.unread), StatusCode.success
        if self.attributes[ResourceAttribute.termchar_enabled]:
            found = self.unread.find(self.attributes[ResourceAttribute.termchar])
            if found >= 0:
                end, status = found + 1, StatusCode.success_termination_character_read
        if end > count:
            end, status = count, StatusCode.success_max_count_read
        data = bytes(self.unread[:end])
        del self.unread[:end]
        return data, status


class SimulatedVisaLibrary(VisaLibraryBase):
    """The devices of one simulated bench as a VISA library; see `create`."""

    _devices: dict[str, ByteDevice]
    _sessions: dict[int, _Session | None]
    _lock: threading.RLock

    @classmethod
    def create(cls, devices: Mapping[str, ByteDevice]) -> SimulatedVisaLibrary:
        """Return a library of its own for `devices`, keyed by VISA resource name.

        Raises
        ------
        BackendUnavailable
            A key is no VISA resource name.
        """
        path = f"simulated-{next(_numbers)}"
        library = cls(LibraryPath(path, "simulated"))
        assert isinstance(library, SimulatedVisaLibrary)
        library._devices = {}
        for name, device in devices.items():
            with mapped_errors(f'simulated instrument "{name}"'):
                library._devices[rname.to_canonical_name(name)] = device
        return library

    def _init(self) -> None:
        self._devices = {}
        self._sessions = {}
        self._lock = threading.RLock()  # the devices share one world

    def _add(self, session: _Session | None) -> Any:
        number = next(_numbers)
        self._sessions[number] = session
        return number

    def _find(self, session: Any) -> _Session:
        found = self._sessions.get(session)
        if found is None:
            self.handle_return_value(session, StatusCode.error_invalid_object)
        assert found is not None
        return found

    def open_default_resource_manager(self) -> Any:
        """Return a session of the resource manager."""
        return self._add(None), self.handle_return_value(None, StatusCode.success)

    def list_resources(self, session: Any, query: str = "?*::INSTR") -> tuple[str, ...]:
        """Return the names of the devices that match the VISA expression."""
        return tuple(rname.filter(tuple(self._devices), query))

    def open(
        self,
        session: Any,
        resource_name: str,
        access_mode: constants.AccessModes = constants.AccessModes.no_lock,
        open_timeout: int = constants.VI_TMO_IMMEDIATE,
    ) -> Any:
        """Open a device. Raises VisaIOError when there is none of that name."""
        name = rname.to_canonical_name(resource_name)
        if name not in self._devices:
            self.handle_return_value(session, StatusCode.error_resource_not_found)
        opened = self._add(_Session(self._devices[name], name))
        return opened, self.handle_return_value(opened, StatusCode.success)

    def close(self, session: Any) -> StatusCode:
        """Close a session; closing twice does no harm."""
        self._sessions.pop(session, None)
        return StatusCode.success

    def write(self, session: Any, data: bytes) -> tuple[int, StatusCode]:
        """Hand bytes to the device."""
        with self._lock:
            self._find(session).write(data)
        return len(data), self.handle_return_value(session, StatusCode.success)

    def read(self, session: Any, count: int) -> tuple[bytes, StatusCode]:
        """Take bytes from the device; raises VisaIOError (timeout) when there are none."""
        with self._lock:
            data, status = self._find(session).read(count)
        return data, self.handle_return_value(session, status)

    def clear(self, session: Any) -> StatusCode:
        """Device clear."""
        found = self._find(session)
        found.unread.clear()
        found.device.clear()
        return self.handle_return_value(session, StatusCode.success)

    def read_stb(self, session: Any) -> tuple[int, StatusCode]:
        """Serial poll."""
        return self._find(session).device.status_byte(), self.handle_return_value(session, StatusCode.success)

    def get_attribute(self, session: Any, attribute: Any) -> tuple[Any, StatusCode]:
        """Return an attribute of a session."""
        found = self._find(session)
        if attribute not in found.attributes:
            self.handle_return_value(session, StatusCode.error_nonsupported_attribute)
        return found.attributes[attribute], self.handle_return_value(session, StatusCode.success)

    def set_attribute(self, session: Any, attribute: Any, attribute_state: Any) -> StatusCode:
        """Set an attribute of a session."""
        self._find(session).attributes[attribute] = attribute_state
        return self.handle_return_value(session, StatusCode.success)

    def disable_event(self, session: Any, event_type: Any, mechanism: Any) -> StatusCode:
        """Do nothing: there are no events."""
        return StatusCode.success

    def discard_events(self, session: Any, event_type: Any, mechanism: Any) -> StatusCode:
        """Do nothing: there are no events."""
        return StatusCode.success
