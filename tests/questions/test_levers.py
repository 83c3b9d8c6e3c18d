"""Levers on a case: what may be laid, in what order they act, what they change."""

from __future__ import annotations

from itertools import permutations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case.case import Case, LeverSetting
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from lagscape.questions.levers import LEVERS, apply_levers, check_lever, effects, judge_with_levers, lay_levers
from lagscape.questions.standing import Standing, judge, judge_loop

PERIODIC = Case.from_starting_case("heart-failure-periodic")
EVERY = [(kind, name) for kind, levers in LEVERS.items() for name in levers]
EVERY_START = [(kind, item.name) for kind, loop in LOOPS.items() for item in loop.starting_cases]


@pytest.mark.parametrize(("kind", "start"), EVERY_START)
def test_dose_zero_changes_nothing(kind: str, start: str) -> None:
    # Law: a lever that is laid with dose 0 is not there. Tolerance: the rest is solved on the fixed line instead of read from the case;
    # with both gases by halving to rounding.
    case = Case.from_starting_case(start)
    before = judge(case)
    after = judge_with_levers(case.with_levers(*(LeverSetting(name, 0.0) for name in LEVERS[kind])))
    assert after is not None
    np.testing.assert_allclose(after.rest.state, before.rest.state, rtol=1e-10, atol=1e-12)
    assert after.margins.loop_gain == pytest.approx(before.margins.loop_gain, rel=1e-9)


def test_the_order_of_laying_does_not_matter() -> None:
    # Law: the same levers make the same loop, to the last bit, in any order.
    settings = (
        LeverSetting("added_dead_space_ml", 300.0), LeverSetting("oxygen_l_min", 0.5), LeverSetting("lateral_posture_share", 1.0),
        LeverSetting("cpap_cmh2o", 8.0),
    )  # fmt: skip
    loops = {apply_levers(PERIODIC.with_levers(*order)) for order in permutations(settings)}
    assert len(loops) == 1


@pytest.mark.parametrize(("kind", "name"), EVERY)
def test_a_batch_of_doses_is_each_dose_alone(kind: str, name: str) -> None:
    # Oracle: the same lever on one loop, dose by dose. Tolerance: rounding; the dead space iterates to 1e-12.
    start = {"breathing": "heart-failure-periodic", "reflex": "ankle-clonus", "plain": "plain-steep"}[kind]
    case, lever = Case.from_starting_case(start), LEVERS[kind][name]
    doses = np.linspace(lever.minimum, lever.maximum, 5)
    batch = lay_levers(case.loop(), [LeverSetting(name, doses)])
    for index, dose in enumerate(doses.tolist()):
        single = apply_levers(case.with_levers(LeverSetting(name, dose)))
        for item in case.specifications:
            together = np.broadcast_to(getattr(batch, item), doses.shape)[index]
            assert together == pytest.approx(getattr(single, item), rel=1e-9), item


def test_no_levers_no_judgement_and_the_plain_loop() -> None:
    assert judge_with_levers(PERIODIC) is None
    assert apply_levers(PERIODIC) == PERIODIC.loop()
    assert effects(PERIODIC) == ()


def test_the_controller_keeps_its_line() -> None:
    # Law: a plant lever moves the rest along the patient's own line V = V0 + S (P - P0).
    loop = PERIODIC.loop()
    after = judge_with_levers(PERIODIC.with_levers(LeverSetting("inspired_co2_percent", 2.0)))
    assert after is not None
    on_line = loop.line_ventilation + loop.sensitivity * (float(after.rest.state[0]) - loop.resting_paco2_mmhg)
    assert float(after.rest.output) == pytest.approx(on_line, rel=1e-12)


def test_oxygen_with_both_gases_raises_paco2() -> None:
    # Law of the two-gas form: less hypoxic drive, less ventilation, more CO2. PaO2 by the alveolar gas equation with 0.04 more each L/min.
    case = Case.from_starting_case("altitude-4559-night")
    before, after = judge(case), judge_with_levers(case.with_levers(LeverSetting("oxygen_l_min", 2.0)))
    assert after is not None
    assert after.loop.inspired_o2_fraction == pytest.approx(0.2093 + 0.08, rel=1e-12)
    assert float(after.rest.state[0]) > float(before.rest.state[0]) + 0.5
    assert float(after.rest.state[2]) > float(before.rest.state[2]) + 20.0
    assert after.standing is not Standing.HUNTS


def test_descent_with_both_gases_raises_the_pressure_and_ends_at_sea_level() -> None:
    # Oracle: West 1996, exp(6.63268 - 0.1112 h - 0.00149 h^2): 4559 m is 443.5 mmHg; 3559 m is 509.7 mmHg (computed by hand).
    case = Case.from_starting_case("altitude-4559-night")
    lower = apply_levers(case.with_levers(LeverSetting("descent_m", 1000.0)))
    sea = apply_levers(case.with_levers(LeverSetting("descent_m", 5000.0)))
    h = 3.559
    assert float(lower.barometric_pressure_mmhg) == pytest.approx(np.exp(6.63268 - 0.1112 * h - 0.00149 * h * h), abs=0.5)
    assert float(sea.barometric_pressure_mmhg) == pytest.approx(np.exp(6.63268), abs=0.5)


