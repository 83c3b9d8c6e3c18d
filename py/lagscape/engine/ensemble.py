"""Many loops of one structure at once: block Runge-Kutta of order 4, one real-time step for all members, a delay for each.

A block is as many steps as the shortest delay holds, so everything sensed in it is known before it starts. Delayed values come from
cubic Hermite cells; a member's delay is a constant fraction of a step, so its weights are constant. In a block the controller and then
the plant are linear with known coefficients: their one-step maps are worked out for all steps and members together, and only the short
chain of maps is walked step by step. Each cell keeps its start and end derivatives apart, because they differ where something jumps.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.disturbance import Disturbance, check_channels
from lagscape.engine.run import Run
from lagscape.engine.runge_kutta import MOST_STEPS, stage_signals
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["EnsembleCycles", "EnsembleTrace", "ensemble"]

_LAST_CYCLES = 5
"""Cycles looked at from the end."""

_Map = list[list[Any]]
"""A small matrix whose entries are arrays over steps and members, or None for zero."""


@dataclass(frozen=True)
class EnsembleCycles:
    """The cycle of each member over the end of its run; every field has the batch's shape."""

    found: Any
    """True where at least two whole cycles were seen; elsewhere the other fields are 0."""
    amplitude: Array
    """Half the peak-to-peak swing of the first sensed state, in its unit."""
    cycle_length: Array
    """s."""
    silent_share: Array
    """Share of the time with the output at or below the silent level."""
    swing_ratio: Array
    """Swing of the last cycle against that of a few cycles before: 1 for a settled cycle, below 1 while it dies away."""


@dataclass(frozen=True)
class EnsembleTrace:
    """Curves of all members on the grid of steps."""

    times: Array
    """Shape (n_times,), s."""
    states: Array
    """Shape (n_times, n_states, *batch)."""
    output: Array
    """Shape (n_times, *batch)."""
    sensed: Array
    """The first sensed signal without its delay, shape (n_times, *batch)."""
    level: Array
    """Positive exactly where the output is above the silent level, shape (n_times, *batch)."""

    def cycles(self, since: float) -> EnsembleCycles:
        """The cycle of each member from the time `since` (s) to the end."""
        first = int(np.searchsorted(self.times, since - 1e-9))
        return _cycles(self.times[first:], self.sensed[first:], self.level[first:])


def ensemble(
    form: DriveForm,
    rest: Rest,
    *,
    duration: float,
    step: float,
    disturbances: Iterable[Disturbance] = (),
    offset: Any = None,
    keep_states: bool = True,
) -> EnsembleTrace:
    """Run a batch from its rest.

    Parameters
    ----------
    form, rest : DriveForm, Rest
        With batch axes, of one shape.
    duration, step : float
        s, positive. The step is shortened to the shortest delay of all members where it is longer. One second is right for breathing
        (the lung's time constant is 5 s), a twentieth of the fastest time constant for other loops.
    disturbances : several
        The same for every member; a jump inside a step enters by its mean.
    offset : float or array, optional
        Displacement of the history from rest: one number, one a state, or (n_states, *batch).
    keep_states : bool
        False keeps only what `cycles` needs, for maps.

    Returns
    -------
    EnsembleTrace
        Entries of a member that diverges become infinite or nan in that member alone.

    Raises
    ------
    InvalidInputError
        For a bad argument.
    """
    disturbances = tuple(disturbances)
    check_channels(disturbances, form.channels)
    for name, value in (("duration", duration), ("step", step)):
        if not (math.isfinite(value) and value > 0.0):
            raise InvalidInputError(f"{name} must be finite and positive (s); got {value!r}.")
    shortest = min(float(np.min(delay)) for delay in form.sensed_delays)
    if not shortest > 0.0:
        raise InvalidInputError(f"every delay must be positive (s); got {shortest!r}.")
    step = min(float(step), shortest)
    count = max(1, math.ceil(duration / step - 1e-9))
    if count > MOST_STEPS:
        raise InvalidInputError(f"{count} steps are too many (at most {MOST_STEPS}). Shorten the run or lengthen the shortest delay.")
    batch = form.plant.shape[2:]
    state = np.asarray(rest.state, dtype=float)
    # A rest that is the same for all members (it never depends on a delay) may come without the batch's axes.
    state = state.reshape(len(state), *[1] * (1 + len(batch) - state.ndim), *state.shape[1:])
    start = np.zeros((form.n_plant + form.n_control, *batch)) + state
    if offset is not None:
        shift = np.asarray(offset, dtype=float)
        start = start + (shift.reshape(-1, *[1] * len(batch)) if shift.ndim == 1 else shift)
    block = _Blocks(form, start, step, count, duration, disturbances, keep_states)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        while block.at < count:
            block.advance()
    return block.trace()


