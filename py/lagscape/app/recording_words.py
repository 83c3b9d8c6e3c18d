"""The recording view's words: what the file is, what its cycles come to, and what laying them on the case would change."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING, Any

from lagscape.app.breath_words import breaths_html
from lagscape.app.channel_words import channel_options, rate_html, read_as_html
from lagscape.app.fit_words import fit_html
from lagscape.app.threshold_forms import threshold_html
from lagscape.quantities import figure, to_display

if TYPE_CHECKING:
    from lagscape.app.recording_view import RecordingView

__all__ = ["recording_summary"]

_MOST_ROWS = 60


def recording_summary(view: RecordingView) -> tuple[str, str]:
    """HTML of the head over the figures and of the side beside them."""
    return _head(view), _side(view)


def _head(view: RecordingView) -> str:
    refusal = f'<p class="refusal" role="alert">{escape(view.refusal)}</p>' if view.refusal else ""
    rate = rate_html(view.waiting is not None, view.refusal)
    if view.recording is None or view.signal is None:
        empty = (
            "" if refusal
            else "<p>Open a recording of ventilation, airflow or effort, or of a tremor (accelerometer, gyroscope, EMG): a CSV or EDF "
            "file. It stays in this tab.</p>"
        )  # fmt: skip
        return f'<div class="rec-head">{refusal}{rate}{empty}</div>'
    options = channel_options(view.recording, view.signal.name)
    notes = [str(note) for note in view.recording.notes]
    repaired = ""
    if notes:
        shown = "".join(f"<li>{escape(note)}</li>" for note in notes[:12])
        repaired = f"<details><summary>{len(notes)} note{'s' if len(notes) != 1 else ''} on the file</summary><ul>{shown}</ul></details>"
    minutes = view.recording.duration_s / 60.0
    return (
        f'<div class="rec-head">{refusal}{rate}<p><b>{escape(view.recording.name)}</b>, {figure(minutes)} min. It stays in this tab; names and '
        f"dates in a file are neither shown nor kept.</p>"
        f'<div class="tools"><label>Channel <select data-act="channel" aria-label="Channel">{options}</select></label>'
        f"{read_as_html('breathing')}"
        '<button data-act="measure-window">Measure this window</button><button data-act="measure-whole">Measure the whole</button></div>'
        f"{threshold_html(view.thresholds)}{repaired}</div>"
    )


def _side(view: RecordingView) -> str:
    measured = view.measurement
    if measured is None:
        return ""
    used = len(measured.used)
    gain = measured.loop_gain
    meaning = ""
    if gain is not None:
        word = "above 1: the loop hunts" if gain.median > 1.0 else "1 or less: no hunting"
        meaning = f"<p>Loop gain {word}. From the duty ratio: 2π/(2πDR − sin 2πDR), Sands 2011.</p>"
    if used == 0:
        meaning = "<p><b>No periodic breathing here.</b> Nothing was forced into cycles.</p>"
    rows = "".join(
        _row(label, value, unit)
        for label, value, unit in (
            ("Cycle length", measured.cycle_length_s, "s"),
            ("Breathing in each", measured.ventilatory_duration_s, "s"),
            ("Apnoea in each", measured.apnoeic_duration_s, "s"),
            ("Duty ratio", measured.duty_ratio, ""),
            ("Loop gain", gain, ""),
        )
    )
    if view.lag is not None:
        rows += _row("Oximeter lags by", view.lag.lag_s, "s") + _row("Drop of SpO2", view.lag.drop, "% points")
    if measured.shape:
        meaning += f"<p>Shape: {escape(measured.shape)}.</p>"
    quality = escape(measured.quality.capitalize())
    reasons = "".join(f"<li>{escape(reason)}</li>" for reason in measured.quality_reasons)
    excluded = len(measured.cycles) - used
    window = f"{_clock(measured.window[0])} to {_clock(measured.window[1])}"
    button = (
        '<div class="tools"><button class="main" data-act="prepare">Lay these on the case</button>'
        '<button data-act="fit">Fit the loop to it</button></div>'
        if used
        else '<div class="tools"><button data-act="quiet">Read the loop from quiet breathing</button></div>'
    )
    fit = fit_html(view.fit, view.bench.units) if view.fit is not None else ""
    if view.ring_down is not None:
        ring = view.ring_down
        fit = (
            f"<p>After a push breathing swings every {figure(ring.period_s.median)} s with a damping ratio of "
            f"{figure(ring.damping_ratio.median, 2)}. {escape(ring.strength)}</p>{fit}"
        )
    return (
        f'<div class="rec-side"><h3>{used} cycles used, {excluded} excluded</h3><p class="quiet">Measured from {window}.</p>'
        f'<table class="figures"><tr><th></th><td>median</td><td>quartiles</td></tr>{rows}</table>{meaning}'
        f"<h3>Quality of the cycles: {quality}</h3><ul>{reasons}</ul>{_masked(measured)}"
        f"<div>{_laying(view)}</div>{button}<div>{fit}</div>{breaths_html(measured)}{_table(view, measured)}</div>"
    )


def _row(label: str, spread: Any, unit: str) -> str:
    if spread is None:
        return f'<tr><th scope="row">{label}</th><td>none</td><td></td></tr>'
    median = f"{figure(spread.median)} {unit}".rstrip()
    return (
        f'<tr><th scope="row">{label}</th><td>{median}</td><td>{figure(spread.lower_quartile)} to {figure(spread.upper_quartile)}</td></tr>'
    )


def _masked(measured: Any) -> str:
    if not measured.masked:
        return "<p>Nothing was masked.</p>"
    counts: dict[str, int] = {}
    for item in measured.masked:
        counts[item.reason] = counts.get(item.reason, 0) + 1
    said = ", ".join(f"{reason} {count} times" if count > 1 else f"{reason} once" for reason, count in counts.items())
    return f"<p>Masked (hatched): {escape(said)}; {figure(measured.masked_s)} s in all.</p>"


def _laying(view: RecordingView) -> str:
    laying = view.laying
    if laying is None:
        return ""
    rows = []
    for change in laying.changes:
        before, unit = to_display(change.before, change.unit, view.bench.units)
        after, _ = to_display(change.after, change.unit, view.bench.units)
        rows.append(
            f'<tr><th scope="row">{escape(change.label)}</th><td>{figure(before)} → <b>{figure(after)}</b> {escape(unit)}</td></tr>'
        )
    notes = "".join(f"<li>{escape(note)}</li>" for note in laying.notes)
    return (
        f'<section class="laying" aria-label="What will change"><h3>What will change</h3><table class="figures">{"".join(rows)}</table>'
        f'<ul>{notes}</ul><div class="tools"><button class="main" data-act="lay">Lay them</button>'
        '<button data-act="cancel">Leave the case as it is</button></div></section>'
    )


def _table(view: RecordingView, measured: Any) -> str:
    start, stop = view.shown_window()
    inside = [cycle for cycle in measured.cycles if cycle.stop_s >= start and cycle.start_s <= stop]
    rows = []
    for cycle in inside[:_MOST_ROWS]:
        checked = "" if cycle.excluded else " checked"
        apnoea = f"{cycle.apnoeic_duration_s:.0f}" if cycle.pause == "apnoea" else cycle.pause
        reason = f' title="{escape(cycle.reason)}"' if cycle.reason else ""
        rows.append(
            f'<tr{reason}><td><label><input type="checkbox" data-act="use" data-key="{cycle.number}" aria-label="Use cycle {cycle.number}"'
            f'{checked}></label></td>'
            f'<td><button class="link" data-act="go" data-key="{0.5 * (cycle.start_s + cycle.stop_s):.1f}">{cycle.number}</button></td>'
            f"<td>{_clock(cycle.start_s)}</td><td>{cycle.cycle_length_s:.0f}</td><td>{cycle.ventilatory_duration_s:.0f}</td><td>{escape(apnoea)}</td>"
            f"<td>{figure(cycle.duty_ratio, 2) if cycle.duty_ratio is not None else ''}</td></tr>"
        )
    if not rows:
        return "<p>No cycle in the window shown.</p>"
    left = len(inside) - len(rows)
    more = f"<p>{left} more in this window; narrow it to list them.</p>" if left > 0 else ""
    return (
        '<h3>Cycles in the window</h3><p class="quiet">Click a cycle in the figure, or clear its box (Delete), to leave it out.</p>'
        '<table class="cycles"><thead><tr><th>use</th><th>no.</th><th>start</th><th>length s</th><th>breathing s</th><th>apnoea s</th>'
        f"<th>duty ratio</th></tr></thead><tbody>{''.join(rows)}</tbody></table>{more}"
    )


def _clock(seconds: float) -> str:
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    return f"{hours}:{rest // 60:02d}:{rest % 60:02d}" if hours else f"{rest // 60}:{rest % 60:02d}"
