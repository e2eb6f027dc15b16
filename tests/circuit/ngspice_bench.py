"""Runs the ngspice program on a deck and reads its answers: the independent program of the circuit tests."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.netlist import Netlist

DECKS = Path(__file__).parent / "decks"
TIGHT = "reltol=1e-7 abstol=1e-15 vntol=1e-9 chgtol=1e-17"


@dataclass(frozen=True)
class Table:
    """Columns of an analysis: `scale` is frequency or time (a 0 for .op), `columns` by lower-case name."""

    scale: NDArray[np.float64]
    columns: Mapping[str, NDArray[np.complex128]]

    def of(self, name: str) -> NDArray[np.complex128]:
        """Return a column; a node is named by itself, a source's current ``i(vsup)``."""
        lowered = name.lower()
        for spelt in (lowered, f"v({lowered})", lowered.replace("i(", "").replace(")", "#branch")):
            if spelt in self.columns:
                return self.columns[spelt]
        raise KeyError(f"{name}: {sorted(self.columns)}")


def installed() -> bool:
    """Tell whether ngspice is on the path."""
    return shutil.which("ngspice") is not None


class Ngspice:
    """ngspice in batch mode; the deck itself is not changed, the analysis stands before its .end."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def op(self, deck: Path, **changes: object) -> dict[str, float]:
        """Return node voltages (and ``i(vsup)`` of voltage sources) at the operating point."""
        table = self._run(deck, "op", **changes)
        return {
            (f"i({name.removesuffix('#branch')})" if name.endswith("#branch") else _bare(name)): float(
                column[0].real
            )
            for name, column in table.columns.items()
        }

    def ac(self, deck: Path, hz: Sequence[float], **changes: object) -> Table:
        """Return the small-signal answer at the given frequencies, any spacing."""
        tables = [self._run(deck, f"ac lin 1 {one!r} {one!r}", **changes) for one in hz]
        return Table(
            np.array([float(table.scale[0]) for table in tables]),
            {name: np.array([table.columns[name][0] for table in tables]) for name in tables[0].columns},
        )

    def ac_decade(self, deck: Path, points: int, low_hz: float, high_hz: float, **changes: object) -> Table:
        """Return the small-signal answer on a logarithmic grid."""
        return self._run(deck, f"ac dec {points} {low_hz!r} {high_hz!r}", **changes)

    def tran(self, deck: Path, step_s: float, stop_s: float, **changes: object) -> Table:
        """Return the transient at ngspice's own time points, no step longer than `step_s`."""
        return self._run(deck, f"tran {step_s!r} {stop_s!r} 0 {step_s!r}", **changes)

    def _run(
        self,
        deck: Path,
        analysis: str,
        *,
        celsius: float | None = None,
        params: Mapping[str, float] | None = None,
        cards: Sequence[str] = (),
        replace_cards: Mapping[str, str] | None = None,
        options: str = TIGHT,
    ) -> Table:
        """Run one analysis.

        `params` override .param cards; `cards` are added; `replace_cards` puts a card in the place of the one
        that starts with the given part name.
        """
        lines = deck.read_text(encoding="utf-8").splitlines()
        end = next((i for i, line in enumerate(lines) if line.strip().lower() == ".end"), len(lines))
        lines = lines[:end]
        for name, card in (replace_cards or {}).items():
            lines = [card if line.lower().split()[:1] == [name.lower()] else line for line in lines]
        raw = self._folder / "answer.raw"
        raw.unlink(missing_ok=True)
        lines += list(cards)
        lines.append(f".options {options}")
        if celsius is not None:
            lines.append(f".temp {celsius!r}")
        # alterparam works on the deck as read; reset reads it in again with the new value
        altered = [f"alterparam {name}={value!r}" for name, value in (params or {}).items()]
        lines += [
            ".control",
            "set filetype=ascii",
            "set numdgt=12",
            *altered,
            *(["reset"] if altered else []),
        ]
        lines += ["save all", analysis, f"write {raw.name}", "quit", ".endc", ".end"]
        card_file = self._folder / "deck.cir"
        card_file.write_text("\n".join(lines) + "\n", encoding="utf-8")
        done = subprocess.run(
            ["ngspice", "-b", card_file.name],
            cwd=self._folder,
            capture_output=True,
            text=True,
            timeout=300,
            check=False,
        )
        if not raw.exists():
            raise AssertionError(f"ngspice gave no answer to '{analysis}':\n{done.stdout}\n{done.stderr}")
        return read_raw(raw)


def _bare(name: str) -> str:
    return name[2:-1] if name.startswith("v(") else name


def spell_out(netlist: Netlist) -> str:
    """Return a netlist (drawn, or with faults planted) as text for ngspice, which knows no ``#`` and ``@`` in names."""
    lines = [netlist.title]
    for param in netlist.params:
        lines.append(f".param {param.name}={{{param.expression}}}")
    for part in netlist.parts:
        value = f"area={{{part.value}}}" if part.kind in "dq" else f"{{{part.value}}}"
        words = [part.name, *part.nodes, part.model, value]
        lines.append(" ".join(word.replace("#", "_").replace("@", "_") for word in words if word))
    for model in netlist.models:
        parameters = " ".join(f"{name}={{{expression}}}" for name, expression in model.parameters)
        lines.append(f".model {model.name.replace('@', '_')} {model.kind}({parameters})")
    return "\n".join([*lines, ".end", ""])


def read_raw(path: Path) -> Table:
    """Read an ASCII raw file of one analysis (SPICE3 manual, appendix on raw files)."""
    head, _, body = path.read_text(encoding="utf-8").partition("Values:\n")
    names = [
        line.split()[1].lower() for line in head.partition("\nVariables:")[2].splitlines() if line.strip()
    ]
    is_complex = "complex" in head.partition("Flags:")[2].splitlines()[0]
    has_scale = names[0] in ("time", "frequency")
    words = body.split()
    width = len(names) + 1
    numbers = np.array([_number(word) for i, word in enumerate(words) if i % width], dtype=np.complex128)
    rows = numbers.reshape(-1, len(names))
    assert is_complex or np.all(rows.imag == 0.0)
    columns = {name: rows[:, i] for i, name in enumerate(names)}
    scale = rows[:, 0].real if has_scale else np.zeros(1)
    return Table(scale, columns)


def _number(word: str) -> complex:
    real, _, imaginary = word.partition(",")
    return complex(float(real), float(imaginary) if imaginary else 0.0)
