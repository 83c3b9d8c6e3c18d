"""Limit cycles by harmonic balance against independent runs, closed forms and the general balance."""

import math

import numpy as np
import pytest

from engine.oracle_loops import cycle_of, p2, run_breathing, wright
from lagscape.engine.cycle import CycleStatus, limit_cycle
from lagscape.engine.harmonic import Harmonics, prepare, solve
from lagscape.engine.margins import margins
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


def cycle(loop, order=16, start=None):
    return limit_cycle(loop.form(), loop.rest(), start, order)


def test_apnoea_cycle_of_reference():
    # Oracle: the reference cycle on which collocation with exact kinks and a compiled Runge-Kutta run agreed: 12.254640 mmHg,
    # 33.817637 s, apnoea 0.469392. Tolerance: the truncation measured at that order (2e-5 at H = 64, 8e-4 at 16).
    for order, amplitude, period, apnoea in ((16, 8e-4, 1e-5, 1e-4), (64, 3e-5, 5e-6, 5e-6)):
        found = cycle(p2(), order)
        assert found.status is CycleStatus.CONVERGED
        assert abs(found.state_amplitudes[0] / 12.254640 - 1.0) < amplitude
        assert abs(found.period_s / 33.817637 - 1.0) < period
        assert abs(found.silent_fraction - 0.469392) < apnoea
        assert found.duty_ratio == 1.0 - found.silent_fraction
        assert found.residual < 1e-6


@pytest.mark.parametrize("loop", [p2(), p2(1.6, 1.0), p2(2.0, 0.5, 20.0, 25.0)])
def test_agrees_with_a_plain_runge_kutta_run(loop):
    # Oracle: the loop's own equations by a Runge-Kutta loop in the test, 2400 s. Tolerance: 1e-3 of the amplitude from truncation at
    # H = 32 and the run's step and settling together; 1e-4 of the period.
    period, amplitude = cycle_of(*run_breathing(loop, 2400.0, 0.25)[:2])
    found = cycle(loop, 32)
    assert abs(found.period_s / period - 1.0) < 1e-4
    assert abs(found.state_amplitudes[0] / amplitude - 1.0) < 1e-3
    assert found.output.min() >= 0.0


def test_small_cycle_of_the_wright_equation():
    # Oracle: x' = -alpha x(t - 1)(1 + x), alpha = pi/2 + e: amplitude sqrt(40 e / (3 pi - 2)), period 4 at onset (from memory, Chow and
    # Mallet-Paret 1977). The next term is of order e: 2 e is allowed.
    for excess in (1e-3, 1e-2):
        found = limit_cycle(*wright(math.pi / 2.0 + excess))
        assert found.status is CycleStatus.CONVERGED
        expected = math.sqrt(40.0 * excess / (3.0 * math.pi - 2.0))
        assert abs(0.5 * found.state_amplitudes[0] / expected - 1.0) < 2.0 * excess
        assert abs(found.period_s / 4.0 - 1.0) < 2.0 * excess


def test_saturated_reflex_is_near_its_describing_function():
    # Oracle: first-harmonic balance of tanh alone: the plant filters the third harmonic to under a hundredth, so amplitude and
    # period agree within 1 %. N(A) = (1/pi) int tanh(A cos) cos / A = 1 / loop_gain by quadrature in the test.
    loop = ReflexLoop(reflex_gain_per_rad=8.0)
    known = margins(loop.form(), loop.rest())
    angle = 2.0 * np.pi * np.arange(4096) / 4096
    amplitudes = np.linspace(0.05, 30.0, 4000)
    first = np.array([2.0 * np.mean(np.tanh(a * np.cos(angle)) * np.cos(angle)) / a for a in amplitudes])
    expected = np.interp(-1.0 / known.loop_gain, -first, amplitudes)
    found = cycle(loop)
    assert abs(found.state_amplitudes[2] / (2.0 * expected) - 1.0) < 0.01
    assert abs(found.period_s * known.phase_crossover_frequency / (2.0 * math.pi) - 1.0) < 0.01
    assert found.silent_fraction == 0.0


def test_steep_plain_loop_relaxes_between_two_exponentials():
    # Oracle: for n to infinity clearance switches at the half level: x rises at L while x(t - tau) < theta and decays towards L/Vmax
    # else. Rise from x_a: theta + L tau at the top; then decay for the time to fall to theta plus tau. The period follows in closed
    # form. n = 60 differs by order 1/n.
    production, clearance, half, delay = 0.2, 0.8, 0.5, 10.0
    floor = production / clearance
    top = half + production * delay
    fall = math.log((top - floor) / (half - floor)) / clearance
    bottom = floor + (half - floor) * math.exp(-clearance * delay)
    rise = (half - bottom) / production
    found = cycle(PlainLoop(production, clearance, 60.0, half, delay), 64)
    assert found.status is CycleStatus.CONVERGED
    assert abs(found.period_s / (2.0 * delay + fall + rise) - 1.0) < 0.05
    assert abs(found.state_amplitudes[0] / (top - bottom) - 1.0) < 0.05


