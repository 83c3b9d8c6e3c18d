"""Numbers as the clinic has them, turned into the breathing loop's numbers, each with its spread, a sentence and a source.

Every function is pure. It takes plain numbers in the units of its argument names, refuses what cannot be with InvalidInputError, and
gives a ClinicNumber whose value has been checked against the loop's own range. See `plausibility` for combinations that cannot be.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal, TypeVar

from lagscape.case.parts import checked_positive, shown, specifications
from lagscape.errors import InvalidInputError
from lagscape.loops import gases

__all__ = [
    "ClinicNumber",
    "Posture",
    "Sex",
    "Site",
    "State",
    "alveolar_arterial_difference",
    "barometric_pressure",
    "cardiac_output",
    "co2_production",
    "dead_space_fraction",
    "dead_space_fraction_from_rate",
    "loop_delay_from_circulation_time",
    "lung_volume_by_posture",
    "lung_volume_predicted",
    "paco2_from_end_tidal",
    "pao2_from_spo2",
    "whole_gain_from_threshold",
]

Sex = Literal["female", "male"]
State = Literal["asleep", "awake"]
Posture = Literal["seated", "supine", "side"]
Site = Literal["ear", "finger"]

_T = TypeVar("_T")

_TRADE = "Common practice, no source."

END_TIDAL_GRADIENT_MMHG = 3.0
"""PaCO2 above end-tidal PCO2 in a person at rest without lung disease: 2 to 5 mmHg (common practice, no source)."""

SPO2_RANGE_PERCENT = (50.0, 97.0)
"""Under it oximeters are not calibrated; over it the curve is flat (common practice, no source)."""
_OXIMETER_PERCENT = 2.0
"""One standard deviation of a pulse oximeter over 70 to 100 % (common practice, no source)."""

_BASAL: dict[str, tuple[tuple[float, float, float, float], ...]] = {
    "male": ((30.0, 0.063, 2.896, 0.641), (60.0, 0.048, 3.653, 0.700), (math.inf, 0.049, 2.459, 0.686)),
    "female": ((30.0, 0.062, 2.036, 0.497), (60.0, 0.034, 3.538, 0.465), (math.inf, 0.038, 2.755, 0.451)),
}
"""Basal metabolic rate in MJ/day: up to an age, slope by kg, constant, standard error of the estimate (Schofield 1985)."""
_MJ_PER_DAY_IN_KCAL_PER_MIN = 1000.0 / 4.184 / 1440.0
_STATE_FACTOR: dict[str, float] = {"asleep": 0.95, "awake": 1.10}
"""Times the basal rate: asleep a little under, awake at rest a little over it (common practice, no source)."""
_STATE_SPREAD = 0.05
_KCAL_PER_L_O2, _KCAL_PER_L_CO2 = 3.941, 1.106
"""Energy per litre of O2 and CO2 (Weir 1949; from memory)."""

_FRC: dict[str, tuple[float, float, float, float]] = {"male": (2.34, 0.01, -1.09, 0.60), "female": (2.24, 0.001, -1.00, 0.50)}
"""Seated functional residual capacity in L: by m of height, by year, constant, residual deviation (Quanjer 1993; from memory)."""
_POSTURE: dict[str, float] = {"seated": 1.0, "supine": 0.810, "side": 0.873}
"""Share of the seated functional residual capacity (20 patients, PMC5895090)."""

FINGER_SHARE = 0.53
"""Lung-to-ear over lung-to-finger time: 14.9/26.1 with and 9.0/18.5 without heart failure (Ryan and Bradley 2005 over Kwon 2014)."""
_EAR_SPREAD, _FINGER_SPREAD = 0.15, 0.25


@dataclass(frozen=True)
class ClinicNumber:
    """One of the loop's numbers, worked out from what the clinic has."""

    parameter: str
    """The loop's own name of the number."""
    value: float
    """In the parameter's unit."""
    spread: float
    """One standard deviation, as the parameter's specification gives it: in its unit, or of the natural logarithm."""
    sentence: str
    """What was done, to be read beside the number."""
    source: str


