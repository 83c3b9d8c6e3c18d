"""A measurement as a document. Oracles: the measurement's own figures; the json module without nan."""

import json

import numpy as np

from lagscape.handover.measurement import breath_records, breathing_document, tremor_document
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


def test_the_breaths_stand_with_medians_unit_quality_and_reasons():
    measurement = measured(True)
    document, table = breathing_document(measurement)["breaths"], measurement.breath_table
    assert document["found"] == len(table) > 100
    assert document["rate_per_min"]["median"] == table.rate_per_min.median and document["volume_unit"] == "median breath"
    # Oracle: the construction, 0.25 Hz; an envelope that falls shortens a breath by 2 %.
    assert abs(document["rate_per_min"]["median"] - 15.0) < 0.3
    assert document["quality"] == table.quality.word and document["quality_score"] == table.quality.score
    assert len(document["quality_stretches"]) == 15 and document["reasons"] == {}
    rows = breath_records(table)
    assert [row["number"] for row in rows] == list(range(1, len(table) + 1))
    assert rows[3]["tidal_volume_median_breath"] * rows[3]["rate_per_min"] == rows[3]["ventilation_median_breaths_min"]


def test_what_a_thermistor_may_not_claim_is_null_with_its_reason():
    times = np.arange(0.0, 300.0, 0.1)
    table = "thermistor\n" + "\n".join(f"{value:.5f}" for value in np.sin(2.0 * np.pi * 0.25 * times))
    measurement = measure_breathing(read_recording(table.encode(), sampling_frequency_hz=10.0), "thermistor")
    document = breathing_document(measurement)["breaths"]
    assert document["tidal_volume"] is None and document["ventilation"] is None and document["rate_per_min"] is not None
    assert document["reasons"]["tidal_volume"] == "No volume may be read from this channel."
    assert all(row["tidal_volume"] is None and row["inspiration_end_s"] is None for row in breath_records(measurement.breath_table))
    assert json.loads(json.dumps(document, allow_nan=False)) == document


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
