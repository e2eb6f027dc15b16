"""Whatever an instrument does to its answers, a value that comes back belongs to the question that was asked."""

from __future__ import annotations

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from drivers.errors import DriverError
from drivers.link import LinkSettings, MessageLink, VisaAddress, open_link
from drivers.scpi import ScpiExchange
from drivers.simulated.served import TcpServer
from drivers.simulated.visa import SimulatedVisaLibrary

NAME = "TCPIP0::flaky.bench::5025::SOCKET"
FAULTS = ("fine", "silent", "late", "twice", "garbled", "cut", "nul", "empty", "overload")


class Flaky:
    """Answers ``READ?`` with the number of times it was asked, in the way that `script` says."""

    def __init__(self, script: list[str]) -> None:
        self.script = list(script)
        self.asked = 0
        self.output = b""
        self.held_back = b""

    def receive(self, data: bytes) -> None:
        for line in data.decode().splitlines():
            self.answer(line.strip())

    def answer(self, message: str) -> None:
        self.output += self.held_back
        self.held_back = b""
        if message == "*IDN?":
            self.output += b"maker,flaky,0,1\n"
            return
        self.asked += 1
        text = f"{self.asked}".encode()
        fault = self.script.pop(0) if self.script else "fine"
        if fault == "late":  # comes with the answer to the next question
            self.held_back = text + b"\n"
            return
        self.output += {
            "fine": text + b"\n",
            "silent": b"",
            "twice": (text + b"\n") * 2,
            "garbled": b"\xff" + text + b"\x80\n",
            "cut": text,
            "nul": b"\0" + text + b"\r\n",
            "empty": b"\n",
            "overload": b"9.9E37\n",
        }[fault]

    def transmit(self, count: int) -> bytes:
        data, self.output = self.output[:count], self.output[count:]
        return data

    def end_of_message(self) -> None:
        """Messages end with a newline here."""

    def talk(self) -> None:
        """Nothing is noted."""

    def clear(self) -> None:
        """It does not know device clear."""


def ask_often(link: MessageLink, device: Flaky, times: int) -> int:
    """Ask again and again; return how often a value came back, each checked against its own question."""
    exchange = ScpiExchange(link)
    values = 0
    for _ in range(times):
        try:
            value = exchange.ask_number("READ?", retry=False)
        except DriverError:
            continue
        assert value == device.asked
        values += 1
    return values


@settings(max_examples=300, deadline=None)
@given(st.lists(st.sampled_from(FAULTS), max_size=8), st.booleans())
@example(["late", "late", "fine"], False)
@example(["twice", "late", "cut"], True)
def test_in_process(script, known):
    device = Flaky(script)
    link = open_link(
        VisaAddress(NAME, SimulatedVisaLibrary.create({NAME: device})), LinkSettings(timeout_s=0.01)
    )
    if known:
        link.remember_identity("maker,flaky,0,1")
    # every fault costs at most its own question and, while the link finds its step, the next two
    assert ask_often(link, device, 3 * len(script) + 4) >= 1


@pytest.mark.parametrize(
    "script",
    [
        ["fine", "late", "fine", "twice", "fine"],
        ["cut", "late", "twice", "silent"],
        ["garbled", "nul", "late", "late"],
    ],
)
def test_over_tcp(script):
    device = Flaky(script)
    with TcpServer(device) as server:
        link = open_link(VisaAddress(server.resource, "@py"), LinkSettings(timeout_s=0.2, quiet_s=0.03))
        link.remember_identity("maker,flaky,0,1")
        assert ask_often(link, device, 3 * len(script) + 4) >= len(script)
        link.close()
