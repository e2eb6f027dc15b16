"""A bench small enough to reckon by hand: a resistor at the supply's terminals, the meter across it."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field

import numpy as np
import pytest

from drivers.link import Address, SerialAddress, VisaAddress
from drivers.simulated.multimeter import SimulatedMultimeter
from drivers.simulated.scpi_device import ByteDevice
from drivers.simulated.served import PtyServer, TcpServer
from drivers.simulated.supply import SimulatedSupply
from drivers.simulated.switchbox import SimulatedSwitchbox
from drivers.simulated.terminals import TerminalState
from drivers.simulated.visa import SimulatedVisaLibrary

CHANNELS = tuple(range(101, 127))


@dataclass
class ResistorWorld:
    """Ohm's law, a clock that waits for nobody, and contacts; plays `Terminals` and `Clock`."""

    ohms: float = 100.0
    ac_volts: float = 0.5
    time_s: float = 0.0
    volts: float = 0.0
    limit_amps: float = 0.0
    on: bool = False
    extra_volts: float = 0.0
    relays: dict[int, bool] = field(default_factory=dict)
    apertures_s: list[float] = field(default_factory=list)
    events: list[str] = field(default_factory=list)

    def now_s(self) -> float:
        return self.time_s

    def monotonic_s(self) -> float:
        return self.time_s

    def advance(self, seconds: float) -> None:
        self.time_s += seconds

    def sleep(self, seconds: float) -> None:
        self.events.append(f"wait {seconds:g}")
        self.time_s += seconds

    def drive_supply(self, *, volts: float, limit_amps: float, on: bool) -> None:
        self.volts, self.limit_amps, self.on = volts, limit_amps, on

    def supply_terminals(self) -> TerminalState:
        if not self.on:
            return TerminalState(self.extra_volts, 0.0, False)
        amps = self.volts / self.ohms
        if amps > self.limit_amps:
            return TerminalState(self.limit_amps * self.ohms + self.extra_volts, self.limit_amps, True)
        return TerminalState(self.volts + self.extra_volts, amps, False)

    def set_relay(self, channel: int, closed: bool) -> None:
        self.events.append(f"{'close' if closed else 'open'} {channel}")
        self.relays[channel] = closed

    def meter_dc_volts(self, aperture_s: float) -> float:
        self.time_s += aperture_s
        self.apertures_s.append(aperture_s)
        return self.supply_terminals().volts

    def meter_ac_volts(self, aperture_s: float) -> float:
        self.time_s += aperture_s
        return self.ac_volts

    def meter_ohms(self, test_amps: float, aperture_s: float) -> float:
        self.time_s += aperture_s
        return self.ohms

    def play_record(self, line_volts: object, rate_hz: int) -> np.ndarray:
        raise AssertionError("no instrument of these tests plays audio")

    def hold_tone(self, hz: float, peak_volts: float) -> None:
        raise AssertionError("no instrument of these tests plays audio")


@dataclass
class SmallBench:
    """The three simulated instruments at one resistor."""

    world: ResistorWorld
    supply: SimulatedSupply
    multimeter: SimulatedMultimeter
    switchbox: SimulatedSwitchbox


def make_bench(seed: int = 1) -> SmallBench:
    world = ResistorWorld()
    streams = [np.random.default_rng([seed, number]) for number in range(4)]
    return SmallBench(
        world,
        SimulatedSupply(world, errors=streams[0], noise=streams[1]),
        SimulatedMultimeter(world, errors=streams[2], noise=streams[3]),
        SimulatedSwitchbox(world, CHANNELS),
    )


@pytest.fixture
def bench() -> SmallBench:
    return make_bench()


@pytest.fixture
def make_benches() -> Callable[[int], SmallBench]:
    return make_bench


@pytest.fixture
def world(bench: SmallBench) -> ResistorWorld:
    return bench.world


Ask = Callable[[ByteDevice, str], str]


@pytest.fixture
def ask() -> Ask:
    """Say something to a device without any transport and return what it answers, without the newline."""

    def ask_device(device: ByteDevice, message: str) -> str:
        device.receive(message.encode("latin-1") + b"\n")
        return device.transmit(1 << 20).decode("latin-1").removesuffix("\n")

    return ask_device


@pytest.fixture
def errors_of(ask: Ask) -> Callable[[ByteDevice], list[int]]:
    """Empty a device's error queue and return the numbers."""

    def read(device: ByteDevice) -> list[int]:
        numbers = []
        while (number := int(ask(device, "SYST:ERR?").split(",")[0])) != 0:
            numbers.append(number)
        return numbers

    return read


Connect = Callable[[ByteDevice], Address]
NEEDS_PTY = pytest.mark.skipif(sys.platform == "win32", reason="this system has no pseudo-terminals")


@pytest.fixture
def in_process() -> Connect:
    def connect(device: ByteDevice) -> Address:
        name = "TCPIP0::instrument.bench::5025::SOCKET"
        return VisaAddress(name, SimulatedVisaLibrary.create({name: device}))

    return connect


@pytest.fixture
def over_tcp() -> Iterator[Connect]:
    with ExitStack() as servers:
        yield lambda device: VisaAddress(servers.enter_context(TcpServer(device)).resource, "@py")


@pytest.fixture
def over_pty() -> Iterator[Connect]:
    with ExitStack() as servers:
        yield lambda device: SerialAddress(servers.enter_context(PtyServer(device)).port)


@pytest.fixture(
    params=[
        pytest.param("in_process", id="in-process VISA"),
        pytest.param("over_tcp", id="TCP with pyvisa-py"),
        pytest.param("over_pty", id="pty with pyserial", marks=NEEDS_PTY),
    ]
)
def connect(request: pytest.FixtureRequest) -> Connect:
    """Return a way to reach a device; the same tests run over every transport."""
    found: Connect = request.getfixturevalue(request.param)
    return found
