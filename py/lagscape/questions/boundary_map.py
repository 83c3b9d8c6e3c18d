"""The boundary map of a case: the window, the exact boundary, and lines of equal cycle length."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.engine.boundary import boundary_curve
from lagscape.engine.margins_batch import margins_batch
from lagscape.loops.protocol import Array
from lagscape.questions.standing import SETTLED_SHARE, Judgement, judge

__all__ = ["BoundaryMap", "CycleContour", "MapWindow", "cycle_contours", "map_of", "standing_point", "window_of"]

_DELAYS = 161
_GRID = (44, 36)
_FARTHEST = 6.0
"""How many times the start's own number the window reaches to bring the boundary in sight."""


@dataclass(frozen=True)
class MapWindow:
    """What part of the plane is shown: delays in s, sensitivities in the loop's unit."""

    delay_low: float
    delay_high: float
    sensitivity_low: float
    sensitivity_high: float

    @property
    def middle_delay(self) -> float:
        return 0.5 * (self.delay_low + self.delay_high)

    @property
    def middle_sensitivity(self) -> float:
        return 0.5 * (self.sensitivity_low + self.sensitivity_high)


@dataclass(frozen=True)
class CycleContour:
    """A line of equal cycle length, shape (n,), and where its seconds are written."""

    period: float
    delays: Array
    sensitivities: Array
    label_at: tuple[float, float]


@dataclass(frozen=True)
class BoundaryMap:
    """The boundary over a window; its contours are asked for apart, since they take longer."""

    window: MapWindow
    delays: Array
    """Shape (n,), s, over the window."""
    critical: Array
    """Shape (n,): the lowest sensitivity at which the loop hunts at each delay; inf where none does."""


def _round_up(value: float) -> float:
    """The next of 1, 1.5, 2, 3, 4, 5, 6, 8 or 10 times a power of ten."""
    power = 10.0 ** math.floor(math.log10(value))
    return next(step * power for step in (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0) if step * power >= value * (1.0 - 1e-12))


def window_of(case: Case) -> MapWindow:
    """The window of a case: round figures round where it started, the boundary in sight, and where it is now if that is farther out.

    It depends on the dot only in coarse steps, so that it stays while the dot moves.
    """
    start, now = judge(case.start()), case.loop()
    delay, sensitivity = float(start.loop.delay), float(start.loop.sensitivity)
    far_delay, far_sensitivity = 1.9 * delay, 1.9 * sensitivity
    if start.margins.delay_margin_s is not None:
        far_delay = max(far_delay, min(delay + 1.15 * start.margins.delay_margin_s, _FARTHEST * delay))
    if start.margins.gain_margin is not None:
        far_sensitivity = max(far_sensitivity, min(1.25 * start.margins.gain_margin, _FARTHEST) * sensitivity)
    high_delay = _round_up(max(far_delay, 1.05 * float(now.delay)))
    high_sensitivity = _round_up(max(far_sensitivity, 1.05 * float(now.sensitivity)))
    return MapWindow(0.06 * high_delay, high_delay, 0.0, high_sensitivity)


def map_of(case: Case, window: MapWindow) -> BoundaryMap:
    """The boundary of a case's loop over a window."""
    loop = case.loop()
    delays = np.linspace(window.delay_low, window.delay_high, _DELAYS)
    high = 2.0 * window.sensitivity_high
    # A little more than the window, so that the boundary reaches both its ends.
    found = boundary_curve(loop, (1e-3 * high, high), (0.9 * window.delay_low, 1.05 * window.delay_high))
    return BoundaryMap(window, delays, _lowest(found, delays))


def standing_point(drawn: BoundaryMap, judged: Judgement) -> tuple[float, float]:
    """Where a loop of another shape, such as the case with levers, stands on this map: delay in s, and sensitivity.

    Its own delay across; up, as far from this boundary as it is from its own, so that the side it lies on is the true one.
    """
    delay, gain = float(judged.loop.delay), judged.margins.gain_margin
    if gain is None:
        return delay, float(judged.loop.sensitivity)
    critical = float(np.interp(delay, drawn.delays, np.minimum(drawn.critical, 10.0 * drawn.window.sensitivity_high)))
    return delay, critical / gain


def _lowest(found: Any, delays: Array) -> Array:
    """The lowest boundary sensitivity at each delay, over all branches."""
    lowest = np.full(delays.shape, np.inf)
    for branch in found.curves:
        across, up = np.asarray(branch.delay_s), np.asarray(branch.sensitivity)
        if across.size < 2:
            continue
        for first, last in _monotone(across):
            x, y = across[first:last], up[first:last]
            if x[0] > x[-1]:
                x, y = x[::-1], y[::-1]
            inside = (delays >= x[0]) & (delays <= x[-1])
            lowest[inside] = np.minimum(lowest[inside], np.interp(delays[inside], x, y))
    return lowest


def _monotone(values: Array) -> list[tuple[int, int]]:
    """Index ranges over which a sequence only rises or only falls; neighbours share their turning point."""
    turn = np.flatnonzero(np.diff(np.sign(np.diff(values))) != 0) + 1
    edges = [0, *turn.tolist(), len(values) - 1]
    return [(a, b + 1) for a, b in itertools.pairwise(edges) if b > a]


def cycle_contours(case: Case, window: MapWindow) -> tuple[CycleContour, ...]:
    """Lines of equal cycle length of the dominant oscillation, at round seconds, where a swing outlasts its first cycle.

    At one sensitivity the cycle grows with the delay, so that each line is one delay for each sensitivity.
    """
    across = np.linspace(window.delay_low, window.delay_high, _GRID[0])
    up = np.linspace(window.sensitivity_low + 0.06 * window.sensitivity_high, window.sensitivity_high, _GRID[1])
    grid = case.loop().with_delay(across[None, :]).with_sensitivity(up[:, None] + 0.0 * across)
    found = margins_batch(grid.form(), grid.rest())
    lasts = np.asarray(found.has_oscillation, dtype=bool) & (found.growth_rate_per_s * found.cycle_length_s > math.log(SETTLED_SHARE))
    periods = np.where(lasts, found.cycle_length_s, np.nan)
    finite = periods[np.isfinite(periods)]
    if finite.size == 0:
        return ()
    result = []
    for period in _round_periods(float(np.percentile(finite, 4.0)), float(np.percentile(finite, 96.0))):
        delays = np.array([_crossing(across, row, period) for row in periods])
        known = np.flatnonzero(np.isfinite(delays))
        if known.size < 4:
            continue
        middle = known[int(0.6 * known.size)]
        result.append(CycleContour(period, delays, up, (float(delays[middle]), float(up[middle]))))
    return tuple(result)


def _crossing(across: Array, periods: Array, period: float) -> float:
    """The delay at which a row of periods first rises through one; nan where it does not."""
    rises = np.flatnonzero((periods[:-1] <= period) & (periods[1:] > period))
    if rises.size == 0:
        return math.nan
    i = int(rises[0])
    return float(across[i] + (across[i + 1] - across[i]) * (period - periods[i]) / (periods[i + 1] - periods[i]))


def _round_periods(low: float, high: float) -> list[float]:
    """Five to nine round cycle lengths between two."""
    for step in sorted(s * 10.0**p for p in range(-4, 5) for s in (1.0, 2.0, 5.0)):
        count = math.floor(high / step) - math.ceil(low / step) + 1
        if count <= 9:
            return [step * k for k in range(math.ceil(low / step), math.floor(high / step) + 1)]
    return []
