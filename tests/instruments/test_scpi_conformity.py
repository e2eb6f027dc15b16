"""The simulated instruments follow IEEE 488.2 and SCPI-1999.

Error numbers and texts: tests/reference/scpi_errors.csv (its source stands in its first line). Rules with a
clause number were checked against public texts that quote them; those marked "from memory" were not.
"""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.simulated.scpi_device import Command, ScpiDevice, number_setting
from drivers.simulated.scpi_status import STANDARD_ERRORS, Status, event_bit
from drivers.simulated.scpi_syntax import Boolean, ChannelList, Choice, Number, Text, Whole, header_pattern

REFERENCE = Path(__file__).parents[1] / "reference" / "scpi_errors.csv"


def reference_errors() -> list[dict[str, str]]:
    with REFERENCE.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


class Probe(ScpiDevice):
    """A device with one command of every kind; `seen` is what reached it."""

    def __init__(self) -> None:
        self.level = 1.0
        self.seen: list[object] = []
        note = self.seen.append
        commands = (
            *number_setting(
                "[SOURce:]VOLTage[:LEVel][:IMMediate][:AMPLitude]",
                "V",
                low=lambda: 0.0,
                high=lambda: 20.0,
                default=lambda: 1.0,
                get=lambda: self.level,
                put=lambda value: setattr(self, "level", value),
            ),
            Command("[SOURce:]VOLTage:PROTection[:LEVel]?", lambda: "12"),
            Command("[SOURce:]CURRent", note, (Number("A", lambda: 0.0, lambda: 5.0, lambda: 1.0),)),
            Command("RESistance", note, (Number("OHM", lambda: 0.0, lambda: 1e9, lambda: 1.0),)),
            Command("FREQuency", note, (Number("HZ", lambda: 0.0, lambda: 1e9, lambda: 1.0),)),
            Command("OUTPut[:STATe]", note, (Boolean(),)),
            Command("TRIGger:SOURce", note, (Choice(("IMMediate", "BUS", "EXTernal")),)),
            Command("ROUTe:CLOSe", note, (ChannelList(tuple(range(101, 121))),)),
            Command("DISPlay:TEXT", note, (Text(),)),
            Command("SAMPle:COUNt", note, (Whole(1, 100),)),
            Command("PAIR", lambda a, b: note((a, b)), (Whole(0, 9), Whole(0, 9, optional=True))),
        )
        super().__init__("maker,probe,0,1", commands, now_s=lambda: 0.0)


@pytest.fixture
def probe(ask) -> Probe:
    device = Probe()
    ask(device, "*CLS")
    return device


# -- errors and status -----------------------------------------------------------------------------


def test_the_text_of_every_error_is_the_standard_one():
    standard = {int(row["code"]): row["text"] for row in reference_errors()}
    assert {code: standard[code] for code in STANDARD_ERRORS} == dict(STANDARD_ERRORS)


def test_every_error_class_sets_its_own_bit_of_the_event_register():
    rows = [row for row in reference_errors() if int(row["code"]) != 0]
    assert len(rows) > 70
    assert [event_bit(int(row["code"])) for row in rows] == [int(row["esr_weight"]) for row in rows]


def test_an_instrument_error_of_its_own_sets_the_device_dependent_bit():
    assert event_bit(101) == 8  # positive numbers: SCPI-1999 volume 2, 21.8


def test_errors_leave_the_queue_first_in_first_out_and_an_empty_queue_says_no_error(probe, ask):
    ask(probe, "NONSENSE")
    ask(probe, "VOLT 99")
    assert ask(probe, "SYST:ERR?") == '-113,"Undefined header"'
    assert ask(probe, "SYSTem:ERRor:NEXT?") == '-222,"Data out of range"'
    assert ask(probe, "SYST:ERR?") == '0,"No error"'


def test_a_full_queue_ends_in_queue_overflow_and_keeps_the_oldest_entries():
    # SOURCE: instrument manuals quoting SCPI-1999 volume 2, 21.8.1: the last entry becomes -350
    status = Status(queue_length=3)
    for code in (-100, -101, -102, -103, -104):
        status.add_error(code)
    assert [code for code, _ in status.errors] == [-100, -101, -350]


