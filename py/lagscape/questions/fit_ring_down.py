"""How a loop that does not hunt dies away, read from a recording of quiet breathing.

After a sigh or an arousal ventilation swings back as v = c + exp(-z w t) (a cos(w_d t) + b sin(w_d t)): period and damping ratio z by least
squares, one estimate an event. Without events the breathing's own restlessness is taken as white noise through the loop: an autoregression
over the whole stretch has the loop's poles, and the one at the top of its spectrum is read. The second way says far less.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array
from lagscape.questions.fit_measured import RingDown
from lagscape.recordings.breathing_result import Spread

__all__ = ["ring_down_after_events", "ring_down_from_variability"]

SHORTEST_S, LONGEST_S = 12.0, 150.0
"""Periods looked for: those of `Thresholds` for cycles."""
SKIP_S = 12.0
"""After the event: the sigh itself and the first way round the loop are no free swing (common practice, no source)."""
_MOST_DAMPED = 0.8
"""A swing that is damped more has no second half, and its period is a guess."""
_EXPLAINED = 0.5
"""Share of the variance after an event that a swing must explain to count."""
_STEP_S = 1.0
_FEWEST_POINTS = 20

_EVERY_S, _ORDER = 6.0, 8
"""Steps and order of the autoregression: 48 s back, longer than any loop's delay, at half the shortest period looked for."""
_PARTS = 4
_SHORTEST_S = 900.0
_QUARTILE, _MEDIAN = 0.6745, 1.2533


def ring_down_after_events(times_s: Array, ventilation: Array, events_s: Iterable[float], longest_s: float = 120.0) -> RingDown | None:
    """Period and damping ratio from what follows sighs or arousals.

    Parameters
    ----------
    times_s, ventilation : array, shape (n,)
        The envelope of breathing in any unit, times ascending, in s; values that are not finite count as gaps.
    events_s : several
        When sighs or arousals began, in s. An event ends where the next begins.
    longest_s : float
        How long after an event to look, s.

    Returns
    -------
    RingDown or None
        None where after no event a swing explains half of what follows.

    Raises
    ------
    InvalidInputError
        If the arrays do not fit each other.
    """
    times, values = _checked(times_s, ventilation)
    events = sorted(float(event) for event in events_s)
    found = []
    for event, following in itertools.pairwise([*events, np.inf]):
        grid = np.arange(event + SKIP_S, min(event + longest_s, following, times[-1]), _STEP_S)
        if grid.size < _FEWEST_POINTS or event < times[0]:
            continue
        swing = _swing(grid - grid[0], np.interp(grid, times, values))
        if swing is not None:
            found.append(swing)
    period, damping = Spread.of(item[0] for item in found), Spread.of(item[1] for item in found)
    return None if period is None or damping is None else RingDown(period, damping, "events")


def ring_down_from_variability(times_s: Array, ventilation: Array) -> RingDown | None:
    """Period and damping ratio from the restlessness of quiet breathing alone; weak, see `RingDown.strength`.

    Parameters
    ----------
    times_s, ventilation : array, shape (n,)
        As for `ring_down_after_events`; a quarter of an hour or more.

    Returns
    -------
    RingDown or None
        The quartiles stand for the standard error that leaving out each quarter of the stretch in turn gives (jackknife). None where the
        stretch is too short or no pole swings.

    Raises
    ------
    InvalidInputError
        If the arrays do not fit each other.
    """
    times, values = _checked(times_s, ventilation)
    if times[-1] - times[0] < _SHORTEST_S:
        return None
    values = _block_means(times, values, np.arange(times[0], times[-1], _EVERY_S))
    at = np.arange(values.size)
    rest = values - np.polyval(np.polyfit(at, values, 1), at)
    if not np.max(np.abs(rest)) > 1e-9 * np.max(np.abs(values)):
        return None
    before = np.stack([rest[_ORDER - k : rest.size - k] for k in range(1, _ORDER + 1)], axis=1)
    now = rest[_ORDER:]
    whole = _top_pole(before, now)
    part = np.arange(now.size) * _PARTS // now.size
    without = [pole for k in range(_PARTS) if (pole := _top_pole(before[part != k], now[part != k])) is not None]
    if whole is None or len(without) < _PARTS:
        return None
    errors = np.sqrt((_PARTS - 1) * np.var(np.array(without), axis=0))
    period, damping = (_standing_for(value, error) for value, error in zip(whole, errors.tolist(), strict=True))
    return RingDown(period, damping, "variability")


