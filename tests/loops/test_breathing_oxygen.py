"""The breathing loop with both gases: against its equations written out by hand, against the form without oxygen, and by laws."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case.case import Case
from lagscape.engine.boundary import boundary_curve
from lagscape.engine.disturbance import pulse
from lagscape.engine.margins import margins
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.simulate import simulate
from lagscape.errors import InvalidInputError
from lagscape.loops import breathing_oxygen, gases
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.protocol import Drive, Loop, batch_shape
from support.drawn_loops import in_range, typical_numbers

EPS = np.finfo(float).eps
SHAPES = ["threshold", "sigmoid"]
NIGHT = Case.from_starting_case("altitude-4559-night").loop()
shapes = pytest.mark.parametrize("shape", SHAPES)


def _with_enough_oxygen(numbers: dict[str, float]) -> dict[str, float]:
    """Moves a draw without arterial oxygen to the nearest that has 15 mmHg or more."""
    need = 15.0 + numbers["resting_paco2_mmhg"] / 0.6
    fraction = min(1.0, max(numbers["inspired_o2_fraction"], need / (numbers["barometric_pressure_mmhg"] - 47.0)))
    rich = {**numbers, "inspired_o2_fraction": fraction}
    alveolar = by_hand_alveolar(rich, rich["resting_paco2_mmhg"])
    return {**rich, "alveolar_arterial_difference_mmhg": min(numbers["alveolar_arterial_difference_mmhg"], alveolar - 10.0)}


drawn = in_range("breathing").map(_with_enough_oxygen)
moves = st.lists(st.floats(-0.15, 0.15), min_size=7, max_size=7)


# ---- the equations once more, by hand: no code shared with the package, minutes inside --------------------------------------------
def by_hand_alveolar(p: dict[str, float], pressure: float) -> float:
    f, r = p["inspired_o2_fraction"], p["respiratory_quotient"]
    over = pressure - p["inspired_pco2_mmhg"]
    return f * (p["barometric_pressure_mmhg"] - 47.0) - over / r + over * f * (1.0 - r) / r


def by_hand_multiplier(po2: float) -> float:
    return math.exp(-0.05 * (max(po2, 0.0) - 100.0))


def by_hand_drive(p: dict[str, float], shape: str, pa: float, po2: float, pc: float, push: float = 0.0) -> float:
    p0, sp, sc = p["resting_paco2_mmhg"], p["peripheral_gain_l_min_mmhg"], p["central_gain_l_min_mmhg"]
    v0 = 863.0 * p["co2_production_l_min"] / ((1.0 - p["dead_space_fraction"]) * (p0 - p["inspired_pco2_mmhg"]))
    own = by_hand_multiplier(by_hand_alveolar(p, p0) - p["alveolar_arterial_difference_mmhg"])
    slope = sp * own + sc
    threshold = p0 - v0 / slope
    line = sp * by_hand_multiplier(po2) * (pa - threshold) + sc * (pc - threshold) + push
    if shape == "threshold":
        return max(0.0, line)
    effective, vmax = threshold + line / slope, p["largest_ventilation_l_min"]
    if effective <= 0.0:
        return 0.0
    n = slope * p0 / v0 / (1.0 - v0 / vmax)
    return vmax / (1.0 + (vmax / v0 - 1.0) * math.exp(min(n * math.log(p0 / effective), 700.0)))


def by_hand_exponent(p: dict[str, float]) -> float:
    """The sigmoid's power at the least oxygen that a test visits, where the line is steepest."""
    p0 = p["resting_paco2_mmhg"]
    v0 = 863.0 * p["co2_production_l_min"] / ((1.0 - p["dead_space_fraction"]) * (p0 - p["inspired_pco2_mmhg"]))
    steepest = p["peripheral_gain_l_min_mmhg"] * 150.0 + p["central_gain_l_min_mmhg"]
    return steepest * p0 / v0 / (1.0 - v0 / p["largest_ventilation_l_min"])


