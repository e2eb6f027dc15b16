"""Strict numbers, blocks, identities and states of IEEE 488.2 / SCPI-1999."""

from __future__ import annotations

import struct

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pyvisa.util import to_ieee_block

from drivers.errors import Overload, ReplyGarbled, WrongInstrument
from drivers.link import LinkSettings, open_link
from drivers.roles import Identity
from drivers.scpi import ScpiExchange, check_identity, parse_block, parse_identity, parse_number


class Says:
    """A device that always answers the same bytes."""

    def __init__(self, answer: bytes) -> None:
        self.answer = answer
        self.pending = b""

    def receive(self, data: bytes) -> None:
        self.pending = self.answer

    def transmit(self, count: int) -> bytes:
        data, self.pending = self.pending[:count], self.pending[count:]
        return data

    def end_of_message(self) -> None:
        """Nothing is kept back."""

    def talk(self) -> None:
        """There is no error queue."""

    def clear(self) -> None:
        self.pending = b""


@pytest.mark.parametrize(
    ("text", "value"),
    [("1", 1.0), ("-4.9", -4.9), ("+1.5E-03", 0.0015), (".5", 0.5), ("5.", 5.0), ("1e3", 1000.0)],
)
def test_numbers_of_every_decimal_form_are_read(text, value):
    assert parse_number(text, "meter") == value


@given(st.floats(allow_nan=False, allow_infinity=False).filter(lambda value: abs(value) < 9e37))
def test_a_number_written_is_the_number_read(value):
    assert parse_number(repr(value), "meter") == value


@pytest.mark.parametrize(
    "text", ["", " ", "x", "1 V", "1,2", "NaN", "inf", "-inf", "1_0", "0x1", "--1", "1e", "９"]
)
def test_nothing_else_is_a_number(text):
    with pytest.raises(ReplyGarbled, match="meter"):
        parse_number(text, "meter")


# SOURCE: SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5 as quoted by public instrument manuals: ±9.9E37, 9.91E37
@pytest.mark.parametrize("text", ["9.9E37", "+9.9E+37", "-9.9E37", "9.90000000E+37"])
def test_the_infinity_of_scpi_is_an_overload(text):
    with pytest.raises(Overload, match="overload"):
        parse_number(text, "meter")


@pytest.mark.parametrize("text", ["9.91E37", "+9.910000E+37", "1E99"])
def test_the_not_a_number_of_scpi_is_no_answer(text):
    with pytest.raises(ReplyGarbled, match="not a number"):
        parse_number(text, "meter")


# SOURCE: IEEE 488.2, 8.7.9: #<count of digits><length><bytes>; 8.7.10: #0<bytes>newline
@pytest.mark.parametrize(
    ("data", "content"),
    [
        (b"#15hello", b"hello"),
        (b"#15hello\n", b"hello"),
        (b"#3005hello", b"hello"),
        (b"#800001024" + bytes(1024), bytes(1024)),
        (b"#0any length\n", b"any length"),
        (b"#10", b""),
    ],
)
def test_blocks_give_their_content(data, content):
    assert parse_block(data, "meter") == content


@pytest.mark.parametrize("data", [b"", b"hello", b"#", b"#x5hello", b"#2x5hello", b"#16hello", b"5hello"])
def test_what_is_no_whole_block_is_refused(data):
    with pytest.raises(ReplyGarbled, match="meter"):
        parse_block(data, "meter")


def test_a_block_of_floats_agrees_with_an_independent_writer():
    # SOURCE: IEEE 488.2, 8.7.9: 1, 2.5, -3 as little-endian floats: #212 and twelve bytes; writer: pyvisa
    block = to_ieee_block([1.0, 2.5, -3.0], "f", False)
    assert bytes(block) == b"#212" + bytes.fromhex("0000803f 00002040 000040c0")
    assert struct.unpack("<3f", parse_block(bytes(block), "meter")) == (1.0, 2.5, -3.0)


@pytest.mark.parametrize("content", [b"one\ntwo\nthree\n", b"\n" * 40, bytes(range(256)) * 20])
def test_a_block_may_hold_any_byte_also_over_tcp(over_tcp, in_process, content):
    for connect in (in_process, over_tcp):
        answer = b"#4" + f"{len(content):04d}".encode() + content + b"\n"
        exchange = ScpiExchange(open_link(connect(Says(answer)), LinkSettings(timeout_s=0.5)))
        assert exchange.ask_block("TRAC?") == content
        assert exchange.ask_block("TRAC?") == content
        exchange.close()


@pytest.mark.parametrize(
    ("answer", "state"),
    [(b"1", True), (b"0", False), (b"ON", True), (b"off", False), (b"+1", True), (b"1.0", True)],
)
def test_states_are_read_in_both_spellings(in_process, answer, state):
    assert ScpiExchange(open_link(in_process(Says(answer + b"\n")))).ask_flag("OUTP?") is state


@pytest.mark.parametrize("answer", [b"2", b"MAYBE", b"0.5", b"", b"1,0"])
def test_a_state_that_is_neither_is_garbled(in_process, answer):
    with pytest.raises(ReplyGarbled):
        ScpiExchange(open_link(in_process(Says(answer + b"\n")))).ask_flag("OUTP?")


def test_an_identity_has_four_fields():
    assert parse_identity("Maker, Model 5,0,1.0,b", "x") == Identity("Maker", "Model 5", "0", "1.0,b")
    with pytest.raises(ReplyGarbled, match="four fields"):
        parse_identity("Maker,Model", "x")


FOUND = Identity("toeline", "simulated supply", "S-0001", "1.0")


@pytest.mark.parametrize(
    "expected",
    [
        "toeline,simulated supply,S-0001,1.0",
        "toeline,simulated supply,*,*",
        "toeline,simulated supply",
        "",
        "*",
    ],
)
def test_the_expected_identity_may_leave_fields_open(expected):
    check_identity(FOUND, expected)


def test_a_wrong_instrument_is_shown_beside_the_right_one():
    with pytest.raises(WrongInstrument) as caught:
        check_identity(FOUND, "toeline,simulated supply,S-0002,1.0", where="supply")
    lines = str(caught.value).splitlines()
    assert "serial differ" in lines[0] and "supply" in lines[0]
    assert lines[1].endswith("toeline,simulated supply,S-0001,1.0")
    assert lines[2].endswith("toeline,simulated supply,S-0002,1.0")
    assert WrongInstrument.mend == "operator"
