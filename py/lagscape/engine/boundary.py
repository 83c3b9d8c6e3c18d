"""The stability boundary in the plane of sensitivity and delay, exactly: the points where 1 + L(i w) = 0.

A delay that every path shares enters as e^(-s tau), so |L(i w)| does not know it: at each frequency with |L0(i w)| = 1 the boundary
lies at tau = (pi + arg L0(i w) + 2 pi k) / w. Where the sensitivity is a plain factor, as it is with a drive through a fixed resting
point, the curve is explicit in w: K = 1 / |G(i w)|. Otherwise (the rest moves with the sensitivity) the frequencies of unit gain are
found for many sensitivities at once. Only edges are drawn: the places where the last unstable pair comes or goes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np

from lagscape.engine.margins import Margins, MarginStatus, margins
from lagscape.engine.margins_batch import gain_crossings, margins_of
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, Loop

__all__ = [
    "Boundary",
    "BoundaryCurve",
    "BoundaryPoint",
    "PointStatus",
    "boundary_curve",
    "delay_at_sensitivity",
    "sensitivity_at_delay",
]

_NUDGE = 1e-4
"""Relative step in sensitivity to either side of a point, to see whether stability changes there."""


class PointStatus(StrEnum):
    """Why there is a point on the boundary, or none."""

    FOUND = "found"
    NO_FEEDBACK = "no_feedback"
    NEVER_HUNTS = "never_hunts"
    """Along this line the loop is stable throughout the range that was searched."""
    NEVER_SETTLES = "never_settles"
    """Along this line the loop is unstable throughout."""


@dataclass(frozen=True)
class BoundaryPoint:
    """The nearest boundary point from the case along one axis; numbers are None where the status is not FOUND."""

    status: PointStatus
    sensitivity: float | None = None
    delay_s: float | None = None
    period_s: float | None = None
    """Period of the oscillation that begins there, s."""


@dataclass(frozen=True)
class BoundaryCurve:
    """One connected piece, in order along it; arrays of one shape (n,)."""

    sensitivity: Array
    delay_s: Array
    period_s: Array
    """Period at onset, s."""


@dataclass(frozen=True)
class Boundary:
    """The stability boundary inside a window; no curve where the window holds none."""

    curves: tuple[BoundaryCurve, ...]
    delays: tuple[float, float]
    sensitivities: tuple[float, float]


def boundary_curve(
    loop: Loop,
    sensitivities: tuple[float, float] | None = None,
    delays: tuple[float, float] | None = None,
    points: int = 240,
    proportional: bool | None = None,
) -> Boundary:
    """The boundary inside a window of the (sensitivity, delay) plane.

    Parameters
    ----------
    loop : Loop
        One loop; its other numbers stay as they are.
    sensitivities, delays : (low, high), optional
        The window, in the loop's unit of sensitivity and in s; a fifth to four times the loop's own where None.
    points : int
        How finely the curve is sampled.
    proportional : bool, optional
        Whether the open loop is proportional to the sensitivity, if the caller knows; tested if None.

    Raises
    ------
    InvalidInputError
        If a window is empty or not positive.
    """
    sensitivities = _window("sensitivities", sensitivities, float(loop.sensitivity))
    delays = _window("delays", delays, float(loop.delay))
    if proportional is None:
        pair = loop.with_sensitivity(float(loop.sensitivity) * np.array([1.0, 2.0]))
        both = open_loop(pair.form(), pair.rest())
        proportional = _proportional(both)
        opened = _first_member(both)
    else:
        opened = open_loop(loop.form(), loop.rest())
    if not opened.has_feedback:
        return Boundary((), delays, sensitivities)
    if proportional:
        curves = _explicit(loop, opened, sensitivities, delays, points)
    else:
        curves = _by_sensitivity(loop, sensitivities, delays, points)
    return Boundary(tuple(curves), delays, sensitivities)


def sensitivity_at_delay(loop: Loop, known: Margins | None = None, factor: float = 30.0) -> BoundaryPoint:
    """The sensitivity on the boundary at the loop's own delay: the nearest above for a stable loop, the nearest below for another.

    `factor` limits the search: sensitivities from 1/factor to factor times the loop's own.
    """
    opened = open_loop(loop.form(), loop.rest())
    known = margins(loop.form(), loop.rest(), opened) if known is None else known
    if known.gain_status is MarginStatus.NO_FEEDBACK:
        return BoundaryPoint(PointStatus.NO_FEEDBACK)
    own, delay = float(loop.sensitivity), float(loop.delay)
    pair = loop.with_sensitivity(own * np.array([1.0, 2.0]))
    if _proportional(open_loop(pair.form(), pair.rest())) and known.loop_gain and known.phase_crossover_frequency:
        period = 2.0 * math.pi / known.phase_crossover_frequency
        return BoundaryPoint(PointStatus.FOUND, own / known.loop_gain, delay, period)
    return _search_sensitivity(loop, known, factor)


def delay_at_sensitivity(loop: Loop, known: Margins | None = None) -> BoundaryPoint:
    """The delay on the boundary at the loop's own sensitivity: more for a stable loop, less for another."""
    known = margins(loop.form(), loop.rest()) if known is None else known
    if known.delay_margin_s is not None and known.delay_margin_frequency is not None:
        period = 2.0 * math.pi / known.delay_margin_frequency
        return BoundaryPoint(PointStatus.FOUND, float(loop.sensitivity), float(loop.delay) + known.delay_margin_s, period)
    if known.delay_status is MarginStatus.NO_FEEDBACK:
        return BoundaryPoint(PointStatus.NO_FEEDBACK)
    return BoundaryPoint(PointStatus.NEVER_HUNTS if known.stable else PointStatus.NEVER_SETTLES)


