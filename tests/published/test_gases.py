"""The published table of the saturation curve, measured pressures on mountains, and arterial blood at 4,559 m."""

from __future__ import annotations

import math

import numpy as np
import pytest

from lagscape.loops import gases


@pytest.mark.parametrize(
    ("po2", "percent"), [(50.0, 85.08), (60.0, 90.85), (70.0, 94.06), (80.0, 95.84), (90.0, 96.88), (100.0, 97.49)]
)
def test_the_table_of_severinghaus(po2: float, percent: float) -> None:
    # Oracle: the standard curve tabled in Severinghaus 1979, J Appl Physiol 46:599. Tolerance: the distance of the formula from the
    # standard curve that the paper states, 0.0055.
    assert gases.saturation(po2) == pytest.approx(percent / 100.0, abs=0.0055)


def test_p50() -> None:
    # Oracle: Severinghaus 1979, P50 about 26.86 mmHg, printed to 0.01.
    assert gases.po2_of_saturation(0.5) == pytest.approx(26.86, abs=0.005)


@pytest.mark.parametrize("saturation", np.arange(0.90, 0.985, 0.005))
def test_the_printed_inverse_agrees_within_its_printed_error(saturation: float) -> None:
    # Oracle: ln P = 0.385 ln(S/(1-S)) + 3.32 - 1/(72 S) - 0.17 S^6, whose round trip is printed as within 0.0031.
    printed = math.exp(0.385 * math.log(saturation / (1.0 - saturation)) + 3.32 - 1.0 / (72.0 * saturation) - 0.17 * saturation**6)
    assert gases.saturation(printed) == pytest.approx(saturation, abs=0.0031)
    assert gases.saturation(gases.po2_of_saturation(saturation)) == pytest.approx(saturation, abs=1e-14)


@pytest.mark.parametrize(("altitude", "low", "high", "standard"), [(6300.0, 350.0, 352.0, 339.6), (8050.0, 281.0, 285.0, 265.1)])
def test_pressure_on_high_mountains(altitude: float, low: float, high: float, standard: float) -> None:
    # Oracle: pressures measured on Everest (West 1986), and the standard atmosphere's (ICAO), which is too low there. The formula is
    # a mean over places and seasons; 1.3 % covers its distance from the days measured, a third of the standard atmosphere's error.
    pressure = float(gases.barometric_pressure_mmhg(altitude))
    measured = 0.5 * (low + high)
    icao = 760.0 * (1.0 - 2.25577e-5 * altitude) ** 5.25588
    assert icao == pytest.approx(standard, abs=0.15)  # the oracle's own oracle: printed to 0.1
    assert pressure == pytest.approx(measured, rel=0.013)
    assert abs(pressure - measured) < 0.4 * abs(icao - measured)


def test_sea_level() -> None:
    # exp(6.63268) by the formula: 759.5 against the standard 760 mmHg.
    assert gases.barometric_pressure_mmhg(0.0) == pytest.approx(760.0, rel=0.001)


@pytest.mark.parametrize(("pao2", "paco2", "difference"), [(39.6, 30.0, 7.9), (37.6, 30.7, 9.3), (33.9, 31.1, 12.5)])
def test_arterial_blood_at_4559_m_fits_the_alveolar_gas_equation(pao2: float, paco2: float, difference: float) -> None:
    # Oracle: femoral blood a few hours after arrival at the Margherita hut, by severity of mountain sickness (table in Eur Respir
    # Rev). The mean alveolar PO2 that the table implies against ours by West's pressure. A person's R between 0.75 and 0.85 moves it
    # by 2.5 mmHg, a day's weather by 1.
    ours = float(gases.alveolar_po2_mmhg(paco2, barometric_mmhg=gases.barometric_pressure_mmhg(4559.0)))
    assert ours == pytest.approx(pao2 + difference, abs=2.7)
