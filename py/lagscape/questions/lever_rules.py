"""How each lever's dose moves a breathing loop's numbers. Every rule takes and gives a loop or a batch; dose 0 gives the same numbers.

The rules are simple on purpose: what a lever does to the loop's numbers is known roughly, and the lever list says from where.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from lagscape.loops.gases import ROOM_OXYGEN, SEA_LEVEL_MMHG, WATER_VAPOUR_MMHG, altitude_m, barometric_pressure_mmhg
from lagscape.loops.protocol import Array

__all__ = [
    "BREATHS_PER_MIN",
    "acetazolamide",
    "added_dead_space",
    "cardiac_output_rise",
    "chemoreflex_gain_fall",
    "cpap",
    "descent",
    "exercise",
    "inspired_co2",
    "lateral_posture",
    "metabolic_rate_rise",
    "oxygen",
    "rem_sleep",
    "waking",
]

_RESPIRATORY_QUOTIENT = 0.8
_HEALTHY_DIFFERENCE_MMHG = 5.0
"""Alveolar-arterial PO2 difference of a healthy lung, young and supine (common practice, no source)."""
_LARGEST_PAO2_MMHG = 600.0
_LARGEST_OXYGEN = 1.0
_NOT_SEA_LEVEL_MMHG = 730.0
"""A barometric pressure under the typical band was typed for its altitude."""

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

WAKING_PACO2_MMHG, WAKING_CO2, WAKING_GAIN = 2.0, 0.15, 0.08
"""Waking against quiet sleep, as between the two healthy starting cases (gains: Irsigler 1976 over Solin 2000; rest common practice)."""
REM_GAIN, REM_PACO2_MMHG = 0.45 / 0.75, 1.0
"""REM over NREM sleep: hypercapnic response 0.45 over 0.75 (Douglas 1982, ARRD 126:758); PaCO2 common practice, no source."""
OUTPUT_PER_CO2 = 6.0 / 0.85
"""L/min of cardiac output per L/min of CO2: about 6 per L/min of oxygen uptake (common practice, no source), at R 0.85."""

BREATHS_PER_MIN = 15.0
"""Turns an added dead space in mL into a ventilation: common practice, no source. The loop itself has no breaths."""
_LARGEST_DEAD_SPACE = 0.95
_MOST_STEPS = 30


def oxygen(loop: Any, dose: Any) -> Any:
    """Nasal oxygen in L/min: the inspired fraction rises by 0.04 each; with CO2 only, PaO2 by what a healthy lung makes of that."""
    rise = OXYGEN_PER_L_MIN * dose
    if loop.has_oxygen:
        return loop.with_numbers(inspired_o2_fraction=np.minimum(loop.inspired_o2_fraction + rise, _LARGEST_OXYGEN))
    gained = rise * (loop.barometric_pressure_mmhg - WATER_VAPOUR_MMHG)
    return loop.with_numbers(arterial_po2_mmhg=np.minimum(loop.arterial_po2_mmhg + gained, _LARGEST_PAO2_MMHG))


def acetazolamide(loop: Any, dose: Any) -> Any:
    """mg/day: the controller's line moves to lower PCO2 with its slope kept, the apnoeic threshold by up to 15 %."""
    share = dose / (dose + ACETAZOLAMIDE_HALF_MG_DAY)
    share = share * (ACETAZOLAMIDE_FULL_MG_DAY + ACETAZOLAMIDE_HALF_MG_DAY) / ACETAZOLAMIDE_FULL_MG_DAY
    threshold = np.maximum(loop.resting_paco2_mmhg - loop.line_ventilation / loop.sensitivity, 0.0)
    return loop.with_numbers(resting_paco2_mmhg=loop.resting_paco2_mmhg - share * ACETAZOLAMIDE_SHIFT * threshold)


def _resting_at(loop: Any, pressure: Any, production: Any) -> Any:
    """The loop whose controller's line passes through this resting PaCO2 at this CO2 production, as far off its rest as before."""
    need = production / loop.co2_production_l_min
    need = need * (loop.resting_paco2_mmhg - loop.inspired_pco2_mmhg) / (pressure - loop.inspired_pco2_mmhg)
    return loop.with_numbers(
        resting_paco2_mmhg=pressure, co2_production_l_min=production, line_ventilation_l_min=loop.line_ventilation * need
    )


def _gains_times(loop: Any, factor: Any) -> Any:
    return loop.with_numbers(
        peripheral_gain_l_min_mmhg=loop.peripheral_gain_l_min_mmhg * factor,
        central_gain_l_min_mmhg=loop.central_gain_l_min_mmhg * factor,
    )


def waking(loop: Any, dose: Any) -> Any:
    """Share of the way from quiet sleep to waking: PaCO2 falls by 2 mmHg, CO2 production rises by 15 %, both gains by 8 %."""
    awake = _resting_at(loop, loop.resting_paco2_mmhg - WAKING_PACO2_MMHG * dose, loop.co2_production_l_min * (1.0 + WAKING_CO2 * dose))
    return _gains_times(awake, 1.0 + WAKING_GAIN * dose)


