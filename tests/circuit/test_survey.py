"""The first look at a netlist: operating point, response, level and distortion of sines."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.special import iv

from drivers.circuit.errors import BadSurvey, UnknownName
from drivers.circuit.netlist import parse_netlist, read_netlist
from drivers.circuit.survey import Sine, survey
from drivers.circuit.temperature import thermal_volts

DECKS = Path(__file__).parent / "decks"
PEAT = Path(__file__).parents[2] / "limits" / "peat" / "circuit.cir"

DIVIDER = "a divider\nVin in 0 DC 3 AC 2\nR1 in out 1k\nR2 out 0 2k\n.end\n"


def test_a_divider_has_the_voltages_currents_and_levels_of_ohms_law() -> None:
    found = survey(parse_netlist(DIVIDER), "out", hz=[20.0, 1000.0], sines=[Sine(1000.0, 0.3)])
    assert found.title == "a divider"
    assert found.node_volts == pytest.approx({"in": 3.0, "out": 2.0})
    # the current flows from the first node through the source to the second: negative when it delivers
    assert found.source_amps == pytest.approx({"Vin": -1e-3})
    assert [(p.hz, p.db) for p in found.response] == [
        (20.0, pytest.approx(-3.521825)),
        (1000.0, pytest.approx(-3.521825)),
    ]
    (sine,) = found.sines
    assert sine.rms_volts == pytest.approx(0.2 / math.sqrt(2.0), rel=5e-5)
    assert sine.thd_ratio < 1e-5
    assert sine.settled


@pytest.mark.parametrize("peak_volts", [1e-3, 5e-3, 10e-3])
def test_an_exponential_device_distorts_as_its_bessel_expansion_says(peak_volts: float) -> None:
    # SOURCE: exp((V/VT) sin) has harmonics I_n(V/VT): THD = sqrt(sum I_n^2, n = 2..10) / I_1; at 25 °C and 1
    # mV the second harmonic alone is 0.00972981, at 10 mV 0.09669585
    x = peak_volts / thermal_volts(25.0)
    orders = np.arange(2, 11)
    closed = float(np.sqrt(np.sum(iv(orders, x) ** 2)) / iv(1, x))
    netlist = parse_netlist(
        "t\nVcc v 0 5\nVb b 0 DC 0.6 AC 1\nR1 v c 1\nQ1 c b 0 N\n.model N NPN(IS=1e-14 BF=1e5)\n"
    )
    (sine,) = survey(netlist, "c", sines=[Sine(1000.0, peak_volts)], celsius=25.0).sines
    assert sine.thd_ratio == pytest.approx(closed, rel=2e-4)
    mean_amps = 1e-14 * math.exp(0.6 / thermal_volts(25.0))
    saturation_ratio = math.exp(1.11 * (298.15 / 300.15 - 1.0) / thermal_volts(25.0)) * (298.15 / 300.15) ** 3
    harmonics = 2.0 * iv(np.arange(1, 11), x) * mean_amps * saturation_ratio
    assert sine.rms_volts == pytest.approx(float(np.sqrt(np.sum(harmonics**2) / 2.0)), rel=2e-4)


def test_the_level_is_that_of_the_small_signal_response_when_the_sine_is_small() -> None:
    found = survey(read_netlist(PEAT), "jack_out", hz=[997.0], sines=[Sine(997.0, 1e-6)], celsius=25.0)
    level_db = 20.0 * math.log10(found.sines[0].rms_volts * math.sqrt(2.0) / 1e-6)
    # bar: simulated against analytic gain within 0.1 dB; two orders closer here
    assert level_db == pytest.approx(found.response[0].db, abs=2e-3)


def test_a_named_source_drives_and_a_probe_can_be_a_pair_of_nodes() -> None:
    netlist = parse_netlist("t\nVa a 0 5\nVb b 0 1\nR1 a x 1k\nR2 b x 1k\n")
    found = survey(netlist, "b,x", hz=[100.0], source="vb")
    assert found.source == "Vb"
    assert found.response[0].db == pytest.approx(20.0 * math.log10(0.5))


def test_parameters_and_temperature_can_be_set() -> None:
    cold = survey(read_netlist(PEAT), "q2c", celsius=10.0, params={"fuzz": 0.2})
    warm = survey(read_netlist(PEAT), "q2c", celsius=30.0, params={"fuzz": 0.2})
    assert cold.celsius == 10.0
    # germanium leakage grows with temperature and turns the second stage off
    assert warm.node_volts["q2c"] < cold.node_volts["q2c"] - 0.3
    assert cold.source is None and cold.response == () and cold.sines == ()
    assert all("#" not in node for node in cold.node_volts)


def test_what_is_passed_over_in_the_file_is_in_the_notes() -> None:
    found = survey(parse_netlist(DIVIDER.replace(".end", ".ac dec 5 20 20k\n.end"), "f.cir"), "out")
    assert found.notes == ("f.cir:5: '.ac' passed over: it does not change the circuit",)


def test_nothing_coming_through_is_minus_infinity() -> None:
    netlist = parse_netlist("t\nV1 a 0 AC 1\nR1 a 0 1\nR2 b 0 1\nI1 0 b 1\n")
    assert survey(netlist, "b", hz=[100.0]).response[0].db == -math.inf


@pytest.mark.parametrize(
    ("options", "error", "said"),
    [
        ({"probe": "outt"}, UnknownName, "no node 'outt' .nearest: out"),
        ({"probe": "out", "hz": [1.0], "source": "Vim"}, UnknownName, "no source 'Vim' .nearest: Vin"),
        ({"probe": "out", "hz": [0.0]}, BadSurvey, "a frequency of 0 Hz"),
        ({"probe": "out", "sines": [Sine(1000.0, -1.0)]}, BadSurvey, "a sine of -1 V"),
        ({"probe": "a,b,c"}, BadSurvey, "one node, or two"),
    ],
)
def test_a_question_that_makes_no_sense_is_one_clear_line(
    options: dict[str, Any], error: type[Exception], said: str
) -> None:
    with pytest.raises(error, match=said):
        survey(
            parse_netlist(DIVIDER.replace("R2 out 0", "R2 out b 1\nR3 b a 1\nR4 a c 1\nR5 c 0")), **options
        )


def test_without_an_ac_amplitude_the_driving_source_must_be_named() -> None:
    quiet = parse_netlist(DIVIDER.replace(" AC 2", ""))
    with pytest.raises(
        BadSurvey, match=r"no source has an AC amplitude; say which one drives .accepted: Vin"
    ):
        survey(quiet, "out", hz=[100.0])
    two = parse_netlist(DIVIDER.replace(".end", "V2 x 0 AC 1\nR3 x out 1k\n.end"))
    with pytest.raises(BadSurvey, match=r"several sources have an AC amplitude.*Vin, V2"):
        survey(two, "out", hz=[100.0])
    assert survey(quiet, "out").node_volts["out"] == pytest.approx(2.0)


@pytest.mark.ngspice
@pytest.mark.parametrize(
    "deck", [*sorted(DECKS.glob("*.cir")), PEAT], ids=lambda deck: f"{deck.parent.name}-{deck.stem}"
)
@pytest.mark.parametrize("celsius", [5.0, 27.0, 50.0])
def test_node_voltages_and_source_currents_are_those_of_ngspice(
    deck: Path, celsius: float, ngspice: Any
) -> None:
    wanted = ngspice.op(deck, celsius=celsius)
    netlist = read_netlist(deck)
    found = survey(netlist, netlist.nodes[0], celsius=celsius)
    for node, volts in found.node_volts.items():
        # SOURCE: ngspice 39 .op; the bar is 0.1 mV
        assert volts == pytest.approx(wanted[node], abs=1e-5), node
    for name, amps in found.source_amps.items():
        if name[0] in "vV":
            assert amps == pytest.approx(wanted[f"i({name.lower()})"], rel=1e-5, abs=1e-10), name


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("deck", "probe", "peak_volts", "dc_volts"),
    [
        (PEAT, "jack_out", 1e-3, 0.0),
        (DECKS / "germanium_pair.cir", "out", 1e-3, 0.0),
        (DECKS / "germanium_pair.cir", "out", 10e-3, 0.0),
        (DECKS / "silicon_amplifier.cir", "load", 10e-3, 0.0),
        (DECKS / "diode_clipper.cir", "out", 0.3, 0.15),
    ],
    ids=["peat", "pair 1 mV", "pair 10 mV", "silicon", "clipper"],
)
def test_settled_level_and_distortion_are_those_of_ngspice(
    deck: Path, probe: str, peak_volts: float, dc_volts: float, ngspice: Any
) -> None:
    hz, step_s, stop_s, periods, per_period = 1000.0, 1e-6, 0.1, 20, 400
    node = "source" if deck is PEAT else "in"
    sine_card = f"Vin {node} 0 SIN({dc_volts} {peak_volts} {hz})"
    table = ngspice.tran(deck, step_s, stop_s, replace_cards={"Vin": sine_card})
    grid = stop_s - periods / hz + np.arange(periods * per_period) / (per_period * hz)
    heard = CubicSpline(table.scale, table.of(probe).real)(grid)
    peaks = np.abs(np.fft.rfft(heard - np.mean(heard)))[periods * np.arange(1, 11)]
    rms_volts = float(np.std(heard))
    thd_ratio = float(np.sqrt(np.sum(peaks[1:] ** 2)) / peaks[0])
    (sine,) = survey(read_netlist(deck), probe, sines=[Sine(hz, peak_volts)], source="Vin").sines
    # SOURCE: ngspice 39 .tran at 1 µs, settled; bars: 0.01 dB and 0.3 % of the THD
    assert 20.0 * math.log10(sine.rms_volts / rms_volts) == pytest.approx(0.0, abs=0.01)
    assert sine.thd_ratio == pytest.approx(thd_ratio, rel=3e-3)
