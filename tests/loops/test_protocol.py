"""What the engine relies on in every loop, over the whole range of every number.

Oracle: the loops written out by hand in `support.written_equations`, which shares no code with the package, and finite differences.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from lagscape.loops.protocol import Drive, Loop, batch_shape
from lagscape.loops.register import LOOPS
from support import written_equations as written
from support.drawn_loops import in_range, typical_numbers

KINDS = sorted(LOOPS)
EPS = np.finfo(float).eps
WITH_SHAPE = [("breathing", "threshold"), ("breathing", "sigmoid"), ("plain", ""), ("reflex", "")]
every_loop = pytest.mark.parametrize(("kind", "shape"), WITH_SHAPE, ids=[f"{kind}{'-' * bool(shape)}{shape}" for kind, shape in WITH_SHAPE])


def made(kind: str, numbers: dict[str, float], shape: str = "threshold") -> Any:
    return LOOPS[kind](**numbers, **({"drive_shape": shape} if kind == "breathing" else {}))


def written_rates(kind: str, numbers: dict[str, float], shape: str, state: np.ndarray, late: np.ndarray, push: float) -> np.ndarray:
    """Rates by the hand-written equations at a state and delayed sensed signals."""
    if kind == "plain":
        return np.array(written.plain_rates(numbers, state[0], late[0], push))
    if kind == "breathing":
        ventilation = written.breathing_drive(numbers, shape, late[0], state[2], push)
        return np.array(written.breathing_rates(numbers, ventilation, state[0], state[1], state[2], late[1]))
    return np.array(written.reflex_rates(numbers, *state, *late))


def term_sizes(form: Any, state: np.ndarray, late: np.ndarray, push: float) -> np.ndarray:
    """Sum of the sizes of the terms of each rate: what rounding is measured against."""
    x, c = state[: form.n_plant], state[form.n_plant :]
    v = abs(float(form.drive.value(late, c, push)))
    plant = (
        np.abs(form.plant) @ np.abs(x) + v * (np.abs(form.plant_by_output) @ np.abs(x) + np.abs(form.input_vector)) + np.abs(form.constant)
    )
    control = np.abs(form.control) @ np.abs(c) + np.abs(form.control_by_sensed) @ np.abs(late) + np.abs(form.control_constant)
    return np.concatenate([plant, control])


def points_near(loop: Any, factors: list[float]) -> tuple[np.ndarray, np.ndarray]:
    """A state and delayed signals around the rest, moved by the drawn factors."""
    form, rest = loop.form(), loop.rest()
    scale = np.where(rest.state == 0.0, 0.05, np.abs(rest.state))
    state = rest.state + scale * np.array(factors[: form.n_plant + form.n_control])
    sensed = form.sensed_rows @ rest.state[: form.n_plant]
    late = sensed + np.where(sensed == 0.0, 0.05, np.abs(sensed)) * np.array(factors[4 : 4 + form.n_sensed])
    return state, late


factors_drawn = st.lists(st.floats(-0.4, 0.4), min_size=6, max_size=6)


@pytest.mark.parametrize("kind", KINDS)
def test_the_loop_and_its_drive_keep_the_protocol(kind: str) -> None:
    loop = LOOPS[kind]()
    assert isinstance(loop, Loop)
    assert isinstance(loop.form().drive, Drive)
    assert loop.kind == kind
    assert batch_shape(loop) == ()


@every_loop
@given(data=st.data())
def test_rates_agree_with_the_written_equations(kind: str, shape: str, data: st.DataObject) -> None:
    # Tolerance: rounding of the terms, 64 eps; the drives raise a ratio to a power n, which multiplies its rounding by about n ln.
    numbers = data.draw(in_range(kind))
    loop = made(kind, numbers, shape)
    state, late = points_near(loop, data.draw(factors_drawn))
    form = loop.form()
    rates = form.rhs(state, late)
    expected = written_rates(kind, numbers, shape, state, late, 0.0)
    steepness = steepness_of(kind, numbers, shape)
    scale = term_sizes(form, state, late, 0.0) + drive_size(form, kind, numbers)
    np.testing.assert_array_less(np.abs(rates - expected), 64.0 * EPS * (1.0 + steepness) * scale + 1e-290)


def steepness_of(kind: str, numbers: dict[str, float], shape: str) -> float:
    """The exponent of the drive's power law, by which it multiplies relative rounding; 0 for a line."""
    if kind == "plain":
        return numbers["exponent"] * (1.0 + abs(math.log(numbers["half_level"])))
    if kind == "breathing" and shape == "sigmoid":
        p0 = numbers["resting_paco2_mmhg"]
        v0 = 863.0 * numbers["co2_production_l_min"] / ((1 - numbers["dead_space_fraction"]) * (p0 - numbers["inspired_pco2_mmhg"]))
        slope = numbers["peripheral_gain_l_min_mmhg"] * math.exp(-0.05 * (numbers["arterial_po2_mmhg"] - 100.0))
        slope += numbers["central_gain_l_min_mmhg"]
        return slope * p0 / v0 / (1.0 - v0 / numbers["largest_ventilation_l_min"]) * (1.0 + math.log(p0))
    return 0.0


