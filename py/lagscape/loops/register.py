"""The loops that Lagscape knows. A new loop is one file and one line here."""

from typing import Any

from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

__all__ = ["LOOPS"]

LOOPS: dict[str, Any] = {loop.kind: loop for loop in (BreathingLoop, ReflexLoop, PlainLoop)}
