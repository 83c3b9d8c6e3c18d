"""How far the marked breaths can be trusted, from signs that need no truth.

The first sign is a second detector that shares nothing with the first but the signal: the waves of a band-passed version between its
upward zero crossings, against peaks that stand out. The second is how unlike the lengths of neighbouring breaths are, since noise makes
breaths of any length. Both weights were found on breathing built breath by breath under noise of three colours, where the share of
missed and false breaths is known; tests/recordings/test_breath_quality.py measures how well the score tells it.
"""

from dataclasses import dataclass

import numpy as np

from lagscape.recordings.breath_detection import BreathSignal, MarkedBreaths
from lagscape.recordings.breath_result import BreathQuality, StretchQuality
from lagscape.recordings.envelope import WorkingPiece
from lagscape.recordings.masks import MaskedStretch

__all__ = ["FEWEST_SAMPLES", "JudgedPiece", "breath_quality", "no_breaths"]

FEWEST_SAMPLES = 4.0
"""Samples a breath under which none is marked: a wave and its first overtone need that many."""
_ENOUGH_SAMPLES = 5.0

_STRETCH_S = 60.0
_LENGTHS_SPAN_S = 180.0
_FEWEST_LENGTHS = 6
_BAND = (0.5, 2.0)
_LEAST_WAVE = 0.25
_NEAR = 0.35
_NEIGHBOURS = 45
_DISAGREEMENT_WEIGHT = 0.8
_UNLIKE_FROM, _UNLIKE_WEIGHT = 0.2, 1.5
"""ln of the lengths: a standard deviation of 0.2 is restless breathing (common practice, no source); white noise has about 0.45."""
_SHORTEST_BREATH_S, _LONGEST_BREATH_S, _LARGEST_BREATH = 1.0, 12.0, 5.0


@dataclass(frozen=True, eq=False)
class JudgedPiece:
    """One unbroken stretch with what was made of it."""

    piece: WorkingPiece
    signal: BreathSignal
    marked: MarkedBreaths
    masked: list[MaskedStretch]


def no_breaths(reason: str) -> BreathQuality:
    """The quality where no breath can be marked, and why."""
    return BreathQuality(0.0, (reason,), (), None, None, None, None, None)


def breath_quality(pieces: list[JudgedPiece], sampling_frequency_hz: float, is_flow: bool) -> BreathQuality:
    """Judge the breaths of a recording, as a whole and in stretches of about a minute."""
    if not pieces:
        return no_breaths("There is nothing to judge.")
    signs = [_signs(item, is_flow) for item in pieces]
    n_breaths = sum(item.marked.start_s.size for item in pieces)
    per_breath = sampling_frequency_hz * pieces[0].signal.period_s
    coarse = min(1.0, per_breath / _ENOUGH_SAMPLES)
    stretches, weights = [], []
    for item, sign in zip(pieces, signs, strict=True):
        for start, stop, weight in _minutes(item):
            score, n = _stretch(item.marked, sign, start, stop)
            known = None if score is None or weight <= 0.0 else float(score * coarse)
            stretches.append(StretchQuality(start, stop, known, n))
            weights.append(weight)
    judged = [(stretch.score, weight) for stretch, weight in zip(stretches, weights, strict=True) if stretch.score is not None]
    if not n_breaths or not judged:
        return BreathQuality(0.0, ("No breath was found.",), tuple(stretches), None, None, None, None, per_breath)
    score = sum(value * weight for value, weight in judged) / sum(weight for _, weight in judged)
    both = sum(int(sign.matched.sum()) for sign in signs)
    agreement = 2.0 * both / (n_breaths + sum(sign.other_s.size for sign in signs))
    plausible = sum(int(sign.plausible.sum()) for sign in signs) / n_breaths
    unclipped = sum(int(sign.unclipped.sum()) for sign in signs) / n_breaths
    sizes = np.array([item.piece.values.size for item in pieces], dtype=float)
    share = float(np.average([item.signal.signal_share for item in pieces], weights=sizes))
    unlike = [value for sign in signs for value in [sign.unlike_all] if np.isfinite(value)]
    reasons = _reasons(agreement, float(np.median(unlike)) if unlike else None, share, plausible, unclipped, per_breath)
    return BreathQuality(float(score), reasons, tuple(stretches), agreement, share, plausible, unclipped, per_breath)


@dataclass(frozen=True, eq=False)
class _Signs:
    """Of each marked breath whether the other detector has it, whether it is plausible and clear of the rails; the other's times."""

    matched: np.ndarray
    plausible: np.ndarray
    unclipped: np.ndarray
    other_s: np.ndarray
    joined: np.ndarray
    log_lengths: np.ndarray

    @property
    def unlike_all(self) -> float:
        return _unlike(self.log_lengths[self.joined])


def _signs(item: JudgedPiece, is_flow: bool) -> _Signs:
    marked = item.marked
    other = _waves(item.signal)
    for stretch in item.masked:
        other = other[(other < stretch.start_s) | (other > stretch.stop_s)]
    lengths = marked.end_s - marked.start_s
    plausible = (lengths >= _SHORTEST_BREATH_S) & (lengths <= _LONGEST_BREATH_S)
    if marked.volumes.size:
        plausible &= marked.volumes <= _LARGEST_BREATH * np.median(marked.volumes)
    return _Signs(
        _matched(marked.peak_s, other, _NEAR * item.signal.period_s), plausible, _unclipped(item, is_flow), other,
        np.array([word == "breath" for word in marked.followed_by], dtype=bool), np.log(lengths),
    )  # fmt: skip


