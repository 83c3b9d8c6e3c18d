"""Loop gain from the duty ratio of periodic breathing: Sands 2011, AJRCCM 184:1067 (seen)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from lagscape.recordings.loop_gain import loop_gain_from_duty_ratio


@pytest.mark.parametrize(
    ("duty_ratio", "loop_gain", "tolerance"),
    [(0.5, 2.0, 4e-15), (1.0, 1.0, 4e-15), (0.6, 1.44186, 5e-6), (0.7, 1.17458, 5e-6), (0.8, 1.05112, 5e-6)],
)
def test_duty_ratio_table(duty_ratio: float, loop_gain: float, tolerance: float) -> None:
    # Oracle: LG = 2 pi/(2 pi DR - sin 2 pi DR), exact at 0.5 and 1. Tolerance: rounding, or half of the fifth place.
    assert loop_gain_from_duty_ratio(duty_ratio) == pytest.approx(loop_gain, abs=tolerance)


def test_the_loop_gain_is_that_of_a_clipped_sine() -> None:
    # Where the formula comes from, by quadrature: a sine of amplitude LG about 1 clipped at zero for 1 - DR of its period keeps
    # a first harmonic of 1. Tolerance: the trapezium rule on a periodic function with two corners, 20,000 points.
    for duty_ratio in (0.55, 0.65, 0.8, 0.95):
        phase = np.linspace(-np.pi, np.pi, 20001)
        edge = math.cos(math.pi * duty_ratio)
        wave = np.maximum(np.cos(phase) - edge, 0.0)
        first = np.trapezoid(wave * np.cos(phase), phase) / np.pi
        assert loop_gain_from_duty_ratio(duty_ratio) == pytest.approx(1.0 / first, rel=1e-6)


def test_a_duty_ratio_of_three_quarters_is_the_responders_loop_gain() -> None:
    # By hand: sin(3 pi/2) = -1, so LG = 2 pi/(3 pi/2 + 1) = 1.0999; Sands 2011 prints 1.10 for those whom CPAP helped.
    found = loop_gain_from_duty_ratio(0.75)
    assert found == pytest.approx(2.0 * math.pi / (1.5 * math.pi + 1.0), rel=1e-15)
    assert round(found, 2) == 1.10
