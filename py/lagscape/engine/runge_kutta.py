"""A plain fixed-step Runge-Kutta loop of order 4 with a correct history, for one loop of any form.

The check that shares no code with the collocations, and the solver for delays that are short against the run. Between steps the
history is a cubic Hermite polynomial. Each cell keeps the derivative at its start and at its end apart, because the derivative jumps
at t = 0 and where a disturbance jumps; one shared value would make the whole method second order.

The step's arithmetic is written out for the loop's own matrices and compiled once a run: zeros cost nothing, and a Python loop over
plain floats is an order of magnitude faster than arrays of length two.
"""

from __future__ import annotations

import math
from dataclasses import fields, is_dataclass, replace
from typing import Any

import numpy as np

from lagscape.engine.disturbance import integral_on
from lagscape.engine.run import Run
from lagscape.engine.trace import Trace, find_silences
from lagscape.loops.protocol import Array

__all__ = ["MOST_STEPS", "runge_kutta", "stage_signals", "step_for"]

MOST_STEPS = 2_000_000
"""A run with more steps than this is refused with a status: a minute of computing in a browser."""

_STABLE_PRODUCT = 2.0
"""RK4 is stable on the negative real axis to 2.78; a little is kept for the growth between the steps looked at."""


def step_for(run: Run, wanted: float) -> float:
    """The largest step at most `wanted` (s) that divides the shortest delay, and is not above it."""
    shortest = run.form.delays[0]
    return shortest / max(1, math.ceil(shortest / wanted - 1e-9))


def runge_kutta(run: Run, times: Array, step: float, *, error_estimate: float | None = None) -> Trace:
    """One run with steps of `step` s, at most the shortest delay; evaluated at `times`, shape (n,), by the Hermite cubics.

    Disturbances that jump inside a step enter by their mean over it, which costs second order there; put jumps on the grid when it
    matters. `error_estimate` None computes the run at twice the step too and takes half the difference (at half the step, and the
    whole of it, where a delay forbids the longer one). That is an upper estimate: the order is 4, and 1.5 or more beside a cut-off.
    """
    count = max(1, math.ceil(run.duration / step - 1e-9))
    if count > MOST_STEPS:
        empty = np.empty((0, len(run.initial)))
        return Trace(np.empty(0), empty, np.empty(0), run.form.state_names, "too_many_steps", math.inf, (), "Runge-Kutta")
    states, starts, ends = _integrate(run, step, count)
    finite = int(np.argmin(np.isfinite(states).all(axis=1))) if not np.isfinite(states).all() else len(states)
    status = "completed" if finite == len(states) else "diverged"
    kept = times if finite == len(states) else times[times <= (finite - 1) * step]
    with np.errstate(over="ignore", invalid="ignore"):
        values = _hermite(states, starts, ends, step, kept)
        sensed = _sensed(run, states, starts, ends, step, kept)
    inside = np.isfinite(values).all(axis=1) & np.isfinite(sensed).all(axis=0)
    kept, values, sensed = kept[inside], values[inside], sensed[:, inside]
    output = run.controlled(sensed, values[:, run.form.n_plant :].T, kept)
    level = run.silence_level(sensed, values[:, run.form.n_plant :].T, kept, output)
    if error_estimate is None:
        error_estimate = _coarse_difference(run, step, kept, values)
    return Trace(kept, values, output, run.form.state_names, status, error_estimate, find_silences(kept, level), "Runge-Kutta")


def _coarse_difference(run: Run, step: float, times: Array, values: Array) -> float:
    longer = 2.0 * step <= run.form.delays[0] * (1.0 + 1e-9)
    coarse = runge_kutta(run, times, 2.0 * step if longer else 0.5 * step, error_estimate=0.0)
    common = min(len(coarse.times), len(values))
    if common == 0:
        return math.inf
    size = np.maximum(np.abs(values[:common]).max(axis=0), 1e-300)
    return float((np.abs(values[:common] - coarse.states[:common]).max(axis=0) / size).max()) * (0.5 if longer else 1.0)


def _hermite(states: Array, starts: Array, ends: Array, step: float, times: Array) -> Array:
    """States at these times (s, >= 0), shape (n_times, n_states)."""
    cell = np.clip(np.floor(times / step + 1e-9).astype(int), 0, len(starts) - 1)
    s = (times / step - cell)[:, None]
    rise = states[cell + 1] - states[cell]
    bend = s * (1.0 - s)
    return states[cell] + s * rise + bend * ((1.0 - s) * (step * starts[cell] - rise) - s * (step * ends[cell] - rise))


