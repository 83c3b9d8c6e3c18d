"""A tremor handed over: a section and a picture of the report, its figures and its spectrum as tables, and all of it as a document.

It names channels and nothing else of a file; see `measurement`.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from lagscape.handover.measurement import tremor_document
from lagscape.handover.plain_values import plain, unit_suffix
from lagscape.handover.report import Picture, Section
from lagscape.handover.svg import INK, INSIDE, OUTSIDE, QUIET, Axis, Plot, Style, document
from lagscape.handover.table import table_csv
from lagscape.quantities import figure, percent
from lagscape.questions.tremor_study import TremorStudy
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["KIND_WORDS", "size_words", "spectrum_csv", "spectrum_svg", "tremor_csv", "tremor_picture", "tremor_sections", "tremor_study_document"]

KIND_WORDS = {"acceleration": "accelerometer", "rotation": "gyroscope", "EMG": "EMG", "unknown": "unknown"}
"""What the screen and the report call a kind of channel."""
_METHODS = (
    "Averaged spectrum of 8 s windows that overlap by half (Welch 1967, IEEE Trans. Audio Electroacoust. 15, 70-73), axes by the sum of their "
    "spectra; error of the peak by leaving out tenths. A load m at l adds m l^2 to the inertia."
)
_COLUMNS = (
    "peak_frequency_hz", "peak_error_hz", "width_hz", "rms", "displacement_mm", "angle_deg", "peak_share", "stands_out", "used_s", "masked_s",
    "n_segments",
)  # fmt: skip


def tremor_study_document(study: TremorStudy, notes: tuple[str, ...] = ()) -> dict[str, Any]:
    """The study as dicts, lists, strings and numbers; what does not exist is None.

    Parameters
    ----------
    study : TremorStudy
    notes : tuple of str
        What had to be repaired to read the file.
    """
    answer = study.answer
    return {
        "kind": "tremor study",
        "unloaded": tremor_document(study.unloaded, notes),
        "loaded": None if study.loaded is None else tremor_document(study.loaded),
        "load": None if study.load is None else {**plain(study.load), "added_inertia_kg_m2": study.load.added_inertia},
        "answer": None if answer is None else {
            "verdict": str(answer.verdict), "sentence": answer.sentence,
            "shift_hz": answer.shift_hz, "shift_interval_hz": [answer.low_hz, answer.high_hz],
            "predicted": plain(answer.prediction), "no_prediction": answer.no_prediction, "doubts": list(answer.doubts),
        },
        "refusal": study.refusal,
    }  # fmt: skip


def tremor_csv(study: TremorStudy) -> str:
    """One row a condition, all digits: window, peak with its error, width, size, share, quality; then the load, the shift, the verdict."""
    answer = study.answer
    columns = [
        "condition", "signals", "signal_kind", "unit", "window_start_s", "window_stop_s", "sampling_frequency_hz", *_COLUMNS, "quality",
        "load_mass_kg", "load_arm_m", "shift_hz", "shift_low_hz", "shift_high_hz", "predicted_shift_hz", "verdict",
    ]  # fmt: skip
    rows = []
    for name, one in study.conditions:
        load = study.load if name == "loaded" else None
        told = answer if name == "loaded" else None
        rows.append([
            name, " + ".join(one.signals), one.kind, one.unit, *one.window, one.sampling_frequency_hz, *(getattr(one, item) for item in _COLUMNS),
            one.quality, None if load is None else load.mass_kg, None if load is None else load.arm_m,
            *((None, None, None) if told is None else (told.shift_hz, told.low_hz, told.high_hz)),
            None if told is None or told.prediction is None else told.prediction.shift_hz, None if told is None else str(told.verdict),
        ])  # fmt: skip
    return table_csv(columns, rows)


def spectrum_csv(study: TremorStudy) -> str:
    """The spectrum with its 95 % interval, one row a frequency, a column a condition; the loaded one at the unloaded one's frequencies."""
    columns = ["frequency_hz"]
    values: list[Any] = [study.unloaded.frequency_hz]
    for name, one in study.conditions:
        unit = unit_suffix(f"{one.unit}2/Hz" if one.unit else "per Hz")
        for part in ("power", "power_low", "power_high"):
            columns.append(f"{name}_{part}{unit}")
            values.append(np.interp(study.unloaded.frequency_hz, one.frequency_hz, getattr(one, part), right=math.nan))
    return table_csv(columns, zip(*values, strict=True))


def size_words(one: TremorMeasurement) -> tuple[tuple[str, str], ...]:
    """Label and words of the tremor's size: in the signal's unit, and as a movement where the unit allows it."""
    if one.rms is None:
        return ()
    rows = [("Size (rms)", f"{figure(one.rms)} {one.unit or '(no unit)'}")]
    if one.displacement_mm is not None:
        rows.append(("Displacement, amplitude", f"{figure(one.displacement_mm)} mm"))
    if one.angle_deg is not None:
        rows.append(("Swing, amplitude", f"{figure(one.angle_deg)}°"))
    return tuple(rows)


