"""Interval collocation: the drag path. The run is cut into steps of at most the shortest delay, so that on each step what is sensed is known.

On a step the sensed signals come from former steps by constant matrices, the controller's states are a constant linear operator of
them, the controlled signal follows, and the plant is then linear with known coefficients (`plant_steps`). Every step has the same
pieces; the images of each disturbance's break under the shortest delay fall on the same place of every step, so they are piece ends
everywhere at once. A cut-off drive (a ventilation that stops) is sampled densely and projected back by least squares, which blurs the
corner far less than its values at the nodes would.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from functools import cached_property, partial
from typing import Any

import numpy as np

from lagscape.engine.history import distinct_rows
from lagscape.engine.mesh import Kept, evaluation, gauss_places, nodes, oversampling, points, tail_weights
from lagscape.engine.plant_steps import chained_operator, plant_step
from lagscape.engine.run import Run
from lagscape.engine.trace import Trace, find_silences
from lagscape.loops.protocol import Array, DriveForm

__all__ = ["FixedMesh", "holds_every_break", "interval_collocation", "mesh_for"]

_OVERSAMPLES = 32
_MOST_EXTRA_PIECES = 8
_MOST_PIECES_A_STEP = 12
_SAME_PLACE = 1e-6
"""Piece ends closer than this share of a step are one."""

_plans = Kept(8)
_operators = Kept(8)
_lookups = Kept(8)
_MOST_KEPT_TIMES = 5000
"""Output grids larger than this are an export, not a drag: not worth the memory."""


@dataclass(frozen=True)
class FixedMesh:
    """The same pieces in every step."""

    start: float
    """s: where the first step begins; before it the loop rests."""
    step: float
    """s: at most the shortest delay."""
    edges: Array
    """Shape (m + 1,), s from the start of a step; the last is `step`."""
    degree: int
    """n, the number of Radau nodes a piece."""

    @cached_property
    def lengths(self) -> Array:
        return np.diff(self.edges)

    @cached_property
    def key(self) -> tuple[Any, ...]:
        """Every number of the mesh but its start."""
        return (self.step, self.degree, self.edges.tobytes())


def mesh_for(run: Run, rate: float, pieces_per_rate: float, degree: int, start: float) -> FixedMesh:
    """Equal pieces of about 1 / (rate x pieces_per_rate) s, and the breaks of the run folded into a step as further piece ends.

    The step is the shortest delay, or a whole fraction of it where that would be more than a dozen pieces. With noise the step is a
    whole number of holds or a whole fraction of one, so that every jump falls on a piece end.
    """
    step = min(run.form.delays[0], max(run.duration - start, 1e-3 * run.duration))
    step /= math.ceil(step * rate * pieces_per_rate / _MOST_PIECES_A_STEP)
    breaks = [start, *run.breaks[run.breaks > start].tolist()]
    holds = [item.span for item in run.disturbances if item.kind == "noise"]
    marks = [0.0, 1.0]
    if holds:
        whole = min(math.floor(step / holds[0] + 1e-9), _MOST_PIECES_A_STEP)
        step = holds[0] * whole if whole else holds[0] / math.ceil(holds[0] / step - 1e-9)
        holds_a_step = np.arange(max(whole, 1) + 1) / max(whole, 1)
        shift = np.mod(min(item.start for item in run.disturbances if item.kind == "noise") - start, step)
        marks = np.unique(np.concatenate([holds_a_step, np.mod(holds_a_step + shift / step, 1.0)])).tolist()
    # First what jumps, then the images under the other delays, which are smoother.
    images = [time + delay for delay in run.form.delays if not _whole(delay / step) for time in breaks[:_MOST_EXTRA_PIECES]]
    for time in [*breaks, *images][: 4 * _MOST_EXTRA_PIECES if holds else 2 * _MOST_EXTRA_PIECES]:
        place = (time - start) % step / step
        if min(abs(mark - place) for mark in marks) > _SAME_PLACE:
            marks.append(place)
    marks.sort()
    edges = [0.0]
    for a, b in itertools.pairwise(marks):
        count = max(1, math.ceil((b - a) * step * rate * pieces_per_rate - 1e-9))
        edges += [step * (a + (b - a) * i / count) for i in range(1, count + 1)]
    return FixedMesh(start, step, np.array(edges), degree)


def _whole(number: float) -> bool:
    return abs(number - round(number)) < _SAME_PLACE


def holds_every_break(run: Run, mesh: FixedMesh) -> bool:
    """Whether every break of the disturbances after the mesh's start falls on a piece end."""
    places = np.mod(run.breaks[run.breaks > mesh.start] - mesh.start, mesh.step)
    near = np.abs(places[:, None] - mesh.edges).min(axis=1, initial=mesh.step)
    return bool(np.all(near <= 2.0 * _SAME_PLACE * mesh.step))


