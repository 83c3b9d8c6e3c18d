"""How each lever's dose moves a breathing loop's numbers. Every rule takes and gives a loop or a batch; dose 0 gives the same numbers.

The rules are simple on purpose: what a lever does to the loop's numbers is known roughly, and the lever list says from where.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from lagscape.loops.protocol import Array

__all__ = [
    "BREATHS_PER_MIN",
    "acetazolamide",
    "added_dead_space",
    "chemoreflex_gain_fall",
    "cardiac_output_rise",
    "cpap",
    "descent",
    "inspired_co2",
    "lateral_posture",
    "metabolic_rate_rise",
    "oxygen",
]

_WATER_VAPOUR_MMHG = 47.0
_SEA_LEVEL_MMHG = 760.0
_ROOM_OXYGEN = 0.2093
_RESPIRATORY_QUOTIENT = 0.8
_ALVEOLAR_ARTERIAL_MMHG = 5.0
"""Alveolar-arterial PO2 difference where none is known: a healthy lung (common practice, no source)."""
_LARGEST_PAO2_MMHG = 600.0

OXYGEN_PER_L_MIN = 0.04
"""Rise of the inspired oxygen fraction per L/min by nasal cannula: common practice; 0.26 to 0.54 measured at 1 to 6 L/min
(Wettstein et al. 2005, Respir Care 50:604), so the rule is on the low side."""

ACETAZOLAMIDE_SHIFT = 0.15
"""Fall of the apnoeic threshold at the full dose, as a share: meta-analysis of Schmickl et al. 2021, Physiol Rep 9:e15071 (-15 %)."""
ACETAZOLAMIDE_HALF_MG_DAY = 250.0
ACETAZOLAMIDE_FULL_MG_DAY = 1000.0
"""The trials gave 500 mg twice a day. That half of the largest effect comes at 250 mg/day is assumed, without a source."""

CPAP_L_PER_CMH2O = 0.06
"""Lung gas volume per cmH2O lying down: common practice, no source."""
LATERAL_LUNG_VOLUME = 87.3 / 81.0
"""Functional residual capacity on the side over supine, each in percent of the seated one (20 patients, PMC5895090)."""

BREATHS_PER_MIN = 15.0
"""Turns an added dead space in mL into a ventilation: common practice, no source. The loop itself has no breaths."""
_LARGEST_DEAD_SPACE = 0.95


def oxygen(loop: Any, dose: Any) -> Any:
    """Nasal oxygen in L/min raises PaO2 by 0.04 (PB - 47) mmHg per L/min, at sea level where the loop has no altitude of its own."""
    rise = OXYGEN_PER_L_MIN * dose * (_SEA_LEVEL_MMHG - _WATER_VAPOUR_MMHG)
    return loop.with_numbers(arterial_po2_mmhg=np.minimum(loop.arterial_po2_mmhg + rise, _LARGEST_PAO2_MMHG))


def acetazolamide(loop: Any, dose: Any) -> Any:
    """mg/day: the controller's line moves to lower PCO2 with its slope kept, the apnoeic threshold by up to 15 %."""
    share = dose / (dose + ACETAZOLAMIDE_HALF_MG_DAY)
    share = share * (ACETAZOLAMIDE_FULL_MG_DAY + ACETAZOLAMIDE_HALF_MG_DAY) / ACETAZOLAMIDE_FULL_MG_DAY
    threshold = np.maximum(loop.resting_paco2_mmhg - loop.line_ventilation / loop.sensitivity, 0.0)
    return loop.with_numbers(resting_paco2_mmhg=loop.resting_paco2_mmhg - share * ACETAZOLAMIDE_SHIFT * threshold)


def inspired_co2(loop: Any, dose: Any) -> Any:
    """Percent CO2 in the inspired gas, at sea level: 7.13 mmHg each."""
    return loop.with_numbers(
        inspired_pco2_mmhg=loop.inspired_pco2_mmhg + dose / 100.0 * (_SEA_LEVEL_MMHG - _WATER_VAPOUR_MMHG)
    )


def cpap(loop: Any, dose: Any) -> Any:
    """cmH2O: the lung gas volume rises by 0.06 L each."""
    return loop.with_numbers(lung_volume_l=loop.lung_volume_l + CPAP_L_PER_CMH2O * dose)


