"""The boundary in the plane of any two numbers of a loop: the curves where 1 + L(i w) = 0, followed by pseudo-arclength.

A coarse grid of stability gives the seeds, one for each place where it changes; each is brought onto the curve by Newton steps and
followed both ways until it leaves the window or closes on itself. Folds are no obstacle, because neither number is the parameter.

References
----------
Keller 1977, in Applications of Bifurcation Theory, 359-384 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.margins_batch import margins_of
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, Loop

__all__ = ["PlaneBoundary", "PlaneCurve", "boundary_in_two"]

_DIFFERENCE = 1e-6
"""Of the window's width; it sets how fast Newton converges, not where."""
_FIRST_STEP, _LARGEST_STEP, _SMALLEST_STEP = 0.01, 0.02, 1e-5
"""Of the window's width."""
_MOST_POINTS = 1500


@dataclass(frozen=True)
class PlaneCurve:
    """One connected piece in order along it; arrays of one shape (n,)."""

    first: Array
    second: Array
    period_s: Array
    closed: bool
    residual: float
    """The largest |1 + L(i w)| over the curve."""


@dataclass(frozen=True)
class PlaneBoundary:
    """The curves of 1 + L(i w) = 0 in a window of two numbers that bound a region where the loop settles."""

    names: tuple[str, str]
    window: tuple[tuple[float, float], tuple[float, float]]
    curves: tuple[PlaneCurve, ...]


def boundary_in_two(
    loop: Loop, name_a: str, name_b: str, window: tuple[tuple[float, float], tuple[float, float]], grid: int = 24
) -> PlaneBoundary:
    """All boundary curves in a window of two numbers.

    Parameters
    ----------
    loop : Loop
        One loop.
    name_a, name_b : str
        Numbers of the loop as `with_numbers` takes them, or "sensitivity" or "delay".
    window : ((low, high), (low, high))
        In the numbers' units; the loop must have a rest everywhere in it.
    grid : int
        Cells a side of the grid that seeds the search: a closed curve smaller than a cell can be missed.

    Raises
    ------
    InvalidInputError
        If the window is empty or the two names are the same.
    """
    if name_a == name_b:
        raise InvalidInputError(f"The two numbers must differ; got {name_a} twice.")
    for name, (low, high) in zip((name_a, name_b), window, strict=True):
        if not -math.inf < low < high < math.inf:
            raise InvalidInputError(f"The window of {name} must run from a number to a larger one; got {low:.6g} to {high:.6g}.")
    plane = _Plane(loop, name_a, name_b, window)
    curves: list[PlaneCurve] = []
    for seed in plane.seeds(grid):
        if any(_near(seed, u, 1.2 / grid) for u, _, _ in plane.traced):
            continue
        curve = plane.trace(seed)
        if curve is not None:
            curves.append(curve)
    return PlaneBoundary((name_a, name_b), window, tuple(curves))


def with_named(loop: Any, name: str, value: Any) -> Any:
    """The loop with one number replaced; "sensitivity" and "delay" are the map's two axes."""
    if name == "sensitivity":
        return loop.with_sensitivity(value)
    return loop.with_delay(value) if name == "delay" else loop.with_numbers(**{name: value})


def _near(seed: Array, curve: Array, reach: float) -> bool:
    return bool(np.min(np.hypot(curve[:, 0] - seed[0], curve[:, 1] - seed[1])) < reach)


