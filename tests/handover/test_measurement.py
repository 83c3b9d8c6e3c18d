"""A measurement as a document. Oracles: the measurement's own figures; the json module without nan."""

import json

import numpy as np

from lagscape.handover.measurement import breathing_document, tremor_document
from lagscape.recordings.breathing import measure_breathing
from lagscape.recordings.reading import read_recording
from lagscape.recordings.tremor import measure_tremor


def measured(waning: bool):
    times = np.arange(0.0, 900.0, 0.1)
    envelope = np.clip(np.cos(2.0 * np.pi * times / 60.0) + 0.5, 0.0, None) if waning else np.ones_like(times)
    table = "effort\n" + "\n".join(f"{value:.5f}" for value in envelope * np.sin(2.0 * np.pi * 0.25 * times))
    recording = read_recording(table.encode(), name="Smith_John.csv", sampling_frequency_hz=10.0)
    return measure_breathing(recording, "effort")


def test_the_document_says_what_the_measurement_says():
    measurement = measured(True)
    document = breathing_document(measurement, ("One line was repaired.",))
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert document["cycle_length_s"]["median"] == measurement.cycle_length_s.median
    assert document["cycles_used"] == len(measurement.used) and document["cycles_found"] == len(measurement.cycles) == len(document["cycles"])
    assert document["notes"][0] == "One line was repaired." and document["quality"] == measurement.quality
    first, cycle = document["cycles"][0], measurement.cycles[0]
    assert (first["number"], first["start_s"], first["cycle_length_s"]) == (cycle.number, cycle.start_s, cycle.cycle_length_s)
    assert document["window_s"] == list(measurement.window)


def test_a_median_that_does_not_exist_is_null_with_its_reason():
    document = breathing_document(measured(False))
    assert document["cycle_length_s"] is None and document["loop_gain"] is None and document["cycles"] == []
    assert document["reasons"]["cycle_length_s"] == document["reasons"]["loop_gain"] == "No periodic breathing was found."


def test_the_document_does_not_hold_the_files_name():
    assert "smith" not in json.dumps(breathing_document(measured(True))).lower()


def test_a_tremor_without_a_peak_says_so_for_each_figure():
    noise = np.random.default_rng(3).standard_normal(6000)
    table = "x\n" + "\n".join(f"{value:.5f}" for value in noise)
    measurement = measure_tremor(read_recording(table.encode(), sampling_frequency_hz=100.0), "x")
    document = tremor_document(measurement, ("One line was repaired.",))
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert measurement.peak_frequency_hz is None and document["peak_frequency_hz"] is None
    assert document["reasons"]["peak_frequency_hz"] == "No peak stands out of the spectrum."
    assert document["notes"][0] == "One line was repaired." and document["power"] == measurement.power.tolist()
