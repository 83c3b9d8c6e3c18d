"""A median with its quartiles."""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

__all__ = ["Spread"]


@dataclass(frozen=True)
class Spread:
    """Median and quartiles of n values."""

    median: float
    lower_quartile: float
    upper_quartile: float
    n: int

    @classmethod
    def of(cls, values: Iterable[float]) -> "Spread | None":
        """None where there are no values. Quartiles by linear interpolation between order statistics."""
        known = np.array([v for v in values if np.isfinite(v)], dtype=float)
        if not known.size:
            return None
        low, mid, high = np.percentile(known, [25.0, 50.0, 75.0])
        return cls(float(mid), float(low), float(high), int(known.size))
