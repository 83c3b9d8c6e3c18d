"""From a column of times to one even time base: sampling rate, unbroken stretches, what was repaired.

Recorders write times rounded, doubled, out of order, with breaks. The rule: the rate is that of the whole unbroken
stretches, not of single steps, so that rounding of the written times does not matter.
"""

import itertools
from dataclasses import dataclass

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.recording import Note, Segment, counted

__all__ = ["TimeBase", "even_time_base", "time_base_of_rate"]

_LONGEST_FILLED_S = 1.0
_MOST_BACKWARDS = 0.05
_SHORTEST_STEP_S = 1e-5
_AT_ONCE = 1 << 18


@dataclass(frozen=True, eq=False)
class TimeBase:
    """How to bring the rows of a table on an even grid.

    `kept` are the rows used (None: all). Where `resample_at` is None the kept rows are the samples; otherwise each
    segment's samples are interpolated at those times from the kept rows' `row_times`.
    """

    sampling_frequency_hz: float
    segments: tuple[Segment, ...]
    first_samples: tuple[int, ...]
    kept: np.ndarray | None
    row_times: np.ndarray | None
    resample_at: np.ndarray | None
    notes: tuple[Note, ...]
    origin_s: float


def time_base_of_rate(n_rows: int, sampling_frequency_hz: float) -> TimeBase:
    """An unbroken stretch of n_rows samples at a known rate, from 0 s."""
    segment = Segment(0.0, n_rows / sampling_frequency_hz)
    return TimeBase(sampling_frequency_hz, (segment,), (0,), None, None, None, (), 0.0)


def even_time_base(times: np.ndarray) -> TimeBase:
    """Judge a column of times in s, shape (n_rows,); nan where a row has none.

    Raises
    ------
    RecordingError
        If there are fewer than two times, they never change, or more than 1 in 20 run backwards.
    """
    notes: list[Note] = []
    clean = _already_even(times)
    if clean is not None:
        return clean
    good = np.isfinite(times)
    if good.sum() < 2:
        raise RecordingError("the time column holds fewer than two times")
    if not good.all():
        notes.append(Note(f"{counted(int((~good).sum()), 'line')} without a readable time left out", int((~good).sum())))
    kept = np.flatnonzero(good)
    t = times[kept]
    kept, t = _drop_backwards(kept, t, notes)
    origin = float(t[0])
    t = t - origin
    steps = np.diff(t)
    if not (steps > 0).any():
        raise RecordingError("the time column never changes; give the sampling rate instead (sampling_frequency_hz)")
    if np.count_nonzero(steps == 0) > 0.02 * steps.size:
        t, kept = _spread_doubles(t, kept, notes)
    elif (steps == 0).any():
        double = np.concatenate(([False], steps == 0))
        notes.append(Note(f"{counted(int(double.sum()), 'line')} with the time of the line before left out", int(double.sum())))
        t, kept = t[~double], kept[~double]
    steps = np.diff(t)
    typical = float(np.median(steps))
    if typical < _SHORTEST_STEP_S:
        raise RecordingError(
            f"the time column steps by {typical:.2g} s, more than 100,000 samples a second; give its unit (time_unit), "
            "or the sampling rate instead (sampling_frequency_hz)"
        )
    uneven = np.mean(np.abs(steps - typical) > 0.5 * typical)
    if uneven > 0.05 and not _on_a_grid(t, typical):
        return _resampled(t, kept, typical, origin, notes)
    return _pieces(t, kept, times.size, typical, origin, notes)


def _already_even(times: np.ndarray) -> TimeBase | None:
    """The time base of times on one even grid without break, judged in parts: the usual case, and free of memory."""
    n = times.size
    if n < 2 or not (np.isfinite(times[0]) and np.isfinite(times[-1])) or times[-1] <= times[0]:
        return None
    step = (times[-1] - times[0]) / (n - 1)
    if step < _SHORTEST_STEP_S:
        return None
    roughness = 0.0
    for at in range(0, n, _AT_ONCE):
        part = times[at : at + _AT_ONCE]
        away = np.abs(part - (times[0] + np.arange(at, at + part.size) * step)).max()
        if not away <= 0.45 * step:
            return None
        roughness = max(roughness, float(away))
    rate = _neat(1.0 / step, float(times[-1] - times[0]), roughness)
    return TimeBase(rate, (Segment(0.0, n / rate),), (0,), None, None, None, (), float(times[0]))


