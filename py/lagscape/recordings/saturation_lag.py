"""How long after each apnoea the sensor's saturation turns up again: circulation time from lung to sensor.

Blood that was in the lung when ventilation started again carries the turn; the oximeter's own averaging is added to it.
From the end of apnoea to the turn of the saturation, as the lung-to-ear time of published series is taken (Hall et al. 1996,
Am J Respir Crit Care Med 154:376-381). A finger lies later than an ear, an ear later than the carotid body: never use the lag as the loop's delay.
"""

from dataclasses import dataclass

import numpy as np

from lagscape.errors import RecordingError
from lagscape.recordings.breathing_result import BreathingMeasurement, Spread
from lagscape.recordings.recording import Recording

__all__ = ["CycleLag", "SaturationLag", "measure_saturation_lag"]

_SMALLEST_DROP = 2.0
_LOWEST_PERCENT = 30.0
_LONGEST_LAG_S = 75.0


@dataclass(frozen=True)
class CycleLag:
    """One cycle's lag in s from the end of its apnoea to the turn at `turn_s`, and the depth of the drop in % points."""

    number: int
    lag_s: float
    turn_s: float
    drop: float


@dataclass(frozen=True)
class SaturationLag:
    """Lags of the cycles that show one, their median and quartiles, and how many cycles did not."""

    signal: str
    lags: tuple[CycleLag, ...]
    n_without: int
    notes: tuple[str, ...]

    @property
    def lag_s(self) -> Spread | None:
        return Spread.of(lag.lag_s for lag in self.lags)

    @property
    def drop(self) -> Spread | None:
        return Spread.of(lag.drop for lag in self.lags)


def measure_saturation_lag(recording: Recording, breathing: BreathingMeasurement, signal: str | None = None) -> SaturationLag:
    """Lag of the saturation behind breathing, for each cycle used with an apnoea.

    Parameters
    ----------
    recording : Recording
        The one the breathing was measured in.
    breathing : BreathingMeasurement
    signal : str, optional
        The saturation channel (%); by default the first that looks like one.

    Raises
    ------
    RecordingError
        If there is no such channel.

    Notes
    -----
    The turn is where the straight line through the rise (from a quarter to six tenths of it) meets the lowest value: readings
    come in whole percents, so that the nadir itself is flat for seconds. It is looked for up to one cycle after the apnoea. A
    drop under 2 % points is left out.
    """
    if signal is None:
        fitting = recording.of_kind("SpO2")
        if not fitting:
            raise RecordingError("no channel looks like saturation; the file has: " + ", ".join(f"'{n}'" for n in recording.channel_names))
        channel = fitting[0]
    else:
        channel = recording.signal(signal)
    notes = []
    lags = []
    cycles = [cycle for cycle in breathing.used if cycle.pause == "apnoea"]
    fraction = False
    for cycle in cycles:
        reach = min(0.95 * cycle.cycle_length_s, _LONGEST_LAG_S)
        pieces = list(channel.pieces(cycle.ventilation_end_s, cycle.stop_s + reach + 5.0))
        if len(pieces) != 1:
            continue
        first_s, values = pieces[0]
        if np.nanmax(values, initial=0.0) <= 1.5:
            fraction, values = True, 100.0 * values
        found = _turn(first_s, values, channel.sampling_frequency_hz, cycle.stop_s, reach)
        if found is not None:
            lags.append(CycleLag(cycle.number, found[0] - cycle.stop_s, found[0], found[1]))
    if fraction:
        notes.append(f"'{channel.name}' runs from 0 to 1 and was taken as a fraction.")
    if channel.sampling_frequency_hz < 0.5:
        notes.append(f"'{channel.name}' has one value in {1.0 / channel.sampling_frequency_hz:.0f} s; the lag is no better known than that.")
    return SaturationLag(channel.name, tuple(lags), len(cycles) - len(lags), tuple(notes))


def _turn(first_s: float, values: np.ndarray, rate_hz: float, resumed_s: float, reach_s: float) -> tuple[float, float] | None:
    """Time of the turn (s) and depth of the drop (% points); None where there is no clear nadir."""
    values = np.where((values >= _LOWEST_PERCENT) & (values <= 100.5), values, np.nan)
    if np.isnan(values).mean() > 0.2 or values.size < 4:
        return None
    at = np.arange(values.size)
    known = ~np.isnan(values)
    values = np.interp(at, at[known], values[known])
    times = first_s + at / rate_hz
    inside = np.flatnonzero((times >= resumed_s) & (times <= resumed_s + reach_s))
    if inside.size < 3:
        return None
    low = values[inside].min()
    drop = values[: inside[-1] + 1].max() - low
    rise = values[inside[0] :].max() - low
    if drop < _SMALLEST_DROP or rise < 0.5 * drop:
        return None
    last_low = int(inside[values[inside] <= low + 0.1 * drop][-1])
    if last_low == inside[-1]:
        return None
    quarter, six_tenths = (_first_over(times, values, last_low, low + part * rise) for part in (0.25, 0.6))
    if quarter is None or six_tenths is None:
        return None
    turn = quarter - 0.25 / 0.35 * (six_tenths - quarter)
    return float(max(turn, resumed_s)), float(drop)


def _first_over(times: np.ndarray, values: np.ndarray, start: int, level: float) -> float | None:
    over = np.flatnonzero(values[start + 1 :] >= level)
    if not over.size:
        return None
    i = start + 1 + int(over[0])
    return float(times[i - 1] + (times[i] - times[i - 1]) * (level - values[i - 1]) / (values[i] - values[i - 1]))
