"""Stretches of a signal that must not be measured, each with its reason: movement, missing, flat, clipped."""

from dataclasses import dataclass

import numpy as np

from lagscape.recordings.cycles import Thresholds
from lagscape.recordings.envelope import WorkingPiece, runs_of

__all__ = ["MaskedStretch", "hidden_samples", "masked_stretches"]

_SHORTEST_MISSING_S = 1.5
_CLIPPED_SHARE = 0.2
_CLIPPED_SPAN_S = 10.0
_REFERENCE_SPAN_S = 600.0
_BASELINE_SPAN_S = 60.0


@dataclass(frozen=True)
class MaskedStretch:
    """Start and stop in s, and the reason: movement, missing, flat, clipped or gap."""

    start_s: float
    stop_s: float
    reason: str

    @property
    def duration_s(self) -> float:
        return self.stop_s - self.start_s


def masked_stretches(piece: WorkingPiece, thresholds: Thresholds, margin_s: float, is_ventilation: bool) -> list[MaskedStretch]:
    """What to leave out of one stretch, in time order; movement is widened by `margin_s` on either side."""
    result = []
    for reason, mask, wider_s in (
        ("missing", piece.missing, 0.0),
        ("flat", _flat(piece, thresholds.longest_flat_s), 0.0),
        ("clipped", _clipped(piece, is_ventilation), 0.0),
        ("movement", _movement(piece, thresholds.movement_ratio), margin_s),
    ):
        shortest = _SHORTEST_MISSING_S if reason == "missing" else 0.0
        merged: list[list[float]] = []
        for a, b in runs_of(mask):
            start, stop = piece.start_s + a / piece.rate_hz, piece.start_s + b / piece.rate_hz
            if stop - start < shortest:
                continue
            start, stop = start - wider_s, stop + wider_s
            if merged and start <= merged[-1][1]:
                merged[-1][1] = stop
            else:
                merged.append([start, stop])
        end = piece.start_s + piece.values.size / piece.rate_hz
        result += [MaskedStretch(max(a, piece.start_s), min(b, end), reason) for a, b in merged]
    return sorted(result, key=lambda stretch: (stretch.start_s, stretch.reason))


def hidden_samples(piece: WorkingPiece, masked: list[MaskedStretch]) -> np.ndarray:
    """True where a working sample lies in a masked stretch."""
    hidden = np.zeros(piece.values.size, dtype=bool)
    for stretch in masked:
        a = round((stretch.start_s - piece.start_s) * piece.rate_hz)
        b = round((stretch.stop_s - piece.start_s) * piece.rate_hz)
        hidden[max(a, 0) : max(b, 0)] = True
    return hidden


def _flat(piece: WorkingPiece, longest_s: float) -> np.ndarray:
    still = np.concatenate(([False], np.diff(piece.values) == 0.0)) & ~piece.missing
    result = np.zeros(still.size, dtype=bool)
    for a, b in runs_of(still):
        if b - a >= longest_s * piece.rate_hz:
            result[max(a - 1, 0) : b] = True
    return result


def _clipped(piece: WorkingPiece, is_ventilation: bool) -> np.ndarray:
    """Where the signal sits at its rail for a good part of some seconds. The floor of ventilation is apnoea, no rail."""
    from scipy.ndimage import maximum_filter1d, uniform_filter1d

    at_rail = piece.at_top if is_ventilation else piece.at_top + piece.at_bottom
    if not at_rail.any() or np.ptp(piece.values) == 0.0:
        return np.zeros(piece.values.size, dtype=bool)
    size = max(int(_CLIPPED_SPAN_S * piece.rate_hz), 1)
    often = uniform_filter1d(at_rail, size, mode="nearest") > _CLIPPED_SHARE
    return maximum_filter1d(often & (at_rail > 0.0), size, mode="nearest")


def _movement(piece: WorkingPiece, ratio: float) -> np.ndarray:
    """Samples much further from the baseline than the largest breaths about them."""
    from scipy.ndimage import percentile_filter

    rate = piece.rate_hz
    stride = max(int(rate), 1)
    coarse = piece.values[: piece.values.size // stride * stride].reshape(-1, stride)
    if coarse.shape[0] < 10:
        return np.zeros(piece.values.size, dtype=bool)
    middles = np.median(coarse, axis=1)
    at = (np.arange(middles.size) + 0.5) * stride
    # The middle of the quartiles: a median alone jumps with the phase of a regular breath.
    size = _odd(_BASELINE_SPAN_S * rate / stride, middles.size)
    lower, upper = (percentile_filter(middles, q, size=size, mode="mirror") for q in (25.0, 75.0))
    baseline = 0.5 * (lower + upper)
    away = np.abs(piece.values - np.interp(np.arange(piece.values.size), at, baseline))
    largest = away[: coarse.size].reshape(-1, stride).max(axis=1)
    usual = percentile_filter(largest, 95.0, size=_odd(_REFERENCE_SPAN_S * rate / stride, largest.size), mode="mirror")
    return away > ratio * np.interp(np.arange(piece.values.size), at, np.maximum(usual, np.finfo(float).tiny))


def _odd(size: float, most: int) -> int:
    return max(min(int(size), most) // 2 * 2 - 1, 1)
