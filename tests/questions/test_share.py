"""Share of the excess: Shapley's values against every order, and against laws of the loops."""

from __future__ import annotations

import math
from itertools import permutations

import numpy as np
import pytest

from lagscape.case.case import Case
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from lagscape.questions.share import PARTS, parts_of, shapley_values, share_of_excess, typical_case
from lagscape.questions.standing import judge, judge_loop

STARTS = [(kind, item.name) for kind, loop in LOOPS.items() for item in loop.starting_cases]


def mixed(case: Case, typical: Case, own: set[str]) -> float:
    """ln loop gain of the loop with these parts the case's own, judged as one loop: no batch, no bit masks."""
    numbers = {}
    for part, names in parts_of(case.kind).items():
        source = case if part.name in own else typical
        numbers.update({name: source.value(name) for name in names})
    gain = judge_loop(LOOPS[case.kind](**numbers, **case.choices)).margins.loop_gain
    return math.log(gain)


@pytest.mark.parametrize("start", ["heart-failure-periodic", "heart-failure-steady", "altitude-4559-night", "plain-steep"])
def test_shares_are_the_mean_over_all_orders(start: str) -> None:
    # Oracle: Shapley 1953 by its definition: put the parts in one by one in every order (720 for six) and average each part's step.
    case = Case.from_starting_case(start)
    typical = typical_case(case)
    names = [part.name for part in PARTS[case.kind]]
    known: dict[frozenset[str], float] = {}

    def worth(own: frozenset[str]) -> float:
        if own not in known:
            known[own] = mixed(case, typical, set(own))
        return known[own]

    totals = dict.fromkeys(names, 0.0)
    orders = list(permutations(names))
    for order in orders:
        own: frozenset[str] = frozenset()
        for name in order:
            totals[name] += worth(own | {name}) - worth(own)
            own |= {name}
    found = share_of_excess(case)
    for item in found.parts:
        # Tolerance: the crossovers of the batch are closed to a relative 2e-8, whose square is rounding.
        assert item.log_gain == pytest.approx(totals[item.part.name] / len(orders), abs=1e-9)


@pytest.mark.parametrize(("kind", "start"), STARTS)
def test_shares_add_up(kind: str, start: str) -> None:
    # Law: efficiency of Shapley's values; and the ends are the two loops themselves, judged one by one.
    case = Case.from_starting_case(start)
    found = share_of_excess(case)
    assert sum(item.log_gain for item in found.parts) == pytest.approx(found.log_excess, abs=1e-12)
    assert found.loop_gain == pytest.approx(judge(case).margins.loop_gain, rel=1e-9)
    assert [item.part for item in found.parts] == list(PARTS[kind])
    if abs(found.log_excess) > math.log(1.05):
        assert sum(item.share for item in found.parts) == pytest.approx(1.0, abs=1e-12)
    else:
        assert all(item.share is None for item in found.parts)
        assert "no excess" in found.sentence


def test_every_number_belongs_to_one_part() -> None:
    for kind, loop in LOOPS.items():
        held = [name for names in parts_of(kind).values() for name in names]
        assert sorted(held) == sorted(item.name for item in loop.specifications)
        assert all(parts_of(kind).values())


def test_a_loop_that_differs_in_its_gain_alone_is_all_sensitivity() -> None:
    # Law: loop gain is proportional to the gain, so the share of sensitivity is the whole and its log is ln 3.
    typical = Case.from_starting_case("healthy-asleep")
    case = typical.with_sensitivity(3.0 * float(typical.loop().sensitivity))
    found = share_of_excess(case)
    shares = {item.part.name: item.share for item in found.parts}
    assert found.log_excess == pytest.approx(math.log(3.0), rel=1e-9)
    assert shares.pop("sensitivity") == pytest.approx(1.0, abs=1e-9)
    assert all(abs(share) < 1e-9 for share in shares.values())
    assert found.sentence == "Loop gain is 3.0 times the typical one (Healthy adult asleep). The whole excess is sensitivity."


