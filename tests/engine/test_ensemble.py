"""Ensembles against single runs by other methods, and cycles against harmonic balance."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from lagscape.engine.disturbance import pulse, step
from lagscape.engine.ensemble import ensemble
from lagscape.engine.exact_path import exact_path
from lagscape.engine.runge_kutta import runge_kutta
from lagscape.errors import InvalidInputError
from support.study_loops import apnoeic, clipping, damped, difference, limb, plain, run_of

DELAYS = np.array([12.0, 9.3, 3.7])
LONGER = np.array([17.0, 30.1, 3.7])


def _batch(make, **numbers):  # type: ignore[no-untyped-def]
    loop = make(peripheral_delay_s=DELAYS, central_delay_s=LONGER, **numbers)
    return loop.form(), loop.rest()


@pytest.mark.parametrize(("make", "tolerance"), [(damped, 1e-5), (clipping, 1.5e-3)])
def test_each_member_is_its_own_run(make, tolerance: float) -> None:  # type: ignore[no-untyped-def]
    # Oracle: the exact path, one loop at a time. Tolerances: where a delay is no whole number of steps, the image of the corner at
    # t = 0 falls inside a step and costs second order there, 4e-6 at half a second; cut-offs cap the order near 1.5 to 2.
    trace = ensemble(*_batch(make), duration=200.0, step=0.5, offset=2.0)
    for member, (peripheral, central) in enumerate(zip(DELAYS, LONGER, strict=True)):
        run = run_of(make(peripheral_delay_s=float(peripheral), central_delay_s=float(central)), 200.0, 2.0)
        exact = exact_path(run, trace.times, 0.3)
        size = np.abs(exact.states).max(axis=0)
        assert (np.abs(trace.states[:, :, member] - exact.states).max(axis=0) / size).max() < tolerance


def test_the_order_is_four_where_nothing_is_cut_off() -> None:
    run = run_of(damped(), 120.0, 2.0)
    errors = []
    for size in (2.0, 1.0, 0.5):
        loop = damped(peripheral_delay_s=np.array([12.0, 12.0]))
        trace = ensemble(loop.form(), loop.rest(), duration=120.0, step=size, offset=2.0)
        exact = exact_path(run, trace.times, 0.3)
        errors.append(float(np.abs(trace.states[:, 0, 0] - exact.states[:, 0]).max()))
    orders = [math.log2(a / b) for a, b in itertools.pairwise(errors)]
    assert all(3.4 < order < 7.0 for order in orders), errors


def test_plain_and_limb_members_agree_with_plain_steps() -> None:
    # Oracle: the scalar Runge-Kutta loop at the same step; they share the order, not the arithmetic. Tolerance: the order's error.
    loop = plain(exponent=np.array([3.0, 5.0]), delay_s=np.array([10.0, 7.3]))
    trace = ensemble(loop.form(), loop.rest(), duration=100.0, step=0.1, offset=0.1)
    oracle = runge_kutta(run_of(plain(exponent=5.0, delay_s=7.3), 100.0, 0.1), trace.times, 0.1, error_estimate=0.0)
    assert np.abs(trace.states[:, 0, 1] - oracle.states[:, 0]).max() < 1e-5
    gains = np.array([40.0, 80.0])
    batch = limb(reflex_gain_per_rad=gains)
    trace = ensemble(batch.form(), batch.rest(), duration=1.0, step=0.001, offset=[0.05, 0.0, 0.0, 0.0])
    single = runge_kutta(run_of(limb(), 1.0, np.array([0.05, 0, 0, 0])), trace.times, 0.001, error_estimate=0.0)
    assert difference(type(single)(**{**single.__dict__, "states": trace.states[:, :, 1]}), single) < 1e-5


def test_disturbances_reach_every_member() -> None:
    # Oracle: the exact path; every jump on a step's end, its image under 9.3 s inside one: second order, 4e-4 mmHg at this step.
    pushes = (pulse("sigh", 10.0, 3.0, 20.0), step("arousal", 30.0, -1.0))
    trace = ensemble(*_batch(damped), duration=80.0, step=0.25, disturbances=pushes)
    run = run_of(damped(peripheral_delay_s=float(DELAYS[1]), central_delay_s=float(LONGER[1])), 80.0, 0.0, pushes)
    exact = exact_path(run, trace.times, 0.3)
    assert np.abs(trace.states[:, 0, 1] - exact.states[:, 0]).max() < 1e-3
    np.testing.assert_allclose(trace.output[1:, 1], exact.output[1:], atol=1e-3)
    assert trace.output.min() >= 0.0


def test_the_cycle_is_that_of_harmonic_balance() -> None:
    # Oracle: harmonic balance with 128 harmonics, computed outside this package: peak to peak 12.254597 mmHg, 33.817627 s, silent
    # 0.469392. Tolerance: steps of 0.1 s leave 3e-5 in the swing; the run has settled after 3000 s.
    loop = apnoeic(peripheral_delay_s=np.array([12.0, 12.0]))
    cycles = ensemble(loop.form(), loop.rest(), duration=3000.0, step=0.1, offset=2.0, keep_states=False).cycles(2700.0)
    assert cycles.found.all()
    np.testing.assert_allclose(2.0 * cycles.amplitude, 12.254597, atol=1e-3)
    np.testing.assert_allclose(cycles.cycle_length, 33.817627, atol=1e-3)
    np.testing.assert_allclose(cycles.silent_share, 0.469392, atol=2e-4)
    np.testing.assert_allclose(cycles.swing_ratio, 1.0, atol=1e-4)


def test_two_batch_axes_keep_their_shape_and_a_settled_loop_has_no_cycle() -> None:
    grid = np.zeros((2, 3))
    loop = damped(peripheral_gain_l_min_mmhg=np.array([[0.05], [3.0]]) + grid, peripheral_delay_s=np.array([[6.0, 12.0, 18.0]]) + grid)
    cycles = ensemble(loop.form(), loop.rest(), duration=900.0, step=0.5, keep_states=False, disturbances=[pulse("sigh", 0.0, 3.0, 20.0)])
    found = cycles.cycles(600.0)
    assert found.found.shape == found.amplitude.shape == (2, 3)
    assert found.found[1].all() and np.all(found.amplitude[1] > 1.0)
    # The gentle row dies away by more than e-fold a cycle, so within the window nothing above rounding is left to call a cycle.
    assert np.all(found.amplitude[0] < 1e-3)
    assert np.all(np.isfinite(found.cycle_length))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"duration": 0.0, "step": 1.0}, "duration must be finite and positive"),
        ({"duration": 10.0, "step": math.nan}, "step must be finite and positive"),
        ({"duration": 1e9, "step": 1.0}, "steps are too many"),
        ({"duration": 10.0, "step": 1.0, "disturbances": [step("cough", 0.0, 1.0)]}, "no channel 'cough'"),
    ],
)
def test_bad_arguments_are_refused(arguments: dict[str, object], message: str) -> None:
    with pytest.raises(InvalidInputError, match=message):
        ensemble(*_batch(damped), **arguments)  # type: ignore[arg-type]
    with pytest.raises(InvalidInputError, match="every delay must be positive"):
        ensemble(plain(delay_s=np.array([1.0, 0.0])).form(), plain().rest(), duration=1.0, step=0.1)
