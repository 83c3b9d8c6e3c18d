"""The link. Oracles: RFC 1950 and 4648 through the standard library, the case itself, and the 2,000 characters asked for."""

import base64
import json
import re
import zlib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lagscape.case.case import MOST_LEVERS, Case, LeverSetting
from lagscape.case.case_file import LARGEST_FILE_BYTES, case_to_document
from lagscape.case.case_link import LINK_PREFIX, LONGEST_LINK, case_from_link, case_to_link
from lagscape.errors import CaseFormatError, InvalidInputError
from lagscape.loops.register import LOOPS
from support.any_case import any_case, longest_case

LINK = Case.from_starting_case("heart-failure-periodic").to_link()


def packed(text: str) -> str:
    return LINK_PREFIX + base64.urlsafe_b64encode(zlib.compress(text.encode())).decode().rstrip("=")


@given(any_case())
def test_a_link_brings_back_the_case_to_the_last_bit(case):
    link = case_to_link(case)
    assert case_from_link(link) == case
    assert [number.value.hex() for number in case_from_link(link).numbers.values()] == [
        number.value.hex() for number in case.numbers.values()
    ]
    assert re.fullmatch(r"[A-Za-z0-9._-]+", link)


@pytest.mark.parametrize("kind", LOOPS)
@pytest.mark.parametrize("seed", range(20))
def test_the_longest_case_stays_under_two_thousand_characters(kind, seed):
    case = longest_case(kind, seed)
    link = case_to_link(case)
    assert len(case.levers) == MOST_LEVERS
    assert len(link) < LONGEST_LINK
    assert case_from_link(link) == case


def test_a_link_holds_every_number_so_that_a_new_typical_value_changes_no_case():
    text = zlib.decompress(base64.urlsafe_b64decode(LINK.removeprefix(LINK_PREFIX) + "=="))
    assert json.loads(text) == case_to_document(Case.from_starting_case("heart-failure-periodic"))


@pytest.mark.parametrize("around", ["{}", "#{}", " {}\n", "https://intranet.example/lagscape/index.html?x=1#{}"])
def test_a_link_is_read_with_or_without_what_stands_before_it(around):
    assert case_from_link(around.format(LINK)) == Case.from_starting_case("heart-failure-periodic")


@given(st.data())
@settings(max_examples=5 * settings.default.max_examples)
def test_a_link_with_one_wrong_character_is_refused(data):
    at = data.draw(st.integers(0, len(LINK) - 1))
    other = data.draw(st.characters(codec="utf-8").filter(lambda letter: letter != LINK[at] and not letter.isspace() and letter != "#"))
    with pytest.raises(CaseFormatError):
        case_from_link(LINK[:at] + other + LINK[at + 1 :])


def test_a_link_cut_short_is_refused():
    for length in range(len(LINK)):
        with pytest.raises(CaseFormatError, match=r"The link (is damaged|holds no case)"):
            case_from_link(LINK[:length])


@pytest.mark.parametrize(
    ("link", "message"),
    [
        ("", "The link holds no case: the part after # must start with L1."),
        ("https://intranet.example/", "The link holds no case"),
        ("#L2.abcd", "The link was made by a newer Lagscape"),
        ("L1.", "The link is damaged"),
        ("L1.!!!!", "The link is damaged"),
        ("L1." + "A" * 100_000, "The link is damaged"),
        (LINK + "AAAA", "The link is damaged"),
        (packed("{}"), "This is not a case file"),
        (packed("["), "The case is not JSON"),
        (packed(json.dumps({"format": "lagscape-case", "version": 99})), "The case has version 99"),
    ],
)
def test_a_link_that_cannot_be_read_says_why(link, message):
    with pytest.raises(CaseFormatError, match=re.escape(message)):
        case_from_link(link)


def test_a_small_link_that_would_unpack_to_much_is_refused():
    # Highly compressible: 4 MB of spaces pack into a few thousand characters.
    bomb = packed(" " * 4_000_000)
    assert len(bomb) < 4 * LONGEST_LINK and LARGEST_FILE_BYTES < 4_000_000
    with pytest.raises(CaseFormatError, match="The link is damaged"):
        case_from_link(bomb)


def test_an_unknown_lever_in_a_link_is_refused_in_words():
    def check(kind: str, name: str, dose: float) -> None:
        raise InvalidInputError(f"No lever is called {name!r}.")

    link = Case.typical("breathing").with_levers(LeverSetting("magic_l_min", 1.0)).to_link()
    with pytest.raises(CaseFormatError, match="No lever is called 'magic_l_min'"):
        Case.from_link(link, check)
