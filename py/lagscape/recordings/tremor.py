"""A shaking limb from its accelerometer: where the peak is, how wide, how large, and whether a load moves it.

Welch's averaged spectrum (Welch 1967, IEEE Trans Audio Electroacoust 15:70-73). A peak that moves with an added load points
to the mechanical-reflex loop; one that stays points to a source elsewhere, which no loop of this program explains.
"""

import math
from collections.abc import Sequence

import numpy as np

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings.envelope import runs_of
from lagscape.recordings.kinds import TREMOR_KINDS
from lagscape.recordings.masks import MaskedStretch
from lagscape.recordings.recording import Recording, Signal
from lagscape.recordings.stepwise import Steps, finished
from lagscape.recordings.tremor_movement import movement_in
from lagscape.recordings.tremor_peak import SEGMENT_S, PeakFound, background_of, find_peak, power_interval
from lagscape.recordings.tremor_quality import FEW_SEGMENTS, folded_rise, quality_of
from lagscape.recordings.tremor_result import TremorComparison, TremorMeasurement
from lagscape.recordings.tremor_sensor import channels_of, rectified, to_degrees_per_s, to_m_per_s2

__all__ = ["TremorComparison", "TremorMeasurement", "compare_tremor", "measure_tremor", "tremor_steps"]

BAND_HZ = (2.0, 20.0)
_FEWEST_SEGMENTS = 4
_SHOWN = 1.5
"""The drawn spectrum goes this many times as high as the band."""


def measure_tremor(
    recording: Recording,
    signal: str | Sequence[str] | None = None,
    *,
    window: tuple[float, float] | None = None,
    band_hz: tuple[float, float] = BAND_HZ,
    kind: str | None = None,
) -> TremorMeasurement:
    """Find the tremor's peak in one channel, or in the axes of one sensor taken together (the sum of their spectra).

    Parameters
    ----------
    recording : Recording
    signal : str or several, optional
        Channel, or the axes of one sensor; by default all that look like acceleration, else like rotation, else the first EMG.
    window : (start, stop), optional
        In s; the whole recording by default.
    band_hz : (low, high)
        Where the peak is looked for, Hz.
    kind : "acceleration", "rotation" or "EMG", optional
        What the channel is, where its guess is wrong. Raw EMG is rectified.

    Raises
    ------
    RecordingError
        If there is no such channel, the axes differ in rate, the sampling cannot show the band, or there is less than 20 s.
    """
    return finished(tremor_steps(recording, signal, window=window, band_hz=band_hz, kind=kind))


