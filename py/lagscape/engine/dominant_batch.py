"""The dominant oscillation of thousands of loops at once, also of loops so calm that it lies deep in the left half plane.

The rule is that of `roots`. From the deciding phase crossover Newton steps on log(-L) = 0 lead to the root that it becomes as the gain passes
1. In a very calm loop these steps may end on the real axis: that crossover has no oscillation of its own. Then the other crossovers are
asked, the strongest first; and where none answers, the rightmost pair that Newton steps on D + sum_j N_j e^(-s tau_j) find from a fan of
seeds, all members together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from lagscape.engine.margins_batch import MarginsBatch
from lagscape.engine.open_loop import OpenLoop
from lagscape.loops.protocol import Array

__all__ = ["DominantBatch", "dominant_batch"]

Mask = npt.NDArray[np.bool_]

_STEPS = 12
_FREQUENCIES = 48
_TURNS = 1.3
"""Crossovers are looked for up to this many turns of the shortest delay: the first range of `crossings`."""
_ASKED = 6
"""Crossovers asked of each member, as in `roots`."""
_FAN = (-2.2 + 3.0j, -3.2 + 3.3j, -4.5 + 4.0j, -2.7 + 7.8j, -3.5 + 7.8j, -4.5 + 7.5j, -5.5 + 5.0j, -0.6 + 2.0j)
"""Seeds over the shortest delay: where pairs of calm loops lay in a search over breathing and reflex loops."""
_POLISH = 14
_CHUNK = 2048


@dataclass(frozen=True)
class DominantBatch:
    """One entry a member, shape (n,). Where `has` is False the others are 0 and mean nothing."""

    has: Mask
    """bool; False where no crossover leads to an oscillation: what disturbs the loop dies without a cycle."""
    growth_rate_per_s: Array
    cycle_length_s: Array


def dominant_batch(opened: OpenLoop, known: MarginsBatch) -> DominantBatch:
    """The dominant oscillatory root of every member of a one-axis batch.

    Parameters
    ----------
    opened : OpenLoop
    known : MarginsBatch
        Its margins; `growth=False` is enough.
    """
    members = known.loop_gain.size
    root = np.zeros(members, dtype=complex)
    has = np.zeros(members, dtype=bool)
    which = np.flatnonzero(known.has_phase_crossover)
    root[which], has[which] = _towards(opened.member(which), known.phase_crossover_frequency[which])
    others = np.flatnonzero(~has & np.asarray(known.has_phase_crossover))
    for start in range(0, others.size, _CHUNK):
        part = others[start : start + _CHUNK]
        few = opened.member(part)
        root[part], has[part] = _from_others(few, known.phase_crossover_frequency[part])
        left = np.flatnonzero(~has[part])
        if left.size:
            root[part[left]], has[part[left]] = _from_fan(few.member(left))
    period = np.divide(2.0 * np.pi, root.imag, out=np.zeros(members), where=has)
    return DominantBatch(has, np.where(has, root.real, 0.0), period)


def _towards(opened: OpenLoop, crossover: Array) -> tuple[np.ndarray, Mask]:
    """Newton steps on log(-L) = 0 from i w, each at most 0.4 |s| long: the roots, and which of them settled above the real axis."""
    end = 1j * crossover
    settled = np.zeros(end.size, dtype=bool)
    active, s, few = np.arange(end.size), end, opened
    for _ in range(_STEPS):
        with np.errstate(all="ignore"):
            value, slope = few.with_slope(s)
            step = np.log(-value) * value / slope
            length, size = np.abs(step), np.abs(s)
            step = np.where(length > 0.4 * size, step * (0.4 * size / np.maximum(length, 1e-300)), step)
            s = s - step
        done = (length <= 1e-8 * np.abs(s)) & (s.imag > 1e-8 * np.abs(s))
        end[active[done]] = s[done]
        settled[active[done]] = True
        # What has come down to the real axis does not leave it again.
        keep = ~done & np.isfinite(s.real) & (np.abs(s.imag) > 1e-8 * np.abs(s))
        if not keep.any():
            break
        if not keep.all():
            active, s, few = active[keep], s[keep], few.member(keep)
    return end, settled


def _from_others(opened: OpenLoop, deciding: Array) -> tuple[np.ndarray, Mask]:
    """The root of the strongest crossover, the deciding one left out, that leads to an oscillation."""
    members = deciding.size
    share = np.arange(1, _FREQUENCIES + 1)[:, None] / _FREQUENCIES
    frequency = share * (_TURNS * 2.0 * np.pi / opened.shortest_delay)
    response = opened.response(frequency)
    upper = response.imag > 0.0
    row, who = np.nonzero(upper[1:] != upper[:-1])
    left, right = response[row, who], response[row + 1, who]
    part = left.imag / (left.imag - right.imag)
    real = left.real + part * (right.real - left.real)
    w = frequency[row, who] + part * (frequency[row + 1, who] - frequency[row, who])
    step = frequency[0]
    taken = (real < 0.0) & (np.abs(w - deciding[who]) > step[who])
    who, w, gain = who[taken], w[taken], -real[taken]
    order = np.lexsort((-gain, who))
    who, w = who[order], w[order]
    first = np.searchsorted(who, np.arange(members))
    rank = np.arange(who.size) - first[who]
    root, has = np.zeros(members, dtype=complex), np.zeros(members, dtype=bool)
    for turn in range(_ASKED):
        asked = np.flatnonzero((rank == turn) & ~has[who])
        if not asked.size:
            continue
        found, settled = _towards(opened.member(who[asked]), w[asked])
        root[who[asked[settled]]] = found[settled]
        has[who[asked[settled]]] = True
    return root, has


def _from_fan(opened: OpenLoop) -> tuple[np.ndarray, Mask]:
    """The rightmost pair that any seed of the fan, or an open-loop resonance, leads to."""
    members = opened.coefficients.shape[2]
    scale = 1.0 / np.broadcast_to(opened.shortest_delay, members)
    seeds = [seed * scale for seed in _FAN]
    seeds += [np.where(centre > 0.0, -width + 1j * centre, _FAN[0] * scale) for centre, width in opened.resonances()]
    best = np.full(members, -np.inf + 0j)
    for seed in seeds:
        root, settled = _polished(opened, seed)
        best = np.where(settled & (root.real > best.real), root, best)
    has = np.isfinite(best.real)
    return np.where(has, best, 0.0), has


def _polished(opened: OpenLoop, seed: np.ndarray) -> tuple[np.ndarray, Mask]:
    """Newton steps on the characteristic function: the roots, and which of them settled above the real axis."""
    root, settled = seed.copy(), np.zeros(seed.size, dtype=bool)
    active, s, few = np.arange(seed.size), seed, opened
    for _ in range(_POLISH):
        value = few.coefficients[0] + 0j * s
        slope = np.zeros_like(value)
        with np.errstate(all="ignore"):
            for row in few.coefficients[1:]:
                slope = slope * s + value
                value = value * s + row
            total, total_slope = value[0], slope[0]
            for index, delay in enumerate(few.delays):
                turn = np.exp(-s * delay)
                total = total + value[index + 1] * turn
                total_slope = total_slope + (slope[index + 1] - delay * value[index + 1]) * turn
            step = total / total_slope
            s = s - step
            done = np.abs(step) <= 1e-9 * np.abs(s)
        root[active[done]] = s[done]
        settled[active[done]] = True
        keep = ~done & np.isfinite(s)
        if not keep.any():
            break
        if keep.sum() < 0.8 * keep.size:
            active, s, few = active[keep], s[keep], few.member(keep)
    return root, settled & (root.imag > 1e-8 * np.abs(root))