def test_effects_say_each_alone_and_all_together() -> None:
    settings = (LeverSetting("oxygen_l_min", 0.5), LeverSetting("added_dead_space_ml", 300.0))
    found = effects(PERIODIC.with_levers(*settings))
    assert [item.settings for item in found] == [settings[:1], settings[1:], settings]
    assert found[-1].label == "All together"
    before = judge(PERIODIC)
    for item in found:
        after = judge_with_levers(PERIODIC.with_levers(*item.settings))
        assert after is not None and item.after is not None
        assert item.loop_gain_change == pytest.approx(after.margins.loop_gain / before.margins.loop_gain - 1.0, rel=1e-12)
        assert item.gain_margin_change == pytest.approx(before.margins.loop_gain / after.margins.loop_gain, rel=1e-12)
        assert item.cycle_length_change_s == pytest.approx(after.cycle_length - before.cycle_length, rel=1e-12)
        assert item.apnoea_change_s == pytest.approx((after.silent_time or 0.0) - before.silent_time, rel=1e-12)
    both = found[-1].after
    assert both is not None and both.apnoea_s == 0.0 and both.apnoea_share == 0.0 and both.standing is not Standing.HUNTS


def test_an_impossible_lever_says_so_beside_the_possible_ones() -> None:
    case = Case.from_starting_case("ankle-clonus").with_number("load_distance_m", 1.0)
    found = effects(case.with_levers(LeverSetting("held_mass_rise_kg", 4.0), LeverSetting("damping_rise_percent", 50.0)))
    assert found[0].after is None and "largest torque" in found[0].refusal
    assert found[0].loop_gain_change is None and found[0].apnoea_change_s is None
    assert found[1].after is not None and found[1].refusal == ""


def test_reflex_and_plain_loops_have_no_apnoea() -> None:
    found = effects(Case.from_starting_case("ankle-clonus").with_levers(LeverSetting("reflex_gain_fall_percent", 50.0)))[0]
    assert found.before.apnoea_s is None and found.after is not None and found.after.apnoea_share is None
    # Law: the loop gain of the reflex is proportional to its gain.
    assert found.loop_gain_change == pytest.approx(-0.5, rel=1e-12)


@given(dose=st.floats(0.0, 90.0))
def test_less_gain_is_proportionally_less_loop_gain(dose: float) -> None:
    # Law: the rest stays at the pivot, so L scales with the gain and the crossover stays.
    after = judge_loop(apply_levers(PERIODIC.with_levers(LeverSetting("chemoreflex_gain_fall_percent", dose))))
    assert after.margins.loop_gain == pytest.approx((1.0 - dose / 100.0) * judge(PERIODIC).margins.loop_gain, rel=1e-9)


@pytest.mark.parametrize(
    ("kind", "name", "dose", "says"),
    [
        ("breathing", "servo_ventilation", 1.0, "The breathing loop has no lever 'servo_ventilation'; it has: waking_share"),
        ("breathing", "reflex_gain_fall_percent", 1.0, "The breathing loop has no lever"),
        ("nothing", "oxygen_l_min", 1.0, "The nothing loop has no lever 'oxygen_l_min'; it has none"),
        ("breathing", "oxygen_l_min", 9.0, "The dose of Oxygen must be a number from 0 to 6 L/min; got 9."),
        ("breathing", "oxygen_l_min", -1.0, "got -1."),
        ("breathing", "oxygen_l_min", float("nan"), "got nan."),
        ("breathing", "oxygen_l_min", True, "got True."),
        ("breathing", "oxygen_l_min", "2", "got '2'."),
    ],
)
def test_what_may_not_be_laid(kind: str, name: str, dose: float, says: str) -> None:
    with pytest.raises(InvalidInputError) as caught:
        check_lever(kind, name, dose)
    assert says in str(caught.value)


def test_a_case_with_an_unknown_lever_or_dose_is_refused_where_it_is_judged() -> None:
    for setting in (LeverSetting("nothing_l_min", 1.0), LeverSetting("oxygen_l_min", 60.0)):
        for ask in (apply_levers, judge_with_levers, effects):
            with pytest.raises(InvalidInputError):
                ask(PERIODIC.with_levers(setting))


def test_a_case_in_a_link_is_read_with_the_levers_rules() -> None:
    link = PERIODIC.with_levers(LeverSetting("oxygen_l_min", 2.0)).to_link()
    assert Case.from_link(link, check_lever).levers == (LeverSetting("oxygen_l_min", 2.0),)
    with pytest.raises(ValueError, match="Oxygen"):
        Case.from_link(PERIODIC.with_levers(LeverSetting("oxygen_l_min", 60.0)).to_link(), check_lever)
