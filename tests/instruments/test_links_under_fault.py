"""What goes wrong on real wires, each mapped to its own error; nothing wrong is ever taken for a value."""

from __future__ import annotations

import contextlib
import dataclasses
import inspect
import socket
import statistics
import threading
import time
from collections.abc import Callable, Iterator

import pytest
import pyvisa.errors
import serial
from pyvisa import constants

from drivers import errors as driver_errors
from drivers.errors import (
    BackendUnavailable,
    DriverError,
    InstrumentError,
    LinkDesync,
    LinkDown,
    LinkTimeout,
    Overload,
    ReplyGarbled,
    WrongInstrument,
)
from drivers.foreign import map_foreign_error, mapped_errors
from drivers.link import LinkSettings, LinkState, MessageLink, open_link, open_serial_link, open_visa_link
from drivers.scpi import ScpiExchange

QUICK = LinkSettings(timeout_s=0.3, quiet_s=0.03)
IDENTITY = b"maker,scripted,0,1\n"


class ScriptedServer:
    """A TCP instrument that answers as `answer` says: bytes, None for silence, EOFError to hang up."""

    def __init__(self, answer: Callable[[str], bytes | None]) -> None:
        self.answer = answer
        self.heard: list[str] = []
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.port = self._listener.getsockname()[1]
        self._clients: list[socket.socket] = []
        self._threads = [threading.Thread(target=self._accept, daemon=True)]
        self._threads[0].start()

    @property
    def resource(self) -> str:
        return f"TCPIP0::127.0.0.1::{self.port}::SOCKET"

    def _accept(self) -> None:
        while True:
            try:
                client, _ = self._listener.accept()
            except OSError:
                return
            self._clients.append(client)
            self._threads.append(threading.Thread(target=self._talk, args=(client,), daemon=True))
            self._threads[-1].start()

    def _talk(self, client: socket.socket) -> None:
        with client, client.makefile("rb") as lines, contextlib.suppress(EOFError, OSError):
            for line in lines:
                message = line.decode().strip()
                self.heard.append(message)
                answer = IDENTITY if message == "*IDN?" else self.answer(message)
                if answer:
                    client.sendall(answer)

    def close(self) -> None:
        for one in (self._listener, *self._clients):
            with contextlib.suppress(OSError):
                one.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        for thread in self._threads:
            thread.join(timeout=2.0)


@pytest.fixture
def serve() -> Iterator[Callable[[Callable[[str], bytes | None]], ScriptedServer]]:
    servers: list[ScriptedServer] = []

    def start(answer: Callable[[str], bytes | None]) -> ScriptedServer:
        servers.append(ScriptedServer(answer))
        return servers[-1]

    yield start
    for server in servers:
        server.close()


@pytest.fixture
def link_to(serve) -> Iterator[Callable[[Callable[[str], bytes | None]], MessageLink]]:
    links: list[MessageLink] = []

    def start(answer: Callable[[str], bytes | None]) -> MessageLink:
        links.append(open_visa_link(serve(answer).resource, library="@py", settings=QUICK))
        return links[-1]

    yield start
    for link in links:
        link.close()


def hang_up(message: str) -> bytes:
    raise EOFError


# -- answers -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("answer", "error"),
    [
        (b"garbage\n", ReplyGarbled),
        (b"\xff\xfe\x80\n", ReplyGarbled),
        (b"1.5 V\n", ReplyGarbled),
        (b"1,5\n", ReplyGarbled),
        (b"NAN\n", ReplyGarbled),
        (b"nan\n", ReplyGarbled),
        (b"inf\n", ReplyGarbled),
        (b"\n", ReplyGarbled),
        (b"0x10\n", ReplyGarbled),
        (b"1_000\n", ReplyGarbled),
        (b"9.91E+37\n", ReplyGarbled),
        (b"9.9E+37\n", Overload),
        (b"-9.90000000E+37\n", Overload),
        (None, LinkTimeout),
    ],
)
def test_an_answer_that_is_no_number_is_an_error_and_never_a_value(link_to, answer, error):
    exchange = ScpiExchange(link_to(lambda message: answer if message == "READ?" else b'0,"No error"\n'))
    with pytest.raises(error):
        exchange.ask_number("READ?", retry=False)


