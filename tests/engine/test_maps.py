"""Maps against the careful computation of single cells."""

import numpy as np
import pytest

from engine.oracle_loops import p2
from lagscape.engine.boundary import boundary_curve
from lagscape.engine.cycle import limit_cycle
from lagscape.engine.maps import cycle_map, linear_map, progressive_cycle_map, progressive_linear_map
from lagscape.engine.roots import rightmost_roots
from lagscape.errors import InvalidInputError
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop


@pytest.mark.parametrize("loop", [p2(), ReflexLoop(reflex_gain_per_rad=4.0), PlainLoop(half_level=0.5)])
def test_linear_map_is_its_cells(loop):
    # Oracle: roots of single loops, polished to rounding.
    delays, strengths = loop.delay * np.linspace(0.3, 2.0, 12), loop.sensitivity * np.linspace(0.2, 2.0, 9)
    found = linear_map(loop, "delay", delays, "sensitivity", strengths)
    assert found.growth_rate_per_s.shape == (9, 12)
    for i, j in ((0, 0), (4, 7), (8, 11), (2, 9)):
        one = loop.with_delay(float(delays[j])).with_sensitivity(float(strengths[i]))
        roots = rightmost_roots(one.form(), one.rest())
        assert found.stable[i, j] == (roots.spectral_abscissa <= 0.0)
        if found.oscillates[i, j] and roots.oscillatory is not None and roots.oscillatory.real * roots.cycle_length_s > -3.0:
            assert abs(found.growth_rate_per_s[i, j] - roots.oscillatory.real) <= 1e-8 * abs(roots.oscillatory)
            assert abs(found.cycle_length_s[i, j] / roots.cycle_length_s - 1.0) < 1e-8


def test_stable_cells_lie_inside_the_exact_boundary():
    # Oracle: the exact curve: below it in sensitivity at each delay the map is stable, above it not.
    loop = p2()
    delays, strengths = np.linspace(6.0, 50.0, 30), np.linspace(0.3, 9.0, 41)
    found = linear_map(loop, "delay", delays, "sensitivity", strengths)
    curve = boundary_curve(loop, (0.1, 20.0), (4.0, 60.0)).curves[0]
    order = np.argsort(curve.delay_s)
    edge = np.interp(delays, curve.delay_s[order], curve.sensitivity[order])
    clear = np.abs(strengths[:, None] / edge - 1.0) > 1e-3
    assert np.array_equal(found.stable[clear], (strengths[:, None] < edge)[clear])


def test_progressive_map_begins_coarse_and_ends_whole():
    loop, delays, strengths = p2(), np.linspace(6.0, 40.0, 33), np.linspace(0.5, 6.0, 33)
    stages = list(progressive_linear_map(loop, "delay", delays, "sensitivity", strengths, coarsest=5))
    sizes = [stage.stable.shape for stage in stages]
    assert len(sizes) >= 3 and sizes == sorted(sizes) and sizes[-1] == (33, 33)
    whole = linear_map(loop, "delay", delays, "sensitivity", strengths)
    assert np.array_equal(stages[-1].stable, whole.stable)
    assert all(stage.first[-1] == 40.0 and stage.second[-1] == 6.0 for stage in stages)
    # Cancelling is stopping: the generator has computed nothing beyond what was asked for.
    first = next(progressive_cycle_map(loop, "delay", delays, "sensitivity", strengths, coarsest=3))
    assert first.stable.shape[0] < 10


@pytest.mark.parametrize(("loop", "amplitude"), [(p2(), 0.03), (ReflexLoop(reflex_gain_per_rad=6.0), 0.002)])
def test_cycle_map_is_its_cells(loop, amplitude):
    # Oracle: harmonic balance of single loops at order 32. Tolerance: six harmonics, measured at worst 2e-2 with the clip's corner.
    delays, strengths = loop.delay * np.linspace(0.5, 1.8, 9), loop.sensitivity * np.linspace(0.3, 1.6, 8)
    found = cycle_map(loop, "delay", delays, "sensitivity", strengths)
    hunting = ~found.stable
    assert hunting.sum() > 20
    assert found.found[hunting].all()
    assert not found.found[found.stable].any()
    for i, j in np.argwhere(hunting)[::9]:
        one = loop.with_delay(float(delays[j])).with_sensitivity(float(strengths[i]))
        cell = limit_cycle(one.form(), one.rest(), order=32)
        assert abs(found.output_amplitude[i, j] / cell.output_amplitude - 1.0) < amplitude
        assert abs(found.period_s[i, j] / cell.period_s - 1.0) < 0.01
        assert abs(found.silent_fraction[i, j] - cell.silent_fraction) < 0.01


def test_map_over_two_named_numbers_and_a_map_without_hunting():
    loop = p2(1.5, 1.0)
    found = linear_map(loop, "cardiac_output_l_min", [2.0, 5.0], "lung_volume_l", [1.0, 3.0, 5.0])
    assert found.stable.shape == (3, 2) and found.names == ("cardiac_output_l_min", "lung_volume_l")
    calm = cycle_map(p2(0.1, 0.1), "delay", [8.0, 10.0], "sensitivity", [0.1, 0.2])
    assert calm.stable.all() and not calm.found.any()


def test_the_same_number_twice_is_refused():
    with pytest.raises(InvalidInputError, match="must differ"):
        linear_map(p2(), "delay", [1.0, 2.0], "delay", [1.0, 2.0])
