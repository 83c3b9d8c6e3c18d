"""The lowest and the highest sample in each of a few hundred bins: all that a screen can show of a long trace."""

from dataclasses import dataclass

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.recordings.recording import Progress, Signal, report_progress

__all__ = ["Overview", "overview"]

_SAMPLES_AT_ONCE = 1 << 20


@dataclass(frozen=True, eq=False)
class Overview:
    """Bin edges in s, shape (n_bins + 1,); lowest and highest sample, shape (n_bins,), nan where nothing was recorded."""

    edges_s: np.ndarray
    lowest: np.ndarray
    highest: np.ndarray


def overview(
    signal: Signal,
    n_bins: int,
    *,
    window: tuple[float, float] | None = None,
    progress: Progress | None = None,
) -> Overview:
    """Min-max envelope of a signal over equal bins of its whole span or of a window (s).

    Reads at most about a million samples at a time. `progress` is told samples done and samples in all.

    Raises
    ------
    InvalidInputError
        If n_bins is not at least 1 or the window is empty.
    """
    if n_bins < 1:
        raise InvalidInputError(f"n_bins must be at least 1, got {n_bins}")
    start, stop = window or (signal.segments[0].start_s, signal.segments[-1].stop_s)
    if not stop > start:
        raise InvalidInputError(f"window must end after it starts (s), got {start} to {stop}")
    edges = np.linspace(start, stop, n_bins + 1)
    lowest = np.full(n_bins, np.inf)
    highest = np.full(n_bins, -np.inf)
    done = 0
    for first_s, values in signal.pieces(start, stop, most=_SAMPLES_AT_ONCE):
        times = first_s + np.arange(values.size) / signal.sampling_frequency_hz
        bins = np.clip(((times - start) * (n_bins / (stop - start))).astype(np.int64), 0, n_bins - 1)
        real = np.isfinite(values)
        bins, values = bins[real], values[real]
        if values.size:
            starts = np.flatnonzero(np.r_[True, bins[1:] != bins[:-1]])
            touched = bins[starts]
            lowest[touched] = np.minimum(lowest[touched], np.minimum.reduceat(values, starts))
            highest[touched] = np.maximum(highest[touched], np.maximum.reduceat(values, starts))
        done += real.size
        report_progress(progress, done, signal.n_samples)
    empty = lowest > highest
    lowest[empty] = np.nan
    highest[empty] = np.nan
    return Overview(edges, lowest, highest)
