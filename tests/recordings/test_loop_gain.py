"""Loop gain from the duty ratio (Sands et al. 2011, Am J Respir Crit Care Med 184:1067)."""

import numpy as np
import pytest

from lagscape.errors import InvalidInputError
from lagscape.recordings import loop_gain_from_duty_ratio


@pytest.mark.parametrize(("duty_ratio", "loop_gain"), [(0.5, 2.0), (0.6, 1.44186), (0.7, 1.17458), (0.8, 1.05112), (1.0, 1.0)])
def test_published_table(duty_ratio, loop_gain):
    # 0.5 gives exactly 2 and 1 exactly 1; the others are printed to five decimals, hence half a unit of the last.
    assert loop_gain_from_duty_ratio(duty_ratio) == pytest.approx(loop_gain, abs=5e-6)


def test_half_and_whole_are_exact():
    # Tolerance: sin(pi) and sin(2 pi) in floating point, a few eps.
    eps = np.finfo(float).eps
    assert abs(loop_gain_from_duty_ratio(0.5) - 2.0) <= 4 * eps
    assert abs(loop_gain_from_duty_ratio(1.0) - 1.0) <= 4 * eps


@pytest.mark.parametrize("duty_ratio", [0.02, 0.2, 0.37, 0.5, 0.66, 0.91])
def test_agrees_with_the_first_harmonic_of_a_cut_off_cosine(duty_ratio):
    # Oracle: the loop closes when loop gain x (first harmonic of max(0, cos - c)) is the harmonic of the uncut wave, 1; the
    # harmonic by quadrature. Tolerance: the midpoint rule's error at the kink, about (1/n)^2.
    n = 200_000
    phase = (np.arange(n) + 0.5) / n * 2.0 * np.pi
    wave = np.maximum(0.0, np.cos(phase) - np.cos(np.pi * duty_ratio))
    harmonic = 2.0 * np.mean(wave * np.cos(phase))
    assert loop_gain_from_duty_ratio(duty_ratio) * harmonic == pytest.approx(1.0, rel=1e-6)


def test_series_and_closed_form_meet():
    # At the joint (angle 0.01) the two differ by the closed form's lost digits, 6 eps / angle^2, and the series' next term.
    below, above = np.nextafter(0.01, 0) / (2 * np.pi), 0.01 / (2 * np.pi)
    assert loop_gain_from_duty_ratio(below) == pytest.approx(loop_gain_from_duty_ratio(above), rel=1e-10)


def test_arrays_keep_their_shape():
    assert loop_gain_from_duty_ratio(np.full((2, 3), 0.5)).shape == (2, 3)


@pytest.mark.parametrize("bad", [0.0, -0.1, 1.0001, float("nan"), float("inf")])
def test_a_duty_ratio_outside_its_range_is_refused(bad):
    with pytest.raises(InvalidInputError, match="duty ratio must be over 0 and at most 1, got"):
        loop_gain_from_duty_ratio(bad)
