"""The exact path: collocation on a mesh that holds every breaking point, for release, export and tests.

Breaking points are the start, the breaks of the disturbances, the times at which the drive is cut off or comes back, and the images of
all of these under every delay, as long as the jump they carry is in a derivative low enough to matter. The run advances by at most the
shortest delay, so that what is sensed is always in the past; inside an advance the pieces are split where a cut-off begins or ends
(found as a root, ends and grazing included) and where the polynomials do not resolve the solution.
"""

from __future__ import annotations

import heapq
import itertools
import math
from dataclasses import dataclass
from operator import mul
from typing import Any

import numpy as np

from lagscape.engine.history import PiecewiseHistory, distinct_rows, to_chebyshev
from lagscape.engine.mesh import integration, points, tail_weights
from lagscape.engine.run import Run
from lagscape.engine.trace import Trace, find_silences
from lagscape.loops.protocol import Array

__all__ = ["ExactSettings", "exact_path"]

_NUDGE = 1e-9
_SAME_PLACE = 1e-6
"""A root closer than this share of a piece to its end is that end: what is cut off there is the square of it."""
_GRAZING = 0.01
"""A polynomial that stays further from zero than this share of its range at all samples cannot reach it between two of them."""
_MOST_KINK_ROUNDS = 6
_MOST_ROUNDS = 40


@dataclass(frozen=True)
class ExactSettings:
    """How exact: the defaults give 1e-7 or better on the loops of this project."""

    degree: int = 12
    highest_order: int = 3
    """Breaks are piece ends while the lowest derivative of the state that jumps there is of this order or lower; 0 for none at all."""
    tolerance: float = 1e-7
    """Largest unresolved share of a state in a piece."""
    locate_kinks: bool = True
    piece: float = 1.0
    """Longest piece, in units of the fastest time constant."""


class _Breaks:
    """A queue of breaking points that breeds their images under the delays."""

    def __init__(self, run: Run, settings: ExactSettings, start: float) -> None:
        self._delays, self._end = run.form.delays, run.duration
        self._highest = settings.highest_order
        # Noise has a break every hold: the images of its small jumps are kept one order less, or the pieces explode.
        self._outer = self._highest - 1 if len(run.breaks) > 50 else self._highest
        self._queue: list[tuple[float, int]] = []
        for time in [start, *run.breaks.tolist()]:
            self.breed(time, 1, self._outer)
            if time > start and self._highest > 0:
                heapq.heappush(self._queue, (time, 1))

    def breed(self, time: float, order: int, highest: int | None = None) -> None:
        """Queues the images of a break whose lowest jumping derivative is `order`; under a delay it rises by one."""
        highest = self._highest if highest is None else highest
        level = {time}
        while order < highest:
            order += 1
            level = {earlier + delay for earlier in level for delay in self._delays}
            for image in level:
                if image < self._end:
                    heapq.heappush(self._queue, (image, order))

    def until(self, end: float, after: float, least_gap: float) -> list[float]:
        """Takes the breaks up to `end` from the queue, ascending, without those closer than `least_gap` to one another or the ends."""
        found: list[float] = []
        last = after
        while self._queue and self._queue[0][0] < end - least_gap:
            time, _ = heapq.heappop(self._queue)
            if time > last + least_gap:
                found.append(time)
                last = time
        while self._queue and self._queue[0][0] < end + least_gap:
            heapq.heappop(self._queue)
        return found


class _LinearPieces:
    """x' = (A + v N) x + w on pieces in a row, by one batched solve; N is None where v does not multiply the state."""

    def __init__(self, matrix: Array, by_output: Array | None, n: int) -> None:
        self._size, self._n = len(matrix), n
        self._q = integration(n).T
        self._constant = -np.kron(matrix, integration(n))
        self._by_output = None if by_output is None else -np.kron(by_output, integration(n))

    def solve(self, v: Array | None, forcing: Array, lengths: Array, start: list[float]) -> Array:
        """v (m, n), if N is there, and w (m, s, n) at the nodes; x at the points, (m, s, n + 1)."""
        m, size, n = len(lengths), self._size, self._n
        unknowns = size * n
        scale = lengths[:, None, None]
        if self._by_output is None or v is None:
            system = self._constant * scale
        else:
            system = self._by_output * (v if size == 1 else np.concatenate([v] * size, axis=1))[:, None]
            system += self._constant
            system *= scale
        system.reshape(m, -1)[:, :: unknowns + 1] += 1.0
        right = np.zeros((m, size, n, size + 1))
        for i in range(size):
            right[:, i, :, i] = 1.0
        np.multiply(forcing.reshape(-1, n).dot(self._q).reshape(m, size, n), scale, out=right[..., size])
        solved = np.linalg.solve(system, right.reshape(m, unknowns, size + 1)).reshape(m, size, n, size + 1)
        # A chain of tiny products: plain floats are faster than array calls.
        x, starts = start, []
        for rows in solved[:, :, -1].tolist():
            starts.append(x)
            x = [row[-1] + sum(map(mul, row, x)) for row in rows]
        values = np.empty((m, size, n + 1))
        values[:, :, 0] = starts
        values[:, :, 1:] = (solved[..., :size] @ values[:, None, :, :1])[..., 0]
        values[:, :, 1:] += solved[..., size]
        return values


