"""The batch against the careful search, one by one, on random loops of every kind."""

import numpy as np
import pytest

from engine.oracle_loops import p2
from lagscape.engine.margins import margins
from lagscape.engine.margins_batch import Multiples, margins_batch, margins_of
from lagscape.engine.open_loop import open_loop
from lagscape.engine.roots import rightmost_roots
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

SPREAD = {
    "breathing": ("peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg", "peripheral_delay_s", "central_delay_s", "lung_volume_l",
                  "cardiac_output_l_min", "central_time_constant_s", "co2_production_l_min", "tissue_volume_l"),
    "reflex": ("reflex_gain_per_rad", "inertia_kg_m2", "damping_n_m_s_rad", "stiffness_n_m_rad", "activation_time_s", "path_length_m",
               "velocity_sensitivity_s"),
    "plain": ("production_per_s", "largest_clearance_per_s", "exponent", "half_level", "delay_s"),
}  # fmt: skip


@pytest.mark.parametrize("base", [p2(1.5, 1.0), BreathingLoop(), ReflexLoop(reflex_gain_per_rad=3.0), PlainLoop(half_level=0.5)])
def test_batch_agrees_with_one_by_one(base):
    # Oracle: `margins` and `rightmost_roots`, which refine their frequency grid until nothing can hide.
    rng = np.random.default_rng(7)
    members = 150
    numbers = {name: getattr(base, name) * np.exp(0.35 * rng.standard_normal(members)) for name in SPREAD[base.kind]}
    batch = base.with_numbers(**numbers)
    found = margins_batch(batch.form(), batch.rest())
    for i in range(members):
        one = base.with_numbers(**{name: float(values[i]) for name, values in numbers.items()})
        form, rest = one.form(), one.rest()
        known = margins(form, rest)
        assert known.stable == found.stable[i]
        assert known.unstable_roots == found.unstable_roots[i]
        if known.loop_gain is not None:
            assert abs(found.loop_gain[i] - known.loop_gain) <= 1e-11 * known.loop_gain
            assert abs(found.phase_crossover_frequency[i] - known.phase_crossover_frequency) <= 1e-11 * known.phase_crossover_frequency
        if known.stable and known.phase_margin_rad is not None:
            assert abs(found.phase_margin_rad[i] - known.phase_margin_rad) < 1e-10
            assert abs(found.delay_margin_s[i] - known.delay_margin_s) <= 1e-9 * known.delay_margin_s
        roots = rightmost_roots(form, rest, known=known)
        # An oscillation that loses more than 95 % in one cycle is none, and which of the damped pairs is called dominant is a convention.
        if roots.oscillatory is not None and known.unstable_roots <= 2 and roots.oscillatory.real * roots.cycle_length_s > -3.0:
            assert abs(found.growth_rate_per_s[i] - roots.oscillatory.real) <= 1e-8 * abs(roots.oscillatory)
            assert abs(found.cycle_length_s[i] - roots.cycle_length_s) <= 1e-8 * roots.cycle_length_s
        if found.has_oscillation[i] and abs(found.growth_rate_per_s[i] * found.cycle_length_s[i]) > 1e-9:
            assert (found.growth_rate_per_s[i] < 0.0) == found.stable[i] or found.unstable_roots[i] % 2 == 1


def test_ten_thousand_members_hold_no_nan():
    rng = np.random.default_rng(11)
    numbers = {name: getattr(BreathingLoop(), name) * np.exp(0.5 * rng.standard_normal(10_000)) for name in SPREAD["breathing"]}
    batch = BreathingLoop().with_numbers(**numbers)
    found = margins_batch(batch.form(), batch.rest())
    for name in ("loop_gain", "phase_margin_rad", "delay_margin_s", "growth_rate_per_s", "cycle_length_s"):
        assert np.all(np.isfinite(getattr(found, name)))
    assert 0.05 < found.stable.mean() < 0.999
    assert np.all((found.loop_gain > 1.0) == ~found.stable)


def test_members_without_feedback_and_an_empty_batch():
    batch = p2().with_numbers(peripheral_gain_l_min_mmhg=np.array([0.0, 3.0]), central_gain_l_min_mmhg=np.array([0.0, 1.0]))
    found = margins_batch(batch.form(), batch.rest())
    assert found.stable.tolist() == [True, False]
    assert found.has_phase_crossover.tolist() == [False, True]
    assert found.loop_gain[0] == 0.0
    empty = p2().with_numbers(peripheral_gain_l_min_mmhg=np.zeros(0))
    opened = open_loop(empty.form(), empty.rest())
    assert margins_batch(empty.form(), empty.rest(), opened).stable.shape == (0,)


@pytest.mark.parametrize("base", [p2(1.5, 1.0), BreathingLoop(), ReflexLoop(reflex_gain_per_rad=3.0)])
def test_families_share_their_sampling_and_change_nothing(base):
    # Oracle: the same members without the knowledge of their families. Tolerance: rounding of a factor taken in another order.
    rng = np.random.default_rng(11)
    families, each = 30, 8
    delay = np.repeat(base.delay * np.exp(0.5 * rng.standard_normal(families)), each)
    factor = (1.0 if base.kind == "reflex" else 2.0) * np.exp(0.8 * rng.standard_normal(families * each))
    batch = base.with_delay(delay)
    opened = open_loop(batch.form(), batch.rest())
    opened = opened.scaled(factor)
    family = np.repeat(np.arange(families), each)
    mixed = rng.permutation(families * each)
    alone = margins_of(opened.member(mixed))
    together = margins_of(opened.member(mixed), multiples=Multiples(family[mixed], factor[mixed]))
    assert 10 < np.count_nonzero(alone.stable) < 230
    for name in ("stable", "unstable_roots", "has_phase_crossover", "has_gain_crossover", "has_oscillation"):
        np.testing.assert_array_equal(getattr(together, name), getattr(alone, name))
    for name in ("loop_gain", "phase_crossover_frequency", "phase_margin_rad", "delay_margin_s", "growth_rate_per_s", "cycle_length_s"):
        np.testing.assert_allclose(getattr(together, name), getattr(alone, name), rtol=1e-8, atol=1e-11)


def test_a_family_s_factor_is_on_its_first_member():
    same = Multiples(np.array([4, 4, 7, 4]), np.array([2.0, 6.0, 5.0, 1.0]))
    first, group, factor = same.shared(np.array([1.0, 1.0, 1.0, 2.0]))
    # Members 0 and 1 agree in family and value, 3 only in family.
    assert group[0] == group[1] and len(set(group.tolist())) == 3
    assert (first[group] == [0, 0, 2, 3]).all()
    assert factor.tolist() == [1.0, 3.0, 1.0, 1.0]