def drive_size(form: Any, kind: str, numbers: dict[str, float]) -> np.ndarray:
    """What the line's cancelling terms add to a rate's rounding: a steep line is a difference of large products."""
    extra = np.zeros(form.n_plant + form.n_control)
    if kind == "breathing":
        slope = numbers["peripheral_gain_l_min_mmhg"] * math.exp(-0.05 * (numbers["arterial_po2_mmhg"] - 100.0))
        slope += numbers["central_gain_l_min_mmhg"]
        p0 = numbers["resting_paco2_mmhg"]
        extra[0] = slope * p0 * (abs(float(form.plant_by_output[0, 0])) * p0 + abs(float(form.input_vector[0])))
    if kind == "reflex":
        extra[1] = numbers["largest_torque_n_m"] * abs(float(form.input_vector[1]))
    return extra


@every_loop
@given(data=st.data())
def test_nothing_moves_at_rest(kind: str, shape: str, data: st.DataObject) -> None:
    # Law: every rate is zero at rest. Tolerance as above, on the size of the terms that cancel.
    numbers = data.draw(in_range(kind))
    loop = made(kind, numbers, shape)
    form, rest = loop.form(), loop.rest()
    late = form.sensed_rows @ rest.state[: form.n_plant]
    scale = term_sizes(form, rest.state, late, 0.0) + drive_size(form, kind, numbers)
    steepness = steepness_of(kind, numbers, shape)
    np.testing.assert_array_less(np.abs(form.rhs(rest.state, late)), 64.0 * EPS * (1.0 + steepness) * scale + 1e-290)
    assert form.drive.value(late, rest.state[form.n_plant :]) == pytest.approx(
        rest.output, rel=64.0 * EPS * (1.0 + steepness), abs=1e-13 * (1.0 + abs(float(scale[0])))
    )


@every_loop
@given(data=st.data())
def test_every_answer_is_a_number(kind: str, shape: str, data: st.DataObject) -> None:
    numbers = data.draw(in_range(kind))
    loop = made(kind, numbers, shape)
    form, rest = loop.form(), loop.rest()
    state, late = points_near(loop, [4.0 * factor for factor in data.draw(factors_drawn)])
    control = state[form.n_plant :]
    push = data.draw(st.floats(-50.0, 50.0))
    for values in (
        rest.state, rest.output, form.plant, form.plant_by_output, form.input_vector, form.constant, form.control,
        form.control_by_sensed, form.control_constant, loop.sensitivity, loop.delay,
        form.drive.value(late, control, push), form.drive.gradient(late, control, push), form.drive.switch(late, control, push),
        form.rhs(state, late, push),
    ):  # fmt: skip
        assert np.all(np.isfinite(np.asarray(values, dtype=float)))
    assert not np.isnan(form.silent_level)  # minus infinity where the signal can never count as silent
    if kind == "breathing":
        assert form.drive.value(late, control, push) >= 0.0


@every_loop
@given(data=st.data())
def test_the_scalar_drive_is_the_vector_drive(kind: str, shape: str, data: st.DataObject) -> None:
    # Same law in plain floats. Tolerance: rounding of a power whose exponent multiplies it.
    numbers = data.draw(in_range(kind))
    loop = made(kind, numbers, shape)
    form = loop.form()
    state, late = points_near(loop, [4.0 * factor for factor in data.draw(factors_drawn)])
    control = state[form.n_plant :]
    push = data.draw(st.floats(-20.0, 20.0))
    value = float(form.drive.value(late, control, push))
    scalar = form.drive.scalar(tuple(map(float, late)), tuple(map(float, control)), push)
    size = float(np.max(np.abs(drive_gradient_sizes(form, late, control, push))))
    assert scalar == pytest.approx(value, rel=1e-11 * (1.0 + steepness_of(kind, numbers, shape)), abs=64.0 * EPS * size)