def rem_sleep(loop: Any, dose: Any) -> Any:
    """Share of the way from NREM to REM sleep: both gains fall by 40 %, PaCO2 rises by 1 mmHg."""
    asleep = _resting_at(loop, loop.resting_paco2_mmhg + REM_PACO2_MMHG * dose, loop.co2_production_l_min)
    return _gains_times(asleep, 1.0 - (1.0 - REM_GAIN) * dose)


def exercise(loop: Any, dose: Any) -> Any:
    """Percent more CO2 production at the same PaCO2; cardiac output rises with it and both delays shorten by its inverse."""
    production = loop.co2_production_l_min * (1.0 + dose / 100.0)
    output = loop.cardiac_output_l_min + OUTPUT_PER_CO2 * (production - loop.co2_production_l_min)
    faster = output / loop.cardiac_output_l_min
    return _resting_at(loop, loop.resting_paco2_mmhg, production).with_numbers(
        cardiac_output_l_min=output, peripheral_delay_s=loop.peripheral_delay_s / faster, central_delay_s=loop.central_delay_s / faster
    )


def inspired_co2(loop: Any, dose: Any) -> Any:
    """Percent CO2 in the inspired gas: 7.13 mmHg each at sea level."""
    added = dose / 100.0 * (loop.barometric_pressure_mmhg - WATER_VAPOUR_MMHG)
    return loop.with_numbers(inspired_pco2_mmhg=loop.inspired_pco2_mmhg + added)


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


def altitude_here(loop: Any) -> Array:
    """Altitude in m of the loop's barometric pressure; with CO2 only and a pressure of sea level, the one at which a healthy lung would
    have this PaO2 in room air (alveolar gas equation)."""
    typed = altitude_m(loop.barometric_pressure_mmhg)
    if loop.has_oxygen:
        return typed
    inspired = loop.arterial_po2_mmhg + _HEALTHY_DIFFERENCE_MMHG + loop.resting_paco2_mmhg / _RESPIRATORY_QUOTIENT
    meant = altitude_m(inspired / ROOM_OXYGEN + WATER_VAPOUR_MMHG)
    return np.where(np.asarray(loop.barometric_pressure_mmhg) < _NOT_SEA_LEVEL_MMHG, typed, np.minimum(meant, 9000.0))


def descent(loop: Any, dose: Any) -> Any:
    """m: barometric pressure rises, never above sea level; with CO2 only, PaO2 rises by the inspired PO2 gained."""
    here = altitude_here(loop)
    gained = barometric_pressure_mmhg(np.maximum(here - dose, 0.0)) - barometric_pressure_mmhg(here)
    if loop.has_oxygen:
        return loop.with_numbers(barometric_pressure_mmhg=np.minimum(loop.barometric_pressure_mmhg + gained, SEA_LEVEL_MMHG + 40.0))
    return loop.with_numbers(arterial_po2_mmhg=loop.arterial_po2_mmhg + ROOM_OXYGEN * gained)


def added_dead_space(loop: Any, dose: Any) -> Any:
    """mL: dead space is ventilated in every breath, so the dead-space ventilation grows by BREATHS_PER_MIN x dose.

    The own dead space keeps its mL while breaths grow, so that d V(d) = d0 V(d0) + f D =: W at the new rest. Alveolar ventilation
    A = (1 - d) V hardly depends on d, so d = W / (W + A(d)) is iterated, with secant steps, until it stands still.
    """
    own = np.asarray(loop.dead_space_fraction, dtype=float)
    at_rest = loop.rest().output
    wasted = own * at_rest + BREATHS_PER_MIN * np.asarray(dose, dtype=float) / 1000.0

    def next_fraction(fraction: Array) -> Array:
        alveolar = (1.0 - fraction) * loop.with_numbers(dead_space_fraction=_plain(fraction)).rest().output
        return np.minimum(wasted / (wasted + alveolar), _LARGEST_DEAD_SPACE)

    fraction = np.minimum(wasted / (wasted + (1.0 - own) * at_rest), _LARGEST_DEAD_SPACE)
    last, last_step = own + np.zeros(np.shape(wasted)), fraction - own
    for _ in range(_MOST_STEPS):
        step = next_fraction(fraction) - fraction
        if np.all(np.abs(step) <= 1e-12):
            break
        # The secant through the last two steps; a plain step where they do not tell enough.
        turn = step - last_step
        slope = np.where(np.abs(turn) > 1e-300, -(fraction - last) / np.where(np.abs(turn) > 1e-300, turn, 1.0), 1.0)
        last, last_step = fraction, step
        fraction = np.clip(fraction + step * np.where((slope > 0.2) & (slope < 5.0), slope, 1.0), own, _LARGEST_DEAD_SPACE)
    fraction = np.where(np.asarray(dose) > 0.0, fraction, own)
    return loop.with_numbers(dead_space_fraction=_plain(fraction))


def _plain(value: Array) -> Any:
    return value if np.ndim(value) else float(value)
