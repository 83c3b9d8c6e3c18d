"""The plain loop against hand-made numbers and the published respiration equation (Mackey and Glass 1977, Science 197:287)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.loops.plain import HillDrive, PlainLoop

EPS = np.finfo(float).eps


def test_the_drive_at_its_half_level_is_a_half_with_slope_n_over_four_theta() -> None:
    # Oracle: h(theta) = 1/2, h'(theta) = n / (4 theta), by hand.
    drive = HillDrive(exponent=6.0, half_level=3.0)
    level = np.array([3.0])
    assert drive.value(level, np.empty(0)) == pytest.approx(0.5, abs=EPS)
    assert drive.gradient(level, np.empty(0))[0] == pytest.approx(6.0 / 12.0, rel=4 * EPS)


@pytest.mark.parametrize(("level", "share"), [(0.0, 0.0), (-2.0, 0.0), (1e-200, 0.0), (1e200, 1.0)])
def test_the_drive_is_nothing_at_no_level_and_full_at_a_huge_one(level: float, share: float) -> None:
    drive = HillDrive(exponent=60.0, half_level=1.0)
    assert drive.value(np.array([level]), np.empty(0)) == share
    assert drive.scalar((level,), (), 0.0) == share
    assert drive.gradient(np.array([level]), np.empty(0))[0] == 0.0


def test_rest_by_hand() -> None:
    # Oracle: with n = 1, theta = 1: L = V x^2 / (1 + x) gives x = (L + sqrt(L^2 + 4 L V)) / (2 V). L = 2, V = 3: x = (2 + sqrt 28)/6.
    rest = PlainLoop(production_per_s=2.0, largest_clearance_per_s=3.0, exponent=1.0, half_level=1.0).rest()
    assert rest.state[0] == pytest.approx((2.0 + math.sqrt(28.0)) / 6.0, rel=8 * EPS)
    assert rest.output == pytest.approx(2.0 / (3.0 * rest.state[0]), rel=8 * EPS)


@given(factor=st.floats(0.01, 100.0), n=st.floats(0.5, 60.0))
def test_a_change_of_unit_of_level_scales_the_rest(factor: float, n: float) -> None:
    # Law: the equation keeps its form when level, half level and production are all multiplied by one factor.
    base = PlainLoop(production_per_s=0.3, largest_clearance_per_s=0.7, exponent=n, half_level=1.0)
    scaled = PlainLoop(production_per_s=0.3 * factor, largest_clearance_per_s=0.7, exponent=n, half_level=factor)
    assert scaled.rest().state[0] == pytest.approx(base.rest().state[0] * factor, rel=64 * EPS)
    assert scaled.rest().output == pytest.approx(base.rest().output, rel=64 * EPS * (1.0 + n))


@given(n=st.lists(st.floats(0.1, 100.0), min_size=1, max_size=5), demand=st.floats(1e-6, 1e6))
def test_one_loop_rests_where_a_batch_of_it_does(n: list[float], demand: float) -> None:
    # Two ways to one root: plain floats and arrays. Tolerance: both stop at 4e-16 of ln(level), up to ln(1e6) = 14.
    batch = PlainLoop(production_per_s=demand, largest_clearance_per_s=1.0, exponent=np.array(n)).rest()
    for i, exponent in enumerate(n):
        one = PlainLoop(production_per_s=demand, largest_clearance_per_s=1.0, exponent=exponent).rest()
        assert one.state[0] == pytest.approx(batch.state[0, i], rel=64 * EPS)
        assert one.output == pytest.approx(batch.output[i], rel=64 * EPS * (1.0 + exponent))


def test_the_production_channel_adds_to_production() -> None:
    channel = PlainLoop().form().channels["production"]
    assert channel.plant is not None
    assert channel.plant.tolist() == [1.0]
    assert channel.drive == channel.output == 0.0


@pytest.mark.parametrize("name", ["production_per_s", "largest_clearance_per_s", "exponent", "half_level"])
@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), np.array([1.0, -1.0])])
def test_a_number_that_is_not_positive_is_refused_by_name(name: str, value: float) -> None:
    with pytest.raises(InvalidInputError, match=rf"{name} must be positive; got "):
        PlainLoop(**{name: value}).rest()