def drive_gradient_sizes(form: Any, late: np.ndarray, control: np.ndarray, push: float) -> np.ndarray:
    """Each argument times the drive's slope by it: how far one eps of an argument moves the drive."""
    slope = form.drive.gradient(late, control, push)
    return slope * np.concatenate([late, control]) + abs(push) + np.abs(np.concatenate([late, control])) + 1.0


@every_loop
@given(data=st.data())
def test_the_gradient_is_the_slope_of_the_value(kind: str, shape: str, data: st.DataObject) -> None:
    # Oracle: central differences. Their own error is h^2 of the third derivative and eps/h of the value: 1e-5 of the steepest slope
    # for a step of 1e-6 of the argument over the exponent.
    numbers = data.draw(in_range(kind))
    loop = made(kind, numbers, shape)
    form = loop.form()
    state, late = points_near(loop, [0.3 * factor for factor in data.draw(factors_drawn)])
    control = state[form.n_plant :]
    arguments = np.concatenate([late, control])
    gradient = form.drive.gradient(late, control)
    assert gradient.shape == arguments.shape
    for j, argument in enumerate(arguments):
        step = 1e-5 * max(abs(argument), 1e-3) / (1.0 + steepness_of(kind, numbers, shape))
        ends = []
        for sign in (1.0, -1.0):
            moved = arguments.copy()
            moved[j] += sign * step
            ends.append(
                (
                    form.drive.value(moved[: form.n_sensed], moved[form.n_sensed :]),
                    form.drive.switch(moved[: form.n_sensed], moved[form.n_sensed :]),
                )
            )
        if form.drive.has_kink and ends[0][1] * ends[1][1] <= 0.0:
            continue  # the corner lies between the two points: there is no slope to compare
        difference = float(ends[0][0] - ends[1][0]) / (2.0 * step)
        rounding = 8.0 * EPS * max(abs(float(ends[0][0])), drive_size_at(form, arguments, numbers, kind)) / step
        assert gradient[j] == pytest.approx(difference, rel=1e-5, abs=rounding + 1e-5 * float(np.max(np.abs(gradient))))


def drive_size_at(form: Any, arguments: np.ndarray, numbers: dict[str, float], kind: str) -> float:
    if kind == "reflex":
        return numbers["largest_torque_n_m"]
    return float(np.max(np.abs(form.drive.gradient(arguments[: form.n_sensed], arguments[form.n_sensed :])) * np.abs(arguments)))


@every_loop
@given(data=st.data())
def test_a_batch_is_its_members(kind: str, shape: str, data: st.DataObject) -> None:
    # The same loop in a batch and alone: equal but for the order of rounding inside vector instructions.
    drawn = [data.draw(in_range(kind)) for _ in range(3)]
    members = [made(kind, numbers, shape) for numbers in drawn]
    batch = made(kind, {name: np.array([numbers[name] for numbers in drawn]) for name in drawn[0]}, shape)
    assert batch_shape(batch) == (3,)
    form, rest = batch.form(), batch.rest()
    np.testing.assert_allclose(rest.state, np.stack([m.rest().state for m in members], axis=-1), rtol=1e-13, atol=0.0)
    np.testing.assert_allclose(rest.output, [m.rest().output for m in members], rtol=1e-11, atol=0.0)
    for name in ("plant", "plant_by_output", "input_vector", "constant", "control", "control_by_sensed", "control_constant"):
        single = np.stack([getattr(m.form(), name) for m in members], axis=-1)
        np.testing.assert_allclose(getattr(form, name), single, rtol=8.0 * EPS, atol=0.0, err_msg=name)
    states = np.stack([m.rest().state * 1.05 + 0.01 for m in members], axis=-1)
    late = np.einsum("jp,p...->j...", form.sensed_rows, states[: form.n_plant]) * 0.98
    single = np.stack([m.form().rhs(states[:, i], late[:, i]) for i, m in enumerate(members)], axis=-1)
    np.testing.assert_allclose(form.rhs(states, late), single, rtol=1e-9, atol=1e-11 * float(np.max(np.abs(single))))
    np.testing.assert_allclose(batch.sensitivity * np.ones(3), [m.sensitivity for m in members], rtol=8.0 * EPS)
    np.testing.assert_allclose(batch.delay * np.ones(3), [m.delay for m in members], rtol=8.0 * EPS)


