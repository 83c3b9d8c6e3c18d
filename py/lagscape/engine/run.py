"""One run to be computed: a loop's form, where it starts, what pushes it, and for how long. Every solver takes this.

The history for t <= 0 is constant, the rest plus the offset, and undisturbed. A controlled signal with a finite silent level (a
ventilation, a share) is kept at or above zero even when a disturbance would push it below.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from lagscape.engine.disturbance import Disturbance, breaks_of, value_on
from lagscape.loops.protocol import Array, DriveForm

__all__ = ["Run"]


@dataclass(frozen=True)
class Run:
    """See the module. `initial` and `rest`, the state without the offset, have shape (n_plant + n_control,)."""

    form: DriveForm
    initial: Array
    duration: float
    disturbances: tuple[Disturbance, ...] = ()
    rest: Array | None = None
    """None where it is `initial`."""

    @cached_property
    def floor(self) -> float:
        """The least value of the controlled signal: 0, or minus infinity where it may have either sign."""
        return min(float(self.form.silent_level), 0.0)

    @cached_property
    def used_channels(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(item.channel for item in self.disturbances))

    @cached_property
    def breaks(self) -> Array:
        return breaks_of(self.disturbances, self.duration)

    def _weighted(self, times: Array, weight_of: Any) -> Array | float:
        total: Any = 0.0
        for name in self.used_channels:
            weight = weight_of(self.form.channels[name])
            if weight is not None and np.any(weight):
                signal = value_on(self.disturbances, name, times)
                total = total + (weight * signal if np.ndim(weight) == 0 else np.multiply.outer(weight, signal))
        return total

    def push(self, times: Array) -> Array | float:
        """sum d_k u_k, into the drive; the shape of `times`, or 0.0 if nothing pushes there."""
        return self._weighted(times, lambda channel: channel.drive)

    def output_push(self, times: Array) -> Array | float:
        """sum o_k u_k, onto the controlled signal."""
        return self._weighted(times, lambda channel: channel.output)

    def plant_push(self, times: Array) -> Array | float:
        """sum u_k p_k, shape (n_plant, *times.shape), or 0.0."""
        return self._weighted(times, lambda channel: channel.plant)

    def plant_push_by_output(self, times: Array) -> Array | float:
        """sum u_k q_k, shape (n_plant, *times.shape), or 0.0."""
        return self._weighted(times, lambda channel: channel.plant_by_output)

    def controlled(self, sensed: Array, control: Array, times: Array) -> Array:
        """v at these times: the drive, the disturbance on it, and the floor."""
        output = self.form.drive.value(sensed, control, self.push(times)) + self.output_push(times)
        return np.maximum(output, self.floor) if self.used_channels and math.isfinite(self.floor) else output

    def silence_level(self, sensed: Array, control: Array, times: Array, output: Array) -> Array:
        """A continuous function of time that is positive exactly where the output is above the silent level."""
        level = output - float(self.form.silent_level)
        if not self.form.drive.has_kink:
            return level
        switch = self.form.drive.switch(sensed, control, self.push(times))
        return np.where(level > 0.0, level, np.minimum(switch + self.output_push(times), 0.0))