def tremor_steps(
    recording: Recording,
    signal: str | Sequence[str] | None = None,
    *,
    window: tuple[float, float] | None = None,
    band_hz: tuple[float, float] = BAND_HZ,
    kind: str | None = None,
) -> Steps[TremorMeasurement]:
    """As `measure_tremor`, in steps; counts samples."""
    from scipy.signal import welch

    channels = channels_of(recording, signal)
    if kind is not None and kind not in TREMOR_KINDS:
        raise InvalidInputError(f"kind must be one of {', '.join(TREMOR_KINDS)}; got {kind!r}")
    kind = kind or channels[0].kind
    rate = channels[0].sampling_frequency_hz
    if band_hz[0] <= 0.0 or band_hz[0] >= band_hz[1]:
        raise InvalidInputError(f"band_hz must be (low, high) with 0 < low < high (Hz), got {band_hz}")
    top = min(band_hz[1], 0.45 * rate)
    if top < band_hz[0] + 2.0:
        needed = 2.5 * (band_hz[0] + 2.0)
        raise RecordingError(f"'{channels[0].name}' has {rate:g} samples a second; to see a tremor it takes at least {needed:g}")
    n = round(SEGMENT_S * rate)
    start, stop = window or (recording.segments[0].start_s, recording.segments[-1].stop_s)
    spectra: list[np.ndarray] = []
    masked: list[MaskedStretch] = []
    frequency, used, resting = np.empty(0), 0, np.zeros(len(channels))
    for first_s, values in _stretches(channels, window):
        moved = movement_in(values, rate) if kind in ("acceleration", "rotation") else np.zeros(values.shape[1], dtype=bool)
        masked += [MaskedStretch(first_s + a / rate, first_s + b / rate, "movement") for a, b in runs_of(moved)]
        for a, b in runs_of(~moved):
            part = rectified(values[:, a:b]) if kind == "EMG" else values[:, a:b]
            pieces = range(0, part.shape[1] - n + 1, n // 2)
            for at in pieces:
                frequency, power = welch(part[:, at : at + n], rate, nperseg=n, nfft=4 * n, detrend="linear", axis=1)
                spectra.append(power.sum(axis=0))
                yield round((first_s - start) * rate) + a + at, round((stop - start) * rate)
            if pieces:
                length = pieces[-1] + n
                used += length
                resting += part[:, :length].sum(axis=1)
    if len(spectra) < _FEWEST_SEGMENTS:
        least = f"{SEGMENT_S * (_FEWEST_SEGMENTS + 1) / 2:.0f} s"
        if masked:
            raise RecordingError(
                f"movement was masked and leaves less than {least} of unbroken signal; a spectrum needs more. Choose a quieter window."
            )
        raise RecordingError(f"the window holds less than {least} of unbroken signal; a spectrum needs more")
    resting /= used
    return _judged(channels, kind, (start, stop), (band_hz[0], top), frequency, np.array(spectra), used / rate, tuple(masked), resting)


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


def _stretches(channels: list[Signal], window: tuple[float, float] | None) -> list[tuple[float, np.ndarray]]:
    """Unbroken stretches, each with its start in s and its values of shape (n_axes, n_samples); what is missing is cut out."""
    start, stop = window or (None, None)
    rate = channels[0].sampling_frequency_hz
    result = []
    for pieces in zip(*(channel.pieces(start, stop) for channel in channels), strict=True):
        values = np.array([piece[1] for piece in pieces])
        known = ~np.isnan(values).any(axis=0)
        result += [(pieces[0][0] + a / rate, values[:, a:b]) for a, b in runs_of(known)]
    return result


def _judged(
    channels: list[Signal], kind: str, window: tuple[float, float], band: tuple[float, float], frequency: np.ndarray, spectra: np.ndarray,
    used_s: float, masked: tuple[MaskedStretch, ...], resting: np.ndarray,
) -> TremorMeasurement:  # fmt: skip
    power = spectra.mean(axis=0)
    inside = (frequency >= band[0]) & (frequency <= band[1])
    shown = frequency <= min(_SHOWN * band[1], 0.5 * channels[0].sampling_frequency_hz)
    f, p = frequency[inside], power[inside]
    background = background_of(p)
    peak = find_peak(f, spectra[:, inside], frequency[shown], power[shown])
    unit = channels[0].unit
    scale = to_m_per_s2(unit)
    gravity = float(np.linalg.norm(resting)) * scale if scale is not None and len(channels) == 3 else None
    folded = folded_rise(frequency, power, channels[0].sampling_frequency_hz)
    quality, reasons = quality_of(peak, channels, kind, len(spectra), masked, folded, gravity)
    highest = float(p.max()) if peak is None else float(p[int(np.abs(f - peak.frequency_hz).argmin())])
    stands_out = highest / background if background > 0.0 else (math.inf if highest > 0.0 else 0.0)
    rms = displacement = angle = share = None
    if peak is not None:
        rms, share = _size(f, p, background, peak)
        swing = math.sqrt(2.0) * rms / (2.0 * math.pi * peak.frequency_hz)
        if kind not in ("rotation", "EMG") and scale is not None:
            displacement = 1000.0 * swing * scale / (2.0 * math.pi * peak.frequency_hz)
        turn = to_degrees_per_s(unit)
        if kind == "rotation" and turn is not None:
            angle = swing * turn
    low, high = power_interval(power[shown], len(spectra))
    return TremorMeasurement(
        signals=tuple(channel.name for channel in channels), unit=unit, kind=kind, sampling_frequency_hz=channels[0].sampling_frequency_hz,
        window=window, band_hz=band, peak_frequency_hz=None if peak is None else peak.frequency_hz,
        peak_error_hz=None if peak is None else peak.error_hz, width_hz=None if peak is None else peak.width_hz,
        half_power_hz=None if peak is None else peak.half_power_hz, rms=rms, displacement_mm=displacement, angle_deg=angle, peak_share=share,
        stands_out=stands_out, harmonics_hz=() if peak is None else peak.harmonics_hz,
        other_peaks_hz=() if peak is None else peak.other_peaks_hz, frequency_hz=frequency[shown], power=power[shown], power_low=low,
        power_high=high, n_segments=len(spectra), used_s=used_s, masked=masked, quality=quality, quality_reasons=reasons,
        notes=_notes(peak, kind, scale, len(spectra)),
    )  # fmt: skip


def _size(f: np.ndarray, p: np.ndarray, background: float, peak: PeakFound) -> tuple[float, float]:
    """Size of what rises over the background about the peak, and its share of all power in the band."""
    low, high = peak.half_power_hz
    reach = high - low
    near = (f >= low - 0.5 * reach) & (f <= high + 0.5 * reach)
    power = max(float(np.sum(p[near] - background)), 0.0)
    step = float(f[1] - f[0])
    return math.sqrt(power * step), min(power / float(np.sum(p)), 1.0)


def _notes(peak: PeakFound | None, kind: str, scale: float | None, n_segments: int) -> tuple[str, ...]:
    if peak is None:
        return ("No peak stands out of the spectrum.",)
    notes = []
    if peak.half_frequency_hz is not None:
        notes.append(f"There is a smaller peak at half that frequency ({peak.half_frequency_hz:.2f} Hz): this one may be its harmonic.")
    if peak.other_peaks_hz:
        notes.append("Another peak stands out at " + ", ".join(f"{at:.2f}" for at in peak.other_peaks_hz) + " Hz.")
    if n_segments < FEW_SEGMENTS:
        notes.append("The recording is short; the standard error of a broad peak is a lower bound. A minute or more is better.")
    if kind not in ("rotation", "EMG") and scale is None:
        notes.append("The unit is no known acceleration, so no displacement is given.")
    return tuple(notes)