def test_nuls_and_carriage_returns_around_a_number_do_no_harm(link_to):
    assert ScpiExchange(link_to(lambda message: b"\0+1.5E+00\0\r\n")).ask_number("READ?") == 1.5


def test_an_instrument_that_hangs_up_is_down_not_slow(link_to):
    link = link_to(hang_up)
    with pytest.raises(LinkDown):
        link.query("READ?")
    assert link.state is LinkState.DOWN


def test_a_late_answer_is_never_given_to_the_next_question(link_to):
    def late(message: str) -> bytes:
        if message == "SLOW?":
            time.sleep(0.45)
        return message.encode() + b"\n"

    link = link_to(late)
    link.remember_identity(IDENTITY.decode().strip())
    with pytest.raises(LinkTimeout):
        link.query("SLOW?")
    assert link.state is LinkState.DIRTY
    assert link.query("QUICK?") == "QUICK?"
    assert (link.state, link.recoveries) == (LinkState.CLEAN, 1)


def test_a_late_answer_is_found_out_even_when_nobody_has_asked_for_the_identity_before(link_to):
    link = link_to(lambda message: time.sleep(0.45) or b"late\n" if message == "SLOW?" else b"in time\n")
    with pytest.raises(LinkTimeout):
        link.query("SLOW?")
    assert link.query("QUICK?") == "in time"


def test_without_a_question_that_confirms_a_late_answer_is_at_least_read_away(serve):
    server = serve(lambda message: time.sleep(0.45) or b"late\n" if message == "SLOW?" else b"in time\n")
    settings = dataclasses.replace(QUICK, confirm="")
    link = open_visa_link(server.resource, library="@py", settings=settings)
    with pytest.raises(LinkTimeout):
        link.query("SLOW?")
    time.sleep(0.4)
    assert link.query("QUICK?") == "in time"
    link.close()


def test_an_answer_that_nobody_asked_for_is_a_desync_and_the_link_recovers(link_to):
    link = link_to(lambda message: b"first\nsecond\n" if message == "TWO?" else b"third\n")
    assert link.query("TWO?") == "first"
    with pytest.raises(LinkDesync, match="THREE"):
        link.query("THREE?")
    assert link.query("THREE?") == "third"


def test_a_question_that_may_be_repeated_survives_one_stale_answer(link_to):
    link = link_to(lambda message: b"first\nsecond\n" if message == "TWO?" else b"third\n")
    link.query("TWO?")
    assert link.query("THREE?", retry=True) == "third"


def test_commands_are_never_repeated(serve):
    server = serve(lambda message: None)
    link = open_visa_link(server.resource, library="@py", settings=QUICK)
    link.write("OUTP ON")
    with pytest.raises(LinkTimeout):
        link.query("OUTP?", retry=True)
    assert server.heard.count("OUTP ON") == 1
    assert server.heard.count("OUTP?") == 2
    link.close()


def test_a_lost_connection_is_opened_again_and_the_instrument_known_again(serve):
    server = serve(lambda message: hang_up(message) if message == "DIE" else b"alive\n")
    link = open_visa_link(server.resource, library="@py", settings=QUICK)
    link.remember_identity(IDENTITY.decode().strip())
    link.write("DIE")
    with pytest.raises(LinkDown):
        link.query("READ?")
    assert link.query("READ?") == "alive"
    link.close()


def test_another_instrument_after_reopening_is_refused(serve):
    server = serve(lambda message: hang_up(message) if message == "DIE" else b"alive\n")
    link = open_visa_link(server.resource, library="@py", settings=QUICK)
    link.remember_identity("maker,scripted,ANOTHER,1")
    link.write("DIE")
    with pytest.raises(LinkDown):
        link.query("READ?")
    with pytest.raises(WrongInstrument, match="ANOTHER"):
        link.query("READ?")
    link.close()