def test_clear_status_empties_the_queue_and_the_event_registers_but_keeps_the_enables(probe, ask):
    ask(probe, "*ESE 60;*SRE 36;NONSENSE")
    ask(probe, "*CLS")
    assert ask(probe, "SYST:ERR?;*ESR?;*ESE?;*SRE?") == '0,"No error";0;60;36'


def test_power_on_is_noted_once_in_the_event_register(ask):
    device = Probe()
    assert [ask(device, "*ESR?"), ask(device, "*ESR?")] == ["128", "0"]


@pytest.mark.parametrize(
    ("message", "bit"),
    [("NONSENSE", 32), ("VOLT 99", 16), ("*OPC", 1)],
    ids=["command", "execution", "complete"],
)
def test_the_event_register_tells_what_kind_of_thing_happened_and_reading_clears_it(probe, ask, message, bit):
    ask(probe, message)
    assert [ask(probe, "*ESR?"), ask(probe, "*ESR?")] == [str(bit), "0"]


def test_the_status_byte_sums_up_queue_events_and_request(probe, ask):
    # weights: EAV 4, ESB 32, MSS 64 (SCPI-1999 volume 1, 9.2, and IEEE 488.2, 11.2; from memory)
    assert probe.status_byte() == 0
    ask(probe, "NONSENSE")
    assert probe.status_byte() == 4
    ask(probe, "*ESE 32")
    assert probe.status_byte() == 4 + 32
    ask(probe, "*SRE 32")
    assert probe.status_byte() == 4 + 32 + 64


def test_message_available_shows_while_an_answer_waits(probe):
    probe.receive(b"*IDN?\n")
    assert probe.status_byte() & 16
    probe.transmit(100)
    assert not probe.status_byte() & 16


def test_the_master_summary_cannot_enable_itself(probe, ask):
    ask(probe, "*SRE 255")
    assert ask(probe, "*SRE?") == "191"


@pytest.mark.parametrize(("message", "code"), [("*ESE 256", -222), ("*ESE -1", -222), ("*ESE", -109)])
def test_masks_of_eight_bits_refuse_what_does_not_fit(probe, ask, errors_of, message, code):
    ask(probe, message)
    assert errors_of(probe) == [code]


def test_a_condition_that_comes_and_goes_stays_latched_as_an_event_until_read(probe, ask):
    probe.status.questionable.set_condition(1)
    probe.status.questionable.set_condition(0)
    assert ask(probe, "STAT:QUES:COND?") == "0"
    assert [ask(probe, "STAT:QUES?"), ask(probe, "STAT:QUES:EVEN?")] == ["1", "0"]


def test_an_enabled_questionable_event_reaches_the_status_byte(probe, ask):
    ask(probe, "STAT:QUES:ENAB 1")
    probe.status.questionable.set_condition(1)
    assert probe.status_byte() == 8
    ask(probe, "STAT:PRES")
    assert probe.status_byte() == 0


def test_transition_filters_choose_which_edge_is_an_event(probe, ask):
    ask(probe, "STAT:OPER:PTR 0;NTR 2")
    probe.status.operation.set_condition(2)
    assert ask(probe, "STAT:OPER:EVEN?") == "0"
    probe.status.operation.set_condition(0)
    assert ask(probe, "STAT:OPER:EVEN?") == "2"


def test_bit_15_of_a_status_register_is_never_set(probe, ask):
    ask(probe, "STAT:QUES:ENAB 65535")
    assert ask(probe, "STAT:QUES:ENAB?") == "32767"  # SCPI-1999 volume 1, 9.1; from memory


# -- queries ---------------------------------------------------------------------------------------


def test_asking_again_without_reading_is_query_interrupted_and_the_old_answer_is_gone(probe, ask, errors_of):
    probe.receive(b"*IDN?\n")
    assert ask(probe, "VOLT:PROT?") == "12"
    assert errors_of(probe) == [-410]


def test_reading_without_a_question_is_query_unterminated(probe, errors_of):
    probe.talk()
    assert probe.transmit(100) == b""
    assert errors_of(probe) == [-420]