def _times_map(a: _Map, b: _Map) -> _Map:
    return [[_total([_product(row[k], b[k][j]) for k in range(len(b))]) for j in range(len(b[0]))] for row in a]


def _product(a: Any, b: Any) -> Any:
    if a is None or b is None:
        return None
    if isinstance(a, float) and a == 1.0:
        return b
    return a * b


def _total(terms: list[Any]) -> Any:
    present = [term for term in terms if term is not None]
    if not present:
        return None
    total = present[0]
    for term in present[1:]:
        total = total + term
    return total


def _sum_maps(*weighted: tuple[float, _Map]) -> _Map:
    rows, columns = len(weighted[0][1]), len(weighted[0][1][0])
    return [[_total([_product(w, m[i][j]) for w, m in weighted]) for j in range(columns)] for i in range(rows)]


def _identity(size: int) -> _Map:
    return [[1.0 if i == j else None for j in range(size)] for i in range(size)]


def _entries(matrix: Array) -> _Map:
    return [[item if np.any(item) else None for item in row] for row in matrix]


def _step_map(step: float, at: tuple[_Map, _Map, _Map], forcing: tuple[_Map, _Map, _Map]) -> tuple[_Map, _Map]:
    """x_(n+1) = M x_n + g for x' = W x + w by RK4, from W and w at the start, middle and end of the step."""
    size = len(at[0])
    one = _identity(size)
    k1, g1 = at[0], forcing[0]
    k2 = _times_map(at[1], _sum_maps((1.0, one), (0.5 * step, k1)))
    g2 = _sum_maps((1.0, forcing[1]), (0.5 * step, _times_map(at[1], g1)))
    k3 = _times_map(at[1], _sum_maps((1.0, one), (0.5 * step, k2)))
    g3 = _sum_maps((1.0, forcing[1]), (0.5 * step, _times_map(at[1], g2)))
    k4 = _times_map(at[2], _sum_maps((1.0, one), (step, k3)))
    g4 = _sum_maps((1.0, forcing[2]), (step, _times_map(at[2], g3)))
    sixth = step / 6.0
    return (
        _sum_maps((1.0, one), (sixth, k1), (2.0 * sixth, k2), (2.0 * sixth, k3), (sixth, k4)),
        _sum_maps((sixth, g1), (2.0 * sixth, g2), (2.0 * sixth, g3), (sixth, g4)),
    )


def _constant_step_map(step: float, system: _Map) -> tuple[_Map, tuple[_Map, _Map, _Map]]:
    """As `_step_map` where W is constant: M, and the matrices of g = Q_0 w_0 + Q_m w_m + Q_1 w_1."""
    size = len(system)
    nothing: _Map = [[None] for _ in range(size)]
    columns: list[list[_Map]] = []
    step_map: _Map = []
    for stage in range(3):
        columns.append([])
        for j in range(size):
            unit: _Map = [[1.0 if i == j else None] for i in range(size)]
            forcing = tuple(unit if k == stage else nothing for k in range(3))
            step_map, gain = _step_map(step, (system, system, system), forcing)  # type: ignore[arg-type]
            columns[-1].append(gain)
    weights = tuple([[columns[stage][j][i][0] for j in range(size)] for i in range(size)] for stage in range(3))
    return step_map, weights  # type: ignore[return-value]


