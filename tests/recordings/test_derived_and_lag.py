"""Flow from nasal pressure, chest plus abdomen, and the saturation's lag, on signals with known truth."""

import dataclasses

import numpy as np
import pytest

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings import (
    effort_sum,
    flow_from_nasal_pressure,
    measure_breathing,
    measure_saturation_lag,
    read_recording,
)
from recordings.edf_bytes import channel, edf
from recordings.synthetic_breathing import cut_off_sine


def recording_of(**columns):
    names = list(columns)
    rows = np.column_stack([columns[name] for name in names])
    text = ",".join(names) + "\n" + "\n".join(",".join(f"{v:.6g}" for v in row) for row in rows)
    return read_recording(text.encode(), sampling_frequency_hz=10.0)


def values_of(signal):
    return np.concatenate([values for _, values in signal.pieces()])


def test_square_root_undoes_the_orifice():
    t = np.arange(18000) / 10.0
    flow = cut_off_sine(t, 60.0, 0.6) * np.sin(2 * np.pi * 0.27 * t)
    recording = recording_of(nasal_pressure=np.sign(flow) * flow**2 + 0.3)
    signal = flow_from_nasal_pressure(recording.signal("nasal_pressure"))
    # Zero is the median, 0.3 here since breathing is symmetrical; the root of a six-digit file's rounding is 1e-3.
    assert np.abs(values_of(signal) - flow).max() < 5e-3
    assert signal.kind == "airflow" and signal.name == "nasal_pressure (square root)"
    larger = recording.with_signal(signal)
    raw, root = (measure_breathing(larger, name) for name in larger.channel_names)
    assert root.duty_ratio.median == pytest.approx(0.6, abs=0.01)
    # It matters: raw pressure makes the small breaths at the edges smaller still.
    assert raw.duty_ratio.median < root.duty_ratio.median - 0.02


def test_chest_and_abdomen_count_alike_without_a_calibration():
    t = np.arange(6000) / 10.0
    chest, abdomen = np.sin(t), np.cos(t)
    recording = recording_of(chest=chest, abdomen=50.0 * abdomen + 7.0)
    total = values_of(effort_sum(recording.signal("chest"), recording.signal("abdomen")))
    # Quartiles of sampled sines agree to the sampling of their period, 1 %.
    assert np.abs(total - np.mean(total) - (chest + abdomen - np.mean(chest + abdomen))).max() < 0.02
    stated = values_of(effort_sum(recording.signal("chest"), recording.signal("abdomen"), calibration=0.02))
    assert stated == pytest.approx(chest + abdomen + 0.14, abs=1e-5)


def test_paradox_cancels_in_the_sum():
    # Obstructed effort: chest and abdomen move against each other and no air is moved.
    t = np.arange(6000) / 10.0
    recording = recording_of(chest=np.sin(1.6 * t), abdomen=-3.0 * np.sin(1.6 * t))
    total = values_of(effort_sum(recording.signal("chest"), recording.signal("abdomen")))
    assert np.std(total) < 0.01


def test_chest_and_abdomen_of_different_rates():
    t = np.arange(3000) / 25.0
    slow = np.arange(1200) / 10.0
    data = edf([
        channel("Chest", np.round(10000 * np.sin(t)), 25, low="-32768", high="32767"),
        channel("Abdomen", np.round(10000 * np.cos(slow)), 10, low="-32768", high="32767"),
    ])  # fmt: skip
    recording = read_recording(data)
    total = effort_sum(recording.signal("Chest"), recording.signal("Abdomen"), calibration=1.0)
    (start, values), = total.pieces(20.0, 60.0)
    assert start == 20.0
    at = 20.0 + np.arange(values.size) / 25.0
    # Straight lines over 0.1 s of a sine of one radian a second: 0.1^2/8 of 10,000 = 12.5, and one for rounding.
    assert np.abs(values - 10000 * (np.sin(at) + np.cos(at))).max() < 15.0


def test_signals_of_two_recordings_are_refused():
    one = recording_of(chest=np.zeros(100)).signal("chest")
    other = recording_of(abdomen=np.zeros(50)).signal("abdomen")
    with pytest.raises(InvalidInputError, match="'chest' and 'abdomen' must come from one recording"):
        effort_sum(one, other)
    with pytest.raises(InvalidInputError, match=r"calibration must be finite \(chest units per abdomen unit\), got nan"):
        effort_sum(one, dataclasses.replace(one, name="b"), calibration=float("nan"))


