"""The driver of a switchbox: break before make, settle, verify by read-back where the box has one."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from drivers.dialect import SwitchboxDialect, load_dialect
from drivers.errors import DriverError, ReadbackMismatch, ReplyGarbled
from drivers.link import Address, open_link
from drivers.roles import Clock, Identity
from drivers.scpi import ScpiExchange


class SwitchboxDriver:
    """A box of relays (`drivers.roles.Switchbox`).

    A box without read-back is taken at its word: the driver remembers what it commanded.

    Parameters
    ----------
    exchange : ScpiExchange
        The conversation; the driver owns it.
    dialect : SwitchboxDialect
        How the box says things.
    clock : Clock
        Where waiting goes.
    """

    def __init__(self, exchange: ScpiExchange, dialect: SwitchboxDialect, clock: Clock) -> None:
        self._exchange = exchange
        self._dialect = dialect
        self._clock = clock
        self._commanded_closed: set[int] = set()

    @property
    def dialect(self) -> SwitchboxDialect:
        """How the box says things."""
        return self._dialect

    @property
    def reads_back(self) -> bool:
        """Whether the box can tell what its relays do."""
        return bool(self._dialect.commands.ask_closed)

    def identify(self) -> Identity:
        """Return who answers; where nobody can say, the dialect's title stands for the model."""
        return self._exchange.identify() or Identity("", self._dialect.title, "", "")

    def set_channels(self, *, close: Sequence[int], open: Sequence[int]) -> None:
        """Open, wait, then close, wait: break before make. Verifies both by read-back where there is one.

        Raises
        ------
        DriverError
            A channel is to be open and closed at once.
        ReadbackMismatch
            Relays that did not follow.
        InstrumentError, LinkError
            The box refused, or the conversation failed.
        """
        both = sorted(set(close) & set(open))
        if both:
            raise DriverError(f"channels {both} cannot be open and closed at once")
        if open:
            self._switch(open, closed=False)
            self._verify(open, closed=False)  # nothing is made before the break is certain
        if close:
            self._switch(close, closed=True)
            self._verify(close, closed=True)

    def closed_channels(self, channels: Sequence[int]) -> frozenset[int]:
        """Return which of the channels are closed, by read-back (as commanded where there is none)."""
        if not channels:
            return frozenset()
        if not self.reads_back:
            return frozenset(channels) & self._commanded_closed
        template = self._dialect.commands.ask_closed
        if "{channels" in template:
            states = self._ask_states(template.format(channels=_joined(channels)), len(channels))
        else:
            states = [
                state for one in channels for state in self._ask_states(template.format(channel=one), 1)
            ]
        return frozenset(channel for channel, state in zip(channels, states, strict=True) if state)

    def open_all(self) -> None:
        """Open every relay that the box has, or that the dialect lists, and verify. Idempotent.

        Raises
        ------
        ReadbackMismatch
            A relay that was closed before stays closed.
        InstrumentError, LinkError
            The box refused, or the conversation failed.
        """
        was_closed = sorted(self._commanded_closed)
        listed = self._dialect.relays.channels
        if self._dialect.commands.open_all:
            self._send(self._dialect.commands.open_all)
            self._clock.sleep(self._dialect.relays.operate_s)
        else:
            self._switch(listed, closed=False)
        self._verify(listed or was_closed, closed=False)
        self._commanded_closed.clear()

    def close(self) -> None:
        """Close the link; the relays stay as they are."""
        self._exchange.close()

    # -- inside --------------------------------------------------------------------------------------------

    def _switch(self, channels: Sequence[int], *, closed: bool) -> None:
        commands = self._dialect.commands
        template = commands.close if closed else commands.open
        if closed:
            self._commanded_closed.update(channels)  # before it is sent: whatever happens, it may be closed
        if "{channels" in template:
            self._send(template.format(channels=_joined(channels)))
        else:
            self._send(*(self._fill(template, channel) for channel in channels))
        if not closed:
            self._commanded_closed.difference_update(channels)
        self._clock.sleep(self._dialect.relays.operate_s)

    def _fill(self, template: str, channel: int) -> str:
        """Put channel and check sum into a template."""
        head, place, tail = template.partition("{sum}")
        head = head.format(channel=channel)
        if not place:
            return head
        return f"{head}{sum(bytes.fromhex(head)) & 0xFF:02X}{tail.format(channel=channel)}"

    def _send(self, *messages: str) -> None:
        if self._dialect.commands.frames == "text":
            self._exchange.command(*messages)
            return
        for message in messages:
            self._exchange.link.write_bytes(bytes.fromhex(message))

    def _ask_states(self, question: str, count: int) -> list[bool]:
        answer = self._exchange.ask(question)
        states = [text.strip() for text in answer.split(",")]
        if len(states) != count or not set(states) <= {"0", "1"}:
            self._exchange.link.mark_dirty()
            raise ReplyGarbled(
                f'{self._exchange.where}, "{question}": {answer!r} is not {count} states of 0 or 1'
            )
        return [state == "1" for state in states]

    def _verify(self, channels: Sequence[int], *, closed: bool) -> None:
        if not self.reads_back or not channels:
            return
        wrong = sorted(
            set(channels) ^ self.closed_channels(channels) if closed else self.closed_channels(channels)
        )
        if wrong:
            raise ReadbackMismatch(
                f"{self._exchange.where}: relays {', '.join(map(str, wrong))} should be "
                f"{'closed' if closed else 'open'} and read back as {'open' if closed else 'closed'}"
            )


def _joined(channels: Sequence[int]) -> str:
    return ",".join(str(channel) for channel in channels)


def open_switchbox(address: Address, *, dialect: str | Path, clock: Clock) -> SwitchboxDriver:
    """Open a switchbox; nothing is sent yet. Parameters and errors as `drivers.supply.open_supply`."""
    found = load_dialect(dialect, SwitchboxDialect)
    return SwitchboxDriver(ScpiExchange(open_link(address, found.link), found.scpi), found, clock)
