"""Every method of the engine beside an oracle that shares no code with it, with the error measured; the rows stand in the test report."""

import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.special import lambertw

from engine.oracle_loops import cycle_of, linear_form, oscillator, p2, p2_characteristic, run_breathing, scalar_loop
from lagscape.engine.boundary import boundary_curve
from lagscape.engine.cycle import limit_cycle
from lagscape.engine.ensemble import ensemble
from lagscape.engine.exact_path import ExactSettings, exact_path
from lagscape.engine.floquet import floquet_multipliers
from lagscape.engine.margins import margins
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.roots import rightmost_roots
from lagscape.engine.runge_kutta import runge_kutta
from lagscape.engine.sensitivity import sensitivities
from lagscape.engine.simulate import simulate
from lagscape.engine.two_parameters import boundary_in_two
from lagscape.loops.plain import PlainLoop
from support.study_loops import difference, run_of

Check = Callable[[], float]


def _plain_run(purpose: str) -> float:
    # y' = -y(t - 1), y = 1 for t <= 0: sum (-1)^n (t - (n-1))^n / n! (Paul 1994).
    form, rest = scalar_loop(0.0, 1.0, 1.0)
    times = np.linspace(0.0, 5.0, 201)
    trace = simulate(form, duration=5.0, rest=rest, offset=1.0, purpose=purpose, output_times=times)  # type: ignore[arg-type]
    exact = np.array([sum((-1.0) ** n * (t - (n - 1.0)) ** n / math.factorial(n) for n in range(math.floor(t) + 2)) for t in times])
    return float(np.max(np.abs(trace.states[:, 0] - exact)))


def _apnoea_run(purpose: str) -> float:
    loop = p2(3.0, 1.0)
    times, pressure, _ = run_breathing(loop, 300.0, 0.0125)
    trace = simulate(loop, duration=300.0, offset={"PaCO2": 2.0, "PvCO2": 2.0, "central PCO2": 2.0}, purpose=purpose, output_times=times)  # type: ignore[arg-type]
    return float(np.max(np.abs(trace.states[:, 0] - pressure)) / np.max(np.abs(pressure)))


