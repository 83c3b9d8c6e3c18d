"""The case. Oracles: the specifications' own tables, the loops' own numbers, and the rules in the docstrings."""

import copy
import math
import pickle
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case.case import (
    DEFAULT_DISTURBANCES,
    MOST_LEVERS,
    Case,
    DisturbanceSetting,
    LeverSetting,
    Number,
    disturbance_units,
    specifications,
    starting_case,
)
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from support.any_case import any_case

EVERY_START = [(kind, item.name) for kind, loop in LOOPS.items() for item in loop.starting_cases]


@pytest.fixture
def case() -> Case:
    return Case.from_starting_case("heart-failure-periodic")


@pytest.mark.parametrize("kind", LOOPS)
def test_a_typical_case_holds_every_specification_at_its_typical_value(kind):
    case = Case.typical(kind)
    assert {name: number.value for name, number in case.numbers.items()} == {item.name: item.typical for item in LOOPS[kind].specifications}
    assert {number.basis for number in case.numbers.values()} == {Basis.TYPICAL}
    assert case.start() == case


@pytest.mark.parametrize(("kind", "name"), EVERY_START)
def test_a_starting_case_holds_its_numbers_and_typical_ones_for_the_rest(kind, name):
    case = Case.from_starting_case(name)
    item = starting_case(name)[1]
    assert case.kind == kind and case.started_from == name and case.start() == case
    for key, specification in specifications(kind).items():
        assert case.value(key) == item.numbers.get(key, specification.typical)
        assert case.numbers[key].basis is (Basis.TYPICAL if case.value(key) == specification.typical else Basis.ASSUMED)


@pytest.mark.parametrize(("kind", "name"), EVERY_START)
def test_the_loop_of_a_case_holds_its_numbers_and_choices(kind, name):
    case = Case.from_starting_case(name)
    loop = case.loop()
    assert type(loop) is LOOPS[kind]
    assert {key: getattr(loop, key) for key in case.numbers} == {key: number.value for key, number in case.numbers.items()}
    assert {key: getattr(loop, key) for key in case.choices} == dict(case.choices)


@pytest.mark.parametrize("kind", LOOPS)
def test_every_loop_has_a_default_disturbance_that_is_a_channel_of_it(kind):
    name, _ = DEFAULT_DISTURBANCES[kind]
    assert disturbance_units(kind)[name] == Case.typical(kind).loop().form().channels[name].unit


def test_levers_are_never_on_the_loop(case):
    assert case.with_levers(LeverSetting("oxygen_share", 0.5)).loop() == case.loop()


def test_a_changed_number_is_no_longer_measured_nor_typical(case):
    measured = case.with_number("lung_volume_l", 2.1, "measured", 0.05)
    assert measured.numbers["lung_volume_l"] == Number(2.1, Basis.MEASURED, 0.05)
    assert measured.with_number("lung_volume_l", 2.2).numbers["lung_volume_l"] == Number(2.2, Basis.ASSUMED, None)
    typical = Case.typical("breathing").with_number("lung_volume_l", 2.2)
    assert typical.numbers["lung_volume_l"] == Number(2.2, Basis.ASSUMED, None)


def test_a_number_that_stays_keeps_its_basis_and_spread(case):
    measured = case.with_number("lung_volume_l", 2.1, Basis.MEASURED, 0.05)
    assert measured.with_number("lung_volume_l", 2.1) == measured
    assert measured.with_number("lung_volume_l", 2.1, Basis.ASSUMED).numbers["lung_volume_l"].spread is None


def test_an_assumed_number_keeps_its_own_spread_when_it_moves(case):
    spread = case.with_number("lung_volume_l", 2.1, "assumed", 0.3).with_number("lung_volume_l", 2.5)
    assert spread.numbers["lung_volume_l"] == Number(2.5, Basis.ASSUMED, 0.3)


def test_spread_is_the_numbers_own_or_the_specifications_for_its_basis(case):
    item = specifications("breathing")["lung_volume_l"]
    assert case.spread("lung_volume_l") == item.spread
    assert case.with_number("lung_volume_l", 2.1, "measured").spread("lung_volume_l") == item.measured_spread
    assert case.with_number("lung_volume_l", 2.1, "measured", 0.02).spread("lung_volume_l") == 0.02


