"""Margins against closed forms, published tables, and many-crossing loops whose switches are known."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from engine.oracle_loops import linear_form, oscillator, p2, scalar_loop
from lagscape.engine.margins import MarginStatus, margins
from lagscape.loops.plain import PlainLoop

CLOSE = 1e-13
"""Relative; Newton ends within a few ulp, and the closed forms themselves carry a few."""


@pytest.mark.parametrize(("a", "b", "critical"), [(0.5, 1.0, 2.4183992), (1.0, 2.0, 1.2091996)])
def test_delay_margin_is_the_closed_form_critical_delay(a, b, critical):
    # Oracle: tau_c = arccos(-a/b) / sqrt(b^2 - a^2), the printed digits and the formula.
    exact = math.acos(-a / b) / math.sqrt(b * b - a * a)
    assert abs(exact - critical) < 5e-8
    known = margins(*scalar_loop(a, b, 0.3))
    assert known.stable and known.delay_status is MarginStatus.FOUND
    assert abs(0.3 + known.delay_margin_s - exact) <= CLOSE * exact
    assert abs(known.delay_margin_frequency - math.sqrt(b * b - a * a)) <= CLOSE
    beyond = margins(*scalar_loop(a, b, exact + 1.0))
    assert not beyond.stable and beyond.unstable_roots == 2
    assert abs(beyond.delay_margin_s + 1.0) <= CLOSE * (exact + 1.0)


def test_pure_delay_loses_stability_at_half_pi_with_period_four_delays():
    # Oracle: Hayes 1950; loop gain of x' = -b x(t - tau) at w = pi/(2 tau) is 2 b tau / pi.
    known = margins(*scalar_loop(0.0, 0.7, 2.0))
    assert abs(known.loop_gain - 2.0 * 0.7 * 2.0 / math.pi) <= CLOSE
    assert abs(2.0 * math.pi / known.phase_crossover_frequency - 8.0) <= 8.0 * CLOSE
    assert abs(known.phase_margin_rad - (math.pi / 2.0 - 0.7 * 2.0)) <= CLOSE


@pytest.mark.parametrize(("ratio", "period", "gain"), [(0.1, 2.1948, 1.0402), (1.0, 3.0971, 2.2618), (10.0, 3.8500, 16.3506)])
def test_first_order_lag_table(ratio, period, gain):
    # Oracle: tan(w tau) = -w T, K_c = sqrt(1 + (w T)^2), printed to four decimals. With K = 1 the gain margin is K_c.
    known = margins(*scalar_loop(1.0 / ratio, 1.0 / ratio, 1.0))
    assert abs(known.gain_margin - gain) <= 0.5e-4
    assert abs(2.0 * math.pi / known.phase_crossover_frequency - period) <= 0.5e-4


def mackey_glass(slope: float, share: float = 0.1) -> PlainLoop:
    """x' = 6 - alpha x V(x(t - 0.25)), V0 = 7 L/min at 40 mmHg, as a plain loop; time in min. V_max is V0 / share."""
    exponent = slope * 40.0 / 7.0 / (1.0 - share)
    return PlainLoop(6.0, 6.0 / 40.0 / share, exponent, 40.0 * (1.0 / share - 1.0) ** (1.0 / exponent), 0.25)


def test_mackey_glass_critical_slope_and_period():
    # Oracle: lambda 6 mmHg/min, P0 40 mmHg, V0 7 L/min, tau 0.25 min give 7.442186 L/min/mmHg and 0.985250 min, printed to six decimals.
    def excess(slope: float) -> float:
        loop = mackey_glass(slope)
        return margins(loop.form(), loop.rest()).loop_gain - 1.0

    critical = brentq(excess, 5.0, 10.0, xtol=1e-13)
    assert abs(critical - 7.442186) <= 0.5e-6
    loop = mackey_glass(critical)
    assert abs(2.0 * math.pi / margins(loop.form(), loop.rest()).phase_crossover_frequency - 0.985250) <= 0.5e-6