def paco2_from_end_tidal(end_tidal_mmhg: float, gradient_mmhg: float | None = None) -> ClinicNumber:
    """Resting PaCO2 from end-tidal PCO2. `gradient_mmhg` is arterial less end-tidal, from a blood gas; None for a usual one."""
    end_tidal = checked_positive("End-tidal PCO2", end_tidal_mmhg, "mmHg")
    known = gradient_mmhg is not None
    gradient = _within("The arterial less end-tidal difference", gradient_mmhg, -10.0, 30.0, "mmHg") if known else END_TIDAL_GRADIENT_MMHG
    whence = "measured" if known else "a usual difference in a healthy lung; it is larger in lung disease and in heart failure"
    return _number(
        "resting_paco2_mmhg", end_tidal + gradient, 1.0 if known else 2.0,
        f"End-tidal {end_tidal:.4g} mmHg plus {gradient:.3g} mmHg ({whence}).", _TRADE,
    )  # fmt: skip


def pao2_from_spo2(spo2_percent: float) -> ClinicNumber:
    """PaO2 from SpO2 by the standard curve at pH 7.40 and 37 degrees; 50 to 97 %.

    Raises
    ------
    InvalidInputError
        Outside that range, where a saturation does not say a PaO2.
    """
    low, high = SPO2_RANGE_PERCENT
    spo2 = checked_positive("SpO2", spo2_percent, "%")
    if not low <= spo2 <= high:
        reason = "Above it the curve is flat: leave PaO2 typical, or take a blood gas." if spo2 > high else "Take a blood gas."
        raise InvalidInputError(f"SpO2 must be from {low:g} to {high:g} % to say a PaO2; got {spo2:.4g} %. {reason}")
    po2 = float(gases.po2_of_saturation(spo2 / 100.0))
    spread = _OXIMETER_PERCENT / (100.0 * float(gases.saturation_slope(po2)))
    return _number(
        "arterial_po2_mmhg", po2, spread,
        f"SpO2 {spo2:.4g} % is a PaO2 of {po2:.3g} mmHg at pH 7.40; an oximeter's 2 % is {spread:.2g} mmHg there.",
        "Severinghaus 1979, J Appl Physiol 46:599.",
    )  # fmt: skip


def co2_production(weight_kg: float, sex: Sex, age_years: float, state: State, respiratory_quotient: float = 0.8) -> ClinicNumber:
    """CO2 production of an adult at rest from the basal metabolic rate.

    Raises
    ------
    InvalidInputError
        For a weight outside 30 to 250 kg, an age outside 18 to 110 years, an unknown sex or state.
    """
    weight = _within("Weight", weight_kg, 30.0, 250.0, "kg")
    age = _within("Age", age_years, 18.0, 110.0, "years")
    quotient = _within("The respiratory quotient", respiratory_quotient, 0.65, 1.2, "")
    bands, factor = _one_of("Sex", sex, _BASAL), _one_of("State", state, _STATE_FACTOR)
    _, slope, constant, error = next(band for band in bands if age < band[0])
    basal = slope * weight + constant
    per_minute = basal * factor * _MJ_PER_DAY_IN_KCAL_PER_MIN
    vco2 = per_minute / (_KCAL_PER_L_O2 / quotient + _KCAL_PER_L_CO2)
    return _number(
        "co2_production_l_min", vco2, math.hypot(error / basal, _STATE_SPREAD),
        f"Basal rate {1000.0 / 4.184 * basal:.0f} kcal/day times {factor:g} for a person {state}, at R {quotient:g}.",
        "Basal rate: Schofield 1985, Hum Nutr Clin Nutr 39C suppl 1:5. Energy of O2 and CO2: Weir 1949. Factor asleep and awake: "
        "common practice, no source.",
    )  # fmt: skip


def dead_space_fraction(dead_space_ml: float, tidal_volume_ml: float) -> ClinicNumber:
    """Dead-space fraction from a dead space and a tidal volume.

    Raises
    ------
    InvalidInputError
        If the dead space is not smaller than the tidal volume.
    """
    dead, tidal = checked_positive("Dead space", dead_space_ml, "mL"), checked_positive("Tidal volume", tidal_volume_ml, "mL")
    if dead >= tidal:
        raise InvalidInputError(
            f"Dead space must be smaller than the tidal volume; got {dead:.4g} and {tidal:.4g} mL. No breath would reach the alveoli."
        )
    return _number(
        "dead_space_fraction", dead / tidal, 0.03, f"Dead space {dead:.4g} mL in breaths of {tidal:.4g} mL.", "Definition of VD/VT."
    )


