"""Native simulation against two general solvers of delay equations, at equal measured error.

ddeint steps from output point to output point in Python; jitcdde writes the equations as C, compiles them (not timed here) and steps
adaptively. Every run's error is its largest distance from a reference over the same output times, as a share of the largest value; the
reference is a plain Runge-Kutta loop at a step so small that it repeats our own exact path to about 1e-7.
"""

from __future__ import annotations

import contextlib
import sys
import tempfile
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter
from typing import Any

import numpy as np

from bench_tasks import P1_START, P2_OFFSET, SPAN, p1, p2, rk4_breathing, rk4_plain
from lagscape.engine.interval_collocation import interval_collocation, mesh_for
from lagscape.engine.run import Run
from lagscape.engine.simulate import fastest_rate, simulate

__all__ = ["Timed", "compare"]

TIMES = np.linspace(0.0, SPAN, 1201)
REFERENCE_STEP = 0.005
"""Where ventilation stops, the reference's own error at this step is about 1e-7: smaller errors than that are not told apart."""
TURNS = 15
PROBLEMS = ("P1", "P2")


@dataclass(frozen=True)
class Timed:
    """One run: who, how set, how long (ms, the smallest of a few), how wrong."""

    problem: str
    solver: str
    setting: str
    milliseconds: float
    error: float


def compare() -> Iterator[Timed | str]:
    """Yields runs as they are done, and sentences where a solver cannot be had."""
    for problem in PROBLEMS:
        reference = _reference(problem)
        for setting, work in _ours(problem):
            yield _timed(problem, "Lagscape", setting, work, reference, TURNS)
        try:
            import ddeint  # noqa: F401
        except ImportError as error:
            yield f"ddeint could not be imported ({error}): {problem} is not compared with it."
        else:
            for step in (0.5, 0.125):
                yield _timed(problem, "ddeint", f"step {step:g}", lambda problem=problem, step=step: _ddeint(problem, step), reference, 1)
        yield from _jitcdde_runs(problem, reference)


def _timed(problem: str, solver: str, setting: str, work: Callable[[], np.ndarray], reference: np.ndarray, turns: int) -> Timed:
    best, values = np.inf, np.empty(0)
    for _ in range(turns):
        begun = perf_counter()
        values = work()
        best = min(best, perf_counter() - begun)
    return Timed(problem, solver, setting, 1e3 * best, float(np.max(np.abs(values - reference)) / np.max(np.abs(reference))))


def _reference(problem: str) -> np.ndarray:
    every = round((TIMES[1] - TIMES[0]) / REFERENCE_STEP)
    values = rk4_plain(step=REFERENCE_STEP) if problem == "P1" else [state[0] for state in rk4_breathing(step=REFERENCE_STEP)]
    return np.array(values)[::every]


def _ours(problem: str) -> Iterator[tuple[str, Callable[[], np.ndarray]]]:
    """Settings and runs of ours. The loop and its matrices are made beforehand, as the other solvers' equations are."""
    loop, offset = (p1(), P1_START - float(p1().rest().state[0])) if problem == "P1" else (p2(), (P2_OFFSET, 0.0, 0.0))
    form, rest = loop.form(), loop.rest()

    def run(purpose: Any) -> np.ndarray:
        return simulate(form, rest=rest, duration=SPAN, offset=offset, purpose=purpose).states[:, 0]

    def finer(pieces: float) -> np.ndarray:
        made = Run(form, rest.state + np.asarray(offset), SPAN, rest=rest.state)
        return interval_collocation(made, TIMES, mesh_for(made, fastest_rate(made), pieces, 5 if problem == "P2" else 12, 0.0)).states[:, 0]

    yield "drag", lambda: run("drag")
    yield "fixed mesh, 2.5 pieces", lambda: finer(2.5)
    yield "fixed mesh, 8 pieces", lambda: finer(8.0)
    yield "release", lambda: run("release")


