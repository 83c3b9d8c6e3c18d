"""The open loop against the characteristic function written out by hand, and batches against single loops."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2, p2_characteristic, scalar_loop
from lagscape.engine.open_loop import open_loop
from lagscape.errors import InvalidInputError
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


def test_breathing_loop_has_the_characteristic_function_of_its_equations():
    # Oracle: f written by hand from lung, tissue, central lag and threshold line. f and 1 + L differ by the open-loop factor
    # V_L s + q + V_A0 - q k/(s + k) alone, which the hand-written function gives with both gains zero.
    loop, silent = p2(), p2(peripheral=0.0, central=0.0)
    opened = open_loop(loop.form(), loop.rest())
    for s in (0.3 + 0.2j, -0.05 + 0.1j, 0.19j, -0.002 + 0j):
        expected = p2_characteristic(loop, s) / p2_characteristic(silent, s)
        # Tolerance: rounding of about 20 operations.
        assert abs(1.0 + opened.at(s)[0] - expected) <= 1e-13 * abs(expected)


def test_scalar_loop_is_b_exp_over_s_plus_a():
    opened = open_loop(*scalar_loop(0.5, 1.5, 2.0))
    s = 0.2 + 0.7j
    assert abs(opened.at(s)[0] - 1.5 * np.exp(-2.0 * s) / (s + 0.5)) < 1e-15


@pytest.mark.parametrize("loop", [p2(), ReflexLoop(), PlainLoop(half_level=0.5), BreathingLoop(drive_shape="sigmoid")])
def test_a_batch_is_its_members(loop):
    # Oracle: the same numbers one by one. Tolerance: the order of the sums may differ by an ulp or two.
    delays, strengths = np.array([0.5, 1.0, 2.5]) * loop.delay, np.array([[0.3], [2.0]]) * loop.sensitivity
    batch = loop.with_delay(delays).with_sensitivity(strengths)
    opened = open_loop(batch.form(), batch.rest())
    assert opened.batch == (2, 3)
    frequency = np.array([0.1, 1.0, 4.0]) / loop.delay
    many = opened.response(frequency[:, None, None] + np.zeros((2, 3)))
    slopes = opened.with_slope(1j * frequency[1] + np.zeros((2, 3)))[1]
    for i in range(2):
        for j in range(3):
            one = loop.with_delay(float(delays[j])).with_sensitivity(float(strengths[i, 0]))
            single = open_loop(one.form(), one.rest())
            expected = single.response(frequency)
            assert np.max(np.abs(many[:, i, j] - expected)) <= 1e-12 * np.max(np.abs(expected))
            assert abs(slopes[i, j] - single.at(1j * frequency[1])[1]) <= 1e-11 * abs(slopes[i, j])


@pytest.mark.parametrize("loop", [p2(), ReflexLoop(), PlainLoop(half_level=0.5)])
def test_slope_is_the_derivative(loop):
    # Oracle: central difference along the imaginary direction; its error is h^2 of the third derivative plus rounding over h.
    opened = open_loop(loop.form(), loop.rest())
    s = (0.3 + 0.9j) / loop.delay
    h = 1e-5 * abs(s)
    for value in (lambda s: opened.at(s)[0], lambda s: opened.characteristic_at(s)[0]):
        rough = (value(s + 1j * h) - value(s - 1j * h)) / (2j * h)
        exact = opened.at(s)[1] if value is not None and value(s) == opened.at(s)[0] else opened.characteristic_at(s)[1]
        assert abs(rough - exact) <= 1e-8 * abs(exact)


def test_equal_delays_are_one_term():
    assert len(open_loop(ReflexLoop().form(), ReflexLoop().rest()).delays) == 1
    assert len(open_loop(p2().form(), p2().rest()).delays) == 2


@pytest.mark.parametrize("delay", [0.0, -1.0, math.inf, math.nan])
def test_a_delay_that_is_not_positive_and_finite_is_refused(delay):
    with pytest.raises(InvalidInputError, match="finite and positive"):
        open_loop(*scalar_loop(0.5, 1.0, delay))
