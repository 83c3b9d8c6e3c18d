"""The tremor view's words: what is measured, the figures of each condition, the load's answer, and what laying would change."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from lagscape.app.channel_words import channel_options, rate_html, read_as_html
from lagscape.app.time_axis import clock
from lagscape.case.case import Case
from lagscape.handover.tremor import size_words
from lagscape.loops.register import LOOPS
from lagscape.quantities import figure, percent
from lagscape.questions.lay import Laying
from lagscape.questions.tremor_study import TremorStudy
from lagscape.recordings.tremor import TremorMeasurement

if TYPE_CHECKING:
    from lagscape.app.tremor_view import TremorView

__all__ = ["tremor_head", "tremor_side"]

_TITLES = {"window": "This window", "unloaded": "Unloaded", "loaded": "Loaded"}
_AXES = "Axes are put together by the sum of their spectra, which does not depend on how the sensor sits."


def tremor_head(view: TremorView) -> str:
    """HTML over the figures: the file, the channel, what it is read as, and the window."""
    recording, sensor, state = view.view.recording, view.state.sensor, view.state
    refusal = f'<p class="refusal" role="alert">{escape(view.view.refusal)}</p>' if view.view.refusal else ""
    if recording is None or sensor is None:
        return f'<div class="rec-head">{refusal}</div>'
    start, stop = view.shown_window()
    notes = "".join(f"<li>{escape(str(note))}</li>" for note in recording.notes[:12])
    count = len(recording.notes)
    repaired = f"<details><summary>{count} note{'s' if count != 1 else ''} on the file</summary><ul>{notes}</ul></details>" if notes else ""
    axes = f'<p class="quiet">{_AXES}</p>' if len(sensor.signals) > 1 else ""
    decibels = " checked" if state.decibels else ""
    channels, rate = channel_options(recording, sensor.name), rate_html(view.view.waiting is not None, view.view.refusal)
    return (
        f'<div class="rec-head">{refusal}{rate}<p><b>{escape(recording.name)}</b>, {figure(recording.duration_s)} s. It stays in this tab; names '
        "and dates in a file are neither shown nor kept.</p>"
        f'<div class="tools"><label>Channel <select data-act="channel" aria-label="Channel">{channels}</select></label>'
        f"{read_as_html(state.kind)}</div>"
        f'<div class="tools"><span>Window (drag it on the strip)</span>{_edge("start", "from", start)}{_edge("stop", "to", stop)}'
        '<button data-act="measure-whole">The whole</button>'
        f'<label class="switch"><input type="checkbox" data-act="decibels"{decibels}> Spectrum in dB</label></div>{axes}{repaired}</div>'
    )


def _edge(key: str, word: str, seconds: float) -> str:
    return (
        f'<label>{word} <input class="box short" type="text" inputmode="decimal" autocomplete="off" data-act="edge" data-key="{key}"'
        f' value="{seconds:.1f}" aria-label="Window {word}, s"> s</label>'
    )


def tremor_side(view: TremorView, study: TremorStudy | None) -> str:
    """HTML beside the figures."""
    shown = view.conditions()
    if not shown:
        return ""
    return (
        f'<div class="rec-side">{_figures(shown)}{_key(shown)}{_quality(shown)}{_conditions(view)}{_load(view)}{_answer(view, study)}'
        f"{_laying(view)}</div>"
    )


def _figures(shown: tuple[tuple[str, TremorMeasurement], ...]) -> str:
    rows: dict[str, list[str]] = {}

    def row(label: str, column: int, text: str) -> None:
        rows.setdefault(label, ["<td>–</td>"] * len(shown))[column] = f"<td>{escape(text)}</td>"

    for column, (_, one) in enumerate(shown):
        row("Peak frequency", column, "none" if one.peak_frequency_hz is None else f"{figure(one.peak_frequency_hz)} Hz")
        if one.peak_frequency_hz is not None:
            row("Its standard error", column, f"{figure(one.peak_error_hz, 2)} Hz")
            row("Width at half power", column, f"{figure(one.width_hz)} Hz")
            row("Power in the peak", column, percent(one.peak_share or 0.0))
            for label, words in size_words(one):
                row(label, column, words)
        if one.harmonics_hz:
            row("Harmonics", column, ", ".join(figure(at) for at in one.harmonics_hz) + " Hz")
        row("Shape of the peak", column, one.quality)
        row("Measured from", column, f"{clock(one.window[0])} to {clock(one.window[1])}")
    heads = "".join(f"<td>{_TITLES[role]}</td>" for role, _ in shown)
    body = "".join(f'<tr><th scope="row">{label}</th>{"".join(cells)}</tr>' for label, cells in rows.items())
    return f'<h3>The tremor</h3><table class="figures"><tr><th></th>{heads}</tr>{body}</table>'


def _key(shown: tuple[tuple[str, TremorMeasurement], ...]) -> str:
    """Which line is which, and what the marks are."""
    lines = "".join(f'<span><i class="line {role}"></i> {_TITLES[role].lower()}</span>' for role, _ in shown)
    return f'<p class="key">{lines}<span>triangle: peak; bar: width at half power; 2×, 3×: harmonics; shaded: 95 % interval</span></p>'


def _quality(shown: tuple[tuple[str, TremorMeasurement], ...]) -> str:
    parts = []
    for role, one in shown:
        title = "Quality" if len(shown) == 1 else f"Quality, {_TITLES[role].lower()}"
        told = tuple(dict.fromkeys((*one.quality_reasons, *(note for note in one.notes if "peak" in note and one.peak_frequency_hz is not None))))
        items = "".join(f"<li>{escape(text)}</li>" for text in told)
        parts.append(f"<h3>{title}: {escape(one.quality.capitalize())}</h3><ul>{items}</ul>")
    if len(parts) == 1:
        return parts[0]
    return f"<details><summary>Quality of each</summary>{''.join(parts)}</details>{_warnings(shown)}"


def _warnings(shown: tuple[tuple[str, TremorMeasurement], ...]) -> str:
    """What speaks against one of several, in view though the rest is folded away."""
    words = ("Too short", "Aliasing", "Movement", "calibra")
    told = [(role, reason) for role, one in shown for reason in one.quality_reasons if any(word in reason for word in words)]
    items = "".join(f"<li>{_TITLES[role]}: {escape(reason)}</li>" for role, reason in told)
    return f"<ul>{items}</ul>" if told else ""


def _conditions(view: TremorView) -> str:
    state = view.state
    if state.current is None:
        return ""
    held = "".join(
        f"<li>{_TITLES[role]}: {clock(item.measured.window[0])} to {clock(item.measured.window[1])} of {escape(item.file)}</li>"
        for role, item in (("unloaded", state.unloaded), ("loaded", state.loaded))
        if item is not None
    )
    release = '<button data-act="release">Let both go</button>' if held else ""
    listed = f"<ul>{held}</ul>" if held else ""
    return (
        '<h3>Unloaded and loaded</h3><p class="quiet">Take one window without and one with a weight on the limb, from this file or the next one '
        f'that you open.</p>{listed}<div class="tools">'
        '<button data-act="hold" data-key="unloaded">Take this window as unloaded</button>'
        f'<button data-act="hold" data-key="loaded">Take this window as loaded</button>{release}</div>'
    )


def _load(view: TremorView) -> str:
    state = view.state
    units = "".join(f"<option{' selected' if unit == state.mass_unit else ''}>{unit}</option>" for unit in ("g", "kg"))
    added = f"<p>It adds m·l² = {figure(state.load.added_inertia)} kg m² to the limb's inertia.</p>" if state.load is not None else ""
    refusal = f'<p class="refusal" role="alert">{escape(state.refusal)}</p>' if state.refusal else ""
    box = '<input class="box short" type="text" inputmode="decimal" autocomplete="off"'
    return (
        f'<div class="tools"><label>Load {box} data-act="mass" value="{escape(state.mass)}" aria-label="Mass of the load, {state.mass_unit}"></label>'
        f'<select data-act="mass-unit" aria-label="Unit of the mass">{units}</select>'
        f'<label>at {box} data-act="arm" value="{escape(state.arm)}" aria-label="Lever arm of the load, cm"> cm from the joint</label></div>'
        f"{added}{refusal}"
    )


def _answer(view: TremorView, study: TremorStudy | None) -> str:
    if study is None or study.loaded is None:
        return ""
    answer = study.answer
    if answer is None:
        return f'<h3>What the load says</h3><p class="refusal">{escape(study.refusal)}</p>'
    rows = _shift("Measured", answer.shift_hz, answer.low_hz, answer.high_hz)
    if answer.prediction is not None:
        told = answer.prediction
        rows += _shift("Predicted by the loop", told.shift_hz, told.low_hz, told.high_hz)
    doubts = "".join(f"<li>{escape(doubt)}</li>" for doubt in answer.doubts)
    unsure = f"<h3>What makes it unsure</h3><ul>{doubts}</ul>" if doubts else ""
    compare = ""
    if view.reflex_case() is None:
        compare = f'<p class="quiet">Compare with a reflex case; the case itself stays:</p>{_starts("compare-with")}'
    elif view.bench.case.kind != "reflex" and view.state.start is not None:
        compare = f'<p class="quiet">Compared with {escape(_title(view.state.start))}; the case itself is untouched.</p>'
    missing = f'<p class="quiet">{escape(answer.no_prediction)}</p>' if answer.no_prediction else ""
    return (
        f'<h3>What the load says: {escape(str(answer.verdict))}</h3><p><b>{escape(answer.sentence)}</b></p>'
        f'<table class="figures"><tr><th>Change of the peak</th><td></td><td>95 %</td></tr>{rows}</table>{missing}{compare}{unsure}'
    )


def _shift(label: str, *values: float) -> str:
    shift, low, high = (f"{value:+.2f}".replace("-", "−") for value in values)
    return f'<tr><th scope="row">{label}</th><td>{shift} Hz</td><td>{low} to {high}</td></tr>'


def _laying(view: TremorView) -> str:
    state, bench = view.state, view.bench
    button = '<div class="tools"><button class="main" data-act="prepare">Lay these on the case</button></div>'
    if state.offers_start:
        return (
            f'{button}<section class="laying" aria-label="A reflex case"><h3>A tremor is laid on a reflex case</h3>'
            f"<p>The case is a {escape(LOOPS[bench.case.kind].title.lower())}. Choose a reflex case to lay it on; nothing changes until you lay, "
            f'and Undo brings the case of now back.</p>{_starts("start-from")}<div class="tools"><button data-act="cancel">Leave the case as it '
            "is</button></div></section>"
        )
    if state.laying is None:
        return button + (f'<p class="refusal" role="alert">{escape(state.not_laid)}</p>' if state.not_laid else "")
    return button + _list(state.laying, bench.case)


def _starts(act: str) -> str:
    buttons = "".join(
        f'<button data-act="{act}" data-key="{item.name}" title="{escape(item.about)}">{escape(item.title)}</button>'
        for item in LOOPS["reflex"].starting_cases
    )
    return f'<div class="tools">{buttons}</div>'


def _title(name: str) -> str:
    return next(item.title for item in LOOPS["reflex"].starting_cases if item.name == name)


def _list(laying: Laying, case: Case) -> str:
    rows = "".join(
        f'<tr><th scope="row">{escape(change.label)}<br><span class="quiet">{escape(change.because)}</span></th>'
        f"<td>{figure(change.before)} → <b>{figure(change.after)}</b> {escape(change.unit)}<br>"
        f"● measured{_spread(laying.case, change.name)}</td></tr>"
        for change in laying.changes
    )
    other = ""
    if case.kind != laying.case.kind:
        other = f"<li>The case becomes a {escape(LOOPS[laying.case.kind].title.lower())}; Undo brings the one of now back.</li>"
    notes = "".join(f"<li>{escape(note)}</li>" for note in laying.notes)
    return (
        f'<section class="laying" aria-label="What will change"><h3>What will change</h3><table class="figures">{rows}</table><ul>{other}{notes}</ul>'
        '<div class="tools"><button class="main" data-act="lay">Lay them</button><button data-act="cancel">Leave the case as it is</button></div>'
        "</section>"
    )


def _spread(case: Case, name: str) -> str:
    """How surely the number is known, where its spread is a share of it."""
    return f", ± {percent(case.spread(name))}" if case.specifications[name].distribution == "lognormal" else ""