def test_convergence_in_the_number_of_harmonics():
    # On a smooth law the error falls faster than any power; with the clip's corner about as the third power. Oracle: order 64.
    for loop, ratio in ((p2(2.0, 1.0).with_numbers(drive_shape="sigmoid"), 50.0), (p2(), 4.0)):
        reference = cycle(loop, 64)
        errors = [abs(cycle(loop, order).state_amplitudes[0] / reference.state_amplitudes[0] - 1.0) for order in (4, 12)]
        assert errors[1] < errors[0] / ratio


@pytest.mark.parametrize(
    "loop",
    [p2(), ReflexLoop(reflex_gain_per_rad=8.0), PlainLoop(half_level=0.5, exponent=5.0), p2().with_numbers(drive_shape="sigmoid")],
)
def test_quick_and_general_balance_agree(loop):
    # Oracle: the general batched balance, written separately. Tolerance: both stop when a Newton step is under 1e-7.
    form, rest = loop.form(), loop.rest()
    found = cycle(loop)
    solved = solve(prepare(form, rest), found.harmonics)
    assert solved.converged[0]
    assert abs(solved.harmonics.omega[0] / found.harmonics.omega[0] - 1.0) < 1e-9
    assert np.max(np.abs(solved.harmonics.force - found.harmonics.force)) < 1e-8 * np.max(np.abs(found.harmonics.force))


@pytest.mark.parametrize("loop", [p2(), BreathingLoop(gases="co2_o2", arterial_po2_mmhg=50.0, peripheral_gain_l_min_mmhg=0.6)])
def test_general_jacobian_is_the_derivative(loop):
    # Oracle: central differences of the residual, two controlled rows included. Tolerance: the clip's corner moves with the argument
    # and the difference sees it only where a sample crosses it; the step is small enough that none does.
    form, rest = loop.form(), loop.rest()
    balance = prepare(form, rest)
    rng = np.random.default_rng(2)
    rows, order = len(balance.rows), 3
    scale = np.max(np.abs(balance.level)) * 0.3 * abs(balance.output_rest[0])
    force = scale * (rng.standard_normal((1, rows, order + 1)) + 1j * rng.standard_normal((1, rows, order + 1))) / 3.0
    force[:, :, 0] = force[:, :, 0].real
    guess = Harmonics(force, np.array([0.17]))
    _, jacobian, by_omega, _ = balance.equations(guess, 64)
    half, h = rows * (order + 1), 1e-6 * scale

    def residual(force, omega):
        value = balance.equations(Harmonics(force, np.array([omega])), 64)[0].reshape(-1)
        return np.concatenate([value.real, value.imag])

    for column in range(2 * half):
        if column >= half and (column - half) % (order + 1) == 0:
            continue
        move = np.zeros(half, dtype=complex)
        move[column % half] = h if column < half else 1j * h
        rough = (residual(force + move.reshape(force.shape), 0.17) - residual(force - move.reshape(force.shape), 0.17)) / (2.0 * h)
        assert np.max(np.abs(rough - jacobian[0, :, column])) < 1e-6 * (1.0 + np.max(np.abs(rough)))
    rough = (residual(force, 0.17 + 1e-7) - residual(force, 0.17 - 1e-7)) / 2e-7
    exact = np.concatenate([by_omega.reshape(-1).real, by_omega.reshape(-1).imag])
    assert np.max(np.abs(rough - exact)) < 1e-5 * np.max(np.abs(exact))


def test_warm_start_gives_the_cold_result():
    cold = cycle(p2())
    near = p2().with_sensitivity(4.1)
    warm = cycle(near, start=cold)
    alone = cycle(near)
    assert abs(warm.period_s / alone.period_s - 1.0) < 1e-9
    assert abs(warm.output_amplitude / alone.output_amplitude - 1.0) < 1e-8


def test_one_period_of_curves_closes_and_has_the_stated_size():
    found = cycle(p2())
    assert found.times[0] == 0.0 and found.times[-1] == found.period_s
    assert np.array_equal(found.states[0], found.states[-1])
    assert abs(np.ptp(found.output) / found.output_amplitude - 1.0) < 1e-3
    assert abs(np.mean(found.output <= 0.0) - found.silent_fraction) < 1.5 / 257


def test_a_loop_that_settles_has_no_cycle():
    found = cycle(p2(0.3, 0.2))
    assert found.status is CycleStatus.SETTLES
    assert found.period_s is None and found.silent_fraction is None


def test_grazing_apnoea_touches_zero_ventilation():
    # Between the two sensitivities the trough of ventilation reaches zero: silence begins from nothing and grows steadily.
    start = None
    shares = []
    low = 2.0
    for factor in np.linspace(1.0, 1.25, 26):
        loop = p2(1.0, 0.4).with_sensitivity(low * factor)
        found = cycle(loop, start=start)
        if found.status is CycleStatus.CONVERGED:
            start = found
            shares.append((found.output.min(), found.silent_fraction))
    assert shares
    for trough, share in shares:
        assert trough >= 0.0
        assert (share > 0.0) == (trough <= 1e-12) or share < 0.02
    silent = [share for _, share in shares]
    assert silent == sorted(silent)
