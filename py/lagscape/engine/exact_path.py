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
from typing import Any

import numpy as np

from lagscape.engine.history import PiecewiseHistory, chebyshev_basis, distinct_rows, to_chebyshev
from lagscape.engine.linear_pieces import linear_pieces
from lagscape.engine.mesh import points, tail_weights
from lagscape.engine.piece_roots import roots_inside
from lagscape.engine.run import Run
from lagscape.engine.trace import Trace, find_silences
from lagscape.loops.protocol import Array

__all__ = ["ExactSettings", "exact_path"]

_NUDGE = 1e-9
_NOISE_ORDER = 2
_MOST_ROUNDS = 40


@dataclass(frozen=True)
class ExactSettings:
    """How exact: the defaults give 1e-7 or better on the loops of this project."""

    degree: int = 10
    highest_order: int = 4
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
        # Noise has a break every hold: of its small jumps only the first images are kept, or the pieces explode.
        self._outer = min(self._highest, _NOISE_ORDER) if len(run.breaks) > 50 else self._highest
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
        self.longest = settings.piece / rate
        self.advance_by = form.delays[0]
        widest = min(self.longest, self.advance_by)
        self.plant = linear_pieces(form.plant, form.plant_by_output, self.n, widest)
        self.control = linear_pieces(form.control, None, self.n, widest) if form.n_control else None
        # What is sensed is a state of a while ago: judged then, and not again.
        size = np.maximum(np.abs(run.initial), 1e-300)
        self.size = np.concatenate([size[: form.n_plant], np.full(form.n_sensed, np.inf), size[form.n_plant :]])
        self.worst_tail = 0.0
        self.edges: list[Array] = []
        self.tables: list[Array] = []
        self.points, self.inner = points(self.n), np.clip(points(self.n), _NUDGE, 1.0 - _NUDGE)

    def advance(self, end: float) -> bool:
        """One advance to `end`; False if the states left the finite numbers."""
        begin = self.history.end
        inside = self.breaks.until(end, begin, 1e-9 * self.advance_by)
        edges = np.array(_subdivided([begin, *inside, end], self.longest))
        kinks: list[float] = []
        for _ in range(_MOST_ROUNDS):
            arguments = self._arguments(edges)
            cuts = self._kinks(edges, arguments) if self.settings.locate_kinks else {}
            if cuts:
                edges, arguments, found = self._cut(edges, arguments, cuts)
                kinks += found
            table = self._plant(edges, arguments)
            if not math.isfinite(table[-1].sum()):
                return False  # what is not finite stays so to the end
            poor = self._unresolved(edges, table)
            if not len(poor):
                break
            edges = np.sort(np.concatenate([edges, 0.5 * (edges[poor] + edges[poor + 1])]))
        for kink in kinks:
            self.breaks.breed(kink, 2)
        self._accept(edges, table)
        return True

    def _times(self, edges: Array) -> Array:
        """The points of the pieces, drawn in from their ends, so that what jumps there is taken from inside: (m, n + 1)."""
        begins = edges[:-1, None]
        return begins + (edges[1:, None] - begins) * self.inner

    def _arguments(self, edges: Array) -> Array:
        """What the drive takes at the points: (n_sensed + n_control, m, n + 1)."""
        form, n = self.run.form, self.n
        begins = edges[:-1, None]
        lengths = edges[1:, None] - begins
        arguments = np.empty((form.n_sensed + form.n_control, len(begins), n + 1))
        sensed = arguments[: form.n_sensed]
        sensed[:] = self.history.at(begins + lengths * self.points - self.delays, self.row_of, begins + lengths * self.inner - self.delays)
        if self.control is not None:
            forcing = form.control_by_sensed.dot(sensed[..., 1:].reshape(form.n_sensed, -1)) + form.control_constant[:, None]
            by_piece = forcing.reshape(form.n_control, -1, n).transpose(1, 0, 2)
            arguments[form.n_sensed :] = self.control.solve(None, by_piece, lengths[:, 0], self.c.tolist()).transpose(1, 0, 2)
        return arguments

    def _kinks(self, edges: Array, arguments: Array) -> dict[int, list[float]]:
        """Piece to places in it where the drive's switch or the floor is crossed."""
        run, split = self.run, self.run.form.n_sensed
        sensed, control = arguments[:split], arguments[split:]
        times = self._times(edges) if run.used_channels else edges
        push = run.push(times)
        found: dict[int, list[float]] = {}
        if run.form.drive.has_kink:
            found = roots_inside(run.form.drive.switch(sensed, control, push))
        if run.used_channels and math.isfinite(run.floor):
            below = run.output_push(times)
            if np.any(np.asarray(below) < 0.0):
                for piece, places in roots_inside(run.form.drive.value(sensed, control, push) + below - run.floor).items():
                    found.setdefault(piece, []).extend(places)
        return found

    def _cut(self, edges: Array, arguments: Array, cuts: dict[int, list[float]]) -> tuple[Array, Array, list[float]]:
        """Pieces cut at places of theirs: the new edges and arguments, and the times of the cuts.

        What the drive takes is smooth across such a place, so the parts of a piece inherit its polynomials.
        """
        bounds = edges.tolist()
        times: list[float] = []
        parts: list[Array] = []
        done = 0
        for piece, places in sorted(cuts.items()):
            left, length = bounds[piece], bounds[piece + 1] - bounds[piece]
            inner = sorted(set(places))
            times += [left + place * length for place in inner]
            marks = np.array([0.0, *inner, 1.0])
            where = marks[:-1, None] + (marks[1:] - marks[:-1])[:, None] * self.points
            series = arguments[:, piece].dot(to_chebyshev(self.n).T)
            within = series.dot(chebyshev_basis(2.0 * where.reshape(-1) - 1.0, self.n))
            parts += [arguments[:, done:piece], within.reshape(len(series), len(where), -1)]
            done = piece + 1
        return np.array(sorted(bounds + times)), np.concatenate([*parts, arguments[:, done:]], axis=1), times

    def _plant(self, edges: Array, arguments: Array) -> Array:
        """Plant states, then what the drive takes, at the points: (m, n_plant + n_sensed + n_control, n + 1)."""
        run, form = self.run, self.run.form
        nodes = self._times(edges)[:, 1:] if run.used_channels else edges
        given = arguments[..., 1:]
        v = run.controlled(given[: form.n_sensed], given[form.n_sensed :], nodes)
        forcing = v[:, None, :] * form.input_vector[:, None] + form.constant[:, None]
        if run.used_channels:
            forcing = forcing + _pieces_first(run.plant_push_by_output(nodes)) * v[:, None, :] + _pieces_first(run.plant_push(nodes))
        states = self.plant.solve(v, forcing, edges[1:] - edges[:-1], self.x.tolist())
        return np.concatenate([states, arguments.transpose(1, 0, 2)], axis=1)

    def _unresolved(self, edges: Array, table: Array) -> Any:
        """Pieces to halve: those whose two highest coefficients are too large, unless they are already very short."""
        self.size = np.maximum(self.size, np.abs(table).max(axis=(0, 2)))
        tail = (np.abs(table @ tail_weights(self.n)).max(axis=2) / self.size).max(axis=1)
        worst = float(tail.max())
        if worst > self.settings.tolerance:
            poor = np.flatnonzero((tail > self.settings.tolerance) & (np.diff(edges) > 1e-6 * self.longest))
            if poor.size:
                return poor
        self.worst_tail = max(self.worst_tail, worst)
        return ()

    def _accept(self, edges: Array, table: Array) -> None:
        form = self.run.form
        states = table[:, : form.n_plant]
        self.history.append(edges, (self.rows @ states).transpose(0, 2, 1))
        self.x = states[-1, :, -1]
        self.c = table[-1, form.n_plant + form.n_sensed :, -1]
        self.edges.append(edges[:-1])
        self.tables.append(table)


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
