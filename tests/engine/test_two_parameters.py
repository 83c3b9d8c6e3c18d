"""Continuation in two numbers against the explicit curve, the margins, and a closed form with folds."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2
from lagscape.engine.boundary import boundary_curve
from lagscape.engine.margins import margins
from lagscape.engine.two_parameters import boundary_in_two
from lagscape.errors import InvalidInputError
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


def test_agrees_with_the_explicit_curve():
    # Oracle: the explicit curve K(w), tau(w), which shares nothing with continuation but the open loop. Compared along the delay:
    # the straight line between its 4,000 points errs by 1e-6 of the sensitivity.
    loop = p2()
    followed = boundary_in_two(loop, "delay", "sensitivity", ((6.0, 50.0), (0.8, 9.0)))
    assert len(followed.curves) == 1
    curve = followed.curves[0]
    assert curve.residual < 1e-8
    explicit = boundary_curve(loop, (0.5, 12.0), (5.0, 60.0), points=2000).curves[0]
    order = np.argsort(explicit.delay_s)
    expected = np.interp(curve.first, explicit.delay_s[order], explicit.sensitivity[order])
    assert np.max(np.abs(curve.second / expected - 1.0)) < 1e-5


@pytest.mark.parametrize(
    ("loop", "a", "b", "window"),
    [
        (p2(1.5, 1.0), "cardiac_output_l_min", "lung_volume_l", ((1.5, 9.0), (0.5, 6.0))),
        (p2(2.0, 1.0), "peripheral_delay_s", "peripheral_gain_l_min_mmhg", ((3.0, 60.0), (0.2, 6.0))),
        (ReflexLoop(reflex_gain_per_rad=3.0), "stiffness_n_m_rad", "inertia_kg_m2", ((5.0, 120.0), (0.005, 0.15))),
        (PlainLoop(half_level=0.5), "exponent", "delay_s", ((1.0, 15.0), (1.0, 20.0))),
    ],
)
def test_points_are_marginal_to_1e_8(loop, a, b, window):
    # Oracle: the margins of the loop at each point: one of its phase crossovers has gain 1.
    found = boundary_in_two(loop, a, b, window)
    assert found.curves
    for curve in found.curves:
        for i in range(0, curve.first.size, max(1, curve.first.size // 10)):
            there = loop.with_numbers(**{a: float(curve.first[i]), b: float(curve.second[i])})
            crossings = margins(there.form(), there.rest()).phase_crossovers
            assert min(abs(item.gain - 1.0) for item in crossings) < 1e-8


def test_folded_lobes_of_the_reflex_are_followed_round_their_folds():
    # Sensitivity as a function of the delay has several values, and the delay as a function of the sensitivity too.
    # Oracle: each point is marginal; the fold shows as a change of sign of either increment along one curve.
    loop = ReflexLoop(reflex_gain_per_rad=3.0)
    found = boundary_in_two(loop, "delay", "sensitivity", ((0.01, 0.30), (0.3, 6.0)))
    folds = sum(int(np.count_nonzero(np.diff(np.sign(np.diff(curve.second))) != 0)) for curve in found.curves)
    assert folds >= 1
    for curve in found.curves:
        i = int(np.argmin(curve.second))
        there = loop.with_delay(float(curve.first[i])).with_sensitivity(float(curve.second[i]))
        assert min(abs(item.gain - 1.0) for item in margins(there.form(), there.rest()).phase_crossovers) < 1e-8


class _Island:
    """A scalar loop x' = -x - b x(t - tau) whose gain depends on two knobs: b = 3 exp(-((p - 2)^2 + (q - 3)^2)), so that the
    boundary b = b_c(tau) is a circle about (2, 3)."""

    kind = "island"
    sensitivity = 1.0
    delay = 1.0

    def __init__(self, p=2.0, q=3.0):
        self.p, self.q = p, q

    def with_numbers(self, **numbers):
        return _Island(**{"p": self.p, "q": self.q, **numbers})

    def rest(self):
        base = PlainLoop()
        return type(base.rest())(np.zeros((1, *np.shape(self.p))), np.zeros(np.shape(self.p)) if np.ndim(self.p) else 0.0)

    def form(self):
        from dataclasses import replace

        from engine.oracle_loops import scalar_loop

        form, _ = scalar_loop(1.0, 1.0, 1.0)
        strength = 3.0 * np.exp(-((np.asarray(self.p) - 2.0) ** 2) - (np.asarray(self.q) - 3.0) ** 2)
        batch = np.shape(strength)
        return replace(
            form,
            plant=np.zeros((1, 1, *batch)) - 1.0,
            plant_by_output=np.zeros((1, 1, *batch)),
            input_vector=-strength[None],
            constant=np.zeros((1, *batch)),
            control=np.zeros((0, 0, *batch)),
            control_by_sensed=np.zeros((0, 1, *batch)),
            control_constant=np.zeros((0, *batch)),
        )


def test_closed_curve_is_a_circle():
    # Oracle: at tau = 1, a = 1 the critical b solves tan w = -w, b = sqrt(1 + w^2): 2.2618 (table), so the circle's radius is
    # sqrt(ln(3 / b_c)). Tolerance: residual 2e-12 over the gradient of the gain, about 1.
    w = 2.0287578381104342
    assert abs(math.tan(w) + w) < 1e-12
    radius = math.sqrt(math.log(3.0 / math.sqrt(1.0 + w * w)))
    found = boundary_in_two(_Island(), "p", "q", ((0.5, 3.5), (1.5, 4.5)))
    assert len(found.curves) == 1
    curve = found.curves[0]
    assert curve.closed
    assert np.max(np.abs(np.hypot(curve.first - 2.0, curve.second - 3.0) - radius)) < 1e-8
    turn = np.unwrap(np.arctan2(curve.second - 3.0, curve.first - 2.0))
    assert abs(abs(turn[-1] - turn[0]) - 2.0 * math.pi) < 1e-6


def test_the_same_number_twice_and_an_empty_window_are_refused():
    with pytest.raises(InvalidInputError, match="must differ"):
        boundary_in_two(p2(), "lung_volume_l", "lung_volume_l", ((1.0, 2.0), (1.0, 2.0)))
    with pytest.raises(InvalidInputError, match="window of lung_volume_l"):
        boundary_in_two(p2(), "lung_volume_l", "delay", ((2.0, 1.0), (1.0, 2.0)))
