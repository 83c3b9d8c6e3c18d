"""Cycles of synthetic breathing whose truth is known by construction (synthetic_breathing.py shares no code with the package).

Tolerances are the stated requirement: at 10 dB, cycle length within 2 %, duty ratio within 0.03.
"""

import numpy as np
import pytest

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings import Thresholds, measure_breathing, read_recording
from recordings.synthetic_breathing import as_recording, cut_off_sine, periodic, regular


@pytest.mark.parametrize("rate_hz", [2.0, 10.0, 32.0])
@pytest.mark.parametrize(
    ("cycle_length_s", "duty_ratio", "breath_hz"),
    [(60.0, 0.5, 0.27), (60.0, 0.6, 0.27), (60.0, 0.75, 0.27), (60.0, 0.85, 0.27), (40.0, 0.65, 0.3), (90.0, 0.7, 0.22), (20.0, 0.6, 0.4)],
)
@pytest.mark.parametrize("abrupt", [False, True], ids=["gradual", "abrupt"])
def test_cycle_length_and_duty_ratio_at_10_db_with_drift(rate_hz, cycle_length_s, duty_ratio, breath_hz, abrupt):
    truth = periodic(
        cycle_length_s=cycle_length_s, duty_ratio=duty_ratio, breath_hz=breath_hz, rate_hz=rate_hz, abrupt=abrupt,
        noise_db=10.0, drift=1.0, offset=50.0,
    )  # fmt: skip
    result = measure_breathing(as_recording(truth.values, rate_hz), "effort")
    expected = 1800.0 / cycle_length_s
    assert expected - 3 <= len(result.used) <= expected
    assert result.cycle_length_s.median == pytest.approx(cycle_length_s, rel=0.02)
    assert result.duty_ratio.median == pytest.approx(duty_ratio, abs=0.03)
    assert result.periodic_s > 0.9 * 1800.0


@pytest.mark.parametrize("seed", range(4))
def test_the_marks_lie_at_the_onset_of_ventilation(seed):
    truth = periodic(cycle_length_s=50.0, duty_ratio=0.6, rate_hz=10.0, seed=seed)
    result = measure_breathing(as_recording(truth.values, 10.0), "effort")
    # Ventilation is positive for 0.6 x 50 s about 25, 75, ... s: onsets at 10, 60, ... and ends at 40, 90, ... s.
    onsets = np.array([cycle.start_s for cycle in result.used])
    ends = np.array([cycle.ventilation_end_s for cycle in result.used])
    # A third of a breath (3.7 s) is as near as noise at 10 dB lets a single onset be placed; the mean has no such excuse.
    assert np.abs((onsets - 10.0 + 25.0) % 50.0 - 25.0).mean() < 1.2
    assert abs(np.mean((onsets - 10.0 + 25.0) % 50.0 - 25.0)) < 0.6
    assert abs(np.mean((ends - 40.0 + 25.0) % 50.0 - 25.0)) < 0.6


@pytest.mark.parametrize("rate_hz", [1.0, 4.0])
def test_a_ventilation_signal_is_measured_as_it_is(rate_hz):
    t = np.arange(round(1800 * rate_hz)) / rate_hz
    values = 12.0 * cut_off_sine(t, 60.0, 0.7)
    result = measure_breathing(as_recording(values, rate_hz, name="ventilation"), "ventilation")
    assert result.kind == "ventilation"
    assert result.cycle_length_s.median == pytest.approx(60.0, rel=0.005)  # no noise: a fraction of one sample
    assert result.duty_ratio.median == pytest.approx(0.7, abs=0.01)


def test_an_unnamed_ventilation_signal_is_known_by_its_look():
    t = np.arange(3600) / 2.0
    result = measure_breathing(as_recording(12.0 * cut_off_sine(t, 60.0, 0.7), 2.0, name="x"), "x")
    assert result.kind == "ventilation"
    assert any("taken as ventilation" in note for note in result.notes)


def test_nothing_is_measured_across_a_gap():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    result = measure_breathing(as_recording(truth.values, 10.0, gap=(610.0, 45.0)), "effort")
    assert result.cycle_length_s.median == pytest.approx(60.0, rel=0.02)
    assert not [cycle for cycle in result.cycles if cycle.start_s < 610.0 and cycle.stop_s > 655.0]
    (gap,) = [stretch for stretch in result.masked if stretch.reason == "gap"]
    assert (gap.start_s, gap.stop_s) == pytest.approx((610.0, 655.0), abs=0.2)  # two samples


@pytest.mark.parametrize("rate_hz", [2.0, 10.0, 32.0])
def test_regular_breathing_yields_no_cycles(rate_hz):
    # Requirement: under 2 % of the minutes.
    recorded = periodic_time = 0.0
    for seed in range(4):
        for spread, noise_db in ((0.1, 20.0), (0.2, 10.0), (0.3, 10.0)):
            _, values = regular(rate_hz=rate_hz, spread=spread, noise_db=noise_db, seed=seed, sighs=5, drift=1.0)
            result = measure_breathing(as_recording(values, rate_hz), "effort")
            recorded += result.recorded_s
            periodic_time += result.periodic_s
    assert recorded > 0.9 * 12 * 1800.0
    assert periodic_time < 0.02 * recorded