def by_hand_rates(p: dict[str, float], v: float, pa: float, pv: float, po2: float, pc: float, pa_central: float) -> list[float]:
    """Per minute; the central lag turned to minutes too."""
    share, q, beta, f, r = (
        1.0 - p["dead_space_fraction"], p["cardiac_output_l_min"], p["co2_solubility_per_mmhg"], p["inspired_o2_fraction"],
        p["respiratory_quotient"],
    )  # fmt: skip
    difference, vco2 = p["alveolar_arterial_difference_mmhg"], p["co2_production_l_min"]
    rest_po2 = by_hand_alveolar(p, p["resting_paco2_mmhg"]) - difference
    vo2 = vco2 / r
    bound = rest_po2**3 + 150.0 * rest_po2
    slope = 0.20 * 23400.0 * (3.0 * rest_po2**2 + 150.0) / (bound + 23400.0) ** 2 + 3.1e-5
    taken_up = 863.0 * vo2 + 863.0 * q * slope * (po2 - rest_po2)
    # Where less CO2 comes out than O2 goes in, gas of the inspired kind follows to keep the lung's volume.
    follows = f * 863.0 * (vo2 - vco2)
    alveolar = po2 + difference
    return [
        (863.0 * beta * q * (pv - pa) - share * v * (pa - p["inspired_pco2_mmhg"])) / p["lung_volume_l"],
        (vco2 - beta * q * (pv - pa)) / (p["tissue_volume_l"] * beta),
        (share * v * (f * (p["barometric_pressure_mmhg"] - 47.0) - alveolar) + follows - taken_up) / p["lung_volume_l"],
        60.0 * (pa_central - pc) / p["central_time_constant_s"],
    ]


def with_oxygen(numbers: dict[str, float], shape: str = "threshold") -> BreathingLoop:
    return BreathingLoop(**numbers, drive_shape=shape, gases="co2_o2")


# ---- the form ---------------------------------------------------------------------------------------------------------------------
def test_the_loop_and_its_drive_keep_the_protocol() -> None:
    assert isinstance(NIGHT, Loop)
    assert NIGHT.form().state_names == ("PaCO2", "PvCO2", "PaO2", "central PCO2")
    for shape, corner in (("threshold", True), ("sigmoid", False)):
        drive = replace(NIGHT, drive_shape=shape).form().drive
        assert isinstance(drive, Drive)
        assert drive.has_kink is corner


@shapes
@given(numbers=drawn, factors=moves)
def test_rates_are_the_written_equations(shape: str, numbers: dict[str, float], factors: list[float]) -> None:
    # Oracle: by_hand_rates. Tolerance: rounding of the largest terms; a steep line is a difference of products up to slope times P.
    loop = with_oxygen(numbers, shape)
    form, rest = loop.form(), loop.rest()
    state = rest.state * (1.0 + np.array(factors[:4]))
    late = form.sensed_rows @ rest.state[:3] * (1.0 + np.array(factors[4:]))
    ventilation = by_hand_drive(numbers, shape, late[0], late[2], state[3])
    expected = np.array(by_hand_rates(numbers, ventilation, *state, late[1])) / 60.0
    slope = numbers["peripheral_gain_l_min_mmhg"] * 150.0 + numbers["central_gain_l_min_mmhg"]
    steep = 1.0 + slope * rest.state[0] / rest.output
    washout = float(-form.plant_by_output[0, 0])
    terms = np.abs(form.plant).max() * np.abs(state).max() + washout * (ventilation + slope * 80.0) * (np.abs(state).max() + 713.0)
    assert np.abs(form.rhs(state, late) - expected).max() <= 64.0 * EPS * (steep if shape == "sigmoid" else 1.0) * terms
    scalar = form.drive.scalar(tuple(map(float, late)), (float(state[3]),), 0.0)
    assert scalar == pytest.approx(ventilation, rel=1e-11 * steep, abs=256.0 * EPS * slope * 100.0)


@shapes
@given(numbers=drawn)
def test_nothing_moves_at_rest_and_oxygen_there_is_the_alveolar_gas_equation(shape: str, numbers: dict[str, float]) -> None:
    loop = with_oxygen(numbers, shape)
    form, rest = loop.form(), loop.rest()
    late = form.sensed_rows @ rest.state[:3]
    scale = np.abs(form.plant).max() * np.abs(rest.state).max() + rest.output * float(-form.plant_by_output[0, 0]) * 800.0
    assert np.abs(form.rhs(rest.state, late)).max() <= 1e-10 * scale
    # Oracle: the full alveolar gas equation, by hand.
    arterial = by_hand_alveolar(numbers, numbers["resting_paco2_mmhg"]) - numbers["alveolar_arterial_difference_mmhg"]
    assert rest.state[2] == pytest.approx(arterial, abs=1e-9)
    assert loop.resting_po2_mmhg == rest.state[2]


