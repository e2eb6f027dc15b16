"""Speed of the circuit engine against ngspice, paired in one run; not a test: `python tests/speed/bench_engine.py`.

Both simulate half a second of a 1 kHz sine with no step longer than 1/(4 x 48 kHz), on the same deck, one after the
other and several times over; ratios of such pairs hold on any machine, seconds do not. Processor time is compared,
which a busy machine disturbs less than the clock. ngspice is timed as a whole process less the time of the same
process with one microsecond to simulate, so reading the deck is not counted.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parents[2]
sys.path.insert(0, str(ROOT))

RATE_HZ = 48_000
OVERSAMPLE = 4
SECONDS = 0.5
DECKS = {
    "peat": (ROOT / "limits" / "peat" / "circuit.cir", "Vin", "jack_out", 0.01),
    "germanium_pair": (ROOT / "tests" / "circuit" / "decks" / "germanium_pair.cir", "Vin", "out", 0.01),
    "silicon_amplifier": (
        ROOT / "tests" / "circuit" / "decks" / "silicon_amplifier.cir",
        "Vin",
        "load",
        0.01,
    ),
    "diode_clipper": (ROOT / "tests" / "circuit" / "decks" / "diode_clipper.cir", "Vin", "out", 0.3),
}


def main() -> None:
    """Measure and print, as text or JSON."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--rounds", type=int, default=3)
    arguments = parser.parse_args()
    report: dict[str, object] = {"start": start_times()}
    report["decks"] = {name: pair(name, arguments.rounds) for name in DECKS}
    report["settling"] = settling()
    if arguments.json:
        print(json.dumps(report, indent=1))
        return
    start = report["start"]
    print(f"import and kernel, cold cache {start['cold_s']:.1f} s, warm {start['warm_s']:.2f} s")
    for name, row in report["decks"].items():
        print(
            f"{name:18s} {row['ratio']:5.1f} x ngspice   {row['unit_seconds_per_core_second']:5.1f} s of audio per "
            f"core second ({row['quiet_unit_seconds_per_core_second']:.1f} at 0.1 mV)   {row['step_us']:.2f} us a step"
        )
    print("4 s after power-on: {first_ms:.1f} ms, again {again_ms:.2f} ms".format(**report["settling"]))


def circuit_of(name: str):
    from drivers.circuit.netlist import elaborate, read_netlist

    return elaborate(read_netlist(DECKS[name][0]))


def simulator_of(name: str):
    from drivers.circuit.transient import Simulator

    _, source, output, _ = DECKS[name]
    simulator = Simulator(circuit_of(name), inputs=[source], outputs=[output])
    simulator.start_at_operating_point()
    return simulator


def start_times() -> dict[str, float]:
    """Seconds from a bare interpreter to the first millisecond simulated, with a cold and with a warm cache."""
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
    return {"cold_s": times[0], "warm_s": times[1]}


def pair(name: str, rounds: int) -> dict[str, float]:
    """Time both programs in turns; return medians and the median of the ratios."""
    deck, source, _, peak_volts = DECKS[name]
    simulator = simulator_of(name)
    dc = float(simulator.initial_inputs[0])
    t = np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ
    tone = np.sin(2 * np.pi * 1000.0 * t)
    loud = (dc + peak_volts * tone)[:, None]
    quiet = (dc + 1e-4 * tone)[:, None]
    simulator.run(loud[:480], RATE_HZ, OVERSAMPLE)  # load the filters
    ours, quiets, theirs = [], [], []
    for _ in range(rounds):
        ours.append(timed(simulator, loud))
        if shutil.which("ngspice"):
            theirs.append(ngspice_seconds(deck, source, dc, peak_volts, SECONDS))
            theirs[-1] -= ngspice_seconds(deck, source, dc, peak_volts, 1e-6)
        quiets.append(timed(simulator, quiet))
    return {
        "ratio": statistics.median(b / a for a, b in zip(ours, theirs, strict=True))
        if theirs
        else float("nan"),
        "unit_seconds_per_core_second": SECONDS / statistics.median(ours),
        "quiet_unit_seconds_per_core_second": SECONDS / statistics.median(quiets),
        "step_us": statistics.median(ours) / (SECONDS * RATE_HZ * OVERSAMPLE) * 1e6,
        "ngspice_s": statistics.median(theirs) if theirs else float("nan"),
    }


def timed(simulator, samples) -> float:
    simulator.start_at_operating_point()
    begin = time.process_time()
    simulator.run(samples, RATE_HZ, OVERSAMPLE)
    return time.process_time() - begin


def ngspice_seconds(deck: Path, source: str, dc: float, peak_volts: float, seconds: float) -> float:
    lines = deck.read_text(encoding="utf-8").splitlines()
    lines = [line for line in lines if line.strip().lower() != ".end"]
    nodes = next(line.split()[1:3] for line in lines if line.lower().split()[:1] == [source.lower()])
    card = f"{source} {' '.join(nodes)} SIN({dc!r} {peak_volts!r} 1000)"
    lines = [card if line.lower().split()[:1] == [source.lower()] else line for line in lines]
    step = 1.0 / (RATE_HZ * OVERSAMPLE)
    # nothing is written: time is spent on the circuit
    lines += [
        ".control",
        f"save {nodes[0]}",
        f"tran {step!r} {seconds!r} 0 {step!r}",
        "quit",
        ".endc",
        ".end",
    ]
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "deck.cir").write_text("\n".join(lines) + "\n", encoding="utf-8")
        begin = os.times()
        done = subprocess.run(
            ["ngspice", "-b", "deck.cir"], cwd=folder, capture_output=True, text=True, check=False
        )
        end = os.times()
        elapsed = end.children_user - begin.children_user + end.children_system - begin.children_system
        if "No. of Data Rows" not in done.stdout:
            raise RuntimeError(f"ngspice did not run {deck.name}: {done.stdout}{done.stderr}")
        return elapsed


def settling() -> dict[str, float]:
    """Milliseconds for four seconds after power-on: with all steps new, and once they are known."""
    from drivers.circuit.transient import Simulator

    simulator = Simulator(circuit_of("peat"), inputs=["Vsup"], outputs=["q2c"])
    times = []
    for _ in range(2):
        simulator.start_discharged()
        begin = time.perf_counter()
        simulator.settle(4.0, [-9.0])
        times.append((time.perf_counter() - begin) * 1e3)
    return {"first_ms": times[0], "again_ms": times[1]}


if __name__ == "__main__":
    main()