def _walk(step_map: _Map, gain: _Map, start: Array, steps: int) -> Array:
    """The chain x_(n+1) = M_n x_n + g_n, shape (steps + 1, size, *batch)."""
    size, depth = len(start), start.ndim
    x = np.empty((steps + 1, *start.shape))
    x[0] = start
    terms = [[(j, m) for j, m in enumerate(row) if m is not None] for row in step_map]
    for n in range(steps):
        before, after = x[n], x[n + 1]
        for i in range(size):
            total = gain[i][0]
            total = 0.0 if total is None else (total[n] if np.ndim(total) == depth else total)
            for j, m in terms[i]:
                total = total + (m[n] if np.ndim(m) == depth else m) * before[j]
            after[i] = total
    return x


class _Delayed:
    """One sensed signal in blocks: constant Hermite weights over a stencil of three grid values and two cells."""

    def __init__(self, row: int, delay: Any, step: float, pad: int, batch: tuple[int, ...]) -> None:
        self.row = row
        back = np.broadcast_to(np.asarray(delay, dtype=float) / step, batch)
        base = np.floor(-back + 1e-9)
        share = np.maximum(-back - base, 0.0)
        self._base = pad + base.astype(int).reshape(-1)
        self._index = np.empty((0, 0), dtype=int)
        self._start_weights = _hermite_weights(share, step)
        late = share + 0.5
        over = late >= 1.0
        weights = _hermite_weights(np.where(over, late - 1.0, late), step)
        # The middle of a step falls into the same cell for some members and into the next for others.
        self._middle_weights = [
            (shift, [np.where(chosen, w, 0.0) for w in weights]) for shift, chosen in ((0, ~over), (1, over)) if np.any(chosen)
        ]
        self._batch = batch

    def block(self, values: Array, starts: Array, ends: Array, at: int, steps: int) -> tuple[Array, Array]:
        """The signal at the grid (steps + 1, *batch) and at the middles (steps, *batch) of a block."""
        members = self._base.size
        if len(self._index) != steps + 2:
            self._index = (np.arange(steps + 2)[:, None] + self._base) * members + np.arange(members)
        # The last rows may lie past what is known; their weights are zero there.
        index = self._index + at * members
        x, s, e = (array.reshape(-1).take(index).reshape(steps + 2, *self._batch) for array in (values, starts, ends))
        w = self._start_weights
        grid = w[0] * x[:-1]
        for weight, cells in ((w[1], x[1:]), (w[2], s[:-1]), (w[3], e[:-1])):
            grid += weight * cells
        middle = np.zeros((steps, *self._batch))
        for shift, ws in self._middle_weights:
            here, after = slice(shift, shift + steps), slice(shift + 1, shift + 1 + steps)
            for weight, cells in zip(ws, (x[here], x[after], s[here], e[here]), strict=True):
                middle += weight * cells
        return grid, middle


def _hermite_weights(share: Array, step: float) -> list[Array]:
    rest = 1.0 - share
    return [
        (1.0 + 2.0 * share) * rest**2, share**2 * (3.0 - 2.0 * share), step * share * rest**2, -step * share**2 * rest,
    ]  # fmt: skip


