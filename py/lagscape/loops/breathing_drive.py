"""The breathing loop's drives on CO2: the threshold line, and the sigmoid with the line's point and slopes.

Both take what is sensed as (PCO2 at the carotid body, PCO2 on its way to the brainstem), the controller as (central PCO2), and a push
in L/min. A push moves the line up; of the sigmoid it is the pressure that would raise the line by as much. Pressures in mmHg.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np

from lagscape.loops.protocol import Array

__all__ = ["SigmoidDrive", "ThresholdDrive"]

_NO_PRESSURE = 1e-30
"""A share of P_line at or under which the sigmoid's pressure counts as none: the power law has no value below zero."""


@dataclass(frozen=True)
class ThresholdDrive:
    """V_E = max(0, V_line + G_p (y - P_line) + S_c (c - P_line) + push)."""

    line_ventilation: Any
    line_pressure: Any
    peripheral: Any
    central: Any
    has_kink: ClassVar[bool] = True

    @cached_property
    def _at_no_pressure(self) -> Any:
        """The line at 0 mmHg, L/min. The inner step of a run counts its array calls: two differences from P_line are two calls more."""
        return self.line_ventilation - (self.peripheral + self.central) * self.line_pressure

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        level = self.peripheral * sensed[0] + self.central * control[0] + self._at_no_pressure
        return level if isinstance(push, float) and push == 0.0 else level + push

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.maximum(self.switch(sensed, control, push), 0.0)

    def push_slope(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        """Derivative by the push, no unit."""
        return np.asarray(self.switch(sensed, control, push) > 0.0, dtype=float)

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        open_ = self.switch(sensed, control, push) > 0.0
        zero = np.zeros_like(open_, dtype=float)
        return np.stack([open_ * (self.peripheral + zero), zero, open_ * (self.central + zero)])

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        drive = (
            self.line_ventilation
            + self.peripheral * (sensed[0] - self.line_pressure)
            + self.central * (control[0] - self.line_pressure)
            + push
        )
        return drive if drive > 0.0 else 0.0


@dataclass(frozen=True)
class SigmoidDrive:
    """V_E = V_max P^n / (theta^n + P^n), P the pressure that the line would read, with the line's point and slope.

    n = S P_line / V_line / (1 - V_line / V_max).
    """

    line_ventilation: Any
    line_pressure: Any
    peripheral: Any
    central: Any
    largest_ventilation: Any
    has_kink: ClassVar[bool] = False

    @property
    def _exponent(self) -> Any:
        slope = self.peripheral + self.central
        return slope * self.line_pressure / self.line_ventilation / (1.0 - self.line_ventilation / self.largest_ventilation)

    def _effective(self, sensed: Array, control: Array, push: Any) -> Array:
        slope = self.peripheral + self.central
        weight = self.peripheral / slope
        return weight * sensed[0] + (1.0 - weight) * control[0] + push / slope

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.ones_like(self._effective(sensed, control, push))

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        ratio = self._effective(sensed, control, push) / self.line_pressure
        odds = (self.largest_ventilation / self.line_ventilation - 1.0) * np.exp(
            np.minimum(-self._exponent * np.log(np.maximum(ratio, _NO_PRESSURE)), 690.0)
        )
        return np.where(ratio > _NO_PRESSURE, self.largest_ventilation / (1.0 + odds), 0.0)

    def _slope(self, sensed: Array, control: Array, push: Any) -> Array:
        effective = np.maximum(self._effective(sensed, control, push), _NO_PRESSURE * self.line_pressure)
        ventilation = self.value(sensed, control, push)
        return self._exponent * ventilation * (1.0 - ventilation / self.largest_ventilation) / effective

    def push_slope(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        """Derivative by the push, no unit."""
        return self._slope(sensed, control, push) / (self.peripheral + self.central)

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        slope = self._slope(sensed, control, push)
        weight = self.peripheral / (self.peripheral + self.central)
        return np.stack([slope * weight, np.zeros_like(slope), slope * (1.0 - weight)])

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        slope = self.peripheral + self.central
        weight = self.peripheral / slope
        ratio = (weight * sensed[0] + (1.0 - weight) * control[0] + push / slope) / self.line_pressure
        if ratio <= _NO_PRESSURE:
            return 0.0
        power = -self._exponent * math.log(ratio)
        odds = (self.largest_ventilation / self.line_ventilation - 1.0) * math.exp(min(power, 690.0))
        return float(self.largest_ventilation / (1.0 + odds))
