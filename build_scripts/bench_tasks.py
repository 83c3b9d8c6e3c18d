"""What the benchmark times, natively and in the browser's worker: the same functions, numpy and our package only.

P1 is the plain loop in its relaxation cycle (L 0.2, Vmax 0.8, n 8, tau 10, started at 0.5). P2 is a breathing loop that stops breathing
for half of every cycle (peripheral 3 and central 1 L/min/mmHg at 12 and 17 s, started 2 mmHg over its rest).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from time import perf_counter
from typing import Any

import numpy as np

from lagscape.engine.boundary import boundary_curve
from lagscape.engine.cycle import Cycle, limit_cycle
from lagscape.engine.disturbance import pulse
from lagscape.engine.maps import cycle_map, linear_map
from lagscape.engine.margins import margins
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.simulate import simulate
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop

__all__ = ["P1_START", "P2_OFFSET", "TASKS", "measure", "p1", "p2", "rk4_breathing", "rk4_plain"]

SPAN = 600.0
P1_START = 0.5
P2_OFFSET = 2.0
SAMPLES = 10_000
WARM_UP_S = 1.0


def p1() -> PlainLoop:
    return PlainLoop(production_per_s=0.2, largest_clearance_per_s=0.8, exponent=8.0, half_level=1.0, delay_s=10.0)


def p2(sensitivity: float = 1.0) -> BreathingLoop:
    """The line passes through 40 mmHg at no ventilation, so the rest is where 4 (P - 40) P = 863 VCO2."""
    rest = 20.0 + math.sqrt(400.0 + 863.0 * 0.2 / 4.0)
    return BreathingLoop(
        co2_production_l_min=0.2, resting_paco2_mmhg=rest, dead_space_fraction=0.0, lung_volume_l=3.0, tissue_volume_l=15.0,
        cardiac_output_l_min=5.0, co2_solubility_per_mmhg=0.0065, peripheral_gain_l_min_mmhg=3.0 * sensitivity,
        central_gain_l_min_mmhg=1.0 * sensitivity, arterial_po2_mmhg=100.0, peripheral_delay_s=12.0, central_delay_s=17.0,
        central_time_constant_s=60.0,
    )  # fmt: skip


def rk4_plain(span: float = SPAN, step: float = 0.25) -> list[float]:
    """P1 by the classical Runge-Kutta step in plain floats, delayed values from cubic Hermite pieces: the loop to beat."""
    back = round(10.0 / step)

    def slope(x: float, late: float) -> float:
        power = late**8
        return 0.2 - 0.8 * power / (1.0 + power) * x

    xs, starts, ends = [P1_START], [], []
    x = P1_START
    for i in range(round(span / step)):
        j = i - back
        if j < 0:
            late0 = late1 = middle = P1_START
        else:
            late0, late1 = xs[j], xs[j + 1]
            middle = 0.5 * (late0 + late1) + 0.125 * step * (starts[j] - ends[j])
        k1 = slope(x, late0)
        k2 = slope(x + 0.5 * step * k1, middle)
        k3 = slope(x + 0.5 * step * k2, middle)
        k4 = slope(x + step * k3, late1)
        x += step / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
        starts.append(k1)
        ends.append(slope(x, late1))
        xs.append(x)
    return xs


def rk4_breathing(span: float = SPAN, step: float = 0.25) -> list[tuple[float, float, float]]:
    """P2 by the same method, three states in plain floats; delays are whole numbers of steps."""
    loop = p2()
    back_p, back_c = round(12.0 / step), round(17.0 / step)
    q, tissue = 863.0 * 0.0065 * 5.0 / 60.0 / 3.0, 5.0 / 60.0 / 15.0
    made, wash, lag = 0.2 / 60.0 / (15.0 * 0.0065), 1.0 / 60.0 / 3.0, 1.0 / 60.0
    a0, v0, c0 = (float(value) for value in loop.rest().state)
    a = a0 + P2_OFFSET
    v, c, before = v0, c0, a
    xs, starts, ends = [(a, v, c)], [], []

    def late(i: int, back: int) -> tuple[float, float, float]:
        j = i - back
        if j < 0:
            return before, before, before
        low, high = xs[j][0], xs[j + 1][0]
        return low, 0.5 * (low + high) + 0.125 * step * (starts[j] - ends[j]), high

    def slopes(a: float, v: float, c: float, y: float, z: float) -> tuple[float, float, float]:
        drive = 3.0 * (y - 40.0) + (c - 40.0)
        drive = drive if drive > 0.0 else 0.0
        return q * (v - a) - wash * drive * a, made - tissue * (v - a), lag * (z - c)

    half = 0.5 * step
    for i in range(round(span / step)):
        y0, ym, y1 = late(i, back_p)
        z0, zm, z1 = late(i, back_c)
        p, r, s = slopes(a, v, c, y0, z0)
        starts.append(p)
        p2_, r2, s2 = slopes(a + half * p, v + half * r, c + half * s, ym, zm)
        p3, r3, s3 = slopes(a + half * p2_, v + half * r2, c + half * s2, ym, zm)
        p4, r4, s4 = slopes(a + step * p3, v + step * r3, c + step * s3, y1, z1)
        a += step / 6.0 * (p + 2.0 * p2_ + 2.0 * p3 + p4)
        v += step / 6.0 * (r + 2.0 * r2 + 2.0 * r3 + r4)
        c += step / 6.0 * (s + 2.0 * s2 + 2.0 * s3 + s4)
        ends.append(slopes(a, v, c, y1, z1)[0])
        xs.append((a, v, c))
    return xs


def _p1_trace() -> Callable[[int], Any]:
    offset = P1_START - float(p1().rest().state[0])
    return lambda turn: simulate(p1(), duration=SPAN, offset=offset)


def _drag() -> Callable[[int], Any]:
    """Everything that a moved dot could ask: margins, roots, boundary, cycle from the last one, trace of a sigh."""
    last: list[Cycle | None] = [None]

    def turn(number: int) -> Any:
        # Each turn is another place on the map, as it is under a moving hand: nothing can be kept from the turn before.
        loop = p2(1.0 + 0.002 * (number % 20))
        rest, form = loop.rest(), loop.form()
        opened = open_loop(form, rest)
        known = margins(form, rest, opened)
        roots = rightmost_roots(form, rest, 4, opened, known)
        edge = boundary_curve(loop, points=200)
        last[0] = limit_cycle(form, rest, start=last[0], known=known)
        trace = simulate(form, rest=rest, duration=SPAN, disturbances=pulse("sigh", 30.0, 10.0, 10.0))
        return roots, edge, trace

    return turn


def _trace_only() -> Callable[[int], Any]:
    return lambda turn: simulate(p2(1.0 + 0.002 * (turn % 20)), duration=SPAN, offset=(P2_OFFSET, 0.0, 0.0))


def _reference() -> Callable[[int], Any]:
    return lambda turn: simulate(p2(), duration=SPAN, offset=(P2_OFFSET, 0.0, 0.0), purpose="release")


def _linear_map() -> Callable[[int], Any]:
    delays, sensitivities = np.linspace(6.0, 35.0, 80), np.linspace(0.8, 10.0, 80)
    return lambda turn: linear_map(p2(), "delay", delays, "sensitivity", sensitivities)


def _cycle_map() -> Callable[[int], Any]:
    delays, sensitivities = np.linspace(6.0, 35.0, 40), np.linspace(0.8, 10.0, 40)
    return lambda turn: cycle_map(p2(), "delay", delays, "sensitivity", sensitivities)


def _margins() -> Callable[[int], Any]:
    random = np.random.default_rng(1)

    def around(value: float, spread: float) -> np.ndarray:
        return value * np.exp(spread * random.standard_normal(SAMPLES))

    delay = around(12.0, 0.2)
    loop = BreathingLoop(
        co2_production_l_min=around(0.2, 0.1), resting_paco2_mmhg=40.0 + 2.0 * random.standard_normal(SAMPLES), dead_space_fraction=0.3,
        lung_volume_l=around(2.4, 0.2), tissue_volume_l=around(15.0, 0.3), cardiac_output_l_min=around(4.0, 0.18),
        co2_solubility_per_mmhg=around(0.0065, 0.08), peripheral_gain_l_min_mmhg=around(1.0, 0.4),
        central_gain_l_min_mmhg=around(1.5, 0.4), arterial_po2_mmhg=100.0, peripheral_delay_s=delay,
        central_delay_s=delay + around(3.0, 0.2), central_time_constant_s=around(60.0, 0.3),
    )  # fmt: skip
    return lambda turn: margins_batch(loop.form(), loop.rest())


TASKS: dict[str, tuple[Callable[[], Callable[[int], Any]], float]] = {
    "plain Runge-Kutta loop, P1": (lambda: lambda turn: rk4_plain(), 0.0),
    "plain Runge-Kutta loop, P2": (lambda: lambda turn: rk4_breathing(), 0.0),
    "P1 trace, 600 units": (_p1_trace, 4.0),
    "P2 trace, 600 s": (_trace_only, 0.0),
    "full breathing drag": (_drag, 25.0),
    "reference trace at 1e-6": (_reference, 75.0),
    "80 x 80 growth and period map": (_linear_map, 100.0),
    "40 x 40 cycle map": (_cycle_map, 500.0),
    "10,000 margin samples": (_margins, 250.0),
}
"""Name to a maker of one turn of work, and the most milliseconds wished for in the browser (0: none)."""


def measure(name: str, seconds: float = 1.5, least: int = 3) -> dict[str, Any]:
    """Times one task: a second to warm up, then turns until `seconds` have passed; median and smallest in ms.

    The browser compiles what runs often a second time, better: what is timed before that is the first second of a page's life.
    """
    work = TASKS[name][0]()
    begun, turn = perf_counter(), 0
    while turn < 2 or perf_counter() - begun < WARM_UP_S:
        work(turn)
        turn += 1
    times: list[float] = []
    begun = perf_counter()
    while len(times) < least or perf_counter() - begun < seconds:
        start = perf_counter()
        work(len(times) + 2)
        times.append(1e3 * (perf_counter() - start))
    return {"median_ms": float(np.median(times)), "smallest_ms": min(times), "turns": len(times)}