class _Path:
    """The state of a run under way."""

    def __init__(self, run: Run, settings: ExactSettings, start: float, rate: float) -> None:
        form = run.form
        self.run, self.settings, self.n = run, settings, settings.degree
        self.rows, row_of = distinct_rows(form.sensed_rows)
        self.row_of = np.array(row_of)[:, None, None]
        self.delays = np.array([float(delay) for delay in form.sensed_delays])[:, None, None]
        self.history = PiecewiseHistory(self.n, start, self.rows @ run.initial[: form.n_plant])
        self.breaks = _Breaks(run, settings, start)
        self.x, self.c = run.initial[: form.n_plant], run.initial[form.n_plant :]
        self.plant = _LinearPieces(form.plant, form.plant_by_output if np.any(form.plant_by_output) else None, self.n)
        self.control = _LinearPieces(form.control, None, self.n) if form.n_control else None
        self.size = np.maximum(np.abs(run.initial), 1e-300)
        self.longest = settings.piece / rate
        self.advance_by = form.delays[0]
        self.worst_tail = 0.0
        self.edges: list[Array] = []
        self.tables: list[Array] = []
        self.inner = np.clip(points(self.n), _NUDGE, 1.0 - _NUDGE)
        dense = np.cos(np.pi * np.arange(4 * self.n + 1)[::-1] / (4 * self.n))
        self.dense = 0.5 * (1.0 + dense)
        self.places = self.dense.tolist()
        self.to_dense = (np.polynomial.chebyshev.chebvander(dense, self.n) @ to_chebyshev(self.n)).T

    def advance(self, end: float) -> bool:
        """One advance to `end`; False if the states left the finite numbers."""
        begin = self.history.end
        gap = 1e-9 * self.advance_by
        inside = self.breaks.until(end, begin, gap)
        marks = [begin, *inside, end]
        edges = np.array(_subdivided(marks, self.longest))
        kinks: list[float] = []
        kink_rounds = _MOST_KINK_ROUNDS if self.settings.locate_kinks else 0
        for _ in range(_MOST_ROUNDS):
            times, arguments = self._arguments(edges)
            if kink_rounds:
                kink_rounds -= 1
                found = self._kinks(edges, times, arguments)
                if found:
                    kinks += found
                    edges = np.sort(np.concatenate([edges, found]))
                    continue
            states = self._plant(edges, times, arguments)
            if not np.isfinite(states).all():
                return False
            poor = self._unresolved(edges, states, arguments)
            if not len(poor):
                break
            edges = np.sort(np.concatenate([edges, 0.5 * (edges[poor] + edges[poor + 1])]))
        for kink in kinks:
            self.breaks.breed(kink, 2)
        self._accept(edges, states, arguments)
        return True

    def _arguments(self, edges: Array) -> tuple[Array, Array]:
        """Times (m, n + 1), drawn in from the piece ends, and what the drive takes there: (n_sensed + n_control, m, n + 1)."""
        form, n = self.run.form, self.n
        begins = edges[:-1, None]
        lengths = edges[1:, None] - begins
        times = begins + lengths * points(n)
        inner = begins + lengths * self.inner
        arguments = np.empty((form.n_sensed + form.n_control, *times.shape))
        sensed = arguments[: form.n_sensed]
        sensed[:] = self.history.at(times - self.delays, self.row_of, inner - self.delays)
        if self.control is not None:
            forcing = form.control_by_sensed @ sensed[..., 1:].transpose(1, 0, 2) + form.control_constant[:, None]
            arguments[form.n_sensed :] = self.control.solve(None, forcing, lengths[:, 0], self.c.tolist()).transpose(1, 0, 2)
        return inner, arguments

    def _kinks(self, edges: Array, times: Array, arguments: Array) -> list[float]:
        """Times inside pieces where the drive's switch or the floor is crossed."""
        run, split = self.run, self.run.form.n_sensed
        functions = []
        if run.form.drive.has_kink:
            functions.append(run.form.drive.switch(arguments[:split], arguments[split:], run.push(times)))
        if run.used_channels and math.isfinite(run.floor):
            below = run.output_push(times)
            if np.any(np.asarray(below) < 0.0):
                functions.append(run.form.drive.value(arguments[:split], arguments[split:], run.push(times)) + below - run.floor)
        found: list[float] = []
        for values in functions:
            found += self._roots(edges, values)
        return found

    def _roots(self, edges: Array, values: Array) -> list[float]:
        """Roots well inside the pieces of the polynomials through these values at the points, (m, n + 1)."""
        dense = values.dot(self.to_dense)
        lowest, highest = dense.min(axis=1), dense.max(axis=1)
        near = _GRAZING * (highest - lowest)
        close = np.flatnonzero((lowest <= near) & (highest >= -near))
        found: list[float] = []
        if not close.size:
            return found
        all_series = values[close].dot(to_chebyshev(self.n).T).tolist()
        for row, left, right in self._brackets(dense[close], all_series):
            place = _refined(all_series[row], left, right)
            if _SAME_PLACE < place < 1.0 - _SAME_PLACE:
                piece = close[row]
                found.append(float(edges[piece] + place * (edges[piece + 1] - edges[piece])))
        return found

    def _brackets(self, dense: Array, all_series: list[list[float]]) -> list[tuple[int, float, float]]:
        """Row and interval of [0, 1] of each sign change: between dense samples, or beside a dip that no sample shows (grazing)."""
        places = self.places
        height = np.abs(dense)
        size = height.max(axis=1, keepdims=True)
        positive = dense > 0.0
        row, kept = np.nonzero(height > 1e-9 * size)
        sign = positive[row, kept]
        change = np.flatnonzero((sign[1:] != sign[:-1]) & (row[1:] == row[:-1]))
        found = [(i, places[left], places[right]) for i, left, right in zip(*(
            part.tolist() for part in (row[change], kept[change], kept[change + 1])
        ), strict=True)]  # fmt: skip
        inner = height[:, 1:-1]
        dips = (inner < 2.0 * _GRAZING * size) & (inner < height[:, :-2]) & (inner < height[:, 2:])
        if dips.any():
            dips &= (positive[:, 1:-1] == positive[:, :-2]) & (positive[:, 1:-1] == positive[:, 2:]) & (inner > 0.0)
            for i, j in zip(*(part.tolist() for part in np.nonzero(dips)), strict=True):
                left, right = places[j], places[j + 2]
                fine = [left + (right - left) * k / 32.0 for k in range(1, 32)]
                heights = [_value_and_slope(all_series[i], place)[0] * (1.0 if positive[i, j + 1] else -1.0) for place in fine]
                deepest = min(range(len(fine)), key=heights.__getitem__)
                if heights[deepest] < 0.0:
                    found += [(i, left, fine[deepest]), (i, fine[deepest], right)]
        return found

    def _plant(self, edges: Array, times: Array, arguments: Array) -> Array:
        """Plant states at the points, (m, n_plant, n + 1)."""
        run, form = self.run, self.run.form
        nodes = times[:, 1:]
        given = arguments[..., 1:]
        v = run.controlled(given[: form.n_sensed], given[form.n_sensed :], nodes)
        forcing = v[:, None, :] * form.input_vector[:, None] + form.constant[:, None]
        if run.used_channels:
            forcing = forcing + _pieces_first(run.plant_push_by_output(nodes)) * v[:, None, :] + _pieces_first(run.plant_push(nodes))
        return self.plant.solve(v, forcing, edges[1:] - edges[:-1], self.x.tolist())

    def _unresolved(self, edges: Array, states: Array, arguments: Array) -> Any:
        """Pieces to halve: those whose two highest coefficients are too large, unless they are already very short."""
        form = self.run.form
        control = arguments[form.n_sensed :].transpose(1, 0, 2)
        everything = np.concatenate([states, control], axis=1)
        self.size = np.maximum(self.size, np.abs(everything).max(axis=(0, 2)))
        tail = (np.abs(everything @ tail_weights(self.n)).max(axis=2) / self.size).max(axis=1)
        worst = float(tail.max())
        if worst > self.settings.tolerance:
            poor = np.flatnonzero((tail > self.settings.tolerance) & (np.diff(edges) > 1e-6 * self.longest))
            if poor.size:
                return poor
        self.worst_tail = max(self.worst_tail, worst)
        return ()

    def _accept(self, edges: Array, states: Array, arguments: Array) -> None:
        form = self.run.form
        self.history.append(edges, (self.rows @ states).transpose(0, 2, 1))
        self.x = states[-1, :, -1]
        self.c = arguments[form.n_sensed :, -1, -1]
        self.edges.append(edges[:-1])
        self.tables.append(np.concatenate([states, arguments.transpose(1, 0, 2)], axis=1))


