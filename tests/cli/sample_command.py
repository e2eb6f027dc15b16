"""A command that does what its argument says."""

from __future__ import annotations

import argparse
from pathlib import Path

from drivers.circuit.errors import NoConvergence, UnknownName
from drivers.errors import LinkDown
from fixture.errors import BadInput, BenchInUse, RecordsUnsafe
from fixture.sequence.stopping import StopRequested

NAME = "sample"
SUMMARY = "do what the argument says"

ERRORS: dict[str, BaseException] = {
    "bad input": BadInput("this cannot be used"),
    "in use": BenchInUse("somebody holds the bench"),
    "unsafe": RecordsUnsafe("the disk is full"),
    "link": LinkDown("meter: gone"),
    "circuit": UnknownName("no node 'x'"),
    "no convergence": NoConvergence("no operating point"),
    "fault": ZeroDivisionError("division by zero"),
    "ctrl-c": KeyboardInterrupt(),
    "stop": StopRequested("SIGTERM"),
}


def add_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("what")
    parser.add_argument("--code", type=int, default=0)


def execute(arguments: argparse.Namespace, root: Path) -> int:
    if arguments.what in ERRORS:
        raise ERRORS[arguments.what]
    if arguments.what == "root":
        print(root)
    return int(arguments.code)
