"""Derivatives against finite differences of the whole computation, and against closed forms."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2
from lagscape.engine.margins import margins
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.sensitivity import sensitivities
from lagscape.errors import InvalidInputError
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


def whole(loop, name, value):
    other = loop.with_numbers(**{name: value})
    form, rest = other.form(), other.rest()
    known = margins(form, rest)
    roots = rightmost_roots(form, rest, known=known)
    return np.array([known.loop_gain, known.phase_crossover_frequency, roots.oscillatory.real, roots.cycle_length_s])


@pytest.mark.parametrize(
    "loop",
    [p2(1.5, 1.0), BreathingLoop(peripheral_gain_l_min_mmhg=3.0), ReflexLoop(reflex_gain_per_rad=8.0), PlainLoop(half_level=0.5)],
)
def test_derivatives_are_finite_differences_of_the_whole(loop):
    # Oracle: central differences of margins and roots, step 1e-5: they err by about 1e-9 of the figure per relative change.
    names = [item.name for item in loop.specifications if isinstance(getattr(loop, item.name), float)]
    assert len(names) >= 5
    for item in sensitivities(loop, names):
        step = 1e-5 * (abs(item.value) or 1.0)
        rough = (whole(loop, item.name, item.value + step) - whole(loop, item.name, item.value - step)) / (2.0 * step)
        exact = np.array([item.loop_gain, item.crossover_frequency, item.growth_rate, item.cycle_length])
        size = np.abs(whole(loop, item.name, item.value)) / (abs(item.value) or 1.0)
        assert np.all(np.abs(rough - exact) <= 1e-7 * (size + np.abs(exact))), item.name


def test_elasticities_that_are_known_exactly():
    # Law: loop gain is proportional to both chemoreflex gains together, and the crossover does not move with them; so the
    # elasticities of the two add up to 1 and the frequency's weighted derivatives to 0. Tolerance: that of the central differences.
    found = {item.name: item for item in sensitivities(p2(1.5, 1.0), ["peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg"])}
    assert abs(sum(item.loop_gain_elasticity for item in found.values()) - 1.0) < 1e-8
    assert abs(sum(item.value * item.crossover_frequency for item in found.values())) < 1e-9


def test_delay_of_the_pure_delay_loop():
    # Oracle: for x' = -a x - b x(t - tau) the root's ds/dtau = -s (s + a) / (1 + tau (s + a)).
    loop = PlainLoop(half_level=0.5)
    item = sensitivities(loop, ["delay_s"])[0]
    s = rightmost_roots(loop.form(), loop.rest()).oscillatory
    a = 0.8 * loop.rest().output
    expected = -s * (s + a) / (1.0 + loop.delay_s * (s + a))
    assert abs(item.growth_rate - expected.real) <= 1e-8 * abs(expected)
    assert abs(item.cycle_length + 2.0 * math.pi * expected.imag / s.imag**2) <= 1e-8 * abs(item.cycle_length)


def test_a_name_that_is_no_number_is_refused():
    with pytest.raises(InvalidInputError, match="drive_shape"):
        sensitivities(BreathingLoop(), ["drive_shape"])