def _subdivided(marks: list[float], longest: float) -> list[float]:
    """The marks and, between them, equally spaced edges so that no piece is longer than `longest`."""
    edges = [marks[0]]
    for a, b in itertools.pairwise(marks):
        count = max(1, math.ceil((b - a) / longest - 1e-9))
        edges += [a + (b - a) * i / count for i in range(1, count)]
        edges.append(b)
    return edges


def _pieces_first(signal: Array | float) -> Array | float:
    return np.moveaxis(signal, 0, 1) if isinstance(signal, np.ndarray) else signal


def _value_and_slope(series: list[float], place: float) -> tuple[float, float]:
    """A Chebyshev series and its derivative at a place of [0, 1], by Clenshaw's recurrence in plain floats."""
    x = 2.0 * place - 1.0
    b1 = b2 = d1 = d2 = 0.0
    for coefficient in series[:0:-1]:
        d1, d2 = 2.0 * (b1 + x * d1) - d2, d1
        b1, b2 = coefficient + 2.0 * x * b1 - b2, b1
    return series[0] + x * b1 - b2, 2.0 * (b1 + x * d1 - d2)


def _refined(series: list[float], low: float, high: float) -> float:
    """The root of a Chebyshev series between two places of [0, 1]: Newton steps, halving where a step leaves the bracket."""
    rising = _value_and_slope(series, high)[0] > 0.0
    place = 0.5 * (low + high)
    for _ in range(60):
        value, slope = _value_and_slope(series, place)
        if (value > 0.0) == rising:
            high = place
        else:
            low = place
        if abs(value) <= 1e-12 * abs(slope):
            break  # a step this small may round onto an end of the bracket, and halving would start anew
        following = place - value / slope if slope != 0.0 else low
        if not low < following < high:
            following = 0.5 * (low + high)
        moved, place = abs(following - place), following
        if moved < 1e-11:
            break
    return place


