"""What a lot is planned to be: serials, faults and rooms from the seed."""

from __future__ import annotations

from pathlib import Path

import pytest

from fixture.bench.placing import Placement, place_unit, unit_draws
from fixture.errors import BadInput
from fixture.lots.likely_faults import likely_faults
from fixture.lots.plan import LotWishes, lot_serial, plan_lot
from fixture.modelfile import find_model
from tests.endtoend.peat_faults import PEAT_FAULTS

ROOT = Path(__file__).parents[2]
PEAT = find_model(ROOT, "peat")


def test_a_lot_is_the_same_each_time_and_a_larger_one_begins_with_it() -> None:
    wishes = LotWishes(20, seed=3, fault_ratio=0.5, ambient_celsius=(18.0, 28.0))
    small = plan_lot(PEAT, wishes, ["open R1", "open R2"])
    large = plan_lot(PEAT, LotWishes(40, 3, 0.5, (18.0, 28.0)), ["open R1", "open R2"])
    assert small == plan_lot(PEAT, wishes, ["open R1", "open R2"])
    assert large[:20] == small
    assert all(18.0 <= unit.ambient_celsius <= 28.0 for unit in large)


def test_the_share_of_faults_is_the_share_asked_for() -> None:
    units = plan_lot(PEAT, LotWishes(2000, seed=1, fault_ratio=0.05), ["open R1", "swap R1 R2, open C1"])
    faulty = [unit for unit in units if unit.plant]
    assert 70 <= len(faulty) <= 130  # 100 +- 3 sigma (binomial)
    assert {unit.plant for unit in faulty} == {("open R1",), ("swap R1 R2", "open C1")}


def test_serials_are_the_model_s_own_and_differ_between_seeds() -> None:
    assert lot_serial(PEAT, 7, 12) == "PT-9007-0012"
    first = {unit.serial for unit in plan_lot(PEAT, LotWishes(300, seed=1), [])}
    second = {unit.serial for unit in plan_lot(PEAT, LotWishes(300, seed=2), [])}
    assert len(first) == len(second) == 300 and not first & second
    assert all(PEAT.owns_serial(serial) for serial in first)


@pytest.mark.parametrize(
    ("seed", "number", "said"), [(1000, 1, "0 to 999"), (-1, 1, "0 to 999"), (1, 10_000, "9999")]
)
def test_a_lot_that_has_no_room_in_the_serials_is_refused(seed: int, number: int, said: str) -> None:
    with pytest.raises(BadInput, match=said):
        lot_serial(PEAT, seed, number)


def test_every_likely_fault_of_peat_can_be_planted_and_its_known_ones_are_among_them() -> None:
    faults = likely_faults(PEAT)
    assert len(faults) == len(set(faults)) > 80
    for fault in faults:
        place_unit(Placement(PEAT, "PT-9001-0001", (fault,)))
    # the same fault has several names: a pot by its parameter, ground as node 0
    same = {
        "swap R4 R3": "swap R3 R4",
        "bridge q1b ground": "bridge q1b 0",
        "backwards volume": "backwards vol",
        "value fuzz_ohms x10": "value fuzz x10",
        "value volume_ohms /10": "value vol /10",
        "leaky C2 2k": "leaky C2 4k7",
    }
    for _, words in PEAT_FAULTS:
        assert all(same.get(word, word) in faults for word in words), words


def test_the_truth_tells_every_factor_that_was_drawn() -> None:
    factors = unit_draws(Placement(PEAT, "PT-9001-0001"))
    assert 0.99 <= factors["r1 value"] <= 1.01  # metal film, 1 %
    assert factors["q1 bf"] != factors["q2 bf"]
    assert factors == unit_draws(Placement(PEAT, "PT-9001-0001", ("open R1",)))
