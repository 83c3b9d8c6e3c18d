"""Waxing and waning of the envelope into cycles: where ventilation starts, where it stops, when it starts again.

A cycle runs from the onset of ventilation to the next onset. Its edges are taken where the envelope crosses a fraction of
its own peak, well above the noise, and are then carried to zero ventilation: along the sine that the loop-gain formula
assumes where the edge is gradual, and back by the known spread of the smoothing where it is abrupt.
"""

import itertools
from dataclasses import dataclass

import numpy as np

from lagscape.recordings.burst_shape import burst_shape
from lagscape.recordings.envelope import Envelope, runs_of

__all__ = ["Burst", "Thresholds", "bursts_of", "local_peak"]


@dataclass(frozen=True)
class Thresholds:
    """What counts as a cycle. Fractions are of the local peak of the envelope; times in s.

    Common practice, no source, unless said. A person may change them; the report states them.
    """

    wane_below: float = 0.45
    """Ventilation has waned when the envelope is under this."""
    wax_above: float = 0.6
    """It has waxed when the envelope is over this."""
    apnoea_below: float = 0.25
    """A wane whose middle lies under this is an apnoea; otherwise it is a hypopnoea. Noise and smoothing keep the envelope
    of a true apnoea over the 10 % that is commonly asked of the flow signal itself."""
    edge_at: float = 0.3
    """Where the edges of ventilation are taken before they are carried to zero."""
    shortest_cycle_s: float = 12.0
    longest_cycle_s: float = 150.0
    """Published cycles run from 15 s (8,050 m, West 1986) to under 100 s (heart failure, Hall 1996)."""
    shortest_pause_s: float = 4.0
    fewest_in_a_row: int = 3
    """Fewer cycles in a row than this are no periodic breathing; three is the usual rule for Cheyne-Stokes respiration."""
    shortest_wane_share: float = 0.1
    """Least share of a typical cycle that lies under `wane_below`; dips of irregular breathing are shorter."""
    largest_step: float = 2.2
    """A cycle this many times longer or shorter than the middle one of the five about it does not belong to the row."""
    most_irregular: float = 0.6
    irregular_if_shallow: float = 0.25
    """Most that ln(cycle / cycle before) may differ from 0, as a median over the row: random waxing and waning of noise or of
    restless breathing has about 0.7 and shallow wanes. A row whose typical wane is no apnoea must keep to the second."""
    movement_ratio: float = 1.6
    """A sample this many times further from the baseline than 19 of 20 seconds about it reach is movement."""
    longest_flat_s: float = 90.0
    """An exactly constant signal for longer than any apnoea is a lost sensor."""


@dataclass(frozen=True)
class Burst:
    """One stretch of ventilation: onset and end carried to zero (s), its peak, and the pause that follows it.

    `pause_level` is the middle of the envelope in that pause over the peak, `wane_s` how long the envelope is under the waning
    level there; nan for the last burst of a stretch.
    `gradual` tells how gradual its edges are: 0 abrupt, 1 as gradual as the sine of the loop-gain formula.
    """

    onset_s: float
    end_s: float
    peak: float
    peak_s: float
    pause_level: float
    wane_s: float
    gradual: float


def local_peak(envelope: Envelope, hidden: np.ndarray, span_s: float = 180.0) -> np.ndarray:
    """The 90th percentile of the envelope within +-span/2, shape of the envelope; hidden samples do not count."""
    from scipy.ndimage import percentile_filter

    stride = max(int(envelope.rate_hz), 1)
    coarse = envelope.values[::stride].copy()
    masked = hidden[::stride]
    if masked.any() and not masked.all():
        at = np.arange(coarse.size)
        coarse[masked] = np.interp(at[masked], at[~masked], coarse[~masked])
    size = min(max(int(span_s * envelope.rate_hz / stride), 1), coarse.size)
    level = percentile_filter(coarse, 90.0, size=size, mode="nearest")
    return np.interp(np.arange(envelope.values.size), np.arange(coarse.size) * stride, level)


