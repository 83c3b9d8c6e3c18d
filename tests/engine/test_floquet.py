"""Multipliers against the normal form near onset, and against the decay of a simulated disturbance."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2, run_breathing, wright
from lagscape.engine.cycle import Cycle, CycleStatus, limit_cycle
from lagscape.engine.floquet import FloquetStatus, floquet_multipliers
from lagscape.engine.onset import onset
from lagscape.engine.roots import rightmost_roots
from lagscape.errors import InvalidInputError
from lagscape.loops.reflex import ReflexLoop


@pytest.mark.parametrize("loop", [p2().with_numbers(drive_shape="sigmoid"), ReflexLoop()])
def test_near_a_soft_onset_the_cycle_attracts_twice_as_fast_as_the_rest_repels(loop):
    # Oracle: normal form r' = s r - l r^3: about the cycle a disturbance dies at the rate 2 s, s the growth rate of the rest.
    # Tolerance: the next order is the relative excess, 1e-3, times a few.
    boundary = onset(loop).sensitivity
    there = loop.with_sensitivity(1.001 * boundary)
    form, rest = there.form(), there.rest()
    cycle = limit_cycle(form, rest)
    found = floquet_multipliers(form, rest, cycle)
    growth = rightmost_roots(form, rest).oscillatory.real
    slow = max(abs(value) for value in found.multipliers if abs(value - math.exp(-2.0 * growth * cycle.period_s)) < 0.01)
    assert abs(math.log(slow) / (-2.0 * growth * cycle.period_s) - 1.0) < 0.02
    assert found.attracts


def test_wright_equation_near_onset():
    # Oracle: as above; s by the root of its linear part.
    form, rest = wright(math.pi / 2.0 + 0.005)
    cycle = limit_cycle(form, rest)
    growth = rightmost_roots(form, rest).oscillatory.real
    found = floquet_multipliers(form, rest, cycle)
    assert abs(math.log(found.decay_per_cycle) / (-2.0 * growth * cycle.period_s) - 1.0) < 0.03
    # The stepping is of second order: half the step, a quarter of the error of the multiplier that must be 1.
    finer = floquet_multipliers(form, rest, cycle, steps=240)
    assert 3.0 < found.trivial_error / finer.trivial_error < 5.0


def test_largest_multiplier_is_the_decay_seen_in_a_run():
    # Oracle: a Runge-Kutta run in the test; successive peaks of PaCO2 approach the cycle's by the multiplier. Tolerance: peaks are
    # read while their distance is between 5 % and 0.3 % of the amplitude: nonlinearity above, the run's step below.
    loop = p2(1.8, 1.0)
    form, rest = loop.form(), loop.rest()
    cycle = limit_cycle(form, rest, order=32)
    assert cycle.status is CycleStatus.CONVERGED
    found = floquet_multipliers(form, rest, cycle)
    _, pressure, _ = run_breathing(loop, 3000.0, 0.25, push=8.0)
    inner = (pressure[1:-1] > pressure[:-2]) & (pressure[1:-1] >= pressure[2:])
    tops = pressure[1:-1][inner]
    final = tops[-1]
    gaps = np.abs(tops - final)
    size = cycle.state_amplitudes[0]
    window = np.flatnonzero((gaps < 0.05 * size) & (gaps > 0.003 * size))
    window = window[window < len(tops) - 12]
    assert window.size >= 3
    rate = np.polyfit(window, np.log(gaps[window]), 1)[0]
    assert abs(math.exp(rate) - found.decay_per_cycle) < 0.03
    assert found.attracts


def test_polished_multipliers_do_not_depend_on_the_steps():
    form, rest = p2().form(), p2().rest()
    cycle = limit_cycle(form, rest, order=24)
    rough, fine = (floquet_multipliers(form, rest, cycle, steps) for steps in (120, 300))
    assert rough.status is fine.status is FloquetStatus.CONVERGED
    assert abs(rough.decay_per_cycle - fine.decay_per_cycle) < 1e-8


def test_a_cycle_that_was_not_found_is_refused():
    with pytest.raises(InvalidInputError, match="converged cycle"):
        floquet_multipliers(p2().form(), p2().rest(), Cycle(CycleStatus.SETTLES))
