"""Disturbances: values, exact integrals, break points, refusals."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from lagscape.engine.disturbance import breaks_of, check_channels, integral_on, noise, periodic, pulse, step, value_on
from lagscape.errors import InvalidInputError


def test_a_pulse_is_continuous_from_the_right() -> None:
    item = pulse("sigh", 2.0, 3.0, 5.0)
    assert item.value(np.array([0.0, 1.999, 2.0, 4.999, 5.0])).tolist() == [0.0, 0.0, 5.0, 5.0, 0.0]
    assert item.breaks(600.0).tolist() == [2.0, 5.0]
    assert item.breaks(4.0).tolist() == [2.0]


def test_a_step_stays() -> None:
    item = step("sigh", 2.0, -1.5)
    assert item.value(np.array([1.0, 2.0, 1e6])).tolist() == [0.0, -1.5, -1.5]
    assert item.breaks(600.0).tolist() == [2.0]


def test_a_sine_starts_at_its_start() -> None:
    item = periodic("sigh", 1.0, 4.0, 2.0)
    np.testing.assert_allclose(item.value(np.array([0.5, 1.0, 2.0, 4.0])), [0.0, 0.0, 2.0, -2.0], atol=1e-15)


def test_noise_is_the_same_for_the_same_seed_and_any_length_of_run() -> None:
    times = np.linspace(0.0, 50.0, 101)
    short, whole = noise("arousal", 1.0, 2.0, 3.0, 7).value(times[:41]), noise("arousal", 1.0, 2.0, 3.0, 7).value(times)
    assert np.array_equal(short, whole[:41])
    assert not np.array_equal(whole, noise("arousal", 1.0, 2.0, 3.0, 8).value(times))
    assert np.unique(whole[times >= 1.0]).size == 25


def test_noise_has_its_standard_deviation() -> None:
    # Oracle: the normal law. Tolerance: four standard errors of a standard deviation from 20,000 values, sigma / sqrt(2 n).
    values = noise("arousal", 0.0, 1.0, 3.0, 1).value(np.arange(20_000.0))
    assert abs(values.std() - 3.0) < 4 * 3.0 / math.sqrt(40_000)


@given(st.floats(0.0, 30.0), st.floats(2.0, 20.0), st.floats(-5.0, 5.0), st.sampled_from(["pulse", "step", "periodic", "noise"]))
def test_the_integral_is_that_of_the_value(start: float, span: float, amplitude: float, kind: str) -> None:
    # Oracle: adaptive quadrature between the break points. Tolerance: its own, on numbers of order a hundred.
    item = {
        "pulse": lambda: pulse("c", start, span, amplitude),
        "step": lambda: step("c", start, amplitude),
        "periodic": lambda: periodic("c", start, span, amplitude),
        "noise": lambda: noise("c", start, span, amplitude, 3),
    }[kind]()
    end = 40.0
    edges = [0.0, *item.breaks(end).tolist(), end]
    total = sum(quad(lambda t: float(item.value(t)), a, b - 1e-12 * end, limit=400)[0] for a, b in itertools.pairwise(edges) if b > a)
    assert abs(total - float(item.integral(end))) < 1e-7 * (1.0 + abs(amplitude)) * end


def test_several_on_one_channel_add() -> None:
    both = (pulse("a", 0.0, 10.0, 1.0), step("a", 5.0, 2.0), step("b", 0.0, 9.0))
    assert value_on(both, "a", np.array([1.0, 6.0])).tolist() == [1.0, 3.0]
    assert integral_on(both, "a", np.array([10.0])).tolist() == [20.0]
    assert breaks_of(both, 100.0).tolist() == [0.0, 5.0, 10.0]


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: pulse("a", -1.0, 1.0, 1.0), "start .* must not be negative"),
        (lambda: pulse("a", 0.0, 0.0, 1.0), "duration .* must be finite and positive"),
        (lambda: step("a", 0.0, math.nan), "amplitude must be finite"),
        (lambda: periodic("a", 0.0, -2.0, 1.0), "period .* must be finite and positive"),
        (lambda: noise("a", 0.0, math.inf, 1.0, 1), "hold .* must be finite"),
        (lambda: noise("a", 0.0, 1.0, 1.0, -1), "seed must be a whole number"),
        (lambda: noise("a", 0.0, 1e-6, 1.0, 1).breaks(10.0), "at most 1000000 values"),
        (lambda: check_channels([step("cough", 0.0, 1.0)], {"sigh": None}), "no channel 'cough'; the loop has: 'sigh'"),
    ],
)
def test_bad_numbers_are_refused(make: object, message: str) -> None:
    with pytest.raises(InvalidInputError, match=message):
        make()  # type: ignore[operator]
