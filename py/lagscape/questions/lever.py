"""A lever: something that a clinician can change, with a dose, and how the dose moves the loop's numbers."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from lagscape.errors import InvalidInputError

__all__ = ["Lever"]


@dataclass(frozen=True)
class Lever:
    """One lever. Dose 0 always means that it does nothing; the name ends in the dose's unit."""

    name: str
    label: str
    unit: str
    """As shown beside the dose."""
    minimum: float
    maximum: float
    start_dose: float
    """The dose that the page first offers: ordinary in practice, not a recommendation."""
    step: float
    """The dose's grain on the page."""
    moves: str
    """Which of the loop's numbers it moves, in words."""
    rule: str
    """By what rule, in words, with what stands behind the rule."""
    effect: str
    """What was published of it."""
    source: str
    """Where `effect` was published."""
    caution: str
    group: str
    act: Callable[[Any, Any], Any]
    """(loop, dose) -> loop. The controller's line is fixed before the first lever acts. Loop and dose may be batches."""

    @property
    def is_switch(self) -> bool:
        """True where the page offers on and off only."""
        return self.minimum == 0.0 and self.step == self.maximum

    def check(self, dose: object) -> float:
        """The dose as a float.

        Raises
        ------
        InvalidInputError
            If it is not a finite number inside [minimum, maximum].
        """
        unit = f" {self.unit}" if self.unit else ""
        rule = f"The dose of {self.label} must be a number from {self.minimum:g} to {self.maximum:g}{unit}"
        if isinstance(dose, bool) or not isinstance(dose, (int, float)):
            raise InvalidInputError(f"{rule}; got {dose!r:.60}.")
        number = float(dose)
        if not math.isfinite(number) or not self.minimum <= number <= self.maximum:
            raise InvalidInputError(f"{rule}; got {number:.6g}.")
        return number
