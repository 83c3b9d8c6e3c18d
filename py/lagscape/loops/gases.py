"""Respiratory gases: the saturation curve, the alveolar gas equation, barometric pressure by altitude, the hypoxic multiplier.

Severinghaus 1979   S = 1 / (23400 / (P^3 + 150 P) + 1)                 within 0.0055 of the standard curve (37 degrees, pH 7.40)
alveolar gas        PAO2 = FIO2 (PB - 47) - (PaCO2 - PICO2) (1 - FIO2 (1 - R)) / R
West 1996           PB = exp(6.63268 - 0.1112 h - 0.00149 h^2), h in km (from memory)
peripheral gain     g = exp(-0.05 (PaO2 - 100))                         secondary sources only

Pressures in mmHg, altitudes in m, fractions from 0 to 1. Every function takes floats or arrays.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from lagscape.errors import InvalidInputError

__all__ = [
    "HYPOXIC_RATE",
    "LOWEST_PRESSURE",
    "OXYGEN_CAPACITY",
    "ROOM_OXYGEN",
    "SATURATION_RANGE",
    "SEA_LEVEL_MMHG",
    "WATER_VAPOUR_MMHG",
    "altitude_m",
    "alveolar_po2_mmhg",
    "barometric_pressure_mmhg",
    "hypoxic_multiplier",
    "inspired_po2_mmhg",
    "oxygen_content_slope",
    "oxygen_loss",
    "po2_of_saturation",
    "saturation",
    "saturation_slope",
]

WATER_VAPOUR_MMHG = 47.0
"""Saturated water vapour at 37 degrees C."""

ROOM_OXYGEN = 0.2093
"""Oxygen fraction of dry air (standard)."""

SEA_LEVEL_MMHG = 760.0

HYPOXIC_RATE = 0.05
"""1/mmHg, of the peripheral gain on PaO2. Secondary sources only."""

LOWEST_PRESSURE = 0.0
"""mmHg: a PaO2 under this counts as this in the multiplier; a linear lung could otherwise be driven below zero."""

SATURATION_RANGE = (0.30, 0.99)
"""Where `po2_of_saturation` answers. Above, the curve is flat: one part in a hundred is 60 mmHg and more."""

OXYGEN_CAPACITY = 0.20
"""L of O2 STPD that a litre of blood carries when saturated: 150 g/L of haemoglobin times 1.34 mL/g (standard)."""

_DISSOLVED = 3.1e-5
"""L of O2 STPD per L of blood and mmHg in solution (standard)."""

_CUBE, _LINEAR = 23400.0, 150.0
_WEST = (6.63268, 0.1112, 0.00149)


def hypoxic_multiplier(arterial_po2_mmhg: Any) -> Any:
    """g = exp(-0.05 (PaO2 - 100)), no unit, 1 at 100 mmHg. Secondary sources only. A PaO2 under 0 counts as 0."""
    return np.exp(-HYPOXIC_RATE * (np.maximum(np.asarray(arterial_po2_mmhg, dtype=float), LOWEST_PRESSURE) - 100.0))


def saturation(po2_mmhg: Any) -> Any:
    """Oxygen saturation, 0 to 1, at a PO2 of 0 or more; a negative PO2 counts as 0 (Severinghaus 1979, J Appl Physiol 46:599)."""
    p = np.maximum(np.asarray(po2_mmhg, dtype=float), 0.0)
    bound = p * (p * p + _LINEAR)
    return bound / (bound + _CUBE)


def saturation_slope(po2_mmhg: Any) -> Any:
    """dS/dP in 1/mmHg of `saturation`."""
    p = np.maximum(np.asarray(po2_mmhg, dtype=float), 0.0)
    bound = p * (p * p + _LINEAR)
    return _CUBE * (3.0 * p * p + _LINEAR) / (bound + _CUBE) ** 2


def po2_of_saturation(fraction: Any) -> Any:
    """PO2 in mmHg at a saturation: the exact inverse of `saturation`, the real root of P^3 + 150 P = 23400 S / (1 - S).

    The formula that the paper prints for this direction comes back within 0.0031 only; the root has no such error.

    Raises
    ------
    InvalidInputError
        If a saturation is outside SATURATION_RANGE.
    """
    s = np.asarray(fraction, dtype=float)
    low, high = SATURATION_RANGE
    if not np.all((s >= low) & (s <= high)):
        wrong = s[~((s >= low) & (s <= high))].flat[0]
        raise InvalidInputError(
            f"A saturation must lie from {100 * low:g} to {100 * high:g} % to say a PO2; got {100 * wrong:.4g} %. "
            "Above, the curve is flat: take the PaO2 from a blood gas."
        )
    third = _LINEAR / 3.0
    half = 0.5 * _CUBE * s / (1.0 - s)
    return 2.0 * math.sqrt(third) * np.sinh(np.arcsinh(half / third**1.5) / 3.0)


def oxygen_content_slope(po2_mmhg: Any) -> Any:
    """Rise of the blood's O2 content per mmHg, L STPD per L and mmHg: bound and dissolved, at OXYGEN_CAPACITY."""
    return OXYGEN_CAPACITY * saturation_slope(po2_mmhg) + _DISSOLVED


