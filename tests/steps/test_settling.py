"""Node voltages and supply current: exponentials, whose end value is known."""

from __future__ import annotations

import math

import pytest

from fixture.bench.facade import FixtureState
from fixture.errors import CannotMeasure


def test_a_node_is_read_when_it_has_settled(run_step, make_bench) -> None:
    bench = make_bench(nodes={"q1": lambda t: -5.0 * (1 - math.exp(-t / 0.3)), "q2": lambda t: -1.0})
    q1, q2 = run_step(bench, "node_voltages", settled_within=1e-3, interval=0.1)
    # Two readings 0.1 s apart differ by d: what is left is d / (e^(0.1/0.3) - 1), that is 2.5 d.
    assert abs(q1.value + 5.0) < 2.6e-3
    assert (q1.name, q1.unit, q1.note) == ("q1", "V", None)
    assert (q2.value, q2.u) == (-1.0, 1e-4)


@pytest.mark.parametrize("tau_s", [0.05, 0.3, 1.0])
def test_what_is_left_of_an_exponential_is_half_the_width_of_a_rectangle(
    run_step, make_bench, tau_s: float
) -> None:
    bench = make_bench(nodes={"q1": lambda t: -5.0 * (1 - math.exp(-t / tau_s))}, u_volts=1e-6)
    (reading,) = run_step(
        bench, "node_voltages", nodes=("q1",), settled_within=1e-3, interval=0.2, timeout=60.0
    )
    left = reading.value + 5.0  # closed form
    assert 0.0 < left <= math.sqrt(3.0) * reading.u * (1 + 1e-6)
    assert reading.u < 1e-2


def test_a_creep_of_minutes_counts_as_far_more_than_its_last_step(run_step, make_bench) -> None:
    bench = make_bench(nodes={"q1": lambda t: -5.0 * (1 - math.exp(-t / 100.0))}, u_volts=1e-6)
    (reading,) = run_step(bench, "node_voltages", nodes=("q1",), interval=0.2, timeout=2.0)
    assert reading.note is not None and reading.u > 4 * 0.01


def test_a_node_that_creeps_is_given_with_its_speed_and_a_larger_uncertainty(run_step, make_bench) -> None:
    bench = make_bench(nodes={"q1": lambda t: -0.05 * t})
    (reading,) = run_step(bench, "node_voltages", nodes=("q1",), interval=0.2, timeout=2.0)
    assert reading.note == "not settled: -50 mV/s"
    assert reading.value == pytest.approx(-0.1, abs=0.011)
    # a ramp has no end in sight: nine steps of 10 mV, as half the width of a rectangle (JCGM 100:2008, 4.3.7: a / sqrt 3)
    assert reading.u == pytest.approx(math.hypot(1e-4, 0.09 / math.sqrt(3)), rel=1e-6)


def test_only_the_nodes_named_are_read_in_their_order(run_step, make_bench) -> None:
    bench = make_bench(nodes={"q1": lambda t: -1.0, "q2": lambda t: -2.0})
    assert [r.name for r in run_step(bench, "node_voltages", nodes=("q2",))] == ["q2"]
    assert [r.name for r in run_step(bench, "node_voltages")] == ["q1", "q2"]
    assert bench.calls[1] == ("state", FixtureState(source="short"))


@pytest.mark.parametrize(("state", "engaged"), [("engaged", True), ("bypassed", False)])
def test_supply_current_settles_and_the_rail_is_read(run_step, make_bench, state: str, engaged: bool) -> None:
    bench = make_bench(nodes={"amps": lambda t: 7e-4 + 2e-3 * math.exp(-t / 0.2)})
    current, rail = run_step(bench, "supply_current", state=state)
    assert current.value == pytest.approx(7e-4, abs=2e-6) and current.unit == "A"
    assert (rail.name, rail.value, rail.unit, rail.u) == ("rail", -8.99, "V", 1e-3)
    assert bench.calls == [
        ("controls", {"fuzz": 1.0}),
        ("state", FixtureState(source="short", engaged=engaged)),
    ]


def test_a_supply_the_wrong_way_round_is_the_bench_s_fault_and_is_seen_first(run_step, make_bench) -> None:
    bench = make_bench(nodes={"amps": lambda t: 1e-3}, rail_volts=8.99)
    with pytest.raises(CannotMeasure, match=r"wrong way round \(9\.0 V at the rail, positive ground\)"):
        run_step(bench, "supply_current")
