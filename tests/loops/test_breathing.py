"""The breathing loop: its line, its sigmoid, its rest on the metabolic hyperbola, and a plant that changes under a fixed controller."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.loops.breathing import BreathingLoop, hypoxic_multiplier
from support import written_equations as written
from support.drawn_loops import in_range, typical_numbers

EPS = np.finfo(float).eps
TYPICAL = typical_numbers("breathing")


def loop(shape: str = "threshold", **numbers: float) -> BreathingLoop:
    return BreathingLoop(**{**TYPICAL, **numbers}, drive_shape=shape)


def drive_at(person: BreathingLoop, pressure: float) -> float:
    """Ventilation with every receptor at one pressure."""
    return float(person.form().drive.value(np.array([pressure, pressure]), np.array([pressure])))


@pytest.mark.parametrize("shape", ["threshold", "sigmoid"])
@given(numbers=in_range("breathing"))
def test_rest_solves_the_metabolic_hyperbola(shape: str, numbers: dict[str, float]) -> None:
    # Oracle: E V (P - P_I) = 863 VCO2, the alveolar ventilation equation. Tolerance: rounding of the four operations and of P - P_I.
    person = BreathingLoop(**numbers, drive_shape=shape)
    rest = person.rest()
    difference = rest.state[0] - numbers["inspired_pco2_mmhg"]
    uptake = (1.0 - numbers["dead_space_fraction"]) * rest.output * difference
    slack = 16 * EPS * (1.0 + rest.state[0] / difference)
    assert uptake == pytest.approx(863.0 * numbers["co2_production_l_min"], rel=slack)
    assert rest.state[0] == rest.state[2] == numbers["resting_paco2_mmhg"]


def test_venous_pco2_at_rest_carries_the_co2_production() -> None:
    # Oracle: Fick. 863 beta Q (Pv - Pa) = 863 VCO2: 0.2 / (0.0065 x 5) = 6.1538 mmHg.
    person = loop(co2_production_l_min=0.2, cardiac_output_l_min=5.0, co2_solubility_per_mmhg=0.0065)
    pa, pv, _ = person.rest().state
    assert pv - pa == pytest.approx(0.2 / (0.0065 * 5.0), rel=32 * EPS * pv / (pv - pa))


@given(numbers=in_range("breathing"))
def test_the_sigmoid_has_the_line_s_point_and_both_its_slopes(numbers: dict[str, float]) -> None:
    # Law of the design: same eupnoeic point, same slope on each path. Tolerance: rounding times the power law's exponent.
    line = BreathingLoop(**numbers)
    curve = BreathingLoop(**numbers, drive_shape="sigmoid")
    rest = line.rest()
    sensed, control = rest.state[[0, 0]], rest.state[[2]]
    exponent = line.sensitivity * rest.state[0] / rest.output / (1.0 - rest.output / numbers["largest_ventilation_l_min"])
    slack = 64 * EPS * (1.0 + exponent)
    assert curve.form().drive.value(sensed, control) == pytest.approx(rest.output, rel=slack)
    np.testing.assert_allclose(
        curve.form().drive.gradient(sensed, control), line.form().drive.gradient(sensed, control), rtol=slack + 1e-13
    )


def test_the_sigmoid_rises_from_nothing_to_its_ceiling() -> None:
    person = loop("sigmoid", largest_ventilation_l_min=60.0)
    ventilation = [drive_at(person, pressure) for pressure in np.linspace(0.0, 200.0, 81)]
    assert ventilation[0] == 0.0
    assert np.all(np.diff(ventilation) >= 0.0)
    assert ventilation[-1] == pytest.approx(60.0, rel=1e-6)
    assert person.form().drive.has_kink is False


@pytest.mark.parametrize("pressure", [0.0, -5.0])
def test_the_sigmoid_at_no_pressure_is_silent_in_every_form(pressure: float) -> None:
    # A gentle sigmoid, whose power law is still large near zero: the three forms must agree that there is no drive below it.
    drive = loop("sigmoid", central_gain_l_min_mmhg=0.02, peripheral_gain_l_min_mmhg=0.0).form().drive
    sensed, control = np.array([pressure, pressure]), np.array([pressure])
    assert drive.value(sensed, control) == 0.0
    assert drive.scalar((pressure, pressure), (pressure,), 0.0) == 0.0
    assert drive.gradient(sensed, control).tolist() == [0.0, 0.0, 0.0]


def test_apnoea_starts_at_the_co2_reserve_below_eupnoea() -> None:
    # Oracle: reserve = V0 / (Sp + Sc), by the line. VCO2 0.2, E 0.7, P0 40: V0 = 863 x 0.2 / 28 = 6.1643; over 2.41: 2.5578 mmHg.
    person = loop(arterial_po2_mmhg=100.0, peripheral_gain_l_min_mmhg=0.27, central_gain_l_min_mmhg=2.14)
    reserve = 863.0 * 0.2 / (0.7 * 40.0) / 2.41
    assert reserve == pytest.approx(2.5578, abs=5e-5)
    assert person.co2_reserve_mmhg() == pytest.approx(reserve, rel=8 * EPS)
    assert drive_at(person, 40.0 - reserve - 1e-9) == 0.0
    assert drive_at(person, 40.0 - reserve + 1e-9) == pytest.approx(2.41e-9, rel=1e-4)
    switch = person.form().drive.switch
    below, above = 40.0 - reserve - 1e-6, 40.0 - reserve + 1e-6
    assert switch(np.array([below, below]), np.array([below])) < 0.0 < switch(np.array([above, above]), np.array([above]))


@pytest.mark.parametrize(("po2", "factor"), [(100.0, 1.0), (80.0, math.e), (45.0, math.exp(2.75)), (120.0, 1.0 / math.e)])
def test_the_hypoxic_multiplier(po2: float, factor: float) -> None:
    # Oracle: g = exp(-0.05 (PaO2 - 100)); e at 80 mmHg, by hand.
    assert hypoxic_multiplier(po2) == pytest.approx(factor, rel=4 * EPS)
    person = loop(arterial_po2_mmhg=po2, peripheral_gain_l_min_mmhg=0.5, central_gain_l_min_mmhg=2.0)
    assert person.effective_peripheral_gain == pytest.approx(0.5 * factor, rel=4 * EPS)
    assert person.sensitivity == pytest.approx(0.5 * factor + 2.0, rel=4 * EPS)


def test_both_delays_move_by_the_same_seconds() -> None:
    person = loop(peripheral_delay_s=10.0, central_delay_s=13.0).with_delay(25.0)
    assert (person.peripheral_delay_s, person.central_delay_s) == (25.0, 28.0)


def test_a_new_sensitivity_keeps_the_split() -> None:
    person = loop(peripheral_gain_l_min_mmhg=0.5, central_gain_l_min_mmhg=1.5, arterial_po2_mmhg=100.0).with_sensitivity(4.0)
    assert person.peripheral_gain_l_min_mmhg == pytest.approx(1.0, rel=4 * EPS)
    assert person.central_gain_l_min_mmhg == pytest.approx(3.0, rel=4 * EPS)


def test_delays_follow_flow_only_where_tied() -> None:
    # Oracle: tau proportional to 1/Q: 5 to 2.5 L/min doubles 10 and 12 s.
    free = loop(cardiac_output_l_min=5.0)
    assert free.with_numbers(cardiac_output_l_min=2.5).peripheral_delay_s == TYPICAL["peripheral_delay_s"]
    tied = BreathingLoop(**{**TYPICAL, "peripheral_delay_s": 10.0, "central_delay_s": 12.0}, delays_follow_flow="yes")
    slow = tied.with_numbers(cardiac_output_l_min=2.5)
    assert (slow.peripheral_delay_s, slow.central_delay_s) == (20.0, 24.0)
    typed = tied.with_numbers(cardiac_output_l_min=2.5, peripheral_delay_s=11.0)
    assert (typed.peripheral_delay_s, typed.central_delay_s) == (11.0, 24.0)


@pytest.mark.parametrize("shape", ["threshold", "sigmoid"])
@given(numbers=in_range("breathing"), changed=in_range("breathing"))
def test_a_fixed_controller_meets_the_new_hyperbola(shape: str, numbers: dict[str, float], changed: dict[str, float]) -> None:
    # Two laws at the new rest: the alveolar ventilation equation of the new plant, and the drive written out with the old line.
    before = BreathingLoop(**numbers, drive_shape=shape)
    plant = {name: changed[name] for name in ("co2_production_l_min", "dead_space_fraction", "inspired_pco2_mmhg", "lung_volume_l")}
    after = before.freeze_line().with_numbers(**plant)
    rest = after.rest()
    share, load = 1.0 - plant["dead_space_fraction"], 863.0 * plant["co2_production_l_min"]
    rise = rest.state[0] - plant["inspired_pco2_mmhg"]
    assert rise > 0.0 and rest.output > 0.0
    assert share * rest.output * rise == pytest.approx(load, rel=1e-9 + 16 * EPS * rest.state[0] / rise)
    drive = written.breathing_drive(numbers, shape, rest.state[0], rest.state[0])
    # The line's slope, up to 560 L/min/mmHg, turns one rounding of a pressure into this much ventilation.
    slack = 64 * EPS * before.sensitivity * (rest.state[0] + numbers["resting_paco2_mmhg"])
    assert rest.output == pytest.approx(drive, rel=1e-8, abs=slack)


def test_freezing_the_line_changes_nothing_by_itself() -> None:
    for shape in ("threshold", "sigmoid"):
        person = loop(shape)
        np.testing.assert_allclose(person.freeze_line().rest().state, person.rest().state, rtol=64 * EPS)


def test_more_co2_production_raises_ventilation_and_inspired_co2_raises_paco2() -> None:
    # Common practice, no source: exercise raises ventilation; a fixed controller lets PaCO2 drift up a little.
    rest = loop().rest()
    exercise = loop().freeze_line().with_numbers(co2_production_l_min=0.6).rest()
    assert exercise.output > 1.5 * rest.output
    assert 0.0 < exercise.state[0] - rest.state[0] < 10.0
    inhaled = loop().freeze_line().with_numbers(inspired_pco2_mmhg=7.0).rest()
    assert 0.0 < inhaled.state[0] - rest.state[0] < 7.0


def test_a_disturbance_of_inspired_co2_is_a_change_of_the_parameter() -> None:
    # The channel's effect on the rate equals that of raising P_I in the written equations with ventilation held.
    person = loop()
    form = person.form()
    state = np.array([41.0, 47.0, 40.5])
    channel = form.channels["inspired_pco2"]
    ventilation = 7.0
    before = written.breathing_rates(TYPICAL, ventilation, *state, 41.0)
    after = written.breathing_rates({**TYPICAL, "inspired_pco2_mmhg": 5.0}, ventilation, *state, 41.0)
    np.testing.assert_allclose(
        5.0 * ventilation * np.asarray(channel.plant_by_output), np.subtract(after, before)[:2], rtol=1e-12, atol=1e-15
    )


def test_what_counts_as_silence() -> None:
    assert loop().form().silent_level == 0.0
    sigmoid = loop("sigmoid")
    assert sigmoid.form().silent_level == pytest.approx(0.1 * sigmoid.rest().output, rel=8 * EPS)


@pytest.mark.parametrize("question", ["rest", "form"])
def test_a_resting_paco2_under_the_inspired_is_refused(question: str) -> None:
    with pytest.raises(InvalidInputError, match=r"Resting PaCO2 must lie above inspired PCO2; got 20 and 25 mmHg\. Lower"):
        getattr(loop(resting_paco2_mmhg=20.0, inspired_pco2_mmhg=25.0), question)()


def test_one_member_of_a_batch_without_a_rest_is_refused_in_the_same_words() -> None:
    batch: Any = {**TYPICAL, "resting_paco2_mmhg": np.array([40.0, 20.0]), "inspired_pco2_mmhg": np.array([0.0, 25.0])}
    with pytest.raises(InvalidInputError, match="Resting PaCO2 must lie above inspired PCO2; got 20 and 25 mmHg"):
        BreathingLoop(**batch).rest()


@pytest.mark.parametrize("ceiling", [10.0, np.array([60.0, 10.0])])
def test_a_sigmoid_ceiling_under_the_rest_is_refused(ceiling: Any) -> None:
    person = BreathingLoop(**{**TYPICAL, "co2_production_l_min": 1.0, "largest_ventilation_l_min": ceiling}, drive_shape="sigmoid")
    with pytest.raises(InvalidInputError, match=r"The largest ventilation must exceed the resting 30.8 L/min; got 10 L/min\. Raise it"):
        person.rest()


@given(push=st.floats(-100.0, 100.0), pressure=st.floats(0.0, 120.0), shape=st.sampled_from(["threshold", "sigmoid"]))
def test_a_push_moves_the_line_up_and_ventilation_is_never_negative(push: float, pressure: float, shape: str) -> None:
    # Oracle: the written drive; a push of the sigmoid is the pressure that would raise the line by as much.
    person = loop(shape)
    value = person.form().drive.value(np.array([pressure, pressure]), np.array([pressure]), push)
    assert value >= 0.0
    assert value == pytest.approx(written.breathing_drive(TYPICAL, shape, pressure, pressure, push), rel=1e-11, abs=1e-12)
