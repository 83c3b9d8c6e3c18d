"""What a channel may say of volume. Oracle: the units' definitions, written out here; the words in which channels are named."""

import pytest

from lagscape.recordings.breath_volume import volume_reading


@pytest.mark.parametrize(
    ("unit", "litres"),
    [("L/s", 1.0), ("l/s", 1.0), ("mL/s", 1e-3), ("ml / s", 1e-3), ("L/min", 1 / 60), ("lpm", 1 / 60), ("ml/min", 1e-3 / 60), ("l per min", 1 / 60),
     ("L s-1", 1.0), ("mL min-1", 1e-3 / 60)],
)  # fmt: skip
def test_flow_in_litres_a_time_is_calibrated(unit, litres):
    reading = volume_reading("Flow", unit, "airflow")
    assert reading.method == "flow" and reading.own_unit == "L" and reading.notes == ()
    assert reading.litres == pytest.approx(litres, rel=1e-15)


@pytest.mark.parametrize(("unit", "litres"), [("L", 1.0), ("l", 1.0), ("mL", 1e-3), ("cc", 1e-3), ("litre", 1.0)])
def test_volume_in_litres_is_calibrated(unit, litres):
    reading = volume_reading("Spirometer volume", unit, "effort")
    assert (reading.method, reading.litres, reading.notes) == ("volume", litres, ())


@pytest.mark.parametrize(
    ("unit", "kind"),
    [("uV", "effort"), ("", "effort"), ("V", "airflow"), ("", "airflow"), ("L", "airflow"), ("L/s", "effort"), ("L/h", "airflow")],
)
def test_any_other_unit_is_no_calibration_and_says_so(unit, kind):
    reading = volume_reading("Channel", unit, kind)
    assert reading.litres is None
    assert "in shares of the median breath" in reading.notes[-1]


def test_a_thermistor_times_breaths_and_claims_no_volume():
    for name in ("Thermistor", "Flow (therm.)", "Oronasal Thermocouple"):
        reading = volume_reading(name, "L/s", "airflow")
        assert reading.method == "timing" and reading.litres is None and "no volume" in reading.notes[0]


def test_nasal_pressure_as_it_is_warns_and_its_root_does_not():
    raw, root = volume_reading("Nasal Pressure", "cmH2O", "airflow"), volume_reading("Nasal Pressure (square root)", "", "airflow")
    assert "square root" in raw.notes[0] and len(raw.notes) == 2
    assert len(root.notes) == 1 and raw.method == root.method == "flow"
