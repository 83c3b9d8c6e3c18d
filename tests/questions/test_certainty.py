"""Certainty: the draws against their laws, the batch against one loop at a time, the answers against each other."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from lagscape.case.case import Case, LeverSetting, Number
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from lagscape.questions.certainty import certainty, drawn_numbers
from lagscape.questions.levers import lay_levers
from lagscape.questions.many import judge_many
from lagscape.questions.standing import Standing, judge, judge_loop

DRAWS = 2000
CASES = [
    ("heart-failure-periodic", ()), ("healthy-asleep", ()), ("altitude-4559-night", (LeverSetting("oxygen_l_min", 1.0),)),
    ("heart-failure-steady", (LeverSetting("added_dead_space_ml", 500.0),)), ("ankle-clonus", ()), ("ankle-calm", ()), ("plain-gentle", ()),
]  # fmt: skip


def with_spreads(case: Case, spread: float) -> Case:
    return replace(case, numbers={name: Number(item.value, item.basis, spread) for name, item in case.numbers.items()})


def drawn_loop(case: Case, numbers: dict, index: int):
    values = {name: float(draws[index]) if np.ndim(draws) else draws for name, draws in numbers.items()}
    return lay_levers(LOOPS[case.kind](**values, **case.choices), case.levers)


@pytest.mark.parametrize(("start", "levers"), CASES, ids=[name for name, _ in CASES])
def test_a_draw_is_judged_as_one_loop_is(start: str, levers: tuple[LeverSetting, ...]) -> None:
    # Oracle: `judge_loop` on 60 of the draws, one at a time. Loop gain to 1e-8 (Newton's last step). The standing of a very calm loop may be
    # read from another of its deep pairs; one draw in 60 is allowed that, and never about hunting.
    case = Case.from_starting_case(start).with_levers(*levers)
    numbers = drawn_numbers(case, DRAWS)

    def build(which):
        values = {name: draws[which] if np.ndim(draws) else draws for name, draws in numbers.items()}
        return lay_levers(LOOPS[case.kind](**values, **case.choices), case.levers)

    many = judge_many(build, DRAWS, growth=True)
    standings = many.standings()
    differ = 0
    for index in range(60):
        judged = judge_loop(drawn_loop(case, numbers, index))
        assert many.possible[index]
        assert many.stable[index] == judged.margins.stable
        assert many.loop_gain[index] == pytest.approx(judged.margins.loop_gain, rel=1e-8)
        assert standings[Standing.HUNTS][index] == (judged.standing is Standing.HUNTS)
        differ += not standings[judged.standing][index]
    assert differ <= 1


@pytest.mark.parametrize(("start", "levers"), CASES, ids=[name for name, _ in CASES])
def test_the_answer_is_the_count_over_the_draws(start: str, levers: tuple[LeverSetting, ...]) -> None:
    # Oracle: the draws' loop gains and standings, counted here from the same batch by other means.
    case = Case.from_starting_case(start).with_levers(*levers)
    found = certainty(case, DRAWS)
    numbers = drawn_numbers(case, DRAWS)
    whole = {name: draws if np.ndim(draws) else np.full(DRAWS, draws) for name, draws in numbers.items()}
    many = judge_many(
        lambda which: lay_levers(LOOPS[case.kind](**{k: v[which] for k, v in whole.items()}, **case.choices), case.levers), DRAWS, growth=True
    )
    assert found.shares[Standing.HUNTS] == pytest.approx(np.mean(many.loop_gain > 1.0), abs=1e-12)
    assert sum(found.shares.values()) == pytest.approx(1.0, abs=1e-12)
    assert found.holds == found.shares[found.standing]
    assert found.impossible == 0
    low, middle, high = np.percentile(many.loop_gain, [5, 50, 95])
    assert (found.loop_gain.low, found.loop_gain.median, found.loop_gain.high) == pytest.approx((low, middle, high), rel=1e-12)
    assert found.gain_margin.median == pytest.approx(1.0 / middle, rel=1e-3)
    # Oracle for the doubts: scipy's Spearman correlation, for the numbers that are drawn inside their range without ties.
    for doubt in found.doubts[:3]:
        expected = stats.spearmanr(whole[doubt.name], many.loop_gain).statistic
        assert doubt.correlation == pytest.approx(expected, abs=2e-3)
    assert sum(doubt.share for doubt in found.doubts) == pytest.approx(1.0, abs=1e-12)
    assert [doubt.share for doubt in found.doubts] == sorted((doubt.share for doubt in found.doubts), reverse=True)


def test_draws_follow_their_laws() -> None:
    # Oracle: Kolmogorov and Smirnov's test against scipy's normal law of the value (or of its logarithm) with the number's own spread, for
    # numbers whose range is more than four spreads away. 10,000 draws at a level of 1e-4 of a false alarm for each.
    case = Case.from_starting_case("heart-failure-periodic").with_number("peripheral_delay_s", 24.3, Basis.MEASURED, 0.05)
    drawn = drawn_numbers(case)
    tested = 0
    for name, item in case.specifications.items():
        value, spread, draws = case.value(name), case.spread(name), drawn[name]
        if item.distribution == "lognormal":
            inside = value * math.exp(-4.0 * spread) > item.minimum and value * math.exp(4.0 * spread) < item.maximum
            law = stats.norm(math.log(value), spread).cdf if inside else None
            seen = np.log(draws)
        else:
            inside = value - 4.0 * spread > item.minimum and value + 4.0 * spread < item.maximum
            law = stats.norm(value, spread).cdf if inside else None
            seen = draws
        assert np.all((draws >= item.minimum) & (draws <= item.maximum))
        if law is not None:
            tested += 1
            assert stats.kstest(seen, law).pvalue > 1e-4, name
    assert tested >= 10


def test_a_measured_number_is_drawn_more_closely_than_an_assumed_one() -> None:
    case = Case.from_starting_case("heart-failure-periodic")
    measured = case.with_number("peripheral_gain_l_min_mmhg", 1.5, Basis.MEASURED)
    widths = [np.std(np.log(drawn_numbers(item)["peripheral_gain_l_min_mmhg"])) for item in (case, measured)]
    # Oracle: the specification's spreads, 0.45 among persons and 0.25 of a measurement. Tolerance: four standard errors, sd / sqrt(2 n).
    assert widths[0] == pytest.approx(0.45, rel=4.0 / math.sqrt(2e4))
    assert widths[1] == pytest.approx(0.25, rel=4.0 / math.sqrt(2e4))
    wide, close = (certainty(item, DRAWS).loop_gain for item in (case, measured))
    assert close.high / close.low < wide.high / wide.low


def test_the_share_that_hunts_is_the_closed_form_where_one_number_is_drawn() -> None:
    # Oracle: loop gain is proportional to the reflex gain, so with it alone drawn lognormal the loop hunts with probability
    # Phi(ln(loop gain) / spread). Tolerance: four standard errors of a share from 10,000 draws.
    case = Case.from_starting_case("ankle-clonus")
    case = with_spreads(case, 0.0).with_number("reflex_gain_per_rad", 3.0, Basis.ASSUMED, 0.4)
    expected = stats.norm.cdf(math.log(judge(case).margins.loop_gain) / 0.4)
    found = certainty(case)
    assert found.shares[Standing.HUNTS] == pytest.approx(expected, abs=4.0 * math.sqrt(expected * (1.0 - expected) / 1e4))
    assert found.loop_gain.high == pytest.approx(judge(case).margins.loop_gain * math.exp(1.6449 * 0.4), rel=0.02)
    assert found.doubts[0].name == "reflex_gain_per_rad" and found.doubts[0].share == pytest.approx(1.0)
    assert found.doubts[0].correlation == pytest.approx(1.0, abs=1e-12)


def test_without_spread_every_draw_is_the_case() -> None:
    case = with_spreads(Case.from_starting_case("heart-failure-periodic"), 0.0)
    found = certainty(case, 200)
    assert found.holds == 1.0 and found.sentence == "In every draw this loop hunts."
    gain = judge(case).margins.loop_gain
    assert (found.loop_gain.low, found.loop_gain.high) == pytest.approx((gain, gain), rel=1e-9)
    assert all(doubt.share == 0.0 for doubt in found.doubts)


def test_equal_seeds_give_equal_answers_and_others_agree_within_chance() -> None:
    case = Case.from_starting_case("heart-failure-periodic")
    assert certainty(case, DRAWS) == certainty(case, DRAWS)
    shares = [certainty(case, 4000, seed).shares[Standing.HUNTS] for seed in (1, 2)]
    assert shares[0] != shares[1]
    # Five standard errors of a difference of two shares near 0.75.
    assert abs(shares[0] - shares[1]) < 5.0 * math.sqrt(2.0 * 0.75 * 0.25 / 4000)


def test_levers_count() -> None:
    case = Case.from_starting_case("heart-failure-periodic")
    helped = certainty(case.with_levers(LeverSetting("added_dead_space_ml", 600.0)), DRAWS)
    assert helped.standing is not Standing.HUNTS
    assert helped.shares[Standing.HUNTS] < certainty(case, DRAWS).shares[Standing.HUNTS] - 0.3


def test_impossible_draws_are_counted_and_left_out() -> None:
    # A held load close to what the muscle can carry: some draws are too heavy. Oracle: the rule of the loop, m g l < largest torque.
    case = Case.from_starting_case("ankle-clonus").with_number("held_mass_kg", 5.0)
    numbers = drawn_numbers(case, DRAWS)
    load = 9.80665 * np.asarray(numbers["held_mass_kg"]) * numbers["load_distance_m"]
    too_heavy = int(np.sum(load >= numbers["largest_torque_n_m"]))
    found = certainty(case, DRAWS)
    assert 0 < too_heavy < DRAWS
    assert found.impossible == too_heavy
    assert sum(found.shares.values()) == pytest.approx(1.0, abs=1e-12)


def test_the_sentence_counts_in_a_hundred() -> None:
    found = certainty(Case.from_starting_case("heart-failure-periodic"))
    count = round(100.0 * found.holds)
    assert found.sentence == f"In {count} of 100 draws this loop hunts. Most of the doubt comes from: peripheral CO2 gain."


@pytest.mark.parametrize("draws", [99, 100_001, 1000.0, True, "many"])
def test_a_number_of_draws_that_is_none_is_refused(draws: object) -> None:
    with pytest.raises(InvalidInputError, match="number of draws must be a whole number from 100 to 100000"):
        certainty(Case.typical("breathing"), draws)  # type: ignore[arg-type]
