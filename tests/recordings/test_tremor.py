"""Tremor spectra. Oracles: sines and the exact spectrum of a second-order resonance driven by white noise."""

import numpy as np
import pytest

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings import compare_tremor, measure_tremor, read_recording

RATE = 100.0


def as_recording(columns, rate=RATE, names=("Acc X", "Acc Y", "Acc Z"), unit="m/s2"):
    columns = np.atleast_2d(columns)
    head = ",".join(f"{name} ({unit})" for name in names[: len(columns)])
    text = head + "\n" + "\n".join(",".join(f"{v:.7g}" for v in row) for row in columns.T)
    return read_recording(text.encode(), sampling_frequency_hz=rate)


def sine(frequency, amplitude, seconds=60.0, noise=0.05, seed=0):
    t = np.arange(round(seconds * RATE)) / RATE
    return amplitude * np.sin(2 * np.pi * frequency * t) + np.random.default_rng(seed).normal(scale=noise, size=t.size)


def resonance(frequency, width, seconds, seed):
    """x[n] = 2 r cos(w) x[n-1] - r^2 x[n-2] + noise: half-power width -ln(r) rate / pi for a narrow peak (closed form)."""
    r = np.exp(-np.pi * width / RATE)
    noise = np.random.default_rng(seed).normal(size=round(seconds * RATE))
    from scipy.signal import lfilter

    return lfilter([1.0], [1.0, -2 * r * np.cos(2 * np.pi * frequency / RATE), r * r], noise)


@pytest.mark.parametrize("frequency", [3.3, 5.61, 8.0, 11.47])
def test_a_sine_gives_its_frequency_amplitude_and_displacement(frequency):
    result = measure_tremor(as_recording(sine(frequency, 2.0)))
    # Frequency: interpolation in a grid of 1/32 Hz. Amplitude: noise of 0.05 in 2 and the tails beyond the band taken.
    assert result.peak_frequency_hz == pytest.approx(frequency, abs=0.01)
    assert result.rms == pytest.approx(2.0 / np.sqrt(2), rel=0.02)
    assert result.displacement_mm == pytest.approx(1000 * 2.0 / (2 * np.pi * frequency) ** 2, rel=0.03)
    # A line is narrower than the window can show.
    assert result.width_hz < 0.06


def test_unit_g_and_the_sum_of_axes():
    one = sine(6.0, 0.1, noise=0.0)
    rotated = as_recording(np.array([0.6 * one, 0.8 * one, 0.0 * one + 1.0]), unit="g")
    result = measure_tremor(rotated)
    assert result.signals == ("Acc X", "Acc Y", "Acc Z")
    # Law: the sum over the axes does not depend on how the sensor is turned.
    assert result.rms == pytest.approx(0.1 / np.sqrt(2), rel=0.01)
    assert result.displacement_mm == pytest.approx(1000 * 0.1 * 9.80665 / (2 * np.pi * 6.0) ** 2, rel=0.01)


@pytest.mark.parametrize(("frequency", "width"), [(5.0, 0.5), (8.0, 1.0), (10.0, 0.8)])
def test_half_power_width_of_a_resonance(frequency, width):
    widths = [measure_tremor(as_recording(resonance(frequency, width, 600.0, seed))).width_hz for seed in range(4)]
    # A spectrum of about 75 independent segments wavers by 12 % a bin, the width of one run by about twice that, a mean of four by it.
    assert np.mean(widths) == pytest.approx(width, rel=0.2)


def test_the_error_of_the_peak_covers_the_truth():
    # Oracle: repetition. The standard error must match the scatter of the peak over independent recordings within a factor of 2.
    results = [measure_tremor(as_recording(resonance(8.0, 1.0, 120.0, seed))) for seed in range(24)]
    scatter = np.std([r.peak_frequency_hz for r in results])
    stated = np.median([r.peak_error_hz for r in results])
    assert 0.5 * scatter < stated < 2.0 * scatter


def test_white_noise_has_no_peak():
    for seed in range(6):
        result = measure_tremor(as_recording(np.random.default_rng(seed).normal(size=6000)))
        assert result.peak_frequency_hz is None and result.rms is None
        assert result.notes == ("No peak stands out of the spectrum.",)


def test_a_load_that_moves_the_peak_points_to_the_mechanical_reflex_loop():
    # Doubling the inertia takes a resonance at 8 Hz to 8/sqrt(2) = 5.66 Hz.
    free = measure_tremor(as_recording(resonance(8.0, 0.8, 120.0, 1)))
    loaded = measure_tremor(as_recording(resonance(8.0 / np.sqrt(2.0), 0.8, 120.0, 2)))
    result = compare_tremor(free, loaded)
    assert result.moves is True
    assert result.low_hz < 8.0 / np.sqrt(2.0) - 8.0 < result.high_hz
    assert "moves with the load, which points to the mechanical-reflex loop" in result.sentence


def test_a_peak_that_stays_points_elsewhere():
    result = compare_tremor(measure_tremor(as_recording(sine(5.0, 1.0))), measure_tremor(as_recording(sine(4.9, 1.0, seed=3))))
    assert result.moves is False
    assert "points to a source elsewhere; this loop does not explain it" in result.sentence


def test_an_uncertain_shift_is_called_so():
    wide = [measure_tremor(as_recording(resonance(f, 2.5, 25.0, 7))) for f in (9.0, 8.0)]
    result = compare_tremor(*wide)
    assert result.low_hz < -1.0 < result.high_hz
    assert result.moves is None and "record longer" in result.sentence


def test_a_peak_over_a_smaller_one_at_half_its_frequency_is_told():
    result = measure_tremor(as_recording(sine(10.0, 1.0) + sine(5.0, 0.4, seed=1)))
    assert any("may be its harmonic" in note for note in result.notes)


def test_missing_samples_are_cut_out():
    values = sine(6.0, 1.0, seconds=120.0)
    text = "Acc X\n" + "\n".join("" if 5000 <= i < 5300 else f"{v:.6f}" for i, v in enumerate(values))
    text = "n,Acc X\n" + "\n".join(f"{i}," + ("" if 5000 <= i < 5300 else f"{v:.6f}") for i, v in enumerate(values))
    result = measure_tremor(read_recording(text.encode(), sampling_frequency_hz=RATE), "Acc X")
    assert result.peak_frequency_hz == pytest.approx(6.0, abs=0.01)


def test_what_cannot_be_measured_is_refused_in_words():
    recording = as_recording(sine(6.0, 1.0))
    with pytest.raises(RecordingError, match="no channel 'wrist'; the file has: 'Acc X'"):
        measure_tremor(recording, "wrist")
    with pytest.raises(RecordingError, match="holds less than 20 s of unbroken signal"):
        measure_tremor(recording, window=(0.0, 15.0))
    with pytest.raises(InvalidInputError, match=r"band_hz must be \(low, high\) with 0 < low < high \(Hz\), got \(5, 3\)"):
        measure_tremor(recording, band_hz=(5, 3))
    with pytest.raises(RecordingError, match="has 4 samples a second; to see a tremor it takes at least 10"):
        measure_tremor(as_recording(sine(6.0, 1.0), rate=4.0))
    effort = read_recording(b"effort\n" + b"1\n2\n" * 2000, sampling_frequency_hz=100)
    with pytest.raises(RecordingError, match="no channel looks like acceleration; the file has: 'effort'"):
        measure_tremor(effort)
    quiet = measure_tremor(as_recording(np.random.default_rng(0).normal(size=6000)))
    with pytest.raises(RecordingError, match="the loaded recording has no peak that stands out"):
        compare_tremor(measure_tremor(recording), quiet)
