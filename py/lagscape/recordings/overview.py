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
        # First sample of each bin, a hair of slack for a sample on an edge.
        # As wide as an index is: the browser's Python has 32 bits and refuses longer ones.
        first = np.clip(np.ceil((edges - first_s) * signal.sampling_frequency_hz - 1e-6), 0, values.size).astype(np.intp)
        first[-1] = values.size  # the last bin takes what rounding leaves over
        filled = np.flatnonzero(first[1:] > first[:-1])
        if filled.size:
            starts = first[filled]
            values = values[: first[-1]]
            lowest[filled] = np.fmin(lowest[filled], np.fmin.reduceat(values, starts))
            highest[filled] = np.fmax(highest[filled], np.fmax.reduceat(values, starts))
        done += values.size
        report_progress(progress, done, signal.n_samples)
    empty = lowest > highest
    lowest[empty] = np.nan
    highest[empty] = np.nan
    return Overview(edges, lowest, highest)