def _window(name: str, given: tuple[float, float] | None, own: float) -> tuple[float, float]:
    low, high = (0.2 * own, 4.0 * own) if given is None else (float(given[0]), float(given[1]))
    if not (0.0 < low < high < math.inf):
        raise InvalidInputError(f"The window of {name} must run from a positive number to a larger one; got {low:.6g} to {high:.6g}.")
    return low, high


def _proportional(both: OpenLoop) -> bool:
    first, second = both.coefficients[:, :, 0], both.coefficients[:, :, 1]
    scale = np.max(np.abs(second), axis=0) + 1e-300
    expected = np.concatenate([first[:, :1], 2.0 * first[:, 1:]], axis=1)
    return bool(np.all(np.abs(second - expected) <= 1e-11 * scale))


def _first_member(both: OpenLoop) -> OpenLoop:
    return OpenLoop(
        both.coefficients[:, :, 0].copy(),
        tuple(float(np.ravel(delay)[0]) for delay in both.delays),
        tuple((float(np.ravel(p)[0]), float(np.ravel(q)[0])) for p, q in both.quadratics),
    )


def _shortest_allowed(loop: Loop, opened: OpenLoop) -> float:
    """The loop's delay at which its shortest path has none left."""
    return float(loop.delay) - float(opened.shortest_delay)


# ---- the sensitivity is a factor: explicit in the frequency ---------------------------------------------------------------------
def _explicit(
    loop: Loop, opened: OpenLoop, sensitivities: tuple[float, float], delays: tuple[float, float], points: int
) -> list[BoundaryCurve]:
    own, delay = float(loop.sensitivity), float(loop.delay)
    undelayed = opened.shifted(-delay)
    low = max(delays[0], _shortest_allowed(loop, opened) + 1e-9 * delays[1])
    frequency = np.geomspace(0.02 / delays[1], 7.0 * math.pi / low, 2 * points)
    near = [centre + width * np.linspace(-4.0, 4.0, 33) for centre, width in opened.resonances() if centre > 0.0]
    if near:
        frequency = np.unique(np.concatenate([frequency, *near]))
        frequency = frequency[frequency > 0.0]
    response = undelayed.response(frequency)
    size = np.abs(response)
    if np.all(size[1:] < size[:-1]):
        # |G| falls throughout: one crossing for each sensitivity, and only its first passage is an edge.
        lag = math.pi + np.unwrap(np.angle(response))
        at, sensitivity = lag / frequency, own / size
        visible = (at >= low) & (at <= delays[1]) & (sensitivity >= sensitivities[0]) & (sensitivity <= sensitivities[1])
        # One point beyond each end, so that the line reaches the window's frame.
        wide = visible.copy()
        wide[1:] |= visible[:-1]
        wide[:-1] |= visible[1:]
        return _runs(wide & (at > 0.0), sensitivity, at, 2.0 * math.pi / frequency)
    return _lobes(opened, undelayed, frequency, (low, delays[1]), sensitivities, (own, delay), points)