def lateral_posture(loop: Any, dose: Any) -> Any:
    """Share of the way from supine to the side, 0 to 1: the lung gas volume rises by up to 7.8 %."""
    return loop.with_numbers(lung_volume_l=loop.lung_volume_l * (1.0 + (LATERAL_LUNG_VOLUME - 1.0) * dose))


def cardiac_output_rise(loop: Any, dose: Any) -> Any:
    """Percent: cardiac output rises, and both delays shorten by its inverse, tied or not."""
    factor = 1.0 + dose / 100.0
    return loop.with_numbers(
        cardiac_output_l_min=loop.cardiac_output_l_min * factor,
        peripheral_delay_s=loop.peripheral_delay_s / factor,
        central_delay_s=loop.central_delay_s / factor,
    )


def chemoreflex_gain_fall(loop: Any, dose: Any) -> Any:
    """Percent: both chemoreflex gains fall alike, about the eupnoeic point."""
    factor = 1.0 - dose / 100.0
    return loop.with_numbers(
        peripheral_gain_l_min_mmhg=loop.peripheral_gain_l_min_mmhg * factor,
        central_gain_l_min_mmhg=loop.central_gain_l_min_mmhg * factor,
    )


def metabolic_rate_rise(loop: Any, dose: Any) -> Any:
    """Percent: CO2 production rises (or falls); cardiac output and gains stay."""
    return loop.with_numbers(co2_production_l_min=loop.co2_production_l_min * (1.0 + dose / 100.0))


def barometric_pressure(altitude_m: Any) -> Array:
    """mmHg at an altitude in m: exp(6.63268 - 0.1112 h - 0.00149 h^2), h in km (West 1996; from memory)."""
    h = np.asarray(altitude_m, dtype=float) / 1000.0
    return np.exp(6.63268 - 0.1112 * h - 0.00149 * h * h)


def altitude_of_pao2(arterial_po2_mmhg: Any, arterial_pco2_mmhg: Any) -> Array:
    """Altitude in m at which a healthy lung would have this PaO2 in room air, not below 0 (alveolar gas equation)."""
    inspired = np.asarray(arterial_po2_mmhg, dtype=float) + _ALVEOLAR_ARTERIAL_MMHG + arterial_pco2_mmhg / _RESPIRATORY_QUOTIENT
    pressure = inspired / _ROOM_OXYGEN + _WATER_VAPOUR_MMHG
    under = np.maximum(6.63268 - np.log(pressure), 0.0)
    return 1000.0 * (np.sqrt(0.1112**2 + 4.0 * 0.00149 * under) - 0.1112) / (2.0 * 0.00149)


def descent(loop: Any, dose: Any) -> Any:
    """m: PaO2 rises by the inspired PO2 gained, at an unchanged PaCO2; never below sea level."""
    here = altitude_of_pao2(loop.arterial_po2_mmhg, loop.resting_paco2_mmhg)
    gained = barometric_pressure(np.maximum(here - dose, 0.0)) - barometric_pressure(here)
    return loop.with_numbers(arterial_po2_mmhg=loop.arterial_po2_mmhg + _ROOM_OXYGEN * gained)


def added_dead_space(loop: Any, dose: Any) -> Any:
    """mL: dead space is ventilated in every breath, so the dead-space ventilation grows by BREATHS_PER_MIN x dose.

    The own dead space keeps its mL while breaths grow. The new dead-space fraction d at the new rest solves
    d V(d) = d0 V(d0) + f D, whose left side rises with d; the root is found by halving.
    """
    own = loop.dead_space_fraction
    wasted = own * loop.rest().output + BREATHS_PER_MIN * np.asarray(dose, dtype=float) / 1000.0
    low = np.zeros(np.shape(wasted)) + own
    high = np.maximum(low, _LARGEST_DEAD_SPACE)
    for _ in range(44):
        middle = 0.5 * (low + high)
        too_little = middle * loop.with_numbers(dead_space_fraction=middle).rest().output < wasted
        low, high = np.where(too_little, middle, low), np.where(too_little, high, middle)
    fraction = np.where(np.asarray(dose) > 0.0, 0.5 * (low + high), own)
    return loop.with_numbers(dead_space_fraction=fraction if fraction.ndim else float(fraction))
