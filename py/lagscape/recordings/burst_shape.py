"""How long a burst of ventilation really is, from how long its smoothed envelope stays over a level.

Two shapes bracket what breathing does: the sine cut off at zero that the loop-gain formula assumes (Sands et al. 2011,
Am J Respir Crit Care Med 184:1067), and full breaths that start and stop at once. Both are put through the very smoothing
that the envelope went through, for every duty ratio, and read backwards.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

__all__ = ["MOTION_SMOOTHING", "BurstShape", "burst_shape"]

MOTION_SMOOTHING = 0.12 / 0.35
"""Width of the Gaussian in the motion over that of the Gaussian in the envelope; see envelope.py."""

_N = 512
_UPPER = 0.7


@dataclass(frozen=True, eq=False)
class BurstShape:
    """For each duty ratio: share of the cycle over the level, and length of the edge from the level to 0.7 (cycles).

    Arrays of shape (n_duty_ratios,), one for the gradual and one for the abrupt shape.
    """

    duty_ratios: np.ndarray
    gradual_share: np.ndarray
    gradual_edge: np.ndarray
    abrupt_share: np.ndarray
    abrupt_edge: np.ndarray

    def read(self, share: float, edge: float) -> tuple[float, float]:
        """Duty ratio, and how gradual the edge is (0 abrupt, 1 the sine), from a measured share and edge length."""
        gradual = float(np.interp(share, self.gradual_share, self.duty_ratios))
        abrupt = float(np.interp(share, self.abrupt_share, self.duty_ratios))
        long = float(np.interp(gradual, self.duty_ratios, self.gradual_edge))
        short = float(np.interp(abrupt, self.duty_ratios, self.abrupt_edge))
        if long - short < 1e-6:
            return abrupt, 0.0
        # Noise blurs the measure; near either end it means that end.
        likeness = float(np.clip(((edge - short) / (long - short) - 0.2) / 0.4, 0.0, 1.0))
        return likeness * gradual + (1.0 - likeness) * abrupt, likeness


def burst_shape(smoothing: float, level: float, is_ventilation: bool) -> BurstShape:
    """The two shapes for an envelope smoothed by a Gaussian of this standard deviation (in cycles)."""
    return _shape(round(float(np.clip(smoothing, 1e-3, 0.25)), 3), level, is_ventilation)


@lru_cache(maxsize=256)
def _shape(smoothing: float, level: float, is_ventilation: bool) -> BurstShape:
    duty = np.arange(0.04, 1.0001, 0.01)
    phase = np.arange(_N) / _N
    phase = np.minimum(phase, 1.0 - phase)
    edge = np.cos(np.pi * duty)[:, None]
    sine = np.maximum(np.cos(2.0 * np.pi * phase) - edge, 0.0) / (1.0 - edge)
    # A soft corner of one grid step keeps the share continuous in the duty ratio.
    block = np.clip(0.5 + (0.5 * duty[:, None] - phase) * _N, 0.0, 1.0)
    shares, edges = [], []
    for wave in (sine, block):
        seen, top = _seen(wave, smoothing, is_ventilation)
        low = _crossing(seen, level * top)
        shares.append(np.maximum.accumulate(2.0 * low))
        edges.append(low - _crossing(seen, np.minimum(_UPPER * top, seen[:, 0] * 0.999)))
    return BurstShape(duty, shares[0], edges[0], shares[1], edges[1])


def _seen(wave: np.ndarray, smoothing: float, is_ventilation: bool) -> tuple[np.ndarray, np.ndarray]:
    """The envelope of each row, and its peak after one more smoothing, as envelope.py and cycles.py make them."""
    if is_ventilation:
        seen = _smoothed(wave, smoothing)
        return seen, _smoothed(seen, smoothing)[:, 0]
    power = _smoothed(_smoothed(wave, smoothing * MOTION_SMOOTHING) ** 2, smoothing)
    return np.sqrt(np.maximum(power, 0.0)), np.sqrt(np.maximum(_smoothed(power, smoothing)[:, 0], 1e-12))


def _smoothed(rows: np.ndarray, sigma: float) -> np.ndarray:
    damping = np.exp(-2.0 * (np.pi * sigma * np.arange(_N // 2 + 1)) ** 2)
    return np.fft.irfft(np.fft.rfft(rows, axis=1) * damping, _N, axis=1)


def _crossing(seen: np.ndarray, level: np.ndarray) -> np.ndarray:
    """Phase (cycles, 0 to 1/2) at which each row, falling from its peak at 0, passes its level; 1/2 where it never does."""
    half = seen[:, : _N // 2 + 1]
    below = half < level[:, None]
    at = np.where(below.any(axis=1), below.argmax(axis=1), _N // 2)
    rows = np.arange(seen.shape[0])
    before = np.maximum(at - 1, 0)
    step = half[rows, before] - half[rows, at]
    part = np.where(step > 0.0, (half[rows, before] - level) / np.where(step > 0.0, step, 1.0), 1.0)
    return np.where(below.any(axis=1), before + np.clip(part, 0.0, 1.0), at) / _N