def inspired_po2_mmhg(inspired_o2_fraction: Any, barometric_mmhg: Any) -> Any:
    """PO2 of moist inspired gas: FIO2 (PB - 47)."""
    return inspired_o2_fraction * (barometric_mmhg - WATER_VAPOUR_MMHG)


def oxygen_loss(inspired_o2_fraction: Any, respiratory_quotient: Any) -> Any:
    """How far PAO2 falls per mmHg that PaCO2 stands above the inspired: (1 - F (1 - R)) / R.

    1/R, and a little less because where less CO2 comes out than O2 goes in, more gas of the inspired kind follows.
    """
    return (1.0 - inspired_o2_fraction * (1.0 - respiratory_quotient)) / respiratory_quotient


def alveolar_po2_mmhg(
    paco2_mmhg: Any,
    inspired_o2_fraction: Any = ROOM_OXYGEN,
    barometric_mmhg: Any = SEA_LEVEL_MMHG,
    respiratory_quotient: Any = 0.8,
    inspired_pco2_mmhg: Any = 0.0,
) -> Any:
    """PAO2 in mmHg by the full alveolar gas equation, in a steady state."""
    fall = oxygen_loss(inspired_o2_fraction, respiratory_quotient)
    return inspired_po2_mmhg(inspired_o2_fraction, barometric_mmhg) - (paco2_mmhg - inspired_pco2_mmhg) * fall


def barometric_pressure_mmhg(altitude: Any) -> Any:
    """PB in mmHg at an altitude in m, from 0 to 9,000 (West 1996; from memory). The standard atmosphere is too low on high mountains.

    Raises
    ------
    InvalidInputError
        If an altitude is outside the range.
    """
    h = np.asarray(altitude, dtype=float) / 1000.0
    if not np.all((h >= 0.0) & (h <= 9.0)):
        wrong = np.ravel(h[~((h >= 0.0) & (h <= 9.0))])[0] * 1000.0
        raise InvalidInputError(f"An altitude must be a number from 0 to 9000 m; got {wrong:.6g} m. Deeper or higher, type the pressure.")
    constant, first, second = _WEST
    return np.exp(constant - first * h - second * h * h)


def altitude_m(barometric_mmhg: Any) -> Any:
    """Altitude in m with this barometric pressure: the inverse of `barometric_pressure_mmhg`, not below 0."""
    constant, first, second = _WEST
    under = np.maximum(constant - np.log(np.asarray(barometric_mmhg, dtype=float)), 0.0)
    return 1000.0 * (np.sqrt(first * first + 4.0 * second * under) - first) / (2.0 * second)