def test_nothing_may_be_asked_after_the_identity_in_one_message(probe, ask, errors_of):
    # IEEE 488.2, 6.5.7.5: the answer to *IDN? has no set end
    assert ask(probe, "*IDN?;VOLT?") == "maker,probe,0,1"
    assert errors_of(probe) == [-440]


def test_answers_of_one_message_come_joined_by_semicolons(probe, ask):
    assert ask(probe, "*OPC?;*TST?;SYST:VERS?") == "1;0;1999.0"


def test_device_clear_forgets_half_a_message_and_a_waiting_answer(probe, ask):
    probe.receive(b"*IDN?\nVOLT 5")
    probe.clear()
    assert ask(probe, "VOLT:PROT?") == "12"
    assert probe.level == 1.0


# -- headers ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "header",
    [
        "VOLT", "volt", "VOLTage", "VOLTAGE", "SOUR:VOLT", "SOURce:VOLTage", ":VOLT", "VOLT:LEV", "VOLT:IMM",
        "VOLT:LEV:IMM:AMPL", "SOURCE:VOLTAGE:LEVEL:IMMEDIATE:AMPLITUDE", "VOLT1", "SOUR1:VOLT1",
    ],
)  # fmt: skip
def test_long_short_and_optional_forms_mean_the_same(probe, ask, errors_of, header):
    ask(probe, f"{header} 7")
    assert (probe.level, errors_of(probe)) == (7.0, [])


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("VOLTA 7", -113),
        ("VOL 7", -113),
        ("VOLT:SOUR 7", -113),
        ("*FOO", -113),
        ("VOLT2 7", -114),
        ("VOLTAGELEVELS 7", -112),
        ("VOLT::LEV 7", -102),
        ("?", -102),
        ("VOLT,7", -111),
        ("VOLT\x01 7", -101),
        ("VOLT 7\xe9", -101),
    ],
)
def test_headers_that_are_wrong_give_their_standard_error(probe, ask, errors_of, message, code):
    ask(probe, message)
    assert (errors_of(probe), probe.level) == ([code], 1.0)


def test_a_header_goes_on_from_the_path_of_the_one_before_it(probe, ask, errors_of):
    # SCPI-1999 volume 1, 6.2.4
    assert ask(probe, "VOLT:LEV 3;PROT?;:VOLT 4") == "12"
    assert (probe.level, errors_of(probe)) == (4.0, [])


def test_a_common_command_leaves_the_path_alone(probe, ask, errors_of):
    assert ask(probe, "VOLT:LEV 3;*OPC?;PROT?") == "1;12"
    assert errors_of(probe) == []


def test_the_path_does_not_outlive_the_message(probe, ask, errors_of):
    ask(probe, "VOLT:LEV 3")
    ask(probe, "PROT?")
    assert errors_of(probe) == [-113]


def test_a_command_error_ends_the_message_and_an_execution_error_does_not(probe, ask, errors_of):
    ask(probe, "VOLT 99;VOLT 5")
    assert (probe.level, errors_of(probe)) == (5.0, [-222])
    ask(probe, "NONSENSE;:VOLT 6")
    assert (probe.level, errors_of(probe)) == (5.0, [-113])


@given(st.sampled_from(["VOLTage", "MEASure", "CURRent", "STATe", "LEVel"]), st.integers(0, 12))
def test_between_short_and_long_form_there_is_nothing(word, length):
    short = sum(char.isupper() for char in word)
    accepted = header_pattern(word).fullmatch(word.upper()[:length]) is not None
    assert accepted == (length == short or length >= len(word))


