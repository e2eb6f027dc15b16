"""Simulated boxes of relays: one with SCPI and read-back of its contacts, one cheap with binary frames."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from types import MappingProxyType
from typing import Final

from drivers.simulated.scpi_device import Command, JournalEntry, ScpiDevice
from drivers.simulated.scpi_syntax import ChannelList
from drivers.simulated.terminals import Terminals

_NONE_STUCK: Final[Mapping[int, bool]] = MappingProxyType({})


class _Contacts:
    """Relays as they stand; a stuck one ignores its coil. Counts how often each was switched."""

    def __init__(self, terminals: Terminals, channels: Sequence[int], stuck: Mapping[int, bool]) -> None:
        self._terminals = terminals
        self._stuck = stuck
        self.closed = {channel: stuck.get(channel, False) for channel in channels}
        self.cycles = dict.fromkeys(channels, 0)
        for channel, closed in stuck.items():
            terminals.set_relay(channel, closed)

    def command(self, channel: int, closed: bool) -> None:
        if channel in self._stuck or self.closed[channel] == closed:
            return
        self.closed[channel] = closed
        self.cycles[channel] += closed
        self._terminals.set_relay(channel, closed)


class SimulatedSwitchbox(ScpiDevice):
    """A SCPI switchbox with read-back of its contacts.

    Parameters
    ----------
    terminals : Terminals
        The relays' place in the world.
    channels : sequence of int
        The relays that the box has.
    stuck : mapping of channel to state
        Relays that no longer follow their coil (True: welded closed, False: never closes).
    """

    def __init__(
        self,
        terminals: Terminals,
        channels: Sequence[int],
        *,
        stuck: Mapping[int, bool] = _NONE_STUCK,
        identity: str = "toeline,simulated switchbox,X-0001,1.0",
    ) -> None:
        self.channels = tuple(channels)
        self._contacts = _Contacts(terminals, self.channels, stuck)
        super().__init__(identity, self._commands(), now_s=terminals.now_s)

    def _commands(self) -> tuple[Command, ...]:
        listed = (ChannelList(self.channels),)
        return (
            Command("ROUTe:CLOSe", lambda channels: self._switch(channels, True), listed),
            Command("ROUTe:CLOSe?", lambda channels: self._states(channels, True), listed),
            Command("ROUTe:OPEN", lambda channels: self._switch(channels, False), listed),
            Command("ROUTe:OPEN?", lambda channels: self._states(channels, False), listed),
            Command("ROUTe:OPEN:ALL", self.reset),
            Command("ROUTe:CLOSe:STATe?", self._closed_list),
            Command("DIAGnostic:RELay:CYCLes?", self._cycles, listed),
        )

    @property
    def closed(self) -> frozenset[int]:
        """The channels whose contacts are closed."""
        return frozenset(channel for channel, closed in self._contacts.closed.items() if closed)

    def reset(self) -> None:
        """Open every relay (also ``*RST``)."""
        self._switch(self.channels, False)

    def _switch(self, channels: Sequence[int], closed: bool) -> None:
        for channel in channels:
            self._contacts.command(channel, closed)

    def _states(self, channels: Sequence[int], closed: bool) -> str:
        return ",".join(str(int(self._contacts.closed[channel] == closed)) for channel in channels)

    def _closed_list(self) -> str:
        return f"(@{','.join(str(channel) for channel in sorted(self.closed))})"

    def _cycles(self, channels: Sequence[int]) -> str:
        return ",".join(str(self._contacts.cycles[channel]) for channel in channels)


class SimulatedRelayBoard:
    """A cheap relay board: frames of four bytes (A0, relay, 0 or 1, low byte of their sum), no answer ever.

    What such boards commonly speak. A frame with a wrong sum is dropped without a word; there is no identity,
    no read-back, no error queue.
    """

    def __init__(
        self, terminals: Terminals, channels: Sequence[int], *, stuck: Mapping[int, bool] = _NONE_STUCK
    ) -> None:
        self._contacts = _Contacts(terminals, channels, stuck)
        self._now_s = terminals.now_s
        self._input = bytearray()
        self.journal: list[JournalEntry] = []

    @property
    def closed(self) -> frozenset[int]:
        """The channels whose contacts are closed."""
        return frozenset(channel for channel, closed in self._contacts.closed.items() if closed)

    def receive(self, data: bytes) -> None:
        """Take bytes; look for a start byte, then carry out each whole frame."""
        self._input += data
        while len(self._input) >= 4:
            if self._input[0] != 0xA0:
                del self._input[0]
                continue
            frame = bytes(self._input[:4])
            del self._input[:4]
            self._carry_out(frame)

    def _carry_out(self, frame: bytes) -> None:
        channel, state = frame[1], frame[2]
        if sum(frame[:3]) & 0xFF != frame[3] or channel not in self._contacts.closed or state > 1:
            return
        self.journal.append(JournalEntry(self._now_s(), frame.hex(" ")))
        self._contacts.command(channel, bool(state))

    def transmit(self, count: int) -> bytes:
        """Give nothing: the board never answers."""
        return b""

    def end_of_message(self) -> None:
        """Do nothing: frames have a fixed length."""

    def talk(self) -> None:
        """Do nothing: there is nothing to say."""

    def clear(self) -> None:
        """Forget a frame begun."""
        self._input.clear()

    def status_byte(self) -> int:
        """Return 0: the board has no status."""
        return 0
