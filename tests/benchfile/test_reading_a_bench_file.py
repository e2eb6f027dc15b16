"""A bench file becomes a bench specification, or a list of all its faults."""

from __future__ import annotations

from pathlib import Path

import pytest

from fixture.bench.benchfile import (
    CHANNELS,
    AudioSpec,
    FixtureSpec,
    InstrumentSpec,
    SimulatedSpec,
    read_bench_file,
)
from fixture.errors import BadFile

DEMO = Path(__file__).parents[2] / "bench.toml"


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    path = tmp_path / "bench.toml"
    path.write_text(DEMO.read_text(encoding="utf-8"), encoding="utf-8")
    return path


def edit(path: Path, edits: dict[str, str]) -> dict[str, int]:
    text = path.read_text(encoding="utf-8")
    lines = {}
    for old, new in edits.items():
        before, found, after = text.partition(old)
        assert found, old
        lines[new] = before.count("\n") + 1
        text = before + new + after
    path.write_text(text, encoding="utf-8")
    return lines


def faults_of(path: Path) -> list[tuple[int | None, str]]:
    with pytest.raises(BadFile) as caught:
        read_bench_file(path)
    assert all(fault.file == path and "\n" not in fault.text for fault in caught.value.faults)
    return [(fault.line, fault.text) for fault in caught.value.faults]


def test_the_demo_bench_is_wholly_simulated() -> None:
    spec = read_bench_file(DEMO)
    assert (spec.name, spec.kind, spec.mains_hz, spec.visa_library) == (
        "demo",
        "simulated",
        50.0,
        "simulated",
    )
    assert spec.supply == InstrumentSpec(
        role="supply",
        link="visa",
        resource="TCPIP0::supply.bench::5025::SOCKET",
        dialect="scpi_supply",
        identity="toeline,simulated supply,S-0001,1.0",
    )
    assert spec.channels["pad_coarse"] == 101 and set(spec.channels) == set(CHANNELS)
    assert spec.probes == {f"TP{n}": 120 + n for n in range(1, 7)}
    assert spec.fixture == FixtureSpec(10.0, 0.0005, 60.0, 20.0, 0.02, 600.0)
    assert spec.audio == AudioSpec("simulated", "", 48000, 2.0, 4.0, 2.2, 0.02)
    assert spec.ambient_celsius == 23.0 and spec.simulated == SimulatedSpec(23.0, 1)


def test_a_bench_with_a_real_audio_interface_is_mixed(bench: Path) -> None:
    edit(bench, {'device = "simulated"': 'device = "Interface 4"\nhost_api = "ALSA"'})
    spec = read_bench_file(bench)
    assert spec.kind == "mixed" and spec.audio.host_api == "ALSA"


def test_a_bench_without_anything_simulated_is_real_and_needs_no_world(bench: Path) -> None:
    edit(
        bench, {'library = "simulated"': 'library = "@py"', 'device = "simulated"': 'device = "Interface 4"'}
    )
    text = bench.read_text(encoding="utf-8")
    bench.write_text(text[: text.index("[simulated]")], encoding="utf-8")
    spec = read_bench_file(bench)
    assert spec.kind == "real" and spec.simulated is None


def test_instruments_can_be_on_a_serial_port_or_played_by_hand(bench: Path) -> None:
    edit(
        bench,
        {
            'resource = "TCPIP0::switchbox.bench::5025::SOCKET"\ndialect = "scpi_switchbox"': (
                'port = "/dev/ttyUSB0"\nbaud = 19200\ndialect = "serial_relays"'
            ),
            'resource = "TCPIP0::supply.bench::5025::SOCKET"\ndialect = "scpi_supply"\n'
            'identity = "toeline,simulated supply,S-0001,1.0"': 'link = "by hand"\naccuracy = "2 %"',
        },
    )
    spec = read_bench_file(bench)
    assert (spec.switchbox.link, spec.switchbox.port, spec.switchbox.baud) == (
        "serial",
        "/dev/ttyUSB0",
        19200,
    )
    assert spec.supply == InstrumentSpec("supply", "by hand", accuracy_ratio=0.02)
    assert spec.kind == "mixed"


def test_a_dialect_of_ones_own_is_found_beside_the_bench_file(bench: Path) -> None:
    import drivers.dialect

    shipped = Path(drivers.dialect.__file__).parent / "dialects" / "scpi_supply.toml"
    (bench.parent / "mine.toml").write_bytes(shipped.read_bytes())
    edit(bench, {'dialect = "scpi_supply"': 'dialect = "mine.toml"'})
    assert read_bench_file(bench).supply.dialect == bench.parent / "mine.toml"