def _sensed(run: Run, states: Array, starts: Array, ends: Array, step: float, times: Array) -> Array:
    form = run.form
    rows = []
    for row, delay in zip(form.sensed_rows, form.sensed_delays, strict=True):
        back = times - float(delay)
        past = _hermite(states, starts, ends, step, np.maximum(back, 0.0))[:, : form.n_plant] @ row
        rows.append(np.where(back <= 0.0, float(run.initial[: form.n_plant] @ row), past))
    return np.array(rows)


def stage_signals(run: Run, step: float, count: int) -> dict[str, Array]:
    """Every disturbance signal at the three stage times of every step, shape (count, 3); means where it jumps inside a step."""
    form = run.form
    edges = step * np.arange(count + 1)
    # A disturbance is smooth inside a step unless a break lies well inside it.
    inside = run.breaks / step
    inside = inside[np.abs(inside - np.round(inside)) > 1e-6]
    jumped = np.unique(np.floor(inside).astype(int))
    jumped = jumped[jumped < count]
    nudge = 1e-7 * step
    stages = np.stack([edges[:-1] + nudge, edges[:-1] + 0.5 * step, edges[1:] - nudge], axis=1)
    signals: dict[str, Array] = {}
    for name in run.used_channels:
        pieces = [item for item in run.disturbances if item.channel == name]
        values = sum((item.value(stages) for item in pieces), np.zeros_like(stages))
        if jumped.size:
            gained = integral_on(pieces, name, edges[jumped + 1]) - integral_on(pieces, name, edges[jumped])
            values[jumped] = (gained / step)[:, None]
        channel = form.channels[name]
        weights: list[tuple[str, Any]] = [("push", channel.drive), ("out", channel.output)]
        for i in range(form.n_plant):
            weights.append((f"p{i}", 0.0 if channel.plant is None else channel.plant[i]))
            weights.append((f"q{i}", 0.0 if channel.plant_by_output is None else channel.plant_by_output[i]))
        for key, weight in weights:
            if weight:
                signals[key] = signals.get(key, 0.0) + float(weight) * values
    return signals


def _integrate(run: Run, step: float, count: int) -> tuple[Array, Array, Array]:
    """States at the grid, shape (count + 1, n), and each cell's start and end derivatives, shape (count, n)."""
    signals = stage_signals(run, step, count)
    source = _loop_source(run, step, sorted(signals))
    space: dict[str, Any] = {"drive": _in_plain_floats(run.form.drive).scalar}
    exec(compile(source, "<runge-kutta loop>", "exec"), space)  # our own text, made of numbers alone
    try:
        flat = space["integrate"](run.initial.tolist(), count, [signals[key].tolist() for key in sorted(signals)])
    except OverflowError:
        # A diverging loop leaves the floats before the numbers become infinite: report it as such from the first step on.
        flat = [[math.nan] * (count + 1)] * len(run.initial) + [[math.nan] * count] * (2 * len(run.initial))
        for i, value in enumerate(run.initial.tolist()):
            flat[i] = [value] + [math.nan] * count
    n = len(run.initial)
    return np.array(flat[:n]).T, np.array(flat[n : 2 * n]).T, np.array(flat[2 * n :]).T


def _in_plain_floats(drive: Any) -> Any:
    """The same drive with numpy scalars turned into floats, which Python multiplies several times faster."""
    if not is_dataclass(drive):
        return drive
    numbers = {item.name: getattr(drive, item.name) for item in fields(drive)}
    plain = {name: float(np.asarray(value)) for name, value in numbers.items() if isinstance(value, np.ndarray | np.generic)}
    return replace(drive, **plain) if plain else drive  # type: ignore[type-var]


def _sum(terms: list[str]) -> str:
    return " + ".join(terms) if terms else "0.0"


def _linear(matrix: Array, names: list[str], row: int) -> list[str]:
    return [f"{float(matrix[row, j])!r} * {name}" for j, name in enumerate(names) if matrix[row, j] != 0.0]


def _derivative_lines(run: Run, names: list[str], sensed: list[str], stage: int, keys: list[str], into: str) -> list[str]:
    """Statements that set `into`0.. to the derivatives at one stage."""
    form = run.form
    plant, control = names[: form.n_plant], names[form.n_plant :]
    signal = {key: f"{key}_{stage}" for key in keys}
    arguments = f"({''.join(name + ', ' for name in sensed)}), ({''.join(name + ', ' for name in control)}), "
    lines = [f"v = drive({arguments}{signal.get('push', '0.0')}){' + ' + signal['out'] if 'out' in signal else ''}"]
    if keys and math.isfinite(run.floor):
        lines.append(f"if v < {run.floor!r}: v = {run.floor!r}")
    for i in range(form.n_plant):
        by_output = _linear(form.plant_by_output, plant, i)
        if form.input_vector[i] != 0.0:
            by_output.append(repr(float(form.input_vector[i])))
        if f"q{i}" in signal:
            by_output.append(signal[f"q{i}"])
        terms = _linear(form.plant, plant, i)
        if by_output:
            terms.append(f"v * ({_sum(by_output)})")
        if form.constant[i] != 0.0:
            terms.append(repr(float(form.constant[i])))
        if f"p{i}" in signal:
            terms.append(signal[f"p{i}"])
        lines.append(f"{into}{i} = {_sum(terms)}")
    for i in range(form.n_control):
        terms = _linear(form.control, control, i) + _linear(form.control_by_sensed, sensed, i)
        if form.control_constant[i] != 0.0:
            terms.append(repr(float(form.control_constant[i])))
        lines.append(f"{into}{form.n_plant + i} = {_sum(terms)}")
    return lines


