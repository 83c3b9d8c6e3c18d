"""Guesses of what a channel is, on names that recorders commonly write (common practice, no source)."""

import pytest

from lagscape.recordings.kinds import KINDS, guess_kind


@pytest.mark.parametrize(
    ("name", "unit", "kind"),
    [
        ("Minute ventilation", "L/min", "ventilation"), ("VE", "", "ventilation"), ("ventilation_L_per_min", "", "ventilation"),
        ("Flow", "L/s", "airflow"), ("Nasal Pressure", "cmH2O", "airflow"), ("Thermistor", "", "airflow"), ("Flow", "L/min", "airflow"),
        ("chest_volume", "", "effort"), ("Thorax", "uV", "effort"), ("Abdomen", "", "effort"), ("RIP Abd", "", "effort"),
        ("SpO2", "%", "SpO2"), ("SaO2", "%", "SpO2"), ("EtCO2", "mmHg", "CO2"), ("Capnography", "", "CO2"),
        ("Acc X", "g", "acceleration"), ("channel 1", "m/s2", "acceleration"), ("channel 1", "L/min", "ventilation"),
        ("Gyro Y", "deg/s", "rotation"), ("channel 2", "°/s", "rotation"), ("gyr_z", "", "rotation"),
        ("x", "", "unknown"), ("axis y", "", "acceleration"),
        ("EMG ext", "mV", "EMG"), ("Chin1-Chin2", "uV", "EMG"), ("L tibialis ant", "uV", "EMG"), ("Airflow", "", "airflow"),
        ("EEG C3-A2", "uV", "unknown"), ("ECG", "mV", "unknown"), ("", "", "unknown"),
    ],
)  # fmt: skip
def test_guess(name, unit, kind):
    assert kind in KINDS
    assert guess_kind(name, unit) == kind
