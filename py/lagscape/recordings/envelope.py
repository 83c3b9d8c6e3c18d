"""The envelope of breathing: how much air moves, with offset, drift and the single breaths taken out.

An effort, volume or airflow signal is turned into its rate of change, smoothed over a fraction of a breath (a Gaussian
and its derivative): offset vanishes, drift fades in proportion to its frequency, and nothing rings. The envelope is the
root of the smoothed square. A signal that is ventilation already is only smoothed.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from lagscape.recordings.burst_shape import MOTION_SMOOTHING
from lagscape.recordings.recording import Signal
from lagscape.recordings.stepwise import Steps

__all__ = ["Envelope", "WorkingPiece", "breath_frequency", "envelope_of", "working_piece_steps"]

WORKING_RATE_HZ = 8.0
_BLOCK = 1 << 17
_LOWEST_BREATH_HZ = 0.1
_HIGHEST_BREATH_HZ = 0.75
_CLIP_RUN = 3


@dataclass(frozen=True, eq=False)
class WorkingPiece:
    """An unbroken stretch at the working rate: values, which of them were missing, and the share of each at the rails.

    `values` has no nan: missing samples are carried along a straight line and told by `missing`.
    """

    start_s: float
    rate_hz: float
    values: np.ndarray
    missing: np.ndarray
    at_top: np.ndarray
    at_bottom: np.ndarray

    @property
    def times_s(self) -> np.ndarray:
        """Middle of each working sample, s."""
        return self.start_s + np.arange(self.values.size) / self.rate_hz


@dataclass(frozen=True, eq=False)
class Envelope:
    """Envelope of one stretch: amplitude in the signal's unit (half of peak to peak; ventilation as it is).

    `motion` is the smoothed rate of change whose size the envelope follows, scaled likewise (nan-free);
    `smoothing_s` the standard deviation of the Gaussian that smoothed the envelope.
    """

    start_s: float
    rate_hz: float
    values: np.ndarray
    motion: np.ndarray
    smoothing_s: float
    is_ventilation: bool

    @property
    def times_s(self) -> np.ndarray:
        return self.start_s + np.arange(self.values.size) / self.rate_hz


    def smoothed_again(self) -> np.ndarray:
        """The envelope smoothed by a further Gaussian of the same width, by power unless it is ventilation."""
        from scipy.ndimage import gaussian_filter1d

        sigma = self.smoothing_s * self.rate_hz
        if self.is_ventilation:
            return gaussian_filter1d(self.values, sigma, mode="nearest")
        return np.sqrt(np.maximum(gaussian_filter1d(self.values**2, sigma, mode="nearest"), 0.0))


def working_piece_steps(signal: Signal, window: tuple[float, float] | None = None) -> Steps[list[WorkingPiece]]:
    """The signal at about 8 samples a second (as it is where it is slower), by means of neighbouring samples. Counts samples."""
    ratio = max(int(signal.sampling_frequency_hz // WORKING_RATE_HZ), 1)
    rate = signal.sampling_frequency_hz / ratio
    start, stop = window or (None, None)
    stretches: list[list[_Block]] = []
    expected = None
    done = 0
    for first_s, raw in signal.pieces(start, stop, most=ratio * _BLOCK):
        block = _reduced(raw, ratio, first_s)
        if expected is not None and abs(first_s - expected) < 0.5 / signal.sampling_frequency_hz:
            stretches[-1].append(block)
        else:
            stretches.append([block])
        expected = first_s + raw.size / signal.sampling_frequency_hz
        done += raw.size
        yield done, signal.n_samples
    tops = [block.top for stretch in stretches for block in stretch if np.isfinite(block.top)]
    bottoms = [block.bottom for stretch in stretches for block in stretch if np.isfinite(block.bottom)]
    top, bottom = max(tops, default=np.inf), min(bottoms, default=-np.inf)
    pieces = []
    for stretch in stretches:
        values = np.concatenate([block.values for block in stretch])
        if values.size < 2:
            continue
        at_top = np.concatenate([np.where(block.top == top, block.at_top, 0.0) for block in stretch])
        at_bottom = np.concatenate([np.where(block.bottom == bottom, block.at_bottom, 0.0) for block in stretch])
        missing = np.isnan(values)
        if missing.all():
            values = np.zeros(values.size)
        elif missing.any():
            at = np.arange(values.size)
            values = np.interp(at, at[~missing], values[~missing])
        middle = 0.5 * (ratio - 1) / signal.sampling_frequency_hz
        pieces.append(WorkingPiece(stretch[0].first_s + middle, rate, values, missing, at_top, at_bottom))
    return pieces


@dataclass(frozen=True, eq=False)
class _Block:
    first_s: float
    values: np.ndarray
    top: float
    bottom: float
    at_top: np.ndarray
    at_bottom: np.ndarray


def _reduced(raw: np.ndarray, ratio: int, first_s: float) -> _Block:
    n = -(-raw.size // ratio)
    rows = np.full(n * ratio, np.nan)
    rows[: raw.size] = raw
    known = np.isfinite(rows)
    rows[~known] = 0.0
    count = known.reshape(n, ratio).sum(axis=1)
    with np.errstate(invalid="ignore", over="ignore"):
        values = np.where(count > 0, rows.reshape(n, ratio).sum(axis=1) / np.maximum(count, 1), np.nan)
    if not known.any():
        return _Block(first_s, values, np.nan, np.nan, np.zeros(n), np.zeros(n))
    top, bottom = float(rows[known].max()), float(rows[known].min())
    at_top, at_bottom = (
        _in_runs(known & (rows == level), _CLIP_RUN).reshape(n, ratio).mean(axis=1) for level in (top, bottom)
    )
    return _Block(first_s, values, top, bottom, at_top, at_bottom)


def _in_runs(mask: np.ndarray, shortest: int) -> np.ndarray:
    """True where mask is True for at least `shortest` samples in a row."""
    result = np.zeros(mask.size, dtype=bool)
    for a, b in runs_of(mask):
        if b - a >= shortest:
            result[a:b] = True
    return result


def runs_of(mask: np.ndarray) -> Iterator[tuple[int, int]]:
    """First index and the one after the last of every run of True, in order."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], mask, [False])).astype(np.int8)))
    yield from zip(edges[0::2].tolist(), edges[1::2].tolist(), strict=True)


