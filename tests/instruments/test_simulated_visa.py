"""The in-process library behaves as pyvisa expects of any VISA library."""

from __future__ import annotations

import threading

import pytest
import pyvisa
from pyvisa.constants import ResourceAttribute, StatusCode

from drivers.simulated.served import TcpServer
from drivers.simulated.visa import SimulatedVisaLibrary

NAME = "TCPIP0::supply.bench::5025::SOCKET"


@pytest.fixture
def library(bench):
    return SimulatedVisaLibrary.create({NAME: bench.supply, "GPIB0::7::INSTR": bench.multimeter})


@pytest.fixture
def manager(library):
    manager = pyvisa.ResourceManager(library)
    yield manager
    manager.close()


def test_plain_pyvisa_code_works_on_it(manager):
    instrument = manager.open_resource(NAME, read_termination="\n", write_termination="\n")
    assert instrument.query("*IDN?") == "toeline,simulated supply,S-0001,1.0"
    assert instrument.query_ascii_values("VOLT?;:CURR?", separator=";") == [0.0, 1.0]
    instrument.close()


def test_devices_are_listed_by_pattern(manager):
    assert manager.list_resources("?*") == (NAME, "GPIB0::7::INSTR")
    assert manager.list_resources("GPIB?*") == ("GPIB0::7::INSTR",)


def test_a_serial_poll_sees_the_answer_that_waits(manager):
    instrument = manager.open_resource("GPIB0::7::INSTR")
    instrument.write("*IDN?")
    assert instrument.read_stb() & 16
    instrument.clear()
    assert not instrument.read_stb() & 16


def test_reading_without_a_question_times_out_and_is_noted_by_the_device(manager, bench):
    instrument = manager.open_resource(NAME, read_termination="\n")
    with pytest.raises(pyvisa.VisaIOError) as caught:
        instrument.read()
    assert caught.value.error_code == StatusCode.error_timeout
    assert instrument.query("SYST:ERR?") == '-420,"Query UNTERMINATED"'


def test_a_message_may_end_by_end_instead_of_newline(manager):
    instrument = manager.open_resource("GPIB0::7::INSTR", read_termination="\n")
    instrument.write_raw(b"*IDN?")
    assert instrument.read() == "toeline,simulated multimeter,M-0001,1.0"


def test_a_long_answer_comes_in_chunks(manager):
    instrument = manager.open_resource(NAME, read_termination="\n")
    instrument.write("*IDN?")
    assert instrument.read_bytes(7) == b"toeline"
    assert instrument.read() == ",simulated supply,S-0001,1.0"


def test_attributes_are_kept_and_unknown_ones_refused(manager):
    instrument = manager.open_resource(NAME)
    instrument.timeout = 123
    assert instrument.timeout == 123
    with pytest.raises(pyvisa.VisaIOError, match="VI_ERROR_NSUP_ATTR"):
        instrument.get_visa_attribute(ResourceAttribute.usb_serial_number)


def test_an_unknown_device_is_not_found(manager):
    with pytest.raises(pyvisa.VisaIOError) as caught:
        manager.open_resource("TCPIP0::nobody::5025::SOCKET")
    assert caught.value.error_code == StatusCode.error_resource_not_found


def test_two_benches_in_one_process_do_not_see_each_other(make_benches):
    first, second = (SimulatedVisaLibrary.create({NAME: make_benches(seed).supply}) for seed in (1, 2))
    one, other = (pyvisa.ResourceManager(library).open_resource(NAME) for library in (first, second))
    one.write("VOLT 5")
    assert float(other.query("VOLT?")) == 0.0
    assert float(one.query("VOLT?")) == 5.0


def test_a_closed_session_is_refused(manager):
    instrument = manager.open_resource(NAME)
    instrument.close()
    with pytest.raises(pyvisa.errors.InvalidSession):
        instrument.query("*IDN?")


def test_devices_of_one_world_can_be_served_side_by_side(bench):
    lock = threading.Lock()
    with TcpServer(bench.supply, lock=lock) as supply, TcpServer(bench.multimeter, lock=lock) as meter:
        manager = pyvisa.ResourceManager("@py")
        for server, name in ((supply, "supply"), (meter, "multimeter")):
            instrument = manager.open_resource(server.resource, read_termination="\n", write_termination="\n")
            assert name in instrument.query("*IDN?")
            instrument.close()
