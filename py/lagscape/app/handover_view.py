"""Handing the case on: the printable page, the link, the JSON, the CSV and the pictures, each by one button."""

from __future__ import annotations

import json
from html import escape
from typing import Any

import numpy as np

from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.lever_view import effect_words
from lagscape.app.workbench import Workbench
from lagscape.handover.pictures import Contour, Curve, MapPicture, TracePanel, above, boundary_map_svg, traces_svg
from lagscape.handover.report import LeverLine, Picture, Report, Section, report_html
from lagscape.handover.svg import Axis
from lagscape.handover.table import breaths_csv, cycles_csv, trace_csv
from lagscape.handover.tremor import spectrum_csv, spectrum_svg, tremor_csv, tremor_picture, tremor_sections, tremor_study_document
from lagscape.quantities import figure
from lagscape.questions.boundary_map import cycle_contours, map_of, standing_point, window_of
from lagscape.questions.cautions import cautions
from lagscape.questions.certainty import certainty
from lagscape.questions.levers import LEVERS
from lagscape.questions.response import DISTURBANCES, respond, run_length
from lagscape.questions.share import share_of_excess
from lagscape.questions.standing import Standing, analysis_of
from lagscape.questions.wording import seconds_words, standing_sentence

__all__ = ["HandoverView"]

_ROWS = (
    ("print", "Print the page", "The case on paper or as PDF: standing, numbers with their bases, pictures, references, caution."),
    ("page", "Save the page", "The same as one HTML file that opens anywhere and asks for nothing from outside."),
    ("link", "Copy the link", "The whole case in the address, after #, where browsers do not send it."),
    ("case", "Save the case (JSON)", "Every number in full, to be opened here or read by a script."),
    ("trace", "Save the traces (CSV)", "Time, ventilation or torque, and every state, all digits."),
    ("map-picture", "Save the map (SVG)", "The boundary map as a picture."),
    ("trace-picture", "Save the traces (SVG)", "The traces as a picture."),
)
_TREMOR_ROWS = (
    ("tremor", "Save the tremor (CSV)", "One row a condition: peak, width, size, share, quality; with a load the shift and its verdict."),
    ("tremor-json", "Save the tremor (JSON)", "The same and the spectra, every digit, with what was masked and every note."),
    ("spectrum", "Save the spectrum (CSV)", "Power at each frequency with its 95 % interval, a column a condition."),
    ("spectrum-picture", "Save the spectrum (SVG)", "The spectrum as a picture."),
)


