"""The boundary against closed forms and against the margins, which know nothing of it."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2
from lagscape.engine.boundary import PointStatus, boundary_curve, delay_at_sensitivity, sensitivity_at_delay
from lagscape.engine.margins import margins
from lagscape.engine.roots import rightmost_roots
from lagscape.errors import InvalidInputError
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

REFLEX = ReflexLoop(reflex_gain_per_rad=3.0)
MOVED = p2(0.5, 0.3).freeze_line().with_numbers(co2_production_l_min=0.25)
"""Its rest moves with the sensitivity: the controller's line stays while the metabolism has changed."""


@pytest.mark.parametrize("loop", [p2(), BreathingLoop(drive_shape="sigmoid"), MOVED, REFLEX, PlainLoop(half_level=0.5)])
def test_every_point_of_the_curve_is_marginal_and_deciding(loop):
    # Oracle: the margins of the loop at that point; the law "the boundary has loop gain 1 and spectral abscissa 0".
    boundary = boundary_curve(loop)
    assert boundary.curves
    for curve in boundary.curves:
        for i in range(1, curve.delay_s.size - 1, max(1, curve.delay_s.size // 8)):
            there = loop.with_sensitivity(float(curve.sensitivity[i])).with_delay(float(curve.delay_s[i]))
            known = margins(there.form(), there.rest())
            # Tolerance: where the rest moves with the sensitivity it is itself a Newton solution, good to some 1e-13.
            assert abs(known.loop_gain - 1.0) < 1e-9
            assert abs(2.0 * math.pi / known.phase_crossover_frequency - curve.period_s[i]) <= 1e-7 * curve.period_s[i]
            roots = rightmost_roots(there.form(), there.rest(), known=known)
            assert abs(roots.oscillatory.real) <= 1e-8 * roots.oscillatory.imag


def test_plain_loop_boundary_is_the_closed_form():
    # Oracle: tau_c = arccos(-A/B) / sqrt(B^2 - A^2), A = Vmax h(x0), B = x0 Vmax h'(x0), the rest by bisection in the test.
    loop = PlainLoop(0.2, 0.8, 8.0, 0.5, 10.0)
    curve = boundary_curve(loop, (2.2, 20.0), (0.5, 40.0)).curves[0]
    for n, delay, period in zip(curve.sensitivity[::9], curve.delay_s[::9], curve.period_s[::9], strict=True):
        low, high = 1e-6, 10.0
        for _ in range(200):
            x = 0.5 * (low + high)
            h = x**n / (0.5**n + x**n)
            low, high = (low, x) if 0.8 * h * x > 0.2 else (x, high)
        a, b = 0.8 * h, 0.8 * n * h * (1.0 - h)
        w = math.sqrt(b * b - a * a)
        # Tolerance: near B = A the arc cosine loses half the digits.
        assert abs(delay - math.acos(-a / b) / w) < 1e-7 * delay
        assert abs(period - 2.0 * math.pi / w) < 1e-7 * period


def test_curve_is_smooth_and_reaches_the_frame():
    curve = boundary_curve(p2(), (0.5, 12.0), (4.0, 60.0)).curves[0]
    assert max(np.hypot(np.diff(curve.delay_s) / 56.0, np.diff(curve.sensitivity) / 11.5)) < 0.06
    touches = (curve.delay_s.min() < 4.2 or curve.sensitivity.max() > 11.8) and (curve.delay_s.max() > 58.0 or curve.sensitivity.min() < 0.6)
    assert touches


@pytest.mark.parametrize("loop", [p2(), p2(0.5, 0.3), MOVED, REFLEX, PlainLoop(half_level=0.5)])
def test_nearest_points_lie_on_the_boundary(loop):
    # Oracle: the loop moved there has loop gain 1, and a little to either side it is stable on one and unstable on the other.
    across = sensitivity_at_delay(loop)
    assert across.status is PointStatus.FOUND
    there = loop.with_sensitivity(across.sensitivity)
    assert abs(margins(there.form(), there.rest()).loop_gain - 1.0) < 1e-10
    assert across.delay_s == loop.delay
    along = delay_at_sensitivity(loop)
    if along.status is PointStatus.FOUND:
        moved = loop.with_delay(along.delay_s)
        assert abs(margins(moved.form(), moved.rest()).loop_gain - 1.0) < 1e-9
        sides = [loop.with_delay(along.delay_s * factor) for factor in (0.999, 1.001)]
        assert margins(sides[0].form(), sides[0].rest()).stable != margins(sides[1].form(), sides[1].rest()).stable


def test_a_loop_without_feedback_or_limit_says_so():
    quiet = p2(0.0, 1e-300).with_numbers(central_gain_l_min_mmhg=0.0, peripheral_gain_l_min_mmhg=0.0)
    assert sensitivity_at_delay(quiet, margins(quiet.form(), quiet.rest())).status is PointStatus.NO_FEEDBACK
    weak = PlainLoop(0.2, 0.8, 1.0, 0.5, 3.0)
    assert delay_at_sensitivity(weak).status is PointStatus.NEVER_HUNTS


def test_an_empty_window_is_refused():
    with pytest.raises(InvalidInputError, match="window of delays"):
        boundary_curve(p2(), None, (10.0, 5.0))
    with pytest.raises(InvalidInputError, match="window of sensitivities"):
        boundary_curve(p2(), (0.0, 5.0), (1.0, 5.0))
