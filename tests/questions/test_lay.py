"""Laying a measured recording on a case: the case's own cycle and loop gain are then the measured ones."""

from dataclasses import dataclass

import pytest

from lagscape import Case
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.questions.lay import lay_measurement
from lagscape.questions.standing import judge


@dataclass(frozen=True)
class Quartiles:
    median: float
    lower_quartile: float
    upper_quartile: float


CASE = Case.from_starting_case("heart-failure-periodic")


@pytest.mark.parametrize(("length", "gain"), [(29.0, 2.8), (45.0, 1.3), (60.0, 1.5), (75.0, 1.1)])
def test_the_laid_case_cycles_and_answers_as_measured(length, gain):
    laid = lay_measurement(CASE, Quartiles(length, 0.9 * length, 1.1 * length), Quartiles(gain, 0.95 * gain, 1.05 * gain))
    judged = judge(laid.case)
    # Oracle: the independent judgement of the laid case. The cycle is met to 1e-4 by construction; the loop gain is |L| at the measured
    # frequency, and the clipped cycle's frequency is within some per cent of the phase crossover's.
    assert judged.cycle_length == pytest.approx(length, rel=2e-4)
    assert judged.margins.loop_gain == pytest.approx(gain, rel=0.05)


def test_the_four_numbers_change_become_measured_and_keep_the_split():
    laid = lay_measurement(CASE, Quartiles(40.0, 36.0, 44.0), Quartiles(1.4, 1.3, 1.5))
    changed = {change.name for change in laid.changes}
    assert changed == {"peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg", "peripheral_delay_s", "central_delay_s"}
    assert all(laid.case.numbers[name].basis is Basis.MEASURED for name in changed)
    ratio = CASE.value("peripheral_gain_l_min_mmhg") / CASE.value("central_gain_l_min_mmhg")
    assert laid.case.value("peripheral_gain_l_min_mmhg") / laid.case.value("central_gain_l_min_mmhg") == pytest.approx(ratio, rel=1e-12)
    for name in set(CASE.numbers) - changed:
        assert laid.case.numbers[name] == CASE.numbers[name]


def test_without_apnoea_only_the_delay_is_laid():
    laid = lay_measurement(CASE, Quartiles(50.0, 45.0, 55.0), None)
    assert {change.name for change in laid.changes} == {"peripheral_delay_s", "central_delay_s"}
    assert laid.case.loop().sensitivity == CASE.loop().sensitivity
    assert any("could not be measured" in note for note in laid.notes)


def test_nothing_measured_is_refused():
    with pytest.raises(InvalidInputError, match="No cycle was measured"):
        lay_measurement(CASE, None, None)


def test_another_loop_is_refused():
    with pytest.raises(InvalidInputError, match="laid on a breathing case"):
        lay_measurement(Case.typical("reflex"), Quartiles(50.0, 45.0, 55.0), None)


def test_a_cycle_that_no_delay_in_range_gives_is_refused():
    with pytest.raises(InvalidInputError, match="does not fit this case"):
        lay_measurement(CASE, Quartiles(1000.0, 900.0, 1100.0), None)
