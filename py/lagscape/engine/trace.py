"""A trace: what a simulated loop did, with its status, its error estimate and its silences (apnoeas)."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from lagscape.loops.protocol import Array

__all__ = ["Trace", "find_silences", "output_grid"]


DEFAULT_POINTS = 1201


@dataclass(frozen=True)
class Trace:
    """One run. A run that failed is a trace too: read `status` before the numbers."""

    times: Array
    """Shape (n_times,), s, ascending."""
    states: Array
    """Shape (n_times, n_states), in the order of `state_names`."""
    output: Array
    """Shape (n_times,): the controlled signal, after the clip and with the disturbances on it."""
    state_names: tuple[str, ...]
    status: str
    """completed; low_accuracy (the error estimate is above what the purpose promises); diverged (states left every finite
    range: the trace is cut at the last finite time); too_many_steps (nothing was computed: shorten the run)."""
    error_estimate: float
    """Largest expected error of any state over the run, as a share of that state's largest size; an estimate, not a bound."""
    silences: tuple[tuple[float, float], ...]
    """(start, end) in s of each stretch with the output at or below the loop's silent level; cut at the run's ends."""
    method: str
    """Which solver made it: interval collocation, exact path, Runge-Kutta."""

    def state(self, name: str) -> Array:
        """One state's curve by name, shape (n_times,)."""
        return self.states[:, self.state_names.index(name)]

    @property
    def silent_time(self) -> float:
        """Total time in silence, s."""
        return float(sum(end - start for start, end in self.silences))

    def with_status(self, status: str) -> Trace:
        return replace(self, status=status)


def output_grid(duration: float, output_times: Any) -> Array:
    """The times of the trace: `output_times` itself, that many equally spaced points, or 1201 of them for None."""
    if output_times is None:
        output_times = DEFAULT_POINTS
    if np.ndim(output_times) == 0:
        return np.linspace(0.0, duration, int(output_times))
    return np.asarray(output_times, dtype=float)


def find_silences(times: Array, level: Array) -> tuple[tuple[float, float], ...]:
    """Stretches where `level` is at or below zero, their ends by linear interpolation between samples.

    Parameters
    ----------
    times, level : shape (n,)
        s, ascending; a continuous function that is positive exactly where the output is above the silent level.
    """
    quiet = level <= 0.0
    if not quiet.any():
        return ()
    edge = np.flatnonzero(quiet[1:] != quiet[:-1])
    before, after = level[edge], level[edge + 1]
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(before == after, 0.0, before / (before - after))
    crossings = (times[edge] + np.clip(share, 0.0, 1.0) * (times[edge + 1] - times[edge])).tolist()
    if quiet[0]:
        crossings.insert(0, float(times[0]))
    if quiet[-1]:
        crossings.append(float(times[-1]))
    pairs = zip(crossings[::2], crossings[1::2], strict=True)
    return tuple((start, end) for start, end in pairs if end > start)
