"""Every step kind that the program has can stand in a limits file with nothing but its required options."""

from __future__ import annotations

from pathlib import Path

from fixture.domain.options import Option
from fixture.modelfile import load_model
from fixture.steps.registry import step_kinds

HEAD = """
format = 1
[model]
name = "Peat"
maker = "Brindlecombe Pedal Works"
serial_pattern = 'PT-\\d{4}-\\d{4}'
serial_example = "PT-2612-0001"
[revision]
number = 1
author = "A. Fell"
date = 2026-11-30
reason = "first"
basis = "measured"
[supply]
volts = "9 V"
ground = "positive"
current_limit = "20 mA"
over_voltage = "10 V"
[nodes.q1_collector]
probe = "TP1"
[procedures.line]
"""


def written(option: Option) -> str:
    """Return a value that the option must accept."""
    if option.type == "quantity":
        return repr(option.low if option.low is not None else 1.0)
    if option.type == "count":
        return str(int(option.low or 1))
    return {
        "choice": f'"{(option.choices or ("",))[0]}"',
        "flag": "true",
        "nodes": '["q1_collector"]',
        "text": '"text"',
    }[option.type]


def test_every_step_kind_is_read_with_its_defaults(tmp_path: Path) -> None:
    text = HEAD
    for kind in step_kinds().values():
        text += f'[[procedures.line.steps]]\nname = "{kind.title}"\nkind = "{kind.kind}"\n'
        for option in kind.options:
            if option.default is None:
                text += f"{option.name} = {written(option)}\n"
    path = tmp_path / "limits.toml"
    path.write_text(text, encoding="utf-8")
    steps = load_model(path).procedures["line"].steps
    assert [step.kind for step in steps] == list(step_kinds())
    for step in steps:
        kind = step_kinds()[step.kind]
        assert isinstance(step.options, kind.options_type)
        for option in kind.options:
            if option.default is not None:
                assert getattr(step.options, option.name) == option.default


def test_the_sample_file_is_good_for_the_programs_own_step_kinds() -> None:
    model = load_model(Path(__file__).parent / "sample" / "limits" / "peat" / "limits.toml")
    assert [step.kind for step in model.procedures["line"].steps] == [
        "supply_current",
        "node_voltages",
        "gain",
        "frequency_response",
    ]
