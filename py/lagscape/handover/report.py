"""The report: one case on a page that prints, whole in one HTML file, with nothing fetched from anywhere.

It holds what the case holds and what was worked out from it, and no field for a name. Numbers are shown to three figures; the link
and the case file hold all of them.
"""

from __future__ import annotations

import base64
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

from lagscape.case.case import Case, Number
from lagscape.case.parameters import Basis, ParameterSpecification
from lagscape.handover.references import references
from lagscape.loops.register import LOOPS
from lagscape.quantities import figure, percent, quantity, to_display
from lagscape.questions.standing import Analysis
from lagscape.recordings.breath_result import BreathTable
from lagscape.recordings.breathing_result import BreathingMeasurement
from lagscape.version import VERSION

__all__ = ["CAUTION", "LeverLine", "Picture", "Report", "Section", "report_html"]

CAUTION = "Decision support for qualified staff. Not a medical device. Local protocols and licensed practice decide."

_BASIS_SIGNS = {Basis.MEASURED: "●", Basis.ASSUMED: "◐", Basis.TYPICAL: "○"}


@dataclass(frozen=True)
class LeverLine:
    """One lever as the report says it: its words, its dose with unit, what it did to the loop, its caution and source."""

    label: str
    dose: str
    effect: str = ""
    caution: str = ""
    source: str = ""


@dataclass(frozen=True)
class Section:
    """A further answer, such as the share of the excess or the certainty: a heading and rows of words and figure."""

    title: str
    rows: tuple[tuple[str, str], ...]
    note: str = ""


@dataclass(frozen=True)
class Picture:
    """An SVG picture with its caption."""

    svg: str
    caption: str


@dataclass(frozen=True)
class Report:
    """What goes on the page. Only `case` and `analysis` are needed; the analysis is of the case with its levers laid on it."""

    case: Case
    analysis: Analysis
    without_levers: Analysis | None = None
    """The analysis before the levers, set beside the other where levers are laid."""
    levers: tuple[LeverLine, ...] = ()
    cautions: tuple[str, ...] = ()
    """Cautions of the case itself, such as that of a trial in its patients."""
    pictures: tuple[Picture, ...] = ()
    sections: tuple[Section, ...] = ()
    measurement: BreathingMeasurement | None = None
    address: str = ""
    """The page's own address, put before the link; the link alone where empty."""
    pressure_unit: str = "mmHg"


def report_html(report: Report) -> str:
    """The report as one HTML document that prints on A4 and asks for nothing outside itself."""
    loop = LOOPS[report.case.kind]
    body = [
        f"<header><p>Lagscape {escape(VERSION)}</p><p>{escape(CAUTION)}</p></header>",
        f"<h1>{escape(loop.title)}</h1>",
        _sentences(report),
        _figures(report),
        _cautions(report.cautions),
        *(_picture(item) for item in report.pictures),
        _levers(report),
        *(_section(item) for item in report.sections),
        _measurement(report.measurement),
        _numbers(report),
        _references(report),
        _link(report),
        f"<footer><p>{escape(CAUTION)}</p></footer>",
    ]
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
        "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'; img-src data:\">"
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"<title>{escape(loop.title)}: {escape(str(report.analysis.standing))}</title><style>{_STYLE}</style></head>\n"
        f"<body>{''.join(body)}</body></html>\n"
    )


def _sentences(report: Report) -> str:
    """The verdict in the largest type; where levers are laid, both verdicts, each saying which it is."""
    if report.without_levers is None:
        return f'<p class="standing">{escape(report.analysis.sentence)}</p>'
    return "".join(
        f'<p class="standing"><span>{words}</span> {escape(analysis.sentence)}</p>'
        for words, analysis in (("Without levers:", report.without_levers), ("With levers:", report.analysis))
    )


def _figures(report: Report) -> str:
    """The figures that support the sentence, before the levers too where there are any."""
    after, before = report.analysis, report.without_levers
    after_rows = _figure_rows(after, report)
    if before is None:
        return _table("Standing", ("Figure", "Value"), [(name, value) for name, value in after_rows])
    columns = ("Figure", "Without levers", "With levers")
    rows = [(name, old, new) for (name, old), (_, new) in zip(_figure_rows(before, report), after_rows, strict=True)]
    return _table("Standing", columns, rows)


