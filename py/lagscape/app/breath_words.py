"""The recording view's words on single breaths: rate, volume, ventilation, and how far the marks can be trusted."""

from __future__ import annotations

from html import escape

from lagscape.quantities import figure
from lagscape.recordings import BreathingMeasurement, BreathTable, Spread
from lagscape.recordings.breath_result import word_of

__all__ = ["breaths_html"]


def breaths_html(measured: BreathingMeasurement) -> str:
    """HTML of the single breaths, medians with quartiles to three figures; where none may be marked, why."""
    table = measured.breath_table
    if not len(table):
        return f"<h3>Single breaths</h3><p>{escape(table.quality.reasons[0])}</p>"
    rows = "".join(
        _row(label, spread, unit)
        for label, spread, unit in (
            ("Respiratory rate", table.rate_per_min, "/min"),
            ("Tidal volume", table.tidal_volume, _said(table.volume_unit)),
            ("Ventilation", table.ventilation, _said(table.ventilation_unit)),
        )
        if spread is not None
    )
    volume = "" if table.volume_unit else "<p>No volume is claimed of this channel.</p>"
    notes = "".join(f"<li>{escape(note)}</li>" for note in table.notes)
    more = f"<details><summary>How they were read</summary><ul>{notes}</ul></details>" if notes else ""
    reasons = "".join(f"<li>{escape(reason)}</li>" for reason in table.quality.reasons)
    return (
        f'<h3>{len(table)} breaths marked</h3><p class="quiet">Over breathing alone: an apnoea is no long breath.</p>'
        f'<table class="figures"><tr><th></th><td>median</td><td>quartiles</td></tr>{rows}</table>{volume}{more}'
        f"<h3>Quality of the breaths: {table.quality.word.capitalize()} ({figure(table.quality.score, 2)} of 1)</h3>"
        f"<ul>{reasons}{_stretches(table)}</ul>"
    )


def _said(unit: str) -> str:
    return unit.replace("median breaths/min", "medians/min").replace("median breath", "× median")


def _row(label: str, spread: Spread, unit: str) -> str:
    return (
        f'<tr><th scope="row">{label}</th><td>{figure(spread.median)} {escape(unit)}</td>'
        f"<td>{figure(spread.lower_quartile)} to {figure(spread.upper_quartile)}</td></tr>"
    )


def _stretches(table: BreathTable) -> str:
    """How the minutes fall into words, and where the worst one is."""
    judged = [(stretch.score, stretch.start_s) for stretch in table.quality.stretches if stretch.score is not None]
    if len(judged) < 2:
        return ""
    words = [word_of(score) for score, _ in judged]
    said = ", ".join(f"{words.count(word)} {word}" for word in ("good", "fair", "poor") if word in words)
    worst, at = min(judged)
    begins = f"{int(at // 60)}:{int(at % 60):02d}"
    return f"<li>By the minute, as the bars over the window show: {said}; the worst, {figure(worst, 2)}, begins at {begins}.</li>"
