"""What a tremor's spectrum is worth, in words: the shape of its peak, and what speaks against trusting it."""

import numpy as np

from lagscape.recordings.masks import MaskedStretch
from lagscape.recordings.recording import Signal, counted
from lagscape.recordings.tremor_peak import PeakFound
from lagscape.recordings.tremor_sensor import STANDARD_GRAVITY, to_degrees_per_s, to_m_per_s2

__all__ = ["FEW_SEGMENTS", "folded_rise", "quality_of"]

FEW_SEGMENTS = 12
_SHARP_HZ = 1.0
_BROAD_HZ = 2.0
_SLOW_SAMPLING_HZ = 50.0
_FOLDED_RISE = 3.0
_RAW_EMG_HZ = 500.0
_GRAVITY_TOLERANCE = 0.1
_GRAVITY_SEEN = 0.3
"""Under this share of 1 g the recorder has taken gravity out, and nothing can be said of the calibration."""


def quality_of(
    peak: PeakFound | None, channels: list[Signal], kind: str, n_segments: int, masked: tuple[MaskedStretch, ...], folded: float,
    resting: float | None,
) -> tuple[str, tuple[str, ...]]:  # fmt: skip
    """A word for the peak (none, sharp, moderate, broad) and a sentence for everything that matters to who reads it.

    Parameters
    ----------
    peak : PeakFound or None
    channels : list of Signal
    kind : str
        acceleration, rotation, EMG or another.
    n_segments : int
        How many overlapping spectra were averaged.
    masked : tuple
        What was left out.
    folded : float
        Power just under half of the sampling rate over the power below it.
    resting : float or None
        Length of the mean vector of three axes, m/s^2; None where it is not known.

    Notes
    -----
    Sharp: half-power width up to 1 Hz; broad: over 2 Hz (common practice, no source).
    """
    reasons = []
    rate, unit = channels[0].sampling_frequency_hz, channels[0].unit
    if peak is None:
        word = "no peak"
        reasons.append("Nothing stands four times over the rest of the spectrum with a dip on either side.")
    elif peak.width_hz <= _SHARP_HZ:
        word = "sharp"
        reasons.append("The peak is at most 1 Hz wide at half its power.")
    elif peak.width_hz <= _BROAD_HZ:
        word = "moderate"
        reasons.append("The peak is between 1 and 2 Hz wide at half its power.")
    else:
        word = "broad"
        reasons.append("The peak is over 2 Hz wide at half its power: a resonance driven by noise, or a rhythm that wanders.")
    if peak is not None and not peak.half_power_hz[0] <= peak.frequency_hz <= peak.half_power_hz[1]:
        reasons.append(
            "Two peaks close together, or one that moved within the window: the frequency is a middle between them. Choose a window in "
            "which the tremor is steady."
        )
    if n_segments < FEW_SEGMENTS:
        reasons.append(
            f"Too short a window: only {counted(n_segments, 'spectrum').replace('spectrums', 'spectra')} averaged, so the peak's error is a "
            "lower bound. A minute or more is better."
        )
    if masked:
        seconds = sum(stretch.duration_s for stretch in masked)
        reasons.append(f"Movement masked: {counted(len(masked), 'stretch').replace('stretchs', 'stretches')}, {seconds:.0f} s, left out.")
    if rate < _SLOW_SAMPLING_HZ:
        reasons.append(
            f"Aliasing risk: with {rate:g} samples a second whatever is faster than {0.5 * rate:g} Hz shows up folded to a lower frequency, "
            "unless the recorder filtered it."
        )
    if folded > _FOLDED_RISE:
        reasons.append(f"Aliasing risk: power rises towards half the sampling rate ({0.5 * rate:g} Hz), as it does where something faster folds.")
    if kind == "EMG" and rate < _RAW_EMG_HZ:
        reasons.append("EMG: raw EMG needs 500 samples a second or more; the rate of the bursts can still be read from an envelope.")
    if kind == "acceleration":
        if to_m_per_s2(unit) is None:
            reasons.append("Not calibrated: the unit is no known acceleration, so no displacement is given.")
        elif resting is not None and resting > _GRAVITY_SEEN * STANDARD_GRAVITY and abs(resting / STANDARD_GRAVITY - 1.0) > _GRAVITY_TOLERANCE:
            reasons.append(
                f"Check the calibration: at rest three axes show 1 g together, these show {resting / STANDARD_GRAVITY:.2f} g. The displacement "
                "is off by as much."
            )
    if kind == "rotation" and to_degrees_per_s(unit) is None:
        reasons.append("Not calibrated: the unit is no known angular velocity, so no angle is given.")
    return word, tuple(reasons)


def folded_rise(f: np.ndarray, power: np.ndarray, rate_hz: float) -> float:
    """Median power between 0.42 and 0.49 of the sampling rate over that between 0.3 and 0.4 of it."""
    top = power[(f >= 0.42 * rate_hz) & (f <= 0.49 * rate_hz)]
    below = power[(f >= 0.30 * rate_hz) & (f <= 0.40 * rate_hz)]
    if not top.size or not below.size or np.median(below) <= 0.0:
        return 0.0
    return float(np.median(top) / np.median(below))
