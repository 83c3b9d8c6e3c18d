"""Simulation of any loop: one front over three solvers chosen by the loop's structure and the purpose.

    drag      interval collocation on a fixed mesh: the fastest at an error that a plot does not show (about 3e-4 of each state)
    release   the exact path: every breaking point and every start and end of silence is a mesh point, 1e-6 or better
    either    a plain Runge-Kutta loop where the delays are so short against the run that a step a delay is the better bargain

A delay that changes in time is out of scope: every delay is constant over a run.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any, Literal

import numpy as np

from lagscape.engine.disturbance import Disturbance, check_channels
from lagscape.engine.exact_path import ExactSettings, exact_path
from lagscape.engine.interval_collocation import holds_every_break, interval_collocation, mesh_for
from lagscape.engine.run import Run
from lagscape.engine.runge_kutta import runge_kutta, step_for
from lagscape.engine.trace import Trace, output_grid
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["DRAG_ERROR", "RELEASE_ERROR", "fastest_rate", "simulate"]

Purpose = Literal["drag", "release"]

DRAG_ERROR = 5e-4
"""Above this error estimate a drag trace is refined, then flagged."""
RELEASE_ERROR = 1e-6
"""Above this error estimate a release trace is flagged."""

_ROUGH = ExactSettings(degree=8, highest_order=1, tolerance=1e-4)
"""For a drag with more breaks than a fixed mesh can hold."""

_MOST_REFINEMENTS = 3
_MOST_PIECES = 3000
_MOST_STEPS_DRAG = 1500
_MOST_STEPS_RELEASE = 5000
_FEW_STEPS = 40
_STEP_DRAG = 0.08
_STEP_RELEASE = 0.02
_SHORT_DELAY = 1.2
"""Below this product of delay and rate, plain steps are cheaper than collocation on one piece a delay (measured, breathing)."""


def simulate(
    loop_or_form: Any,
    *,
    duration: float,
    rest: Rest | None = None,
    disturbances: Iterable[Disturbance] | Disturbance = (),
    offset: Any = None,
    purpose: Purpose = "drag",
    output_times: Any = None,
) -> Trace:
    """Run one loop from its rest.

    Parameters
    ----------
    loop_or_form : Loop or DriveForm
        A loop, or its form; a form needs `rest` too. One loop, not a batch.
    duration : float
        s, positive.
    rest : Rest, optional
        The equilibrium, where the history starts. Default: the loop's own.
    disturbances : Disturbance or several
        What pushes the loop; see `lagscape.engine.disturbance`.
    offset : float, sequence of n_states, or mapping of state name to number, optional
        Displacement of the whole history (t <= 0) from the rest, in the states' own units.
    purpose : "drag" or "release"
        Fast to plotting accuracy, or exact breaking points and 1e-6.
    output_times : int or array, optional
        How many equally spaced times from 0 to the duration (default 1201), or the times themselves, ascending within it.

    Returns
    -------
    Trace
        With a status; a run that cannot be computed is a result, not an exception.

    Raises
    ------
    InvalidInputError
        For a bad argument: not finite, wrong shape, an unknown channel or state, a delay that is not positive, a batch.
    """
    run = _checked_run(loop_or_form, duration, rest, disturbances, offset)
    times = _checked_times(run.duration, output_times)
    if purpose not in ("drag", "release"):
        raise InvalidInputError(f"purpose must be 'drag' or 'release'; got {purpose!r}.")
    return _dispatch(run, times, purpose)


def _checked_run(loop_or_form: Any, duration: Any, rest: Any, disturbances: Any, offset: Any) -> Run:
    form = loop_or_form if isinstance(loop_or_form, DriveForm) else loop_or_form.form()
    if rest is None:
        if isinstance(loop_or_form, DriveForm):
            raise InvalidInputError("a form does not know its rest; got rest=None. Give rest=loop.rest().")
        rest = loop_or_form.rest()
    if form.plant.ndim != 2 or np.ndim(rest.state) != 1:
        raise InvalidInputError(f"simulate takes one loop; got a batch of shape {form.plant.shape[2:]}. Use ensemble.")
    number = float(duration)
    if not (math.isfinite(number) and number > 0.0):
        raise InvalidInputError(f"duration must be finite and positive (s); got {duration!r}.")
    for delay in form.sensed_delays:
        if not (math.isfinite(float(delay)) and float(delay) > 0.0):
            raise InvalidInputError(f"every delay must be finite and positive (s); got {float(delay)!r}.")
    several = (disturbances,) if isinstance(disturbances, Disturbance) else tuple(disturbances)
    check_channels(several, form.channels)
    state = np.asarray(rest.state, dtype=float)
    initial = state + _offset(form, offset)
    if not np.all(np.isfinite(initial)):
        raise InvalidInputError(f"rest and offset must be finite; got {initial.tolist()}.")
    return Run(form, initial, number, several, state)


def _offset(form: DriveForm, offset: Any) -> Array:
    names = form.state_names
    if offset is None:
        return np.zeros(len(names))
    if isinstance(offset, Mapping):
        unknown = [name for name in offset if name not in names]
        if unknown:
            raise InvalidInputError(f"no state {unknown[0]!r}; the loop has: {', '.join(map(repr, names))}.")
        return np.array([float(offset.get(name, 0.0)) for name in names])
    values = np.asarray(offset, dtype=float)
    if values.shape not in ((), (len(names),)):
        raise InvalidInputError(f"offset must be one number or one a state ({len(names)}); got shape {values.shape}.")
    return np.broadcast_to(values, (len(names),))


def _checked_times(duration: float, output_times: Any) -> Array:
    if output_times is not None and np.ndim(output_times) == 0 and not 2 <= int(output_times) <= 10_000_000:
        raise InvalidInputError(f"output_times must be 2 or more points; got {output_times!r}.")
    times = output_grid(duration, output_times)
    if output_times is None:
        return times
    ordered = times.ndim == 1 and times.size > 0 and np.all(np.diff(times) > 0.0)
    if not (ordered and times[0] >= 0.0 and times[-1] <= duration * (1.0 + 1e-12)):
        raise InvalidInputError(f"output_times must ascend from 0 or later to the duration {duration:.6g} s or earlier.")
    return times


def _dispatch(run: Run, times: Array, purpose: str) -> Trace:
    rate, start = fastest_rate(run), _first_move(run)
    steps = run.duration / run.form.delays[0]
    if purpose == "release":
        if not run.form.drive.has_kink and steps <= _MOST_STEPS_RELEASE:
            # Without a cut-off everything is smooth between the breaks, and the fixed mesh converges spectrally.
            trace = _on_a_fixed_mesh(run, times, rate, start, 16, 1.0, RELEASE_ERROR / 2.0)
            if trace is not None and trace.status == "completed":
                return trace
        if steps <= _MOST_STEPS_RELEASE:
            trace = exact_path(run, times, rate, start)
            return trace if trace.error_estimate <= RELEASE_ERROR else _flagged(trace)
        return _by_steps(run, times, _STEP_RELEASE / rate, RELEASE_ERROR)
    bilinear = run.form.n_plant > 1 and bool(np.any(run.form.plant_by_output))
    short = run.form.delays[0] * rate < _SHORT_DELAY if bilinear else steps > _MOST_STEPS_DRAG
    if short and steps > _FEW_STEPS:
        trace = _by_steps(run, times, _STEP_DRAG / rate, DRAG_ERROR)
        # Explicit steps leave the finite numbers where the loop is stiff; collocation does not.
        if trace.status != "diverged" or steps > _MOST_STEPS_RELEASE:
            return trace
    degree, pieces = (8, 1.25) if run.form.drive.has_kink else (12, 1.0)
    trace = _on_a_fixed_mesh(run, times, rate, start, degree, pieces, DRAG_ERROR)
    return trace if trace is not None else exact_path(run, times, rate, start, _ROUGH)


def _on_a_fixed_mesh(run: Run, times: Array, rate: float, start: float, degree: int, pieces: float, promised: float) -> Trace | None:
    """Interval collocation, with more pieces where the estimate asks for it; None where the mesh cannot hold every break."""
    for _ in range(_MOST_REFINEMENTS):
        mesh = mesh_for(run, rate, pieces, degree, start)
        if not holds_every_break(run, mesh):
            return None
        trace = interval_collocation(run, times, mesh)
        total = len(mesh.edges) * run.duration / mesh.step
        if trace.status != "completed" or trace.error_estimate <= promised or total > _MOST_PIECES:
            return trace if trace.error_estimate <= promised else _flagged(trace)
        pieces *= 2.0
    return _flagged(trace)


def _by_steps(run: Run, times: Array, step: float, promised: float) -> Trace:
    trace = runge_kutta(run, times, step_for(run, step))
    return trace if trace.error_estimate <= promised else _flagged(trace)


def _flagged(trace: Trace) -> Trace:
    return trace.with_status("low_accuracy") if trace.status == "completed" else trace


def fastest_rate(run: Run) -> float:
    """The largest absolute eigenvalue of the plant, at the start's and the rest's output, and of the controller, 1/s.

    At least one over the run; at most `_MOST_PIECES` over the run, because collocation is stable without resolving what is faster.
    """
    form, n = run.form, run.form.n_plant
    rates = []
    for state in (run.initial, run.initial if run.rest is None else run.rest):
        output = float(form.drive.value(form.sensed_rows @ state[:n], state[n:], 0.0))
        rates.append(_spectral_radius(form.plant + output * form.plant_by_output))
    if form.n_control:
        rates.append(_spectral_radius(form.control))
    return float(min(max(*rates, 1.0 / run.duration), _MOST_PIECES / run.duration))


def _spectral_radius(matrix: Array) -> float:
    """The largest absolute eigenvalue; closed forms for one and two states, where LAPACK's call costs more than the arithmetic."""
    if matrix.shape == (1, 1):
        return abs(float(matrix[0, 0]))
    if matrix.shape == (2, 2):
        (a, b), (c, d) = matrix.tolist()
        middle, determinant = 0.5 * (a + d), a * d - b * c
        spread = 0.25 * (a - d) * (a - d) + b * c
        return abs(middle) + math.sqrt(spread) if spread >= 0.0 else math.sqrt(determinant)
    return float(np.abs(np.linalg.eigvals(matrix)).max())


def _first_move(run: Run) -> float:
    """The time before which nothing happens: the first break, if the run starts from a true rest; else 0."""
    form, n = run.form, run.form.n_plant
    if not run.breaks.size:
        return 0.0
    slope = form.rhs(run.initial, form.sensed_rows @ run.initial[:n])
    size = np.maximum(np.abs(run.initial), 1e-300)
    rests = np.all(np.abs(slope) * run.duration <= 1e-9 * size) or not np.any(slope)
    return float(run.breaks[0]) if rests else 0.0
