"""Older versions. Oracles: the documented layout of each version; for the mechanism, a made-up chain of versions."""

import json
import re

import pytest

from lagscape.case.case import Case
from lagscape.case.case_file import case_from_document, case_from_json, case_to_document
from lagscape.case.migrate import MIGRATIONS, NEWEST_VERSION, OLDEST_VERSION, migrated
from lagscape.case.parameters import Basis
from lagscape.errors import CaseFormatError

SHORT = {"format": "lagscape-case", "version": 0, "loop": "breathing", "numbers": {"resting_paco2_mmhg": 38, "lung_volume_l": 2.4}}


def test_there_is_a_way_from_every_version_to_the_next():
    assert sorted(MIGRATIONS) == list(range(OLDEST_VERSION, NEWEST_VERSION))


def test_the_short_form_takes_typical_numbers_for_what_it_leaves_out():
    case = case_from_json(json.dumps(SHORT))
    expected = Case.typical("breathing").with_number("resting_paco2_mmhg", 38.0)
    assert case == expected
    assert case.numbers["resting_paco2_mmhg"].basis is Basis.ASSUMED
    assert case.numbers["lung_volume_l"].basis is Basis.TYPICAL


def test_the_short_form_starts_from_a_starting_case_where_it_names_one():
    document = {"format": "lagscape-case", "version": 0, "starting_case": "ankle-clonus", "numbers": {"held_mass_kg": 1.0}}
    assert case_from_document(document) == Case.from_starting_case("ankle-clonus").with_number("held_mass_kg", 1.0)


def test_the_short_form_may_say_settings_levers_and_disturbance():
    document = {
        **SHORT,
        "choices": {"drive_shape": "sigmoid"},
        "levers": [{"name": "co2_mmhg", "dose": 2.0}],
        "disturbance": None,
    }
    case = case_from_document(document)
    assert dict(case.choices) == {"drive_shape": "sigmoid", "delays_follow_flow": "no", "gases": "co2"}
    assert case.levers[0].dose == 2.0 and case.disturbance is None


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"numbers": {"shoe_size": 44}}, "The breathing loop has no number 'shoe_size'"),
        ({"numbers": {"lung_volume_l": "big"}}, "Lung gas volume must be a number from 0.5 to 8 L; got 'big'."),
        ({"numbers": {"lung_volume_l": {"value": 2.0}}}, "Lung gas volume must be a number from 0.5 to 8 L; got {'value': 2.0}."),
        ({"numbers": [1]}, "The numbers of a case must be an object"),
        ({"numbers": None}, "The numbers of a case must be an object"),
        ({"loop": "kidney"}, "The loop must be one of breathing, reflex, plain; got 'kidney'."),
        ({"loop": None}, "The loop must be one of breathing, reflex, plain; got None."),
        ({"starting_case": "nobody"}, "No starting case is called 'nobody'"),
        ({"starting_case": ["healthy-asleep"]}, "No starting case is called ['healthy-asleep']"),
        ({"starting_case": "ankle-calm"}, "the starting case ankle-calm is of the reflex loop."),
        ({"choices": []}, "The choices of a case must be a JSON object; got []."),
        ({"surname": "x"}, "The case holds the unknown key 'surname'"),
    ],
)
def test_a_broken_short_form_is_refused_in_words(change, message):
    with pytest.raises(CaseFormatError, match=re.escape(message)):
        case_from_document({**SHORT, **change})


def test_a_document_goes_through_every_version_in_order():
    chain = {
        0: lambda document: {**document, "path": [*document["path"], document["version"]]},
        1: lambda document: {**document, "path": [*document["path"], document["version"]], "version": 77},
        2: lambda document: {**document, "path": [*document["path"], document["version"]]},
    }
    assert migrated({"version": 0, "path": []}, chain, newest=3) == {"version": 3, "path": [0, 1, 2]}
    assert migrated({"version": 2.0, "path": []}, chain, newest=3) == {"version": 3, "path": [2]}


def test_the_newest_version_is_left_as_it_is():
    document = case_to_document(Case.typical("plain"))
    assert migrated(document) == document
    assert document["version"] == NEWEST_VERSION


@pytest.mark.parametrize(
    ("version", "message"),
    [
        (NEWEST_VERSION + 1, f"this Lagscape reads up to version {NEWEST_VERSION}; open it in a newer Lagscape."),
        (-3, "which was never a version of a case"),
        (None, "The case has no version"),
        ("0", "The case has no version"),
    ],
)
def test_a_version_that_cannot_be_read_is_refused_in_words(version, message):
    with pytest.raises(CaseFormatError, match=re.escape(message)):
        migrated({"version": version})