@pytest.mark.parametrize(("kind", "name"), EVERY_START)
def test_sensitivity_and_delay_are_written_back_into_the_numbers(kind, name):
    case = Case.from_starting_case(name)
    loop = case.loop()
    wanted_sensitivity, wanted_delay = 1.2 * float(loop.sensitivity), 1.1 * float(loop.delay)
    moved = case.with_sensitivity(wanted_sensitivity).with_delay(wanted_delay).loop()
    # Tolerance: one multiplication and one division each, so a few units in the last place.
    assert math.isclose(moved.sensitivity, wanted_sensitivity, rel_tol=1e-14)
    assert math.isclose(moved.delay, wanted_delay, rel_tol=1e-14)


def test_the_split_of_the_sensitivity_and_the_gap_of_the_delays_are_kept(case):
    moved = case.with_sensitivity(case.loop().sensitivity * 2.0).with_delay(30.0)
    # Oracle: the loop protocol, "the split between its paths kept" and "shifted by the same seconds"; doubling is exact.
    assert moved.value("peripheral_gain_l_min_mmhg") == 3.0 and moved.value("central_gain_l_min_mmhg") == 3.0
    assert moved.value("peripheral_delay_s") == 30.0
    assert math.isclose(moved.value("central_delay_s"), 33.7, rel_tol=1e-15)


def test_a_measured_delay_becomes_assumed_when_it_is_dragged_and_the_others_stay(case):
    measured = case.with_number("peripheral_delay_s", 24.3, "measured").with_number("lung_volume_l", 2.0, "measured")
    moved = measured.with_delay(20.0)
    assert moved.numbers["peripheral_delay_s"].basis is Basis.ASSUMED
    assert moved.numbers["lung_volume_l"].basis is Basis.MEASURED


def test_a_sensitivity_out_of_a_numbers_range_is_refused(case):
    with pytest.raises(InvalidInputError, match=r"Peripheral CO2 gain must be a number from 0 to 10"):
        case.with_sensitivity(100.0)


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf, "3", True, None])
def test_a_sensitivity_or_delay_that_is_no_positive_number_is_refused(case, value):
    with pytest.raises(InvalidInputError, match="must be finite and positive"):
        case.with_sensitivity(value)
    with pytest.raises(InvalidInputError, match=r"must be finite and positive \(s\)"):
        case.with_delay(value)
    with pytest.raises(InvalidInputError, match="must be finite and positive"):
        case.moved_to(sensitivity=value if value is not None else 0.0)


def test_moving_beyond_the_range_stops_at_it(case):
    # Oracle: both gains start at 1.5 and end at their maximum, the smaller of 10 and 20; the delay ends where a delay meets its own.
    moved = case.moved_to(sensitivity=1000.0, delay=1e6)
    # Tolerance: fifty halvings of a step of 1000 L/min/mmHg, and of 1e6 s.
    assert math.isclose(moved.loop().sensitivity, 20.0, abs_tol=1000.0 * 2.0**-49)
    assert math.isclose(moved.loop().delay, 60.0, abs_tol=1e6 * 2.0**-49)
    assert case.moved_to(2.5, 20.0) == case.with_sensitivity(2.5).with_delay(20.0)
    assert case.moved_to() == case


@given(any_case())
def test_equal_cases_are_equal_whatever_they_are_made_from(case):
    backwards = Case(
        case.kind,
        dict(reversed(case.numbers.items())),
        dict(reversed(case.choices.items())),
        list(case.levers),  # type: ignore[arg-type]
        case.disturbance,
        case.started_from,
    )
    assert backwards == case and hash(backwards) == hash(case)
    assert list(backwards.numbers) == list(case.numbers)
    assert copy.deepcopy(case) == case and pickle.loads(pickle.dumps(case)) == case


@given(st.floats(0.5, 8.0), st.floats(0.5, 8.0))
def test_cases_differ_when_a_number_differs_by_its_last_bit(first, second):
    one, two = (Case.typical("breathing").with_number("lung_volume_l", value, "measured") for value in (first, second))
    assert (one == two) == (first.hex() == second.hex())


def test_minus_zero_is_zero(case):
    assert math.copysign(1.0, case.with_number("inspired_pco2_mmhg", -0.0).value("inspired_pco2_mmhg")) == 1.0


def test_a_case_is_read_only(case):
    with pytest.raises(TypeError):
        case.numbers["lung_volume_l"] = Number(1.0)
    with pytest.raises(AttributeError):
        case.kind = "plain"


