"""Serials as scanned."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.domain.serial import read_serial
from fixture.errors import BadInput


@pytest.mark.parametrize(
    "scanned",
    [
        "PT-2612-0001",
        "  pt-2612-0001\r\n",
        "PT\u20132612\u20130001",
        "pt\u22122612\u20110001",
        "\x02PT-2612-0001\x03",
        "\ufeffPT-2612-0001",
        "\uff30\uff34-2612-0001",
    ],
)
def test_a_scanned_serial_is_normalised_and_the_original_is_kept(scanned: str) -> None:
    serial = read_serial(scanned)
    assert serial.text == "PT-2612-0001"
    assert serial.scanned == scanned


@pytest.mark.parametrize(
    "scanned", ["", "  ", "\r\n", "---", "\x00", "A" * 65, "PT-2612\nPT-2613;", "=CMD()", 'a"b']
)
def test_what_is_no_serial_is_refused_in_one_line(scanned: str) -> None:
    with pytest.raises(BadInput) as caught:
        read_serial(scanned)
    assert "\n" not in str(caught.value)


@given(st.text(max_size=80))
def test_normalising_twice_changes_nothing(scanned: str) -> None:
    try:
        once = read_serial(scanned)
    except BadInput:
        return
    assert read_serial(once.text).text == once.text
    assert once.scanned == scanned
