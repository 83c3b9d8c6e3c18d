"""The standing: its definition, its sentence, and what `analyse` gives, against closed forms."""

import math

import pytest

from lagscape import Case, analyse
from lagscape.loops.plain import PlainLoop
from lagscape.questions.standing import SETTLED_SHARE, Standing, judge, judge_loop, standing_of
from lagscape.questions.wording import distance_sentence, standing_sentence


def plain(exponent: float, delay: float) -> PlainLoop:
    return PlainLoop(production_per_s=0.2, largest_clearance_per_s=0.8, exponent=exponent, half_level=0.5, delay_s=delay)


def critical_delay(loop: PlainLoop) -> float:
    """Oracle: tau_c = arccos(-A/B)/sqrt(B^2 - A^2) with A = Vmax h, B = x0 Vmax h' (Hayes 1950)."""
    level, share = 0.5, 0.5
    a = loop.largest_clearance_per_s * share
    b = level * loop.largest_clearance_per_s * loop.exponent * share * (1.0 - share) / level
    return math.acos(-a / b) / math.sqrt(b * b - a * a)


@pytest.mark.parametrize(("growth", "standing"), [(0.1, "hunts"), (0.0, "hunts"), (-1e-12, "hunts"), (-0.01, "rings"), (-10.0, "settles")])
def test_the_three_standings(growth, standing):
    assert standing_of(growth, 1.0) == standing


def test_settling_means_under_five_per_cent_within_one_cycle():
    # Oracle: the definition. exp(growth * period) = 0.05 is the border; 1e-9 to each side of it.
    border = math.log(SETTLED_SHARE) / (2.0 * math.pi)
    assert standing_of(border * (1.0 + 1e-9), 1.0) is Standing.SETTLES
    assert standing_of(border * (1.0 - 1e-9), 1.0) is Standing.RINGS


@pytest.mark.parametrize("exponent", [3.0, 8.0, 20.0])
def test_a_plain_loop_hunts_exactly_past_the_closed_form_delay(exponent):
    at = critical_delay(plain(exponent, 1.0))
    assert judge_loop(plain(exponent, at * (1.0 + 1e-6))).standing is Standing.HUNTS
    assert judge_loop(plain(exponent, at * (1.0 - 1e-6))).standing is not Standing.HUNTS


def test_the_delay_margin_is_the_way_to_the_closed_form_delay():
    loop = plain(8.0, 0.5)
    # Both are closed forms in double precision; 1e-9 is far above their rounding.
    assert judge_loop(loop).margins.delay_margin_s == pytest.approx(critical_delay(loop) - 0.5, rel=1e-9)


@pytest.mark.parametrize(
    ("name", "standing"),
    [("healthy-asleep", "settles"), ("heart-failure-steady", "settles"), ("heart-failure-periodic", "hunts"), ("altitude-newcomer", "hunts")],
)
def test_the_starting_cases_stand_as_their_names_say(name, standing):
    # Oracle: what the invented person is said to do; loop gains of published_checks.md are checked in tests/published.
    answer = analyse(Case.from_starting_case(name))
    assert answer.standing == standing
    assert answer.sentence.lower().startswith(standing)


def test_a_hunting_case_is_said_with_its_cycle_and_its_apnoea():
    judged = judge(Case.from_starting_case("heart-failure-periodic"))
    assert standing_sentence(judged) == (
        f"Hunts. Left alone, this loop cycles every {judged.cycle_length:.0f} s with {judged.silent_time:.0f} s of apnoea."
    )
    assert "less sensitivity" in distance_sentence(judged) and "less delay" in distance_sentence(judged)


def test_a_ringing_case_is_said_with_how_many_cycles():
    judged = judge(Case.from_starting_case("plain-gentle"))
    assert judged.standing is Standing.RINGS
    # Oracle: a swing of exp(growth t) is at 5 % after ln(0.05)/growth.
    left = math.exp(judged.growth_rate * judged.cycles_to_settle * judged.linear_cycle_length)
    assert left == pytest.approx(SETTLED_SHARE, rel=1e-12)
    assert standing_sentence(judged).startswith("Rings. A disturbance dies away over about ")


def test_a_fast_loop_is_said_in_beats():
    assert "beats at 5.1 Hz" in analyse(Case.from_starting_case("ankle-clonus")).sentence


def test_a_missing_margin_is_null_with_its_reason():
    answer = analyse(Case.from_starting_case("ankle-calm")).to_json()
    assert answer["delay_margin_s"] is None and "gain is under 1" in answer["reasons"]["delay_margin_s"]
    assert answer["duty_ratio"] is None and "does not hunt" in answer["reasons"]["duty_ratio"]
    assert "co2_reserve_mmHg" not in answer


def test_no_gain_at_all_settles():
    answer = analyse(Case.from_starting_case("ankle-calm").with_number("reflex_gain_per_rad", 0.0))
    assert answer.loop_gain == 0.0 and answer.gain_margin is None
    assert "cannot hunt" in answer.reasons["gain_margin"]