class _SensedHistory:
    """What is sensed on a step, from the observed signals of former steps by constant matrices."""

    def __init__(self, run: Run, mesh: FixedMesh) -> None:
        self.rows, row_of = distinct_rows(run.form.sensed_rows)
        self._plans: list[tuple[int, int, Array | None]] = []
        deepest = 1
        for row, delay in zip(row_of, run.form.sensed_delays, strict=True):
            back = float(delay) / mesh.step
            whole = math.floor(back + 1e-9)
            rest = max(back - whole, 0.0)
            if rest < 1e-9:
                self._plans.append((row, whole, None))
                deepest = max(deepest, whole)
            else:
                self._plans.append((row, whole, _plans((mesh.key, rest), partial(_shift_matrix, mesh, rest))))
                deepest = max(deepest, whole + 1)
        self.depth = deepest

    def sense(self, observed: Array, k: int, into: Array) -> None:
        """Fills into[:n_sensed], each (m, n + 1), on step k; `observed` holds step k at index k + depth."""
        here = k + self.depth
        for j, (row, whole, matrix) in enumerate(self._plans):
            if matrix is None:
                into[j] = observed[here - whole, row]
            else:
                matrix.dot(observed[here - whole - 1 : here - whole + 1, row].reshape(-1), out=into[j].reshape(-1))


def _shift_matrix(mesh: FixedMesh, back: float) -> Array:
    """Values on two steps in a row to values at the points of the second, looked up `back` of a step earlier; 0 < back < 1."""
    n, m = mesh.degree, len(mesh.edges) - 1
    edges, lengths = mesh.edges / mesh.step, mesh.lengths[:, None] / mesh.step
    where = edges[:-1, None] + lengths * points(n) - back
    # A point on a piece's edge is looked up from inside its own piece, because the past may have a corner there.
    inner = edges[:-1, None] + lengths * np.clip(points(n), 1e-9, 1.0 - 1e-9) - back
    both = np.concatenate([edges[:-1] - 1.0, edges])
    piece = np.clip(np.searchsorted(both, inner.reshape(-1), side="right") - 1, 0, 2 * m - 1)
    local = (where.reshape(-1) - both[piece]) / (both[piece + 1] - both[piece])
    matrix = np.zeros((len(piece), 2 * m, n + 1))
    matrix[np.arange(len(piece)), piece] = evaluation(n, np.clip(local, 0.0, 1.0))
    return matrix.reshape(len(piece), -1)


class _ControlStep:
    """The controller's states at the points, a constant operator of their start and of what is sensed at the nodes."""

    def __init__(self, run: Run, mesh: FixedMesh) -> None:
        form = run.form
        self._size, m, n = form.n_control, len(mesh.edges) - 1, mesh.degree
        self._shape = (self._size, m, n + 1)
        if not self._size:
            return
        used = np.flatnonzero(np.any(form.control_by_sensed != 0.0, axis=0)).tolist() or [0]
        self._used = slice(used[0], used[-1] + 1)
        key = (mesh.key, *(item.tobytes() for item in (form.control, form.control_by_sensed, form.control_constant)))
        self._operator = _operators(key, partial(_control_operator, form, mesh, self._used))
        self._input = np.ones(self._operator.shape[1])

    def advance(self, start: Array, arguments: Array) -> Array:
        """Fills the controller's rows of `arguments`, (n_sensed + n_control, m, n + 1), and returns its states at the end."""
        if not self._size:
            return start
        self._input[: self._size] = start
        self._input[self._size : -1] = arguments[self._used].reshape(-1)
        values = arguments[-self._size :]
        self._operator.dot(self._input, out=values.reshape(-1))
        return values[:, -1, -1]