def test_a_mixed_night_is_cut_where_the_pattern_starts_and_stops():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0, duration_s=900.0)
    _, steady = regular(rate_hz=10.0, duration_s=900.0, seed=2)
    values = np.concatenate((2.0 * (steady - steady.mean()), truth.values, 2.0 * (steady - steady.mean())))
    result = measure_breathing(as_recording(values, 10.0), "effort")
    assert [stretch.periodic for stretch in result.stretches] == [False, True, False]
    # To within one cycle at either end.
    assert result.stretches[1].start_s == pytest.approx(900.0, abs=60.0)
    assert result.stretches[1].stop_s == pytest.approx(1800.0, abs=60.0)
    assert result.cycle_length_s.median == pytest.approx(60.0, rel=0.02)


def test_waning_without_apnoea_has_cycles_but_no_duty_ratio():
    t = np.arange(18000) / 10.0
    rng = np.random.default_rng(0)
    values = (0.65 + 0.35 * np.sin(2 * np.pi * t / 60.0)) * np.sin(2 * np.pi * 0.27 * t) + rng.normal(scale=0.05, size=t.size)
    result = measure_breathing(as_recording(values, 10.0), "effort")
    assert result.cycle_length_s.median == pytest.approx(60.0, rel=0.02)
    assert {cycle.pause for cycle in result.cycles} == {"hypopnoea"}
    assert result.duty_ratio is None and result.loop_gain is None
    assert result.quality == "poor"
    assert any("loop gain at most 1" in reason for reason in result.quality_reasons)


def test_movement_is_masked_and_its_cycle_excluded():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    values = truth.values.copy()
    values[6200:6230] += 8.0  # a jolt of eight breath sizes at 620 s
    result = measure_breathing(as_recording(values, 10.0), "effort")
    (masked,) = result.masked
    assert masked.reason == "movement" and masked.start_s < 620.0 and masked.stop_s > 623.0
    (spoiled,) = [cycle for cycle in result.cycles if cycle.start_s < 620.0 < cycle.stop_s]
    assert spoiled.excluded and spoiled.reason == "movement"
    assert spoiled.number not in {cycle.number for cycle in result.used}


def test_missing_values_flat_stretches_and_clipping_are_masked_with_their_reason():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    values = truth.values.copy()
    values[3000:3300] = np.nan
    values[6000:7500] = values[6000]
    values[9000:12000] = np.clip(values[9000:12000], -0.1, 0.1)
    lines = "\n".join(f"{i / 10:.1f},{v:.6g}" for i, v in enumerate(np.clip(values, -2.0, 2.0)))
    result = measure_breathing(read_recording(f"time,effort\n{lines}\n".encode()), "effort")
    reasons = {stretch.reason: (stretch.start_s, stretch.stop_s) for stretch in result.masked}
    assert reasons["missing"] == pytest.approx((300.0, 330.0), abs=0.2)
    assert reasons["flat"] == pytest.approx((600.0, 750.0), abs=0.2)
    assert all(cycle.excluded for cycle in result.cycles if cycle.start_s < 700.0 < cycle.stop_s)
    hard = np.clip(truth.values, -0.3, 0.3)
    clipped = measure_breathing(as_recording(hard, 10.0), "effort")
    assert "clipped" in {stretch.reason for stretch in clipped.masked}


def test_excluding_by_hand_recomputes_and_can_be_undone():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    result = measure_breathing(as_recording(truth.values, 10.0), "effort")
    fewer = result.without([1, 2, 5])
    assert fewer.cycle_length_s.n == result.cycle_length_s.n - 3
    kept = [cycle.cycle_length_s for cycle in result.used if cycle.number not in (1, 2, 5)]
    assert fewer.cycle_length_s.median == np.median(kept)
    assert [c.reason for c in fewer.cycles if c.excluded] == ["by hand"] * 3
    assert fewer.without([]).cycle_length_s == result.cycle_length_s
    with pytest.raises(InvalidInputError, match=r"no cycle 99; there are \d+ cycles, numbered from 1"):
        result.without([99])


def test_the_same_input_gives_the_same_output_to_the_last_bit():
    truth = periodic(cycle_length_s=45.0, duty_ratio=0.6, rate_hz=10.0)
    recording = as_recording(truth.values, 10.0)
    assert measure_breathing(recording, "effort").cycles == measure_breathing(recording, "effort").cycles


def test_a_larger_or_shifted_signal_has_the_same_cycles():
    # Law: neither gain nor offset of the amplifier may matter. Tolerance: single precision of samples about the offset.
    truth = periodic(cycle_length_s=45.0, duty_ratio=0.6, rate_hz=10.0)
    plain = measure_breathing(as_recording(truth.values, 10.0), "effort")
    other = measure_breathing(as_recording(-300.0 * truth.values + 2000.0, 10.0), "effort")
    assert [c.start_s for c in other.cycles] == pytest.approx([c.start_s for c in plain.cycles], abs=0.02)
    assert other.duty_ratio.median == pytest.approx(plain.duty_ratio.median, abs=1e-3)