class HandoverView:
    """Makes each file when it is asked for."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.root = Sheet(self._handle)
        bench.listen("recording", self.draw)
        self.draw()

    def draw(self) -> None:
        rows = list(_ROWS)
        if self.bench.measurement is not None:
            rows.append(("cycles", "Save the cycles (CSV)", "Every measured cycle of the recording, excluded ones with their reason."))
            if len(self.bench.measurement.breath_table):
                rows.append(("breaths", "Save the breaths (CSV)", "Every single breath: start, end, rate, volume, ventilation, all digits."))
        if self.bench.tremor is not None:
            rows += _TREMOR_ROWS
        items = "".join(
            f'<li><button class="main" data-act="{act}">{escape(label)}</button><span>{escape(what)}</span></li>' for act, label, what in rows
        )
        self.root.show(
            f'<ul class="handover">{items}</ul><p>No name, patient number or date of birth is in any of them; there is no field for one. '
            "Decision support for qualified staff, not a medical device. Local protocols and licensed practice decide.</p>"
        )

    def _handle(self, request: Request) -> None:
        page, case = self.bench.page, self.bench.case
        if request.act == "link":
            page.send("copy_link", {"link": case.to_link()})
        elif request.act == "case":
            self._save("lagscape-case.json", "application/json", case.to_json())
        elif request.act == "print":
            page.send("print", {"html": self.report()})
        elif request.act == "page":
            self._save("lagscape-case.html", "text/html", self.report())
        elif request.act == "trace":
            answer = respond(case, self._judged(), run_length(self._judged()), purpose="release")
            self._save("lagscape-traces.csv", "text/csv", trace_csv(answer.times, answer.signals))
        elif request.act == "map-picture":
            self._save("lagscape-map.svg", "image/svg+xml", self.map_picture())
        elif request.act == "trace-picture":
            self._save("lagscape-traces.svg", "image/svg+xml", self.trace_picture())
        elif request.act == "cycles" and self.bench.measurement is not None:
            self._save("lagscape-cycles.csv", "text/csv", cycles_csv(self.bench.measurement))
        elif request.act == "breaths" and self.bench.measurement is not None:
            self._save("lagscape-breaths.csv", "text/csv", breaths_csv(self.bench.measurement))
        elif self.bench.tremor is not None:
            self._save_tremor(request.act)

    def _save_tremor(self, act: str) -> None:
        study = self.bench.tremor
        if act == "tremor":
            self._save("lagscape-tremor.csv", "text/csv", tremor_csv(study))
        elif act == "tremor-json":
            self._save("lagscape-tremor.json", "application/json", json.dumps(tremor_study_document(study), indent=2, allow_nan=False))
        elif act == "spectrum":
            self._save("lagscape-spectrum.csv", "text/csv", spectrum_csv(study))
        elif act == "spectrum-picture":
            self._save("lagscape-spectrum.svg", "image/svg+xml", spectrum_svg(study))

    def _save(self, name: str, kind: str, text: str) -> None:
        self.bench.page.send("download", {"name": name, "type": kind, "data": text.encode()})

    def _judged(self) -> Any:
        judged = self.bench.judged
        return judged.with_levers if judged.with_levers is not None else judged.judgement

    def report(self) -> str:
        """The printable page of the case as it stands."""
        bench = self.bench
        now = bench.judged.judgement
        before = analysis_of(now, standing_sentence(now))
        changed = bench.judged.with_levers
        pictures = (
            Picture(self.map_picture(), "Boundary map. Hatched: the loop hunts."),
            Picture(self.trace_picture(), "The answer to one disturbance."),
            *(() if bench.tremor is None else (tremor_picture(bench.tremor),)),
        )
        if changed is None:
            analysis, without = before, None
        else:
            analysis, without = analysis_of(changed, standing_sentence(changed)), before
        return report_html(
            Report(
                bench.case, analysis, without, levers=self._lever_lines(), pictures=pictures,
                cautions=tuple(f"{item.sentence} ({item.source})" for item in cautions(bench.case)),
                sections=self._sections(), measurement=bench.measurement, address=bench.page.address, pressure_unit=bench.units,
            )
        )

    def _sections(self) -> tuple[Section, ...]:
        """Share of the excess and certainty, worked out for the report."""
        share, sure = share_of_excess(self.bench.case), certainty(self.bench.case)
        parts = tuple((item.part.label, f"{100.0 * item.share:.0f} %") for item in share.parts if item.share is not None)
        held = [(f"{standing} in", f"{100.0 * sure.shares[standing]:.0f} % of draws") for standing in Standing]
        held += [(f"doubt from {item.label}", f"{100.0 * item.share:.0f} %") for item in sure.doubts[:3]]
        return (
            Section("Share of the excess", parts, share.sentence),
            Section("Certainty", tuple(held), f"{sure.sentence} {sure.draws} draws, seed {sure.seed}."),
            *(() if self.bench.tremor is None else tremor_sections(self.bench.tremor)),
        )

    def _lever_lines(self) -> tuple[LeverLine, ...]:
        lines = []
        for effect in self.bench.judged.effects:
            if len(effect.settings) != 1:
                continue
            lever = LEVERS[self.bench.case.kind][effect.settings[0].name]
            dose = f"{figure(effect.settings[0].dose)} {lever.unit}".rstrip()
            lines.append(LeverLine(lever.label, dose, effect_words(effect), lever.caution, lever.source))
        return tuple(lines)

    def map_picture(self) -> str:
        """The boundary map as SVG, in stored units."""
        case, loop = self.bench.case, self.bench.judged.judgement.loop
        window = window_of(case)
        drawn = map_of(case, window)
        start = self.bench.start.judgement.loop
        top = window.sensitivity_high
        changed = self.bench.judged.with_levers
        outline = above(drawn.delays, np.minimum(drawn.critical, top), top)
        contours = tuple(
            Contour(seconds_words(line.period), line.delays, line.sensitivities) for line in cycle_contours(case, window)
        )
        return boundary_map_svg(
            MapPicture(
                Axis(loop.delay_name, "s", window.delay_low, window.delay_high),
                Axis(loop.sensitivity_name, loop.sensitivity_unit, window.sensitivity_low, top),
                drawn.delays, np.where(drawn.critical <= top, drawn.critical, np.nan), [outline],
                (float(loop.delay), float(loop.sensitivity)), (float(start.delay), float(start.sensitivity)), contours=contours,
                levers=None if changed is None else standing_point(drawn, changed),
            )
        )

    def trace_picture(self) -> str:
        """The traces as SVG, in stored units: the case, where it started, and with its levers."""
        bench, case = self.bench, self.bench.case
        now = bench.judged.judgement
        length = run_length(now)
        answer = respond(case, now, length, purpose="release")
        behind = respond(case, bench.start.judgement, length)
        runs = [("start", behind), ("case", answer)]
        if bench.judged.with_levers is not None:
            runs.append(("levers", respond(case, bench.judged.with_levers, length, purpose="release")))
        panels = [
            TracePanel(
                signal.label, signal.unit, tuple(Curve(run.signals[row].values, role) for role, run in runs),
                silences=answer.trace.silences if row == 0 else (), from_zero=row == 0 and case.kind != "reflex",
            )
            for row, signal in enumerate(answer.signals[:2])
        ]
        words = ""
        if case.disturbance is not None and case.disturbance.name in DISTURBANCES[case.kind]:
            words = DISTURBANCES[case.kind][case.disturbance.name].label
        return traces_svg(answer.times, panels, answer.start_s if words else None, words)
