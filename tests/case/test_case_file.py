"""The case file. Oracles: the case itself to the last bit, RFC 8259, and the sentence a user must see."""

import json
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lagscape.case.case import Case, LeverSetting
from lagscape.case.case_file import LARGEST_FILE_BYTES, case_from_json, case_to_document, case_to_json, read_case_file, size_key
from lagscape.errors import CaseFormatError, InvalidInputError
from support.any_case import any_case

GOOD = (
    Case.from_starting_case("healthy-asleep").with_number("lung_volume_l", 2.3, "measured", 0.1).with_levers(LeverSetting("co2_mmhg", 1.0))
)


def edited(*path_and_value) -> str:
    """The good file's text with one place changed."""
    *path, value = path_and_value
    document = case_to_document(GOOD)
    target = document
    for key in path[:-1]:
        target = target[key]
    target[path[-1]] = value
    return json.dumps(document)


@given(any_case())
def test_a_file_brings_back_the_case_to_the_last_bit(case):
    text = case_to_json(case)
    again = case_from_json(text)
    assert again == case and case_to_json(again) == text
    assert [number.value.hex() for number in again.numbers.values()] == [number.value.hex() for number in case.numbers.values()]


def test_a_file_is_read_as_text_as_bytes_and_with_a_byte_order_mark(tmp_path):
    text = case_to_json(GOOD)
    path = tmp_path / "case.json"
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())
    assert case_from_json(text.encode()) == case_from_json("\ufeff" + text) == read_case_file(path) == GOOD


def test_key_names_carry_the_units():
    document = case_to_document(GOOD)
    assert document["disturbance"] == {"name": "sigh", "size_l_min": 15.0}
    assert document["numbers"]["lung_volume_l"] == {"value": 2.3, "basis": "measured", "spread_of_log": 0.1}
    assert size_key("N m") == "size_n_m" and size_key("mmHg") == "size_mmhg" and size_key("") == "size"


