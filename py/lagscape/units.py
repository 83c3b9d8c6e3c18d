"""Constants and unit conversions of respiratory and reflex physiology, used only at the edges and in the loops.

Inside the package time is in seconds. Minutes, kPa, degrees and decibels exist on screens and in files.
"""

import math

__all__ = [
    "ALVEOLAR_CONSTANT",
    "MMHG_PER_KPA",
    "SECONDS_PER_MINUTE",
    "kpa_from_mmhg",
    "mmhg_from_kpa",
    "ratio_db",
]

SECONDS_PER_MINUTE = 60.0

MMHG_PER_KPA = 1000.0 / 133.322387415
"""1 kPa in mmHg; 1 mmHg = 133.322387415 Pa (BIPM, SI Brochure, conventional millimetre of mercury)."""

ALVEOLAR_CONSTANT = 863.0
"""mmHg: 760 x 310/273, turns L/min STPD over L/min BTPS into a partial pressure (alveolar ventilation equation)."""


def kpa_from_mmhg(pressure_mmhg: float) -> float:
    """Pressure in kPa of a pressure in mmHg."""
    return pressure_mmhg / MMHG_PER_KPA


def mmhg_from_kpa(pressure_kpa: float) -> float:
    """Pressure in mmHg of a pressure in kPa."""
    return pressure_kpa * MMHG_PER_KPA


def ratio_db(ratio: float) -> float:
    """A ratio of amplitudes in decibels, 20 log10(ratio); ratio must be positive."""
    return 20.0 * math.log10(ratio)
