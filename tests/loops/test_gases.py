"""Gases: each function against its inverse, its own slope, and a formula written out another way. Printed tables: tests/published."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.loops import gases

EPS = np.finfo(float).eps


@given(po2=st.floats(20.0, 130.0))
def test_the_inverse_brings_the_pressure_back(po2: float) -> None:
    # Law: inverse of inverse. Rounding of S is multiplied by 1/(1 - S), at most 100 in range, over the relative slope.
    assert gases.po2_of_saturation(gases.saturation(po2)) == pytest.approx(po2, rel=2000 * EPS)


@given(po2=st.floats(0.0, 700.0))
def test_saturation_is_the_printed_form(po2: float) -> None:
    # Oracle: the formula as printed, which divides by P^3 + 150 P and so cannot take 0. Tolerance: rounding.
    printed = 0.0 if po2 == 0.0 else 1.0 / (23400.0 / (po2**3 + 150.0 * po2) + 1.0)
    assert gases.saturation(po2) == pytest.approx(printed, rel=8 * EPS, abs=1e-300)


@given(po2=st.floats(1.0, 300.0))
def test_the_slopes_are_central_differences(po2: float) -> None:
    # Oracle: central differences; their own error is h^2 over six of the third derivative, under 1e-6 of the steepest slope.
    h = 1e-3
    steepest = 0.03
    difference = float(gases.saturation(po2 + h) - gases.saturation(po2 - h)) / (2.0 * h)
    assert gases.saturation_slope(po2) == pytest.approx(difference, abs=1e-6 * steepest)
    assert gases.oxygen_content_slope(po2) == pytest.approx(0.20 * difference + 3.1e-5, abs=1e-6 * 0.2 * steepest)


def test_a_negative_pressure_counts_as_none() -> None:
    assert gases.saturation(-5.0) == 0.0
    assert gases.hypoxic_multiplier(-5.0) == gases.hypoxic_multiplier(0.0) == pytest.approx(math.exp(5.0), rel=4 * EPS)


@pytest.mark.parametrize("fraction", [0.29, 0.995, 1.0, -0.1, float("nan")])
def test_a_saturation_that_says_no_pressure_is_refused(fraction: float) -> None:
    with pytest.raises(InvalidInputError, match=r"A saturation must lie from 30 to 99 % to say a PO2; got .* Above, the curve is flat"):
        gases.po2_of_saturation(np.array([0.9, fraction]))


@given(paco2=st.floats(15.0, 80.0), oxygen=st.floats(0.1, 1.0), barometric=st.floats(250.0, 800.0), quotient=st.floats(0.65, 1.2))
def test_the_alveolar_gas_equation_is_a_balance_of_gas(paco2: float, oxygen: float, barometric: float, quotient: float) -> None:
    # Oracle: a balance of all three gases, per litre of alveolar gas let out. Nitrogen in is nitrogen out, which fixes the inspired
    # volume; what is not nitrogen or CO2 in the alveolus is O2 (Fenn, Rahn and Otis 1946). Shares of the dry gas.
    dry = barometric - 47.0
    co2 = paco2 / dry
    # Unknown inspired volume v per 1 out, alveolar O2 share a: CO2 made = co2, O2 used = co2/R = v F - a, N2: v (1 - F) = 1 - a - co2.
    matrix = np.array([[oxygen, -1.0], [1.0 - oxygen, 1.0]])
    _, share = np.linalg.solve(matrix, [co2 / quotient, 1.0 - co2])
    assert gases.alveolar_po2_mmhg(paco2, oxygen, barometric, quotient) == pytest.approx(share * dry, abs=1e-10)


def test_the_short_alveolar_gas_equation_is_a_few_mmhg_under_the_full_one() -> None:
    # Standard: FIO2 (PB - 47) - PaCO2/R, which leaves out PaCO2 FIO2 (1 - R)/R: 0.2093 x 713 - 50 = 99.23, and 2.09 more.
    assert gases.alveolar_po2_mmhg(40.0) == pytest.approx(99.2309 + 2.093, abs=1e-9)


@given(altitude=st.floats(100.0, 9000.0))
def test_altitude_is_the_inverse_of_pressure(altitude: float) -> None:
    assert gases.altitude_m(gases.barometric_pressure_mmhg(altitude)) == pytest.approx(altitude, abs=1e-7)


def test_no_altitude_is_under_the_sea() -> None:
    assert gases.altitude_m(790.0) == 0.0


@pytest.mark.parametrize("altitude", [-1.0, 9001.0, float("nan")])
def test_an_altitude_out_of_range_is_refused(altitude: float) -> None:
    with pytest.raises(InvalidInputError, match="An altitude must be a number from 0 to 9000 m; got"):
        gases.barometric_pressure_mmhg(altitude)