class _Blocks:
    """A batch under way."""

    def __init__(
        self, form: DriveForm, start: Array, step: float, count: int, duration: float, disturbances: tuple[Disturbance, ...], keep: bool
    ) -> None:
        self.form, self.step, self.count, self.at = form, step, count, 0
        self.batch = batch = start.shape[1:]
        self.x, self.c = start[: form.n_plant], start[form.n_plant :]
        rows, row_of = np.unique(form.sensed_rows, axis=0, return_inverse=True)
        self.rows, self.first_row = rows, int(row_of.reshape(-1)[0])
        longest = max(float(np.max(delay)) for delay in form.sensed_delays)
        self.pad = math.ceil(longest / step) + 2
        shape = (self.pad + count + 3, *batch)
        self.values = [np.zeros(shape) for _ in rows]
        self.starts, self.ends = [np.zeros(shape) for _ in rows], [np.zeros(shape) for _ in rows]
        for array, row in zip(self.values, rows, strict=True):
            array[: self.pad + 1] = np.tensordot(row, self.x, axes=(0, 0))
        self.delayed = [
            _Delayed(int(number), delay, step, self.pad, batch) for number, delay in zip(row_of.reshape(-1), form.sensed_delays, strict=True)
        ]
        self.block = max(1, math.floor(min(float(np.min(delay)) for delay in form.sensed_delays) / step + 1e-9))
        # Disturbances are common to all members, so they are worked out for one.
        self.floor = float(np.minimum(np.min(form.silent_level), 0.0))
        self.signals = stage_signals(Run(form, np.zeros(1), duration, disturbances), step, count) if disturbances else {}
        self.keep = keep
        self.output, self.level = np.empty((count + 1, *batch)), np.empty((count + 1, *batch))
        self.states = np.empty((count + 1, form.n_plant + form.n_control, *batch)) if keep else np.empty((0, 0, *batch))
        self.plant, self.by_output = _entries(form.plant), _entries(form.plant_by_output)
        if form.n_control:
            self.control = _entries(form.control)
            self.control_map, self.control_weights = _constant_step_map(step, self.control)
            self.by_sensed = _entries(form.control_by_sensed)

    def advance(self) -> None:
        """One block."""
        at = self.at
        steps = min(self.block, self.count - at)
        grid, middle = [], []
        for item in self.delayed:
            number = item.row
            g, m = item.block(self.values[number], self.starts[number], self.ends[number], at, steps)
            grid.append(g)
            middle.append(m)
        sensed, sensed_middle = np.array(grid), np.array(middle)
        control, control_middle = self._control(sensed, sensed_middle, steps)
        if self.signals:
            v, level = self._output(sensed[:, :-1], control[:, :-1], at, steps, 0)
            v_end, level_end = self._output(sensed[:, 1:], control[:, 1:], at, steps, 2)
        else:  # without a disturbance the end of a step is the start of the next
            both, both_levels = self._output(sensed, control, at, steps, 0)
            v, v_end, level, level_end = both[:-1], both[1:], both_levels[:-1], both_levels[1:]
        v_middle, _ = self._output(sensed_middle, control_middle, at, steps, 1)
        stages = [self._plant_at(item, at, steps, stage) for stage, item in enumerate((v, v_middle, v_end))]
        at_stage, forcing = tuple(item[0] for item in stages), tuple(item[1] for item in stages)
        step_map, gain = _step_map(self.step, at_stage, forcing)  # type: ignore[arg-type]
        x = _walk(step_map, gain, self.x, steps)
        self._keep(x, control, (v, v_end), (level, level_end), (stages[0], stages[2]), at, steps)
        self.x, self.c = x[-1], control[:, -1]
        self.at = at + steps

    def _control(self, sensed: Array, middle: Array, steps: int) -> tuple[Array, Array]:
        """The controller's states at the grid, (n_control, steps + 1, *batch), and in the middles by their Hermite cubic."""
        form = self.form
        if not form.n_control:
            return np.empty((0, steps + 1, *self.batch)), np.empty((0, steps, *self.batch))

        def driven(y: Array) -> _Map:
            column = _times_map(self.by_sensed, [[item] for item in y])
            constant = [[item if np.any(item) else None] for item in form.control_constant]
            return _sum_maps((1.0, column), (1.0, constant))

        u, u_middle = driven(sensed), driven(middle)
        before = [[None if item[0] is None else item[0][:-1]] for item in u]
        after = [[None if item[0] is None else item[0][1:]] for item in u]
        parts = [_times_map(weight, item) for weight, item in zip(self.control_weights, (before, u_middle, after), strict=True)]
        gain = _sum_maps(*((1.0, part) for part in parts))
        c = np.moveaxis(_walk(self.control_map, gain, self.c, steps), 1, 0)
        slope_map = _sum_maps((1.0, _times_map(self.control, [[item] for item in c])), (1.0, u))
        slope = np.array([np.zeros_like(c[0]) + (0.0 if item[0] is None else item[0]) for item in slope_map])
        return c, 0.5 * (c[:, :-1] + c[:, 1:]) + self.step / 8.0 * (slope[:, :-1] - slope[:, 1:])

    def _signal(self, key: str, at: int, steps: int, stage: int) -> Any:
        signal = self.signals.get(key)
        return 0.0 if signal is None else signal[at : at + steps, stage].reshape(-1, *[1] * len(self.batch))

    def _output(self, sensed: Array, control: Array, at: int, steps: int, stage: int) -> tuple[Array, Array]:
        """The controlled signal and its silence level at one stage of every step of a block."""
        drive = self.form.drive
        push, direct = self._signal("push", at, steps, stage), self._signal("out", at, steps, stage)
        v = drive.value(sensed, control, push) + direct
        if self.signals and math.isfinite(self.floor):
            v = np.maximum(v, self.floor)
        if stage == 1:
            return v, v
        level = v - self.form.silent_level
        if drive.has_kink:
            level = np.where(level > 0.0, level, np.minimum(drive.switch(sensed, control, push) + direct, 0.0))
        return v, level

    def _plant_at(self, v: Array, at: int, steps: int, stage: int) -> tuple[_Map, _Map]:
        """W = A + v N and w = v b + e + disturbances at one stage, as maps."""
        form, size = self.form, self.form.n_plant
        system = [[_total([self.plant[i][j], _product(v, self.by_output[i][j])]) for j in range(size)] for i in range(size)]
        forcing: _Map = []
        for i in range(size):
            by_output = form.input_vector[i] if np.any(form.input_vector[i]) else None
            if f"q{i}" in self.signals:
                by_output = _total([by_output, self._signal(f"q{i}", at, steps, stage)])
            terms = [_product(v, by_output), form.constant[i] if np.any(form.constant[i]) else None]
            if f"p{i}" in self.signals:
                terms.append(self._signal(f"p{i}", at, steps, stage))
            forcing.append([_total(terms)])
        return system, forcing

    def _keep(self, x: Array, control: Array, v: Any, level: Any, stages: Any, at: int, steps: int) -> None:
        """Writes the block into the history and the trace."""
        here = slice(self.pad + at, self.pad + at + steps)
        slopes = []
        for (system, forcing), states in zip(stages, (x[:-1], x[1:]), strict=True):
            column = _sum_maps((1.0, _times_map(system, [[states[:, j]] for j in range(len(system))])), (1.0, forcing))
            slopes.append([item[0] for item in column])
        for number, row in enumerate(self.rows):
            used = np.flatnonzero(row)
            for array, slope in ((self.starts[number], slopes[0]), (self.ends[number], slopes[1])):
                total = _total([_product(float(row[j]), slope[j]) for j in used])
                array[here] = 0.0 if total is None else total
            self.values[number][self.pad + at + 1 : self.pad + at + steps + 1] = sum(float(row[j]) * x[1:, j] for j in used)
        self.output[at : at + steps], self.level[at : at + steps] = v[0], level[0]
        self.output[at + steps], self.level[at + steps] = v[1][-1], level[1][-1]
        if self.keep:
            n = self.form.n_plant
            self.states[at : at + steps + 1, :n] = x
            self.states[at : at + steps + 1, n:] = np.moveaxis(control, 0, 1)

    def trace(self) -> EnsembleTrace:
        times = self.step * np.arange(self.count + 1)
        return EnsembleTrace(times, self.states, self.output, self.values[self.first_row][self.pad : self.pad + self.count + 1], self.level)