def _figure_rows(analysis: Analysis, report: Report) -> list[tuple[str, str]]:
    unit = report.pressure_unit
    rows: list[tuple[str, str, str]] = [
        ("Standing", "", str(analysis.standing)),
        ("Loop gain", "loop_gain", figure(analysis.loop_gain)),
        ("Gain margin", "gain_margin", figure(analysis.gain_margin)),
        ("Phase margin", "phase_margin_rad", quantity(_degrees(analysis.phase_margin_rad), "degrees")),
        ("Delay margin", "delay_margin_s", quantity(analysis.delay_margin_s, "s")),
        ("Cycle length", "cycle_length_s", quantity(analysis.cycle_length_s, "s")),
        ("Growth rate", "growth_rate_per_s", quantity(analysis.growth_rate_per_s, "1/s")),
    ]
    if analysis.kind == "breathing":
        rows += [
            ("Duty ratio", "duty_ratio", figure(analysis.duty_ratio)),
            ("Apnoea in each cycle", "apnoea_s", quantity(analysis.apnoea_s, "s")),
            ("CO2 reserve", "co2_reserve_mmhg", quantity(analysis.co2_reserve_mmhg, "mmHg", unit)),
        ]
    reasons = analysis.reasons
    return [(name, f"{value} ({reasons[key]})" if key in reasons and value == "–" else value) for name, key, value in rows]


def _numbers(report: Report) -> str:
    rows = []
    for name, number in report.case.numbers.items():
        item = report.case.specifications[name]
        low, shown = to_display(item.typical_low, item.unit, report.pressure_unit)
        high, _ = to_display(item.typical_high, item.unit, report.pressure_unit)
        value = quantity(number.value, item.unit, report.pressure_unit)
        band = f"{figure(low)} to {figure(high)} {shown}".rstrip()
        basis = f"{_BASIS_SIGNS[number.basis]} {number.basis}"
        rows.append((item.group, f"{item.label} ({item.symbol})", value, basis, _spread(number, item, report), band))
    words = ("Group", "Number", "Value", "Basis", "One SD", "Typical band")
    settings = [(choice.label, choice.options[report.case.choices[choice.name]]) for choice in LOOPS[report.case.kind].choices]
    table = _table("Numbers", words, rows, "numbers")
    return table + (_table("Settings", ("Setting", "Value"), settings) if settings else "")


def _spread(number: Number, item: ParameterSpecification, report: Report) -> str:
    """One standard deviation as a clinician reads it: in the unit, or in per cent where it is of the logarithm."""
    spread = number.spread if number.spread is not None else item.spread_for(number.basis)
    if item.distribution == "lognormal":
        return f"about {percent(spread)}"
    return quantity(spread, item.unit, report.pressure_unit, 2)


def _levers(report: Report) -> str:
    if report.levers:
        rows = [(line.label, line.dose, line.effect, line.caution) for line in report.levers]
        return _table("Levers", ("Lever", "Dose", "Effect", "Caution"), rows)
    laid = [(lever.name.replace("_", " "), figure(lever.dose)) for lever in report.case.levers]
    return _table("Levers", ("Lever", "Dose"), laid) if laid else ""


def _cautions(cautions: Sequence[str]) -> str:
    return "".join(f'<p class="caution"><strong>Caution.</strong> {escape(text)}</p>' for text in cautions)


def _section(section: Section) -> str:
    note = f"<p>{escape(section.note)}</p>" if section.note else ""
    return _table(section.title, ("", ""), section.rows) + note


def _measurement(measurement: BreathingMeasurement | None) -> str:
    if measurement is None:
        return ""
    rows: list[tuple[str, str]] = [
        ("Signal", f"{measurement.signal} ({measurement.kind})"),
        ("Window", f"{figure(measurement.window[0])} to {figure(measurement.window[1])} s"),
        ("Cycles used", f"{len(measurement.used)} of {len(measurement.cycles)}"),
    ]
    for label, name, unit in (
        ("Cycle length", "cycle_length_s", "s"),
        ("Ventilatory duration", "ventilatory_duration_s", "s"),
        ("Apnoeic duration", "apnoeic_duration_s", "s"),
        ("Duty ratio", "duty_ratio", ""),
        ("Loop gain by the duty ratio", "loop_gain", ""),
    ):
        spread = getattr(measurement, name)
        if spread is not None:
            words = f"{figure(spread.median)} ({figure(spread.lower_quartile)} to {figure(spread.upper_quartile)}) {unit}"
            rows.append((label, words.rstrip()))
    notes = "".join(f"<li>{escape(text)}</li>" for text in (*measurement.quality_reasons, *measurement.notes))
    title = "Recording: medians and quartiles"
    cycles = _table(title, ("Figure", "Value"), rows) + f"<p>Quality: {escape(measurement.quality)}.</p><ul>{notes}</ul>"
    return cycles + _breaths(measurement.breath_table)