def _written(problem: str) -> tuple[Any, list[float]]:
    """Rates as a function of state and a delayed look-up of the first state, and the initial state; for either library."""
    if problem == "P1":
        return (lambda y, late, hill, clip: [0.2 - 0.8 * hill(late(10.0)) * y[0]]), [P1_START]
    rest = [float(value) for value in p2().rest().state]
    q, tissue, made = 863.0 * 0.0065 * 5.0 / 180.0, 5.0 / 900.0, 0.2 / 60.0 / (15.0 * 0.0065)

    def rates(y: Any, late: Any, hill: Any, clip: Any) -> list[Any]:
        drive = clip(3.0 * (late(12.0) - 40.0) + (y[2] - 40.0))
        return [q * (y[1] - y[0]) - drive * y[0] / 180.0, made - tissue * (y[1] - y[0]), (late(17.0) - y[2]) / 60.0]

    return rates, [rest[0] + P2_OFFSET, rest[1], rest[2]]


def _hill(u: Any) -> Any:
    return u**8 / (1 + u**8)


def _ddeint(problem: str, step: float) -> np.ndarray:
    from ddeint import ddeint

    rates, start = _written(problem)
    first = np.array(start)
    times = np.linspace(0.0, SPAN, round(SPAN / step) + 1)

    # ddeint wants plain numbers for one equation and arrays for several.
    single = first.size == 1

    def model(y: Any, t: float) -> Any:
        now = np.atleast_1d(y(t))
        found = rates(now, lambda delay: np.atleast_1d(y(t - delay))[0], _hill, lambda v: max(0.0, v))
        return found[0] if single else np.array(found)

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        values = np.asarray(ddeint(model, lambda t: first[0] if single else first, times))
    return values.reshape(times.size, -1)[:: round((TIMES[1] - TIMES[0]) / step), 0]


def _jitcdde_runs(problem: str, reference: np.ndarray) -> Iterator[Timed | str]:
    try:
        compiled = _compiled(problem)
    except Exception as error:  # whatever is missing (the package, a compiler), the rest of the benchmark goes on
        yield f"jitcdde could not be used ({type(error).__name__}: {error}): {problem} is not compared with it."
        return
    for tolerance in (1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9):
        run = _jitcdde_timed(compiled, problem, tolerance, reference)
        if run is not None:
            yield run


def _compiled(problem: str) -> Callable[[], Any]:
    """A maker of a fresh integrator around one compiled module, so that compiling is never in the time."""
    import symengine
    from jitcdde import jitcdde, t, y

    rates, start = _written(problem)
    states = [y(i) for i in range(len(start))]
    written = rates(states, lambda delay: y(0, t - delay), _hill, lambda v: (v + symengine.Abs(v)) / 2)
    longest = 10.0 if problem == "P1" else 17.0
    first = jitcdde(written, max_delay=longest, verbose=False)
    folder = Path(tempfile.mkdtemp())
    # In a folder of its own: the compiler's set-up would read our pyproject.toml as its own.
    with contextlib.chdir(folder), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        first.compile_C()
        saved = str(folder / first.save_compiled(f"bench_{problem.lower()}.so", overwrite=True))

    delays = [0.0, 10.0] if problem == "P1" else [0.0, 12.0, 17.0]

    def fresh() -> Any:
        made = jitcdde(n=len(start), module_location=saved, max_delay=longest, delays=delays, verbose=False)
        made.constant_past(np.array(start), time=0.0)
        return made

    return fresh


def _jitcdde_timed(fresh: Callable[[], Any], problem: str, tolerance: float, reference: np.ndarray) -> Timed | None:
    best, values = np.inf, None
    for _ in range(5):
        integrator = fresh()
        integrator.set_integration_parameters(rtol=tolerance, atol=tolerance, first_step=0.05, min_step=1e-9)
        begun = perf_counter()
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                integrator.step_on_discontinuities(propagations=3)
                begun_at = float(integrator.t)
                found = [integrator.integrate(time)[0] for time in TIMES if time > begun_at]
        except Exception as error:  # a step that shrank under its least size is that solver's own end
            print(f"jitcdde, {problem} at {tolerance:g}: {error}", file=sys.stderr)
            return None
        best, values = min(best, perf_counter() - begun), np.array(found)
    late = reference[begun_at < TIMES]
    error = float(np.max(np.abs(values - late)) / np.max(np.abs(reference)))
    return Timed(problem, "jitcdde", f"tolerance {tolerance:g}", 1e3 * best, error)
