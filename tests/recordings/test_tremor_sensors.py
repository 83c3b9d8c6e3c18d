"""Sensors, movement, quality and the spectrum's interval. Oracles: sines, scipy.signal.welch, scipy.stats.chi2, a driven oscillator."""

import numpy as np
import pytest
from scipy import signal as scipy_signal
from scipy import stats

from lagscape.errors import InvalidInputError, RecordingError
from lagscape.recordings import measure_tremor, read_recording
from lagscape.recordings.tremor_movement import movement_in
from lagscape.recordings.tremor_peak import degrees_of_freedom, power_interval
from lagscape.recordings.tremor_sensor import rectified, sensors_in

RATE = 100.0


def table(columns, names, rate=RATE):
    rows = "\n".join(",".join(f"{value:.7g}" for value in row) for row in np.atleast_2d(columns).T)
    return read_recording((",".join(names) + "\n" + rows).encode(), sampling_frequency_hz=rate)


def times(seconds, rate=RATE):
    return np.arange(round(seconds * rate)) / rate


def noisy_sine(frequency, seconds=60.0, size=1.0, seed=0, rate=RATE):
    time = times(seconds, rate)
    return size * np.sin(2 * np.pi * frequency * time) + 0.05 * np.random.default_rng(seed).standard_normal(time.size)


def oscillator(frequency, ratio, seconds, seed, rate=200.0):
    """Velocity of x'' + 2 z w x' + w^2 x = white noise, exact in its samples (matrix exponential); its spectrum peaks at w."""
    from scipy.linalg import expm, solve_continuous_lyapunov

    w = 2 * np.pi * frequency
    a = np.array([[0.0, 1.0], [-w * w, -2 * ratio * w]])
    step = expm(a / rate)
    steady = solve_continuous_lyapunov(a, -np.diag([0.0, 1.0]))
    root = np.linalg.cholesky(steady - step @ steady @ step.T)
    rng = np.random.default_rng(seed)
    state = np.linalg.cholesky(steady) @ rng.standard_normal(2)
    kicks = rng.standard_normal((round(seconds * rate), 2)) @ root.T
    out = np.empty(len(kicks))
    for i, kick in enumerate(kicks):
        state = step @ state + kick
        out[i] = state[1]
    return out / np.sqrt(steady[1, 1])


def test_the_drawn_spectrum_is_welch_s():
    values = noisy_sine(6.0) + 0.3 * np.random.default_rng(1).standard_normal(6000)
    found = measure_tremor(table(values, ["Acc X (m/s2)"]))
    # Oracle: the library's own average of the same segments, at every second frequency of its grid of 1/32 Hz; single-precision samples.
    f, power = scipy_signal.welch(values, RATE, nperseg=800, nfft=3200, detrend="linear")
    shown = f <= 30.0
    assert found.frequency_hz == pytest.approx(f[shown])
    assert found.power == pytest.approx(power[shown], rel=1e-4)
    # Parseval: the spectrum's area in the band is the band's variance; the sine's is 1/2. One per cent of noise lies beyond the band.
    assert np.sum(found.power) * f[1] == pytest.approx(0.5 + 0.3**2 * 0.6, rel=0.05)


@pytest.mark.parametrize("count", [4, 14, 60])
def test_the_interval_of_the_spectrum_is_chi_square(count):
    # Oracle: scipy.stats. Tolerance: rounding of the incomplete gamma function's inverse.
    freedom = degrees_of_freedom(count)
    low, high = power_interval(np.array([2.0]), count)
    assert low[0] == pytest.approx(2.0 * freedom / stats.chi2.ppf(0.975, freedom), rel=1e-9)
    assert high[0] == pytest.approx(2.0 * freedom / stats.chi2.ppf(0.025, freedom), rel=1e-9)


def test_overlapped_segments_have_the_freedom_that_repetition_shows():
    # Oracle: repetition. The mean spectrum of white noise varies by 2/freedom of its square; 400 runs know that to about 4 %, and a
    # dozen frequencies far enough apart to be independent to about 1 %; 10 % allows for the tails.
    rng, count = np.random.default_rng(2), 14
    drawn = np.array([scipy_signal.welch(rng.standard_normal(7 * 128 + 64), nperseg=128)[1][8:56:4] for _ in range(400)])
    relative = drawn.var(axis=0) / drawn.mean(axis=0) ** 2
    assert 2.0 / relative.mean() == pytest.approx(degrees_of_freedom(count), rel=0.1)