def _waves(signal: BreathSignal) -> np.ndarray:
    """The second detector: times (s) of the tops of a band-passed signal's waves, small ones left out."""
    from scipy.ndimage import percentile_filter
    from scipy.signal import butter, sosfiltfilt

    breath_hz = 1.0 / signal.period_s
    high = min(_BAND[1] * breath_hz, 0.45 * signal.rate_hz)
    wave = sosfiltfilt(butter(2, [_BAND[0] * breath_hz, high], btype="band", fs=signal.rate_hz, output="sos"), signal.read)
    up = np.flatnonzero((wave[:-1] <= 0.0) & (wave[1:] > 0.0))
    if up.size < 2:
        return np.empty(0)
    tops = np.maximum.reduceat(wave, up)
    at = np.array([a + int(wave[a:b].argmax()) for a, b in zip(up, np.append(up[1:], wave.size), strict=True)])
    large = tops > _LEAST_WAVE * percentile_filter(tops, 90.0, size=_NEIGHBOURS, mode="nearest")
    return signal.start_s + at[large] / signal.rate_hz


def _matched(times: np.ndarray, other: np.ndarray, most: float) -> np.ndarray:
    """Which times have a partner in the other: each the other's nearest, and no further than `most`."""
    if not times.size or not other.size:
        return np.zeros(times.size, dtype=bool)
    there, back = _nearest(times, other), _nearest(other, times)
    return (back[there] == np.arange(times.size)) & (np.abs(other[there] - times) < most)


def _nearest(times: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Index of the nearest of the sorted `other` to each of the times."""
    after = np.clip(np.searchsorted(other, times), 1, max(other.size - 1, 1))
    if other.size == 1:
        return np.zeros(times.size, dtype=int)
    return after - (times - other[after - 1] <= other[after] - times)


def _unclipped(item: JudgedPiece, is_flow: bool) -> np.ndarray:
    """Breaths that never sit at the rail; of an effort signal the upper one about the peak counts, for rest may be its lowest value."""
    piece, marked = item.piece, item.marked
    at_rail = piece.at_top + piece.at_bottom if is_flow else piece.at_top
    total = np.concatenate(([0.0], np.cumsum(at_rail)))
    near = 0.15 * item.signal.period_s
    low, high = (marked.start_s, marked.end_s) if is_flow else (marked.peak_s - near, marked.peak_s + near)
    first, last = (np.clip(np.round((edge - piece.start_s) * piece.rate_hz).astype(int), 0, at_rail.size) for edge in (low, high))
    return total[np.maximum(last, first)] - total[first] <= 0.0


def _minutes(item: JudgedPiece) -> list[tuple[float, float, float]]:
    """Start and stop of stretches of about a minute, and how many seconds of each are not masked."""
    start = item.piece.start_s
    length = item.piece.values.size / item.piece.rate_hz
    edges = start + np.linspace(0.0, length, max(round(length / _STRETCH_S), 1) + 1)
    result = []
    for a, b in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
        hidden, reached = 0.0, a
        for stretch in item.masked:
            hidden += max(min(stretch.stop_s, b) - max(stretch.start_s, reached), 0.0)
            reached = max(reached, min(stretch.stop_s, b))
        result.append((a, b, b - a - hidden))
    return result


def _stretch(marked: MarkedBreaths, signs: _Signs, start: float, stop: float) -> tuple[float | None, int]:
    """Score of a stretch from its own breaths, their lengths being compared within some minutes; None without any."""
    inside = (marked.peak_s >= start) & (marked.peak_s < stop)
    n, n_other = int(inside.sum()), int(((signs.other_s >= start) & (signs.other_s < stop)).sum())
    if n + n_other == 0:
        return None, 0
    if n == 0:
        return 0.0, 0
    # A partner may lie just outside the stretch, so that matches are counted on the marked breaths alone.
    agreement = min(2.0 * float(signs.matched[inside].sum()) / (n + max(n_other, int(signs.matched[inside].sum()))), 1.0)
    away = 0.5 * (_LENGTHS_SPAN_S - (stop - start))
    about = signs.joined & (marked.peak_s >= start - away) & (marked.peak_s < stop + away)
    unlike = _unlike(signs.log_lengths[about])
    excess = max(unlike - _UNLIKE_FROM, 0.0) if np.isfinite(unlike) else 0.0
    right = max(1.0 - _DISAGREEMENT_WEIGHT * (1.0 - agreement) - _UNLIKE_WEIGHT * excess, 0.0)
    return right * float((signs.plausible & signs.unclipped)[inside].mean()), n


def _unlike(log_lengths: np.ndarray) -> float:
    return float(np.std(log_lengths)) if log_lengths.size >= _FEWEST_LENGTHS else np.nan


def _reasons(
    agreement: float, unlike: float | None, share: float, plausible: float, unclipped: float, per_breath: float
) -> tuple[str, ...]:
    reasons = [f"Two detectors agree on {100.0 * agreement:.0f} % of the breaths."]
    if unlike is not None and unlike > _UNLIKE_FROM:
        reasons.append(f"Lengths of breaths that follow each other differ by {100.0 * unlike:.0f} %, as restless breathing or noise does.")
    if share < 0.7:
        reasons.append(f"Even noise makes up {100.0 * (1.0 - share):.0f} % of the power where breaths lie.")
    if plausible < 0.99:
        reasons.append(f"{100.0 * (1.0 - plausible):.0f} % of the breaths have a length or volume that is hardly one of a breath.")
    if unclipped < 0.99:
        reasons.append(f"{100.0 * (1.0 - unclipped):.0f} % of the breaths touch the end of the recorder's range: their volume reads too small.")
    if per_breath < _ENOUGH_SAMPLES:
        reasons.append(f"Only {per_breath:.1f} samples a breath: the shape of a breath is lost.")
    return tuple(reasons)
