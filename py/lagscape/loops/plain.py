"""The plain loop: x' = L - Vmax h(x(t - tau)) x with h(u) = u^n / (theta^n + u^n).

The respiration equation of Mackey and Glass 1977, Science 197:287, in any units; theta = 1 gives the dimensionless form.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, ClassVar

import numpy as np

from lagscape.case.parameters import Choice, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, Channel, DriveForm, Rest, Signal, batch_shape

__all__ = ["HillDrive", "PlainLoop"]

_MOST_STEPS = 200
_ROUNDING = 4e-16


@dataclass(frozen=True)
class HillDrive:
    """v = u^n / (theta^n + u^n) for u > 0, else 0: the share of the largest clearance."""

    exponent: Any
    half_level: Any
    has_kink: ClassVar[bool] = False

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        # The inner step of a drag: worked in place where it is an array, because a call costs more than its arithmetic.
        level = sensed[0] if isinstance(push, float) and push == 0.0 else sensed[0] + push
        ratio = np.minimum(np.maximum(level, 0.0) / self.half_level, self._saturated)
        power = np.power(ratio, self.exponent, out=ratio if isinstance(ratio, np.ndarray) and isinstance(self.exponent, float) else None)
        return power / (1.0 + power)

    @cached_property
    def _saturated(self) -> Any:
        """A ratio whose power is 1e300, so that none overflows; the share is 1 to every digit long before."""
        return 10.0 ** np.minimum(300.0 / np.asarray(self.exponent, dtype=float), 300.0)

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        level = np.maximum(sensed[0] + push, 1e-300)
        share = self.value(sensed, control, push)
        return (self.exponent * share * (1.0 - share) / level)[None]

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.ones_like(sensed[0] + push)

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        ratio = min((sensed[0] + push) / self.half_level, float(self._saturated))
        if ratio <= 0.0:
            return 0.0
        power = ratio**self.exponent
        return float(power / (1.0 + power))


def _log_level(target: Array, n: Array) -> Array:
    """y with y - ln(1 + e^(-n y)) = `target`: the left side is rising and concave, so Newton's steps from its left are monotone."""
    y: Array = np.maximum(target, target / (1.0 + n)) - 1e-12
    for _ in range(_MOST_STEPS):
        residual = y - np.logaddexp(0.0, -n * y) - target
        step = residual / (1.0 + n / (1.0 + np.exp(np.minimum(n * y, 700.0))))
        y = y - step
        if np.all(np.abs(step) <= _ROUNDING * (1.0 + np.abs(y))):
            break
    return y


def _log_level_of_one(target: float, n: float) -> float:
    """The same for one loop: plain floats cost a thirtieth of array calls, and a drag asks at every move."""
    y = max(target, target / (1.0 + n)) - 1e-12
    for _ in range(_MOST_STEPS):
        residual = y - max(-n * y, 0.0) - math.log1p(math.exp(-abs(n * y))) - target
        step = residual / (1.0 + n / (1.0 + math.exp(min(n * y, 700.0))))
        y -= step
        if abs(step) <= _ROUNDING * (1.0 + abs(y)):
            break
    return y


