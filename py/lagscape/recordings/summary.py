"""A measurement as plain numbers and words, with the unit in every key, for files and the command line."""

from dataclasses import asdict
from typing import Any

from lagscape.recordings.breathing_result import BreathingMeasurement, Spread
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["breathing_summary", "tremor_summary"]


def breathing_summary(measured: BreathingMeasurement) -> dict[str, Any]:
    """JSON-ready: medians with quartiles, every cycle, what was masked. Missing values are None with a reason beside them."""
    apnoeas = [cycle for cycle in measured.used if cycle.pause == "apnoea"]
    missing = (
        "no periodic breathing was found" if not measured.used
        else "no cycle has an apnoea; the loop gain is at most 1" if not apnoeas else None
    )  # fmt: skip
    return {
        "signal": measured.signal,
        "unit": measured.unit,
        "kind": measured.kind,
        "window_s": list(measured.window),
        "sampling_frequency_hz": measured.sampling_frequency_hz,
        "breath_frequency_hz": measured.breath_frequency_hz,
        "n_cycles_used": len(measured.used),
        "cycle_length_s": _spread(measured.cycle_length_s),
        "ventilatory_duration_s": _spread(measured.ventilatory_duration_s),
        "apnoeic_duration_s": _spread(measured.apnoeic_duration_s),
        "duty_ratio": _spread(measured.duty_ratio),
        "loop_gain": _spread(measured.loop_gain),
        "missing_because": missing,
        "shape": measured.shape,
        "quality": measured.quality,
        "quality_reasons": list(measured.quality_reasons),
        "breaths": _breaths(measured),
        "recorded_s": measured.recorded_s,
        "periodic_s": measured.periodic_s,
        "masked": [asdict(stretch) for stretch in measured.masked],
        "stretches": [asdict(stretch) for stretch in measured.stretches],
        "cycles": [
            {
                "number": cycle.number,
                "start_s": cycle.start_s,
                "cycle_length_s": cycle.cycle_length_s,
                "ventilatory_duration_s": cycle.ventilatory_duration_s,
                "apnoeic_duration_s": cycle.apnoeic_duration_s,
                "duty_ratio": cycle.duty_ratio,
                "loop_gain": cycle.loop_gain,
                "pause": cycle.pause,
                "excluded": cycle.excluded,
                "reason": cycle.reason,
            }
            for cycle in measured.cycles
        ],
        "thresholds": asdict(measured.thresholds),
        "notes": list(measured.notes),
    }


def _breaths(measured: BreathingMeasurement) -> dict[str, Any]:
    table = measured.breath_table
    return {
        "n": len(table),
        "rate_per_min": _spread(table.rate_per_min),
        "tidal_volume": _spread(table.tidal_volume),
        "volume_unit": table.volume_unit,
        "ventilation": _spread(table.ventilation),
        "ventilation_unit": table.ventilation_unit,
        "quality": table.quality.word,
        "quality_score": table.quality.score,
        "quality_reasons": list(table.quality.reasons),
        "notes": list(table.notes),
    }


def tremor_summary(measured: TremorMeasurement) -> dict[str, Any]:
    """JSON-ready: the peak, its error, its width and its size."""
    return {
        "signals": list(measured.signals),
        "unit": measured.unit,
        "window_s": list(measured.window),
        "peak_frequency_hz": measured.peak_frequency_hz,
        "peak_standard_error_hz": measured.peak_error_hz,
        "half_power_width_hz": measured.width_hz,
        "rms": measured.rms,
        "displacement_mm": measured.displacement_mm,
        "angle_deg": measured.angle_deg,
        "peak_share": measured.peak_share,
        "quality": measured.quality,
        "quality_reasons": list(measured.quality_reasons),
        "missing_because": None if measured.peak_frequency_hz is not None else "no peak stands out of the spectrum",
        "n_spectra": measured.n_segments,
        "notes": list(measured.notes),
    }


def _spread(spread: Spread | None) -> dict[str, float] | None:
    return None if spread is None else asdict(spread)
