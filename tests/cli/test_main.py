"""The entry point: choosing a command, errors as lines and exit codes, the root folder, a fast start."""

from __future__ import annotations

import importlib
import subprocess
import sys
from pathlib import Path

import pytest

from fixture.cli.main import COMMANDS, Command, main
from fixture.cli.root import find_root
from fixture.errors import BadInput

HERE = Path(__file__).parents[2]
SAMPLE = {"sample": Command("tests.cli.sample_command", "do what the argument says", needs_root=False)}


@pytest.mark.parametrize(
    ("what", "code", "line"),
    [
        ("bad input", 2, "this cannot be used"),
        ("in use", 3, "somebody holds the bench"),
        ("unsafe", 3, "the disk is full"),
        ("link", 3, "meter: gone"),
        ("circuit", 2, "no node 'x'"),
        ("no convergence", 3, "no operating point"),
        ("ctrl-c", 130, "stopped"),
        ("stop", 143, "stopped"),
    ],
)
def test_an_error_is_its_line_and_its_exit_code(
    what: str, code: int, line: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["sample", what], SAMPLE) == code
    shown = capsys.readouterr()
    assert shown.err == f"{line}\n"
    assert shown.out == ""


def test_a_fault_of_the_program_never_looks_like_a_failed_unit(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["sample", "fault"], SAMPLE) == 3
    shown = capsys.readouterr().err
    assert "ZeroDivisionError" in shown
    assert "a fault of the program, not of the unit or the bench" in shown


def test_the_code_of_the_command_is_the_exit_code() -> None:
    assert [main(["sample", "nothing", "--code", str(code)], SAMPLE) for code in (0, 1, 3)] == [0, 1, 3]


@pytest.mark.parametrize(
    ("argv", "said"),
    [
        (["tset", "PT-1"], 'did you mean "test"?'),
        (["--root", ".", "tracee"], 'did you mean "trace"?'),
        (["qwertz"], "there are test, lot, tune, trace, models, limits, circuit"),
        (["trace"], "SERIAL"),
        (["trace", "PT-1", "--jsn"], "--jsn"),
        (["test", "PT-1", "--pace", "slow"], "fast"),
    ],
)
def test_bad_usage_is_one_line_with_what_is_accepted(
    argv: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(argv) == 2
    shown = capsys.readouterr()
    assert said in shown.err
    assert shown.err.count("\n") == 1
    assert shown.out == ""


def test_without_a_command_the_help_is_shown_as_bad_usage(capsys: pytest.CaptureFixture[str]) -> None:
    assert main([]) == 2
    shown = capsys.readouterr().out
    assert all(name in shown for name in COMMANDS)


def test_the_help_says_what_the_commands_say_themselves() -> None:
    for name, command in COMMANDS.items():
        module = importlib.import_module(command.module)
        assert (name, command.summary) == (module.NAME, module.SUMMARY)


@pytest.mark.parametrize("argv", [["--help"], ["--version"], ["circuit", "--help"]])
def test_help_and_version_come_without_the_heavy_libraries(argv: list[str]) -> None:
    heavy = {"numpy", "scipy", "numba", "rich", "pandas", "duckdb", "pyvisa", "sounddevice"}
    program = (
        "import sys; from fixture.cli.main import main; code = main(sys.argv[1:]); "
        f"sys.exit(code or sorted({heavy!r} & sys.modules.keys()) or 0)"
    )
    done = subprocess.run(
        [sys.executable, "-c", program, *argv], cwd=HERE, capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "toeline" in done.stdout


@pytest.mark.skipif(sys.platform == "win32", reason="closed pipes are told differently there")
def test_a_reader_that_has_had_enough_gets_no_complaint() -> None:
    with subprocess.Popen(
        [sys.executable, "-m", "fixture.cli", "circuit", "limits/peat/circuit.cir", "--probe", "jack_out"],
        cwd=HERE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None and process.stderr is not None
        process.stdout.close()
        complaint = process.stderr.read()
        assert process.wait() == 128 + 13  # as a shell has it for SIGPIPE
    assert complaint == ""


def test_the_root_folder_is_the_named_one_then_the_environments_then_the_nearest_upwards(
    tmp_path: Path,
) -> None:
    named, environments, above = (tmp_path / name for name in ("named", "environments", "above"))
    here = above / "a" / "b"
    for folder in (named, environments, here):
        folder.mkdir(parents=True)
    (above / "bench.toml").touch()
    environment = {"TOELINE_ROOT": str(environments)}
    assert find_root(str(named), environment, here) == named
    assert find_root(None, environment, here) == environments
    assert find_root(None, {}, here) == above
    assert find_root(None, {"TOELINE_ROOT": ""}, here) == above


def test_a_missing_root_folder_says_what_to_do(tmp_path: Path) -> None:
    with pytest.raises(BadInput, match=r"--root .*nowhere: no such folder"):
        find_root(str(tmp_path / "nowhere"), {}, tmp_path)
    with pytest.raises(BadInput, match="TOELINE_ROOT"):
        find_root(None, {"TOELINE_ROOT": str(tmp_path / "nowhere")}, tmp_path)
    with pytest.raises(BadInput, match=r"no bench\.toml .* give --root DIR"):
        find_root(None, {}, tmp_path)


def test_every_fault_of_a_bench_file_is_told_with_its_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "bench.toml").write_text('format = 1\nname = "demo"\nmains = "55 bananas"\nsuply = 1\n')
    assert main(["--root", str(tmp_path), "test", "PT-2612-0001"]) == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert all(line.startswith(str(tmp_path)) for line in shown.err.splitlines())
    assert "bench.toml:3: " in shown.err and "bench.toml:4: " in shown.err
