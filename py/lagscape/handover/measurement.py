"""A measured recording as a plain document for JSON: the medians, every cycle, what was left out and why.

It names the channel and nothing else of the file: a file's name, its header and its annotations may say who someone is.
"""

from __future__ import annotations

from typing import Any

from lagscape.handover.plain_values import plain, unit_suffix
from lagscape.recordings.breath_result import BreathTable
from lagscape.recordings.breathing_result import BreathingCycle, BreathingMeasurement, Spread
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["breath_records", "breathing_document", "breaths_document", "cycle_record", "tremor_document"]

_NO_MOVEMENT = {"displacement_mm": "The unit is not one of acceleration.", "angle_deg": "The unit is not one of angular velocity."}
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
        "breaths": breaths_document(measurement.breath_table),
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


def breaths_document(table: BreathTable) -> dict[str, Any]:
    """The single breaths' medians, what they are worth and why; the breaths themselves are `breath_records`."""
    quality = table.quality
    figures = {
        "rate_per_min": table.rate_per_min,
        "inspiration_s": table.inspiration_s,
        "tidal_volume": table.tidal_volume,
        "ventilation": table.ventilation,
    }
    missing = quality.reasons[0] if not len(table) else "No volume may be read from this channel."
    return {
        "found": len(table),
        **{name: plain(spread) for name, spread in figures.items()},
        "volume_unit": table.volume_unit,
        "ventilation_unit": table.ventilation_unit,
        "median_breath": plain(table.median_breath),
        "own_unit": table.own_unit,
        "reasons": {name: missing for name, spread in figures.items() if spread is None},
        "quality": quality.word,
        "quality_score": float(quality.score),
        "quality_reasons": list(quality.reasons),
        "quality_signs": {
            name: plain(getattr(quality, name)) for name in ("agreement", "signal_share", "plausible", "unclipped", "samples_per_breath")
        },
        "quality_stretches": plain(quality.stretches),
        "notes": list(table.notes),
    }


def breath_records(table: BreathTable) -> list[dict[str, Any]]:
    """Every breath as a row, units in the names; None where a figure may not be claimed."""
    volume = "tidal_volume" + unit_suffix(table.volume_unit)
    ventilation = "ventilation" + unit_suffix(table.ventilation_unit)
    columns = {
        "start_s": table.start_s, "inspiration_end_s": table.inspiration_end_s, "end_s": table.end_s, "rate_per_min": table.rates_per_min,
        volume: table.tidal_volumes, ventilation: table.ventilations,
    }  # fmt: skip
    scores = table.quality.scores_at(0.5 * (table.start_s + table.end_s))
    rows = zip(*(plain(values) for values in columns.values()), table.followed_by, plain(scores), strict=True)
    return [dict(zip(("number", *columns, "followed_by", "quality"), (i, *row), strict=True)) for i, row in enumerate(rows, start=1)]


def tremor_document(measurement: TremorMeasurement, reading_notes: tuple[str, ...] = ()) -> dict[str, Any]:
    """The tremor's peak and its spectrum as dicts, lists, strings and numbers.

    `rms` is in the signal's `unit`, `power` in its square per Hz with a 95 % interval. What does not exist is None, and `reasons` says why.
    """
    names = ("peak_frequency_hz", "peak_error_hz", "width_hz", "half_power_hz", "rms", "displacement_mm", "angle_deg", "peak_share")
    figures = {name: plain(getattr(measurement, name)) for name in names}
    reasons: dict[str, str] = {}
    for name, value in figures.items():
        if value is None and measurement.peak_frequency_hz is None:
            reasons[name] = "No peak stands out of the spectrum."
        elif value is None:
            reasons[name] = _NO_MOVEMENT.get(name, "The recording does not show it.")
    return {
        "kind": "tremor",
        "signals": list(measurement.signals),
        "signal_kind": measurement.kind,
        "unit": measurement.unit,
        "sampling_frequency_hz": float(measurement.sampling_frequency_hz),
        "window_s": [float(edge) for edge in measurement.window],
        "band_hz": [float(edge) for edge in measurement.band_hz],
        "quality": measurement.quality,
        "quality_reasons": list(measurement.quality_reasons),
        **figures,
        "reasons": reasons,
        "stands_out": plain(measurement.stands_out),
        "harmonics_hz": plain(measurement.harmonics_hz),
        "other_peaks_hz": plain(measurement.other_peaks_hz),
        "segments": measurement.n_segments,
        "used_s": float(measurement.used_s),
        "masked_s": float(measurement.masked_s),
        "masked": plain(measurement.masked),
        "frequency_hz": plain(measurement.frequency_hz),
        "power": plain(measurement.power),
        "power_low": plain(measurement.power_low),
        "power_high": plain(measurement.power_high),
        "notes": [*reading_notes, *measurement.notes],
    }