def _control_operator(form: DriveForm, mesh: FixedMesh, used: slice) -> Array:
    """(start, the used sensed signals at the points, 1) to the controller's states at the points; nothing is taken from a piece's start."""
    m, n, size = len(mesh.edges) - 1, mesh.degree, form.n_control
    y0, yw = chained_operator(form.control, mesh.lengths, n)
    gains = form.control_by_sensed[:, used]
    by_sensed = np.zeros((size * m * (n + 1), gains.shape[1], m, n + 1))
    by_sensed[..., 1:] = np.moveaxis(np.tensordot(yw, gains, axes=([3], [0])), -1, 3).reshape(*by_sensed.shape[:3], n)
    constant = np.einsum("ipqjkl,j->ipq", yw, form.control_constant)
    return np.concatenate([part.reshape(len(by_sensed), -1) for part in (y0, by_sensed, constant)], axis=1)


class _Signals:
    """Every disturbance signal of the run at the places where it is needed, worked out before the first step."""

    def __init__(self, run: Run, mesh: FixedMesh, count: int, drive_places: Array) -> None:
        self.drive: Array | None = None
        self.output: Array | None = None
        self._plant: Array | None = None
        self._by_output: Array | None = None
        if run.used_channels:
            at_drive = _step_times(mesh, count, drive_places)
            at_nodes = _step_times(mesh, count, nodes(mesh.degree))
            self.drive, self.output = (
                signal if isinstance(signal, np.ndarray) else None for signal in (run.push(at_drive), run.output_push(at_drive))
            )
            self._plant, self._by_output = (
                np.moveaxis(signal, 0, 1) if isinstance(signal, np.ndarray) else None
                for signal in (run.plant_push(at_nodes), run.plant_push_by_output(at_nodes))
            )

    def forcing(self, v: Array, steps: Any) -> Array | None:
        """w = sum u (p + v q) on these steps: v of shape (..., m, n) gives (..., n_plant, m, n); None where nothing pushes."""
        total = None if self._plant is None else self._plant[steps]
        if self._by_output is not None:
            product = self._by_output[steps] * v[..., None, :, :]
            total = product if total is None else total + product
        return total


def _step_times(mesh: FixedMesh, count: int, places: Array) -> Array:
    """Times of these places of [0, 1] in every piece of every step, drawn in a little from the piece ends: (count, m, n_places)."""
    inner = mesh.edges[:-1, None] + mesh.lengths[:, None] * np.clip(places, 1e-7, 1.0 - 1e-7)
    return mesh.start + mesh.step * np.arange(count)[:, None, None] + inner


