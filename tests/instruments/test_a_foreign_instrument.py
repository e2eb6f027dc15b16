"""Instruments that pyvisa-sim plays from a description, driven by our multimeter driver."""

from __future__ import annotations

from pathlib import Path

import pytest

from drivers.errors import InstrumentError, Overload, ReplyGarbled
from drivers.link import VisaAddress
from drivers.multimeter import open_multimeter
from drivers.scpi import check_identity

DESCRIPTION = """
spec: "1.1"
devices:
  bench meter:
    eom:
      TCPIP SOCKET:
        q: "\\n"
        r: "\\n"
      ASRL INSTR:
        q: "\\n"
        r: "\\n"
    error: "ERR"
    dialogues:
      - q: "*IDN?"
        r: "any maker,bench meter,42,0.9"
      - q: "SYST:ERR?"
        r: '0,"No error"'
      - q: "CONF:VOLT:DC 10"
      - q: "CONF:VOLT:DC 1"
      - q: "CONF:VOLT:DC AUTO"
      - q: "CONF:RES 1000"
      - q: "VOLT:DC:NPLC 1"
      - q: "READ?"
        r: "{reading}"
  refusing meter:
    eom:
      TCPIP SOCKET:
        q: "\\n"
        r: "\\n"
    error: "ERR"
    dialogues:
      - q: "*IDN?"
        r: "any maker,refusing meter,43,0.9"
      - q: "SYST:ERR?"
        r: '-221,"Settings conflict"'
      - q: "CONF:VOLT:DC 10"
      - q: "VOLT:DC:NPLC 1"
resources:
  TCPIP0::meter.bench::5025::SOCKET:
    device: bench meter
  TCPIP0::refusing.bench::5025::SOCKET:
    device: refusing meter
"""


class FrozenClock:
    def monotonic_s(self) -> float:
        return 0.0

    def sleep(self, seconds: float) -> None:
        raise AssertionError("a meter waits inside itself")


@pytest.fixture
def meter(tmp_path: Path):
    opened = []

    def open_with(reading: str = "+4.9012E+00", resource: str = "meter.bench"):
        path = tmp_path / f"bench-{len(opened)}.yaml"
        path.write_text(DESCRIPTION.replace("{reading}", reading), encoding="utf-8")
        address = VisaAddress(f"TCPIP0::{resource}::5025::SOCKET", f"{path}@sim")
        opened.append(open_multimeter(address, dialect="scpi_multimeter", clock=FrozenClock()))
        return opened[-1]

    yield open_with
    for driver in opened:
        driver.close()


def test_it_says_who_it_is_and_is_checked(meter):
    check_identity(meter().identify(), "any maker,bench meter,42,*")


def test_it_reads_volts_with_the_uncertainty_of_its_range(meter):
    measured = meter().read_dc_volts(expect_volts=5.0)
    assert measured.value == 4.9012
    # by hand, range of 10 V: a = 0.00005·4.9012 + 0.0004; u² = a²/3 + (1e-5)²/12 + (2e-5)²
    assert measured.u == pytest.approx(0.37300e-3, rel=1e-3)


def test_it_reads_ohms(meter):
    assert meter("+4.700000E+02").read_ohms(expect_ohms=470.0).value == 470.0


def test_its_overload_is_no_value(meter):
    with pytest.raises(Overload):
        meter("+9.90000000E+37").read_dc_volts()


def test_its_nonsense_is_no_value(meter):
    with pytest.raises(ReplyGarbled):
        meter("SELF TEST").read_dc_volts()


def test_its_refusal_carries_its_own_words(meter):
    with pytest.raises(InstrumentError, match="Settings conflict"):
        meter(resource="refusing.bench").read_dc_volts(expect_volts=5.0)