@dataclass(frozen=True)
class PlainLoop:
    """The plain loop with its numbers; entries may be arrays of one shape for a batch."""

    production_per_s: Any = 0.2
    largest_clearance_per_s: Any = 0.8
    exponent: Any = 8.0
    half_level: Any = 1.0
    delay_s: Any = 10.0

    kind: ClassVar[str] = "plain"
    title: ClassVar[str] = "Plain loop"
    sensitivity_name: ClassVar[str] = "Exponent n"
    sensitivity_unit: ClassVar[str] = ""
    delay_name: ClassVar[str] = "Delay"
    choices: ClassVar[tuple[Choice, ...]] = ()

    @property
    def sensitivity(self) -> Any:
        return self.exponent

    @property
    def delay(self) -> Any:
        return self.delay_s

    def with_sensitivity(self, sensitivity: Any) -> PlainLoop:
        return replace(self, exponent=sensitivity)

    def with_delay(self, delay: Any) -> PlainLoop:
        return replace(self, delay_s=delay)

    def with_numbers(self, **numbers: Any) -> PlainLoop:
        return replace(self, **numbers)

    def rest(self) -> Rest:
        """The level where clearance equals production, by bracketed Newton steps on a rising function.

        Raises
        ------
        InvalidInputError
            If production, clearance, exponent or half level is not positive.
        """
        for name in ("production_per_s", "largest_clearance_per_s", "exponent", "half_level"):
            if not np.all(np.asarray(getattr(self, name)) > 0.0):
                raise InvalidInputError(f"{name} must be positive; got {getattr(self, name)!r}.")
        demand = np.asarray(self.production_per_s / (self.largest_clearance_per_s * self.half_level), dtype=float)
        n = np.asarray(self.exponent, dtype=float)
        demand, n = np.broadcast_arrays(demand, n)
        y = _log_level_of_one(math.log(demand), float(n)) if demand.ndim == 0 else _log_level(np.log(demand), n)
        level = np.asarray(self.half_level * np.exp(y))
        share = HillDrive(self.exponent, self.half_level).value(level[None], np.empty((0,)))
        return Rest(level[None], share if share.ndim else float(share))

    def form(self) -> DriveForm:
        batch = batch_shape(self)
        square = np.zeros((1, 1, *batch))
        return DriveForm(
            plant_names=("level",),
            control_names=(),
            plant=square,
            plant_by_output=square - self.largest_clearance_per_s,
            input_vector=np.zeros((1, *batch)),
            constant=np.zeros((1, *batch)) + self.production_per_s,
            sensed_rows=np.ones((1, 1)),
            sensed_delays=(self.delay_s,),
            control=np.zeros((0, 0, *batch)),
            control_by_sensed=np.zeros((0, 1, *batch)),
            control_constant=np.zeros((0, *batch)),
            drive=HillDrive(self.exponent, self.half_level),
            channels={
                "drive": Channel(drive=1.0, unit="level"),
                "production": Channel(plant=np.ones(1), unit="level/s"),
            },
        )

    def signals(self, states: Array, output: Array, times: Array | None = None) -> tuple[Signal, ...]:
        return (
            Signal("clearance", "Clearance, share of the largest", "", output),
            Signal("level", "Level", "", states[:, 0]),
        )

    specifications: ClassVar[tuple[ParameterSpecification, ...]] = (
        ParameterSpecification(
            "production_per_s", "Production", "L", "1/s", "plant", 1e-4, 100.0, 0.2, 0.1, 0.4, 0.1, "lognormal",
            "How fast the level rises when nothing clears it.", "Any units; no typical person.",
        ),
        ParameterSpecification(
            "largest_clearance_per_s", "Largest clearance", "Vmax", "1/s", "plant", 1e-4, 1000.0, 0.8, 0.4, 1.6, 0.1, "lognormal",
            "The rate of clearance per unit of level when the controller answers in full.", "Any units; no typical person.",
        ),
        ParameterSpecification(
            "half_level", "Half level", "theta", "", "controller", 1e-3, 1000.0, 1.0, 0.5, 2.0, 0.1, "lognormal",
            "The delayed level at which clearance is half its largest.", "1 in the dimensionless form.",
        ),
        ParameterSpecification(
            "exponent", "Exponent n", "n", "", "controller", 0.1, 100.0, 8.0, 2.0, 9.0, 0.2, "lognormal",
            "Steepness of the controller: the sensitivity of this loop.",
            "Gentle is about 2, steep about 9: common practice, no source.",
        ),
        ParameterSpecification(
            "delay_s", "Delay", "tau", "s", "delay", 0.01, 1000.0, 10.0, 5.0, 20.0, 0.15, "lognormal",
            "Time from the level to the controller's answer.", "Any units; no typical person.",
        ),
    )  # fmt: skip

    starting_cases: ClassVar[tuple[StartingCase, ...]] = (
        StartingCase(
            "plain-steep", "Steep and late", "Invented: a steep controller that answers late and hunts.",
            {"production_per_s": 0.2, "largest_clearance_per_s": 0.8, "half_level": 0.5, "exponent": 8.0, "delay_s": 10.0},
        ),
        StartingCase(
            "plain-gentle", "Gentle and prompt", "Invented: a gentle controller that answers soon and settles.",
            {"production_per_s": 0.2, "largest_clearance_per_s": 0.8, "half_level": 0.5, "exponent": 2.0, "delay_s": 3.0},
        ),
    )  # fmt: skip