@pytest.mark.parametrize("kind", KINDS)
@given(data=st.data(), factor=st.floats(0.2, 5.0))
def test_sensitivity_and_delay_can_be_set_and_set_back(kind: str, data: st.DataObject, factor: float) -> None:
    loop = made(kind, data.draw(in_range(kind)))
    assume(loop.sensitivity > 0.0)
    stronger = loop.with_sensitivity(loop.sensitivity * factor)
    assert stronger.sensitivity == pytest.approx(loop.sensitivity * factor, rel=8.0 * EPS)
    later = loop.with_delay(loop.delay * factor)
    assert later.delay == pytest.approx(loop.delay * factor, rel=32.0 * EPS)
    returned = [stronger.with_sensitivity(loop.sensitivity)]
    if kind != "reflex" or loop.delay * factor > loop.fixed_delay_s:
        # A reflex delay under its fixed part shrinks that part too, and a return spreads over the conduction: only the sum comes back.
        returned.append(later.with_delay(loop.delay))
    for back in returned:
        for item in loop.specifications:
            # A shifted delay is off by rounding of the larger of the two delays; a velocity by rounding of the conducted rest of one.
            slack = 8.0 * EPS * loop.delay * (1.0 + factor)
            left = loop.delay * factor - getattr(loop, "fixed_delay_s", 0.0)
            tolerance = 8.0 * EPS * (1.0 + loop.delay * (1.0 + factor) / abs(left))
            assert getattr(back, item.name) == pytest.approx(getattr(loop, item.name), rel=tolerance, abs=slack), item.name


@every_loop
@given(data=st.data(), factor=st.floats(0.3, 4.0))
def test_rest_does_not_depend_on_delay(kind: str, shape: str, data: st.DataObject, factor: float) -> None:
    loop = made(kind, data.draw(in_range(kind)), shape)
    moved = loop.with_delay(loop.delay * factor)
    np.testing.assert_array_equal(moved.rest().state, loop.rest().state)
    assert moved.rest().output == loop.rest().output


@pytest.mark.parametrize("kind", KINDS)
def test_a_batch_over_the_map_takes_its_axes(kind: str) -> None:
    loop = LOOPS[kind](**typical_numbers(kind))
    sensitivities = loop.sensitivity * np.array([[0.5], [1.0], [2.0]])
    delays = loop.delay * np.array([[0.8, 1.0, 1.5, 2.0]])
    grid = loop.with_sensitivity(sensitivities).with_delay(delays)
    assert batch_shape(grid) == (3, 4)
    assert grid.form().plant.shape[2:] == (3, 4)
    np.testing.assert_allclose(np.broadcast_to(grid.delay, (3, 4)), np.broadcast_to(delays, (3, 4)), rtol=32.0 * EPS)
    np.testing.assert_allclose(np.broadcast_to(grid.sensitivity, (3, 4)), np.broadcast_to(sensitivities, (3, 4)), rtol=8.0 * EPS)
    one = loop.with_sensitivity(float(sensitivities[2, 0])).with_delay(float(delays[0, 3])).form()
    np.testing.assert_allclose(grid.form().control_by_sensed[..., 2, 3], one.control_by_sensed, rtol=8.0 * EPS)


@pytest.mark.parametrize("kind", KINDS)
def test_a_batch_takes_one_delay_for_all(kind: str) -> None:
    loop = LOOPS[kind](**typical_numbers(kind))
    batch = loop.with_sensitivity(loop.sensitivity * np.array([0.5, 1.0, 2.0]))
    varied = batch.with_delay(loop.delay * np.array([0.5, 1.0, 2.0])).with_delay(loop.delay)
    np.testing.assert_allclose(np.broadcast_to(varied.delay, 3), loop.delay, rtol=32.0 * EPS)


@pytest.mark.parametrize("kind", KINDS)
def test_signals_are_named_and_drawn_from_the_states(kind: str) -> None:
    loop = LOOPS[kind](**typical_numbers(kind))
    form = loop.form()
    n_states = form.n_plant + form.n_control
    states = np.arange(3.0 * n_states).reshape(3, n_states)
    output = np.array([7.0, 8.0, 9.0])
    signals = {signal.name: signal for signal in loop.signals(states, output)}
    assert len(signals) == len(loop.signals(states, output))
    assert all(signal.label and signal.values.shape == (3,) for signal in signals.values())
    assert next(iter(loop.signals(states, output))).values is output
    assert len(form.state_names) == n_states
