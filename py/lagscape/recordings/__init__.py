"""Recordings in: EDF and text tables, breathing cycles, tremor spectra, and a note for everything that was repaired.

scipy is imported only when something is measured, so that importing this package stays cheap.
"""

from lagscape.recordings.breathing import measure_breathing
from lagscape.recordings.breathing_result import BreathingCycle, BreathingMeasurement, Spread
from lagscape.recordings.cycles import Thresholds
from lagscape.recordings.loop_gain import loop_gain_from_duty_ratio
from lagscape.recordings.overview import Overview, overview
from lagscape.recordings.reading import read_recording
from lagscape.recordings.recording import Note, ReadCancelled, Recording, Segment, Signal

__all__ = [
    "BreathingCycle",
    "BreathingMeasurement",
    "Note",
    "Overview",
    "ReadCancelled",
    "Recording",
    "Segment",
    "Signal",
    "Spread",
    "Thresholds",
    "loop_gain_from_duty_ratio",
    "measure_breathing",
    "overview",
    "read_recording",
]
