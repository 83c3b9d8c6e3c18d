"""A tremor in the report, as tables and as a document. Oracle: the study's own figures, read back by csv and json."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pytest

from lagscape import Case
from lagscape.handover.report import Report, report_html
from lagscape.handover.tremor import spectrum_csv, spectrum_svg, tremor_csv, tremor_picture, tremor_sections, tremor_study_document
from lagscape.questions.standing import analyse
from lagscape.questions.tremor_load import Load
from lagscape.questions.tremor_study import TremorStudy, tremor_study
from lagscape.recordings import measure_tremor, read_recording

CASE = Case.from_starting_case("ankle-calm")


def shaking(frequency: float | None, unit: str = "m/s2"):
    """A minute of a shaking axis in noise; noise alone for None."""
    time = np.arange(0.0, 60.0, 0.01)
    values = 0.2 * np.random.default_rng(4).standard_normal(time.size)
    if frequency is not None:
        values += np.sin(2.0 * np.pi * frequency * time) + 0.3 * np.sin(4.0 * np.pi * frequency * time)
    text = f"Acc X ({unit})\n" + "\n".join(f"{value:.6f}" for value in values)
    return measure_tremor(read_recording(text.encode(), name="smith.csv", sampling_frequency_hz=100.0))


@pytest.fixture(scope="module")
def study() -> TremorStudy:
    return tremor_study(shaking(6.0), shaking(4.2), Load(2.0, 0.15), CASE)


def test_the_document_is_plain_json_with_every_part(study):
    found = tremor_study_document(study, ("One line was repaired.",))
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert found["unloaded"]["peak_frequency_hz"] == study.unloaded.peak_frequency_hz
    assert found["unloaded"]["notes"][0] == "One line was repaired." and found["loaded"]["quality"] == "sharp"
    # By hand: 2 kg at 0.15 m.
    assert found["load"] == {"mass_kg": 2.0, "arm_m": 0.15, "added_inertia_kg_m2": pytest.approx(0.045)}
    assert found["answer"]["verdict"] == "moves" and found["answer"]["shift_hz"] == study.answer.shift_hz
    assert found["answer"]["predicted"]["shift_hz"] == study.answer.prediction.shift_hz
    assert "smith" not in json.dumps(found)


def test_a_row_a_condition_with_every_digit(study):
    rows = list(csv.DictReader(io.StringIO(tremor_csv(study))))
    assert [row["condition"] for row in rows] == ["unloaded", "loaded"]
    assert float(rows[1]["peak_frequency_hz"]) == study.loaded.peak_frequency_hz
    assert float(rows[0]["rms"]) == study.unloaded.rms and rows[0]["angle_deg"] == ""
    assert rows[0]["verdict"] == "" and rows[1]["verdict"] == "moves" and float(rows[1]["load_mass_kg"]) == 2.0
    assert float(rows[1]["shift_hz"]) == study.answer.shift_hz


def test_the_spectrum_comes_back_from_its_table(study):
    rows = list(csv.DictReader(io.StringIO(spectrum_csv(study))))
    assert len(rows) == study.unloaded.frequency_hz.size
    names = list(rows[0])
    assert names[0] == "frequency_hz" and names[1].startswith("unloaded_power") and names[4].startswith("loaded_power")
    assert [float(row[names[1]]) for row in rows] == study.unloaded.power.tolist()
    assert all(float(row[names[2]]) < float(row[names[1]]) < float(row[names[3]]) for row in rows)


def test_the_report_shows_figures_answer_and_picture(study):
    page = report_html(Report(CASE, analyse(CASE), sections=tremor_sections(study), pictures=(tremor_picture(study),)))
    for words in ("Recording: tremor, unloaded", "Recording: tremor, loaded", "Width at half power", "The load&#x27;s answer", "0.0450 kg m2 added",
                  "points to the mechanical-reflex loop", "Welch 1967", "Spectrum of the tremor. Loaded: dashed."):  # fmt: skip
        assert words in page, words
    assert f"{study.unloaded.peak_frequency_hz:.2f} Hz" in page and "://" not in page


def test_the_picture_marks_peaks_and_harmonics(study):
    picture = spectrum_svg(study)
    assert "unloaded 6.00 Hz" in picture and "loaded 4.20 Hz" in picture and "2×" in picture and "stroke-dasharray" in picture


def test_one_window_needs_no_load_and_no_peak_is_said():
    alone = tremor_study(shaking(None))
    (section,) = tremor_sections(alone)
    assert section.title == "Recording: tremor" and ("Quality", "no peak") in section.rows
    assert tremor_study_document(alone)["answer"] is None and "<svg" in spectrum_svg(alone)
    pair = tremor_study(shaking(6.0), shaking(None), Load(1.0, 0.1), CASE)
    assert pair.answer is None and pair.refusal.startswith("The loaded recording has no peak")
    assert tremor_sections(pair)[-1].rows == (("No answer", pair.refusal),)


def test_a_unit_that_is_no_acceleration_gives_its_reason():
    found = tremor_study_document(tremor_study(shaking(6.0, "V")))["unloaded"]
    assert found["displacement_mm"] is None and found["reasons"]["displacement_mm"] == "The unit is not one of acceleration."
    assert found["reasons"]["angle_deg"] == "The unit is not one of angular velocity."