def _drop_backwards(kept: np.ndarray, t: np.ndarray, notes: list[Note]) -> tuple[np.ndarray, np.ndarray]:
    latest = np.maximum.accumulate(t)
    back = t < latest
    n_back = int(np.count_nonzero(back))
    if n_back > _MOST_BACKWARDS * t.size:
        # One wild time ahead makes all that follow look late: leave such times out and look again.
        middle = np.median(np.abs(np.diff(t)))
        wild = np.concatenate(([False], (np.diff(t)[:-1] > 100 * middle) & (np.diff(t)[1:] < -100 * middle), [False])) if t.size > 2 else back
        if wild.any():
            notes.append(Note(f"{counted(int(wild.sum()), 'line')} with a time far out of order left out", int(wild.sum())))
            return _drop_backwards(kept[~wild], t[~wild], notes)
        raise RecordingError(
            f"the time column runs backwards in {n_back} of {t.size} lines; sort the lines by time, "
            "or give the sampling rate instead (sampling_frequency_hz)"
        )
    if n_back:
        notes.append(Note(f"{counted(n_back, 'line')} left out: time runs backwards", n_back, first_time_s=float(latest[back.argmax()] - t[0])))
    return kept[~back], t[~back]


def _spread_doubles(t: np.ndarray, kept: np.ndarray, notes: list[Note]) -> tuple[np.ndarray, np.ndarray]:
    """Times written more coarsely than the sampling: rows that share a time are spread evenly up to the next."""
    notes.append(Note("the times are written more coarsely than the samples follow; samples that share a time were spread evenly"))
    starts = np.flatnonzero(np.concatenate(([True], np.diff(t) > 0)))
    counts = np.diff(np.append(starts, t.size))
    stamps = t[starts]
    stamp_step = float(np.median(np.diff(stamps)))
    room = np.append(np.diff(stamps), stamp_step)
    room = np.minimum(room, stamp_step)
    usual = float(np.median(counts))
    within = np.arange(t.size) - np.repeat(starts, counts)
    # The first group may be cut short at its beginning, so it is laid against its end.
    shift = np.repeat(np.where((np.arange(counts.size) == 0) & (counts < usual), usual - counts, 0.0), counts)
    share = np.repeat(np.maximum(counts, usual), counts)
    return t.astype(float) + (within + shift) / share * np.repeat(room, counts), kept


def _on_a_grid(t: np.ndarray, typical: float) -> bool:
    """Whether steps that differ are whole numbers of one step (breaks) or rounding about one rate."""
    steps = np.diff(t)
    small = steps < 1.6 * typical
    if not small.any():
        return False
    mean = float(steps[small].mean())
    if np.mean(np.abs(steps - mean * np.round(steps / mean)) < 0.2 * mean) > 0.95:
        return bool(np.mean(small) > 0.8)
    breaks = np.flatnonzero(steps > 3.0 * typical)
    edges = np.concatenate(([0], breaks + 1, [t.size]))
    for a, b in itertools.pairwise(edges):
        piece = t[a:b]
        if piece.size > 2:
            line = np.linspace(piece[0], piece[-1], piece.size)
            if np.abs(piece - line).max() > 1.5 * typical:
                return False
    return True


