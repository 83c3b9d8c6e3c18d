"""A measured recording as a plain document for JSON: the medians, every cycle, what was left out and why.

It names the channel and nothing else of the file: a file's name, its header and its annotations may say who someone is.
"""

from __future__ import annotations

from typing import Any

from lagscape.handover.plain_values import plain
from lagscape.recordings.breathing_result import BreathingCycle, BreathingMeasurement, Spread
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["breathing_document", "cycle_record", "tremor_document"]

_MEDIANS = ("cycle_length_s", "ventilatory_duration_s", "apnoeic_duration_s", "duty_ratio", "loop_gain")


def breathing_document(measurement: BreathingMeasurement, reading_notes: tuple[str, ...] = ()) -> dict[str, Any]:
    """The measurement as dicts, lists, strings and numbers; times in s from the recording's start.

    Parameters
    ----------
    measurement : BreathingMeasurement
    reading_notes : tuple of str
        What had to be repaired to read the file; it stands before the measurement's own notes.

    Returns
    -------
    dict
        A median that does not exist is None, and `reasons` says why.
    """
    medians: dict[str, Any] = {}
    reasons: dict[str, str] = {}
    for name in _MEDIANS:
        spread: Spread | None = getattr(measurement, name)
        medians[name] = plain(spread)
        if spread is None:
            reasons[name] = "No cycle with an apnoea was used." if measurement.used else "No periodic breathing was found."
    return {
        "kind": "breathing",
        "signal": measurement.signal,
        "signal_kind": measurement.kind,
        "unit": measurement.unit,
        "sampling_frequency_hz": float(measurement.sampling_frequency_hz),
        "window_s": [float(edge) for edge in measurement.window],
        "quality": measurement.quality,
        "quality_reasons": list(measurement.quality_reasons),
        "cycles_found": len(measurement.cycles),
        "cycles_used": len(measurement.used),
        **medians,
        "reasons": reasons,
        "breath_frequency_hz": plain(measurement.breath_frequency_hz),
        "recorded_s": float(measurement.recorded_s),
        "periodic_s": float(measurement.periodic_s),
        "masked_s": float(measurement.masked_s),
        "cycles": [cycle_record(cycle) for cycle in measurement.cycles],
        "stretches": plain(measurement.stretches),
        "masked": plain(measurement.masked),
        "thresholds": plain(measurement.thresholds),
        "notes": [*reading_notes, *measurement.notes],
    }


def cycle_record(cycle: BreathingCycle) -> dict[str, Any]:
    """One cycle with its lengths, as a row of a table; times in s."""
    record = {
        "number": cycle.number,
        "start_s": cycle.start_s,
        "ventilation_end_s": cycle.ventilation_end_s,
        "stop_s": cycle.stop_s,
        "cycle_length_s": cycle.cycle_length_s,
        "ventilatory_duration_s": cycle.ventilatory_duration_s,
        "apnoeic_duration_s": cycle.apnoeic_duration_s,
        "pause": cycle.pause,
        "duty_ratio": cycle.duty_ratio,
        "loop_gain": cycle.loop_gain,
        "peak": cycle.peak,
        "peak_s": cycle.peak_s,
        "excluded": cycle.excluded,
        "reason": cycle.reason,
    }
    return plain(record)


def tremor_document(measurement: TremorMeasurement, reading_notes: tuple[str, ...] = ()) -> dict[str, Any]:
    """The tremor's peak and its spectrum as dicts, lists, strings and numbers.

    `rms` is in the signal's `unit`, `power` in its square per Hz. What does not exist is None, and `reasons` says why.
    """
    figures = {name: plain(getattr(measurement, name)) for name in ("peak_frequency_hz", "peak_error_hz", "width_hz", "rms", "displacement_mm")}
    reasons: dict[str, str] = {}
    for name, value in figures.items():
        if value is None and measurement.peak_frequency_hz is None:
            reasons[name] = "No peak stands out of the spectrum."
        elif value is None:
            reasons[name] = "The unit is not one of acceleration." if name == "displacement_mm" else "The recording does not show it."
    return {
        "kind": "tremor",
        "signals": list(measurement.signals),
        "unit": measurement.unit,
        "window_s": [float(edge) for edge in measurement.window],
        **figures,
        "reasons": reasons,
        "stands_out": plain(measurement.stands_out),
        "segments": measurement.n_segments,
        "frequency_hz": plain(measurement.frequency_hz),
        "power": plain(measurement.power),
        "notes": [*reading_notes, *measurement.notes],
    }
