"""Results as what JSON knows, and units as they stand in key and column names."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from enum import Enum
from typing import Any

__all__ = ["plain", "unit_suffix"]


def plain(value: Any) -> Any:
    """Dataclasses as objects, mappings with text keys, arrays as lists, what is not finite as null."""
    if isinstance(value, Enum):
        return value.value
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {item.name: plain(getattr(value, item.name)) for item in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if hasattr(value, "tolist"):
        return plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def unit_suffix(unit: str) -> str:
    """A unit at the end of a name: "L/min" gives "_l_min", no unit gives nothing."""
    words = unit.lower().replace("/", " ").replace("%", "percent").split()
    return "".join(f"_{word}" for word in words)
