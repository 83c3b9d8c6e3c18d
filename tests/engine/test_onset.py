"""Direction of the bifurcation against closed forms, and coexistence against simulation."""

import math

import numpy as np
import pytest

from engine.oracle_loops import p2, wright
from lagscape.engine.cycle import CycleStatus, limit_cycle
from lagscape.engine.floquet import floquet_multipliers
from lagscape.engine.margins import margins
from lagscape.engine.onset import OnsetKind, branch_curvature, coexisting_cycles, onset
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

LOADED = ReflexLoop(reflex_gain_per_rad=1.0, held_mass_kg=0.85 * 10.0 / (9.80665 * 0.15))
"""A weight that takes 85 % of the largest torque to hold: the reflex works on the bend of its saturation."""


def test_curvature_of_the_wright_equation():
    # Oracle: alpha - pi/2 = (3 pi - 2) A^2 / 40 (from memory, Chow and Mallet-Paret 1977), so c = (3 pi - 2) / (20 pi).
    # Tolerance: Richardson leaves the sixth-order term, a^4 = 3e-6 of it.
    form, rest = wright(math.pi / 2.0)
    assert abs(branch_curvature(form, rest, margins(form, rest)) - (3.0 * math.pi - 2.0) / (20.0 * math.pi)) < 1e-6


def test_curvature_of_a_saturating_reflex():
    # Oracle: tanh u = u - u^3/3: the first harmonic loses A^2/4; an activation of 1 is the largest torque, 10 N m, so c = 1/400.
    # No second harmonic exists and the third enters at the next order only.
    found = onset(ReflexLoop())
    assert found.kind is OnsetKind.SOFT
    assert abs(found.curvature - 0.0025) < 1e-7


@pytest.mark.parametrize("loop", [p2(), p2().with_numbers(drive_shape="sigmoid"), PlainLoop(half_level=0.5)])
def test_soft_onset_leaves_no_cycle_beside_the_rest(loop):
    found = onset(loop)
    assert found.kind is OnsetKind.SOFT
    below = loop.with_sensitivity(0.98 * found.sensitivity)
    beside = coexisting_cycles(below.form(), below.rest())
    assert beside.rest_is_stable and not beside.both
    assert not beside.repelling


def test_soft_cycle_grows_as_the_square_root():
    # Oracle: kappa = 1 + c a^2 gives a = sqrt((1 - 1/k)/c) at k times the boundary's sensitivity, as the drive is linear in it.
    loop = ReflexLoop()
    found = onset(loop)
    for excess in (1e-3, 4e-3):
        there = loop.with_sensitivity(found.sensitivity * (1.0 + excess))
        cycle = limit_cycle(there.form(), there.rest())
        expected = math.sqrt(excess / found.curvature)
        # Tolerance: the next term of the series is of the order of the excess itself.
        assert abs(0.5 * cycle.output_amplitude / expected - 1.0) < 3.0 * excess + 1e-4


def reflex_run(loop, push, duration):
    """Peak angle in the last fifth of a run of the reflex loop's own equations, Runge-Kutta, from an initial angle. Shares no code."""
    h = loop.delay / 40.0
    inertia, bias = loop.total_inertia, math.atanh(loop.held_mass_kg * 9.80665 * loop.load_distance_m / loop.largest_torque_n_m)
    rate, start = 1.0 / loop.activation_time_s, math.tanh(bias)
    past = [(push, 0.0)] * 81
    y = np.array([push, 0.0, 0.0, 0.0])

    def slope(y, late):
        torque = loop.largest_torque_n_m * (math.tanh(y[2] + bias) - start)
        asked = loop.reflex_gain_per_rad * (late[0] + loop.velocity_sensitivity_s * late[1])
        return np.array(
            [y[1], (-loop.stiffness_n_m_rad * y[0] - loop.damping_n_m_s_rad * y[1] - torque) / inertia, y[3],
             rate**2 * (asked - y[2]) - 2.0 * rate * y[3]]
        )  # fmt: skip

    peaks = []
    for i in range(round(duration / h)):
        late = [past[2 * i], past[2 * i + 1], past[2 * i + 2]]
        k1 = slope(y, late[0])
        k2 = slope(y + 0.5 * h * k1, late[1])
        k3 = slope(y + 0.5 * h * k2, late[1])
        k4 = slope(y + h * k3, late[2])
        new = y + h / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
        past.append(tuple(0.5 * (y[:2] + new[:2]) + h / 8.0 * (k1[:2] - k4[:2])))
        past.append((new[0], new[1]))
        y = new
        if i * h > 0.8 * duration:
            peaks.append(abs(y[0]))
    return max(peaks)


def test_jump_leaves_a_rest_and_a_cycle_side_by_side():
    # Oracle: two runs of the same stable loop in the test, one from a small and one from a large displacement.
    found = onset(LOADED)
    assert found.kind is OnsetKind.JUMP and found.curvature < 0.0
    loop = LOADED.with_sensitivity(0.97 * found.sensitivity)
    form, rest = loop.form(), loop.rest()
    beside = coexisting_cycles(form, rest)
    assert beside.both and len(beside.repelling) == 1 and len(beside.attracting) == 1
    small, large = beside.repelling[0].state_amplitudes[0], beside.attracting[0].state_amplitudes[0]
    assert small < large
    assert reflex_run(loop, 0.1 * small, 40.0) < 0.05 * small
    ends = reflex_run(loop, 1.5 * large, 40.0)
    assert 0.4 * large < ends < 1.2 * large
    # The multipliers say the same: one outside the unit circle on the repelling cycle, none on the attracting one.
    assert not floquet_multipliers(form, rest, beside.repelling[0]).attracts
    assert floquet_multipliers(form, rest, beside.attracting[0]).attracts


def test_no_boundary_is_said():
    quiet = p2().with_numbers(central_gain_l_min_mmhg=0.0, peripheral_gain_l_min_mmhg=0.0)
    with np.errstate(all="ignore"):
        assert onset(quiet).kind is OnsetKind.NO_BOUNDARY
    settled = p2(0.2, 0.1)
    assert limit_cycle(settled.form(), settled.rest()).status is CycleStatus.SETTLES