def _cycles(times: Array, signal: Array, level: Array) -> EnsembleCycles:
    """Cycles of every member from its signal, shape (n_times, *batch), n_times at least 4.

    First over the whole window, for the length of a cycle; then over the last few cycles alone, because the mean may still drift.
    """
    batch = signal.shape[1:]
    signal, level = signal.reshape(len(times), -1), level.reshape(len(times), -1)
    step = float(times[1] - times[0])
    everywhere = np.full(signal.shape[1], -1.0)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        swing, middle = _swing(signal, everywhere, everywhere + len(times))
        first, last, count = _crossings(signal, middle, everywhere)
        found = (count >= 3) & (swing > 1e-9 * np.maximum(np.abs(middle), 1e-30)) & np.isfinite(swing)
        length = np.where(found, (last - first) / np.maximum(count - 1, 1), 2.0)
        swing, middle = _swing(signal, last - length - 1.0, last + 1.0)
        first, last, count = _crossings(signal, middle, last - (_LAST_CYCLES + 0.5) * length)
        found &= count >= 2
        spanned = np.where(found, last - first, 1.0)
        length = spanned / np.maximum(count - 1, 1)
        swing, _ = _swing(signal, last - length - 1.0, last + 1.0)
        early, _ = _swing(signal, first - 1.0, first + length + 1.0)
        a, b = level[:-1], level[1:]
        quiet = np.where((a <= 0.0) & (b <= 0.0), 1.0, np.where((a > 0.0) & (b > 0.0), 0.0, np.minimum(a, b) / -np.abs(a - b)))
        total = np.concatenate([np.zeros((1, signal.shape[1])), np.cumsum(quiet, axis=0)])
        share = np.clip((_between(total, last) - _between(total, first)) / spanned, 0.0, 1.0)

    def kept(values: Array) -> Array:
        return np.where(found & np.isfinite(values), values, 0.0).reshape(batch)

    return EnsembleCycles(found.reshape(batch), kept(0.5 * swing), kept(step * length), kept(share), kept(swing / early))