def test_two_parts_whose_effects_multiply_share_as_if_alone() -> None:
    # Law: in the reflex loop gain times anything multiplies; with the limb changed too, sensitivity's share is still ln of its factor.
    typical = Case.from_starting_case("ankle-calm")
    case = typical.with_sensitivity(2.0 * float(typical.loop().sensitivity)).with_number("stiffness_n_m_rad", 50.0)
    found = share_of_excess(case)
    logs = {item.part.name: item.log_gain for item in found.parts}
    assert logs["sensitivity"] == pytest.approx(math.log(2.0), rel=1e-8)
    assert logs["limb"] == pytest.approx(found.log_excess - math.log(2.0), rel=1e-8)
    assert logs["delay"] == pytest.approx(0.0, abs=1e-9) and logs["muscle"] == pytest.approx(0.0, abs=1e-9)


def test_one_at_a_time_is_the_loop_with_that_part_typical() -> None:
    # Oracle: the case with the two delays typed as the typical ones.
    case = Case.from_starting_case("heart-failure-periodic")
    judged = judge(case.with_number("peripheral_delay_s", 8.0).with_number("central_delay_s", 10.0))
    item = next(item for item in share_of_excess(case).parts if item.part.name == "delay")
    assert item.standing_if_typical is judged.standing
    assert item.loop_gain_if_typical == judged.margins.loop_gain
    assert item.gain_margin_if_typical == judged.margins.gain_margin


def test_a_calmer_loop_shares_its_shortfall() -> None:
    typical = Case.from_starting_case("healthy-asleep")
    found = share_of_excess(typical.with_sensitivity(0.5 * float(typical.loop().sensitivity)))
    assert found.log_excess == pytest.approx(math.log(0.5), rel=1e-9)
    assert found.sentence == "Loop gain is 50 % below the typical one (Healthy adult asleep). The whole shortfall is sensitivity."


def test_the_sentence_names_the_largest_part_and_what_works_against_it() -> None:
    found = share_of_excess(Case.from_starting_case("heart-failure-periodic"))
    assert found.sentence == "Loop gain is 8.4 times the typical one (Healthy adult asleep). Most of the excess (58 %) is sensitivity."
    night = share_of_excess(Case.from_starting_case("altitude-4559-night"))
    assert "More than the whole excess" in night.sentence and "is oxygen; CO2 level works against it (−" in night.sentence


def test_the_state_decides_what_is_typical() -> None:
    assert typical_case(Case.from_starting_case("altitude-4559-day")).started_from == "healthy-awake"
    assert typical_case(Case.from_starting_case("altitude-4559-night")).started_from == "healthy-asleep"
    assert typical_case(Case.typical("breathing")).started_from == "healthy-asleep"


def test_another_typical_loop_may_be_given() -> None:
    steady, periodic = (Case.from_starting_case(f"heart-failure-{name}") for name in ("steady", "periodic"))
    found = share_of_excess(periodic, steady)
    assert found.against == "Heart failure, steady breathing"
    assert found.typical_loop_gain == pytest.approx(judge(steady).margins.loop_gain, rel=1e-9)


def test_shapley_values_of_a_game_known_by_heart() -> None:
    # Oracle: the glove game (one left glove, two right ones; a pair is worth 1): 2/3, 1/6, 1/6 (from memory, standard textbook game).
    worth = np.array([1.0 if bits & 1 and bits & 6 else 0.0 for bits in range(8)])
    np.testing.assert_allclose(shapley_values(worth, 3), [2 / 3, 1 / 6, 1 / 6], rtol=1e-15)


def test_what_cannot_be_shared_says_why() -> None:
    case = Case.from_starting_case("ankle-clonus")
    with pytest.raises(InvalidInputError, match="cannot be compared with a breathing loop"):
        share_of_excess(case, Case.from_starting_case("healthy-asleep"))
    with pytest.raises(InvalidInputError, match="has no loop gain"):
        share_of_excess(case.with_number("reflex_gain_per_rad", 0.0))
    # A held load that the case's strong muscle carries and the typical one cannot: the mix is impossible, not the case.
    strong = case.with_number("held_mass_kg", 5.0).with_number("load_distance_m", 0.5).with_number("largest_torque_n_m", 100.0)
    with pytest.raises(InvalidInputError, match=r"the loop with this case's .*limb and the rest typical is impossible"):
        share_of_excess(strong)
