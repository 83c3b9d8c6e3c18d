"""A shaking limb from its accelerometer: where the peak is, how wide, how large, and whether a load moves it.

Welch's averaged spectrum (Welch 1967, IEEE Trans Audio Electroacoust 15:70-73). A peak that moves with an added load points
to the mechanical-reflex loop; one that stays points to a source elsewhere, which no loop of this program explains.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings.recording import Recording, Signal

__all__ = ["TremorComparison", "TremorMeasurement", "compare_tremor", "measure_tremor"]

STANDARD_GRAVITY = 9.80665
_SEGMENT_S = 8.0
_FEWEST_SEGMENTS = 4
_FEW_SEGMENTS = 12
_STAND_OUT = 4.0
_SMOOTHING_HZ = 0.1
_HANN_HALF_POWER = 1.44
"""Half-power width of a Hann window in units of 1 / its length."""
_TO_M_PER_S2 = {"g": STANDARD_GRAVITY, "mg": 1e-3 * STANDARD_GRAVITY, "m/s2": 1.0, "m/s²": 1.0, "m/s^2": 1.0, "m/s/s": 1.0}


@dataclass(frozen=True, eq=False)
class TremorMeasurement:
    """One recording of a tremor.

    `peak_frequency_hz` is None where no peak stands out. `peak_error_hz` is its standard error, `width_hz` the half-power
    width with the analysis window's own taken out, `rms` the size between the half-power points widened to twice their distance,
    in the signal's unit; `displacement_mm` the amplitude of the movement where the unit is an acceleration.
    `frequency_hz` and `power` (unit^2/Hz, summed over the axes) are the spectrum for drawing, shape (n,).
    """

    signals: tuple[str, ...]
    unit: str
    window: tuple[float, float]
    peak_frequency_hz: float | None
    peak_error_hz: float | None
    width_hz: float | None
    rms: float | None
    displacement_mm: float | None
    stands_out: float
    frequency_hz: np.ndarray
    power: np.ndarray
    n_segments: int
    notes: tuple[str, ...]


@dataclass(frozen=True)
class TremorComparison:
    """Unloaded against loaded: change of the peak in Hz with its 95 % interval, and what that says."""

    shift_hz: float
    low_hz: float
    high_hz: float
    moves: bool | None
    sentence: str


def measure_tremor(
    recording: Recording,
    signal: str | Sequence[str] | None = None,
    *,
    window: tuple[float, float] | None = None,
    band_hz: tuple[float, float] = (2.0, 20.0),
) -> TremorMeasurement:
    """Find the tremor's peak in one channel, or in the axes of one accelerometer taken together.

    Parameters
    ----------
    recording : Recording
    signal : str or several, optional
        Channel, or the axes of one sensor; by default all that look like acceleration.
    window : (start, stop), optional
        In s; the whole recording by default.
    band_hz : (low, high)
        Where the peak is looked for, Hz.

    Raises
    ------
    RecordingError
        If there is no such channel, the axes differ in rate, the sampling cannot show the band, or there is less than 20 s.
    """
    from scipy.signal import welch

    channels = _channels(recording, signal)
    rate = channels[0].sampling_frequency_hz
    if band_hz[0] <= 0.0 or band_hz[0] >= band_hz[1]:
        raise InvalidInputError(f"band_hz must be (low, high) with 0 < low < high (Hz), got {band_hz}")
    top = min(band_hz[1], 0.45 * rate)
    if top < band_hz[0] + 2.0:
        needed = 2.5 * (band_hz[0] + 2.0)
        raise RecordingError(f"'{channels[0].name}' has {rate:g} samples a second; to see a tremor it takes at least {needed:g}")
    n = round(_SEGMENT_S * rate)
    spectra, weights = [], []
    frequency = np.empty(0)
    for parts in _stretches(channels, window):
        for at in range(0, parts.shape[1] - n + 1, n // 2):
            piece = parts[:, at : at + n]
            frequency, power = welch(piece, rate, nperseg=n, nfft=4 * n, detrend="linear", axis=1)
            spectra.append(power.sum(axis=0))
            weights.append(1.0)
    if len(spectra) < _FEWEST_SEGMENTS:
        raise RecordingError(f"the window holds less than {_SEGMENT_S * (_FEWEST_SEGMENTS + 1) / 2:.0f} s of unbroken signal; a spectrum needs more")
    start, stop = window or (recording.segments[0].start_s, recording.segments[-1].stop_s)
    return _judged(tuple(c.name for c in channels), channels[0].unit, (start, stop), frequency, np.array(spectra), (band_hz[0], top))


def compare_tremor(unloaded: TremorMeasurement, loaded: TremorMeasurement) -> TremorComparison:
    """What an added load did to the peak.

    Notes
    -----
    A fall of more than 1 Hz speaks for enhanced physiological tremor, a smaller one for another source (common clinical rule).
    `moves` is None where the interval holds both.

    Raises
    ------
    RecordingError
        If one of the two has no peak.
    """
    for which, measured in (("unloaded", unloaded), ("loaded", loaded)):
        if measured.peak_frequency_hz is None:
            raise RecordingError(f"the {which} recording has no peak that stands out; there is nothing to compare")
    assert unloaded.peak_frequency_hz is not None and loaded.peak_frequency_hz is not None
    shift = loaded.peak_frequency_hz - unloaded.peak_frequency_hz
    error = 1.96 * math.hypot(unloaded.peak_error_hz or 0.0, loaded.peak_error_hz or 0.0)
    low, high = shift - error, shift + error
    before, after = unloaded.peak_frequency_hz, loaded.peak_frequency_hz
    told = f"With the load the peak goes from {before:.2f} to {after:.2f} Hz ({shift:+.2f} Hz, 95 % {low:+.2f} to {high:+.2f})"
    if high < -1.0:
        return TremorComparison(shift, low, high, True, told + ": it moves with the load, which points to the mechanical-reflex loop.")
    if low >= -1.0:
        return TremorComparison(
            shift, low, high, False, told + ": it stays within 1 Hz, which points to a source elsewhere; this loop does not explain it."
        )
    return TremorComparison(shift, low, high, None, told + ": too uncertain to say whether it moves by more than 1 Hz; record longer.")


def _channels(recording: Recording, signal: str | Sequence[str] | None) -> list[Signal]:
    if signal is None:
        channels = list(recording.of_kind("acceleration"))
        if not channels:
            raise RecordingError("no channel looks like acceleration; the file has: " + ", ".join(f"'{n}'" for n in recording.channel_names))
    else:
        channels = [recording.signal(name) for name in ([signal] if isinstance(signal, str) else signal)]
    if not channels:
        raise RecordingError("no channel was named")
    if len({(c.sampling_frequency_hz, c.n_samples) for c in channels}) > 1:
        raise RecordingError("the axes must have one sampling rate: " + ", ".join(f"'{c.name}' {c.sampling_frequency_hz:g} Hz" for c in channels))
    return channels


def _stretches(channels: list[Signal], window: tuple[float, float] | None) -> list[np.ndarray]:
    """Unbroken stretches, each of shape (n_axes, n_samples); short missing parts are filled, long ones cut out."""
    start, stop = window or (None, None)
    result = []
    for pieces in zip(*(channel.pieces(start, stop) for channel in channels), strict=True):
        values = np.array([piece[1] for piece in pieces])
        missing = np.isnan(values).any(axis=0)
        if not missing.any():
            result.append(values)
            continue
        edges = np.flatnonzero(np.diff(np.concatenate(([True], missing, [True])).astype(np.int8)))
        result += [values[:, a:b] for a, b in zip(edges[0::2], edges[1::2], strict=True) if b > a]
    return result


def _judged(
    names: tuple[str, ...], unit: str, window: tuple[float, float], frequency: np.ndarray, spectra: np.ndarray, band: tuple[float, float]
) -> TremorMeasurement:
    power = spectra.mean(axis=0)
    inside = (frequency >= band[0]) & (frequency <= band[1])
    f, p = frequency[inside], power[inside]
    top = int(p.argmax())
    background = float(np.median(p))
    stands_out = float(p[top] / background) if background > 0.0 else (math.inf if p[top] > 0.0 else 0.0)
    notes: list[str] = []
    shown = frequency <= 1.5 * band[1]
    empty = TremorMeasurement(
        names, unit, window, None, None, None, None, None, stands_out, frequency[shown], power[shown], len(spectra),
        ("No peak stands out of the spectrum.",),
    )  # fmt: skip
    if stands_out < _STAND_OUT or top in (0, p.size - 1):
        return empty
    peak, low, high = _peak(f, p, background)
    blur = math.hypot(_HANN_HALF_POWER / _SEGMENT_S, 2.355 * _SMOOTHING_HZ)
    width = math.sqrt(max((high - low) ** 2 - blur**2, 0.0))
    reach = high - low
    near = (frequency >= low - 0.5 * reach) & (frequency <= high + 0.5 * reach)
    rms = math.sqrt(max(float(np.sum(power[near] - background)) * float(frequency[1]), 0.0))
    harmonic = _harmonic_of(f, p, peak)
    if harmonic is not None:
        notes.append(f"There is a smaller peak at half that frequency ({harmonic:.2f} Hz): this one may be its harmonic.")
    if len(spectra) < _FEW_SEGMENTS:
        notes.append("The recording is short; the standard error of a broad peak is a lower bound. A minute or more is better.")
    scale = _TO_M_PER_S2.get(unit.strip().casefold())
    displacement = None if scale is None else 1000.0 * math.sqrt(2.0) * rms * scale / (2.0 * math.pi * peak) ** 2
    if scale is None:
        notes.append("The unit is no known acceleration, so no displacement is given.")
    error = _peak_error(f, spectra[:, inside], background)
    return TremorMeasurement(
        names, unit, window, peak, error, width, rms, displacement, stands_out, frequency[shown], power[shown], len(spectra), tuple(notes)
    )  # fmt: skip


def _peak(f: np.ndarray, p: np.ndarray, background: float) -> tuple[float, float, float]:
    """Peak and half-power points, Hz: centre of gravity of what rises over half of the smoothed spectrum's height.

    The highest bin itself jumps about within a broad peak; its neighbourhood does not.
    """
    from scipy.ndimage import gaussian_filter1d

    smooth = gaussian_filter1d(p, _SMOOTHING_HZ / (f[1] - f[0]), mode="nearest")
    top = int(smooth.argmax())
    low, high = _half_power(f, smooth, top, background)
    level = background + 0.5 * (smooth[top] - background)
    weight = np.where((f >= low) & (f <= high), np.maximum(smooth - level, 0.0), 0.0)
    total = float(weight.sum())
    return (float((f * weight).sum()) / total if total > 0.0 else float(f[top])), low, high


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


def _harmonic_of(f: np.ndarray, p: np.ndarray, peak: float) -> float | None:
    near = np.abs(f - 0.5 * peak) < 0.4
    if not near.any():
        return None
    i = int(np.flatnonzero(near)[p[near].argmax()])
    inside = 0 < i < p.size - 1 and p[i] > p[i - 1] and p[i] > p[i + 1]
    return float(f[i]) if inside and p[i] > 6.0 * np.median(p) else None


def _peak_error(f: np.ndarray, spectra: np.ndarray, background: float) -> float:
    """Standard error of the peak, by leaving out one tenth of the recording at a time (jackknife).

    Neighbouring spectra share half of their samples, so blocks are left out, not single spectra.
    """
    blocks = np.array_split(np.arange(len(spectra)), min(10, len(spectra)))
    peaks = np.array([_peak(f, np.delete(spectra, block, axis=0).mean(axis=0), background)[0] for block in blocks])
    return float(math.sqrt((peaks.size - 1) / peaks.size * np.sum((peaks - peaks.mean()) ** 2)))
