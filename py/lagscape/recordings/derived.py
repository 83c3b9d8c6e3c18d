"""Signals made from other signals: flow from nasal pressure, and one effort from chest and abdomen.

They are read as they are asked for, like any other signal, so that a whole night costs no memory.
"""

import re
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.recordings.recording import Recording, SampleStore, Signal

__all__ = ["effort_sum", "flow_from_nasal_pressure", "with_derived_channels"]

_NASAL = re.compile(r"nas|press|ptaf|cannula", re.IGNORECASE)

_SAMPLES_LOOKED_AT = 200_000


def flow_from_nasal_pressure(pressure: Signal) -> Signal:
    """The square root of nasal pressure, with its sign: closer to flow, which small breaths need.

    Through a prong the pressure drop goes about as the square of the flow (orifice), so that raw pressure makes small
    breaths look smaller than they are. Zero is the median of the signal. The unit is arbitrary.
    """
    return replace(pressure, name=f"{pressure.name} (square root)", unit="", kind="airflow", samples=_SquareRoot(pressure))


def effort_sum(chest: Signal, abdomen: Signal, *, calibration: float | None = None) -> Signal:
    """Chest plus calibration times abdomen, on the chest's time grid.

    Parameters
    ----------
    chest, abdomen : Signal
        Of one recording; their rates may differ.
    calibration : float, optional
        Chest units per abdomen unit. By default the ratio of the two signals' spreads (middle half), which makes them count
        alike: what can be had without a calibration manoeuvre (common practice, no source). The sum then has no unit.

    Raises
    ------
    InvalidInputError
        If the signals do not share their segments, or the calibration is not finite.
    """
    if chest.segments != abdomen.segments:
        raise InvalidInputError(f"'{chest.name}' and '{abdomen.name}' must come from one recording")
    unit = "" if calibration is None else chest.unit
    if calibration is not None and not np.isfinite(calibration):
        raise InvalidInputError(f"calibration must be finite (chest units per abdomen unit), got {calibration!r}")
    return replace(
        chest, name=f"{chest.name} + {abdomen.name}", unit=unit, kind="effort", samples=_Sum(chest, abdomen, calibration)
    )  # fmt: skip


def with_derived_channels(recording: Recording) -> Recording:
    """The recording with what can be made of its channels: the square root of nasal pressure, chest and abdomen together."""
    for signal in recording.of_kind("airflow"):
        if _NASAL.search(signal.name):
            recording = recording.with_signal(flow_from_nasal_pressure(signal))
    efforts = recording.of_kind("effort")
    if len(efforts) == 2 and efforts[0].segments == efforts[1].segments:
        recording = recording.with_signal(effort_sum(*efforts))
    return recording


def _middle(signal: Signal) -> tuple[float, float]:
    """Median, and width of the middle half, of samples taken evenly from the whole signal."""
    blocks = 40
    length = _SAMPLES_LOOKED_AT // blocks
    step = max(signal.n_samples // blocks, 1)
    parts = [signal.samples.read(at, min(at + length, signal.n_samples)) for at in range(0, signal.n_samples, step)]
    values = np.concatenate(parts)
    values = values[np.isfinite(values)]
    if not values.size:
        return 0.0, 0.0
    low, middle, high = np.percentile(values, [25.0, 50.0, 75.0])
    return float(middle), float(high - low)


# What a signal is scaled by is worked out when it is first read, so that a night's channels are listed at once.


@dataclass(frozen=True, eq=False)
class _SquareRoot:
    pressure: Signal

    @property
    def made_of(self) -> tuple[SampleStore, ...]:
        return (self.pressure.samples,)

    @cached_property
    def zero(self) -> float:
        return _middle(self.pressure)[0]

    def read(self, first: int, stop: int) -> np.ndarray:
        away = self.pressure.samples.read(first, stop) - self.zero
        return np.sign(away) * np.sqrt(np.abs(away))


@dataclass(frozen=True, eq=False)
class _Sum:
    chest: Signal
    abdomen: Signal
    stated: float | None

    @property
    def made_of(self) -> tuple[SampleStore, ...]:
        return self.chest.samples, self.abdomen.samples

    @cached_property
    def calibration(self) -> float:
        """Chest units per abdomen unit."""
        if self.stated is not None:
            return float(self.stated)
        spread = _middle(self.abdomen)[1]
        return _middle(self.chest)[1] / spread if spread > 0.0 else 1.0

    def read(self, first: int, stop: int) -> np.ndarray:
        chest = self.chest.samples.read(first, stop)
        if self.chest.first_samples == self.abdomen.first_samples and self.chest.n_samples == self.abdomen.n_samples:
            return chest + self.calibration * self.abdomen.samples.read(first, stop)
        other = np.full(stop - first, np.nan)
        for i in range(len(self.chest.segments)):
            a, b = self.chest.sample_range(i)
            low, high = max(a, first), min(b, stop)
            if high <= low:
                continue
            # Times within the segment, in samples of the abdomen.
            at = (np.arange(low, high) - a) * (self.abdomen.sampling_frequency_hz / self.chest.sampling_frequency_hz)
            c, d = self.abdomen.sample_range(i)
            lowest, highest = int(at[0]), min(int(at[-1]) + 2, d - c)
            if highest <= lowest:
                continue
            values = self.abdomen.samples.read(c + lowest, c + highest)
            other[low - first : high - first] = np.interp(at - lowest, np.arange(values.size), values)
        return chest + self.calibration * other
