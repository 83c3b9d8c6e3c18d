"""The respiration equation of Mackey and Glass 1977, Science 197:287, with its human values (from memory).

lambda = 6 mmHg/min, P0 = 40 mmHg, V0 = 7 L/min, tau = 0.25 min. Paper: critical slope 7.44 L/min/mmHg, period about 1 min. Computed
exactly from these numbers: 7.442186 L/min/mmHg and 0.985250 min = 3.941 tau.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from lagscape.engine.cycle import CycleStatus, limit_cycle
from lagscape.engine.margins import margins
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.simulate import simulate
from lagscape.loops.plain import PlainLoop

PRODUCTION, PRESSURE, VENTILATION, LARGEST, DELAY_MIN = 6.0, 40.0, 7.0, 80.0, 0.25
CRITICAL_SLOPE, PERIOD_MIN = 7.442186, 0.985250


def person(slope: float) -> PlainLoop:
    """The loop whose ventilation is 7 L/min at 40 mmHg with this slope, L/min/mmHg; seconds inside.

    V = Vmax P^n / (theta^n + P^n) has slope n V (1 - V/Vmax) / P, and theta follows from the resting point.
    """
    exponent = slope * PRESSURE / (VENTILATION * (1.0 - VENTILATION / LARGEST))
    half = PRESSURE * (LARGEST / VENTILATION - 1.0) ** (1.0 / exponent)
    clearance = PRODUCTION / (PRESSURE * VENTILATION) * LARGEST
    return PlainLoop(
        production_per_s=PRODUCTION / 60.0,
        largest_clearance_per_s=clearance / 60.0,
        exponent=exponent,
        half_level=half,
        delay_s=60.0 * DELAY_MIN,
    )


def test_the_loop_rests_at_forty() -> None:
    rest = person(5.0).rest()
    assert rest.state[0] == pytest.approx(PRESSURE, rel=1e-12)
    assert rest.output * LARGEST == pytest.approx(VENTILATION, rel=1e-11)


def test_the_closed_form_gives_the_paper_s_numbers() -> None:
    # Oracle: tau sqrt(b^2 - a^2) = arccos(-a/b) with a = lambda/P0 and b = lambda V'/V0, 1/min. Tolerance: half of the sixth place.
    a, b = PRODUCTION / PRESSURE, PRODUCTION * CRITICAL_SLOPE / VENTILATION
    omega = math.sqrt(b * b - a * a)
    assert math.acos(-a / b) / omega == pytest.approx(DELAY_MIN, abs=1e-7)
    assert 2.0 * math.pi / omega == pytest.approx(PERIOD_MIN, abs=5e-7)
    assert round(CRITICAL_SLOPE, 2) == 7.44
    assert round(PERIOD_MIN / DELAY_MIN, 3) == 3.941


def test_critical_slope_and_period_by_the_gain_margin() -> None:
    # The slope is a plain factor of the loop, so the margin at one slope tells the critical one. Tolerance: half of the sixth place.
    found = margins(person(3.0).form(), person(3.0).rest())
    assert found.gain_margin is not None and found.phase_crossover_frequency is not None
    assert 3.0 * found.gain_margin == pytest.approx(CRITICAL_SLOPE, abs=5e-7)
    assert 2.0 * math.pi / found.phase_crossover_frequency / 60.0 == pytest.approx(PERIOD_MIN, abs=5e-7)


def test_critical_slope_by_the_roots() -> None:
    # Bisection on the sign of growth: a method that shares no code with the margins.
    low, high = 5.0, 10.0
    for _ in range(40):
        middle = 0.5 * (low + high)
        loop = person(middle)
        low, high = (middle, high) if rightmost_roots(loop.form(), loop.rest()).spectral_abscissa < 0.0 else (low, middle)
    assert low == pytest.approx(CRITICAL_SLOPE, abs=5e-7)


@pytest.mark.parametrize(("slope", "grows"), [(0.9 * CRITICAL_SLOPE, False), (1.1 * CRITICAL_SLOPE, True)])
def test_a_small_push_dies_below_and_grows_above(slope: float, grows: bool) -> None:
    # Law: simulation shows on which side of the boundary the loop stands. The linear growth over these 30 min is a factor of 10 or more.
    loop = person(slope)
    trace = simulate(loop, duration=1800.0, offset=0.01, purpose="release")
    early = np.ptp(trace.states[trace.times < 120.0, 0])
    late = np.ptp(trace.states[trace.times > 1680.0, 0])
    assert (late > 5.0 * early) if grows else (late < early / 5.0)


def test_the_cycle_just_above_the_boundary_has_the_onset_period() -> None:
    # Law: at onset the cycle has the boundary's period; 2 % above, the period has moved by well under 1 %.
    loop = person(1.02 * CRITICAL_SLOPE)
    cycle = limit_cycle(loop.form(), loop.rest())
    assert cycle.status is CycleStatus.CONVERGED
    assert cycle.period_s == pytest.approx(60.0 * PERIOD_MIN, rel=0.01)
