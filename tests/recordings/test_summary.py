"""Summaries are what a file or the command line shows: plain JSON, the measurement's own numbers, reasons for what is missing."""

import json

import numpy as np

from lagscape.recordings import breathing_summary, measure_breathing, measure_tremor, tremor_summary
from recordings.synthetic_breathing import as_recording, periodic, regular


def strict(value):
    """JSON without nan or infinity, there and back."""
    return json.loads(json.dumps(value, allow_nan=False))


def test_a_measurement_survives_json_to_the_last_digit():
    truth = periodic(cycle_length_s=60.0, duty_ratio=0.6, rate_hz=10.0)
    measured = measure_breathing(as_recording(truth.values, 10.0), "effort").without([2])
    summary = strict(breathing_summary(measured))
    assert summary["loop_gain"]["median"] == measured.loop_gain.median
    assert summary["cycle_length_s"]["n"] == summary["n_cycles_used"] == len(measured.cycles) - 1
    assert summary["cycles"][1]["excluded"] and summary["cycles"][1]["reason"] == "by hand"
    assert summary["missing_because"] is None
    breaths, table = summary["breaths"], measured.breath_table
    assert breaths["n"] == len(table) and breaths["rate_per_min"]["median"] == table.rate_per_min.median
    assert breaths["quality"] == table.quality.word and breaths["volume_unit"] == "median breath"


def test_what_is_missing_has_its_reason():
    _, steady = regular(rate_hz=10.0)
    summary = strict(breathing_summary(measure_breathing(as_recording(steady, 10.0), "effort")))
    assert summary["loop_gain"] is None and summary["missing_because"] == "no periodic breathing was found"
    t = np.arange(18000) / 10.0
    shallow = (0.65 + 0.35 * np.sin(2 * np.pi * t / 60.0)) * np.sin(2 * np.pi * 0.27 * t)
    summary = strict(breathing_summary(measure_breathing(as_recording(shallow, 10.0), "effort")))
    assert summary["loop_gain"] is None and summary["missing_because"] == "no cycle has an apnoea; the loop gain is at most 1"
    noise = as_recording(np.random.default_rng(0).normal(size=6000), 100.0, name="acc")
    summary = strict(tremor_summary(measure_tremor(noise)))
    assert summary["peak_frequency_hz"] is None and summary["missing_because"] == "no peak stands out of the spectrum"