def _pieces(t: np.ndarray, kept: np.ndarray, n_rows: int, typical: float, origin: float, notes: list[Note]) -> TimeBase:
    steps = np.diff(t)
    breaks = np.flatnonzero(steps > 1.75 * typical)
    edges = np.concatenate(([0], breaks + 1, [t.size]))
    lengths = np.diff(edges)
    spans = t[edges[1:] - 1] - t[edges[:-1]]
    rate = float((lengths - 1).sum() / spans.sum()) if spans.sum() > 0 else 1.0 / typical
    longest = int(lengths.argmax())
    piece = t[edges[longest] : edges[longest + 1]]
    rate = _neat(rate, float(piece[-1] - piece[0]), float(np.abs(piece - np.linspace(piece[0], piece[-1], piece.size)).max()))
    filled = _LONGEST_FILLED_S
    short = breaks[steps[breaks] <= filled] if breaks.size else breaks
    if short.size:
        # A sample or two missing is no break: the grid runs on and the samples are filled in between.
        notes.append(Note(f"{counted(short.size, 'break')} of up to {filled:g} s filled in along a straight line", int(short.size),
                          first_time_s=float(t[short[0]])))  # fmt: skip
    long = breaks[steps[breaks] > filled]
    if long.size:
        lost = float((steps[long] - 1.0 / rate).sum())
        notes.append(Note(f"{counted(long.size, 'gap')} in time, {lost:.1f} s in all; nothing is measured across a gap", int(long.size),
                          first_time_s=float(t[long[0]])))  # fmt: skip
    edges = np.concatenate(([0], long + 1, [t.size]))
    if short.size:
        _refuse_bloat(float((t[edges[1:] - 1] - t[edges[:-1]]).sum()) * rate, t.size)
    segments, firsts, grid, n = [], [], [], 0
    for a, b in itertools.pairwise(edges):
        size = int(b - a) if not short.size else max(round((t[b - 1] - t[a]) * rate) + 1, 1)
        segments.append(Segment(float(t[a]), float(t[a]) + size / rate))
        firsts.append(n)
        n += size
        if short.size:
            grid.append(t[a] + np.arange(size) / rate)
    whole = kept.size == n_rows
    return TimeBase(
        rate, tuple(segments), tuple(firsts), None if whole else kept, t if short.size else None,
        np.concatenate(grid) if short.size else None, tuple(notes), origin,
    )  # fmt: skip


def _resampled(t: np.ndarray, kept: np.ndarray, typical: float, origin: float, notes: list[Note]) -> TimeBase:
    """Values at uneven times, for one a breath: straight lines between them, on an even grid at twice their rate."""
    rate = 2.0 / typical
    longest = max(60.0, 20.0 * typical)
    steps = np.diff(t)
    breaks = np.flatnonzero(steps > longest)
    edges = np.concatenate(([0], breaks + 1, [t.size]))
    _refuse_bloat(float((t[edges[1:] - 1] - t[edges[:-1]]).sum()) * rate, t.size)
    notes.append(Note(f"the samples are unevenly spaced in time; they were laid on an even grid of {rate:.3g} Hz along straight lines"))
    if breaks.size:
        text = f"{counted(breaks.size, 'gap')} in time; nothing is measured across a gap"
        notes.append(Note(text, int(breaks.size), first_time_s=float(t[breaks[0]])))
    segments, firsts, grid, n = [], [], [], 0
    for a, b in itertools.pairwise(edges):
        size = int((t[b - 1] - t[a]) * rate) + 1
        segments.append(Segment(float(t[a]), float(t[a]) + size / rate))
        firsts.append(n)
        grid.append(t[a] + np.arange(size) / rate)
        n += size
    return TimeBase(rate, tuple(segments), tuple(firsts), kept, t, np.concatenate(grid), tuple(notes), origin)


def _refuse_bloat(n_samples: float, n_rows: int) -> None:
    """An even grid many times larger than the table means that the times are not what they seem."""
    if not n_samples <= 50.0 * n_rows + 1000.0:
        raise RecordingError(
            "the time column is too uneven to be laid on an even grid; check its unit and its order, "
            "or give the sampling rate instead (sampling_frequency_hz)"
        )


def _neat(rate: float, span_s: float, roughness_s: float) -> float:
    """The round rate nearby where the written times, given how roughly they are written, cannot tell the two apart."""
    if span_s <= 0.0:
        return rate
    doubt = rate * (2.0 * roughness_s + 1e-9 * span_s) / span_s
    for candidate in (float(round(rate)), round(rate, 1), round(rate, 2)):
        if candidate > 0.0 and abs(candidate - rate) <= doubt:
            return candidate
    return rate
