"""Each solver alone: closed forms, measured orders, a general-purpose integrator, and what each feature is worth."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from lagscape.engine import interval_collocation as collocation
from lagscape.engine.disturbance import pulse
from lagscape.engine.exact_path import ExactSettings, exact_path
from lagscape.engine.interval_collocation import holds_every_break, interval_collocation, mesh_for
from lagscape.engine.plant_steps import plant_step
from lagscape.engine.run import Run
from lagscape.engine.runge_kutta import runge_kutta, step_for
from lagscape.engine.trace import Trace
from support.linear_loop import linear_form
from support.study_loops import apnoeic, clipping, damped, difference, limb, plain, run_of

PLAIN_OFFSET = np.array([0.5]) - plain().rest().state

SOLVERS: dict[str, Callable[[Run, Any], Trace]] = {
    "steps": lambda run, times: runge_kutta(run, times, step_for(run, 0.005), error_estimate=0.0),
    "fixed mesh": lambda run, times: interval_collocation(run, times, mesh_for(run, 1.0, 1.0, 8, 0.0)),
    "exact path": lambda run, times: exact_path(run, times, 1.0),
}


@pytest.mark.parametrize("name", SOLVERS)
def test_the_method_of_steps_polynomial(name: str) -> None:
    # Oracle: x' = -x(t - 1) with history 1, by hand: x(1) = 0, x(3/2) = -3/8, x(2) = -1/2, x(3) = -1/6, x(4) = 5/24, x(5) = 19/120.
    # Tolerance: degree five is exact for the collocations; plain steps are exact to degree three, then of order 4 at 0.005: 1e-11.
    run = Run(linear_form(0.0, 1.0, 1.0), np.ones(1), 5.0)
    trace = SOLVERS[name](run, np.array([1.0, 1.5, 2.0, 3.0, 4.0, 5.0]))
    np.testing.assert_allclose(trace.states[:, 0], [0.0, -3 / 8, -1 / 2, -1 / 6, 5 / 24, 19 / 120], atol=1e-10 if name == "steps" else 1e-13)


def test_a_general_integrator_by_the_method_of_steps_agrees() -> None:
    # Oracle: scipy's DOP853, restarted at every delay, with its own dense output as the past. Tolerance: its 1e-10 per delay, grown
    # over ten delays of a relaxation cycle, against 1e-7 of the exact path.
    loop = plain()
    run = run_of(loop, 100.0, PLAIN_OFFSET)
    pieces: list[Any] = []

    def past(t: float) -> float:
        return 0.5 if t <= 0.0 else float(pieces[min(int(t // 10.0), len(pieces) - 1)](t)[0])

    def slope(t: float, x: Any) -> Any:
        u = past(t - 10.0) ** loop.exponent
        return loop.production_per_s - loop.largest_clearance_per_s * u / (1.0 + u) * x

    x = np.array([0.5])
    for k in range(10):
        solution = solve_ivp(slope, (10.0 * k, 10.0 * (k + 1)), x, method="DOP853", rtol=1e-11, atol=1e-13, dense_output=True)
        pieces.append(solution.sol)
        x = solution.y[:, -1]
    times = np.linspace(0.0, 99.9, 400)
    oracle = np.array([pieces[int(t // 10.0)](t)[0] for t in times])
    for trace in (exact_path(run, times, 0.3), interval_collocation(run, times, mesh_for(run, 0.8, 1.0, 16, 0.0))):
        np.testing.assert_allclose(trace.states[:, 0], oracle, rtol=2e-7)


def _orders(errors: list[float]) -> list[float]:
    return [math.log2(a / b) for a, b in itertools.pairwise(errors)]


@pytest.mark.parametrize(("loop", "duration", "offset", "parts"), [(damped(), 120.0, 2.0, 12), (limb(), 1.0, np.array([0.05, 0, 0, 0]), 12)])
def test_plain_steps_are_of_order_four_where_nothing_is_cut_off(loop: Any, duration: float, offset: Any, parts: int) -> None:
    # Oracle: the exact path at a tight tolerance. A shared start and end derivative at t = 0 would give order two.
    run = run_of(loop, duration, offset)
    times = np.linspace(0.0, duration, 101)
    reference = exact_path(run, times, 30.0 / run.form.delays[0], settings=ExactSettings(degree=16, tolerance=1e-13, highest_order=4))
    errors = [difference(runge_kutta(run, times, run.form.delays[0] / (parts * 2**i), error_estimate=0.0), reference) for i in range(3)]
    assert all(3.6 < order < 5.0 for order in _orders(errors)), errors


@pytest.mark.parametrize("degree", [4, 6])
def test_the_fixed_mesh_converges_at_its_order(degree: int) -> None:
    # Oracle: the same solver at degree 16. n nodes give at least order n between the nodes when pieces are halved.
    run = run_of(plain(exponent=3.0), 60.0, PLAIN_OFFSET)
    times = np.linspace(0.0, 60.0, 241)
    reference = interval_collocation(run, times, mesh_for(run, 0.8, 1.0, 16, 0.0))
    errors = [difference(interval_collocation(run, times, mesh_for(run, 0.4 * 2**i, 1.0, degree, 0.0)), reference) for i in range(4)]
    assert np.mean(_orders(errors)) > degree - 0.5, errors


def test_the_grouped_step_is_the_integrating_factor() -> None:
    # Two methods for one plant. Tolerance: each one's own error at degree 16, 1e-9.
    run = run_of(plain(), 100.0, PLAIN_OFFSET)
    times = np.linspace(0.0, 100.0, 301)
    mesh = mesh_for(run, 0.8, 1.0, 16, 0.0)
    scalar, grouped = interval_collocation(run, times, mesh), interval_collocation(run, times, mesh, stiff=True)
    assert type(plant_step(run.form, np.ones((1, 1)), np.ones(1), 4)) is not type(plant_step(run.form, np.ones((1, 1)), np.ones(1), 4, True))
    assert 0.0 < difference(scalar, grouped) < 1e-7


def test_folded_breaks_are_worth_it() -> None:
    # Oracle: the exact path. The same number of pieces without the pulse's ends on piece ends must be worse by far.
    disturbance = pulse("sigh", 20.3, 3.1, 20.0)
    run = run_of(damped(), 120.0, 0.0, [disturbance])
    times = np.linspace(0.0, 120.0, 481)
    exact = exact_path(run, times, 0.3, 20.3)
    held = mesh_for(run, 0.3, 1.25, 8, 20.3)
    edges = np.linspace(0.0, held.step, len(held.edges))
    loose = collocation.FixedMesh(20.3, held.step, edges, 8)
    assert holds_every_break(run, held) and not holds_every_break(run, loose)
    good, bad = (difference(interval_collocation(run, times, mesh), exact) for mesh in (held, loose))
    # What is left with the ends held is the image of the pulse under the other delay twice over, which is smoother.
    assert good < 1e-5 < 1e-4 < bad


def test_dense_samples_of_a_cut_off_are_worth_it(monkeypatch: pytest.MonkeyPatch) -> None:
    # Oracle: the exact path. Taking the corner at the nodes alone is several times worse than projecting it.
    run = run_of(apnoeic(), 300.0, 2.0)
    times = np.linspace(0.0, 300.0, 601)
    exact = exact_path(run, times, 0.3)
    mesh = mesh_for(run, 0.3, 1.25, 8, 0.0)
    projected = difference(interval_collocation(run, times, mesh), exact)
    monkeypatch.setattr(collocation, "_OVERSAMPLES", 8)
    assert difference(interval_collocation(run, times, mesh), exact) > 2.0 * projected


# Long pieces and no splitting for accuracy, so that only the feature under test decides.
BARE = {"tolerance": math.inf, "piece": 1.5, "degree": 10}


@pytest.mark.parametrize("loop", [damped(), apnoeic()], ids=["damped", "apnoeic"])
def test_breaking_points_are_worth_it(loop: Any) -> None:
    # Oracle: plain steps of 1/80 s, good to 1e-6 here.
    run = run_of(loop, 120.0, 0.0, [pulse("sigh", 1.0, 2.3, 20.0)])
    times = np.linspace(0.0, 120.0, 481)
    oracle = runge_kutta(run, times, 0.0125, error_estimate=0.0)
    errors = [difference(exact_path(run, times, 0.3, settings=ExactSettings(highest_order=k, **BARE)), oracle) for k in (0, 1, 3)]
    assert errors[2] < 5e-6
    assert errors[0] > 100.0 * errors[2] and errors[0] > 3.0 * errors[1], errors


def test_locating_the_cut_off_is_worth_it() -> None:
    # Oracle: the exact path at its tightest; both runs without splitting for accuracy.
    run = run_of(apnoeic(), 200.0, 2.0)
    times = np.linspace(0.0, 200.0, 401)
    reference = exact_path(run, times, 0.3, settings=ExactSettings(degree=16, tolerance=1e-12, highest_order=4))
    located, blind = (
        difference(exact_path(run, times, 0.3, settings=ExactSettings(locate_kinks=locate, **BARE)), reference) for locate in (True, False)
    )
    assert located < 1e-6
    assert blind > 100.0 * located


def _grazing_run(depth: float) -> Run:
    """A damped loop whose drive just touches zero once: the arousal pushes it down by a little more than it has."""
    loop = damped()
    lowest = float(exact_path(run_of(loop, 60.0, 0.0, [pulse("sigh", 1.0, 3.0, 25.0)]), np.linspace(0.0, 60.0, 24001), 0.3).output.min())
    push = pulse("arousal", 0.0, 60.0, -(lowest + depth))
    return run_of(loop, 60.0, 0.0, [pulse("sigh", 1.0, 3.0, 25.0), push])


@pytest.mark.parametrize("depth", [1e-2, 1e-3, -1e-3])
def test_a_grazing_silence(depth: float) -> None:
    # Oracle: plain steps of 2.5 ms, whose silence is read on a grid of the same. A dip of depth d and curvature k lasts sqrt(8 d / k).
    run = _grazing_run(depth)
    times = np.linspace(0.0, 60.0, 24001)
    exact = exact_path(run, times, 0.3)
    oracle = runge_kutta(run, times, 0.0025, error_estimate=0.0)
    assert difference(exact, oracle) < 1e-6
    assert len(exact.silences) == len(oracle.silences)
    for mine, theirs in zip(exact.silences, oracle.silences, strict=True):
        np.testing.assert_allclose(mine, theirs, atol=0.01)


def test_the_ends_of_silence_are_roots_of_the_drive() -> None:
    # Oracle: the drive itself, evaluated at the reported ends from the trace. Tolerance: 1e-6 of the output's size.
    run = run_of(apnoeic(), 200.0, 2.0)
    first = exact_path(run, np.array([0.0, 200.0]), 0.3)
    ends = np.array([time for silence in first.silences for time in silence if 20.0 < time < 199.0])
    past = [exact_path(run, ends - delay, 0.3).states[:, 0] for delay in (12.0,)]
    control = exact_path(run, ends, 0.3).states[:, 2]
    switch = run.form.drive.switch(np.array([past[0], past[0]]), control[None])
    assert ends.size > 8
    assert np.abs(switch).max() < 1e-5


def test_too_many_steps_is_a_status() -> None:
    trace = runge_kutta(run_of(plain(), 1e9, 0.1), np.linspace(0.0, 1e9, 5), 0.01)
    assert (trace.status, trace.times.size) == ("too_many_steps", 0)


def test_a_jump_inside_a_step_enters_by_its_mean() -> None:
    # Oracle: the exact path. Tolerance: second order in the step beside the jump, 1e-3 of the swing at half a second.
    run = run_of(damped(), 60.0, 0.0, [pulse("sigh", 5.123, 2.345, 20.0)])
    times = np.linspace(0.0, 60.0, 121)
    exact = exact_path(run, times, 0.3)
    errors = [difference(runge_kutta(run, times, step, error_estimate=0.0), exact) for step in (0.5, 0.125)]
    assert errors[0] < 2e-3 and errors[1] < errors[0] / 4.0


def test_the_estimate_of_plain_steps_bounds_their_error() -> None:
    run = run_of(clipping(), 200.0, 2.0)
    times = np.linspace(0.0, 200.0, 401)
    trace = runge_kutta(run, times, 0.5)
    assert difference(trace, exact_path(run, times, 0.3)) < trace.error_estimate < 0.05


def test_the_exact_path_keeps_its_promise_and_knows_its_error_on_random_hunting_loops() -> None:
    # Oracle: plain Runge-Kutta steps, which share no code with it; where ventilation stops their own error is a few 1e-7 at 1/200 of a
    # delay (pitfall 3 of clipped runs), so a promise of 1e-6 can be told and no more. The same path with much finer settings tells the
    # rest: the estimate is local, and on such loops the true error is within twenty times of it, or rounding.
    rng = np.random.default_rng(2)
    silent = 0
    for _ in range(8):
        base = apnoeic()
        loop = base.with_sensitivity(base.sensitivity * float(np.exp(0.4 * rng.standard_normal()))).with_delay(float(rng.uniform(7.0, 20.0)))
        run = run_of(loop, 240.0, 2.0)
        times = np.linspace(0.0, 240.0, 481)
        found = exact_path(run, times, 0.25)
        steps = runge_kutta(run, times, step_for(run, 0.025), error_estimate=0.0)
        finer = exact_path(run, times, 0.25, settings=ExactSettings(degree=18, highest_order=6, tolerance=1e-13, piece=0.6))
        silent += len(found.silences) > 3
        assert difference(found, steps) < 2e-6
        assert difference(found, finer) < max(20.0 * found.error_estimate, 1e-11)
        assert difference(found, finer) < 1e-7
    assert silent > 4