def bursts_of(envelope: Envelope, hidden: np.ndarray, thresholds: Thresholds, is_ventilation: bool) -> list[Burst]:
    """All stretches of ventilation of an envelope, in time order, with their edges at zero ventilation."""
    values = envelope.values
    reference = local_peak(envelope, hidden)
    if not reference.max(initial=0.0) > 0.0:
        return []
    runs = _wax_and_wane(values, thresholds.wax_above * reference, thresholds.wane_below * reference)
    runs = _joined(runs, round(thresholds.shortest_pause_s * envelope.rate_hz))
    if len(runs) < 2:
        return []
    # A maximum picks the noise's favour; one more smoothing of the same width takes most of that away.
    twice = envelope.smoothed_again()
    peaks = [a + int(values[a:b].argmax()) for a, b in runs]
    tops = [float(twice[a:b].max()) for a, b in runs]
    floors = [float(np.median(values[_middle(a_end, b_start)])) for (_, a_end), (b_start, _) in itertools.pairwise(runs)]
    edges = [_edges(values, runs, peaks, tops, floors, i, thresholds.edge_at, is_ventilation) for i in range(len(runs))]
    result = []
    for i, (rise, fall) in enumerate(edges):
        cycle = _cycle_samples(edges, i) / envelope.rate_hz
        above = (fall[0] - rise[0]) / envelope.rate_hz
        peak = tops[i]
        shape = burst_shape(envelope.smoothing_s / cycle, thresholds.edge_at, is_ventilation)
        on, off = (shape.read(above / cycle, edge[1] / envelope.rate_hz / cycle) for edge in (rise, fall))
        shift_on, shift_off = (0.5 * (duty * cycle - above) for duty, _ in (on, off))
        # Next to a hypopnoea ventilation has no zero to be carried to.
        shift_on = shift_on if floors[max(i - 1, 0)] < thresholds.apnoea_below * peak else 0.0
        shift_off = shift_off if floors[min(i, len(floors) - 1)] < thresholds.apnoea_below * peak else 0.0
        pause_level = floors[i] / peak if i < len(floors) else np.nan
        result.append(
            Burst(
                envelope.start_s + rise[0] / envelope.rate_hz - shift_on,
                envelope.start_s + fall[0] / envelope.rate_hz + shift_off,
                peak,
                envelope.start_s + peaks[i] / envelope.rate_hz,
                pause_level,
                (runs[i + 1][0] - runs[i][1]) / envelope.rate_hz if i < len(floors) else np.nan,
                0.5 * (on[1] + off[1]),
            )
        )
    return result


def _wax_and_wane(values: np.ndarray, up: np.ndarray, down: np.ndarray) -> list[tuple[int, int]]:
    """Runs that rise over `up` and last until the envelope falls under `down` on either side."""
    return [(a, b) for a, b in runs_of(values > down) if (values[a:b] > up[a:b]).any()]


def _joined(runs: list[tuple[int, int]], shortest_pause: int) -> list[tuple[int, int]]:
    result: list[tuple[int, int]] = []
    for a, b in runs:
        if result and a - result[-1][1] < shortest_pause:
            result[-1] = (result[-1][0], b)
        else:
            result.append((a, b))
    return result


def _middle(a: int, b: int) -> slice:
    """The middle half of the samples from a to b."""
    quarter = (b - a) // 4
    return slice(a + quarter, max(b - quarter, a + quarter + 1))


def _edges(
    values: np.ndarray, runs: list[tuple[int, int]], peaks: list[int], tops: list[float], floors: list[float], i: int, level: float,
    linear: bool,
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Rising and falling edge of burst i: sample where the level is crossed, and samples from there to 0.7 of the peak."""
    before = floors[i - 1] if i > 0 else floors[0]
    after = floors[i] if i < len(floors) else floors[-1]
    first = runs[i - 1][1] if i > 0 else 0
    last = runs[i + 1][0] if i + 1 < len(runs) else values.size - 1
    peak = tops[i]
    rise = _edge(values[first : peaks[i] + 1][::-1], peaks[i] - runs[i][0], peak, before, level, linear)
    fall = _edge(values[peaks[i] : last + 1], runs[i][1] - 1 - peaks[i], peak, after, level, linear)
    return (peaks[i] - rise[0], rise[1]), (peaks[i] + fall[0], fall[1])


def _edge(going_down: np.ndarray, at: int, peak: float, floor: float, level: float, linear: bool) -> tuple[float, float]:
    """On a stretch that starts at the peak: samples to the crossing of `level` near index `at`, and from 0.7 down to it.

    Levels count from the floor of the pause: by difference for ventilation, by difference of squares for an envelope
    that is the root of a power, to which independent noise adds.
    """
    floor = min(floor, 0.6 * peak)

    def height(fraction: float) -> float:
        if linear:
            return floor + fraction * (peak - floor)
        return float(np.sqrt(floor**2 + fraction**2 * (peak**2 - floor**2)))

    low, high = height(level), height(0.7)
    k = min(at, going_down.size - 1)
    if going_down[k] > low:
        while k < going_down.size - 1 and going_down[k] > low:
            k += 1
    else:
        while k > 0 and going_down[k - 1] <= low:
            k -= 1
    crossing = _between(going_down, k, low)
    j = k
    while j > 0 and going_down[j - 1] < high:
        j -= 1
    return crossing, max(crossing - _between(going_down, j, high), 0.0)


def _between(falling: np.ndarray, k: int, level: float) -> float:
    """Where the straight line from sample k - 1 to k passes the level, in samples."""
    if k <= 0 or falling[k - 1] <= falling[k]:
        return float(k)
    return k - float(np.clip((level - falling[k]) / (falling[k - 1] - falling[k]), 0.0, 1.0))


def _cycle_samples(edges: list[tuple[tuple[float, float], tuple[float, float]]], i: int) -> float:
    """Onset to onset about burst i: the mean of the cycle before and after where both are known."""
    gaps = []
    if i > 0:
        gaps.append(edges[i][0][0] - edges[i - 1][0][0])
    if i + 1 < len(edges):
        gaps.append(edges[i + 1][0][0] - edges[i][0][0])
    return float(min(gaps))
