"""A breathing loop with a fixed controller, written out by hand: its rest and its loop gain. The oracle for levers; CO2 only, threshold line.

Plain Python, per minute inside; it shares no code with the package.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping

__all__ = ["WrittenLine", "written_loop_gain", "written_rest"]


class WrittenLine:
    """The controller's line V = V0 + S_p g (Pa - P0) + S_c (Pc - P0), through a person's own eupnoeic point."""

    def __init__(self, p: Mapping[str, float]) -> None:
        self.pressure = p["resting_paco2_mmhg"]
        alveolar = 863.0 * p["co2_production_l_min"] / (p["resting_paco2_mmhg"] - p["inspired_pco2_mmhg"])
        self.ventilation = alveolar / (1.0 - p["dead_space_fraction"])


def _slopes(p: Mapping[str, float]) -> tuple[float, float]:
    return p["peripheral_gain_l_min_mmhg"] * math.exp(-0.05 * (p["arterial_po2_mmhg"] - 100.0)), p["central_gain_l_min_mmhg"]


def written_rest(p: Mapping[str, float], line: WrittenLine, wasted_l_min: float | None = None) -> tuple[float, float]:
    """PaCO2 (mmHg) and ventilation (L/min) where the line meets the metabolic hyperbola, by plain halving.

    `wasted_l_min` is a dead-space ventilation that stays whatever the breathing; None takes the dead space as a fraction.
    """
    slope = sum(_slopes(p))
    low, high = p["inspired_pco2_mmhg"] + 1e-9, 500.0
    for _ in range(200):
        pressure = 0.5 * (low + high)
        ventilation = max(0.0, line.ventilation + slope * (pressure - line.pressure))
        alveolar = ventilation * (1.0 - p["dead_space_fraction"]) if wasted_l_min is None else ventilation - wasted_l_min
        if alveolar * (pressure - p["inspired_pco2_mmhg"]) > 863.0 * p["co2_production_l_min"]:
            high = pressure
        else:
            low = pressure
    return pressure, ventilation


def written_loop_gain(p: Mapping[str, float], line: WrittenLine) -> float:
    """|L| at the first frequency where the loop's answer comes back reversed."""
    pressure, ventilation = written_rest(p, line)
    peripheral, central = _slopes(p)
    share = 1.0 - p["dead_space_fraction"]
    blood = 863.0 * p["co2_solubility_per_mmhg"] * p["cardiac_output_l_min"]
    tissue = p["cardiac_output_l_min"] / p["tissue_volume_l"]

    def answer(per_min: float) -> complex:
        s = 1j * per_min
        chemoreflex = peripheral * cmath.exp(-s * p["peripheral_delay_s"] / 60.0)
        chemoreflex += central * cmath.exp(-s * p["central_delay_s"] / 60.0) / (1.0 + s * p["central_time_constant_s"] / 60.0)
        lung = p["lung_volume_l"] * s + blood + share * ventilation - blood * tissue / (s + tissue)
        return share * (pressure - p["inspired_pco2_mmhg"]) * chemoreflex / lung

    step = 1e-3
    low = step
    while not (answer(low).imag < 0.0 < answer(low + step).imag and answer(low).real < 0.0):
        low += step
    high = low + step
    for _ in range(100):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if answer(middle).imag < 0.0 else (low, middle)
    return abs(answer(low))
