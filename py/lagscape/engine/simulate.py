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
from lagscape.engine.run import Run
from lagscape.engine.trace import Trace, output_grid
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["simulate"]

Purpose = Literal["drag", "release"]


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
    initial = np.asarray(rest.state, dtype=float) + _offset(form, offset)
    if not np.all(np.isfinite(initial)):
        raise InvalidInputError(f"rest and offset must be finite; got {initial.tolist()}.")
    return Run(form, initial, number, several)


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
    ordered = times.ndim == 1 and times.size > 0 and np.all(np.diff(times) > 0.0)
    if not (ordered and times[0] >= 0.0 and times[-1] <= duration * (1.0 + 1e-12)):
        raise InvalidInputError(f"output_times must ascend from 0 or later to the duration {duration:.6g} s or earlier.")
    return times


def _dispatch(run: Run, times: Array, purpose: str) -> Trace:
    raise NotImplementedError
