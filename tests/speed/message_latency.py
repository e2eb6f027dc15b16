"""Time per question over every transport. Run from the root: python -m tests.speed.message_latency."""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable

from drivers.link import Address, MessageLink, SerialAddress, VisaAddress, open_link
from drivers.simulated.scpi_device import ScpiDevice
from drivers.simulated.served import PtyServer, TcpServer
from drivers.simulated.visa import SimulatedVisaLibrary

_QUESTIONS = 2000
_NAME = "TCPIP0::probe.bench::5025::SOCKET"


def measure(act: Callable[[], object]) -> tuple[float, float]:
    """Return the median and the 99th percentile of the time of one call, in microseconds."""
    times = []
    for _ in range(_QUESTIONS):
        start = time.perf_counter()
        act()
        times.append((time.perf_counter() - start) * 1e6)
    return statistics.median(times), statistics.quantiles(times, n=100)[98]


def write_write_query(link: MessageLink) -> str:
    """Send two commands and a question, which Nagle's algorithm would hold up."""
    link.write("*CLS")
    link.write("*CLS")
    return link.query("*OPC?")


def main() -> None:
    """Print one line per transport."""
    device = ScpiDevice("maker,probe,0,1", (), now_s=lambda: 0.0)
    tcp, pty = TcpServer(device), None if sys.platform == "win32" else PtyServer(device)
    addresses: dict[str, Address] = {
        "in-process VISA": VisaAddress(_NAME, SimulatedVisaLibrary.create({_NAME: device})),
        "TCP, pyvisa-py": VisaAddress(tcp.resource, "@py"),
    }
    if pty is not None:
        addresses["pty, pyserial"] = SerialAddress(pty.port)
    print(
        f"{'transport':16} {'query median':>13} {'99 %':>9} {'write-write-query':>18}   (µs, n = {_QUESTIONS})"
    )
    for name, address in addresses.items():
        link = open_link(address)
        median, slow = measure(lambda link=link: link.query("*OPC?"))
        burst, _ = measure(lambda link=link: write_write_query(link))
        print(f"{name:16} {median:13.0f} {slow:9.0f} {burst:18.0f}")
        link.close()
    tcp.close()
    if pty is not None:
        pty.close()


if __name__ == "__main__":
    main()