def test_when_the_server_is_gone_for_good_every_use_says_so(serve):
    server = serve(hang_up)
    link = open_visa_link(server.resource, library="@py", settings=QUICK)
    server.close()
    for _ in range(2):
        with pytest.raises(LinkDown):
            link.query("READ?")
    link.close()


def test_silence_is_explained_by_the_error_queue_where_it_can_be(bench, in_process):
    exchange = ScpiExchange(open_link(in_process(bench.supply), QUICK))
    with pytest.raises(InstrumentError, match="-113"):
        exchange.ask("NONSENSE?")


def test_an_error_queue_that_never_empties_is_read_only_so_far(link_to):
    exchange = ScpiExchange(link_to(lambda message: b'-222,"Data out of range"\n'))
    assert len(exchange.read_errors()) == 32


def test_a_closed_link_stays_closed(link_to):
    link = link_to(lambda message: b"1\n")
    link.close()
    with pytest.raises(LinkDown, match="closed"):
        link.query("READ?")


def test_a_break_in_the_middle_of_a_question_leaves_the_link_dirty(bench, in_process):
    class Interrupting:
        def __getattr__(self, name):
            return getattr(bench.supply, name)

        def receive(self, data):
            if data.startswith(b"BREAK"):
                raise KeyboardInterrupt
            bench.supply.receive(data)

    link = open_link(in_process(Interrupting()), QUICK)
    with pytest.raises(KeyboardInterrupt):
        link.query("BREAK?")
    assert link.state is LinkState.DIRTY
    assert link.query("*OPC?") == "1"


def test_threads_that_share_a_link_get_their_own_answers(link_to):
    link = link_to(lambda message: message.encode() + b"\n")
    wrong: list[str] = []

    def ask_many(name: str) -> None:
        wrong.extend(text for text in (f"{name}{n}?" for n in range(50)) if link.query(text) != text)

    threads = [threading.Thread(target=ask_many, args=(name,)) for name in "ABCD"]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []


# -- opening -----------------------------------------------------------------------------------------


def test_a_port_where_nobody_listens_is_down_at_once():
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with pytest.raises(LinkDown, match=str(port)):
        open_visa_link(f"TCPIP0::127.0.0.1::{port}::SOCKET", library="@py", settings=QUICK)


@pytest.mark.parametrize("library", ["@nonsense", "/no/such/libvisa.so"])
def test_a_visa_library_that_is_not_there_is_named(library):
    with pytest.raises(BackendUnavailable, match=library.replace(".", r"\.")):
        open_visa_link("TCPIP0::127.0.0.1::5025::SOCKET", library=library)


def test_a_resource_name_that_means_nothing_is_named(in_process, bench):
    with pytest.raises(BackendUnavailable, match="NONSENSE"):
        open_visa_link("NONSENSE", library=in_process(bench.supply).library)


def test_a_device_that_the_library_does_not_have_is_down(in_process, bench):
    with pytest.raises(LinkDown, match="other"):
        open_visa_link("TCPIP0::other::5025::SOCKET", library=in_process(bench.supply).library)


def test_a_serial_port_that_is_not_there_is_named():
    with pytest.raises(BackendUnavailable, match="no-such-port"):
        open_serial_link("no-such-port")


def test_a_short_answer_on_a_serial_line_is_a_timeout_and_shows_what_came(over_pty):
    class Short:
        def receive(self, data: bytes) -> None:
            self.pending = b"1.5"  # and never the end of the line

        def transmit(self, count: int) -> bytes:
            data, self.pending = self.pending, b""
            return data

    link = open_serial_link(over_pty(Short()).port, settings=QUICK)
    with pytest.raises(LinkTimeout, match=r"b'1\.5'"):
        link.query("READ?")
    link.close()