def test_stretching_time_stretches_the_cycles():
    # Law: time has no unit of its own while cycles and breaths stay within the thresholds, which are widened here.
    truth = periodic(cycle_length_s=40.0, duty_ratio=0.6, rate_hz=8.0, breath_hz=0.3)
    wide = Thresholds(shortest_pause_s=2.0, shortest_cycle_s=5.0, longest_cycle_s=300.0)
    plain = measure_breathing(as_recording(truth.values, 8.0), "effort", thresholds=wide)
    slow = measure_breathing(as_recording(truth.values, 4.0), "effort", thresholds=wide)
    # 4 samples a second are not averaged down and hold half the smoothing's detail: one part in a hundred.
    assert slow.cycle_length_s.median == pytest.approx(2.0 * plain.cycle_length_s.median, rel=0.01)


def test_single_breaths_are_found():
    t = np.arange(6000) / 10.0
    result = measure_breathing(as_recording(np.sin(2 * np.pi * 0.25 * t), 10.0), "effort")
    # Oracle: a sine of 0.25 Hz over 600 s has 150 steepest rises, of amplitude 1.
    assert abs(result.breaths.times_s.size - 150) <= 1
    assert np.median(np.diff(result.breaths.times_s)) == pytest.approx(4.0, abs=0.1)
    assert np.median(result.breaths.sizes) == pytest.approx(1.0, rel=0.03)  # the spectrum's step of 1/128 Hz in 0.25


def test_a_window_limits_what_is_measured():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    recording = as_recording(truth.values, 10.0)
    result = measure_breathing(recording, "effort", window=(300.0, 900.0))
    assert all(cycle.start_s >= 300.0 and cycle.stop_s <= 900.0 for cycle in result.cycles)
    assert 7 <= len(result.cycles) <= 10
    assert result.recorded_s == pytest.approx(600.0, abs=0.2)


def test_what_cannot_be_measured_is_refused_in_words():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    recording = as_recording(truth.values, 10.0)
    with pytest.raises(RecordingError, match="no channel 'flow'; the file has: 'effort'"):
        measure_breathing(recording, "flow")
    with pytest.raises(RecordingError, match="holds less than 60 s of unbroken signal between 100 and 130 s"):
        measure_breathing(recording, "effort", window=(100.0, 130.0))
    with pytest.raises(RecordingError, match=r"the window must end after it starts \(s\), got 5 to 5"):
        measure_breathing(recording, "effort", window=(5.0, 5.0))
    with pytest.raises(RecordingError, match="lies outside the recording"):
        measure_breathing(recording, "effort", window=(5000.0, 6000.0))
    with pytest.raises(RecordingError, match="kind must be one of ventilation, airflow, effort, got 'snore'"):
        measure_breathing(recording, "effort", kind="snore")
    slow = as_recording(truth.values[::10], 1.0)
    with pytest.raises(RecordingError, match=r"has 1 samples a second; to see single breaths it takes at least 1.5.*kind='ventilation'"):
        measure_breathing(slow, "effort")
    oximeter = as_recording(90.0 + truth.values, 10.0, name="SpO2")
    with pytest.raises(RecordingError, match="'SpO2' looks like SpO2, not like breathing"):
        measure_breathing(oximeter, "SpO2")
    with pytest.raises(RecordingError, match="no channel looks like breathing; the file has: 'SpO2'"):
        measure_breathing(oximeter)


def test_a_constant_signal_has_no_cycles():
    result = measure_breathing(as_recording(np.full(6000, 3.5), 10.0), "effort")
    assert result.cycles == () and result.quality == "none"
    assert result.masked[0].reason == "flat"
    assert result.quality_reasons == ("No periodic breathing was found.",)


@pytest.mark.parametrize("memory", [0.0, 0.5, 0.8])
def test_regular_ventilation_yields_no_cycles(memory):
    # Breath-by-breath ventilation with the scatter of quiet breathing (20 %) and with memory from breath to breath (autoregressive).
    recorded = periodic_time = 0.0
    for seed in range(4):
        rng = np.random.default_rng(seed)
        level = np.zeros(500)
        for i in range(1, 500):
            level[i] = memory * level[i - 1] + np.sqrt(1.0 - memory**2) * rng.normal()
        ends = np.cumsum(rng.normal(3.7, 0.4, 500))
        t = np.arange(3000) / 2.0
        values = np.maximum(7.0 * (1.0 + 0.2 * level), 0.0)[np.searchsorted(ends, t)]
        result = measure_breathing(as_recording(values, 2.0, name="ventilation"), "ventilation")
        recorded += result.recorded_s
        periodic_time += result.periodic_s
    assert periodic_time < 0.02 * recorded
