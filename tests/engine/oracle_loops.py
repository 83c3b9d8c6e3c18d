"""Small loops whose behaviour is known in closed form, written as drive forms by hand."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any, ClassVar

import numpy as np

from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.protocol import DriveForm, Rest


@dataclass(frozen=True)
class SumDrive:
    """v = the sum of what is sensed."""

    has_kink: ClassVar[bool] = False

    def value(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return np.sum(sensed, axis=0) + push

    def gradient(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return np.ones_like(sensed)

    def switch(self, sensed: Any, control: Any, push: Any = 0.0) -> Any:
        return np.ones_like(sensed[0])

    def scalar(self, sensed: Any, control: Any, push: float) -> float:
        return float(sum(sensed) + push)


def linear_form(plant: Any, push: Any, sensed: Any, delays: Any, by_output: Any = None) -> tuple[DriveForm, Rest]:
    """x' = A x + v (N x + b), v = sum_j h_j . x(t - tau_j), at rest at 0."""
    plant = np.atleast_2d(np.asarray(plant, dtype=float))
    n, sensed = plant.shape[0], np.atleast_2d(np.asarray(sensed, dtype=float))
    form = DriveForm(
        plant_names=tuple(f"x{i}" for i in range(n)),
        control_names=(),
        plant=plant,
        plant_by_output=np.zeros((n, n)) if by_output is None else np.atleast_2d(np.asarray(by_output, dtype=float)),
        input_vector=np.asarray(push, dtype=float),
        constant=np.zeros(n),
        sensed_rows=sensed,
        sensed_delays=tuple(float(delay) for delay in delays),
        control=np.zeros((0, 0)),
        control_by_sensed=np.zeros((0, sensed.shape[0])),
        control_constant=np.zeros(0),
        drive=SumDrive(),
        silent_level=-np.inf,
    )
    return form, Rest(np.zeros(n), 0.0)


def scalar_loop(a: float, b: float, delay: float) -> tuple[DriveForm, Rest]:
    """x' = -a x - b x(t - tau)."""
    return linear_form([[-a]], [-b], [[1.0]], [delay])


def oscillator(damping: float, gain: float, delay: float) -> tuple[DriveForm, Rest]:
    """x'' + 2 z x' + x = -k x(t - tau)."""
    return linear_form([[0.0, 1.0], [-1.0, -2.0 * damping]], [0.0, -gain], [[1.0, 0.0]], [delay])


def wright(alpha: float) -> tuple[DriveForm, Rest]:
    """x' = -alpha x(t - 1) (1 + x)."""
    return linear_form([[0.0]], [-alpha], [[1.0]], [1.0], by_output=[[-alpha]])


def p2(peripheral: float = 3.0, central: float = 1.0, peripheral_delay: float = 12.0, central_delay: float = 17.0) -> BreathingLoop:
    """The breathing loop on which the methods were first measured: all ventilation alveolar, resting PCO2 40 mmHg."""
    return BreathingLoop(
        co2_production_l_min=0.2,
        resting_paco2_mmhg=40.0,
        dead_space_fraction=0.0,
        lung_volume_l=3.0,
        tissue_volume_l=15.0,
        cardiac_output_l_min=5.0,
        co2_solubility_per_mmhg=0.0065,
        peripheral_gain_l_min_mmhg=peripheral,
        central_gain_l_min_mmhg=central,
        arterial_po2_mmhg=100.0,
        peripheral_delay_s=peripheral_delay,
        central_delay_s=central_delay,
        central_time_constant_s=60.0,
    )


def p2_characteristic(loop: BreathingLoop, s: complex) -> complex:
    """f of the breathing loop, written out by hand from its equations; zero at a characteristic root."""
    q = 863.0 * 0.0065 * loop.cardiac_output_l_min / 60.0
    tissue = loop.cardiac_output_l_min / (60.0 * loop.tissue_volume_l)
    ventilation = 863.0 * loop.co2_production_l_min / loop.resting_paco2_mmhg / 60.0
    fast = loop.peripheral_gain_l_min_mmhg / 60.0 * np.exp(-s * loop.peripheral_delay_s)
    slow = loop.central_gain_l_min_mmhg / 60.0 * np.exp(-s * loop.central_delay_s) / (1.0 + s * loop.central_time_constant_s)
    return loop.lung_volume_l * s + q + ventilation - q * tissue / (s + tissue) + loop.resting_paco2_mmhg * (fast + slow)


