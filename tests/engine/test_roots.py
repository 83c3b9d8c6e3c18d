"""Roots against Lambert W, the argument principle, and the law of rescaling."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import lambertw

from engine.oracle_loops import linear_form, oscillator, p2, p2_characteristic, roots_in_box, scalar_loop
from lagscape.engine.margins import margins
from lagscape.engine.roots import RootStatus, generator_eigenvalues, rightmost_roots
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


def nearest(values, wanted):
    return min(abs(value - wanted) for value in values)


@pytest.mark.parametrize(("a", "b", "delay"), [(0.0, 0.5, 1.0), (0.0, 1.0, 1.0), (0.0, 2.0, 1.0), (0.5, 1.0, 3.0), (2.0, -1.0, 0.3), (0.1, 4.0, 8.0)])
def test_scalar_roots_are_lambert_w(a, b, delay):
    # Oracle: s = -a + W_k(-b tau e^(a tau)) / tau (Corless et al. 1996), scipy's lambertw. Tolerance: a few ulp of the largest term.
    roots = rightmost_roots(*scalar_loop(a, b, delay), count=4)
    assert roots.status in (RootStatus.CONVERGED, RootStatus.NO_OSCILLATORY_ROOT)
    scale = (1.0 + a * delay) / delay
    principal = complex(lambertw(-b * delay * math.exp(a * delay), 0)) / delay - a
    assert abs(roots.spectral_abscissa - principal.real) <= 2e-14 * scale
    for branch in (0, 1, 2):
        wanted = complex(lambertw(-b * delay * math.exp(a * delay), branch)) / delay - a
        assert nearest([*roots.values, *np.conj(roots.values)], wanted) <= 1e-13 * (scale + abs(wanted))


@pytest.mark.parametrize(("product", "root"), [(0.5, -0.794024 + 0.770112j), (1.0, -0.318132 + 1.337236j), (2.0, 0.172816 + 1.673686j)])
def test_published_table_of_the_pure_delay(product, root):
    # Oracle: table of x' = -b x(t - tau); tolerance: its last printed digit.
    assert abs(rightmost_roots(*scalar_loop(0.0, product, 1.0)).oscillatory - root) <= 1e-6


def test_double_root_at_one_over_e():
    # Oracle: b tau = 1/e has the double root s tau = -1. Tolerance: a double root is known to the square root of rounding.
    roots = rightmost_roots(*scalar_loop(0.0, math.exp(-1.0), 1.0))
    assert abs(roots.spectral_abscissa + 1.0) < 1e-7


@pytest.mark.parametrize(("peripheral", "central"), [(12.0, 17.0), (30.0, 35.0), (6.0, 30.0), (3.0, 60.0), (60.0, 3.0)])
def test_no_root_is_missed_even_at_delay_ratio_20(peripheral, central):
    # Oracle: the argument principle on the characteristic function written by hand, over a box that the reported roots fill.
    loop = p2(2.5, 1.5, peripheral, central)
    roots = rightmost_roots(loop.form(), loop.rest(), count=4)
    assert max(roots.residuals) < 1e-14
    for root in roots.values:
        # The hand-written function is a third-degree polynomial lighter: its size there is rounding of its largest term, about 1.
        assert abs(p2_characteristic(loop, root)) < 1e-12
    edge = 0.5 * (roots.values[2].real + roots.values[3].real)
    expected = sum(1 if root.imag == 0.0 else 2 for root in roots.values[:3])
    found = roots_in_box(lambda s: p2_characteristic(loop, s), complex(edge, -3.0), complex(2.0, 3.0))
    # The hand-written function has a pole at -1/60 and one at -Q/(60 V_T); those right of the edge count against the roots.
    poles = sum(edge < pole for pole in (-1.0 / 60.0, -5.0 / 60.0 / 15.0))
    assert found + poles == expected


def test_unpolished_generator_converges_spectrally():
    # Oracle: the polished root. 12 nodes give 1e-8 and 20 nodes rounding at ordinary delay ratios (measured order, see the module).
    loop = p2(2.5 * 0.75, 2.5 * 0.25)
    root = rightmost_roots(loop.form(), loop.rest()).oscillatory
    errors = [nearest(generator_eigenvalues(loop.form(), loop.rest(), nodes), root) / abs(root) for nodes in (6, 8, 12, 20)]
    assert errors[0] > errors[1] > errors[2]
    assert errors[2] < 1e-7
    assert errors[3] < 1e-12


def test_zero_gain_leaves_the_plant_alone():
    # Oracle: without feedback the roots are the plant's own, by the quadratic formula, and the central lag's.
    loop = p2(0.0, 0.0)
    form = loop.form()
    roots = rightmost_roots(form, loop.rest(), count=3)
    plant = form.plant + loop.rest().output * form.plant_by_output
    expected = sorted([*np.linalg.eigvals(plant).real, -1.0 / 60.0], reverse=True)
    assert roots.status is RootStatus.NO_OSCILLATORY_ROOT
    assert roots.oscillatory is None and roots.cycle_length_s is None and roots.growth_rate_per_s is None
    assert np.allclose([root.real for root in roots.values], expected, rtol=1e-12)


@pytest.mark.parametrize("delay", [1e-4, 1e4])
def test_tiny_and_huge_delays(delay):
    # Oracle: Lambert W at a tau of 1e-4 and 1e4; the exponential is taken out of W by W(x e^x) asymptotics where it would overflow.
    a, b = 0.2, 1.0
    roots = rightmost_roots(*scalar_loop(a, b, delay), count=2)
    if delay < 1.0:
        wanted = complex(lambertw(-b * delay * math.exp(a * delay), 0)) / delay - a
        assert abs(roots.spectral_abscissa - wanted.real) <= 1e-9 * abs(wanted)
    else:
        # s + a = -b e^(-s tau): for long delays Re s tau = ln(b / |s + a|), close to ln(b/a) = ln 5 at small |s|.
        root = roots.oscillatory
        assert abs(root + a + b * np.exp(-root * delay)) < 1e-10
        assert abs(root.real * delay - math.log(b / abs(root + a))) < 1e-9
        assert root.real == roots.spectral_abscissa
        assert abs(root.real * delay - math.log(5.0)) < 1e-3


def test_resonance_with_a_delay_of_many_periods_is_not_missed():
    # The rightmost pair sits at the resonance, 40 half turns of the delay up: far beyond what 14 nodes resolve.
    # Oracle: the argument principle on s^2 + 2 z s + 1 + k e^(-s tau).
    damping, gain, delay = 0.05, 0.15, 130.0
    roots = rightmost_roots(*oscillator(damping, gain, delay), count=1)
    assert 0.9 < roots.oscillatory.imag < 1.1
    found = roots_in_box(lambda s: s**2 + 2 * damping * s + 1 + gain * np.exp(-s * delay), complex(1e-9, -3.0), complex(0.5, 3.0), 20000)
    assert found == margins(*oscillator(damping, gain, delay)).unstable_roots > 0
    assert roots.status is RootStatus.CONVERGED or roots.oscillatory.real > 0.0


@given(st.floats(0.01, 3.0), st.floats(0.05, 5.0), st.floats(0.1, 5.0), st.floats(0.05, 20.0))
def test_rescaling_time_rescales_the_roots(a, b, delay, factor):
    # Law: x' = -a x - b x(t - tau) in time units of `factor` has the roots divided by it. Tolerance: rounding.
    one = rightmost_roots(*scalar_loop(a, b, delay))
    other = rightmost_roots(*scalar_loop(a / factor, b / factor, delay * factor))
    assert abs(one.spectral_abscissa - factor * other.spectral_abscissa) <= 1e-7 * (abs(one.spectral_abscissa) + 1.0 / delay)


@given(st.floats(0.05, 6.0), st.floats(0.02, 6.0), st.floats(1.0, 60.0), st.floats(1.0, 60.0), st.floats(0.5, 6.0), st.floats(10.0, 200.0))
def test_sign_of_growth_agrees_with_the_margins(peripheral, central, delay_p, delay_c, lung, lag):
    loop = p2(peripheral, central, delay_p, delay_c).with_numbers(lung_volume_l=lung, central_time_constant_s=lag)
    form, rest = loop.form(), loop.rest()
    known, roots = margins(form, rest), rightmost_roots(form, rest)
    assert roots.status is not RootStatus.COUNT_DISAGREES
    assert known.stable == (roots.spectral_abscissa <= 0.0)
    assert math.isfinite(roots.spectral_abscissa)
    if known.loop_gain is not None:
        assert (known.loop_gain > 1.0) == (not known.stable)


@pytest.mark.parametrize("kind", [BreathingLoop, ReflexLoop, PlainLoop])
def test_every_starting_case_has_roots(kind):
    for case in kind.starting_cases:
        loop = kind().with_numbers(**case.numbers, **case.choices)
        roots = rightmost_roots(loop.form(), loop.rest())
        assert roots.status is RootStatus.CONVERGED
        assert max(roots.residuals) < 1e-13


def test_two_unequal_sensed_rows_are_kept_apart():
    # x'' + 0.4 x' + x = -0.3 x(t - 1) - 0.2 x'(t - 2.5): two rows with two delays. Oracle: the function itself, by hand.
    form, rest = linear_form([[0.0, 1.0], [-1.0, -0.4]], [0.0, -1.0], [[0.3, 0.0], [0.0, 0.2]], [1.0, 2.5])
    roots = rightmost_roots(form, rest, count=3)
    for root in roots.values:
        value = root**2 + 0.4 * root + 1 + 0.3 * np.exp(-root) + 0.2 * root * np.exp(-2.5 * root)
        assert abs(value) < 1e-12 * (1.0 + abs(root) ** 2 + abs(np.exp(-2.5 * root)))
