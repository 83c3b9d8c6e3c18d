"""The published schema. Oracle: the jsonschema library (draft 2020-12), which shares no code with the reader."""

import copy
import json
import sys

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lagscape.case.case import Case
from lagscape.case.case_file import case_from_document, case_to_document
from lagscape.case.schema import case_schema, published_schema, schema_text
from lagscape.errors import CaseFormatError
from lagscape.loops.register import LOOPS
from support.any_case import any_case, longest_case

if sys.platform == "emscripten":
    pytest.skip("the jsonschema library is not in the browser's bundle", allow_module_level=True)

import jsonschema

VALIDATOR = jsonschema.Draft202012Validator(published_schema())

WRONG = st.sampled_from([None, True, "1", [], {}, -1, 0, 1e7, 1e-300, "typical", "measured", "threshold", "sigh", "plain", 2.4])


def test_the_published_schema_is_a_schema():
    jsonschema.Draft202012Validator.check_schema(published_schema())
    assert published_schema()["$schema"] == "https://json-schema.org/draft/2020-12/schema"


def test_the_published_schema_is_the_one_the_specifications_give():
    # If this fails: python -m lagscape.case.schema > py/lagscape/case/case.schema.json, and think of the version.
    assert published_schema() == case_schema() == json.loads(schema_text())


@pytest.mark.parametrize("kind", LOOPS)
def test_the_schema_says_each_numbers_range_and_unit(kind):
    branch = next(item for item in published_schema()["oneOf"] if item["properties"]["loop"]["const"] == kind)
    numbers = branch["properties"]["numbers"]["properties"]
    assert list(numbers) == [item.name for item in LOOPS[kind].specifications]
    for item in LOOPS[kind].specifications:
        value = numbers[item.name]["properties"]["value"]
        assert (value["minimum"], value["maximum"]) == (item.minimum, item.maximum)
        assert item.unit in numbers[item.name]["description"]


@given(any_case())
def test_every_case_written_is_valid(case):
    VALIDATOR.validate(case_to_document(case))


def places(value, path=()):
    yield path
    children = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, child in children:
        yield from places(child, (*path, key))


@given(st.sampled_from([longest_case(kind, 0) for kind in LOOPS] + [Case.typical(kind) for kind in LOOPS]), st.data())
@settings(max_examples=5 * settings.default.max_examples)
def test_the_reader_and_the_schema_agree_on_what_is_a_case(case, data):
    """Any one place of a good document replaced, removed or given a key too many: both accept or both refuse."""
    document = copy.deepcopy(case_to_document(case))
    path = data.draw(st.sampled_from([place for place in places(document) if place]))
    parent = document
    for key in path[:-1]:
        parent = parent[key]
    change = data.draw(st.sampled_from(["replace", "remove", "add"]))
    if change == "replace":
        parent[path[-1]] = data.draw(WRONG)
    elif change == "remove":
        del parent[path[-1]]
    elif isinstance(parent, dict):
        parent["patient_name"] = "x"
    # Version 0 is read by way of its migration, and levers laid twice are a rule that a schema cannot say.
    if document.get("version") in (0, False) and document.get("version") is not None:
        return
    names = (
        [item.get("name") for item in document.get("levers") or [] if isinstance(item, dict)]
        if isinstance(document.get("levers"), list)
        else []
    )
    if any(names.count(name) > 1 for name in names):
        return
    try:
        case_from_document(document)
        read = True
    except CaseFormatError:
        read = False
    assert read == VALIDATOR.is_valid(document), list(VALIDATOR.iter_errors(document))[:1]


def test_a_name_or_a_date_of_birth_has_no_place():
    for path in [(), ("numbers", "delay_s"), ("disturbance",), ("choices",), ("numbers",)]:
        for key in ("name_of_patient", "date_of_birth", "nhs_number", "note"):
            document = case_to_document(Case.typical("plain"))
            target = document
            for step in path:
                target = target[step]
            target[key] = "x"
            assert not VALIDATOR.is_valid(document)
            with pytest.raises(CaseFormatError, match=key):
                case_from_document(document)