def oscillator_switches(damping: float, gain: float, end: float) -> list[tuple[float, int]]:
    """Delays where a root pair of s^2 + 2 z s + 1 + k e^(-s tau) crosses the axis, with +1 to the right, -1 back. By hand."""
    middle = 1.0 - 2.0 * damping**2
    spread = math.sqrt(middle**2 - 1.0 + gain**2)
    events = []
    for square, change in ((middle + spread, 1), (middle - spread, -1)):
        if square > 0.0:
            w = math.sqrt(square)
            # k e^(-i w tau) = w^2 - 1 - 2 i z w
            first = -math.atan2(-2.0 * damping * w, square - 1.0) % (2.0 * math.pi) / w
            events += [(first + 2.0 * math.pi * k / w, change) for k in range(int(end * w / 6.0) + 1)]
    return sorted(events)


def test_delay_switches_back_and_forth_are_all_seen():
    # Oracle: the hand-made list of switches (Cooke and Grossman 1982): stable and unstable delays alternate, then instability for good.
    damping, gain = 0.05, 0.3
    events = oscillator_switches(damping, gain, 40.0)
    edges, count, seen = [0.0], 0, []
    for at, change in events:
        count += change
        edges.append(at)
        seen.append(count)
    assert 0 in seen[1:], "the example must become stable again, or it shows nothing"
    counts = [0, *seen]
    for left, right, pairs in zip(edges[:-1], edges[1:], counts, strict=False):
        delay = 0.5 * (left + right)
        if not 1e-3 < delay < 38.0:
            continue
        known = margins(*oscillator(damping, gain, delay))
        assert known.unstable_roots == 2 * pairs
        assert len(known.gain_crossovers) == 2
        if pairs == 0:
            assert abs(delay + known.delay_margin_s - right) <= 1e-10 * right
        elif known.delay_margin_s is not None:
            settled = [edge for edge, number in zip(edges[1:], counts[:-1], strict=False) if edge < delay and number == 0]
            assert abs(delay + known.delay_margin_s - max(settled)) <= 1e-10 * right


def test_the_first_crossover_is_not_taken_for_the_only_one():
    # A resonance at 5 rad/s behind a slow lag: the second phase crossover has the larger gain. Oracle: brute force on 400,000 frequencies.
    plant = [[-1.0, 0.0, 0.0], [0.0, 0.0, 1.0], [0.0, -25.0, -0.2]]
    form, rest = linear_form(plant, [0.3, 0.0, 2.0], [[-1.0, -1.0, 0.0]], [1.57])
    known = margins(form, rest)
    w = np.linspace(1e-3, 30.0, 400_000)
    answer = -np.exp(-1.57j * w) * (-0.3 / (1j * w + 1.0) - 2.0 / (25.0 - w**2 + 0.2j * w))
    crosses = np.flatnonzero((np.diff(np.sign(answer.imag)) != 0) & (answer.real[1:] < 0.0))
    brute = np.abs(answer[crosses])
    assert len(crosses) >= 3 and np.argmax(brute) > 0
    found = np.array([item.gain for item in known.phase_crossovers if item.frequency < 30.0])
    # Tolerance: the grid step of 7.5e-5 rad/s against a resonance 0.1 rad/s wide.
    assert np.allclose(found, brute[: found.size], rtol=2e-3)
    deciding = max(brute) if not known.stable else max(value for value in brute if value < 1.0)
    assert abs(known.loop_gain - deciding) < 2e-3 * deciding


def test_a_loop_on_the_boundary_to_rounding():
    # Oracle: closed form. The loop gain is 1 to a few ulp and the margins are 0, not a whole turn.
    critical = math.acos(-0.5) / math.sqrt(0.75)
    known = margins(*scalar_loop(0.5, 1.0, critical))
    assert abs(known.loop_gain - 1.0) < 1e-12
    assert abs(known.phase_margin_rad) < 1e-9
    assert abs(known.delay_margin_s) < 1e-9