def _general_integrator() -> float:
    # Method of steps with scipy's DOP853 and its dense output on the plain loop.
    loop = PlainLoop(production_per_s=0.2, largest_clearance_per_s=0.8, exponent=8.0, half_level=0.5, delay_s=10.0)
    pieces: list[Callable[[float], float]] = [lambda t: 0.6]
    start, value = 0.0, 0.6
    for _ in range(4):
        past = pieces[-1]

        def slope(t: float, x: np.ndarray, past: Callable[[float], float] = past) -> np.ndarray:
            u = past(t - 10.0) / 0.5
            return 0.2 - 0.8 * u**8 / (1.0 + u**8) * x

        found = solve_ivp(slope, (start, start + 10.0), [value], method="DOP853", rtol=1e-12, atol=1e-13, dense_output=True)
        pieces.append(lambda t, found=found: float(found.sol(t)[0]))
        start, value = start + 10.0, float(found.y[0, -1])
    times = np.linspace(0.0, 40.0, 161)
    wanted = [pieces[min(int(t // 10.0), 3) + 1](t) for t in times]
    trace = simulate(loop, duration=40.0, offset=0.1, purpose="release", output_times=times)
    return float(np.max(np.abs(trace.states[:, 0] - wanted)))


def _ensemble_run() -> float:
    loop = p2(2.0, 1.0)
    batch = loop.with_sensitivity(np.array([0.6, 0.8, 1.0]) * loop.sensitivity)
    runs = ensemble(batch.form(), batch.rest(), duration=300.0, step=0.25, offset=2.0)
    last = simulate(loop, duration=300.0, offset=2.0, purpose="release", output_times=runs.times)
    return float(np.max(np.abs(runs.states[:, 0, 2] - last.states[:, 0])) / 40.0)


def _lambert() -> float:
    roots = rightmost_roots(*scalar_loop(0.1, 4.0, 8.0))
    return abs(roots.spectral_abscissa - (complex(lambertw(-4.0 * 8.0 * math.exp(0.8), 0)) / 8.0 - 0.1).real)


def _ratio_twenty() -> float:
    loop = p2(2.5, 1.5, 3.0, 60.0)
    return max(abs(p2_characteristic(loop, root)) for root in rightmost_roots(loop.form(), loop.rest(), count=4).values)


def _lag_gain() -> float:
    # First-order lag T = tau = 1: tan w = -w, K_c = sqrt(1 + w^2) = 2.26183 (computed to all digits here by bisection).
    low, high = math.pi / 2 + 1e-9, math.pi
    for _ in range(200):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if math.tan(middle) + middle > 0.0 else (middle, high)
    return abs(margins(*linear_form([[-1.0]], [-1.0], [[1.0]], [1.0])).gain_margin - math.sqrt(1.0 + low * low))  # type: ignore[operator]


def _critical_delay() -> float:
    return abs(0.3 + margins(*scalar_loop(0.5, 1.0, 0.3)).delay_margin_s - 2.0 * math.pi / 3.0 / math.sqrt(0.75))  # type: ignore[operator]


def _on_the_boundary() -> float:
    # x' = -b x(t - tau) at b tau = pi/2 to rounding: the growth is nought.
    return abs(rightmost_roots(*scalar_loop(0.0, math.pi / 2.0, 1.0)).spectral_abscissa)


def _two_crossings() -> float:
    # x'' + 2 z x' + x = -k x(t - tau) loses, regains and loses stability; the closed form of both crossing frequencies.
    z, k = 0.05, 0.6
    found = margins(*oscillator(z, k, 0.2))
    a = 1.0 - 2.0 * z * z
    wanted = sorted(math.sqrt(a + sign * math.sqrt(a * a - 1.0 + k * k)) for sign in (-1.0, 1.0))
    return max(abs(x - y) for x, y in zip(sorted(c.frequency for c in found.gain_crossovers), wanted, strict=True))


def _plain_boundary() -> float:
    loop = PlainLoop(production_per_s=0.2, largest_clearance_per_s=0.8, exponent=8.0, half_level=0.5, delay_s=5.0)
    worst = 0.0
    for curve in boundary_curve(loop, (3.0, 20.0), (1.0, 20.0)).curves:
        for n, tau in zip(curve.sensitivity, curve.delay_s, strict=True):
            a, b = 0.4, 0.4 * n * 0.5
            worst = max(worst, abs(tau - math.acos(-a / b) / math.sqrt(b * b - a * a)))
    return worst


def _continuation() -> float:
    loop = p2(2.0, 1.0)
    found = boundary_in_two(loop, "lung_volume_l", "peripheral_delay_s", ((1.5, 6.0), (4.0, 30.0)))
    assert found.curves
    worst = 0.0
    for curve in found.curves:
        for volume, delay in zip(curve.first[::8], curve.second[::8], strict=True):
            one = loop.with_numbers(lung_volume_l=float(volume), peripheral_delay_s=float(delay))
            worst = max(worst, min(abs(crossing.gain - 1.0) for crossing in margins(one.form(), one.rest()).phase_crossovers))
    return worst


def _batch_margins() -> float:
    loop = p2(2.0, 1.0)
    scale = np.linspace(0.3, 3.0, 60)
    batch = loop.with_sensitivity(scale * loop.sensitivity)
    many = margins_batch(batch.form(), batch.rest())
    singles = [margins(one.form(), one.rest()).loop_gain for one in (loop.with_sensitivity(s * loop.sensitivity) for s in scale)]
    return float(np.max(np.abs(many.loop_gain - np.array(singles))))


def _cycle() -> float:
    loop = p2(3.0, 1.0)
    times, pressure, _ = run_breathing(loop, 1500.0, 0.05)
    return abs(limit_cycle(loop.form(), loop.rest(), order=48).period_s / cycle_of(times, pressure)[0] - 1.0)  # type: ignore[operator]


def _trivial_multiplier() -> float:
    loop = PlainLoop(production_per_s=0.2, largest_clearance_per_s=0.8, exponent=5.0, half_level=0.5, delay_s=10.0)
    form, rest = loop.form(), loop.rest()
    return floquet_multipliers(form, rest, limit_cycle(form, rest, order=32), steps=480).trivial_error


def _derivative() -> float:
    loop, name, h = p2(2.0, 1.0), "lung_volume_l", 1e-4
    found = next(item for item in sensitivities(loop, (name,)) if item.name == name)
    gains = [margins(one.form(), one.rest()).loop_gain for one in (loop.with_numbers(lung_volume_l=3.0 + s * h) for s in (1.0, -1.0))]
    return abs(found.loop_gain - (gains[0] - gains[1]) / (2.0 * h)) / abs(found.loop_gain)  # type: ignore[operator]


TABLE: tuple[tuple[str, str, float, Check], ...] = (
    ("simulation, release, plain delay", "method-of-steps polynomial (Paul 1994)", 1e-10, lambda: _plain_run("release")),
    ("simulation, drag, plain delay", "method-of-steps polynomial (Paul 1994)", 3e-4, lambda: _plain_run("drag")),
    ("simulation, release, plain loop", "scipy DOP853 step by step", 1e-8, _general_integrator),
    ("simulation, release, apnoea", "hand-written Runge-Kutta, h = 0.0125 s", 1e-6, lambda: _apnoea_run("release")),
    ("simulation, drag, apnoea", "hand-written Runge-Kutta, h = 0.0125 s", 3e-4, lambda: _apnoea_run("drag")),
    ("ensemble, h = 0.25 s", "exact path", 1e-4, _ensemble_run),
    ("rightmost root", "Lambert W (scipy)", 1e-12, _lambert),
    ("four roots at delay ratio 20", "hand-written characteristic function", 1e-11, _ratio_twenty),
    ("growth on the boundary", "b tau = pi/2 (Hayes 1950)", 1e-12, _on_the_boundary),
    ("gain margin of a lag", "tan w = -w T by bisection", 1e-10, _lag_gain),
    ("delay margin", "arccos(-a/b)/sqrt(b^2 - a^2)", 1e-10, _critical_delay),
    ("both gain crossovers of a resonance", "roots of a quadratic", 1e-10, _two_crossings),
    ("boundary, exponent against delay", "closed form of each point", 1e-8, _plain_boundary),
    ("boundary in two parameters", "loop gain 1 by single margins", 1e-8, _continuation),
    ("60 margins at once", "one by one", 1e-10, _batch_margins),
    ("period of the cycle, 48 harmonics", "hand-written Runge-Kutta, 1,500 s", 1e-4, _cycle),
    ("Floquet multiplier of the shift in time", "exactly 1", 1e-3, _trivial_multiplier),
    ("derivative of the loop gain", "central difference", 1e-6, _derivative),
)


@pytest.mark.parametrize(("method", "oracle", "bound", "check"), TABLE, ids=[row[0] for row in TABLE])
def test_accuracy(method: str, oracle: str, bound: float, check: Check, record_property: Callable[[str, object], None]) -> None:
    # Bounds: what the method promises (drag 3e-4, release 1e-6, boundary and crossings 1e-8), or what the coarser of the two can tell.
    error = check()
    record_property("accuracy", (method, oracle, error, bound))
    assert error <= bound


def test_without_breaking_points_the_error_is_worse(record_property: Callable[[str, object], None]) -> None:
    # The same solver with and without its breaking points, long pieces, against a fine Runge-Kutta run that shares no code with it.
    run = run_of(p2(3.0, 1.0), 120.0, 2.0)
    times = np.linspace(0.0, 120.0, 481)
    fine = runge_kutta(run, times, 0.0125, error_estimate=0.0)
    bare = {"tolerance": math.inf, "piece": 1.5, "degree": 10}
    kept = difference(exact_path(run, times, 0.3, settings=ExactSettings(**bare)), fine)
    lost = difference(exact_path(run, times, 0.3, settings=ExactSettings(highest_order=0, locate_kinks=False, **bare)), fine)
    record_property("accuracy", ("simulation with breaking points", "fine Runge-Kutta run", kept, 1e-5))
    record_property("accuracy", ("the same without them", "fine Runge-Kutta run", lost, float("inf")))
    assert kept <= 1e-5
    assert lost > 20.0 * kept
