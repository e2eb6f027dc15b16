"""Speed of the circuit engine against ngspice, paired in one run.

Run from the repository's root: ``python tests/speed/bench_engine.py [--quick] [--output docs/engine.md]``. Both simulate
half a second of a 1 kHz sine with no step longer than 1/(4 x 48 kHz), on the same deck, in turns and several times
over; ratios of such pairs hold on any machine, seconds do not. Processor time is compared, which a busy machine
disturbs less than the clock. ngspice is timed as a whole process less the time of the same process with one microsecond
to simulate, so reading the deck is not counted.
"""

from __future__ import annotations

import argparse
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

if TYPE_CHECKING:
    from drivers.circuit.transient import Simulator

RATE_HZ = 48_000
OVERSAMPLE = 4
_OTHER_DECKS = ROOT / "tests" / "circuit" / "decks"


@dataclass(frozen=True)
class Deck:
    """A netlist with its driven source, its output and the loudest sine of the comparison."""

    path: Path
    source: str
    output: str
    loud_volts: float
    quiet_volts: float = 1.5e-4


DECKS = {
    "peat": Deck(ROOT / "limits" / "peat" / "circuit.cir", "Vin", "jack_out", 0.01),
    "germanium_pair": Deck(_OTHER_DECKS / "germanium_pair.cir", "Vin", "out", 0.01),
    "silicon_amplifier": Deck(_OTHER_DECKS / "silicon_amplifier.cir", "Vin", "load", 0.01),
    "diode_clipper": Deck(_OTHER_DECKS / "diode_clipper.cir", "Vin", "out", 0.3),
}


def main(argv: Sequence[str] | None = None) -> int:
    """Measure and print a small table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=9, help="pairs a deck and drive; medians are shown")
    parser.add_argument("--quick", action="store_true", help="Peat alone, three short pairs, no cold start")
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)
    rounds, seconds = (3, 0.2) if arguments.quick else (arguments.rounds, 0.5)
    lines = [
        "# The circuit engine against ngspice, paired",
        "",
        f"Made by `tests/speed/bench_engine.py`: {seconds} s of a 1 kHz sine, steps of 1/({OVERSAMPLE} x 48 kHz), "
        f"{rounds} pairs, medians of processor time.",
        "",
        "| deck | sine, V peak | times ngspice | s of audio per core second | µs a step |",
        "|---|---|---|---|---|",
    ]
    for name in list(DECKS)[: 1 if arguments.quick else None]:
        for peak_volts in (DECKS[name].quiet_volts, DECKS[name].loud_volts):
            pair = compare(name, peak_volts, seconds, rounds)
            per_step_us = pair.ours_s / (seconds * RATE_HZ * OVERSAMPLE) * 1e6
            lines.append(
                f"| {name} | {peak_volts:g} | {pair.ratio:.1f} | {seconds / pair.ours_s:.1f} | {per_step_us:.2f} |"
            )
    if not arguments.quick:
        cold_s, warm_s = start_times()
        first_s, again_s = settling_times()
        lines += [
            "",
            "| | |",
            "|---|---|",
            f"| new process to the first millisecond, nothing compiled yet | {cold_s:.1f} s |",
            f"| the same, kernels from the cache | {warm_s:.2f} s |",
            f"| 4 s of settling after power-on, first time in a process | {first_s * 1e3:.1f} ms |",
            f"| the same again | {again_s * 1e3:.1f} ms |",
        ]
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


def simulator_of(name: str) -> Simulator:
    """Return a simulator of a deck at its operating point."""
    from drivers.circuit.netlist import elaborate, read_netlist
    from drivers.circuit.transient import Simulator

    deck = DECKS[name]
    simulator = Simulator(elaborate(read_netlist(deck.path)), inputs=[deck.source], outputs=[deck.output])
    simulator.start_at_operating_point()
    return simulator


def start_times() -> tuple[float, float]:
    """Return seconds from a bare interpreter to the first millisecond simulated, with a cold and a warm cache."""
    code = (
        f"import sys; sys.path[:0] = [{str(ROOT)!r}, {str(Path(__file__).parent)!r}]\n"
        "import bench_engine, numpy as np\n"
        "bench_engine.simulator_of('peat').run(np.zeros((48, 1)), 48000)"
    )
    with tempfile.TemporaryDirectory() as folder:
        times = []
        for _ in range(2):
            begin = time.perf_counter()
            subprocess.run(
                [sys.executable, "-c", code], check=True, env={**os.environ, "TOELINE_CACHE": folder}
            )
            times.append(time.perf_counter() - begin)
    return times[0], times[1]


@dataclass(frozen=True)
class Pair:
    """Medians of both programs: processor seconds of ours, and ngspice's over ours (nan without ngspice)."""

    ours_s: float
    ratio: float


