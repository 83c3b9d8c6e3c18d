"""What measuring a tremor gives: the peak, its width and size, the spectrum it stands in, and what it is worth in words."""

from dataclasses import dataclass

import numpy as np

from lagscape.recordings.masks import MaskedStretch

__all__ = ["TremorComparison", "TremorMeasurement"]


@dataclass(frozen=True, eq=False)
class TremorMeasurement:
    """One window of a tremor recording.

    `peak_frequency_hz` is None where no peak stands out. `peak_error_hz` is its standard error, `width_hz` the half-power
    width with the analysis window's own taken out, `half_power_hz` where the drawn spectrum crosses half of the peak, `rms` the size
    between the half-power points widened to twice their distance, in the signal's unit; `displacement_mm` the amplitude of the
    movement where the unit is an acceleration, `angle_deg` where it is an angular velocity; `peak_share` how much of the power in the
    band is the peak's. `frequency_hz`, `power` and its 95 % interval `power_low`, `power_high` (unit^2/Hz, summed over the axes) are
    the spectrum for drawing, shape (n,). `used_s` is the unbroken signal that went into it.
    """

    signals: tuple[str, ...]
    unit: str
    kind: str
    sampling_frequency_hz: float
    window: tuple[float, float]
    band_hz: tuple[float, float]
    peak_frequency_hz: float | None
    peak_error_hz: float | None
    width_hz: float | None
    half_power_hz: tuple[float, float] | None
    rms: float | None
    displacement_mm: float | None
    angle_deg: float | None
    peak_share: float | None
    stands_out: float
    harmonics_hz: tuple[float, ...]
    other_peaks_hz: tuple[float, ...]
    frequency_hz: np.ndarray
    power: np.ndarray
    power_low: np.ndarray
    power_high: np.ndarray
    n_segments: int
    used_s: float
    masked: tuple[MaskedStretch, ...]
    quality: str
    quality_reasons: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def masked_s(self) -> float:
        return sum(stretch.duration_s for stretch in self.masked)


@dataclass(frozen=True)
class TremorComparison:
    """Unloaded against loaded: change of the peak in Hz with its 95 % interval, and what that says."""

    shift_hz: float
    low_hz: float
    high_hz: float
    moves: bool | None
    sentence: str