@pytest.mark.parametrize(("frequency", "ratio"), [(4.0, 0.05), (8.5, 0.08)])
def test_a_driven_oscillator_s_peak_lies_within_its_stated_error(frequency, ratio):
    # Oracle: the oscillator itself. Of 12 runs at least 10 lie in the 95 % interval: fewer would be a chance of 2 % at 95 %.
    runs = [measure_tremor(table(oscillator(frequency, ratio, 120.0, seed), ["Acc X (m/s2)"], rate=200.0)) for seed in range(12)]
    away = np.array([found.peak_frequency_hz - frequency for found in runs])
    stated = np.array([found.peak_error_hz for found in runs])
    assert np.sum(np.abs(away) < 1.96 * stated) >= 10
    # And it is not far too wide: twice the least that is possible, sqrt(W / (2 pi T)) with W = 2 z f, at the median.
    assert np.median(stated) < 2.0 * np.sqrt(2.0 * ratio * frequency / (2.0 * np.pi * 120.0))


def test_axes_of_one_sensor_are_found_by_their_letter():
    columns = np.zeros((8, 1000)) + np.arange(1000)
    names = ["Acc X (g)", "Acc Y (g)", "Acc Z (g)", "gyro_x (deg/s)", "gyro_y (deg/s)", "gyro_z (deg/s)", "EMG ext (mV)", "Flow (L/s)"]
    found = sensors_in(table(columns, names))
    assert [(sensor.kind, len(sensor.signals)) for sensor in found] == [("acceleration", 3), ("rotation", 3)]
    assert found[0].name == "Acc X + Acc Y + Acc Z"


def test_two_wrists_are_two_sensors_and_a_word_with_an_x_is_no_axis():
    names = ["left x (g)", "left y (g)", "left z (g)", "right x (g)", "right y (g)", "right z (g)", "flexor (mV)", "Max (mV)"]
    found = sensors_in(table(np.zeros((8, 1000)) + np.arange(1000), names))
    assert [sensor.signals[0] for sensor in found] == ["left x", "right x"]


def test_bare_axes_are_an_accelerometer_s_only_together():
    columns = np.zeros((3, 1000)) + np.arange(1000)
    (sensor,) = sensors_in(table(columns, ["x", "y", "z"]))
    assert sensor.kind == "acceleration" and sensors_in(table(columns[:1], ["x"])) == ()
    (slow,) = sensors_in(table(columns, ["x", "y", "z"], rate=4.0))
    assert slow.kind == "unknown"


def test_a_gyroscope_gives_the_angle_of_the_swing():
    # Closed form: 90 deg/s at 6 Hz is a swing of 90/(2 pi 6) = 2.387 degrees.
    found = measure_tremor(table(noisy_sine(6.0, size=90.0), ["Gyro Y (deg/s)"]))
    assert found.kind == "rotation" and found.displacement_mm is None
    assert found.angle_deg == pytest.approx(90.0 / (2 * np.pi * 6.0), rel=0.03)


def test_raw_emg_is_rectified_and_its_bursts_counted():
    # Bursts of noise at 5 Hz: the raw signal has no power at 5 Hz, its size has.
    time = times(60.0, 1000.0)
    raw = np.random.default_rng(3).standard_normal(time.size) * np.maximum(0.0, np.sin(2 * np.pi * 5.0 * time))
    found = measure_tremor(table(raw, ["EMG extensor (mV)"], rate=1000.0))
    assert found.kind == "EMG" and found.peak_frequency_hz == pytest.approx(5.0, abs=0.02)
    assert found.displacement_mm is None and found.angle_deg is None
    envelope = np.abs(raw)
    assert rectified(envelope) is envelope


def test_a_knock_and_a_new_posture_are_masked_and_told():
    values = noisy_sine(6.0, seconds=120.0)
    values[4000:4020] += 30.0  # a knock at 40 s
    values[8000:] += 9.0  # gravity turns at 80 s
    found = measure_tremor(table(values, ["Acc X (m/s2)"]))
    for at in (40.1, 80.0):
        assert any(stretch.start_s <= at <= stretch.stop_s for stretch in found.masked), at
    assert found.masked_s < 10.0 and any("Movement masked" in reason for reason in found.quality_reasons)
    assert found.peak_frequency_hz == pytest.approx(6.0, abs=0.01) and found.quality == "sharp"
    # Without masking the knock's flat spectrum would hide a twentieth of the peak's share and more.
    assert found.peak_share > 0.95


def test_a_tremor_that_sets_in_or_waxes_is_no_movement():
    time = times(120.0)
    tremor = np.sin(2 * np.pi * 5.0 * time)
    rest = 0.02 * np.random.default_rng(4).standard_normal(time.size)
    for size in (np.where(time > 70.3, 1.0, 0.0), 0.6 + 0.5 * np.sin(2 * np.pi * time / 20.0)):
        assert not movement_in((size * tremor + rest)[None, :], RATE).any()


def test_movement_that_leaves_too_little_is_refused_in_words():
    values = noisy_sine(6.0, seconds=60.0)
    values[::700] += 60.0
    with pytest.raises(RecordingError, match=r"movement was masked and leaves less than 20 s .* Choose a quieter window"):
        measure_tremor(table(values, ["Acc X (m/s2)"]))


