"""The peak in a tremor's spectrum: where it is and how surely, its half-power points, its harmonics, and what else stands out."""

import math
from dataclasses import dataclass

import numpy as np

__all__ = ["PeakFound", "background_of", "degrees_of_freedom", "find_peak", "power_interval"]

SEGMENT_S = 8.0
STAND_OUT = 4.0
_DIP = 2.0
"""A peak is at least twice as high as the lowest point on either side of it."""
_SMOOTHING_HZ = 0.1
_SMOOTHED_WIDTH = 0.5
_REACH_HZ = 1.5
_APART_HZ = 1.0
_HARMONIC_HZ = 0.4
_LOCAL_HZ = 3.0
_HANN_HALF_POWER = 1.44
"""Half-power width of a Hann window in units of 1 / its length."""
_HANN_OVERLAP = 1.0 / 6.0
"""Correlation of neighbouring Hann windows that share half of their samples: (sum of w(t) w(t + n/2))/(sum of w^2)."""


@dataclass(frozen=True)
class PeakFound:
    """Hz: the peak, its standard error, its half-power points in the drawn spectrum, its width without the window's own blur."""

    frequency_hz: float
    error_hz: float
    half_power_hz: tuple[float, float]
    width_hz: float
    harmonics_hz: tuple[float, ...]
    half_frequency_hz: float | None
    """A smaller peak at half the frequency, of which this one may be the harmonic."""
    other_peaks_hz: tuple[float, ...]


def background_of(power: np.ndarray) -> float:
    """The level that most of the band has: its median."""
    return float(np.median(power))


def degrees_of_freedom(n_segments: int) -> float:
    """Of the mean of `n_segments` spectra of Hann windows that overlap by half.

    Notes
    -----
    2 K / (1 + 2 (1 - 1/K) r^2), r the overlapped windows' correlation, 1/6 for Hann (Welch 1967; Percival and Walden 1993, 6.17, from
    memory). Axes are counted as one: those of one sensor move together.
    """
    return 2.0 * n_segments / (1.0 + 2.0 * (1.0 - 1.0 / n_segments) * _HANN_OVERLAP**2)


def power_interval(power: np.ndarray, n_segments: int, level: float = 0.95) -> tuple[np.ndarray, np.ndarray]:
    """The chi-square interval of a mean spectrum: nu P / chi2 at both tails."""
    from scipy.special import gammaincinv

    freedom = degrees_of_freedom(n_segments)
    tail = 0.5 * (1.0 - level)
    upper, lower = (2.0 * float(gammaincinv(0.5 * freedom, q)) / freedom for q in (1.0 - tail, tail))
    return power / upper, power / lower


def find_peak(f: np.ndarray, spectra: np.ndarray, wide_f: np.ndarray, wide: np.ndarray) -> PeakFound | None:
    """The tallest peak in the band, or None where none stands out.

    Parameters
    ----------
    f : array, shape (n,)
        Frequencies of the band, Hz, equally spaced.
    spectra : array, shape (n_segments, n)
        Power of each segment there.
    wide_f, wide : array, shape (m,)
        The mean spectrum beyond the band as well, for harmonics.
    """
    from scipy.ndimage import gaussian_filter1d

    p = spectra.mean(axis=0)
    background = background_of(p)
    sigma = _SMOOTHING_HZ / float(f[1] - f[0])
    smooth = gaussian_filter1d(p, sigma, mode="nearest")
    standing = [i for i in _tops(smooth) if p[max(i - 4, 0) : i + 5].max() >= STAND_OUT * background]
    if background <= 0.0:
        standing = [int(p.argmax())] if p.max() > 0.0 and 0 < int(p.argmax()) < p.size - 1 else []
    if not standing:
        return None
    near = float(f[max(standing, key=lambda i: smooth[i])])
    frequency, low, high = _centre(f, p, background, near)
    blur = math.hypot(_HANN_HALF_POWER / SEGMENT_S, 2.355 * _SMOOTHING_HZ)
    wide_smooth = gaussian_filter1d(wide, sigma, mode="nearest")
    harmonics = tuple(
        found for order in (2, 3) if (found := _near(wide_f, wide, wide_smooth, order * frequency, STAND_OUT, local=True)) is not None
    )
    half = _near(f, p, p, 0.5 * frequency, 6.0, local=False)
    others = tuple(
        float(f[i])
        for i in standing
        if abs(f[i] - frequency) > max(_APART_HZ, high - low) and all(abs(f[i] - k * frequency) > _HARMONIC_HZ for k in (0.5, 2.0, 3.0))
        and smooth[i] > STAND_OUT * float(np.quantile(p[np.abs(f - f[i]) <= _LOCAL_HZ], 0.25))
    )  # fmt: skip
    width = math.sqrt(max((high - low) ** 2 - blur**2, 0.0))
    return PeakFound(frequency, _error(f, spectra, background, near, width), (low, high), width, harmonics, half, others)