@pytest.mark.parametrize(
    ("name", "value", "message"),
    [
        ("lung_volume_l", 0.4, "Lung gas volume must be a number from 0.5 to 8 L; got 0.4."),
        ("lung_volume_l", math.nan, "Lung gas volume must be a number from 0.5 to 8 L; got nan."),
        ("lung_volume_l", "2", "Lung gas volume must be a number from 0.5 to 8 L; got '2'."),
        ("lung_volume_l", True, "Lung gas volume must be a number from 0.5 to 8 L; got True."),
        ("lung_volume_l", 10**400, "Lung gas volume must be a number from 0.5 to 8 L; got inf."),
        ("hair_colour", 1.0, "The breathing loop has no number 'hair_colour'; it has: co2_production_l_min"),
    ],
)
def test_a_number_that_breaks_its_rule_is_refused_in_words(case, name, value, message):
    with pytest.raises(InvalidInputError, match=re.escape(message)):
        case.with_number(name, value)


@pytest.mark.parametrize(
    ("spread", "message"),
    [
        (-0.1, "The spread of Lung gas volume must be a number from 0 to 2 of its natural logarithm; got -0.1."),
        (2.5, "The spread of Lung gas volume must be a number from 0 to 2 of its natural logarithm; got 2.5."),
        (math.inf, "The spread of Lung gas volume must be a number from 0 to 2 of its natural logarithm; got inf."),
        ("wide", "The spread of Lung gas volume must be a number from 0 to 2 of its natural logarithm; got 'wide'."),
    ],
)
def test_a_spread_that_breaks_its_rule_is_refused_in_words(case, spread, message):
    with pytest.raises(InvalidInputError, match=re.escape(message)):
        case.with_number("lung_volume_l", 2.0, "measured", spread)


def test_other_wrong_parts_are_refused_in_words(case):
    refused = [
        (lambda: Case.typical("kidney"), "The loop must be one of breathing, reflex, plain; got 'kidney'."),
        (lambda: Case.from_starting_case("me"), "No starting case is called 'me'; there are: healthy-asleep"),
        (lambda: case.with_number("lung_volume_l", 2.0, "guessed"), "The basis must be one of measured, assumed, typical"),
        (lambda: case.with_choice("drive_shape", "cubic"), "Drive must be one of threshold, sigmoid; got 'cubic'."),
        (lambda: case.with_choice("colour", "red"), "The breathing loop has no choice 'colour'"),
        (lambda: case.with_disturbance("earthquake", 1.0), "The breathing loop has no disturbance 'earthquake'"),
        (lambda: case.with_disturbance("sigh", math.nan), "The size of the sigh must be a number from -1e+06 to 1e+06; got nan."),
        (lambda: case.with_levers(LeverSetting("Mr Smith", 1.0)), "A lever's name must be small letters"),
        (lambda: case.with_levers(LeverSetting("oxygen", 2e6)), "The dose of oxygen must be a number from -1e+06 to 1e+06"),
        (lambda: case.with_levers(*[LeverSetting("oxygen", 1.0)] * 2), "The lever oxygen is laid twice"),
        (lambda: case.with_levers("oxygen"), "The levers must be LeverSetting items"),
        (
            lambda: case.with_levers(*(LeverSetting(f"lever_{index}", 1.0) for index in range(MOST_LEVERS + 1))),
            f"A case carries at most {MOST_LEVERS} levers; got {MOST_LEVERS + 1}.",
        ),
        (lambda: Case("breathing", {}), "The number co2_production_l_min is missing"),
        (lambda: Case("breathing", [1.0]), "The numbers must be a mapping"),
        (lambda: Case("breathing", dict.fromkeys(case.numbers, 1.0)), "CO2 production must be a Number"),
        (lambda: Case("plain", Case.typical("plain").numbers, {"tint": "blue"}), "The plain loop has no choice 'tint'; it has none."),
        (lambda: Case("plain", Case.typical("plain").numbers, {}, (), ("drive", 1.0)), "The disturbance must be a DisturbanceSetting"),
        (
            lambda: Case("plain", Case.typical("plain").numbers, started_from="ankle-calm"),
            "The starting case ankle-calm is of another loop than plain.",
        ),
    ]
    for make, message in refused:
        with pytest.raises(InvalidInputError, match=re.escape(message)):
            make()


def test_a_disturbance_can_be_none(case):
    quiet = Case(case.kind, case.numbers, case.choices, disturbance=None)
    assert quiet.disturbance is None
    assert quiet.with_disturbance("arousal", 3.0).disturbance == DisturbanceSetting("arousal", 3.0)
