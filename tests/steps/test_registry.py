from __future__ import annotations

from dataclasses import fields

import pytest

from fixture.errors import BadInput
from fixture.steps.registry import get_kind, step_kinds


def test_the_four_kinds_are_found_by_their_files() -> None:
    assert {"supply_current", "node_voltages", "gain", "frequency_response"} <= set(step_kinds())


@pytest.mark.parametrize("name", sorted(step_kinds()))
def test_a_kind_is_named_as_its_file_and_parses_into_the_options_it_declares(name: str) -> None:
    kind = get_kind(name)
    assert type(kind).__module__ == f"fixture.steps.{name}"
    assert {field.name for field in fields(kind.options_type)} == {option.name for option in kind.options}
    assert kind.title and kind.doc and all(option.doc for option in kind.options)


@pytest.mark.parametrize("name", sorted(step_kinds()))
def test_the_defaults_of_a_kind_are_within_its_own_bounds(name: str) -> None:
    for option in get_kind(name).options:
        if option.type == "choice":
            assert option.default in option.choices
        elif option.type == "quantity":
            assert option.low is not None and option.high is not None
            assert option.low <= option.default <= option.high


def test_an_unknown_kind_is_refused_with_the_nearest_name() -> None:
    with pytest.raises(BadInput, match='no kind of step "gian": did you mean "gain"'):
        get_kind("gian")