def _tops(smooth: np.ndarray) -> list[int]:
    """Maxima inside the band that fall to less than half on both sides before the band ends or something higher comes."""
    found = []
    for i in np.flatnonzero((smooth[1:-1] > smooth[:-2]) & (smooth[1:-1] >= smooth[2:])) + 1:
        higher = np.flatnonzero(smooth > smooth[i])
        left = higher[higher < i].max(initial=-1) + 1
        right = higher[higher > i].min(initial=smooth.size)
        if smooth[i] >= _DIP * max(smooth[left : i + 1].min(), smooth[i:right].min()):
            found.append(int(i))
    return found


def _centre(f: np.ndarray, p: np.ndarray, background: float, near: float) -> tuple[float, float, float]:
    """Peak and half-power points, Hz: centre of gravity of what rises over half of the smoothed spectrum's height.

    The highest bin itself jumps about within a broad peak; its neighbourhood does not. For the centre a broad peak is smoothed once
    more, in proportion to its width, which brings its scatter near the least that is possible (see `_error`).
    """
    low, high, _ = _risen(f, p, background, near, _SMOOTHING_HZ)
    *_, centre = _risen(f, p, background, near, max(_SMOOTHING_HZ, _SMOOTHED_WIDTH * (high - low)))
    return centre, low, high


def _risen(f: np.ndarray, p: np.ndarray, background: float, near: float, sigma_hz: float) -> tuple[float, float, float]:
    """Half-power points and the centre of gravity between them, of the spectrum smoothed by a Gaussian."""
    from scipy.ndimage import gaussian_filter1d

    smooth = gaussian_filter1d(p, sigma_hz / (f[1] - f[0]), mode="nearest")
    top = int(np.where(np.abs(f - near) <= _REACH_HZ, smooth, -np.inf).argmax())
    low, high = _half_power(f, smooth, top, background)
    level = background + 0.5 * (smooth[top] - background)
    # In octaves: about those a resonance is even, while in Hz its upper flank is the longer one.
    weight = np.where((f >= low) & (f <= high), np.maximum(smooth - level, 0.0) / f, 0.0)
    total = float(weight.sum())
    return low, high, math.exp(float((np.log(f) * weight).sum()) / total) if total > 0.0 else float(f[top])


def _half_power(f: np.ndarray, p: np.ndarray, top: int, background: float) -> tuple[float, float]:
    level = background + 0.5 * (p[top] - background)
    low, high = top, top
    while low > 0 and p[low] > level:
        low -= 1
    while high < p.size - 1 and p[high] > level:
        high += 1

    def between(i: int, j: int) -> float:
        return float(f[i] + (f[j] - f[i]) * (level - p[i]) / (p[j] - p[i])) if p[j] != p[i] else float(f[i])

    return between(low, low + 1), between(high, high - 1)


def _near(f: np.ndarray, p: np.ndarray, shape: np.ndarray, at: float, ratio: float, *, local: bool) -> float | None:
    """A maximum close to `at` that stands `ratio` times over the background."""
    near = np.abs(f - at) < _HARMONIC_HZ
    if not near.any():
        return None
    i = int(np.flatnonzero(near)[shape[near].argmax()])
    inside = 0 < i < p.size - 1 and shape[i] > shape[i - 1] and shape[i] > shape[i + 1]
    level = _local(f, p, at) if local else background_of(p)
    return float(f[i]) if inside and shape[i] > ratio * level else None


def _local(f: np.ndarray, p: np.ndarray, at: float) -> float:
    return background_of(p[np.abs(f - at) <= _LOCAL_HZ])


def _error(f: np.ndarray, spectra: np.ndarray, background: float, near: float, width: float) -> float:
    """Standard error of the peak: what leaving out one tenth of the recording at a time shows, and what no recording can beat.

    Notes
    -----
    Jackknife over blocks, as neighbouring spectra share half of their samples. A resonance of half-power width W driven by noise, seen for
    T seconds, cannot be placed better than sqrt(W / (2 pi T)) (Cramer-Rao bound of a lightly damped oscillator). Ten blocks know their
    own scatter only roughly and too low, so the two are added by squares: 95 % intervals then hold the truth in 94 to 100 % of runs.
    """
    blocks = np.array_split(np.arange(len(spectra)), min(10, len(spectra)))
    peaks = np.array([_centre(f, np.delete(spectra, block, axis=0).mean(axis=0), background, near)[0] for block in blocks])
    scatter = float((peaks.size - 1) / peaks.size * np.sum((peaks - peaks.mean()) ** 2))
    seconds = 0.5 * SEGMENT_S * (len(spectra) + 1)
    return math.sqrt(scatter + width / (2.0 * math.pi * seconds))
