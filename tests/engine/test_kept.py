"""What is kept from one run to the next changes no digit of any run."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest

from lagscape.engine import interval_collocation, plant_steps
from lagscape.engine.disturbance import pulse
from lagscape.engine.mesh import Kept
from lagscape.engine.simulate import simulate
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

STORES = (
    (interval_collocation, "_plans"),
    (interval_collocation, "_operators"),
    (interval_collocation, "_lookups"),
    (plant_steps, "_groups"),
    (plant_steps, "_linear"),
)


@pytest.fixture
def emptied(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """Every store empty, and given back afterwards."""
    for module, name in STORES:
        monkeypatch.setattr(module, name, Kept(32))
    yield


def _empty(monkeypatch: pytest.MonkeyPatch) -> None:
    for module, name in STORES:
        monkeypatch.setattr(module, name, Kept(32))


@pytest.mark.usefixtures("emptied")
def test_a_warm_run_is_a_cold_run_bit_for_bit(monkeypatch: pytest.MonkeyPatch) -> None:
    # Oracle: the same run with nothing kept. Exact, because the same numbers go through the same operations.
    rng = np.random.default_rng(5)
    sigh = pulse("sigh", 30.0, 10.0, 10.0)
    cases = []
    for _ in range(12):
        breathing = BreathingLoop().with_delay(float(rng.choice([12.0, 12.0, 20.0]))).with_sensitivity(float(rng.choice([1.5, 4.0])))
        cases += [(breathing, 240.0, sigh), (PlainLoop(delay_s=float(rng.choice([6.0, 10.0]))), 200.0, ())]
        cases.append((ReflexLoop(reflex_gain_per_rad=float(rng.choice([2.0, 5.0]))), 2.0, pulse("torque", 0.2, 0.1, 0.5)))
    warm = [simulate(loop, duration=span, disturbances=pushed, offset=None if pushed else 0.1) for loop, span, pushed in cases]
    for (loop, span, pushed), trace in zip(cases, warm, strict=True):
        _empty(monkeypatch)
        cold = simulate(loop, duration=span, disturbances=pushed, offset=None if pushed else 0.1)
        np.testing.assert_array_equal(trace.states, cold.states)
        np.testing.assert_array_equal(trace.output, cold.output)
        assert trace.silences == cold.silences


def test_the_oldest_is_forgotten_first_and_built_anew() -> None:
    built: list[int] = []

    def build(number: int) -> int:
        built.append(number)
        return 10 * number

    kept = Kept(2)
    assert [kept(number, lambda number=number: build(number)) for number in (1, 2, 1, 3, 2, 1)] == [10, 20, 10, 30, 20, 10]
    assert built == [1, 2, 3, 1]