def tremor_sections(study: TremorStudy) -> tuple[Section, ...]:
    """The report's sections: each condition's figures, then what the load says."""
    found = []
    for name, one in study.conditions:
        title = "Recording: tremor" if study.loaded is None else f"Recording: tremor, {name}"
        rows = [
            ("Channels", f"{', '.join(one.signals)} ({KIND_WORDS.get(one.kind, one.kind)}, {figure(one.sampling_frequency_hz)} Hz)"),
            ("Window", f"{figure(one.window[0])} to {figure(one.window[1])} s; {figure(one.used_s)} s used"),
        ]
        if one.peak_frequency_hz is not None:
            rows += [
                ("Peak frequency", f"{figure(one.peak_frequency_hz)} Hz (standard error {figure(one.peak_error_hz, 2)} Hz)"),
                ("Width at half power", f"{figure(one.width_hz)} Hz"),
                *size_words(one),
                ("Share of the power in the peak", percent(one.peak_share or 0.0)),
            ]
        if one.harmonics_hz:
            rows.append(("Harmonics", ", ".join(figure(at) for at in one.harmonics_hz) + " Hz"))
        rows.append(("Quality", one.quality))
        found.append(Section(title, tuple(rows), " ".join((*one.quality_reasons, *one.notes))))
    answer = study.answer
    if answer is not None:
        rows = [("Change of the peak", f"{figure(answer.shift_hz)} Hz (95 %: {figure(answer.low_hz)} to {figure(answer.high_hz)})")]
        if answer.load is not None:
            load = answer.load
            rows.insert(0, ("Load", f"{figure(load.mass_kg)} kg at {figure(load.arm_m)} m: {figure(load.added_inertia)} kg m2 added"))
        if answer.prediction is not None:
            told = answer.prediction
            rows.append(("Predicted by the case's loop", f"{figure(told.shift_hz)} Hz ({figure(told.low_hz)} to {figure(told.high_hz)})"))
        found.append(Section("The load's answer", tuple(rows), " ".join((answer.sentence, answer.no_prediction, *answer.doubts)).strip()))
    elif study.refusal:
        found.append(Section("The load's answer", (("No answer", study.refusal),)))
    last = found[-1]
    found[-1] = Section(last.title, last.rows, f"{last.note} {_METHODS}".strip())
    return tuple(found)


def tremor_picture(study: TremorStudy) -> Picture:
    """The spectrum as the report shows it."""
    loaded = "" if study.loaded is None else " Loaded: dashed."
    return Picture(spectrum_svg(study), f"Spectrum of the tremor.{loaded} The bracket is the width at half power.")


def spectrum_svg(study: TremorStudy) -> str:
    """The spectra as an SVG document: unloaded firm, loaded dashed, each with its peak marked and its half-power width bracketed."""
    first = study.unloaded
    highest = max(float(one.power[one.frequency_hz >= 1.0].max()) for _, one in study.conditions) or 1.0
    plot = Plot(
        Axis("Frequency", "Hz", 0.0, float(first.frequency_hz[-1])),
        Axis("Power", f"({first.unit})²/Hz" if first.unit else "per Hz", 0.0, 1.2 * highest),
        68.0, 44.0, 674.0, 300.0, "spectrum",
    )  # fmt: skip
    styles = {"unloaded": Style(INSIDE, 1.8), "loaded": Style(OUTSIDE, 1.8, "7 3")}
    for name, one in study.conditions:
        plot.curve(one.frequency_hz, one.power, styles[name])
        if one.peak_frequency_hz is None or one.half_power_hz is None:
            continue
        top = float(np.interp(one.peak_frequency_hz, one.frequency_hz, one.power))
        plot.curve(np.array(one.half_power_hz), np.full(2, 0.5 * top), Style(INK, 1.4))
        plot.words(one.peak_frequency_hz, top, f"{name} {one.peak_frequency_hz:.2f} Hz", shift=(0.0, -8.0))
        for order, at in enumerate(one.harmonics_hz, start=2):
            plot.words(at, float(np.interp(at, one.frequency_hz, one.power)), f"{order}×", shift=(0.0, -6.0), size=10)
    words = "Firm: unloaded; dashed: loaded; level line: width at half power."
    legend = f'<text x="68" y="26" font-size="12" fill="{QUIET}">{words}</text>'
    return document(760.0, 396.0, "Spectrum of the tremor", "Power against frequency, with the peaks marked.", [legend, plot.text()])