def _lookup_lines(run: Run, step: float, j: int, shift: float, into: str) -> list[str]:
    """Statements that set `into` to sensed signal j at (n + shift) steps: constant Hermite weights, one cell."""
    form = run.form
    row = form.sensed_rows[j]
    position = shift - float(form.sensed_delays[j]) / step
    cell = math.floor(position + 1e-9)
    s = max(position - cell, 0.0)
    if s < 1e-9:
        s = 0.0
    start = float(run.initial[: form.n_plant] @ row)
    used = [i for i in range(form.n_plant) if row[i] != 0.0]
    weights = ((1 + 2 * s) * (1 - s) ** 2, s * s * (3 - 2 * s), step * s * (1 - s) ** 2, -step * s * s * (1 - s))

    def mixed(prefix: str, index: str, weight: float) -> list[str]:
        return [f"{weight * float(row[i])!r} * {prefix}{i}[{index}]" for i in used] if weight != 0.0 else []

    at = f"n + {cell}" if cell >= 0 else f"n - {-cell}"
    following = f"n + {cell + 1}" if cell + 1 >= 0 else f"n - {-cell - 1}"
    terms = mixed("X", at, weights[0]) + mixed("X", following, weights[1]) + mixed("S", at, weights[2]) + mixed("E", at, weights[3])
    if cell >= 0:
        return [f"{into} = {_sum(terms)}"]
    return [f"{into} = {_sum(terms)} if n >= {-cell} else {start!r}"]


def _loop_source(run: Run, step: float, keys: list[str]) -> str:
    """The source text of `integrate(initial, count, signals)`, written out for this run's matrices."""
    n = len(run.initial)
    form = run.form
    base = [f"x{i}" for i in range(n)]
    moved = [f"z{i}" for i in range(n)]
    body: list[str] = []
    for index, key in enumerate(keys):
        body.append(f"{key}_0, {key}_1, {key}_2 = U{index}[n]")
    for j in range(form.n_sensed):
        body += _lookup_lines(run, step, j, 0.5, f"m{j}") + _lookup_lines(run, step, j, 1.0, f"e{j}")
    first, middle, last = ([f"{letter}{j}" for j in range(form.n_sensed)] for letter in "yme")
    at_start = _derivative_lines(run, base, first, 0, keys, "a")
    body += at_start if keys else []
    body += [f"z{i} = x{i} + {step / 2!r} * a{i}" for i in range(n)]
    body += _derivative_lines(run, moved, middle, 1, keys, "b")
    body += [f"z{i} = x{i} + {step / 2!r} * b{i}" for i in range(n)]
    body += _derivative_lines(run, moved, middle, 1, keys, "c")
    body += [f"z{i} = x{i} + {step!r} * c{i}" for i in range(n)]
    body += _derivative_lines(run, moved, last, 2, keys, "d")
    body += [f"x{i} += {step / 6!r} * (a{i} + 2.0 * (b{i} + c{i}) + d{i})" for i in range(n)]
    # The end derivative belongs to the new state, seen from the left; without a disturbance it is the next start derivative.
    body += _derivative_lines(run, base, last, 2, keys, "d")
    for i in range(n):
        body += [f"X{i}.append(x{i})", f"S{i}.append(a{i})", f"E{i}.append(d{i})"]
    body += [f"y{j} = e{j}" for j in range(form.n_sensed)] if keys else [f"a{i} = d{i}" for i in range(n)]
    head = [f"{', '.join(base)}, = initial"]
    head += [f"X{i}, S{i}, E{i} = [x{i}], [], []" for i in range(n)]
    head += [f"y{j} = {float(run.initial[: form.n_plant] @ form.sensed_rows[j])!r}" for j in range(form.n_sensed)]
    head += [] if keys else at_start
    head += [f"U{index} = signals[{index}]" for index in range(len(keys))]
    lists = [f"{letter}{i}" for letter in "XSE" for i in range(n)]
    lines = ["def integrate(initial, count, signals):", *("    " + line for line in head), "    for n in range(count):"]
    lines += ["        " + line for line in body] + [f"    return [{', '.join(lists)}]", ""]
    return "\n".join(lines)
