"""Ring-downs read from simulated quiet breathing. Oracle throughout: the dominant root of the very loop that was simulated."""

from __future__ import annotations

import numpy as np
import pytest

from lagscape.case.case import Case
from lagscape.engine.disturbance import noise, pulse
from lagscape.engine.simulate import simulate
from lagscape.errors import InvalidInputError
from lagscape.questions.fit_ring_down import ring_down_after_events, ring_down_from_variability
from lagscape.questions.standing import Standing, judge

EVENTS = [100.0, 300.0, 500.0, 700.0, 900.0]
RINGING = [("heart-failure-steady", 2.0), ("heart-failure-periodic", 0.5), ("heart-failure-periodic", 0.4)]


def ringing(name: str, factor: float):
    case = Case.from_starting_case(name)
    case = case.with_sensitivity(float(case.loop().sensitivity) * factor)
    judged = judge(case)
    assert judged.standing is Standing.RINGS
    root = judged.roots.oscillatory
    return case.loop(), 2.0 * np.pi / abs(root.imag), -root.real / abs(root)


@pytest.mark.parametrize(("name", "factor"), RINGING)
def test_after_sighs(name: str, factor: float) -> None:
    # Tolerance: the fit's stated model errors (6 % of the period, 0.08 of the damping ratio); 5 % of noise on every sample.
    loop, period, damping = ringing(name, factor)
    trace = simulate(loop, duration=1100.0, disturbances=[pulse("sigh", at, 4.0, 10.0) for at in EVENTS], output_times=2201)
    noisy = trace.output * (1.0 + 0.05 * np.random.default_rng(1).standard_normal(trace.output.size))
    found = ring_down_after_events(trace.times, noisy, EVENTS)
    assert found.source == "events" and found.damping_ratio.n >= 4
    assert found.period_s.median == pytest.approx(period, rel=0.06)
    assert found.damping_ratio.median == pytest.approx(damping, abs=0.08)
    # |root| from its parts.
    assert found.frequency == pytest.approx(2.0 * np.pi / found.period_s.median / np.sqrt(1.0 - found.damping_ratio.median**2))


@pytest.mark.parametrize(("name", "factor"), RINGING)
@pytest.mark.parametrize("seed", [1, 3])
def test_from_restlessness(name: str, factor: float, seed: int) -> None:
    # Tolerance: twice the fit's stated model error of the period (15 %), one and a quarter times that of the damping ratio (0.2): weak.
    loop, period, damping = ringing(name, factor)
    trace = simulate(loop, duration=3600.0, disturbances=[noise("arousal", 0.0, 0.5, 4.0, seed)], output_times=7201)
    found = ring_down_from_variability(trace.times, trace.output)
    assert found.source == "variability" and "weak" in found.strength
    assert found.period_s.median == pytest.approx(period, rel=0.3)
    assert found.damping_ratio.median == pytest.approx(damping, abs=0.25)


def test_a_damped_sine_is_read_exactly() -> None:
    # Oracle: closed form. Tolerance: a cell of the finest grid.
    times = np.arange(0.0, 400.0, 0.5)
    swing = np.where(times >= 50.0, np.exp(-0.02 * (times - 50.0)) * np.cos(2.0 * np.pi * (times - 50.0) / 45.0), 0.0)
    found = ring_down_after_events(times, 6.0 + swing, [50.0])
    assert found.period_s.median == pytest.approx(45.0, rel=0.01)
    assert found.damping_ratio.median == pytest.approx(0.02 / np.hypot(0.02, 2.0 * np.pi / 45.0), abs=0.01)
    assert "fewer than three" in found.strength


def test_noise_after_an_event_is_no_swing() -> None:
    rng = np.random.default_rng(2)
    times = np.arange(0.0, 2000.0, 0.5)
    found = [ring_down_after_events(times, 6.0 + rng.standard_normal(times.size), [at]) for at in np.arange(50.0, 1800.0, 200.0)]
    assert sum(item is not None for item in found) <= 1


def test_nothing_to_read() -> None:
    times = np.arange(0.0, 2000.0, 1.0)
    flat = np.full(times.size, 6.0)
    assert ring_down_after_events(times, flat, [100.0]) is None
    assert ring_down_after_events(times, flat, []) is None
    assert ring_down_from_variability(times, flat) is None
    assert ring_down_from_variability(times[:300], np.random.default_rng(1).standard_normal(300)) is None


@pytest.mark.parametrize(
    ("times", "values", "words"),
    [
        (np.arange(30.0), np.ones(29), "two rows"),
        (np.zeros(30), np.ones(30), "ascending"),
        (np.arange(30.0), np.full(30, np.nan), "finite values"),
    ],
)
def test_bad_arrays_are_refused(times, values, words: str) -> None:
    with pytest.raises(InvalidInputError, match=words):
        ring_down_after_events(times, values, [1.0])
