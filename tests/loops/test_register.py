"""What is printed beside each number: every parameter has a range, a typical value inside it, a spread and a source."""

from __future__ import annotations

import dataclasses
from typing import Any

import pytest

from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS

KINDS = sorted(LOOPS)
SPECIFICATIONS = [(kind, item) for kind in KINDS for item in LOOPS[kind].specifications]
SPECIFICATION_IDS = [f"{kind}-{item.name}" for kind, item in SPECIFICATIONS]


def test_the_register_holds_the_three_loops_by_their_own_names() -> None:
    assert KINDS == ["breathing", "plain", "reflex"]
    assert all(loop.kind == kind for kind, loop in LOOPS.items())


@pytest.mark.parametrize("kind", KINDS)
def test_every_number_of_a_loop_has_one_specification(kind: str) -> None:
    loop = LOOPS[kind]
    choices = {choice.name for choice in loop.choices}
    fields = {item.name for item in dataclasses.fields(loop)} - choices - {"line_ventilation_l_min", "line_po2_mmhg"}
    names = [item.name for item in loop.specifications]
    assert sorted(names) == sorted(fields)
    assert len({item.symbol for item in loop.specifications}) == len(names)


@pytest.mark.parametrize(("kind", "item"), SPECIFICATIONS, ids=SPECIFICATION_IDS)
def test_a_specification_is_whole(kind: str, item: Any) -> None:
    assert item.minimum <= item.typical_low <= item.typical <= item.typical_high <= item.maximum
    assert item.minimum < item.maximum
    assert item.spread > 0.0
    assert item.distribution in ("normal", "lognormal")
    assert item.distribution == "normal" or item.minimum >= 0.0
    assert item.label and item.symbol and item.group and item.meaning and item.source
    assert item.spread_for(Basis.ASSUMED) == item.spread_for(Basis.TYPICAL) == item.spread
    assert 0.0 < item.spread_for(Basis.MEASURED) <= item.spread


@pytest.mark.parametrize(("kind", "item"), SPECIFICATIONS, ids=SPECIFICATION_IDS)
def test_the_ends_of_a_range_are_allowed_and_beyond_is_refused(kind: str, item: Any) -> None:
    assert item.check(item.minimum) == item.minimum
    assert item.check(item.maximum) == item.maximum
    width = item.maximum - item.minimum
    for beyond in (item.minimum - 1e-6 * width, item.maximum + 1e-6 * width, float("nan"), float("inf"), 10**400):
        with pytest.raises(InvalidInputError, match=r" must be a number from .*; got "):
            item.check(beyond)


@pytest.mark.parametrize("value", ["40", None, True, [40.0]])
def test_a_number_that_is_none_is_named(value: Any) -> None:
    specification = LOOPS["breathing"].specifications[1]
    with pytest.raises(InvalidInputError, match=r"Resting PaCO2 must be a number from 15 to 80 mmHg; got "):
        specification.check(value)


@pytest.mark.parametrize("kind", KINDS)
def test_starting_cases_stay_in_range_and_have_a_rest(kind: str) -> None:
    loop = LOOPS[kind]
    by_name = {item.name: item for item in loop.specifications}
    assert len({case.name for case in loop.starting_cases}) == len(loop.starting_cases) >= 2
    for case in loop.starting_cases:
        assert case.about.startswith("Invented: "), "an invented person says so"
        numbers = {item.name: item.typical for item in loop.specifications}
        numbers.update({name: by_name[name].check(value) for name, value in case.numbers.items()})
        choices = {choice.name: choice.check(case.choices.get(choice.name, choice.default)) for choice in loop.choices}
        person = loop(**numbers, **choices)
        assert person.rest().state.shape == (person.form().n_plant + person.form().n_control,)


def test_a_choice_takes_its_options_and_lists_them_when_refused() -> None:
    shape = next(choice for choice in LOOPS["breathing"].choices if choice.name == "drive_shape")
    assert shape.default == "threshold"
    assert shape.check("sigmoid") == "sigmoid"
    for wrong in ("ramp", 3):
        with pytest.raises(InvalidInputError, match="Drive must be one of threshold, sigmoid; got "):
            shape.check(wrong)
