"""The dominant oscillation of many loops at once, against Lambert's function and against one loop at a time."""

from __future__ import annotations

import numpy as np
from scipy.special import lambertw

from lagscape.engine.dominant_batch import dominant_batch
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.loops.protocol import DriveForm, Rest
from support.linear_loop import LinearDrive


def linear_batch(a: np.ndarray, b: np.ndarray, tau: np.ndarray) -> DriveForm:
    """x' = -a x - b x(t - tau) for each member."""
    return DriveForm(
        plant_names=("x",), control_names=(),
        plant=-a[None, None], plant_by_output=np.zeros((1, 1, a.size)), input_vector=-b[None], constant=np.zeros((1, a.size)),
        sensed_rows=np.ones((1, 1)), sensed_delays=(tau,),
        control=np.zeros((0, 0, a.size)), control_by_sensed=np.zeros((0, 1, a.size)), control_constant=np.zeros((0, a.size)),
        drive=LinearDrive(),
    )  # fmt: skip


def test_the_pair_of_a_first_order_loop_is_lamberts() -> None:
    # Oracle: s = -a + W0(-b tau e^(a tau)) / tau, complex where b tau e^(a tau) > 1/e (Corless 1996). Calm and unstable members alike.
    # Tolerance: Newton's steps stop at a relative 1e-8, whose square is rounding.
    generator = np.random.default_rng(5)
    tau = generator.uniform(0.5, 20.0, 400)
    a = generator.uniform(0.0, 2.0, 400) / tau
    b = generator.uniform(1.3, 20.0, 400) * np.exp(-1.0 - a * tau) / tau
    form = linear_batch(a, b, tau)
    rest = Rest(np.zeros((1, 400)), np.zeros(400))
    opened = open_loop(form, rest)
    known = margins_batch(form, rest, opened, growth=False)
    found = dominant_batch(opened, known)
    expected = -a + lambertw(-b * tau * np.exp(a * tau)) / tau
    assert found.has.all()
    np.testing.assert_allclose(found.growth_rate_per_s, expected.real, atol=1e-9 * np.max(np.abs(expected)))
    np.testing.assert_allclose(2.0 * np.pi / found.cycle_length_s, np.abs(expected.imag), rtol=1e-8)
    assert np.any(~known.stable) and np.any(known.stable)


def test_where_the_first_pair_is_none_another_answers_with_a_true_root() -> None:
    # With b tau e^(a tau) < 1/e the two rightmost roots are real: no oscillation of the first crossover. Oracle: what is given instead is a
    # root of s + a + b e^(-s tau) = 0, to rounding of its terms, deep in the left half plane.
    tau = np.linspace(1.0, 10.0, 40)
    a = 0.2 / tau
    b = 0.5 * np.exp(-1.0 - a * tau) / tau
    form = linear_batch(a, b, tau)
    rest = Rest(np.zeros((1, 40)), np.zeros(40))
    opened = open_loop(form, rest)
    found = dominant_batch(opened, margins_batch(form, rest, opened, growth=False))
    assert found.has.all()
    s = found.growth_rate_per_s + 2j * np.pi / found.cycle_length_s
    delayed = b * np.exp(-s * tau)
    assert np.all(np.abs(s + a + delayed) <= 1e-8 * (np.abs(s) + np.abs(delayed)))
    assert np.all(found.growth_rate_per_s * tau < -1.0)


def test_no_feedback_has_no_oscillation() -> None:
    zero = np.zeros(3)
    form = linear_batch(zero + 1.0, zero, zero + 2.0)
    rest = Rest(np.zeros((1, 3)), zero)
    opened = open_loop(form, rest)
    found = dominant_batch(opened, margins_batch(form, rest, opened, growth=False))
    assert not found.has.any()
    assert np.all(found.growth_rate_per_s == 0.0) and np.all(found.cycle_length_s == 0.0)
