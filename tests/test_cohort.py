"""Tables of cases. Oracle: the case that the row says, made by hand; the csv module reads back what is written."""

import csv
import io
import re

import pytest

from lagscape.case.case import Case
from lagscape.cohort import analysed_rows, flat, read_cohort, write_cohort
from lagscape.errors import CaseFormatError, InvalidInputError


def cases(text: str) -> list:
    return list(read_cohort(io.StringIO(text)))


def test_a_row_is_the_base_case_with_its_cells_laid_on_it():
    rows = cases(
        "loop,starting_case,resting_paco2_mmhg,drive_shape\nbreathing,,38.5,\n,heart-failure-periodic,35,sigmoid\n,,,\n\nbreathing\n"
    )
    assert rows == [
        Case.typical("breathing").with_number("resting_paco2_mmhg", 38.5),
        Case.from_starting_case("heart-failure-periodic").with_number("resting_paco2_mmhg", 35.0).with_choice("drive_shape", "sigmoid"),
        Case.typical("breathing"),
        Case.typical("breathing"),
    ]


@pytest.mark.parametrize(
    "text", ["\ufeffresting_paco2_mmhg;lung_volume_l\r\n38,5;2,1\r\n", "resting_paco2_mmhg\tlung_volume_l\n38,5\t2.1\n"]
)
def test_semicolons_tabs_and_decimal_commas_are_read(text):
    expected = Case.typical("breathing").with_number("resting_paco2_mmhg", 38.5).with_number("lung_volume_l", 2.1)
    assert cases(text) == [expected]


def test_digits_are_kept_to_the_last_bit():
    assert cases("lung_volume_l\n2.3000000000000003\n")[0].value("lung_volume_l").hex() == (2.3000000000000003).hex()


@pytest.mark.parametrize(
    ("row", "message"),
    [
        ("breathing,,99", "Resting PaCO2 must be a number from 15 to 80 mmHg; got 99."),
        ("breathing,,high", "Resting PaCO2 must be a number from 15 to 80 mmHg; got 'high'."),
        ("breathing,,nan", "Resting PaCO2 must be a number from 15 to 80 mmHg; got nan."),
        ("kidney,,38", "The loop must be one of breathing, reflex, plain; got 'kidney'."),
        (",nobody,38", "No starting case is called 'nobody'"),
        ("reflex,healthy-asleep,", "The starting case healthy-asleep is of the breathing loop, not reflex."),
        ("reflex,,38", "The reflex loop has no number 'resting_paco2_mmhg'"),
        ("breathing,,38,5", "The row has 4 cells under 3 columns."),
    ],
)
def test_a_bad_row_is_its_error_and_the_others_stay(row, message):
    rows = cases(f"loop,starting_case,resting_paco2_mmhg\n{row}\n,,40\n")
    assert isinstance(rows[0], InvalidInputError) and message in str(rows[0])
    assert rows[1] == Case.typical("breathing")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "The cohort has no header"),
        ("\n \n", "The cohort has no header"),
        ("loop,surname\nbreathing,x\n", "The cohort has the unknown column 'surname'"),
        ("loop," + "x" * 99 + "\n", "The cohort has the unknown column 'xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx...'"),
        ("loop,lung_volume_l,lung_volume_l\n", "The cohort has the column lung_volume_l twice."),
        ("loop,\n", "The cohort has the unknown column ''"),
        ("loop\n" + "9" * 1_000_001 + "\n", "The cohort has a line longer than 1000000 characters"),
    ],
)
def test_a_table_that_cannot_be_read_is_refused_in_words(text, message):
    with pytest.raises(CaseFormatError, match=re.escape(message)):
        cases(text)


def test_results_come_out_row_by_row_with_every_digit():
    def analyse(case: Case) -> dict:
        if case.value("lung_volume_l") == 2.0:
            raise InvalidInputError("Too small, said the test.")
        return {
            "standing": "rings",
            "loop_gain": case.value("lung_volume_l") / 3.0,
            "gain_margin": None,
            "equilibrium": {"paco2_mmhg": 40.0},
        }

    out = io.StringIO()
    counts = write_cohort(analysed_rows(cases("lung_volume_l\n2.2\n2.0\n99\n"), analyse), out)
    assert counts == (3, 2)
    assert out.getvalue().splitlines()[0] == "row,loop,standing,loop_gain,gain_margin,equilibrium_paco2_mmhg,error"
    first, second, third = csv.DictReader(io.StringIO(out.getvalue()))
    assert (first["row"], first["loop"], first["standing"], first["gain_margin"], first["error"]) == ("1", "breathing", "rings", "", "")
    assert float(first["loop_gain"]).hex() == (2.2 / 3.0).hex() and first["equilibrium_paco2_mmhg"] == "40.0"
    assert second["error"] == "Too small, said the test." and second["standing"] == ""
    assert third["row"] == "3" and "Lung gas volume must be a number" in third["error"]


def test_nested_figures_become_one_level():
    assert flat({"a": 1, "b": {"c": 2, "d": {"e": 3}}, "f": [{"g": 4}, 5]}) == {"a": 1, "b_c": 2, "b_d_e": 3, "f_1_g": 4, "f_2": 5}
