"""Single breaths from one unbroken stretch: peaks and troughs of a volume-like signal, with apnoeas between them left out.

Airflow is integrated first; effort and volume signals are taken as they are. Breaths are found on a version freed of drift and noise
by two Gaussians, which do not ring beside an apnoea; times and volumes are then read from a far less smoothed one. Where the samples
are coarse, a band-limited curve is laid through them first, because peaks fall between samples.
"""

import warnings
from dataclasses import dataclass

import numpy as np

from lagscape.recordings.cycles import local_peak
from lagscape.recordings.envelope import Envelope, WorkingPiece

__all__ = ["BreathSignal", "MarkedBreaths", "breath_signal", "marked_breaths"]

READING_RATE_HZ = 8.0
SMALLEST_BREATH, MOST_ASKED = 0.2, 0.5
"""A swing under this share of the usual one about it is no breath; where noise calls for more, up to this (common practice, no source)."""

_NOISE_SIGMA, _DRIFT_SIGMA, _READ_SIGMA, _RAMP_SIGMA = 0.1, 0.5, 0.05, 3.0
"""Widths of the Gaussians in breaths: against noise, against drift, for reading, against the ramp of an integral."""
_NEAREST = 0.4
_NOISE_SWINGS = 4.0
"""Noise of standard deviation 1 that is smoothed like this swings by up to about 4 within a breath."""
_HIGH, _LOW = 0.5, 0.1


@dataclass(frozen=True, eq=False)
class BreathSignal:
    """The volume-like signal of one stretch at `rate_hz`: `detected` for finding breaths, `read` for measuring them, shape (n,).

    `usual` is the usual swing of `detected` about each sample, from trough to peak, `asked` the least that a breath must have;
    `period_s` is the usual length of a breath, `signal_share` the part of the power in the breathing band that is no even noise.
    """

    start_s: float
    rate_hz: float
    detected: np.ndarray
    read: np.ndarray
    usual: np.ndarray
    asked: np.ndarray
    period_s: float
    signal_share: float


@dataclass(frozen=True, eq=False)
class MarkedBreaths:
    """Breaths of one stretch, shape (n,): times in s, `volumes` in the channel's own unit, `followed_by` as in BreathTable."""

    start_s: np.ndarray
    peak_s: np.ndarray
    end_s: np.ndarray
    volumes: np.ndarray
    followed_by: tuple[str, ...]


def breath_signal(piece: WorkingPiece, hidden: np.ndarray, breath_hz: float, integrate: bool) -> BreathSignal:
    """The volume-like signal of a stretch; `hidden` tells the samples to leave out, shape of the piece."""
    from scipy.ndimage import gaussian_filter1d

    values, rate, between = finer(piece)
    period = 1.0 / breath_hz
    if integrate:
        values = values - gaussian_filter1d(values, _RAMP_SIGMA * period * rate, mode="nearest")
        # The trapezoid rule takes this share of a sine's integral at the breathing frequency; it is given back.
        half = np.pi * breath_hz / rate
        values = np.concatenate(([0.0], np.cumsum(0.5 * (values[1:] + values[:-1])))) / rate * (np.tan(half) / half)
    values = values - np.median(values)
    omega = 2.0 * np.pi
    read = gaussian_filter1d(values, _READ_SIGMA * period * rate, mode="nearest") / np.exp(-0.5 * (omega * _READ_SIGMA) ** 2)
    fine = gaussian_filter1d(values, _NOISE_SIGMA * period * rate, mode="nearest")
    detected = fine - gaussian_filter1d(values, _DRIFT_SIGMA * period * rate, mode="nearest")
    smoothing_s = 0.35 * period
    power = gaussian_filter1d(detected**2, smoothing_s * rate, mode="nearest")
    envelope = Envelope(piece.start_s, rate, np.sqrt(2.0 * power), detected, smoothing_s, False)
    usual = 2.0 * local_peak(envelope, np.repeat(hidden, between)[: values.size])
    noise, share = _even_noise(piece, breath_hz, integrate)
    asked = np.clip(_NOISE_SWINGS * noise, SMALLEST_BREATH * usual, MOST_ASKED * usual)
    return BreathSignal(piece.start_s, rate, detected, read, usual, asked, period, share)