def _swing(signal: Array, since: Any, until: Any) -> tuple[Array, Array]:
    """Peak to peak and the level half way, of each member, over places from `since` to `until` (in steps)."""
    place = np.arange(len(signal))[:, None]
    inside = (place >= since) & (place <= until)
    high = _peak(np.where(inside, signal, -np.inf), signal)
    low = -_peak(np.where(inside, -signal, -np.inf), -signal)
    return high - low, 0.5 * (high + low)


def _crossings(signal: Array, middle: Array, since: Array) -> tuple[Array, Array, Array]:
    """First and last place (in steps) after `since` at which each member rises through `middle`, and how many there are."""
    above = signal > middle
    rising = above[1:] & ~above[:-1]
    rising &= np.arange(len(rising))[:, None] >= since
    members = np.arange(signal.shape[1])

    def place(cell: Any) -> Array:
        # The cubic through the four samples around the crossing would shift it by less than the parabola; two steps of Newton on it.
        cell = np.clip(cell, 1, len(signal) - 3)
        y0, y1, y2, y3 = (signal[cell + k, members] - middle for k in (-1, 0, 1, 2))
        c1 = y2 - y0 / 3.0 - y1 / 2.0 - y3 / 6.0
        c2 = 0.5 * (y0 + y2) - y1
        c3 = (y3 - y0) / 6.0 + (y1 - y2) / 2.0
        u = np.where(y2 == y1, 0.0, -y1 / (y2 - y1))
        for _ in range(3):
            slope = c1 + u * (2.0 * c2 + 3.0 * c3 * u)
            u = np.clip(u - (y1 + u * (c1 + u * (c2 + c3 * u))) / np.where(slope == 0.0, 1.0, slope), 0.0, 1.0)
        return cell + u

    return place(rising.argmax(axis=0)), place(len(rising) - 1 - rising[::-1].argmax(axis=0)), rising.sum(axis=0)


def _between(total: Array, place: Array) -> Array:
    cell = np.clip(np.where(np.isfinite(place), place, 0.0).astype(int), 0, len(total) - 2)
    members = np.arange(total.shape[1])
    low, high = total[cell, members], total[cell + 1, members]
    return low + (place - cell) * (high - low)


def _peak(inside: Array, signal: Array) -> Array:
    """Largest value of `inside` in each member, by the parabola of `signal` through that sample and its neighbours."""
    members = np.arange(signal.shape[1])
    top = np.clip(inside.argmax(axis=0), 1, len(signal) - 2)
    a, b, c = (signal[top + shift, members] for shift in (-1, 0, 1))
    bend = a - 2.0 * b + c
    peak = b - (a - c) ** 2 / np.where(bend < 0.0, 8.0 * bend, -np.inf)
    return np.where((b >= a) & (b >= c), peak, inside.max(axis=0))
