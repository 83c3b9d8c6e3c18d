"""Min-max overview of a trace. Oracle: numpy's own min and max on each bin."""

import numpy as np
import pytest

from lagscape.errors import InvalidInputError
from lagscape.recordings import overview, read_recording


def make(n, rate=10.0):
    values = np.random.default_rng(1).normal(size=n).round(3)
    text = "flow\n" + "".join(f"{v:.3f}\n" for v in values)
    return read_recording(text.encode(), sampling_frequency_hz=rate).signal("flow"), values.astype(np.float32).astype(float)


def test_each_bin_holds_its_lowest_and_highest_sample():
    signal, values = make(1000)
    result = overview(signal, 50)
    rows = values.reshape(50, 20)
    assert np.array_equal(result.lowest, rows.min(axis=1))
    assert np.array_equal(result.highest, rows.max(axis=1))
    assert result.edges_s[[0, -1]].tolist() == [0.0, 100.0]


def test_more_bins_than_samples_leaves_empty_bins_nan():
    signal, values = make(10)
    result = overview(signal, 40)
    assert np.isnan(result.lowest).sum() == 30
    assert np.array_equal(result.lowest[~np.isnan(result.lowest)], values)


def test_a_window_and_a_gap():
    rows = "".join(f"{(i if i < 100 else i + 300) / 10:.1f},{i}\n" for i in range(200))
    signal = read_recording(f"time,flow\n{rows}".encode()).signal("flow")
    result = overview(signal, 4, window=(5.0, 45.0))
    assert result.lowest.tolist() == pytest.approx([50.0, np.nan, np.nan, 100.0], nan_ok=True)
    assert result.highest.tolist() == pytest.approx([99.0, np.nan, np.nan, 149.0], nan_ok=True)


def test_bad_arguments_are_refused():
    signal, _ = make(10)
    with pytest.raises(InvalidInputError, match="n_bins must be at least 1, got 0"):
        overview(signal, 0)
    with pytest.raises(InvalidInputError, match=r"window must end after it starts \(s\), got 3 to 3"):
        overview(signal, 5, window=(3, 3))