ONE_FAULT = {
    "no mains frequency": ('mains = "50 Hz"', 'mains = "55 Hz"', "50 Hz or 60 Hz is accepted"),
    "a wrong unit": ('shunt = "10 Ω"', 'shunt = "10 V"', "is not a resistance"),
    "a shunt of nothing": ('shunt = "10 Ω"', 'shunt = "0 Ω"', "accepted is more than 0 Ω"),
    "pads exchanged": ('pad_fine = "60.00 dB"', 'pad_fine = "10 dB"', "the fine pad must attenuate more"),
    "an odd sample rate": ('rate = "48 kHz"', 'rate = "47 kHz"', "accepted: 44.1 kHz, 48 kHz"),
    "an unknown channel": (
        "load_10k = 106",
        "load_1k = 106",
        'no channel of that name: did you mean "load_10k"?',
    ),
    "a channel taken twice": ("load_10k = 106", "load_10k = 101", 'channel 101 is "pad_coarse" already'),
    "a probe on a relay's number": ("TP3 = 123", "TP3 = 103", 'channel 103 is "source_coil" already'),
    "a channel in quotes": ("load_10k = 106", 'load_10k = "106"', "a whole number is wanted"),
    "a channel below nought": ("load_10k = 106", "load_10k = -1", "accepted is 0 to 99999"),
    "a link unheard of": (
        'dialect = "scpi_supply"',
        'dialect = "scpi_supply"\nlink = "usb"',
        "visa, serial, by hand",
    ),
    "a dialect unheard of": ('dialect = "scpi_supply"', 'dialect = "scpi_suply"', "scpi_supply"),
    "a dialect of another role": ('dialect = "scpi_supply"', 'dialect = "scpi_multimeter"', "supply"),
    "a misspelt key": (
        'identity = "toeline,simulated supply',
        'identiti = "toeline,simulated supply',
        "identity",
    ),
    "a seed that is none": ("noise_seed = 1", "noise_seed = 1.5", "a whole number is wanted"),
    "a hot room": (
        'temperature = "23 °C"      # typed',
        'temperature = "230 °C" #',
        "accepted is -20 °C to 60 °C",
    ),
    "another format": ("format = 1", "format = 9", "this program reads format 1"),
    "no quotes": ('name = "demo"', "name = demo", "not TOML:"),
}


@pytest.mark.parametrize("case", ONE_FAULT)
def test_each_fault_is_one_line_that_says_where_and_what_is_accepted(case: str, bench: Path) -> None:
    old, new, wanted = ONE_FAULT[case]
    lines = edit(bench, {old: new})
    ((line, text),) = faults_of(bench)
    assert wanted in text
    assert line == lines[new] + new.count("\n")


def test_missing_channels_are_named_with_all_that_are_accepted(bench: Path) -> None:
    text = bench.read_text(encoding="utf-8")
    gone = ("meter_shunt", "bleeder", "supply_negative_ground", "supply_positive_ground", "meter_output")
    kept = [line for line in text.splitlines() if not line.startswith(gone)]
    bench.write_text("\n".join(kept), encoding="utf-8")
    section = kept.index(next(line for line in kept if line.startswith("[switchbox.channels]"))) + 1
    found = faults_of(bench)
    assert [line for line, _ in found] == [section] * 3
    assert '"bleeder" is missing; accepted: source_line, source_short' in found[0][1]
    assert '"meter_shunt" is missing' in found[1][1]
    assert "one of supply_negative_ground and supply_positive_ground is missing" in found[2][1]


def test_a_simulated_bench_needs_its_world(bench: Path) -> None:
    edit(bench, {"[simulated]": "[simulatid]"})
    texts = [text for _, text in faults_of(bench)]
    assert any('"[simulated]" is missing' in text for text in texts)


def test_a_missing_instrument_is_named(bench: Path) -> None:
    edit(bench, {"[multimeter]": "[multimeta]"})
    ((line, text),) = faults_of(bench)
    assert text == 'unknown key "multimeta": did you mean "multimeter"?' and line is not None


def test_keys_of_another_link_are_refused(bench: Path) -> None:
    lines = edit(bench, {'dialect = "scpi_supply"': 'dialect = "scpi_supply"\nport = "COM3"'})
    ((line, text),) = faults_of(bench)
    assert text == 'supply.port: does not go with link = "visa"; accepted: resource, dialect, identity'
    assert line == next(iter(lines.values())) + 1


def test_many_faults_are_reported_at_once_in_the_order_of_the_lines(bench: Path) -> None:
    lines = edit(
        bench, {old: new for old, new, _ in list(ONE_FAULT.values())[:8]} | {"TP6 = 126": "TP6 = 0.5"}
    )
    found = [line for line, _ in faults_of(bench)]
    assert found == sorted(lines.values())


def test_a_bench_file_that_is_not_there_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(BadFile, match=r"bench\.toml: there is no such file$"):
        read_bench_file(tmp_path / "bench.toml")