def interval_collocation(run: Run, times: Array, mesh: FixedMesh, stiff: bool = False) -> Trace:
    """One run on a fixed mesh, evaluated at `times`, shape (n,). Its status is completed or diverged; judge its error estimate.

    `stiff` forbids the integrating factor of a one-state plant; it is set by itself where that was not to be trusted.
    """
    form, n = run.form, mesh.degree
    count = max(1, math.ceil((run.duration - mesh.start) / mesh.step - 1e-9))
    history = _SensedHistory(run, mesh)
    m = len(mesh.edges) - 1
    plant = plant_step(form, history.rows, mesh.lengths, n, stiff)
    control = _ControlStep(run, mesh)
    blurred = form.drive.has_kink
    up, down = oversampling(n, _OVERSAMPLES)
    up, down = up.T, down.T
    signals = _Signals(run, mesh, count, gauss_places(_OVERSAMPLES) if blurred else nodes(n))

    observed = np.empty((count + history.depth, len(history.rows), m, n + 1))
    observed[: history.depth] = (history.rows @ run.initial[: form.n_plant])[None, :, None, None]
    arguments = np.empty((count, form.n_sensed + form.n_control, m, n + 1))
    v_all, x_all = np.empty((count, m, n)), np.empty((count, form.n_plant))
    x, c = run.initial[: form.n_plant], run.initial[form.n_plant :]
    sensed_count, controller_count, drive = form.n_sensed, form.n_control, form.drive.value
    floored = bool(run.used_channels) and math.isfinite(run.floor)
    done = count
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):  # a loop that leaves every range is a status
        for k in range(count):
            here = arguments[k]
            history.sense(observed, k, here)
            if controller_count:
                c = control.advance(c, here)
            given = here.reshape(-1, n + 1).dot(up).reshape(len(here), m, -1) if blurred else here[..., 1:]
            v = drive(given[:sensed_count], given[sensed_count:], 0.0 if signals.drive is None else signals.drive[k])
            if signals.output is not None:
                v = v + signals.output[k]
            if floored:
                v = np.maximum(v, run.floor)
            v_all[k] = v.dot(down) if blurred else v
            v, x_all[k] = v_all[k], x
            x = plant.advance(x, v, signals.forcing(v, k), observed[k + history.depth])
            if not math.isfinite(x[0]):
                done = k
                break
    if not plant.trusted(v_all[: done + 1]):
        return interval_collocation(run, times, mesh, stiff=True)
    v_all, x_all, arguments = v_all[:done], x_all[:done], arguments[:done]
    states = plant.states(x_all, v_all, signals.forcing(v_all, slice(done)))
    table = np.concatenate([states, np.moveaxis(arguments, 1, 3)], axis=3)
    return _trace(run, times, mesh, table, "completed" if done == count else "diverged")


def _trace(run: Run, times: Array, mesh: FixedMesh, table: Array, status: str) -> Trace:
    """The trace from the table of plant states, sensed signals and controller states at the points, (count, m, n + 1, n_signals)."""
    form, count = run.form, len(table)
    if status == "diverged":
        times = times[times < mesh.start + count * mesh.step]
    values = np.empty((len(times), table.shape[-1]))
    still = int(np.searchsorted(times, mesh.start))
    values[:still] = np.concatenate(
        [run.initial[: form.n_plant], form.sensed_rows @ run.initial[: form.n_plant], run.initial[form.n_plant :]]
    )
    if count:
        moving = times[still:]
        build = partial(_looked_up, mesh, count, moving)
        small = len(moving) <= _MOST_KEPT_TIMES
        piece, basis = _lookups((mesh.key, mesh.start, count, moving.tobytes()), build) if small else build()
        np.matmul(basis, table.reshape(-1, *table.shape[2:]).take(piece, axis=0), out=values[still:, None])
    sensed = values[:, form.n_plant : form.n_plant + form.n_sensed].T
    controller = values[:, form.n_plant + form.n_sensed :]
    output = run.controlled(sensed, controller.T, times)
    level = run.silence_level(sensed, controller.T, times, output)
    states = np.concatenate([values[:, : form.n_plant], controller], axis=1)
    return Trace(
        times, states, output, form.state_names, status, _error_estimate(run, table), find_silences(times, level),
        "interval collocation",
    )  # fmt: skip


def _looked_up(mesh: FixedMesh, count: int, times: Array) -> tuple[Array, Array]:
    """For times from the start of the mesh: the number of the piece among those of all steps, and (n_times, 1, n + 1) weights on its points."""
    k = np.minimum(((times - mesh.start) / mesh.step).astype(int), count - 1)
    within = times - mesh.start - k * mesh.step
    m = len(mesh.lengths)
    piece = np.clip(np.searchsorted(mesh.edges, within, side="right") - 1, 0, m - 1)
    places = np.clip((within - mesh.edges[piece]) / mesh.lengths[piece], 0.0, 1.0)
    return k * m + piece, evaluation(mesh.degree, places)[:, None, :]


def _error_estimate(run: Run, table: Array) -> float:
    """The unresolved part of the plant's states: their two highest Legendre coefficients against their size so far.

    It is local: a loop that grows or drifts in phase multiplies it.
    """
    if not table.size:
        return math.inf
    states = table[..., : run.form.n_plant]
    tail = np.abs(tail_weights(table.shape[2] - 1).T @ states).max(axis=(1, 2))
    size = np.maximum(np.maximum.accumulate(np.abs(states).max(axis=(1, 2))), 1e-300)
    return float((tail / size).max())
