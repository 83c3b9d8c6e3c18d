"""A delay equation whose solution is a polynomial on each delay: Paul 1994, Numer. Anal. Rep. 243 Manchester, problem 1.1.1 (form seen).

y' = A y(t - B), y = C for t <= 0, has y = C sum over n of A^n (t - (n-1) B)^n / n!, for as long as t >= (n-1) B.
"""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from lagscape.engine.simulate import RELEASE_ERROR, simulate
from support.linear_loop import linear_form, linear_rest

VALUES = {1: Fraction(0), Fraction(3, 2): Fraction(-3, 8), 2: Fraction(-1, 2), 3: Fraction(-1, 6), 4: Fraction(5, 24), 5: Fraction(19, 120)}


def exact(t: float, a: float = -1.0, b: float = 1.0, c: float = 1.0) -> float:
    total, n = 0.0, 0
    while n == 0 or t >= (n - 1) * b:
        total += c * a**n * (t - (n - 1) * b) ** n / math.factorial(n)
        n += 1
    return total


@pytest.mark.parametrize("t", list(VALUES))
def test_the_sum_gives_the_known_fractions(t: Fraction) -> None:
    assert exact(float(t)) == pytest.approx(float(VALUES[t]), abs=1e-15)


def test_the_simulation_passes_through_the_known_fractions() -> None:
    # Tolerance: a polynomial of degree five is exact on the mesh's own polynomials, so what is left is rounding, summed over five delays.
    times = np.array([float(t) for t in VALUES])
    trace = simulate(linear_form(0.0, 1.0, 1.0), rest=linear_rest(), offset=1.0, duration=5.0, purpose="release", output_times=times)
    assert trace.status == "completed"
    np.testing.assert_allclose(trace.states[:, 0], [float(value) for value in VALUES.values()], atol=1e-13)


@pytest.mark.parametrize(("rate", "delay", "level"), [(1.2, 0.7, 3.0), (0.5, 2.0, -1.0), (2.0, 0.1, 1.0)])
@pytest.mark.parametrize(("purpose", "tolerance"), [("release", RELEASE_ERROR), ("drag", 5e-4)])
def test_the_whole_trace_for_other_rates_delays_and_levels(rate: float, delay: float, level: float, purpose: str, tolerance: float) -> None:
    # Tolerance: what each purpose promises, of the largest size.
    times = np.linspace(0.0, 6.0 * delay, 121)
    trace = simulate(linear_form(0.0, rate, delay), rest=linear_rest(), offset=level, duration=6.0 * delay, purpose=purpose, output_times=times)
    expected = np.array([exact(t, -rate, delay, level) for t in times])
    assert np.max(np.abs(trace.states[:, 0] - expected)) <= tolerance * np.max(np.abs(expected))