def roots_in_box(function: Any, low: complex, high: complex, points: int = 4000) -> int:
    """How many roots lie in a rectangle, by the argument principle; the function must be analytic inside and not vanish on its edge."""
    corners = [low, complex(high.real, low.imag), high, complex(low.real, high.imag), low]
    path = np.concatenate([a + (b - a) * np.linspace(0.0, 1.0, points, endpoint=False) for a, b in pairwise(corners)])
    values = function(np.append(path, path[0]))
    turns = np.sum(np.angle(values[1:] / values[:-1])) / (2.0 * np.pi)
    assert abs(turns - round(turns)) < 1e-6
    return round(turns)


def run_breathing(loop: BreathingLoop, duration: float, step: float, push: float = 2.0) -> tuple[Any, Any, Any]:
    """The breathing loop's own equations by a plain fourth-order Runge-Kutta loop; times, PaCO2 and ventilation. Shares no code with the engine.

    Both delays must be whole numbers of half steps.
    """
    share = 1.0 - loop.dead_space_fraction
    q = 863.0 * loop.co2_solubility_per_mmhg * loop.cardiac_output_l_min / 60.0
    tissue = loop.cardiac_output_l_min / 60.0 / loop.tissue_volume_l
    made = loop.co2_production_l_min / 60.0 / (loop.tissue_volume_l * loop.co2_solubility_per_mmhg)
    p0 = loop.resting_paco2_mmhg
    v0 = 863.0 * loop.co2_production_l_min / (share * p0)
    gain_p, gain_c = loop.peripheral_gain_l_min_mmhg, loop.central_gain_l_min_mmhg
    back_p, back_c = round(loop.peripheral_delay_s / step * 2), round(loop.central_delay_s / step * 2)
    assert abs(back_p * step / 2 - loop.peripheral_delay_s) < 1e-9 and abs(back_c * step / 2 - loop.central_delay_s) < 1e-9
    count = round(duration / step)
    history = [p0 + push] * (max(back_p, back_c) + 1)
    offset = len(history) - 1
    pa, pv, pc = p0 + push, p0 + loop.co2_production_l_min / (loop.co2_solubility_per_mmhg * loop.cardiac_output_l_min) + push, p0 + push

    def slope(pa: float, pv: float, pc: float, at: int) -> tuple[float, float, float, float]:
        late, later = history[offset + at - back_p], history[offset + at - back_c]
        v = max(0.0, v0 + gain_p * (late - p0) + gain_c * (pc - p0))
        return (
            (q * (pv - pa) - share * v / 60.0 * pa) / loop.lung_volume_l,
            made - tissue * (pv - pa),
            (later - pc) / loop.central_time_constant_s,
            v,
        )

    pressures, ventilation = [pa], []
    for i in range(count):
        a1, b1, c1, v = slope(pa, pv, pc, 2 * i)
        ventilation.append(v)
        h = step
        a2, b2, c2, _ = slope(pa + h / 2 * a1, pv + h / 2 * b1, pc + h / 2 * c1, 2 * i + 1)
        a3, b3, c3, _ = slope(pa + h / 2 * a2, pv + h / 2 * b2, pc + h / 2 * c2, 2 * i + 1)
        a4, b4, c4, _ = slope(pa + h * a3, pv + h * b3, pc + h * c3, 2 * i + 2)
        new = pa + h / 6 * (a1 + 2 * a2 + 2 * a3 + a4)
        history.append(0.5 * (pa + new) + h / 8 * (a1 - a4))
        history.append(new)
        pa, pv, pc = new, pv + h / 6 * (b1 + 2 * b2 + 2 * b3 + b4), pc + h / 6 * (c1 + 2 * c2 + 2 * c3 + c4)
        pressures.append(pa)
    ventilation.append(ventilation[-1])
    return np.arange(count + 1) * step, np.array(pressures), np.array(ventilation)


def cycle_of(times: Any, curve: Any) -> tuple[float, float]:
    """Period and peak to trough of the last cycles of a sampled curve, with parabolas through its extremes."""
    late = slice(len(times) * 5 // 6, None)
    t, y = times[late], curve[late]
    middle = 0.5 * (y.max() + y.min())
    rises = np.flatnonzero((y[:-1] < middle) & (y[1:] >= middle))
    cross = t[rises] + (middle - y[rises]) / (y[rises + 1] - y[rises]) * (t[1] - t[0])

    def top(values: Any) -> float:
        i = int(np.argmax(values[1:-1])) + 1
        bend = values[i - 1] - 2 * values[i] + values[i + 1]
        return float(values[i] - (values[i + 1] - values[i - 1]) ** 2 / (8 * bend)) if bend else float(values[i])

    return float((cross[-1] - cross[0]) / (len(cross) - 1)), top(y) + top(-y)
