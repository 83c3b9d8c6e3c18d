"""Conversions against the definitions of the units."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape import units


def test_one_kilopascal_in_mmhg() -> None:
    # Oracle: 1 mmHg = 133.322387415 Pa (SI Brochure). Tolerance: the ten printed digits.
    assert pytest.approx(1000.0 / 133.322387415, rel=1e-9) == units.MMHG_PER_KPA
    assert units.kpa_from_mmhg(40.0) == pytest.approx(5.332895, abs=5e-7)
    assert units.mmhg_from_kpa(5.3) == pytest.approx(39.7533, abs=5e-5)


@given(st.floats(-1e6, 1e6))
def test_pressure_comes_back(pressure: float) -> None:
    assert units.mmhg_from_kpa(units.kpa_from_mmhg(pressure)) == pytest.approx(pressure, rel=4e-16, abs=1e-300)


def test_the_alveolar_constant_is_atmosphere_times_the_ratio_of_temperatures() -> None:
    # Oracle: 760 x 310/273 = 863.0 to the digits in common use.
    assert pytest.approx(760.0 * 310.0 / 273.0, abs=0.05) == units.ALVEOLAR_CONSTANT


@pytest.mark.parametrize(("ratio", "decibels"), [(1.0, 0.0), (10.0, 20.0), (0.5, -6.0206), (math.sqrt(2.0), 3.0103)])
def test_decibels_of_an_amplitude_ratio(ratio: float, decibels: float) -> None:
    assert units.ratio_db(ratio) == pytest.approx(decibels, abs=5e-5)


def test_seconds_per_minute() -> None:
    assert units.SECONDS_PER_MINUTE == 60.0