class _Plane:
    """Unit coordinates u, v in [0, 1] over the window, and z = ln w."""

    def __init__(self, loop: Loop, name_a: str, name_b: str, window: Any) -> None:
        self.loop, self.names = loop, (name_a, name_b)
        self.low = np.array([window[0][0], window[1][0]])
        self.width = np.array([window[0][1] - window[0][0], window[1][1] - window[1][0]])
        self.traced: list[tuple[Array, Array, Array]] = []

    def opened(self, u: Array, v: Array) -> OpenLoop:
        a, b = self.low[0] + self.width[0] * u, self.low[1] + self.width[1] * v
        batch = with_named(with_named(self.loop, self.names[0], a), self.names[1], b)
        return open_loop(batch.form(), batch.rest())

    def seeds(self, grid: int) -> list[Array]:
        """(u, v, z) between neighbouring grid points of which one settles and the other does not."""
        line = np.linspace(0.0, 1.0, grid + 1)
        u, v = (part.ravel() for part in np.meshgrid(line, line, indexing="ij"))
        found = margins_of(_fully_batched(self.opened(u, v), u.size), growth=False)
        stable = found.stable.reshape(grid + 1, grid + 1)
        frequency = found.phase_crossover_frequency.reshape(grid + 1, grid + 1)
        gain = found.loop_gain.reshape(grid + 1, grid + 1)
        seeds = []
        for di, dj in ((1, 0), (0, 1)):
            differs = stable[: grid + 1 - di, : grid + 1 - dj] != stable[di:, dj:]
            for i, j in np.argwhere(differs).tolist():
                ends = ((i, j), (i + di, j + dj))
                best = min(ends, key=lambda end: abs(math.log(gain[end])) if gain[end] > 0.0 else math.inf)
                if frequency[best] > 0.0:
                    seeds.append(np.array([line[i] + 0.5 * di / grid, line[j] + 0.5 * dj / grid, math.log(frequency[best])]))
        return seeds

    def equations(self, point: Array) -> tuple[Array, Array]:
        """(Re, Im) of 1 + L and their derivatives by u, v, z, (2,) and (2, 3)."""
        h = _DIFFERENCE
        u = point[0] + h * np.array([0.0, 1.0, -1.0, 0.0, 0.0])
        v = point[1] + h * np.array([0.0, 0.0, 0.0, 1.0, -1.0])
        w = math.exp(point[2])
        value, slope = _fully_batched(self.opened(u, v), 5).with_slope(np.full(5, 1j * w))
        columns = ((value[1] - value[2]) / (2.0 * h), (value[3] - value[4]) / (2.0 * h), 1j * w * slope[0])
        residual = 1.0 + value[0]
        return np.array([residual.real, residual.imag]), np.array([[c.real for c in columns], [c.imag for c in columns]])

    def correct(self, point: Array, tangent: Array | None) -> tuple[Array, Array, float] | None:
        """Newton onto the curve, in the plane across `tangent` or by the shortest way; point, Jacobian there, residual."""
        start = point
        for _ in range(9):
            residual, jacobian = self.equations(point)
            if not np.all(np.isfinite(jacobian)):
                return None
            size = float(np.hypot(*residual))
            if size < 2e-12:
                return point, jacobian, size
            if tangent is None:
                step = -np.linalg.lstsq(jacobian, residual, rcond=None)[0]
            else:
                across = np.append(residual, tangent @ (point - start))
                step = -np.linalg.solve(np.vstack([jacobian, tangent]), across)
            length = float(np.linalg.norm(step))
            point = point + step * min(1.0, 0.3 / length if length else 1.0)
        return (point, jacobian, size) if size < 1e-9 else None

    def trace(self, seed: Array) -> PlaneCurve | None:
        started = self.correct(seed, None)
        if started is None or not _inside(started[0], 0.05):
            return None
        if any(_near(started[0], u, 0.004) for u, _, _ in self.traced):
            return None
        forward, closed = self._follow(started, 1.0)
        points = forward if closed else self._follow(started, -1.0)[0][:0:-1] + forward
        path = np.array([point for point, _ in points])
        self.traced.append((path, path, path))
        inside = np.array([_inside(point, 1e-9) for point in path])
        if not inside.any():
            return None
        # One point beyond the frame at either end keeps the line whole.
        first, last = np.flatnonzero(inside)[[0, -1]]
        kept = path[max(first - 1, 0) : last + 2]
        values = self.low + self.width * kept[:, :2]
        worst = max(residual for _, residual in points)
        return PlaneCurve(values[:, 0], values[:, 1], 2.0 * math.pi * np.exp(-kept[:, 2]), closed, worst)

    def _try(self, guess: Array, tangent: Array) -> tuple[Array, Array, float] | None:
        try:
            return self.correct(guess, tangent)
        except (np.linalg.LinAlgError, InvalidInputError):
            return None

    def _follow(self, started: tuple[Array, Array, float], sign: float) -> tuple[list[tuple[Array, float]], bool]:
        point, jacobian, residual = started
        tangent = sign * _tangent(jacobian)
        points, step = [(point, residual)], _FIRST_STEP
        first, first_tangent, travelled = point, tangent, 0.0
        while len(points) < _MOST_POINTS:
            found = self._try(point + step * tangent, tangent)
            turn = 0.0
            if found is not None:
                after = _tangent(found[1])
                after *= math.copysign(1.0, float(after @ tangent))
                turn = float(after @ tangent)
            if found is None or turn < 0.96 or np.linalg.norm(found[0] - point) > 2.0 * step:
                step *= 0.5
                if step < _SMALLEST_STEP:
                    return points, False
                continue
            travelled += step
            point, tangent = found[0], after
            points.append((point, found[2]))
            if travelled > 3.0 * step and np.linalg.norm(point - first) < 1.01 * step and float(tangent @ first_tangent) > 0.8:
                points.append(points[0])
                return points, True
            if not _inside(point, 0.0):
                return points, False
            step = min(step * 1.4, _LARGEST_STEP) if turn > 0.995 else step
        return points, False


def _inside(point: Array, slack: float) -> bool:
    return bool(np.all(point[:2] >= -slack) and np.all(point[:2] <= 1.0 + slack))


def _tangent(jacobian: Array) -> Array:
    direction = np.cross(jacobian[0], jacobian[1])
    return direction / np.linalg.norm(direction)


def _fully_batched(opened: OpenLoop, members: int) -> OpenLoop:
    return opened.member(np.arange(members)) if opened.batch == (members,) else OpenLoop(
        np.broadcast_to(opened.coefficients, (*opened.coefficients.shape[:2], members)),
        tuple(np.broadcast_to(delay, (members,)) for delay in opened.delays),
        tuple((np.broadcast_to(p, (members,)), np.broadcast_to(q, (members,))) for p, q in opened.quadratics),
    )
