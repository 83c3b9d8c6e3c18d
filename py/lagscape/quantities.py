"""How a number is shown: three significant figures, a true minus sign, and the pressure unit the reader chose."""

from __future__ import annotations

import math

from lagscape.units import MMHG_PER_KPA

__all__ = ["PRESSURE_UNITS", "figure", "from_display", "percent", "quantity", "to_display"]

PRESSURE_UNITS = ("mmHg", "kPa")


def _factor(unit: str, pressure_unit: str) -> tuple[float, str]:
    if pressure_unit != "kPa" or "mmHg" not in unit:
        return 1.0, unit
    below = "/mmHg" in unit
    return (MMHG_PER_KPA if below else 1.0 / MMHG_PER_KPA), unit.replace("mmHg", "kPa")


def to_display(value: float, unit: str, pressure_unit: str) -> tuple[float, str]:
    """A stored value and its unit as shown: mmHg turned to kPa where the reader chose so, also in compound units."""
    factor, shown = _factor(unit, pressure_unit)
    return value * factor, shown


def from_display(value: float, unit: str, pressure_unit: str) -> float:
    """The stored value, in `unit`, of a number typed in the shown unit."""
    factor, _ = _factor(unit, pressure_unit)
    return value if factor == 1.0 else value / factor


def figure(value: float | None, digits: int = 3) -> str:
    """A number to `digits` significant figures, without exponent where a clinician would not write one; a dash for none."""
    if value is None or not math.isfinite(value):
        return "–"
    if value == 0.0:
        return "0"
    rounded = float(f"{value:.{digits - 1}e}")
    exponent = math.floor(math.log10(abs(rounded)))
    if -4 <= exponent < 6:
        text = f"{rounded:.{max(0, digits - 1 - exponent)}f}"
    else:
        mantissa, power = f"{rounded:.{digits - 1}e}".split("e")
        text = f"{mantissa}×10^{int(power)}"
    return text.replace("-", "−")


def percent(share: float, digits: int = 2) -> str:
    """A share as a percentage in words and figures, such as "38 %"."""
    return f"{figure(100.0 * share, digits)} %"


def quantity(value: float | None, unit: str, pressure_unit: str = "mmHg", digits: int = 3) -> str:
    """A number with its unit as shown on the page, such as "5.33 kPa"."""
    if value is None:
        return "–"
    shown, shown_unit = to_display(value, unit, pressure_unit)
    return f"{figure(shown, digits)} {shown_unit}".rstrip()