def _lobes(
    opened: OpenLoop,
    undelayed: OpenLoop,
    frequency: Array,
    delays: tuple[float, float],
    sensitivities: tuple[float, float],
    own: tuple[float, float],
    points: int,
) -> list[BoundaryCurve]:
    """|G| rises somewhere: several crossings for some sensitivities. Refined until smooth, and each point tested for being an edge."""
    width, height = delays[1] - delays[0], math.log(sensitivities[1] / sensitivities[0])
    curves: list[BoundaryCurve] = []
    share = np.array([0.25, 0.5, 0.75])[:, None]
    for turns in range(-1, 4):
        w, edge, fresh = frequency, np.zeros(frequency.size, dtype=bool), np.ones(frequency.size, dtype=bool)
        for last in (False, False, False, True):
            response = undelayed.response(w)
            sensitivity = own[0] / np.abs(response)
            at = (math.pi + np.unwrap(np.angle(response)) + 2.0 * math.pi * turns) / w
            visible = (at >= delays[0]) & (at <= delays[1]) & (sensitivity >= sensitivities[0]) & (sensitivity <= sensitivities[1])
            if not visible.any():
                break
            edge |= _is_edge(opened, sensitivity / own[0], at - own[1], visible & fresh)
            if last:
                curves += _runs(edge, sensitivity, at, 2.0 * math.pi / w)
                break
            step = np.hypot(np.diff(at) / width, np.diff(np.log(sensitivity)) / height)
            wanted = (edge[1:] | edge[:-1]) & (step > 1.5 / points) | (edge[1:] != edge[:-1])
            more = (w[:-1] + share * np.diff(w))[:, wanted].ravel()
            order = np.argsort(np.concatenate([w, more]))
            fresh = order >= w.size
            w = np.concatenate([w, more])[order]
            edge = np.concatenate([edge, np.zeros(more.size, dtype=bool)])[order]
    return curves


def _runs(keep: Array, sensitivity: Array, delay: Array, period: Array) -> list[BoundaryCurve]:
    index = np.flatnonzero(keep)
    pieces = np.split(index, np.flatnonzero(np.diff(index) > 1) + 1)
    return [BoundaryCurve(sensitivity[piece], delay[piece], period[piece]) for piece in pieces if piece.size > 1]


def _is_edge(opened: OpenLoop, factor: Array, shift: Array, visible: Array) -> Array:
    """Where stability differs a little to either side in sensitivity."""
    where = np.flatnonzero(visible)
    edge = np.zeros(factor.size, dtype=bool)
    if not where.size:
        return edge
    scale = np.concatenate([factor[where] * (1.0 - _NUDGE), factor[where] * (1.0 + _NUDGE)])
    coefficients = np.repeat(opened.coefficients[:, :, None], scale.size, axis=2)
    coefficients[:, 1:] *= scale
    extra = np.tile(shift[where], 2)
    many = OpenLoop(
        coefficients,
        tuple(delay + extra for delay in opened.delays),
        tuple((np.full(scale.size, p), np.full(scale.size, q)) for p, q in opened.quadratics),
    )
    stable = margins_of(many, growth=False).stable
    edge[where] = stable[: where.size] != stable[where.size :]
    return edge


