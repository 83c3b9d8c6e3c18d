"""Where the open loop of one case crosses the negative real axis and the unit circle: every such frequency, and the roots they imply.

The search is exhaustive by construction. Above some frequency the envelope sum |N_j| / |D| stays below the level that matters, so
the range is finite; inside it the grid is refined until the phase turns by less than a radian between neighbours, so no turn of
the curve is missed; every bracket is then closed by safeguarded Newton steps. The number of unstable roots follows from the same
crossings by Nyquist's criterion.

References
----------
Nyquist 1932, Bell System Tech. J. 11, 126-147.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass

import numpy as np

from lagscape.engine.open_loop import OpenLoop
from lagscape.loops.protocol import Array

__all__ = ["Crossings", "GainCrossing", "PhaseCrossing", "find_crossings"]

_LARGEST_PHASE_STEP = 0.9
"""rad between neighbouring frequencies; beyond pi a turn could be missed, so this is a third of that."""
_STEPS_PER_HALF_TURN = 6
_MOST_FREQUENCIES = 20_000
_TENTHS = np.arange(1, 10) / 10.0
_BEYOND = np.geomspace(1.0, 1e6, 60)
_EVEN_SHARES = np.linspace(0.0, 1.0, 48)
_POLE_OFFSETS = np.array([-6.0, -2.5, -1.0, -0.4, 0.0, 0.4, 1.0, 2.5, 6.0])


@dataclass(frozen=True)
class PhaseCrossing:
    """L(i w) is real and negative here."""

    frequency: float
    """rad/s."""
    gain: float
    """|L|, no unit."""
    direction: int
    """+1 where a root pair would leave to the right if the gain passed 1 here, -1 where one would come back."""


@dataclass(frozen=True)
class GainCrossing:
    """|L(i w)| = 1 here."""

    frequency: float
    """rad/s."""
    lag_left: float
    """rad in (-pi, pi]: pi + arg L, the lag that is missing to instability at this frequency."""
    falling: bool
    """True where |L| falls with frequency: more delay then moves a root pair to the right."""


@dataclass(frozen=True)
class Crossings:
    """Every crossing of one open loop, by rising frequency."""

    phase: tuple[PhaseCrossing, ...]
    """All with a gain of at least that of the deciding one, and the others found on the way."""
    gain: tuple[GainCrossing, ...]
    unstable_roots: int
    """Roots of 1 + L = 0 with positive real part, by Nyquist's criterion."""
    complete: bool
    """False where the range needed more frequencies than are allowed (delays in a ratio of thousands)."""


def find_crossings(opened: OpenLoop) -> Crossings:
    """All crossings of one open loop; see the module."""
    if not opened.has_feedback:
        return Crossings((), (), int(np.sum(opened.poles.real > 0.0)), True)
    shortest, longest = opened.shortest_delay, opened.longest_delay
    frequency, response, complete = _sample(opened, 0.0, _first_range(opened, shortest), longest)
    while True:
        phase = _phase_crossings(opened, frequency, response)
        # A crossing beyond the sampled range could still matter while the envelope there exceeds the deciding gain.
        level = min(1.0, max((crossing.gain for crossing in phase), default=math.inf))
        end = _last_above(opened, frequency[-1], level if phase else 1.0)
        if end <= frequency[-1] or not complete:
            break
        more, more_response, complete = _sample(opened, frequency[-1], end, longest)
        frequency, response = np.concatenate([frequency, more]), np.concatenate([response, more_response])
    gain = _gain_crossings(opened, frequency, response)
    return Crossings(phase, gain, _unstable_roots(opened, phase, response[0]), complete)


def _first_range(opened: OpenLoop, shortest: float) -> float:
    # The phase of a lag and a delay passes -pi before pi / tau; one turn more shows whether a later crossing is higher.
    return 2.6 * math.pi / shortest


def _last_above(opened: OpenLoop, start: float, level: float) -> float:
    """The last frequency, if any, beyond `start` where the envelope is not yet below `level`; `start` where there is none."""
    beyond = start * _BEYOND
    above = np.flatnonzero(opened.envelope(beyond) >= level)
    return float(beyond[min(above[-1] + 1, 59)]) if above.size else start