def compare(name: str, peak_volts: float, seconds: float, rounds: int) -> Pair:
    """Time both programs in turns."""
    simulator = simulator_of(name)
    dc_volts = float(simulator.initial_inputs[0])
    t_s = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
    samples = (dc_volts + peak_volts * np.sin(2 * np.pi * 1000.0 * t_s))[:, None]
    simulator.run(samples[:480], RATE_HZ, OVERSAMPLE)  # load the filters
    ours, ratios = [], []
    for _ in range(rounds):
        simulator.start_at_operating_point()
        begin = time.process_time()
        simulator.run(samples, RATE_HZ, OVERSAMPLE)
        ours.append(time.process_time() - begin)
        if shutil.which("ngspice"):
            theirs = ngspice_seconds(DECKS[name], dc_volts, peak_volts, seconds)
            ratios.append((theirs - ngspice_seconds(DECKS[name], dc_volts, peak_volts, 1e-6)) / ours[-1])
    return Pair(statistics.median(ours), statistics.median(ratios) if ratios else float("nan"))


def ngspice_seconds(deck: Deck, dc_volts: float, peak_volts: float, seconds: float) -> float:
    """Return the processor seconds of one ngspice process."""
    lines = deck.path.read_text(encoding="utf-8").splitlines()
    lines = [line for line in lines if line.strip().lower() != ".end"]
    source = deck.source.lower()
    nodes = next(line.split()[1:3] for line in lines if line.lower().split()[:1] == [source])
    card = f"{deck.source} {' '.join(nodes)} SIN({dc_volts!r} {peak_volts!r} 1000)"
    lines = [card if line.lower().split()[:1] == [source] else line for line in lines]
    step_s = 1.0 / (RATE_HZ * OVERSAMPLE)
    # nothing is written: time is spent on the circuit
    tran = f"tran {step_s!r} {seconds!r} 0 {step_s!r}"
    lines += [".control", f"save {nodes[0]}", tran, "quit", ".endc", ".end"]
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "deck.cir").write_text("\n".join(lines) + "\n", encoding="utf-8")
        begin = os.times()
        done = subprocess.run(
            ["ngspice", "-b", "deck.cir"], cwd=folder, capture_output=True, text=True, check=False
        )
        end = os.times()
    if "No. of Data Rows" not in done.stdout:
        raise RuntimeError(f"ngspice did not run {deck.path.name}: {done.stdout}{done.stderr}")
    return end.children_user - begin.children_user + end.children_system - begin.children_system


def settling_times() -> tuple[float, float]:
    """Return seconds for four seconds after power-on: with all steps new, and once they are known."""
    from drivers.circuit.netlist import elaborate, read_netlist
    from drivers.circuit.transient import Simulator

    simulator = Simulator(elaborate(read_netlist(DECKS["peat"].path)), inputs=["Vsup"], outputs=["q2c"])
    times = []
    for _ in range(2):
        simulator.start_discharged()
        begin = time.perf_counter()
        simulator.settle(4.0, [-9.0])
        times.append(time.perf_counter() - begin)
    return times[0], times[1]


if __name__ == "__main__":
    sys.exit(main())
