"""Linear delay equations whose roots and boundaries are known in closed form, put to the engine as loops.

Oracles: Hayes 1950, J. London Math. Soc. 25, 226-232 (boundaries); the roots of x' = -b x(t - tau) from the Lambert W function; the
first-order lag with delay by its own phase equation, solved here by bisection. Digits given in the tables are computed from these.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.engine.margins import margins
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.simulate import simulate
from support.linear_loop import linear_form, linear_rest

EPS = np.finfo(float).eps


def rates(low: float, high: float) -> st.SearchStrategy[float]:
    """Rates to six places: a rate of 1e-200 is no rate of anything."""
    return st.floats(low, high).map(lambda value: round(value, 6))


def rightmost(a: float, b: float, tau: float) -> complex:
    """The rightmost root, of a pair the upper one."""
    return rightmost_roots(linear_form(a, b, tau), linear_rest()).values[0]


@pytest.mark.parametrize("tau", [0.01, 0.3, 1.0, 40.0])
def test_stability_is_lost_at_b_tau_half_pi_with_a_period_of_four_delays(tau: float) -> None:
    # Oracle: Hayes 1950. Tolerance: rounding of the polished root, scaled by 1/tau.
    root = rightmost(0.0, math.pi / 2.0 / tau, tau)
    assert abs(root.real) * tau <= 64 * EPS
    assert 2.0 * math.pi / root.imag == pytest.approx(4.0 * tau, rel=64 * EPS)
    found = margins(linear_form(0.0, math.pi / 2.0 / tau, tau), linear_rest())
    assert found.gain_margin == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize(
    ("b_tau", "root"),
    [(0.5, -0.794024 + 0.770112j), (1.0, -0.318132 + 1.337236j), (2.0, 0.172816 + 1.673686j)],
)
@pytest.mark.parametrize("tau", [0.2, 1.0, 12.0])
def test_rightmost_roots_of_the_pure_delay_equation(b_tau: float, root: complex, tau: float) -> None:
    # Oracle: W0(-b tau), computed to six places. Tolerance: half of the last place.
    found = rightmost(0.0, b_tau / tau, tau) * tau
    assert found.real == pytest.approx(root.real, abs=5e-7)
    assert found.imag == pytest.approx(root.imag, abs=5e-7)


def test_two_real_roots_meet_at_b_tau_one_over_e() -> None:
    # Oracle: W0(-1/e) = -1, a double root. Tolerance: a double root is known to the square root of rounding.
    found = rightmost(0.0, math.exp(-1.0), 1.0)
    assert abs(found + 1.0) < 1e-6


@pytest.mark.parametrize(("b_tau", "oscillates"), [(0.36, False), (0.6, True), (1.5, True)])
def test_the_answer_is_monotone_up_to_one_over_e(b_tau: float, oscillates: bool) -> None:
    # Oracle: monotone for b tau <= 1/e = 0.3679 (Hayes 1950), by the roots and by the simulated sign.
    root = rightmost(0.0, b_tau, 1.0)
    assert (abs(root.imag) > 0.0) is oscillates
    trace = simulate(linear_form(0.0, b_tau, 1.0), rest=linear_rest(), offset=1.0, duration=60.0, purpose="release")
    assert bool(np.any(trace.states < -1e-7)) is oscillates


@pytest.mark.parametrize(("a", "b", "critical"), [(0.5, 1.0, 2.4183992), (1.0, 2.0, 1.2091996)])
def test_critical_delay_of_the_scalar_equation(a: float, b: float, critical: float) -> None:
    # Oracle: tau_c = arccos(-a/b)/sqrt(b^2 - a^2). Tolerance: half of the seventh place.
    margin = margins(linear_form(a, b, 0.5), linear_rest()).delay_margin_s
    assert margin is not None
    assert 0.5 + margin == pytest.approx(critical, abs=5e-8)
    assert rightmost(a, b, critical - 1e-6).real < 0.0 < rightmost(a, b, critical + 1e-6).real


@given(a=rates(-0.9, 3.0), ratio=st.floats(1.05, 20.0))
def test_critical_delay_anywhere(a: float, ratio: float) -> None:
    # Same oracle over the plane, a < 0 included. The margin is a frequency and an angle, each right to a few roundings; near b = |a|
    # the frequency goes to zero and takes up to 1/(ratio - 1) of them.
    b = max(abs(a), 0.05) * ratio
    critical = math.acos(-a / b) / math.sqrt(b * b - a * a)
    margin = margins(linear_form(a, b, 0.5 * critical), linear_rest()).delay_margin_s
    assert margin is not None
    assert 0.5 * critical + margin == pytest.approx(critical, rel=1e-11)


@given(a=rates(-1.0, 4.0), b=rates(0.05, 8.0), tau=st.floats(0.05, 5.0))
def test_rightmost_root_is_lambert_w(a: float, b: float, tau: float) -> None:
    # Oracle: s = -a + W0(-b tau e^(a tau))/tau by scipy, checked in the equation itself, because W loses digits at its branch point.
    special = pytest.importorskip("scipy.special")
    argument = -b * tau * math.exp(a * tau)
    expected = complex(-a + special.lambertw(argument) / tau)
    if abs(argument + math.exp(-1.0)) < 1e-6 or not math.isfinite(expected.real):
        return
    found = rightmost(a, b, tau)
    residual = found + a + b * np.exp(-found * tau)
    assert abs(residual) <= 1e-11 * (abs(found) + abs(a) + b * math.exp(-found.real * tau))
    sensitive = 1e-9 * (1.0 + 1.0 / math.sqrt(abs(argument * math.e + 1.0)))
    assert abs(found.real - expected.real) <= sensitive * (abs(expected) + abs(a) + 1.0 / tau)


def lag_crossover(ratio: float) -> tuple[float, float]:
    """Frequency times delay and critical gain of K e^(-s tau)/(1 + s T), T = ratio tau, by bisection on tan(w tau) = -w T."""
    low, high = math.pi / 2.0, math.pi
    for _ in range(200):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if middle + math.atan(middle * ratio) < math.pi else (low, middle)
    return low, math.sqrt(1.0 + (low * ratio) ** 2)


@pytest.mark.parametrize(("ratio", "periods", "critical"), [(0.1, 2.1948, 1.0402), (1.0, 3.0971, 2.2618), (10.0, 3.8500, 16.3506)])
def test_first_order_lag_with_delay(ratio: float, periods: float, critical: float) -> None:
    # Oracle: tan(w tau) = -w T, K_c = sqrt(1 + (w T)^2). Tolerance: half of the fourth place.
    tau = 2.0
    found = margins(linear_form(1.0 / (ratio * tau), 1.0 / (ratio * tau), tau), linear_rest())
    assert found.gain_margin == pytest.approx(critical, abs=5e-5)
    assert found.phase_crossover_frequency is not None
    assert 2.0 * math.pi / found.phase_crossover_frequency / tau == pytest.approx(periods, abs=5e-5)


@given(ratio=st.floats(1e-2, 1e2), tau=st.floats(0.1, 50.0), share=st.floats(0.1, 3.0))
def test_the_period_of_one_lag_lies_between_two_and_four_delays(ratio: float, tau: float, share: float) -> None:
    # Law of Glass and Mackey for a single lag; frequency and gain against the bisection above.
    angle, critical = lag_crossover(ratio)
    gain = share * critical
    found = margins(linear_form(1.0 / (ratio * tau), gain / (ratio * tau), tau), linear_rest())
    assert found.phase_crossover_frequency is not None and found.loop_gain is not None
    period = 2.0 * math.pi / found.phase_crossover_frequency
    assert 2.0 * tau < period < 4.0 * tau
    assert period == pytest.approx(2.0 * math.pi * tau / angle, rel=1e-10)
    assert found.loop_gain == pytest.approx(share, rel=1e-10)
    assert found.stable is (share < 1.0) or abs(share - 1.0) < 1e-9
