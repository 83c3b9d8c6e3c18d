"""The response to a disturbance, its bracket, and the boundary map, against independent routes."""

import numpy as np
import pytest

from lagscape import Case
from lagscape.case.case import DEFAULT_DISTURBANCES
from lagscape.case.parts import LeverSetting, disturbance_units
from lagscape.loops.register import LOOPS
from lagscape.questions.boundary_map import cycle_contours, map_of, standing_point, window_of
from lagscape.questions.levers import judge_with_levers
from lagscape.questions.response import DISTURBANCES, cycle_bracket, respond, run_length
from lagscape.questions.standing import judge


@pytest.mark.parametrize("kind", list(LOOPS))
def test_every_offered_disturbance_is_a_channel_of_its_loop(kind):
    assert set(DISTURBANCES[kind]) <= set(disturbance_units(kind))
    assert DEFAULT_DISTURBANCES[kind][0] in DISTURBANCES[kind]


def test_the_bracket_measures_the_cycle_that_harmonic_balance_gives():
    case = Case.from_starting_case("heart-failure-periodic")
    judged = judge(case)
    response = respond(case, judged, 900.0, points=3601)
    start, end = cycle_bracket(response, judged.cycle_length)
    # Two independent routes. The trace is sampled every 0.25 s, so a crest is placed to a sample at either end.
    assert end - start == pytest.approx(judged.cycle_length, abs=0.5)


def test_a_steady_trace_has_no_bracket():
    case = Case.from_starting_case("healthy-asleep").with_disturbance("sigh", 0.0)
    judged = judge(case)
    response = respond(case, judged, 300.0)
    assert np.ptp(response.signals[0].values) < 1e-9
    assert cycle_bracket(response, judged.cycle_length) is None


@pytest.mark.parametrize("name", ["healthy-asleep", "heart-failure-periodic", "altitude-newcomer", "plain-steep"])
def test_a_run_shows_some_cycles_in_round_seconds(name):
    judged = judge(Case.from_starting_case(name))
    assert 2.0 <= run_length(judged) / judged.cycle_length <= 20.0


@pytest.mark.parametrize("name", ["healthy-asleep", "heart-failure-periodic", "altitude-newcomer", "plain-gentle", "ankle-clonus"])
def test_the_drawn_boundary_is_where_the_judgement_turns(name):
    # Oracle: the judgement (roots, Nyquist's count) on both sides of the drawn line, 1 % away; the line is linear between 161 points.
    case = Case.from_starting_case(name)
    drawn = map_of(case, window_of(case))
    inside = np.flatnonzero(drawn.critical < 0.98 * drawn.window.sensitivity_high)[5:-5:30]
    assert inside.size >= 2
    for i in inside:
        point = case.loop().with_delay(float(drawn.delays[i]))
        from lagscape.questions.standing import judge_loop

        assert judge_loop(point.with_sensitivity(1.01 * float(drawn.critical[i]))).standing == "hunts"
        assert judge_loop(point.with_sensitivity(0.99 * float(drawn.critical[i]))).standing != "hunts"


def test_the_window_holds_the_dot_and_stays_while_it_moves_a_little():
    case = Case.from_starting_case("heart-failure-periodic")
    window = window_of(case)
    assert window.delay_low < case.loop().delay < window.delay_high
    assert window_of(case.with_delay(1.05 * case.loop().delay)) == window
    far = case.with_delay(55.0)
    assert window_of(far).delay_high > 55.0


def test_a_contour_lies_where_the_dominant_oscillation_has_its_seconds():
    # Oracle: the polished roots of single loops; the contour is linear between grid points 1 s of delay apart.
    case = Case.from_starting_case("heart-failure-periodic")
    lines = cycle_contours(case, window_of(case))
    assert len(lines) >= 3
    for line in lines:
        middle = int(np.flatnonzero(np.isfinite(line.delays))[len(line.delays) // 3])
        loop = case.loop().with_delay(float(line.delays[middle])).with_sensitivity(float(line.sensitivities[middle]))
        from lagscape.questions.standing import judge_loop

        assert judge_loop(loop).linear_cycle_length == pytest.approx(line.period, rel=2e-3)


@pytest.mark.parametrize(("dose", "standing"), [(100.0, "hunts"), (700.0, "rings")])
def test_a_case_with_levers_stands_on_the_true_side_of_the_drawn_boundary(dose, standing):
    # Oracle: the judgement of the case with its lever; the drawn line is linear between 161 points, so that 1e-3 of it may be missed.
    case = Case.from_starting_case("heart-failure-periodic").with_levers(LeverSetting("added_dead_space_ml", dose))
    judged, drawn = judge_with_levers(case), map_of(case, window_of(case))
    delay, sensitivity = standing_point(drawn, judged)
    assert judged.standing == standing
    critical = float(np.interp(delay, drawn.delays, drawn.critical))
    assert critical / sensitivity == pytest.approx(judged.margins.gain_margin, rel=1e-3)
    assert (sensitivity > critical) == (standing == "hunts")