def breath_frequency(pieces: list[WorkingPiece]) -> float | None:
    """The commonest breathing frequency in Hz, or None where no stretch is long enough to tell.

    Peak of the power spectrum of the rate of change (Welch, 32 s), smoothed over 0.06 Hz.
    """
    from scipy.signal import welch

    total: np.ndarray | None = None
    frequency = np.empty(0)
    for piece in pieces:
        n = round(32.0 * piece.rate_hz)
        if piece.values.size < n:
            continue
        frequency, power = welch(np.gradient(piece.values), piece.rate_hz, nperseg=n, nfft=4 * n)
        weight = power * piece.values.size
        total = weight if total is None else total + weight
    if total is None:
        return None
    step = frequency[1]
    width = max(int(0.06 / step), 1)
    smooth = np.convolve(total, np.ones(width) / width, mode="same")
    band = (frequency >= _LOWEST_BREATH_HZ) & (frequency <= min(_HIGHEST_BREATH_HZ, 0.4 * pieces[0].rate_hz))
    if not band.any() or not smooth[band].max() > 0:
        return None
    return float(frequency[band][smooth[band].argmax()])


def envelope_of(piece: WorkingPiece, breath_hz: float, is_ventilation: bool) -> Envelope:
    """Envelope of one stretch; `breath_hz` sets how much is smoothed."""
    from scipy.ndimage import gaussian_filter1d

    smoothing_s = 0.35 / breath_hz
    if is_ventilation:
        values = gaussian_filter1d(piece.values, smoothing_s * piece.rate_hz, mode="nearest")
        return Envelope(piece.start_s, piece.rate_hz, np.maximum(values, 0.0), values, smoothing_s, True)
    sigma = MOTION_SMOOTHING * smoothing_s * piece.rate_hz
    motion = gaussian_filter1d(piece.values - np.median(piece.values), sigma, order=1, mode="nearest") * piece.rate_hz
    # A pure sine of this frequency and amplitude A gives motion of amplitude A.
    omega = 2.0 * np.pi * breath_hz
    motion /= omega * np.exp(-0.5 * (omega * sigma / piece.rate_hz) ** 2)
    power = gaussian_filter1d(motion**2, smoothing_s * piece.rate_hz, mode="nearest")
    return Envelope(piece.start_s, piece.rate_hz, np.sqrt(2.0 * np.maximum(power, 0.0)), motion, smoothing_s, False)