def exact_path(run: Run, times: Array, rate: float, start: float = 0.0, settings: ExactSettings | None = None) -> Trace:
    """One run by the exact path, evaluated at `times`, shape (n,).

    Parameters
    ----------
    rate : float
        The loop's fastest rate, 1/s: pieces start at about 1/rate.
    start : float
        s; the loop rests before it.
    """
    path = _Path(run, settings or ExactSettings(), start, rate)
    status = "completed"
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        while path.history.end < run.duration * (1.0 - 1e-12):
            if not path.advance(min(path.history.end + path.advance_by, run.duration)):
                status = "diverged"
                break
    return _trace(path, times, start, status)


def _trace(path: _Path, times: Array, start: float, status: str) -> Trace:
    run, form, n = path.run, path.run.form, path.n
    if status == "diverged":
        times = times[times <= path.history.end]
    at_rest = np.concatenate([run.initial[: form.n_plant], form.sensed_rows @ run.initial[: form.n_plant], run.initial[form.n_plant :]])
    signals = PiecewiseHistory(n, start, at_rest)
    silences: tuple[tuple[float, float], ...] = ()
    if path.tables:
        edges = np.append(np.concatenate(path.edges), path.history.end)
        table = np.concatenate(path.tables)
        signals.append(edges, np.moveaxis(table, 1, 2))
        silences = _silences(run, edges, table, start)
    values = signals.all_at(times).T
    sensed, control = values[form.n_plant : form.n_plant + form.n_sensed], values[form.n_plant + form.n_sensed :]
    states = np.concatenate([values[: form.n_plant], control]).T
    output = run.controlled(sensed, control, times)
    return Trace(times, states, output, form.state_names, status, path.worst_tail, silences, "exact path")


def _silences(run: Run, edges: Array, table: Array, start: float) -> tuple[tuple[float, float], ...]:
    """From all points of all pieces: a cut-off begins and ends at a piece end, so nothing is interpolated there."""
    form, n = run.form, table.shape[2] - 1
    times = edges[:-1, None] + np.diff(edges)[:, None] * points(n)
    inner = edges[:-1, None] + np.diff(edges)[:, None] * np.clip(points(n), _NUDGE, 1.0 - _NUDGE)
    signals = np.moveaxis(table, 1, 0)[form.n_plant :]
    sensed, control = signals[: form.n_sensed], signals[form.n_sensed :]
    output = run.controlled(sensed, control, inner)
    level = run.silence_level(sensed, control, inner, output)
    found = find_silences(times.reshape(-1), level.reshape(-1))
    least = 1e-6 * (form.delays[0])
    return tuple((max(begin, 0.0), end) for begin, end in found if end - begin > least)
