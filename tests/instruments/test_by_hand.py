"""The roles played by a person: what is asked, and that nothing is taken on trust that can be read."""

from __future__ import annotations

import pytest

from drivers.by_hand import HandAccuracy, MultimeterByHand, SupplyByHand, SwitchboxByHand
from drivers.errors import DriverError, ReadbackMismatch
from drivers.roles import Multimeter, Prompt, Supply, Switchbox


class Person:
    """Types the given values in turn; one that is not plausible is typed again as the role demands."""

    def __init__(self, *values: float) -> None:
        self.values = list(values)
        self.asked: list[str] = []

    def ask(self, prompt: Prompt) -> None:
        self.asked.append(prompt.text)

    def ask_value(self, prompt: Prompt, *, unit: str, low: float, high: float) -> float:
        self.asked.append(prompt.text)
        while not low <= (value := self.values.pop(0)) <= high:
            pass
        return value

    def tell(self, text: str) -> None:
        self.asked.append(text)


def test_a_person_can_play_every_role():
    assert isinstance(SupplyByHand(Person()), Supply)
    assert isinstance(MultimeterByHand(Person()), Multimeter)
    assert isinstance(SwitchboxByHand(Person()), Switchbox)


def test_a_supply_is_limited_set_switched_and_read():
    person = Person(0.1, 9.01, 0.09, 0.02)
    supply = SupplyByHand(person)
    supply.set_protection(over_volts=12.0, limit_amps=0.1)
    supply.set_volts(9.0)
    supply.output_on()
    assert supply.output_is_on()
    assert (supply.read_volts().value, supply.read_amps().value) == (9.01, 0.09)
    supply.output_off()
    supply.output_off()
    assert not supply.output_is_on()
    order = [
        next(n for n, text in enumerate(person.asked) if word in text) for word in ("limit", "set the", "ON")
    ]
    assert order == sorted(order)
    assert sum("OFF" in text for text in person.asked) == 1


def test_a_supply_without_limit_is_not_switched_on():
    person = Person()
    with pytest.raises(DriverError, match="no protection"):
        SupplyByHand(person).output_on()
    assert person.asked == []


def test_a_limit_typed_wrongly_is_a_mismatch():
    with pytest.raises(ReadbackMismatch, match=r"0\.5 A"):
        SupplyByHand(Person(0.5)).set_protection(over_volts=12.0, limit_amps=0.1)


def test_an_output_that_still_shows_volts_is_not_off():
    with pytest.raises(ReadbackMismatch, match="may still be ON"):
        SupplyByHand(Person(9.0)).output_off()


def test_an_output_of_which_nothing_is_known_counts_as_on():
    assert SupplyByHand(Person()).output_is_on()


def test_values_beyond_the_supply_are_refused():
    supply = SupplyByHand(Person(0.1), max_volts=15.0)
    supply.set_protection(over_volts=12.0, limit_amps=0.1)
    with pytest.raises(DriverError, match="0 to 12"):
        supply.set_volts(13.0)


def test_a_person_at_the_meter_is_told_what_is_read():
    person = Person(-8.99, -4.9)
    meter = MultimeterByHand(person)
    meter.point_at("the pedal's supply rail")
    meter.read_dc_volts(expect_volts=-9.0)
    meter.point_at("TP3 (q2 collector)")
    meter.read_dc_volts()
    assert [text.split(":")[0] for text in person.asked] == [
        "Multimeter at the pedal's supply rail, DC volts (range for -9 V)",
        "Multimeter at TP3 (q2 collector), DC volts",
    ]


def test_an_implausible_voltage_is_asked_for_again():
    assert MultimeterByHand(Person(5e6, -4.9)).read_dc_volts(expect_volts=-5.0).value == -4.9


def test_a_typed_value_carries_the_uncertainty_of_what_was_read():
    # JCGM 100:2008, 4.3.7, by hand: a = 0.01·5 = 0.05; u² = 0.05²/3 + 0.01²/12
    measured = MultimeterByHand(Person(5.0), dc=HandAccuracy(0.01, 0.0, 0.01)).read_dc_volts()
    assert measured.u == pytest.approx(0.029011, rel=1e-4)


def test_switches_are_named_and_asked_for_only_when_they_are_elsewhere():
    person = Person()
    box = SwitchboxByHand(person, {107: "the footswitch"})
    box.open_all()
    box.set_channels(close=[107], open=[101])
    box.set_channels(close=[107], open=[101])
    assert person.asked == ["Switches: open all of them.", "Switches: close the footswitch."]
    assert box.closed_channels([101, 107]) == {107}
    box.open_all()
    box.open_all()
    assert len(person.asked) == 3
