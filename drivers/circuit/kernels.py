"""Compiled time steps: source text for one set of ports, made, cached on disk and compiled by numba.

A kernel belongs to a number of transistors, a number of diodes and whether junctions store charge; wiring and values
come in as matrices, so one kernel serves every circuit with the same devices. The source is kept in a cache folder
(environment variable TOELINE_CACHE, else the platform's folder for caches) because numba caches machine code only
for functions that live in a file.
"""

from __future__ import annotations

import atexit
import hashlib
import importlib.util
import os
import shutil
import sys
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from types import ModuleType
from typing import Any

from drivers.circuit.kernel_source import kernel_source
from drivers.circuit.kernel_text import FILTER_SOURCE

compile_notice: Callable[[str], None] | None = None
"""Told, in words for a person, before a kernel is compiled for the first time on a machine."""

CACHE_VARIABLE = "TOELINE_CACHE"


@dataclass(frozen=True)
class KernelKey:
    """What a kernel is compiled for."""

    bjts: int
    diodes: int
    charged: bool

    @property
    def ports(self) -> int:
        """Number of junctions."""
        return 2 * self.bjts + self.diodes


@dataclass(frozen=True)
class Kernel:
    """The compiled functions of one key.

    Attributes
    ----------
    advance : callable
        ``advance(count, inputs, table, feedback, parameters, state, outputs, per_second, remember, shift,
        states)``: up to `count` steps; returns how many converged. `state` is flat: reactive states, port voltages,
        port charges, port voltages one and two steps before; it is changed in place.
    settle : callable
        Pairs of backward Euler steps, whole and halved, extrapolated: see `kernel_source`.
    """

    advance: Callable[..., int]
    settle: Callable[..., tuple[int, int]]


@dataclass(frozen=True)
class Filters:
    """Compiled FIR loops.

    Attributes
    ----------
    interpolate : callable
        ``interpolate(padded, phases, out)``: shapes (frames + taps - 1,), (factor, taps), (frames * factor,).
    decimate : callable
        ``decimate(fine, taps, factor, out)``: shapes (outputs, samples), (taps,), -, (outputs, frames).
    """

    interpolate: Callable[..., None]
    decimate: Callable[..., None]


@lru_cache(maxsize=64)
def load_kernel(key: KernelKey) -> Kernel:
    """Return a kernel, from the cache where possible; the first time on a machine it takes some seconds."""
    source = kernel_source(key.bjts, key.diodes, key.charged)
    stem = f"kernel_{key.bjts}q_{key.diodes}d{'_charged' if key.charged else ''}"
    module = _load(stem, source, seconds=round(4.0 + key.ports * (2.3 if key.charged else 1.7)))
    return Kernel(advance=module.advance, settle=module.settle)


@lru_cache(maxsize=1)
def load_filters() -> Filters:
    """Return the compiled filters of `drivers.circuit.resample`."""
    module = _load("filters", FILTER_SOURCE, seconds=2)
    return Filters(interpolate=module.interpolate, decimate=module.decimate)


def _load(stem: str, source: str, *, seconds: int) -> ModuleType:
    name = f"{stem}_{_digest(source)}"
    try:
        path = _write_source(cache_folder() / "kernels", name, source)
    except OSError:
        path = _write_source(_temporary_folder(), name, source)
    if compile_notice is not None and not any(path.parent.glob(f"__pycache__/{path.stem}.*.nbi")):
        compile_notice(
            f"compiling the circuit kernel, once per machine and kind of circuit, about {seconds} s"
        )
    try:
        return _import_file(path)
    except (RuntimeError, OSError):  # numba finds no place for machine code beside the source
        return _import_file(_write_source(_temporary_folder(), name, source))


def cache_folder() -> Path:
    """Return the folder for caches of this program; it need not exist yet."""
    named = os.environ.get(CACHE_VARIABLE)
    if named:
        return Path(named)
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA")
        return (Path(base) if base else Path.home() / "AppData" / "Local") / "toeline"
    if sys.platform == "darwin":
        return Path.home() / "Library" / "Caches" / "toeline"
    base = os.environ.get("XDG_CACHE_HOME")
    return (Path(base) if base else Path.home() / ".cache") / "toeline"


def _digest(source: str) -> str:
    import numba

    return hashlib.sha256(f"{numba.__version__} {sys.version_info[:2]}\n{source}".encode()).hexdigest()[:12]


def _write_source(folder: Path, name: str, source: str) -> Path:
    """Write the source unless it is there; another process may do the same at the same time."""
    path = folder / f"{name}.py"
    # numba ties machine code to the file's time: an intact file must not be written again
    if path.exists() and path.read_text(encoding="utf-8") == source:
        return path
    folder.mkdir(parents=True, exist_ok=True)
    descriptor, temporary = tempfile.mkstemp(dir=folder, prefix=name, suffix=".part")
    with os.fdopen(descriptor, "w", encoding="utf-8", newline="\n") as stream:
        stream.write(source)
    Path(temporary).replace(path)
    return path


@lru_cache(maxsize=1)
def _temporary_folder() -> Path:
    folder = Path(tempfile.mkdtemp(prefix="toeline-kernels-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


def _import_file(path: Path) -> ModuleType:
    name = f"toeline_{path.stem}"
    spec: Any = importlib.util.spec_from_file_location(name, path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    try:
        spec.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        raise
    return module