def dead_space_fraction_from_rate(dead_space_ml: float, ventilation_l_min: float, breaths_per_min: float) -> ClinicNumber:
    """As `dead_space_fraction`, with the tidal volume from minute ventilation and rate."""
    ventilation = checked_positive("Ventilation", ventilation_l_min, "L/min")
    return dead_space_fraction(dead_space_ml, 1000.0 * ventilation / checked_positive("Breathing rate", breaths_per_min, "1/min"))


def lung_volume_by_posture(frc_l: float, measured: Posture = "seated", posture: Posture = "supine") -> ClinicNumber:
    """Functional residual capacity in the posture of interest from one measured in another."""
    frc = checked_positive("Functional residual capacity", frc_l, "L")
    factor = _one_of("Posture", posture, _POSTURE) / _one_of("Posture", measured, _POSTURE)
    return _number(
        "lung_volume_l", frc * factor, 0.08 if factor == 1.0 else 0.13,
        f"Functional residual capacity {frc:.3g} L {measured}, times {factor:.3g} for {posture}.",
        "Posture: 20 patients, PMC5895090 (81.0 % supine and 87.3 % on the side, of predicted seated).",
    )  # fmt: skip


def lung_volume_predicted(height_m: float, sex: Sex, age_years: float, posture: Posture = "supine") -> ClinicNumber:
    """Functional residual capacity where none was measured, from height, sex and age."""
    height = _within("Height", height_m, 1.3, 2.2, "m")
    age = _within("Age", age_years, 18.0, 110.0, "years")
    by_height, by_age, constant, error = _one_of("Sex", sex, _FRC)
    seated = by_height * height + by_age * age + constant
    factor = _one_of("Posture", posture, _POSTURE)
    return _number(
        "lung_volume_l", seated * factor, math.hypot(error / seated, 0.10 if factor != 1.0 else 0.0),
        f"Predicted seated functional residual capacity {seated:.3g} L, times {factor:.3g} for {posture}.",
        "Quanjer 1993, Eur Respir J 6 suppl 16:5 (from memory). Posture: PMC5895090.",
    )  # fmt: skip


def cardiac_output(index_l_min_m2: float, height_m: float, weight_kg: float) -> ClinicNumber:
    """Cardiac output from cardiac index and body surface area."""
    index = checked_positive("Cardiac index", index_l_min_m2, "L/min/m2")
    height, weight = _within("Height", height_m, 1.0, 2.3, "m"), _within("Weight", weight_kg, 20.0, 300.0, "kg")
    area = math.sqrt(100.0 * height * weight / 3600.0)
    return _number(
        "cardiac_output_l_min", index * area, 0.12, f"Cardiac index {index:.3g} L/min/m2 times a body surface of {area:.3g} m2.",
        "Body surface: Mosteller 1987, N Engl J Med 317:1098 (from memory).",
    )  # fmt: skip


def loop_delay_from_circulation_time(seconds: float, site: Site) -> ClinicNumber:
    """The loop's delay to the carotid body from a circulation time measured at an oximeter.

    The ear's time is taken as it stands: blood reaches the carotid body a little earlier than the ear, and the receptor takes about as
    long to answer. The finger's time is never taken itself.
    """
    time = checked_positive("Circulation time", seconds, "s")
    share = _one_of("The site", site, {"ear": 1.0, "finger": FINGER_SHARE})
    delay = share * time
    if site == "ear":
        sentence = f"Lung to ear {time:.3g} s: the carotid body lies a little earlier, its answer takes about as long; 15 % either way."
        return _number("peripheral_delay_s", delay, _EAR_SPREAD, sentence, "Hall 1996, AJRCCM 154:376. " + _TRADE)
    return _number(
        "peripheral_delay_s", delay, _FINGER_SPREAD,
        f"Lung to finger {time:.3g} s times {FINGER_SHARE}: the way to the arm and the oximeter's averaging are not in the loop; the "
        f"delay lies most likely from {delay * math.exp(-_FINGER_SPREAD):.2g} to {delay * math.exp(_FINGER_SPREAD):.2g} s. Measure at the "
        "ear if you can.",
        "Ryan and Bradley 2005 (ear) over Kwon 2014, J Clin Sleep Med 10:759 (finger): other patients, so a rough ratio.",
    )  # fmt: skip


