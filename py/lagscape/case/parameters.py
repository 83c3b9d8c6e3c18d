"""What is known of each number of a loop before anyone types it: unit, range, typical band, spread, source."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from lagscape.errors import InvalidInputError

__all__ = ["Basis", "Choice", "ParameterSpecification", "StartingCase"]


class Basis(StrEnum):
    """Where a number came from."""

    MEASURED = "measured"
    ASSUMED = "assumed"
    TYPICAL = "typical"


@dataclass(frozen=True)
class ParameterSpecification:
    """One number of a loop, in the unit the clinic uses.

    `spread` is one standard deviation of the number among persons, in its unit where `distribution` is "normal", and of its natural
    logarithm where it is "lognormal". It is what an assumed or typical number is drawn from; a measured one has its own.
    """

    name: str
    label: str
    symbol: str
    unit: str
    group: str
    minimum: float
    maximum: float
    typical: float
    typical_low: float
    typical_high: float
    spread: float
    distribution: str
    meaning: str
    source: str
    measured_spread: float | None = None
    """One standard deviation of a single good measurement, as `spread`; a third of `spread` where None."""

    def check(self, value: object) -> float:
        """The value as a float.

        Raises
        ------
        InvalidInputError
            If it is not a finite number inside [minimum, maximum]; the sentence names the rule and what came.
        """
        unit = f" {self.unit}" if self.unit else ""
        rule = f"{self.label} must be a number from {self.minimum:g} to {self.maximum:g}{unit}"
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise InvalidInputError(f"{rule}; got {value!r}.")
        try:
            number = float(value)
        except OverflowError:  # a whole number beyond the largest float
            number = math.inf
        if not math.isfinite(number) or not self.minimum <= number <= self.maximum:
            raise InvalidInputError(f"{rule}; got {number:.6g}.")
        return number

    def spread_for(self, basis: Basis) -> float:
        """The standard deviation to draw from for a number of this basis, as `spread` is given."""
        if basis is Basis.MEASURED:
            return self.measured_spread if self.measured_spread is not None else self.spread / 3.0
        return self.spread


@dataclass(frozen=True)
class Choice:
    """A setting of a loop that is not a number."""

    name: str
    label: str
    options: Mapping[str, str]
    """Stored value to the words on screen; the first is the default."""
    meaning: str

    def check(self, value: object) -> str:
        """The value if it is one of the options.

        Raises
        ------
        InvalidInputError
            Otherwise; the sentence lists the options.
        """
        if not isinstance(value, str) or value not in self.options:
            raise InvalidInputError(f"{self.label} must be one of {', '.join(self.options)}; got {value!r}.")
        return value

    @property
    def default(self) -> str:
        return next(iter(self.options))


@dataclass(frozen=True)
class StartingCase:
    """An invented person to start from. Numbers not named here take their typical value."""

    name: str
    title: str
    about: str
    numbers: Mapping[str, float]
    choices: Mapping[str, str] = field(default_factory=dict)
    source: str = ""