def _breaths(table: BreathTable) -> str:
    if not len(table):
        return f"<p>Single breaths: {escape(table.quality.reasons[0])}</p>"
    rows = [("Breaths", str(len(table)))]
    for label, spread, unit in (
        ("Respiratory rate", table.rate_per_min, "1/min"),
        ("Tidal volume", table.tidal_volume, table.volume_unit),
        ("Ventilation while breathing", table.ventilation, table.ventilation_unit),
    ):
        if spread is not None:
            rows.append((label, f"{figure(spread.median)} ({figure(spread.lower_quartile)} to {figure(spread.upper_quartile)}) {unit}"))
    notes = "".join(f"<li>{escape(text)}</li>" for text in (*table.quality.reasons, *table.notes))
    worth = f"<p>Quality of the breaths: {table.quality.word} ({figure(table.quality.score, 2)} of 1).</p>"
    return _table("Single breaths: medians and quartiles", ("Figure", "Value"), rows) + f"{worth}<ul>{notes}</ul>"


def _references(report: Report) -> str:
    further = tuple(line.source for line in report.levers if line.source)
    lines = references(report.case, report.analysis, report.measurement is not None, further)
    items = "".join(f"<li>{escape(line)}</li>" for line in lines)
    sources = [
        f"<li>{escape(report.case.specifications[name].label)}: {escape(report.case.specifications[name].source)}</li>"
        for name, number in report.case.numbers.items()
        if number.basis is Basis.TYPICAL
    ]
    typical = f"<h2>Sources of the typical numbers</h2><ul>{''.join(sources)}</ul>" if sources else ""
    return f"<section><h2>Methods used</h2><ul>{items}</ul>{typical}</section>"


def _link(report: Report) -> str:
    link = report.case.to_link()
    text = f"{report.address.partition('#')[0]}#{link}" if report.address else link
    return (
        "<section><h2>The whole case</h2><p>Put this after # in the address of Lagscape, or open it as a link. It holds every number "
        f'to its last digit.</p><p class="link">{escape(text)}</p></section>'
    )


def _picture(picture: Picture) -> str:
    # As an image of its own, so that the names inside one picture never meet those of another.
    data = base64.b64encode(picture.svg.encode("utf-8")).decode("ascii")
    caption = escape(picture.caption)
    return f'<figure><img alt="{caption}" src="data:image/svg+xml;base64,{data}"><figcaption>{caption}</figcaption></figure>'


def _table(title: str, columns: Sequence[str], rows: Sequence[Sequence[Any]], name: str = "") -> str:
    head = "".join(f'<th scope="col">{escape(name)}</th>' for name in columns) if any(columns) else ""
    lines = []
    for row in rows:
        cells = [escape(str(cell)) for cell in row]
        lines.append("<tr>" + "".join(f"<td>{cell}</td>" for cell in cells) + "</tr>")
    header = f"<thead><tr>{head}</tr></thead>" if head else ""
    kind = f' class="{name}"' if name else ""
    return f"<section><h2>{escape(title)}</h2><table{kind}>{header}<tbody>{''.join(lines)}</tbody></table></section>"


def _degrees(radians: float | None) -> float | None:
    return None if radians is None else radians * 57.29577951308232


_STYLE = """
@page { size: A4; margin: 16mm }
:root { color-scheme: light }
body { font: 11pt/1.4 system-ui, -apple-system, 'Segoe UI', Roboto, 'Liberation Sans', sans-serif; color: #1C2530; background: #fff;
  max-width: 180mm; margin: 0 auto; padding: 8mm 4mm; font-variant-numeric: tabular-nums }
header { display: flex; justify-content: space-between; gap: 1em; border-bottom: 1px solid #D8D8D0; font-size: 9pt; color: #3A434C }
header p:first-child { white-space: nowrap }
.standing span { font-size: 11pt }
header p, footer p { margin: 0 0 2mm }
h1 { font-size: 13pt; margin: 5mm 0 1mm; font-weight: 600 }
h2 { font-size: 11pt; margin: 6mm 0 1.5mm; font-weight: 600 }
.standing { font-size: 17pt; line-height: 1.25; margin: 0 0 4mm }
table { border-collapse: collapse; width: 100%; font-size: 9.5pt }
th { text-align: left; font-weight: 600; border-bottom: 1px solid #1C2530 }
td, th { padding: 0.8mm 2mm 0.8mm 0; vertical-align: top }
.numbers td:nth-child(4), .numbers td:nth-child(5) { white-space: nowrap }
tbody tr { border-bottom: 1px solid #D8D8D0; break-inside: avoid }
.caution { border-left: 3px solid #B5541C; padding-left: 3mm }
figure { margin: 5mm 0; break-inside: avoid }
figure img { width: 100%; height: auto }
figcaption { font-size: 9pt; color: #3A434C }
ul { padding-left: 5mm; margin: 1mm 0; font-size: 9.5pt }
.link { font: 8pt/1.35 ui-monospace, 'Liberation Mono', monospace; overflow-wrap: anywhere }
footer { border-top: 1px solid #D8D8D0; margin-top: 6mm; font-size: 9pt; color: #3A434C }
h2 { break-after: avoid }
"""
