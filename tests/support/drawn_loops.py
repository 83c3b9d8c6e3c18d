"""Hypothesis strategies: numbers drawn over the whole range that each parameter's specification allows."""

from __future__ import annotations

import math
from typing import Any

from hypothesis import strategies as st

from lagscape.loops.register import LOOPS

__all__ = ["in_range", "typical_numbers"]


def typical_numbers(kind: str) -> dict[str, float]:
    """Every parameter of a loop at its typical value."""
    return {item.name: item.typical for item in LOOPS[kind].specifications}


def in_range(kind: str) -> st.SearchStrategy[dict[str, float]]:
    """All parameters of a loop, each anywhere in its allowed range; wide positive ranges are drawn evenly in the logarithm.

    Combinations that no loop can have are moved to the nearest that it can: a load within the muscle's torque, an inspired PCO2 under
    the resting PaCO2, a sigmoid's ceiling over the resting ventilation. The refusal of the others has tests of its own.
    """
    return st.fixed_dictionaries({item.name: _one(item) for item in LOOPS[kind].specifications}).map(_possible)


def _one(item: Any) -> st.SearchStrategy[float]:
    low, high = item.minimum, item.maximum
    if low > 0.0 and high / low > 30.0:
        return st.floats(math.log(low), math.log(high)).map(lambda y: min(max(math.exp(y), low), high))
    return st.floats(low, high)


def _possible(numbers: dict[str, float]) -> dict[str, float]:
    if "held_mass_kg" in numbers:
        most = 0.98 * numbers["largest_torque_n_m"] / (9.80665 * numbers["load_distance_m"])
        return {**numbers, "held_mass_kg": min(numbers["held_mass_kg"], most)}
    if "inspired_pco2_mmhg" in numbers:
        return _breathing(numbers)
    return numbers


def _breathing(numbers: dict[str, float]) -> dict[str, float]:
    inspired = min(numbers["inspired_pco2_mmhg"], numbers["resting_paco2_mmhg"] - 5.0)
    clearance = (1.0 - numbers["dead_space_fraction"]) * (numbers["resting_paco2_mmhg"] - inspired) / 863.0
    production = min(numbers["co2_production_l_min"], 170.0 * clearance)
    ceiling = max(numbers["largest_ventilation_l_min"], 1.1 * production / clearance)
    return {**numbers, "inspired_pco2_mmhg": inspired, "co2_production_l_min": production, "largest_ventilation_l_min": ceiling}