def test_a_second_channel_of_the_same_name_is_refused():
    recording = recording_of(chest=np.zeros(100))
    with pytest.raises(RecordingError, match="there is a channel 'chest' already"):
        recording.with_signal(recording.signal("chest"))


def saturation(t, cycle_s, duty, lag_s, drop=8.0):
    """Falls evenly while there is no ventilation, rises evenly back in half the ventilatory time, all `lag_s` later."""
    # Ventilation is on about the middle of each cycle: on at (1 - duty)/2, off at (1 + duty)/2 of it.
    phase = ((t - lag_s) / cycle_s - (1.0 - duty) / 2.0) % 1.0
    rise = np.minimum(phase / (0.5 * duty), 1.0)
    fall = np.maximum(phase - duty, 0.0) / (1.0 - duty)
    return 96.0 - drop * np.where(phase < duty, 1.0 - rise, fall)


@pytest.mark.parametrize(("lag_s", "whole_percents"), [(10.0, False), (24.0, False), (24.0, True), (30.0, True)])
def test_lag_of_the_saturation(lag_s, whole_percents):
    t = np.arange(18000) / 10.0
    rng = np.random.default_rng(2)
    effort = cut_off_sine(t, 60.0, 0.6) * np.sin(2 * np.pi * 0.27 * t) + rng.normal(scale=0.05, size=t.size)
    spo2 = saturation(t, 60.0, 0.6, lag_s)
    if whole_percents:
        spo2 = np.round(np.repeat(spo2[::10], 10))  # one whole percent a second
    recording = recording_of(effort=effort, SpO2=spo2)
    breathing = measure_breathing(recording, "effort")
    result = measure_saturation_lag(recording, breathing)
    assert len(result.lags) >= 0.8 * len(breathing.used)
    # The onset of ventilation is known to about 0.5 s here; a value held for a second adds one.
    assert result.lag_s.median == pytest.approx(lag_s, abs=1.0 + whole_percents)
    assert result.drop.median == pytest.approx(8.0, abs=0.5 + 0.5 * whole_percents)


def test_a_steady_saturation_has_no_lag():
    t = np.arange(9000) / 10.0
    effort = cut_off_sine(t, 60.0, 0.6) * np.sin(2 * np.pi * 0.27 * t)
    recording = recording_of(effort=effort, SpO2=96.0 + (np.arange(9000) // 50 % 2))
    breathing = measure_breathing(recording, "effort")
    result = measure_saturation_lag(recording, breathing)
    assert result.lags == () and result.lag_s is None
    assert result.n_without == len(breathing.used)


def test_saturation_as_a_fraction_and_missing_values():
    t = np.arange(18000) / 10.0
    effort = cut_off_sine(t, 60.0, 0.6) * np.sin(2 * np.pi * 0.27 * t)
    spo2 = saturation(t, 60.0, 0.6, 15.0) / 100.0
    spo2[3000:4000] = 0.0  # sensor off
    recording = recording_of(effort=effort, SpO2=spo2)
    result = measure_saturation_lag(recording, measure_breathing(recording, "effort"))
    assert result.lag_s.median == pytest.approx(15.0, abs=1.0)
    assert not [lag for lag in result.lags if 300.0 < lag.turn_s < 400.0]
    assert any("taken as a fraction" in note for note in result.notes)


def test_without_a_saturation_channel_the_answer_names_those_there_are():
    recording = recording_of(effort=np.sin(np.arange(2000) / 6.0))
    with pytest.raises(RecordingError, match="no channel looks like saturation; the file has: 'effort'"):
        measure_saturation_lag(recording, measure_breathing(recording, "effort"))


def test_shape_tells_crescendo_from_abrupt():
    t = np.arange(18000) / 10.0
    carrier = np.sin(2 * np.pi * 0.27 * t)
    noise = np.random.default_rng(0).normal(scale=0.05, size=t.size)
    sine = cut_off_sine(t, 60.0, 0.6)
    gradual = measure_breathing(recording_of(effort=sine * carrier + noise), "effort")
    abrupt = measure_breathing(recording_of(effort=(sine > 0) * carrier + noise), "effort")
    assert gradual.shape == "crescendo-decrescendo" and abrupt.shape == "abrupt"
    assert gradual.peak_position.median == pytest.approx(0.5, abs=0.1)
    assert gradual.cycle_length_variation < 0.05
