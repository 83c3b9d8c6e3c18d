"""The dose that is enough: at the dose the margin is there, just under it it is not."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case.case import Case, LeverSetting
from lagscape.errors import InvalidInputError
from lagscape.questions.enough import amount_words, margins_of_rows, smallest_dose, smallest_doses
from lagscape.questions.levers import LEVERS, judge_with_levers
from lagscape.questions.pair import smallest_pair

PERIODIC = Case.from_starting_case("heart-failure-periodic")
STARTS = ["heart-failure-periodic", "altitude-newcomer", "altitude-4559-night", "ankle-clonus", "plain-steep"]


def margin(case: Case, *settings: LeverSetting) -> float:
    """Gain margin by the judgement of one loop, a path that shares no batch with the answer."""
    names = {item.name for item in settings}
    judged = judge_with_levers(case.with_levers(*(item for item in case.levers if item.name not in names), *settings))
    assert judged is not None
    found = judged.margins
    return (found.gain_margin if found.gain_margin is not None else math.inf) if found.stable or found.gain_margin else 0.0


@pytest.mark.parametrize("start", STARTS)
@pytest.mark.parametrize("wanted", [1.0, 1.3, 2.5])
def test_the_dose_is_enough_and_a_little_less_is_not(start: str, wanted: float) -> None:
    # Oracle: judging again, one loop at a time. The dose is known to 4e-7 of the range; a millionth under it must fail.
    case = Case.from_starting_case(start)
    for name, answer in smallest_doses(case, wanted).items():
        lever = answer.lever
        if answer.dose is None:
            for dose in np.linspace(lever.minimum, lever.maximum, 9).tolist():
                assert margin(case, LeverSetting(name, dose)) < wanted
            assert answer.in_steps is None
            assert "no dose" in answer.sentence or "does not give" in answer.sentence
            continue
        assert answer.dose != 0.0
        assert margin(case, LeverSetting(name, answer.dose)) >= wanted * (1.0 - 1e-12)
        less = answer.dose - math.copysign(1e-6 * max(lever.maximum, -lever.minimum), answer.dose)
        assert margin(case, LeverSetting(name, less)) < wanted
        if answer.in_steps is not None:
            assert margin(case, LeverSetting(name, answer.in_steps)) >= wanted * (1.0 - 1e-12)
            assert answer.in_steps / lever.step == pytest.approx(round(answer.in_steps / lever.step), abs=1e-9)
            assert abs(answer.dose) <= abs(answer.in_steps) + 1e-9 * lever.step


@given(wanted=st.floats(0.7, 6.0))
def test_less_gain_is_enough_where_its_law_says(wanted: float) -> None:
    # Oracle: loop gain is proportional to the gain, so the dose is 1 - margin now / margin wanted. Tolerance 4e-7 of the range of 90 %.
    now = margin(PERIODIC, LeverSetting("oxygen_l_min", 0.0))
    answer = smallest_dose(PERIODIC, "chemoreflex_gain_fall_percent", wanted)
    assert answer.dose == pytest.approx(100.0 * (1.0 - now / wanted), abs=90.0 * 4e-7 + 1e-9)
    assert answer.dose >= 100.0 * (1.0 - now / wanted) - 1e-9


def test_none_is_needed_where_the_margin_is_there() -> None:
    answer = smallest_dose(Case.from_starting_case("healthy-asleep"), "oxygen_l_min", 1.3)
    assert answer.dose == answer.in_steps == 0.0
    assert answer.sentence == "Oxygen: none is needed, a gain margin of 1.3 is there already."


def test_a_dose_that_is_lost_again_says_so() -> None:
    # Oxygen in heart failure: past its best dose the slower central path is left alone and loop gain rises again. Oracle: judging again.
    best = smallest_dose(PERIODIC, "oxygen_l_min", 1.3)
    assert 1.0 < best.best_dose < 3.0
    wanted = 0.99 * best.best_gain_margin
    answer = smallest_dose(PERIODIC, "oxygen_l_min", wanted)
    assert answer.dose is not None and answer.lost_at is not None
    assert margin(PERIODIC, LeverSetting("oxygen_l_min", answer.dose)) >= wanted * (1.0 - 1e-12)
    assert margin(PERIODIC, LeverSetting("oxygen_l_min", answer.lost_at)) < wanted
    assert "lost again" in answer.sentence


def test_the_other_levers_stay_on_the_case() -> None:
    case = PERIODIC.with_levers(LeverSetting("acetazolamide_mg_day", 500.0), LeverSetting("oxygen_l_min", 5.0))
    alone, beside = smallest_dose(PERIODIC, "oxygen_l_min"), smallest_dose(case, "oxygen_l_min")
    assert alone.dose is not None and beside.dose is not None and beside.dose < alone.dose
    assert margin(case, LeverSetting("oxygen_l_min", beside.dose)) >= 1.3 * (1.0 - 1e-12)


def test_rows_are_judged_as_single_loops_are() -> None:
    # Oracle: one loop at a time. Tolerance: Newton on the crossover stops at a relative 2e-8, whose square is rounding.
    row = {"oxygen_l_min": np.array([0.0, 0.4, 2.0]), "cpap_cmh2o": np.array([5.0, 0.0, 10.0])}
    other = {"added_dead_space_ml": np.array([250.0, 500.0])}
    found = margins_of_rows(PERIODIC, [row, other])
    for doses, margins in ((row, found[0]), (other, found[1])):
        for index, value in enumerate(margins.tolist()):
            settings = (LeverSetting(name, float(values[index])) for name, values in doses.items())
            assert value == pytest.approx(margin(PERIODIC, *settings), rel=1e-9)


def test_a_row_with_impossible_doses_still_answers() -> None:
    # 5 kg at 1 m ask for 49 N m of a muscle that has 10: impossible, so no margin; the others are judged.
    case = Case.from_starting_case("ankle-clonus").with_number("load_distance_m", 1.0)
    found = margins_of_rows(case, [{"held_mass_rise_kg": np.array([0.0, 0.5, 5.0])}])[0]
    assert found[0] > 0.0 and found[1] > 0.0 and found[2] == 0.0


@pytest.mark.parametrize(("start", "wanted"), [("heart-failure-periodic", 8.0), ("plain-steep", 6.0)])
def test_the_pair_is_enough_where_no_single_lever_is(start: str, wanted: float) -> None:
    # Oracle: judging again; and a plain search over a coarser net of all pairs finds no smaller sum.
    case = Case.from_starting_case(start)
    assert all(answer.dose is None for answer in smallest_doses(case, wanted).values())
    pair = smallest_pair(case, wanted)
    assert len(pair.settings) == 2 and pair.reached is not None
    assert margin(case, *pair.settings) == pytest.approx(pair.reached, rel=1e-9)
    assert pair.reached >= wanted
    levers = LEVERS[case.kind]
    total = sum(abs(item.dose) / levers[item.name].maximum for item in pair.settings)
    share = np.linspace(0.0, 1.0, 21)
    u, v = (axis.ravel() for axis in np.meshgrid(share, share))
    names = list(levers)
    for i, first in enumerate(names):
        for second in names[i + 1 :]:
            row = {first: u * levers[first].maximum, second: v * levers[second].maximum}
            enough = margins_of_rows(case, [row])[0] >= wanted
            assert not enough.any() or (u + v)[enough].min() >= total - 1e-9


def test_a_pair_is_not_given_where_one_lever_or_none_is_enough() -> None:
    one = smallest_pair(PERIODIC, 1.3)
    assert one.settings == () and one.sentence.startswith("One lever is enough") and "Oxygen (0.45" in one.sentence
    none = smallest_pair(Case.from_starting_case("healthy-asleep"), 1.3)
    assert none.settings == () and none.sentence.startswith("No lever is needed")


def test_no_pair_says_so() -> None:
    answer = smallest_pair(Case.from_starting_case("plain-steep"), 1000.0)
    assert answer.settings == () and answer.reached is None and "no pair" in answer.sentence


def test_a_said_dose_is_never_less_than_enough() -> None:
    lever = LEVERS["breathing"]["oxygen_l_min"]
    assert amount_words(lever, 0.45432) == "0.455 L/min"
    assert amount_words(lever, 2.0) == "2 L/min"
    assert amount_words(LEVERS["breathing"]["metabolic_rate_rise_percent"], -12.34) == "−12.4 %"


@pytest.mark.parametrize("wanted", [0.0, -1.0, math.inf, math.nan, True, "1.3"])
def test_a_margin_that_is_none_is_refused(wanted: object) -> None:
    for ask in (lambda: smallest_dose(PERIODIC, "oxygen_l_min", wanted), lambda: smallest_pair(PERIODIC, wanted)):  # type: ignore[arg-type]
        with pytest.raises(InvalidInputError, match="gain margin asked for must be finite and positive"):
            ask()


def test_an_unknown_lever_is_refused() -> None:
    with pytest.raises(InvalidInputError, match="has no lever 'magic'"):
        smallest_dose(PERIODIC, "magic")