# ---- the rest moves with the sensitivity: unit gain for many sensitivities at once -----------------------------------------------
def _by_sensitivity(loop: Loop, sensitivities: tuple[float, float], delays: tuple[float, float], points: int) -> list[BoundaryCurve]:
    values = np.geomspace(*sensitivities, max(points // 2, 40))
    branches = _branches(loop, values, delays)
    # Second pass: more sensitivities where the curve runs steeply, so that it is smooth on the page.
    steps = [np.hypot(np.diff(d) / delays[1], np.diff(np.log(s)) / math.log(sensitivities[1] / sensitivities[0])) for s, d, _ in branches]
    extra = [
        np.geomspace(s[i], s[i + 1], min(int(step[i] * points) + 2, 40))[1:-1]
        for (s, _, _), step in zip(branches, steps, strict=True)
        for i in np.flatnonzero(step > 1.5 / points).tolist()
    ]
    extra += [_beyond(values, s, ahead) for s, _, _ in branches for ahead in (True, False)]
    if extra:
        values = np.unique(np.concatenate([values, *extra]))
        branches = _branches(loop, values, delays)
    return [BoundaryCurve(s, d, p) for s, d, p in branches if s.size > 1]


def _beyond(values: Array, found: Array, ahead: bool) -> Array:
    """Sensitivities between the end of a branch and the next one where it was not found: the curve leaves the window there."""
    index = int(np.searchsorted(values, found[-1] if ahead else found[0]))
    other = index + 1 if ahead else index - 1
    if not 0 <= other < values.size:
        return np.zeros(0)
    return np.geomspace(values[index], values[other], 24)[1:-1]


def _branches(loop: Loop, values: Array, delays: tuple[float, float]) -> list[tuple[Array, Array, Array]]:
    batch = loop.with_sensitivity(values)
    opened = open_loop(batch.form(), batch.rest())
    own = float(loop.delay)
    shortest = np.min(opened.shortest_delay)
    lowest = max(delays[0], own - float(shortest) * (1.0 - 1e-9))
    at_low = opened.shifted(lowest - own)
    found = gain_crossings(at_low)
    pairs = (margins_of(at_low, growth=False).unstable_roots + 1) // 2
    kept: dict[int, list[tuple[int, float, float]]] = {}
    for member in range(values.size):
        mine = np.flatnonzero(found.member == member)
        events = []
        for i in mine.tolist():
            w, lag = float(found.frequency[i]), float(found.lag_left[i]) % (2.0 * math.pi)
            for k in range(12):
                at = lowest + (lag + 2.0 * math.pi * k) / w
                if at > delays[1]:
                    break
                events.append((at, w, 1 if found.falling[i] else -1))
        count, seen = int(pairs[member]), 0
        for at, w, change in sorted(events):
            before, count = count, count + change
            if (before <= 0) != (count <= 0):
                kept.setdefault(seen, []).append((member, at, 2.0 * math.pi / w))
                seen += 1
    branches = []
    for entries in kept.values():
        members = np.array([entry[0] for entry in entries])
        for piece in np.split(np.arange(members.size), np.flatnonzero(np.diff(members) > 1) + 1):
            rows = [entries[i] for i in piece.tolist()]
            branches.append((values[members[piece]], np.array([row[1] for row in rows]), np.array([row[2] for row in rows])))
    return branches


def _search_sensitivity(loop: Loop, known: Margins, factor: float) -> BoundaryPoint:
    own, delay = float(loop.sensitivity), float(loop.delay)
    ladder = own * np.geomspace(1.0, factor if known.stable else 1.0 / factor, 60)
    batch = loop.with_sensitivity(ladder)
    stable = margins_of(open_loop(batch.form(), batch.rest()), growth=False).stable
    flips = np.flatnonzero(stable != known.stable)
    if not flips.size:
        return BoundaryPoint(PointStatus.NEVER_HUNTS if known.stable else PointStatus.NEVER_SETTLES)
    near, far = float(ladder[flips[0] - 1]), float(ladder[flips[0]])
    value: dict[str, Margins] = {}

    def excess(log_sensitivity: float) -> float:
        other = loop.with_sensitivity(math.exp(log_sensitivity))
        found = margins(other.form(), other.rest())
        value["found"] = found
        # No phase crossover means no hunting at any gain: far on the stable side.
        return math.log(found.loop_gain) if found.loop_gain else -10.0

    root = _bracketed_root(excess, math.log(near), math.log(far))
    excess(root)
    frequency = value["found"].phase_crossover_frequency
    if frequency is None:
        return BoundaryPoint(PointStatus.NEVER_HUNTS if known.stable else PointStatus.NEVER_SETTLES)
    return BoundaryPoint(PointStatus.FOUND, math.exp(root), delay, 2.0 * math.pi / frequency)


def _bracketed_root(function: Any, left: float, right: float) -> float:
    """A sign change by the Illinois form of the secant rule, to rounding."""
    at_left, at_right = function(left), function(right)
    for _ in range(60):
        middle = right - at_right * (right - left) / (at_right - at_left) if at_right != at_left else 0.5 * (left + right)
        if not min(left, right) < middle < max(left, right):
            middle = 0.5 * (left + right)
        at_middle = function(middle)
        if at_middle == 0.0 or abs(middle - right) <= 4e-16 * max(abs(middle), 1.0):
            return middle
        if (at_middle > 0.0) != (at_right > 0.0):
            left, at_left = right, at_right
        else:
            at_left *= 0.5
        right, at_right = middle, at_middle
    return right
