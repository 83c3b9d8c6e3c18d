"""Recordings in: EDF and text tables, breathing cycles, tremor spectra, and a note for everything that was repaired.

scipy is imported only when something is measured, so that importing this package stays cheap.
"""

from lagscape.recordings.breath_result import BreathQuality, BreathTable, StretchQuality
from lagscape.recordings.breathing import measure_breathing
from lagscape.recordings.breathing_result import BreathingCycle, BreathingMeasurement, Spread
from lagscape.recordings.cycles import Thresholds
from lagscape.recordings.derived import effort_sum, flow_from_nasal_pressure, with_derived_channels
from lagscape.recordings.loop_gain import loop_gain_from_duty_ratio
from lagscape.recordings.overview import Overview, overview
from lagscape.recordings.reading import read_recording
from lagscape.recordings.recording import Annotation, Note, ReadCancelled, Recording, Segment, Signal
from lagscape.recordings.saturation_lag import SaturationLag, measure_saturation_lag
from lagscape.recordings.summary import breathing_summary, tremor_summary
from lagscape.recordings.tremor import TremorComparison, TremorMeasurement, compare_tremor, measure_tremor

__all__ = [
    "Annotation",
    "BreathQuality",
    "BreathTable",
    "BreathingCycle",
    "BreathingMeasurement",
    "Note",
    "Overview",
    "ReadCancelled",
    "Recording",
    "SaturationLag",
    "Segment",
    "Signal",
    "Spread",
    "StretchQuality",
    "Thresholds",
    "TremorComparison",
    "TremorMeasurement",
    "breathing_summary",
    "compare_tremor",
    "effort_sum",
    "flow_from_nasal_pressure",
    "loop_gain_from_duty_ratio",
    "measure_breathing",
    "measure_saturation_lag",
    "measure_tremor",
    "overview",
    "read_recording",
    "tremor_summary",
    "with_derived_channels",
]