# -- parameters ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("message", "value"),
    [
        ("CURR 0.5", 0.5), ("CURR +.5", 0.5), ("CURR 5E-1", 0.5), ("CURR 5e-1A", 0.5),
        ("CURR 500 MA", 0.5),
        ("CURR 500mA", 0.5), ("CURR 7 UA", 7e-6), ("CURR 7NA", 7e-9), ("CURR MIN", 0.0),
        ("CURR maximum", 5.0),
        ("CURR DEF", 1.0), ("CURR #H3", 3.0), ("CURR #Q4", 4.0), ("CURR #B101", 5.0),
        ("RES 47 KOHM", 47e3), ("RES 2 MOHM", 2e6), ("RES 2 MAOHM", 2e6),
        ("FREQ 2 MHZ", 2e6), ("FREQ 2 KHZ", 2e3), ("FREQ 440HZ", 440.0),
        ("OUTP ON", True), ("OUTP off", False), ("OUTP 1", True), ("OUTP 0", False), ("OUTP 0.4", False),
        ("TRIG:SOUR IMM", "IMM"), ("TRIG:SOUR immediate", "IMM"), ("TRIG:SOUR EXTernal", "EXT"),
        ("ROUT:CLOS (@101)", (101,)), ("ROUT:CLOS (@101,103:105)", (101, 103, 104, 105)),
        ("ROUT:CLOS (@105:103)", (105, 104, 103)),
        ("ROUT:CLOS ( @ 101 , 102 )", (101, 102)),
        ("DISP:TEXT \"a;b,c\"", "a;b,c"), ("DISP:TEXT 'it''s'", "it's"),
        ("SAMP:COUN 2.6", 3), ("PAIR 1,2", (1, 2)), ("PAIR 1", (1, None)),
    ],
)  # fmt: skip
def test_parameters_are_read_as_the_standards_write_them(probe, ask, errors_of, message, value):
    # suffixes: IEEE 488.2 table 7-2 (MOHM and MHZ are mega); from memory
    ask(probe, message)
    assert errors_of(probe) == []
    assert probe.seen == [pytest.approx(value, rel=1e-12) if isinstance(value, float) else value]


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("CURR", -109), ("CURR 1,2", -108), ("CURR 1,", -103), ("CURR 1.2.3", -121), ("CURR --1", -121),
        ("CURR 1E99999", -123), ("CURR 1 V", -131), ("CURR 1 XA", -131), ("SAMP:COUN 1 S", -138),
        ("CURR FOO", -141), ("CURR 'one'", -158), ("CURR (@101)", -178),
        ("CURR #15hello", -168), ("CURR 6", -222),
        ("OUTP MAYBE", -141), ("TRIG:SOUR LATER", -141), ("TRIG:SOUR 5", -128), ("TRIG:SOUR 'BUS'", -158),
        ("ROUT:CLOS (@101", -171), ("ROUT:CLOS (@)", -171), ("ROUT:CLOS (@101;102)", -171),
        ("ROUT:CLOS (@200)", -222), ("ROUT:CLOS 101", -104), ("DISP:TEXT 5", -104), ("DISP:TEXT 'open", -151),
        ("CURR #H1G", -121), ("SAMP:COUN 101", -222),
    ],
)  # fmt: skip
def test_parameters_that_are_wrong_give_their_standard_error_and_do_nothing(
    probe, ask, errors_of, message, code
):
    ask(probe, message)
    assert (errors_of(probe), probe.seen) == ([code], [])


@pytest.mark.parametrize(("question", "value"), [("MIN", 0.0), ("MAX", 20.0), ("DEF", 1.0), ("", 3.5)])
def test_a_setting_tells_its_value_and_its_bounds(probe, ask, question, value):
    ask(probe, "VOLT 3.5")
    assert float(ask(probe, f"VOLT? {question}")) == value


@given(st.floats(0.0, 20.0))
def test_a_number_that_was_set_reads_back_to_nine_digits(value):
    probe = Probe()
    probe.receive(f"VOLT {value!r}\nVOLT?\n".encode())
    assert float(probe.transmit(100)) == pytest.approx(value, rel=1e-8, abs=1e-300)


@given(st.lists(st.binary(max_size=40), max_size=8))
def test_no_bytes_whatever_break_an_instrument(chunks):
    probe = Probe()
    for chunk in chunks:
        probe.receive(chunk)
        probe.transmit(1 << 20)
    probe.clear()
    probe.receive(b"*IDN?\n")
    assert probe.transmit(100) == b"maker,probe,0,1\n"


def test_a_message_without_end_is_an_input_buffer_overrun(probe, errors_of):
    probe.receive(b"A" * 70_000)
    assert errors_of(probe) == [-363]