@shapes
@given(numbers=drawn, factors=moves)
def test_the_gradient_is_a_central_difference(shape: str, numbers: dict[str, float], factors: list[float]) -> None:
    # Oracle: central differences of two steps; their error is h^4 of the fifth derivative, for a power law of exponent n under
    # (n h)^4 = 1e-16 of the value over n h, and eps/h of the value.
    numbers = {**numbers, "peripheral_gain_l_min_mmhg": min(numbers["peripheral_gain_l_min_mmhg"], 2.0)}
    loop = with_oxygen(numbers, shape)
    form, rest = loop.form(), loop.rest()
    drive = form.drive
    late = form.sensed_rows @ rest.state[:3] * (1.0 + 0.1 * np.array(factors[:3]))
    arguments = np.concatenate([late, rest.state[3:] * (1.0 + 0.1 * factors[3])])
    gradient = drive.gradient(arguments[:3], arguments[3:])
    assert gradient.shape == (4,)
    steep = 1.0 + by_hand_exponent(numbers) if shape == "sigmoid" else 1.0
    for j, argument in enumerate(arguments):
        step = 1e-4 * argument / steep
        values = {}
        for k in (-2, -1, 1, 2):
            moved = arguments.copy()
            moved[j] += k * step
            values[k] = (float(drive.value(moved[:3], moved[3:])), float(drive.switch(moved[:3], moved[3:])))
        if drive.has_kink and min(v[1] for v in values.values()) <= 0.0 <= max(v[1] for v in values.values()):
            continue  # the corner lies between: there is no slope to compare
        slope = (8.0 * (values[1][0] - values[-1][0]) - (values[2][0] - values[-2][0])) / (12.0 * step)
        size = max(abs(v[0]) for v in values.values()) + float(np.max(np.abs(gradient * arguments)))
        assert gradient[j] == pytest.approx(slope, rel=1e-5, abs=64.0 * EPS * size * steep / step + 1e-7 * float(np.max(np.abs(gradient))))


def test_the_lines_of_all_pressures_meet_at_the_apnoeic_threshold() -> None:
    # Law of the form: at B ventilation is zero whatever the PaO2; above it, less oxygen drives more.
    threshold = NIGHT.resting_paco2_mmhg - NIGHT.co2_reserve_mmhg()
    drive = NIGHT.form().drive
    for po2 in (25.0, 37.0, 60.0, 100.0):
        at = float(drive.switch(np.array([threshold, threshold, po2]), np.array([threshold])))
        assert at == pytest.approx(0.0, abs=1e-10)
    above = [float(drive.value(np.array([32.0, 32.0, po2]), np.array([32.0]))) for po2 in (25.0, 37.0, 60.0, 100.0)]
    assert above == sorted(above, reverse=True) and above[0] > 2.0 * above[-1]


# ---- against the form without oxygen ----------------------------------------------------------------------------------------------
def check_same_open_loop(one: BreathingLoop, other: BreathingLoop, slack: float) -> None:
    frequency = np.geomspace(1e-3, 2.0, 40)
    first = open_loop(one.form(), one.rest()).response(frequency)
    second = open_loop(other.form(), other.rest()).response(frequency)
    np.testing.assert_allclose(first, second, rtol=slack, atol=slack * np.abs(second).max())