def test_small_messages_do_not_wait_for_each_other(serve):
    # 44 ms per write-write-query were measured with Nagle's algorithm on; without it well under a millisecond
    server = serve(lambda message: b"1\n" if message.endswith("?") else None)
    link = open_visa_link(server.resource, library="@py")
    took_s = []
    for _ in range(21):
        start_s = time.perf_counter()
        link.write("A 1")
        link.write("B 1")
        link.query("READ?")
        took_s.append(time.perf_counter() - start_s)
    assert statistics.median(took_s) < 0.02
    link.close()


# -- foreign errors ----------------------------------------------------------------------------------


ARGUMENTS = {
    "UnknownHandler": ("event", "handler", "user"),
    "VisaIOError": (constants.StatusCode.error_timeout,),
    "VisaIOWarning": (constants.StatusCode.success_max_count_read,),
    "InvalidSession": (),
    "PortNotOpenError": (),
    "InvalidResourceName": ("name is no good",),
}
"""What the constructors of foreign errors want; the others take a text."""


def foreign_errors() -> list[BaseException]:
    """Return one of every error class of pyvisa and pyserial, and VISA errors of every status code."""
    kinds = {
        kind
        for module in (pyvisa.errors, pyvisa.rname, serial, serial.serialutil)
        for _, kind in inspect.getmembers(module, inspect.isclass)
        if issubclass(kind, Exception) and kind.__module__.startswith(("pyvisa", "serial"))
    }
    found: list[BaseException] = [kind(*ARGUMENTS.get(kind.__name__, ("text",))) for kind in kinds]
    found.extend(pyvisa.errors.VisaIOError(code) for code in constants.StatusCode if code < 0)
    return [*found, OSError(5, "I/O"), TimeoutError(), RuntimeError("bare"), Exception("could not connect")]


def test_every_error_of_pyvisa_and_pyserial_is_mapped_to_one_of_ours():
    seen = foreign_errors()
    assert len(seen) > 60
    leaves = {
        kind for _, kind in inspect.getmembers(driver_errors, inspect.isclass) if not kind.__subclasses__()
    }
    for error in seen:
        mapped = map_foreign_error(error, "supply")
        assert type(mapped) in leaves, (error, mapped)
        assert "supply" in str(mapped) and str(error) in str(mapped)


@pytest.mark.parametrize(
    ("error", "kind"),
    [
        (pyvisa.errors.VisaIOError(constants.StatusCode.error_timeout), LinkTimeout),
        (pyvisa.errors.VisaIOError(constants.StatusCode.error_connection_lost), LinkDown),
        (pyvisa.errors.VisaIOError(constants.StatusCode.error_serial_framing), ReplyGarbled),
        (pyvisa.errors.VisaIOError(constants.StatusCode.error_library_not_found), BackendUnavailable),
        (pyvisa.errors.VisaIOError(constants.StatusCode.error_resource_locked), BackendUnavailable),
        (pyvisa.errors.InvalidSession(), LinkDown),
        (pyvisa.errors.InvalidBinaryFormat("x"), ReplyGarbled),
        (serial.SerialException("device disconnected"), LinkDown),
        (serial.SerialTimeoutException("write"), LinkTimeout),
        (serial.PortNotOpenError(), LinkDown),
        (UnicodeDecodeError("ascii", b"\xff", 0, 1, "range"), ReplyGarbled),
        (ConnectionResetError(), LinkDown),
    ],
)
def test_foreign_errors_become_what_they_mean(error, kind):
    assert type(map_foreign_error(error, "here")) is kind


def test_a_mapped_error_keeps_its_cause_and_our_own_pass_unchanged():
    cause = serial.SerialException("gone")
    with pytest.raises(LinkDown) as caught, mapped_errors("here"):
        raise cause
    assert caught.value.__cause__ is cause
    own = Overload("too much")
    with pytest.raises(DriverError) as again, mapped_errors("here"):
        raise own
    assert again.value is own
