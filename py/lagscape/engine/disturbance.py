"""Disturbances: what pushes a loop from outside, each with its exact break points and its exact integral.

A disturbance is a signal u(t) that is zero before its start and enters a loop by one named channel (a sigh, an arousal, inspired
CO2, an outside torque). Amplitudes are in the channel's own unit, times in s. Several are given as a tuple; on one channel they add.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array

__all__ = ["Disturbance", "breaks_of", "check_channels", "integral_on", "noise", "periodic", "pulse", "step", "value_on"]


_MOST_HOLDS = 1_000_000


@dataclass(frozen=True)
class Disturbance:
    """One disturbance. Make it with `pulse`, `step`, `periodic` or `noise`, which check the numbers."""

    kind: str
    """pulse, step, periodic (a sine) or noise (independent normal values, each held)."""
    channel: str
    start: float
    """In s; u = 0 before."""
    amplitude: float
    """In the channel's unit; the standard deviation for noise."""
    span: float = math.inf
    """In s: the duration of a pulse, the period of a sine, the hold of noise; infinite for a step."""
    seed: int = 0

    def _held(self, count: int) -> Array:
        """The first `count` held values of noise; the same whatever the count, because they are drawn in order."""
        if count > _MOST_HOLDS:
            raise InvalidInputError(f"noise may hold at most {_MOST_HOLDS} values; got {count}. Take a longer hold or a shorter run.")
        return self.amplitude * np.random.default_rng(self.seed).standard_normal(count)

    def value(self, times: Any) -> Array:
        """u at these times (s), any shape, in the channel's unit; continuous from the right."""
        elapsed = np.asarray(times, dtype=float) - self.start
        on = elapsed >= 0.0
        if self.kind == "noise":
            index = np.floor(np.where(on, elapsed, 0.0) / self.span).astype(int)
            return np.where(on, self._held(int(index.max(initial=0)) + 1)[index], 0.0)
        if self.kind == "periodic":
            return np.where(on, self.amplitude * np.sin(2.0 * math.pi / self.span * elapsed), 0.0)
        return np.where(on & (elapsed < self.span), self.amplitude, 0.0)

    def integral(self, times: Any) -> Array:
        """The integral of u from its start to these times, exact; zero before the start."""
        elapsed = np.maximum(np.asarray(times, dtype=float) - self.start, 0.0)
        if self.kind == "noise":
            index = np.floor(elapsed / self.span).astype(int)
            held = self._held(int(index.max(initial=0)) + 1)
            before = np.concatenate([[0.0], np.cumsum(held)]) * self.span
            return before[index] + held[index] * (elapsed - index * self.span)
        if self.kind == "periodic":
            return self.amplitude * self.span / math.pi * np.sin(math.pi / self.span * elapsed) ** 2
        return self.amplitude * np.minimum(elapsed, self.span)

    def breaks(self, duration: float) -> Array:
        """The times in [0, duration) where u jumps or has a corner, ascending, in s."""
        if self.kind == "noise":
            count = max(0, math.ceil((duration - self.start) / self.span))
            if count > _MOST_HOLDS:
                self._held(count)
            times = self.start + self.span * np.arange(count)
        elif self.kind == "pulse":
            times = np.array([self.start, self.start + self.span])
        else:
            times = np.array([self.start])
        return times[times < duration]


def _check(name: str, value: float, positive: bool = False) -> float:
    number = float(value)
    if not math.isfinite(number) or (positive and number <= 0.0):
        raise InvalidInputError(f"{name} must be finite{' and positive' if positive else ''}; got {value!r}.")
    return number


def _start(value: float) -> float:
    number = _check("start (s)", value)
    if number < 0.0:
        raise InvalidInputError(f"start (s) must not be negative, because the run begins at 0; got {value!r}.")
    return number


def pulse(channel: str, start: float, duration: float, amplitude: float) -> Disturbance:
    """u = amplitude on [start, start + duration), else 0. Times in s.

    Raises
    ------
    InvalidInputError
        If the start is negative, the duration not positive, or a number not finite.
    """
    return Disturbance("pulse", channel, _start(start), _check("amplitude", amplitude), _check("duration (s)", duration, True))


def step(channel: str, start: float, amplitude: float) -> Disturbance:
    """u = amplitude from start on. Raises as `pulse`."""
    return Disturbance("step", channel, _start(start), _check("amplitude", amplitude))


def periodic(channel: str, start: float, period: float, amplitude: float) -> Disturbance:
    """u = amplitude sin(2 pi (t - start) / period) from start on. Raises as `pulse`."""
    return Disturbance("periodic", channel, _start(start), _check("amplitude", amplitude), _check("period (s)", period, True))


def noise(channel: str, start: float, hold: float, amplitude: float, seed: int) -> Disturbance:
    """Independent normal values of standard deviation `amplitude`, each held for `hold` s; the same for the same seed.

    Raises
    ------
    InvalidInputError
        As `pulse`; also if the seed is negative.
    """
    if int(seed) < 0:
        raise InvalidInputError(f"seed must be a whole number of 0 or more; got {seed!r}.")
    return Disturbance("noise", channel, _start(start), _check("amplitude", amplitude), _check("hold (s)", hold, True), int(seed))


def check_channels(disturbances: Iterable[Disturbance], channels: Mapping[str, Any]) -> None:
    """Raises InvalidInputError if a disturbance names a channel that the loop does not have."""
    for item in disturbances:
        if item.channel not in channels:
            known = ", ".join(repr(name) for name in channels) or "none"
            raise InvalidInputError(f"no channel {item.channel!r}; the loop has: {known}.")


def breaks_of(disturbances: Iterable[Disturbance], duration: float) -> Array:
    """All break times of several disturbances in [0, duration), ascending, without repeats."""
    parts = [item.breaks(duration) for item in disturbances]
    return np.unique(np.concatenate(parts)) if parts else np.empty(0)


def value_on(disturbances: Iterable[Disturbance], channel: str, times: Any) -> Array:
    """The sum of u on one channel at these times."""
    total = np.zeros(np.shape(times))
    for item in disturbances:
        if item.channel == channel:
            total = total + item.value(times)
    return total


def integral_on(disturbances: Iterable[Disturbance], channel: str, times: Any) -> Array:
    """The sum of the integrals of u on one channel up to these times."""
    total = np.zeros(np.shape(times))
    for item in disturbances:
        if item.channel == channel:
            total = total + item.integral(times)
    return total