def test_a_whole_number_is_a_number():
    assert case_from_json(edited("numbers", "lung_volume_l", "value", 2)).value("lung_volume_l") == 2.0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "The case is not JSON: expecting value at line 1, column 1."),
        ("{", "The case is not JSON"),
        ("[]", "This is not a case file"),
        ('"text"', "This is not a case file"),
        ('{"format": "other", "version": 1}', "This is not a case file"),
        ('{"format": "lagscape-case"}', "The case has no version"),
        (b"\xff\xfe\x00", "The file is not UTF-8 text"),
        (" " * (LARGEST_FILE_BYTES + 1), "The file is longer than the 65536 bytes"),
        ("é" * (LARGEST_FILE_BYTES // 2 + 1), "The file is longer than the 65536 bytes"),
        ("[" * 60000, "The case is not a case file: it holds far more objects and lists than a case has."),
        ('{"a":' * 299 + "1" + "}" * 299, "This is not a case file"),
        ('{"a": NaN}', "The case holds NaN, which is not a number of JSON"),
        ('{"a": -Infinity}', "The case holds -Infinity, which is not a number of JSON"),
        ('{"a": 1, "b": 2, "a": 3}', "The case holds the key 'a' twice"),
        ('{"\ud800": 1}', "This is not a case file"),
        (edited("version", 99), "The case has version 99, and this Lagscape reads up to version 1; open it in a newer Lagscape."),
        (edited("version", -1), "The case has version -1, which was never a version"),
        (edited("version", "1"), "The case has no version"),
        (edited("version", True), "The case has no version"),
        (edited("version", 1.5), "The case has no version"),
        (edited("patient", "A. Nyone"), "The case holds the unknown key 'patient'; allowed are: format, version, loop"),
        (edited("loop", "kidney"), "The case cannot be read: The loop must be one of breathing, reflex, plain; got 'kidney'."),
        (edited("loop", ["breathing"]), "The loop must be one of breathing"),
        (edited("loop", "plain"), "The plain loop has no number 'co2_production_l_min'; it has: production_per_s"),
        (edited("starting_case", "me"), "No starting case is called 'me'"),
        (edited("starting_case", 3), "The starting_case of a case must be a text or null; got 3."),
        (edited("numbers", [1]), "The numbers of a case must be a JSON object; got [1]."),
        (edited("numbers", {}), "The number co2_production_l_min is missing"),
        (edited("numbers", "shoe_size", {"value": 1, "basis": "typical"}), "The breathing loop has no number 'shoe_size'"),
        (edited("numbers", "lung_volume_l", 2.0), "The number 'lung_volume_l' must be an object with value and basis; got 2.0."),
        (edited("numbers", "lung_volume_l", {"value": 2.0}), "The number 'lung_volume_l' lacks the key 'basis'."),
        (edited("numbers", "lung_volume_l", "note", "x"), "The number 'lung_volume_l' holds the unknown key 'note'"),
        (edited("numbers", "lung_volume_l", "spread", 0.1), "The number 'lung_volume_l' holds the unknown key 'spread'"),
        (edited("numbers", "lung_volume_l", "spread_of_log", None), "The spread_of_log of 'lung_volume_l' must be a number"),
        (edited("numbers", "lung_volume_l", "value", "2.0"), "Lung gas volume must be a number from 0.5 to 8 L; got '2.0'."),
        (edited("numbers", "lung_volume_l", "value", None), "Lung gas volume must be a number from 0.5 to 8 L; got None."),
        (edited("numbers", "lung_volume_l", "value", 99), "Lung gas volume must be a number from 0.5 to 8 L; got 99."),
        (edited("numbers", "lung_volume_l", "basis", "guess"), "The basis must be one of measured, assumed, typical; got 'guess'."),
        (edited("numbers", "lung_volume_l", "basis", {}), "The basis must be one of measured, assumed, typical; got {}."),
        (edited("choices", "drive_shape", "cubic"), "Drive must be one of threshold, sigmoid; got 'cubic'."),
        (edited("choices", {}), "The choices of the case lack 'drive_shape'."),
        (edited("choices", None), "The choices of a case must be a JSON object; got None."),
        (edited("levers", {}), "The levers of a case must be a JSON array; got {}."),
        (edited("levers", ["oxygen"]), "A lever must be an object with name and dose; got 'oxygen'."),
        (edited("levers", [{"name": "oxygen"}]), "A lever lacks the key 'dose'."),
        (edited("levers", [{"name": "O. Xygen", "dose": 1}]), "A lever's name must be small letters"),
        (edited("levers", [{"name": "oxygen", "dose": "1"}]), "The dose of oxygen must be a number"),
        (edited("disturbance", "sigh"), "The disturbance must be an object or null; got 'sigh'."),
        (edited("disturbance", {"name": "sigh"}), "The disturbance lacks the key 'size_l_min'."),
        (edited("disturbance", {"name": "sigh", "size_mmhg": 1}), "The disturbance holds the unknown key 'size_mmhg'"),
        (edited("disturbance", {"name": ["sigh"], "size_l_min": 1}), "The disturbance must be one of sigh, arousal, inspired_pco2"),
        (edited("loop", 10**30), "The loop must be one of"),
    ],
)
def test_a_file_that_cannot_be_read_is_refused_in_one_sentence(text, message):
    with pytest.raises(CaseFormatError, match=re.escape(message)) as refusal:
        case_from_json(text)
    assert "\n" not in str(refusal.value) and len(str(refusal.value)) < 600


@pytest.mark.parametrize("digits", ["1e999", "9" * 5000, "-1e999"])
def test_a_number_beyond_the_largest_float_is_refused(digits):
    text = case_to_json(GOOD).replace("2.3", digits)
    with pytest.raises(CaseFormatError, match=r"Lung gas volume must be a number from 0.5 to 8 L; got -?inf"):
        case_from_json(text)


def test_levers_are_shown_to_the_check_and_its_refusal_is_the_files():
    seen = []
    case_from_json(case_to_json(GOOD), lambda *lever: seen.append(lever))
    assert seen == [("breathing", "co2_mmhg", 1.0)]

    def refuse(kind: str, name: str, dose: float) -> None:
        raise InvalidInputError(f"No lever is called {name!r}.")

    with pytest.raises(CaseFormatError, match="The case cannot be read: No lever is called 'co2_mmhg'"):
        case_from_json(case_to_json(GOOD), refuse)


@given(st.binary(max_size=300) | st.text(max_size=300))
@settings(max_examples=5 * settings.default.max_examples)
def test_whatever_comes_in_is_refused_in_words(garbage):
    with pytest.raises(CaseFormatError):
        case_from_json(garbage)


@given(st.data())
@settings(max_examples=5 * settings.default.max_examples)
def test_a_damaged_file_is_a_case_or_is_refused(data):
    """One byte changed: never any other error than our own, never a case that breaks a rule."""
    content = bytearray(case_to_json(GOOD).encode())
    content[data.draw(st.integers(0, len(content) - 1))] = data.draw(st.integers(0, 255))
    try:
        case = case_from_json(bytes(content))
    except CaseFormatError:
        return
    assert case_from_json(case_to_json(case)) == case