def test_no_feedback_no_crossover_and_no_remedy_each_have_a_status():
    quiet = margins(p2(0.0, 0.0).form(), p2(0.0, 0.0).rest())
    assert quiet.stable and quiet.loop_gain == 0.0 and quiet.gain_margin is None
    assert (quiet.gain_status, quiet.phase_status, quiet.delay_status) == (MarginStatus.NO_FEEDBACK,) * 3
    weak = margins(*scalar_loop(1.0, 0.5, 2.0))
    assert weak.phase_margin_rad is None and weak.delay_margin_s is None
    assert weak.phase_status is weak.delay_status is MarginStatus.NO_GAIN_CROSSOVER
    assert weak.gain_margin > 1.0
    # Positive feedback beyond 1: x' = -x + 2 x(t - 1) grows without a cycle at any delay.
    growing = margins(*scalar_loop(1.0, -2.0, 1.0))
    assert not growing.stable and growing.unstable_roots % 2 == 1
    assert growing.delay_status is MarginStatus.NO_DELAY_RESTORES


@pytest.mark.parametrize(("short", "long"), [(3.0, 60.0), (0.02, 12.0), (400.0, 405.0)])
def test_far_apart_tiny_and_huge_delays(short, long):
    # Oracle: brute force on a frequency grid finer than any turn of the phase.
    loop = p2(2.5, 1.0, short, long)
    known = margins(loop.form(), loop.rest())
    assert known.complete
    assert known.loop_gain is not None
    q, tissue, v0 = 863.0 * 0.0065 * 5.0 / 60.0, 5.0 / 900.0, 863.0 * 0.2 / 40.0 / 60.0
    w = np.geomspace(1e-4, 120.0, 2_000_000)
    below = 3.0 * 1j * w + q + v0 - q * tissue / (1j * w + tissue)
    answer = 40.0 / 60.0 * (2.5 * np.exp(-1j * w * short) + np.exp(-1j * w * long) / (1.0 + 60j * w)) / below
    crosses = np.flatnonzero((np.diff(np.sign(answer.imag)) != 0) & (answer.real[1:] < 0.0))
    values = np.abs(answer[crosses])
    reach = max(values) if not known.stable else max(value for value in values if value <= 1.0)
    assert abs(known.loop_gain - reach) < 1e-3 * reach


def test_delays_in_a_ratio_of_thousands_say_that_the_search_was_cut_short():
    loop = p2(2.5, 1.0, 1e-3, 12.0)
    known = margins(loop.form(), loop.rest())
    assert not known.complete
    assert known.stable


@given(st.floats(0.0, 3.0), st.floats(0.01, 10.0), st.floats(0.01, 30.0))
def test_stability_is_hayes_condition(a, b, delay):
    # Oracle: x' = -a x - b x(t - tau) with b > a is stable exactly below the closed-form delay, with b <= a always.
    known = margins(*scalar_loop(a, b, delay))
    if b <= a:
        assert known.stable
    else:
        critical = math.acos(-a / b) / math.sqrt((b - a) * (b + a))
        if abs(delay / critical - 1.0) > 1e-9:
            assert known.stable == (delay < critical)


@given(st.floats(0.05, 5.0), st.floats(0.05, 5.0), st.floats(1.0, 50.0), st.floats(1.0, 50.0), st.floats(0.1, 10.0))
def test_gain_scales_the_loop_gain(peripheral, central, delay_p, delay_c, factor):
    # Law: both gains times a factor multiply L by it; the crossovers stay.
    one, other = p2(peripheral, central, delay_p, delay_c), p2(peripheral * factor, central * factor, delay_p, delay_c)
    first, second = margins(one.form(), one.rest()), margins(other.form(), other.rest())
    gains = {round(item.frequency, 9): item.gain for item in first.phase_crossovers}
    for item in second.phase_crossovers:
        if round(item.frequency, 9) in gains:
            assert abs(item.gain - factor * gains[round(item.frequency, 9)]) <= 1e-9 * item.gain