def _sample(opened: OpenLoop, start: float, end: float, longest: float) -> tuple[Array, np.ndarray, bool]:
    """Frequencies in (start, end], ascending, refined until the phase steps are small, with L there."""
    count = math.ceil((end - start) * longest * _STEPS_PER_HALF_TURN / math.pi) + 8
    complete = count <= _MOST_FREQUENCIES
    parts = [np.linspace(start, end, min(count, _MOST_FREQUENCIES) + 1)[1:]]
    if start == 0.0:
        sizes = np.abs(opened.poles)
        slow = min([1.0 / longest, *(size for size in sizes.tolist() if size * longest > 1e-9)])
        lowest = 1e-3 * min(slow, end)
        parts.append(lowest * (end / lowest) ** _EVEN_SHARES)
    for pole in opened.poles.tolist():
        if pole.imag > 0.0:
            parts.append(pole.imag + max(abs(pole.real), 1e-9 * pole.imag) * _POLE_OFFSETS)
    frequency = np.unique(np.concatenate(parts))
    frequency = frequency[(frequency > start) & (frequency <= end)]
    response = opened.response(frequency)
    for _ in range(8):
        with np.errstate(divide="ignore", invalid="ignore"):
            turn = np.abs(np.angle(response[1:] * np.conj(response[:-1])))
        coarse = np.flatnonzero(turn > _LARGEST_PHASE_STEP)
        if not coarse.size or frequency.size > 2 * _MOST_FREQUENCIES:
            break
        middle = 0.5 * (frequency[coarse] + frequency[coarse + 1])
        frequency = np.insert(frequency, coarse + 1, middle)
        response = np.insert(response, coarse + 1, opened.response(middle))
    for _ in range(3):
        about = _near_turns(np.abs(response))
        if not about.size:
            break
        finer = frequency[about - 1, None] + (frequency[about + 1] - frequency[about - 1])[:, None] * _TENTHS
        frequency, first = np.unique(np.concatenate([frequency, finer.ravel()]), return_index=True)
        response = np.concatenate([response, opened.response(finer.ravel())])[first]
    return frequency, response, complete


def _near_turns(size: Array) -> np.ndarray:
    """Where |L| turns just before it reaches 1: between these samples it may pass 1 and come back."""
    middle, left, right = size[1:-1], size[:-2], size[2:]
    peak = (middle >= left) & (middle > right) & (middle < 1.0) & (middle > 0.8)
    dip = (middle <= left) & (middle < right) & (middle > 1.0) & (middle < 1.25)
    return np.flatnonzero(peak | dip) + 1


def _phase_crossings(opened: OpenLoop, frequency: Array, response: np.ndarray) -> tuple[PhaseCrossing, ...]:
    above = response.imag > 0.0
    index = np.flatnonzero(above[1:] != above[:-1])
    found = []
    for i in index.tolist():
        left, right = complex(response[i]), complex(response[i + 1])
        share = left.imag / (left.imag - right.imag)
        if left.real + share * (right.real - left.real) >= 0.0:
            continue
        low, high = float(frequency[i]), float(frequency[i + 1])
        w = low + share * (high - low)
        rising = bool(above[i + 1])
        for _ in range(40):
            value, slope = opened.at(1j * w)
            angle = cmath.phase(-value)
            if (angle > 0.0) == rising:
                low = w
            else:
                high = w
            # Im L > 0 on the negative axis is arg(-L) < 0, hence the sides above.
            turn = (slope / value).real
            step = -angle / turn if turn else math.inf
            new = w + step
            if not low <= new <= high:
                new = 0.5 * (low + high)
            done = abs(new - w) <= 4e-16 * w
            w = new
            if done or angle == 0.0:
                break
        found.append(PhaseCrossing(w, abs(opened.at(1j * w)[0]), 1 if rising else -1))
    return tuple(found)


def _gain_crossings(opened: OpenLoop, frequency: Array, response: np.ndarray) -> tuple[GainCrossing, ...]:
    above = np.abs(response) > 1.0
    found = []
    for i in np.flatnonzero(above[1:] != above[:-1]).tolist():
        low, high = float(frequency[i]), float(frequency[i + 1])
        falling = bool(above[i])
        w = math.sqrt(low * high)
        for _ in range(60):
            value, slope = opened.at(1j * w)
            level = math.log(abs(value))
            if (level > 0.0) == falling:
                low = w
            else:
                high = w
            rate = -(slope / value).imag
            new = w - level / rate if rate else math.inf
            if not low <= new <= high:
                new = 0.5 * (low + high)
            done = abs(new - w) <= 4e-16 * w
            w = new
            if done or level == 0.0:
                break
        lag = cmath.phase(-opened.at(1j * w)[0])
        found.append(GainCrossing(w, lag, falling))
    return tuple(found)


def _unstable_roots(opened: OpenLoop, phase: tuple[PhaseCrossing, ...], first: complex) -> int:
    poles = opened.poles
    # A pole at the origin belongs to the left: the usual indentation of the contour.
    unstable = int(np.sum(poles.real > 1e-13 * np.max(np.abs(poles), initial=0.0)))
    unstable += 2 * sum(crossing.direction for crossing in phase if crossing.gain > 1.0)
    at_zero = opened.coefficients[-1]
    if at_zero[0] != 0.0 and float(np.sum(at_zero[1:])) * math.copysign(1.0, at_zero[0]) < -abs(at_zero[0]):
        unstable += 1 if first.imag > 0.0 else -1
    return unstable