def test_a_peak_on_the_slope_of_slow_movement_is_found():
    # A wandering limb has far more power at 2 Hz than the tremor at 6 Hz has: the highest point of the band is not the peak.
    wander = np.cumsum(np.random.default_rng(5).standard_normal(12000))
    values = scipy_signal.detrend(wander) * 0.35 + noisy_sine(6.0, seconds=120.0, size=0.5)
    found = measure_tremor(table(values, ["Acc X (m/s2)"]))
    low = found.power[(found.frequency_hz > 2.0) & (found.frequency_hz < 2.2)].max()
    assert low > found.power[np.abs(found.frequency_hz - 6.0).argmin()] * 0.2
    assert found.peak_frequency_hz == pytest.approx(6.0, abs=0.03)


def test_harmonics_and_other_peaks_are_named():
    values = noisy_sine(4.0) + 0.3 * noisy_sine(8.0, seed=1) + 0.1 * noisy_sine(12.0, seed=2) + 0.5 * noisy_sine(6.9, seed=3)
    found = measure_tremor(table(values, ["Acc X (m/s2)"]))
    assert found.peak_frequency_hz == pytest.approx(4.0, abs=0.01)
    assert found.harmonics_hz == pytest.approx((8.0, 12.0), abs=0.03)
    assert found.other_peaks_hz == pytest.approx((6.9,), abs=0.05)
    # Sines of 1, 0.3, 0.1 and 0.5: the first has 1/1.35 of the power.
    assert found.peak_share == pytest.approx(1.0 / 1.35, rel=0.03)


def test_width_gives_the_word():
    words = [measure_tremor(table(oscillator(8.0, ratio, 300.0, 1), ["Acc (m/s2)"], rate=200.0)).quality for ratio in (0.02, 0.09, 0.25)]
    # Closed form: half-power width 2 z f = 0.32, 1.44 and 4 Hz.
    assert words == ["sharp", "moderate", "broad"]


def test_short_slow_and_folded_are_told():
    short = measure_tremor(table(noisy_sine(6.0, seconds=25.0), ["Acc X (m/s2)"]))
    assert any("Too short a window" in reason for reason in short.quality_reasons)
    slow = measure_tremor(table(noisy_sine(6.0, rate=40.0), ["Acc X (m/s2)"], rate=40.0))
    assert any("faster than 20 Hz shows up folded" in reason for reason in slow.quality_reasons)
    folding = noisy_sine(6.0) + 0.5 * scipy_signal.sosfilt(
        scipy_signal.butter(4, 44.0, "high", fs=RATE, output="sos"), np.random.default_rng(6).standard_normal(6000)
    )
    assert any("power rises towards half" in reason for reason in measure_tremor(table(folding, ["Acc X (m/s2)"])).quality_reasons)
    clean = measure_tremor(table(noisy_sine(6.0, seconds=120.0), ["Acc X (m/s2)"]))
    assert not any("risk" in reason or "Too short" in reason for reason in clean.quality_reasons)


def test_the_calibration_is_judged_by_gravity():
    def axes(gravity):
        wave = noisy_sine(6.0, seconds=120.0, size=0.05)
        return table(np.array([wave, 0.5 * wave, gravity + 0.2 * wave]), ["Acc X (g)", "Acc Y (g)", "Acc Z (g)"])

    assert any("these show 2.00 g" in reason for reason in measure_tremor(axes(2.0)).quality_reasons)
    for gravity in (1.0, 0.0):
        assert not any("calibration" in reason for reason in measure_tremor(axes(gravity)).quality_reasons)
    bare = measure_tremor(table(noisy_sine(6.0), ["Acc X"]))
    assert bare.displacement_mm is None and any("Not calibrated" in reason for reason in bare.quality_reasons)


def test_a_kind_that_is_none_is_refused():
    with pytest.raises(InvalidInputError, match="kind must be one of acceleration, rotation, EMG; got 'airflow'"):
        measure_tremor(table(noisy_sine(6.0), ["Acc X"]), kind="airflow")


def test_a_frequency_between_two_peaks_is_told_and_one_broad_peak_is_not():
    # Oracle: what the signal was made of. Of 20 recordings a minute long of one resonance none may be taken for two; of those whose
    # frequency changes half-way by less than the peaks' distance that would be listed apart, most are told.
    def told(columns):
        return any(reason.startswith("Two peaks") for reason in measure_tremor(table([columns], ["Acc X (m/s2)"])).quality_reasons)

    def steady(frequency, ratio, seed):
        x = oscillator(frequency, ratio, 60.0, seed, rate=RATE)
        return x / x.std()

    assert not any(told(steady(7.0, 0.1, seed)) for seed in range(20))
    changed = [told(np.concatenate([steady(7.0, 0.02, seed), steady(8.0, 0.02, seed + 50)])) for seed in range(20)]
    assert sum(changed) > 10