def _even_noise(piece: WorkingPiece, breath_hz: float, integrate: bool) -> tuple[float, float]:
    """Standard deviation of the noise in `detected`, were the floor at high frequencies that of all, and the share of power above it."""
    from scipy.signal import welch

    frequency, power = welch(piece.values - np.median(piece.values), piece.rate_hz, nperseg=min(piece.values.size, round(64.0 * piece.rate_hz)))
    high = (frequency > min(4.0 * breath_hz, 0.3 * piece.rate_hz)) & (frequency < 0.48 * piece.rate_hz)
    # The median of a periodogram's exponential scatter is ln 2 of its mean.
    floor = float(np.median(power[high])) / np.log(2.0)
    omega = 2.0 * np.pi * frequency[1:]
    passed = np.exp(-0.5 * (omega * _NOISE_SIGMA / breath_hz) ** 2) - np.exp(-0.5 * (omega * _DRIFT_SIGMA / breath_hz) ** 2)
    passed = (passed / omega if integrate else passed) ** 2
    noise = np.sqrt(floor * passed.sum() * frequency[1])
    all_of_it = float((power[1:] * passed).sum())
    share = 1.0 - floor * float(passed.sum()) / all_of_it if all_of_it > 0.0 else 0.0
    return float(noise), float(np.clip(share, 0.0, 1.0))


def finer(piece: WorkingPiece) -> tuple[np.ndarray, float, int]:
    """Samples at READING_RATE_HZ or above on a band-limited curve through the piece's own, their rate, and how many to one."""
    from scipy.signal import resample_poly

    between = int(np.ceil(READING_RATE_HZ / piece.rate_hz - 1e-3)) if piece.rate_hz < READING_RATE_HZ else 1
    if between == 1:
        return piece.values, piece.rate_hz, 1
    middle = float(np.median(piece.values))
    return resample_poly(piece.values - middle, between, 1, padtype="line") + middle, piece.rate_hz * between, between


def marked_breaths(signal: BreathSignal, hidden_spans: list[tuple[float, float]], shortest_pause_s: float) -> MarkedBreaths:
    """Find and measure the breaths of a stretch.

    Parameters
    ----------
    signal : BreathSignal
    hidden_spans : list of (start, stop)
        In s; a breath that touches one is left out.
    shortest_pause_s : float
        A rest between two breaths that is longer than this and than a usual breath is a pause.

    Returns
    -------
    MarkedBreaths
        Without the breath that the beginning or the end of the stretch cuts.

    Notes
    -----
    Measured on breathing built breath by breath, without noise: volumes within 1 %, at 2 samples a second single ones within 3.5 %; turns
    within 0.1 s; a start after a rest up to 0.25 s early. Noise lifts peaks and deepens troughs of an effort signal: 10 dB under the
    breathing it adds 2 % to the volumes at 8 samples a second and 8 % at 2; an integrated flow is free of that, not of its scatter.
    """
    rate, period = signal.rate_hz, signal.period_s
    size = signal.detected.size
    peaks = _peaks(signal)
    near = max(round(0.15 * period * rate), 1)
    if not peaks.size:
        return MarkedBreaths(np.empty(0), np.empty(0), np.empty(0), np.empty(0), ())
    peaks = np.unique([max(p - near, 0) + int(signal.read[max(p - near, 0) : p + near + 1].argmax()) for p in peaks])
    reach = round(1.5 * period * rate)
    rises = [_foot(signal.read, int(p), max(int(q), int(p) - reach), -1) for p, q in zip(peaks, np.r_[0, peaks[:-1]], strict=True)]
    falls = [_foot(signal.read, int(p), min(int(q), int(p) + reach), 1) for p, q in zip(peaks, np.r_[peaks[1:], size - 1], strict=True)]
    longest_rest = max(period, shortest_pause_s) * rate
    rows: list[tuple[float, float, float, float, str]] = []
    for i, (peak, rise, fall) in enumerate(zip(peaks, rises, falls, strict=True)):
        joined_before = i > 0 and rise - falls[i - 1] <= longest_rest
        joined_after = i + 1 < len(peaks) and rises[i + 1] - fall <= longest_rest
        start = _start(signal.read, peaks[i - 1], peak, rise) if joined_before else rise
        end = _start(signal.read, peak, peaks[i + 1], rises[i + 1]) if joined_after else fall
        cut = start <= 1.0 or end >= size - 2.0
        if cut or not start < peak < end:
            continue
        turn, top = _vertex(signal.read, int(peak), 1.0)
        foot, rest = (_at(signal.read, where) for where in (start, end))
        volume = top - (foot + (rest - foot) * (turn - start) / (end - start))
        rows.append((start, turn, end, volume, "breath" if joined_after else "pause" if i + 1 < len(peaks) else "break"))
    return _kept(signal, rows, hidden_spans)