def _standing_for(value: float, error: float) -> Spread:
    """Median and quartiles of so many values whose median has this standard error."""
    away = _QUARTILE * error * float(np.sqrt(_PARTS)) / _MEDIAN
    return Spread(value, value - away, value + away, _PARTS)


def _checked(times_s: Array, ventilation: Array) -> tuple[Array, Array]:
    times, values = np.asarray(times_s, dtype=float), np.asarray(ventilation, dtype=float)
    if times.ndim != 1 or times.shape != values.shape or times.size < _FEWEST_POINTS or not np.all(np.diff(times) > 0.0):
        raise InvalidInputError(
            f"Times (s) and ventilation must be two rows of {_FEWEST_POINTS} or more values, times ascending; got shapes {times.shape} and "
            f"{values.shape}."
        )
    known = np.isfinite(values)
    if np.count_nonzero(known) < _FEWEST_POINTS:
        raise InvalidInputError(f"Ventilation must hold {_FEWEST_POINTS} finite values or more; got {np.count_nonzero(known)}.")
    return times[known], values[known]


def _swing(at: Array, values: Array) -> tuple[float, float] | None:
    """Period (s) and damping ratio of the best damped swing, by grids that narrow about their best point."""
    total = float(np.sum((values - values.mean()) ** 2))
    if not total > 0.0:
        return None
    periods = np.geomspace(SHORTEST_S, min(LONGEST_S, 1.5 * (at[-1] - at[0])), 41)
    dampings = np.linspace(0.0, _MOST_DAMPED, 17)
    left, period, damping = np.inf, 0.0, 0.0
    for _ in range(4):
        left, period, damping = _best(at, values, periods, dampings)
        wide, tall = periods[1] / periods[0], dampings[1] - dampings[0]
        periods = period * np.geomspace(1.0 / wide, wide, 9)
        dampings = np.linspace(max(damping - tall, 0.0), min(damping + tall, _MOST_DAMPED), 9)
    ends = period <= 1.01 * SHORTEST_S or damping >= 0.99 * _MOST_DAMPED
    return None if ends or 1.0 - left / total < _EXPLAINED else (period, damping)


def _best(at: Array, values: Array, periods: Array, dampings: Array) -> tuple[float, float, float]:
    """Least sum of squares over a grid, with its period and damping ratio."""
    period, damping = (part.ravel() for part in np.meshgrid(periods, dampings))
    turn = 2.0 * np.pi / period[:, None] * at
    fade = np.exp(-turn * (damping / np.sqrt(1.0 - damping**2))[:, None])
    basis = np.stack([np.ones_like(turn), fade * np.cos(turn), fade * np.sin(turn)], axis=1)
    gram = basis @ np.swapaxes(basis, 1, 2) + 1e-9 * at.size * np.eye(3)
    right = basis @ values
    left = float(values @ values) - np.einsum("gi,gi->g", right, np.linalg.solve(gram, right[..., None])[..., 0])
    index = int(np.argmin(left))
    return float(left[index]), float(period[index]), float(damping[index])


def _block_means(times: Array, values: Array, grid: Array) -> Array:
    """Means over the steps of a coarser grid; a step without values is filled by a straight line."""
    place = np.clip(np.searchsorted(grid, times, side="right") - 1, 0, grid.size - 1)
    count = np.bincount(place, minlength=grid.size)
    total = np.bincount(place, values, minlength=grid.size)
    has = count > 0
    return np.interp(grid, grid[has], total[has] / count[has])


def _top_pole(before: Array, now: Array) -> tuple[float, float] | None:
    """Period (s) and damping ratio of the pole at which the autoregression's spectrum is highest, in the range looked for."""
    weights = np.linalg.lstsq(before, now, rcond=None)[0]
    roots = np.roots(np.concatenate([[1.0], -weights])).astype(complex)
    roots = np.log(roots[np.abs(roots) > 1e-6]) / _EVERY_S
    swings = roots[(roots.imag >= 2.0 * np.pi / LONGEST_S) & (roots.imag <= 2.0 * np.pi / SHORTEST_S)]
    if not swings.size:
        return None
    turns = np.exp(-1j * np.outer(swings.imag * _EVERY_S, np.arange(1, _ORDER + 1)))
    top = swings[int(np.argmin(np.abs(1.0 - turns @ weights)))]
    return float(2.0 * np.pi / top.imag), float(-top.real / np.abs(top))