def barometric_pressure(altitude_m: float) -> ClinicNumber:
    """Barometric pressure at an altitude from 0 to 9,000 m."""
    altitude = _within("Altitude", altitude_m, 0.0, 9000.0, "m")
    pressure = float(gases.barometric_pressure_mmhg(altitude))
    return _number(
        "barometric_pressure_mmhg", pressure, 0.01 * pressure,
        f"{altitude:.0f} m: {pressure:.4g} mmHg on a mountain in summer; weather and season move it by about 1 %.",
        "West 1996, J Appl Physiol 81:1850 (from memory).",
    )  # fmt: skip


def alveolar_arterial_difference(
    pao2_mmhg: float,
    paco2_mmhg: float,
    inspired_o2_fraction: float = gases.ROOM_OXYGEN,
    barometric_mmhg: float = gases.SEA_LEVEL_MMHG,
    respiratory_quotient: float = 0.8,
) -> ClinicNumber:
    """Alveolar-arterial PO2 difference from a blood gas.

    Raises
    ------
    InvalidInputError
        If the arterial PO2 is above the alveolar.
    """
    arterial = checked_positive("PaO2", pao2_mmhg, "mmHg")
    alveolar = float(
        gases.alveolar_po2_mmhg(
            checked_positive("PaCO2", paco2_mmhg, "mmHg"), _within("Inspired oxygen fraction", inspired_o2_fraction, 0.05, 1.0, ""),
            _within("Barometric pressure", barometric_mmhg, 200.0, 800.0, "mmHg"),
            _within("The respiratory quotient", respiratory_quotient, 0.65, 1.2, ""),
        )
    )  # fmt: skip
    if arterial > alveolar:
        raise InvalidInputError(
            f"PaO2 {arterial:.4g} mmHg lies above the alveolar PO2 of {alveolar:.4g} mmHg that this gas and PaCO2 give, which cannot "
            "be. Check the inspired oxygen, the altitude and the sample."
        )
    return _number(
        "alveolar_arterial_difference_mmhg", alveolar - arterial, 3.0,
        f"Alveolar PO2 {alveolar:.4g} mmHg by the alveolar gas equation, less PaO2 {arterial:.4g} mmHg.", "Alveolar gas equation.",
    )  # fmt: skip


def whole_gain_from_threshold(resting_paco2_mmhg: float, apnoeic_threshold_mmhg: float, ventilation_l_min: float) -> float:
    """Slope of ventilation on CO2 in L/min/mmHg, both paths together, from a measured apnoeic threshold: V / (P0 - threshold).

    Raises
    ------
    InvalidInputError
        If the CO2 reserve is not above zero.
    """
    eupnoea = _within("PaCO2", resting_paco2_mmhg, 15.0, 80.0, "mmHg")
    threshold = _within("The apnoeic threshold", apnoeic_threshold_mmhg, 5.0, 80.0, "mmHg")
    ventilation = checked_positive("Ventilation", ventilation_l_min, "L/min")
    reserve = eupnoea - threshold
    if reserve <= 0.0:
        raise InvalidInputError(
            f"The CO2 reserve must be above 0; an apnoeic threshold of {threshold:.4g} mmHg and a resting PaCO2 of {eupnoea:.4g} mmHg "
            f"leave {reserve:.3g} mmHg, and nobody breathes under the own threshold. Take both in the same state and posture."
        )
    return ventilation / reserve


def _number(parameter: str, value: float, spread: float, sentence: str, source: str) -> ClinicNumber:
    return ClinicNumber(parameter, specifications("breathing")[parameter].check(float(value)), float(spread), sentence, source)


def _within(what: str, value: object, low: float, high: float, unit: str) -> float:
    rule = f"{what} must be a number from {low:g} to {high:g}{' ' + unit if unit else ''}"
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not low <= value <= high:
        raise InvalidInputError(f"{rule}; got {shown(value)}.")
    return float(value)


def _one_of(what: str, value: str, known: Mapping[str, _T]) -> _T:
    if value not in known:
        raise InvalidInputError(f"{what} must be one of {', '.join(known)}; got {shown(value)}.")
    return known[value]