def _peaks(signal: BreathSignal) -> np.ndarray:
    """Samples at which the signal peaks and stands out against both sides by a share of the usual swing."""
    from scipy.signal import find_peaks

    with warnings.catch_warnings():
        # A silence that is exactly flat is one long peak of no prominence, which is as it should be.
        warnings.filterwarnings("ignore", message="some peaks have a prominence of 0")
        peaks, _ = find_peaks(
            signal.detected, distance=max(round(_NEAREST * signal.period_s * signal.rate_hz), 1),
            prominence=np.maximum(signal.asked, np.finfo(float).tiny),
            wlen=max(round(4.0 * signal.period_s * signal.rate_hz), 3),
        )  # fmt: skip
    return np.asarray(peaks)


def _kept(signal: BreathSignal, rows: list[tuple[float, float, float, float, str]], hidden: list[tuple[float, float]]) -> MarkedBreaths:
    table = np.array([row[:4] for row in rows], dtype=float).reshape(-1, 4)
    times = signal.start_s + table[:, :3] / signal.rate_hz
    good = table[:, 3] > 0.0
    for start, stop in hidden:
        good &= (times[:, 2] <= start) | (times[:, 0] >= stop)
    followed = [row[4] for row in rows]
    kept = np.flatnonzero(good)
    for i in kept:
        gone = i + 1 >= len(rows) or not good[i + 1]
        masked = any(times[i, 2] <= start and (gone or start < times[i + 1, 0]) for start, _ in hidden)
        if gone or (masked and followed[i] == "pause"):
            followed[i] = "break"
    return MarkedBreaths(times[kept, 0], times[kept, 1], times[kept, 2], table[kept, 3], tuple(followed[i] for i in kept))


def _foot(read: np.ndarray, peak: int, limit: int, way: int) -> float:
    """Where the flank that leaves the peak to the left (way -1) or the right (1) comes to rest, in samples.

    From its passages of a half and a tenth of its height, along a parabola: the shape of a volume at its turning point.
    """
    flank = read[limit : peak + 1][::-1] if way < 0 else read[peak : limit + 1]
    if flank.size < 3:
        return float(peak + way * (flank.size - 1))
    low = float(flank.min())
    height = float(flank[0]) - low
    half, tenth = (_passage(flank, low + share * height) for share in (_HIGH, _LOW))
    roots = np.sqrt(_HIGH), np.sqrt(_LOW)
    foot = tenth + (tenth - half) * roots[1] / (roots[0] - roots[1])
    return float(peak + way * min(foot, flank.size - 1.0))


def _passage(falling: np.ndarray, level: float) -> float:
    """Samples from the start to the first passage of the level."""
    at = int((falling <= level).argmax())
    if at == 0:
        return 0.0
    return at - (level - falling[at]) / max(falling[at - 1] - falling[at], 1e-300)


def _start(read: np.ndarray, before: int, after: int, rise: float) -> float:
    """Between two peaks: the trough or, where the trough is flat, the later foot of the rise."""
    trough = int(before) + int(read[before : after + 1].argmin())
    return max(_vertex(read, trough, -1.0)[0], rise)


def _vertex(read: np.ndarray, at: int, sign: float) -> tuple[float, float]:
    """Place and height of the parabola through a turning point (sign 1 for a peak) and its neighbours."""
    if not 0 < at < read.size - 1:
        return float(at), float(read[at])
    left, middle, right = (float(read[at + k]) for k in (-1, 0, 1))
    bend = left - 2.0 * middle + right
    if sign * bend >= 0.0:
        return float(at), middle
    shift = min(max(0.5 * (left - right) / bend, -1.0), 1.0)
    return at + shift, middle - 0.25 * (left - right) * shift


def _at(read: np.ndarray, where: float) -> float:
    """The height at a place between samples, on the parabola through the three nearest."""
    i = min(max(round(where), 1), read.size - 2)
    left, middle, right = (float(read[i + k]) for k in (-1, 0, 1))
    away = where - i
    return middle + 0.5 * (right - left) * away + 0.5 * (left - 2.0 * middle + right) * away**2