@shapes
def test_with_a_flat_oxygen_sensitivity_it_is_the_loop_without_oxygen(shape: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(gases, "HYPOXIC_RATE", 0.0)
    monkeypatch.setattr(breathing_oxygen, "HYPOXIC_RATE", 0.0)
    periodic = replace(Case.from_starting_case("heart-failure-periodic").loop(), drive_shape=shape)
    both = replace(periodic, gases="co2_o2", barometric_pressure_mmhg=560.0)
    check_same_open_loop(both, periodic, 1e-12)
    sigh = pulse("sigh", 5.0, 6.0, 15.0)
    with_o2 = simulate(both, duration=200.0, disturbances=sigh, purpose="release")
    without = simulate(periodic, duration=200.0, disturbances=sigh, purpose="release")
    # Each run is good to 1e-6 of each state.
    np.testing.assert_allclose(with_o2.states[:, [0, 1, 3]], without.states, rtol=4e-6)


def test_without_a_peripheral_gain_oxygen_does_nothing() -> None:
    check_same_open_loop(replace(NIGHT, peripheral_gain_l_min_mmhg=0.0), replace(NIGHT, peripheral_gain_l_min_mmhg=0.0, gases="co2"), 1e-12)


@shapes
def test_held_at_its_resting_oxygen_the_drive_is_the_one_on_co2(shape: str) -> None:
    both = replace(NIGHT, drive_shape=shape)
    oxygen = float(both.rest().state[2])
    single = replace(both, gases="co2", arterial_po2_mmhg=oxygen)
    for pressure, central, push in ((28.0, 30.0, 0.0), (30.0, 30.0, 0.0), (33.0, 29.5, 4.0)):
        assert both.form().drive.value(np.array([pressure, pressure, oxygen]), np.array([central]), push) == pytest.approx(
            float(single.form().drive.value(np.array([pressure, pressure]), np.array([central]), push)), rel=1e-11, abs=1e-11
        )
    assert both.sensitivity == pytest.approx(single.sensitivity, rel=8 * EPS)
    assert both.co2_reserve_mmhg() == pytest.approx(single.co2_reserve_mmhg(), rel=16 * EPS)


def test_swings_of_oxygen_matter_high_up_and_little_in_full_oxygen() -> None:
    # The feature matters: held oxygen gives another loop gain at 4,559 m, and none in pure oxygen, where g is e^-28.
    def gain(loop: BreathingLoop) -> float:
        found = margins(loop.form(), loop.rest()).loop_gain
        assert found is not None
        return found

    held = replace(NIGHT, gases="co2", arterial_po2_mmhg=float(NIGHT.rest().state[2]))
    assert abs(gain(NIGHT) / gain(held) - 1.0) > 0.05
    rich = replace(NIGHT, inspired_o2_fraction=1.0, barometric_pressure_mmhg=760.0)
    bare = replace(rich, gases="co2", arterial_po2_mmhg=600.0)
    assert gain(rich) == pytest.approx(gain(bare), rel=1e-9)


# ---- the engine on it -------------------------------------------------------------------------------------------------------------
def numbers_of(loop: BreathingLoop) -> dict[str, float]:
    return {name: float(getattr(loop, name)) for name in typical_numbers("breathing")}


def test_a_dominant_root_solves_the_hand_written_characteristic_equation() -> None:
    # Oracle: det(sI - J - sum_k J_k e^(-s tau_k)) with Jacobians of by_hand_rates by central differences, per second.
    p, rest = numbers_of(NIGHT), NIGHT.rest().state

    def rates(now: np.ndarray, late_p: np.ndarray, late_c: float) -> np.ndarray:
        v = by_hand_drive(p, "threshold", late_p[0], late_p[1], now[3])
        return np.array(by_hand_rates(p, v, *now, late_c)) / 60.0

    def jacobian(part: int, size: int) -> np.ndarray:
        columns = []
        for j in range(size):
            ends = []
            for sign in (1.0, -1.0):
                now, late_p, late_c = rest.copy(), rest[[0, 2]].copy(), np.array([rest[0]])
                (now, late_p, late_c)[part][j] += sign * 1e-3
                ends.append(rates(now, late_p, float(late_c[0])))
            columns.append((ends[0] - ends[1]) / 2e-3)
        return np.array(columns).T

    now, peripheral, central = np.zeros((4, 4)), np.zeros((4, 4)), np.zeros((4, 4))
    now[:, :] = jacobian(0, 4)
    peripheral[:, [0, 2]] = jacobian(1, 2)
    central[:, [0]] = jacobian(2, 1)

    def characteristic(s: complex) -> complex:
        late = peripheral * np.exp(-s * p["peripheral_delay_s"]) + central * np.exp(-s * p["central_delay_s"])
        return complex(np.linalg.det(s * np.eye(4) - now - late))

    root = rightmost_roots(NIGHT.form(), NIGHT.rest()).oscillatory
    assert root is not None and root.real > 0.0
    slope = (characteristic(root + 1e-5) - characteristic(root - 1e-5)) / 2e-5
    # A Newton step from the engine's root to the oracle's own: the differences are good to about 1e-7 of the growth.
    assert abs(characteristic(root) / slope) <= 1e-6 * abs(root)


def test_a_run_agrees_with_plain_steps_of_the_hand_written_equations() -> None:
    # Oracle: Heun's method on by_hand_rates, both delays whole steps, extrapolated from two steps (third order where smooth; a kink
    # at each start of apnoea leaves h^2): 2e-4 of each state over three cycles.
    p, rest = numbers_of(NIGHT), NIGHT.rest().state
    duration = 60.0

    def stepped(h: float) -> np.ndarray:
        n, late_p, late_c = round(duration / h), round(p["peripheral_delay_s"] / h), round(p["central_delay_s"] / h)
        states = [rest.tolist()]

        def past(k: int) -> list[float]:
            return states[max(k, 0)] if k > 0 else start

        start = (rest + np.array([1.0, 0.0, -2.0, 0.0])).tolist()
        states[0] = start

        def slope(k: int, now: list[float]) -> list[float]:
            seen, mid = past(k - late_p), past(k - late_c)
            v = by_hand_drive(p, "threshold", seen[0], seen[2], now[3])
            return [rate / 60.0 for rate in by_hand_rates(p, v, *now, mid[0])]

        for k in range(n):
            now = states[-1]
            first = slope(k, now)
            guess = [x + h * r for x, r in zip(now, first, strict=True)]
            second = slope(k + 1, guess)
            states.append([x + 0.5 * h * (a + b) for x, a, b in zip(now, first, second, strict=True)])
        return np.array(states)

    coarse, fine = stepped(0.1), stepped(0.05)[::2]
    oracle = fine + (fine - coarse) / 3.0
    ours = simulate(
        NIGHT, duration=duration, offset={"PaCO2": 1.0, "PaO2": -2.0}, purpose="release", output_times=np.arange(len(oracle)) * 0.1
    )
    assert ours.status == "completed"
    np.testing.assert_allclose(ours.states / np.abs(oracle).max(axis=0), oracle / np.abs(oracle).max(axis=0), atol=2e-4)
    assert ours.output.min() == 0.0 and np.ptp(ours.states[:, 2]) > 5.0, "the run holds apnoea and a swing of oxygen"


@shapes
@given(data=st.data())
def test_a_batch_is_its_members(shape: str, data: st.DataObject) -> None:
    several = [data.draw(drawn) for _ in range(3)]
    members = [with_oxygen(numbers, shape) for numbers in several]
    batch = with_oxygen({name: np.array([numbers[name] for numbers in several]) for name in several[0]}, shape)  # type: ignore[misc]
    assert batch_shape(batch) == (3,)
    form = batch.form()
    np.testing.assert_allclose(batch.rest().state, np.stack([m.rest().state for m in members], axis=-1), rtol=1e-12)
    for name in ("plant", "plant_by_output", "input_vector", "constant", "control_by_sensed"):
        single = np.stack([getattr(m.form(), name) for m in members], axis=-1)
        np.testing.assert_allclose(getattr(form, name), single, rtol=1e-12, atol=1e-12 * np.abs(single).max(), err_msg=name)
    late = np.einsum("jp,p...->j...", form.sensed_rows, batch.rest().state[:3]) * 1.01
    control = batch.rest().state[3:]
    for ask in ("value", "switch", "gradient"):
        single = np.stack([getattr(m.form().drive, ask)(late[:, i], control[:, i]) for i, m in enumerate(members)], axis=-1)
        np.testing.assert_allclose(getattr(form.drive, ask)(late, control), single, rtol=1e-9, atol=1e-10 * (1.0 + np.abs(single).max()))


def test_margins_of_a_batch_over_the_map_are_those_of_its_members() -> None:
    sensitivities = NIGHT.sensitivity * np.array([[0.4], [1.0]])
    delays = np.array([[5.0, 7.0, 11.0]])
    grid = NIGHT.with_sensitivity(sensitivities).with_delay(delays)
    found = margins_batch(grid.form(), grid.rest())
    for i in range(2):
        for k in range(3):
            one = NIGHT.with_sensitivity(float(sensitivities[i, 0])).with_delay(float(delays[0, k]))
            # Two methods of the engine, both polished by Newton to 1e-9 and better.
            assert found.loop_gain[i, k] == pytest.approx(margins(one.form(), one.rest()).loop_gain, rel=1e-7)


def test_the_boundary_of_a_loop_that_is_not_proportional_to_its_sensitivity() -> None:
    # Oxygen's slope at rest does not grow with the gain, so the curve is found by the second method. Law: on it a root pair lies on
    # the imaginary axis, its period the curve's; Newton on the edge is good to 1e-8.
    found = boundary_curve(NIGHT)
    assert found.curves
    for curve in found.curves:
        for i in (len(curve.delay_s) // 4, len(curve.delay_s) // 2):
            one = NIGHT.with_sensitivity(float(curve.sensitivity[i])).with_delay(float(curve.delay_s[i]))
            s = 2j * math.pi / float(curve.period_s[i])
            assert abs(1.0 + open_loop(one.form(), one.rest()).at(s)[0]) <= 1e-6


# ---- a controller that stays while the plant changes ------------------------------------------------------------------------------
@shapes
@given(numbers=drawn, oxygen=st.floats(1.0, 1.6), share=st.floats(0.8, 1.25))
def test_a_fixed_controller_finds_the_new_rest(shape: str, numbers: dict[str, float], oxygen: float, share: float) -> None:
    # Laws at the new rest: the hyperbola, the alveolar gas equation, and the drive of the old line, each by hand.
    numbers = {**numbers, "inspired_o2_fraction": min(numbers["inspired_o2_fraction"], 0.6)}
    numbers = _with_enough_oxygen(numbers)
    before = with_oxygen(numbers, shape)
    plant = {
        "inspired_o2_fraction": min(1.0, numbers["inspired_o2_fraction"] * oxygen),
        "co2_production_l_min": numbers["co2_production_l_min"] * share,
    }
    try:
        rest = before.freeze_line().with_numbers(**plant).rest()
    except InvalidInputError:
        return  # refused in words: tested below
    new = {**numbers, **plant}
    over = rest.state[0] - numbers["inspired_pco2_mmhg"]
    assert (1.0 - new["dead_space_fraction"]) * rest.output * over == pytest.approx(863.0 * new["co2_production_l_min"], rel=1e-9)
    arterial = by_hand_alveolar(new, rest.state[0]) - new["alveolar_arterial_difference_mmhg"]
    assert rest.state[2] == pytest.approx(arterial, abs=1e-9)
    drive = by_hand_drive(numbers, shape, rest.state[0], rest.state[2], rest.state[0])
    slope = numbers["peripheral_gain_l_min_mmhg"] * by_hand_multiplier(arterial) + numbers["central_gain_l_min_mmhg"]
    assert drive == pytest.approx(rest.output, rel=1e-8, abs=1e-11 * slope * 200.0)


def test_freezing_the_line_changes_nothing_by_itself_and_oxygen_then_quiets() -> None:
    frozen = NIGHT.freeze_line()
    np.testing.assert_allclose(frozen.rest().state, NIGHT.rest().state, rtol=1e-13)
    rich = frozen.with_inspired_po2_rise(60.0)
    assert rich.inspired_o2_fraction == pytest.approx(0.2093 + 60.0 / (443.5 - 47.0), rel=1e-12)
    # More oxygen: less drive, so PaCO2 rises and ventilation falls; and the loop gain falls.
    assert rich.rest().state[0] > NIGHT.rest().state[0] and rich.rest().output < NIGHT.rest().output
    before, after = margins(NIGHT.form(), NIGHT.rest()).loop_gain, margins(rich.form(), rich.rest()).loop_gain
    assert before is not None and after is not None and after < 0.3 * before


def test_the_rise_of_inspired_oxygen_without_the_oxygen_state_is_one_of_pao2() -> None:
    single = replace(NIGHT, gases="co2", arterial_po2_mmhg=60.0)
    assert single.with_inspired_po2_rise(30.0).arterial_po2_mmhg == 90.0
    assert single.with_inspired_po2_rise(900.0).arterial_po2_mmhg == 600.0
    assert NIGHT.with_inspired_po2_rise(900.0).inspired_o2_fraction == 1.0


@pytest.mark.parametrize("loop", [NIGHT, NIGHT.freeze_line().with_numbers(inspired_o2_fraction=0.25)], ids=["own line", "fixed line"])
def test_a_new_sensitivity_keeps_rest_and_split(loop: BreathingLoop) -> None:
    stronger = loop.with_sensitivity(1.5 * loop.sensitivity)
    assert stronger.sensitivity == pytest.approx(1.5 * loop.sensitivity, rel=1e-12)
    np.testing.assert_allclose(stronger.rest().state, loop.rest().state, rtol=1e-12)
    split = loop.peripheral_gain_l_min_mmhg / loop.central_gain_l_min_mmhg
    assert stronger.peripheral_gain_l_min_mmhg / stronger.central_gain_l_min_mmhg == pytest.approx(split, rel=1e-12)
    with_one = loop.with_sensitivity(loop.sensitivity)
    check_same_open_loop(with_one, loop, 1e-10)


# ---- signals and refusals ---------------------------------------------------------------------------------------------------------
def test_the_sensor_shows_the_saturation_of_its_delay_ago() -> None:
    # Oracle: a PaO2 that rises by 1 mmHg/s from 40, shown 12 s late by interpolation between whole seconds: exact on a straight line.
    loop = replace(NIGHT, sensor_delay_s=12.0)
    times = np.arange(0.0, 31.0)
    states = np.stack([np.full(31, 30.0), np.full(31, 34.0), 40.0 + times, np.full(31, 29.0)], axis=-1)
    signals = {signal.name: signal for signal in loop.signals(states, np.full(31, 6.0), times)}
    expected = 100.0 * gases.saturation(40.0 + np.maximum(times - 12.0, 0.0))
    np.testing.assert_allclose(signals["spo2"].values, expected, rtol=1e-13)
    np.testing.assert_allclose(signals["sao2"].values, 100.0 * gases.saturation(40.0 + times), rtol=1e-13)
    assert signals["central_pco2"].values[0] == 29.0 and signals["pao2"].values[-1] == 70.0
    without_times = {signal.name for signal in loop.signals(states, np.full(31, 6.0))}
    assert "spo2" not in without_times and "sao2" in without_times, "a curve that is not late is not called the sensor's"


def test_a_step_of_inspired_oxygen_is_a_change_of_the_parameter() -> None:
    form, numbers = NIGHT.form(), numbers_of(NIGHT)
    state = np.array([31.0, 34.0, 39.0, 30.0])
    richer = {**numbers, "barometric_pressure_mmhg": numbers["barometric_pressure_mmhg"] + 10.0 / numbers["inspired_o2_fraction"]}
    inside: Any = {"inspired_pco2": 2.0, "inspired_po2": 10.0}
    # Only the washed-in gas differs: by hand, E V rise / V_L per minute.
    washed = 0.7 * 7.0 / numbers["lung_volume_l"] / 60.0
    for row, (name, rise) in zip((0, 2), inside.items(), strict=True):
        channel = form.channels[name]
        assert channel.plant_by_output is not None
        assert rise * 7.0 * channel.plant_by_output[row] == pytest.approx(rise * washed, rel=1e-12)
        assert np.count_nonzero(channel.plant_by_output) == 1
    before, after = by_hand_rates(numbers, 7.0, *state, 31.0), by_hand_rates(richer, 7.0, *state, 31.0)
    # by_hand_rates also moves the resting PaO2, hence the uptake's pivot: taken off by comparing CO2 only.
    assert before[:2] == after[:2]


@pytest.mark.parametrize("question", ["rest", "form"])
def test_numbers_that_leave_no_arterial_oxygen_are_refused(question: str) -> None:
    with pytest.raises(InvalidInputError, match=r"leave an arterial PO2 of -?[\d.]+ mmHg at rest, and it must be above 0: the inspired"):
        getattr(replace(NIGHT, resting_paco2_mmhg=70.0), question)()
    batch = replace(NIGHT, resting_paco2_mmhg=np.array([30.0, 70.0]))
    with pytest.raises(InvalidInputError, match="must be above 0"):
        getattr(batch, question)()


def test_a_drive_that_oxygen_takes_away_whole_is_refused() -> None:
    # A carotid body that does it all, and pure oxygen: g falls from 23 to e^-28 and the little central gain never meets the load.
    lone = replace(NIGHT, central_gain_l_min_mmhg=1e-6).freeze_line()
    with pytest.raises(InvalidInputError, match="the drive to breathe does not meet the CO2 production below a PaCO2 of 200 mmHg"):
        lone.with_numbers(inspired_o2_fraction=1.0, barometric_pressure_mmhg=760.0).rest()
