"""The specifications' own rules. Oracle: what each field is said to mean."""

import dataclasses
import math

import pytest

from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS

EVERY = [item for loop in LOOPS.values() for item in loop.specifications]
CHOICES = [item for loop in LOOPS.values() for item in loop.choices]


@pytest.mark.parametrize("item", EVERY, ids=lambda item: item.name)
def test_a_specification_is_whole(item):
    assert item.minimum <= item.typical_low <= item.typical <= item.typical_high <= item.maximum
    assert item.spread > 0.0 and item.distribution in ("normal", "lognormal")
    assert item.measured_spread is None or 0.0 < item.measured_spread <= item.spread
    assert all([item.label, item.symbol, item.group, item.meaning, item.source])
    assert item.distribution == "normal" or item.typical > 0.0


@pytest.mark.parametrize("loop", LOOPS.values(), ids=lambda loop: loop.kind)
def test_names_are_the_loops_own_fields_and_none_is_left_out(loop):
    names = [item.name for item in loop.specifications]
    assert len(set(names)) == len(names)
    fields = {item.name for item in dataclasses.fields(loop)} - {item.name for item in loop.choices} - {"line_ventilation_l_min", "line_po2_mmhg"}
    assert set(names) == fields


@pytest.mark.parametrize("item", EVERY, ids=lambda item: item.name)
def test_the_ends_of_a_range_are_inside_and_the_next_floats_are_not(item):
    assert item.check(item.minimum) == item.minimum and item.check(item.maximum) == item.maximum
    for value in (math.nextafter(item.minimum, -math.inf), math.nextafter(item.maximum, math.inf), math.nan, -math.inf, 10**400):
        with pytest.raises(InvalidInputError, match="must be a number from"):
            item.check(value)


def test_a_measured_number_spreads_by_its_measurement():
    item = next(item for item in EVERY if item.measured_spread is not None)
    assert item.spread_for(Basis.MEASURED) == item.measured_spread
    assert item.spread_for(Basis.ASSUMED) == item.spread_for(Basis.TYPICAL) == item.spread


@pytest.mark.parametrize("choice", CHOICES, ids=lambda item: item.name)
def test_a_choice_takes_its_options_only(choice):
    assert choice.default == next(iter(choice.options))
    assert all(choice.check(option) == option for option in choice.options)
    for value in ("none of these", None, 1, ["no"]):
        with pytest.raises(InvalidInputError, match="must be one of"):
            choice.check(value)
