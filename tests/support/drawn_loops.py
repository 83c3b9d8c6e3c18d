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
    """All parameters of a loop, each anywhere in its allowed range; wide positive ranges are drawn evenly in the logarithm."""
    return st.fixed_dictionaries({item.name: _one(item) for item in LOOPS[kind].specifications})


def _one(item: Any) -> st.SearchStrategy[float]:
    low, high = item.minimum, item.maximum
    if low > 0.0 and high / low > 30.0:
        return st.floats(math.log(low), math.log(high)).map(lambda y: min(max(math.exp(y), low), high))
    return st.floats(low, high)
