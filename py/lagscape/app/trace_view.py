"""The traces: the controlled signal above, the controlled variable below, the answer to one disturbance, before and after overlaid."""

from __future__ import annotations

from html import escape
from typing import Any

import numpy as np
import panel as pn
from bokeh.core.properties import value
from bokeh.core.property.validation import validate
from bokeh.events import DoubleTap
from bokeh.models import ColumnDataSource, CustomJS, Label, PanTool, Range1d, ResetTool, Span, WheelZoomTool
from bokeh.plotting import figure

from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.palette import FONT, PALETTES, dress
from lagscape.app.workbench import Workbench
from lagscape.case.case import Case
from lagscape.case.parts import disturbance_units
from lagscape.errors import InvalidInputError
from lagscape.quantities import figure as figures
from lagscape.quantities import to_display
from lagscape.questions.response import DISTURBANCES, Response, cycle_bracket, respond, run_length

__all__ = ["SHOW_ALL", "TraceView"]

SHOW_ALL = "time.setv({start: time.reset_start, end: time.reset_end})"
"""Runs in the page on a double click: the whole time axis again."""

_POINTS, _MOVING_POINTS = 1201, 601
"""Points of a trace at rest, for zooming, and under the hand, about one a pixel."""

_UNDER_HAND = "overlay"
"""Level of what follows the hand: a canvas of its own, so that axes and the lines behind need not be painted anew."""

_ROOM = 0.25
"""What an axis that must grow under the hand takes beyond what is drawn, as a share of it."""

_MOST_SILENCE_LABELS = 14
"""Past this many apnoeas in the run their seconds would overlap."""


class _Strip:
    """One figure with three lines: the start behind, the case now, the case with levers."""

    def __init__(self, time: Range1d, last: bool) -> None:
        self.range = Range1d(0.0, 1.0)
        self.sources = {name: ColumnDataSource({"time": [], "value": []}) for name in ("before", "now", "after")}
        pan, wheel = PanTool(dimensions="width"), WheelZoomTool(dimensions="width")
        self.plot = figure(
            x_range=time, y_range=self.range, tools=[pan, wheel, ResetTool()], toolbar_location=None, sizing_mode="stretch_both",
            min_border_left=70, min_border_right=14, min_border_top=6, min_border_bottom=44 if last else 6,
        )  # fmt: skip
        self.plot.toolbar.active_scroll = wheel
        self.plot.toolbar.active_drag = pan
        self.plot.js_on_event(DoubleTap, CustomJS(args={"time": time}, code=SHOW_ALL))
        self.lines = {
            "before": self.plot.line("time", "value", source=self.sources["before"], line_width=1.3),
            "after": self.plot.line("time", "value", source=self.sources["after"], line_width=1.8, line_dash=[7, 3]),
            "now": self.plot.line("time", "value", source=self.sources["now"], line_width=1.8, level=_UNDER_HAND),
        }
        self.mark = Span(dimension="height", line_dash="dotted", line_width=1, level=_UNDER_HAND)
        self.plot.add_layout(self.mark)
        self.plot.xaxis.visible = last
        self.plot.yaxis.ticker.desired_num_ticks = 4

    def show(self, name: str, times: Any, values: Any) -> None:
        source = self.sources[name]
        if np.array_equal(source.data["time"], times):
            source.data["value"] = values  # sent without the times
        else:
            source.data = {"time": times, "value": values}

    def fit(self, grow_only: bool, floor: float | None) -> bool:
        """Set the value axis round what is drawn; while the hand moves it only grows. True where it changed."""
        drawn = [np.asarray(source.data["value"]) for source in self.sources.values() if len(source.data["value"])]
        low, high = min(float(values.min()) for values in drawn), max(float(values.max()) for values in drawn)
        margin = 0.08 * max(high - low, 1e-9, 0.01 * abs(high))
        low, high = (low - margin if floor is None else floor), high + 2.0 * margin
        if grow_only:
            # A new axis is painted whole: it grows in few large steps rather than with every move.
            room = _ROOM * (high - low)
            low = self.range.start if low >= self.range.start else low - room if floor is None else floor
            high = self.range.end if high <= self.range.end else high + room
        if (low, high) == (self.range.start, self.range.end):
            return False
        self.range.update(start=low, end=high, reset_start=low, reset_end=high)
        return True


class TraceView:
    """Two strips on one time axis, redrawn while the case moves."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.time = Range1d(0.0, 1.0)
        self.strips = (_Strip(self.time, last=False), _Strip(self.time, last=True))
        upper, lower = self.strips
        lower.plot.xaxis.axis_label = "Time (s)"
        self.silences = ColumnDataSource({"start": [], "end": [], "middle": [], "text": []})
        self.silence_bars = upper.plot.segment("start", 0, "end", 0, source=self.silences, line_width=8, level=_UNDER_HAND)
        self.silence_texts = upper.plot.text(
            "middle", 0, "text", source=self.silences, text_align="center", text_baseline="bottom", y_offset=-6, text_font=value(FONT),
            text_font_size="12px", background_fill_alpha=0.85, level=_UNDER_HAND,
        )  # fmt: skip
        self.bracket = ColumnDataSource({"x": [], "y": [], "middle": [], "top": [], "text": []})
        self.bracket_line = upper.plot.multi_line("x", "y", source=self.bracket, line_width=1.2, level=_UNDER_HAND)
        self.bracket_text = upper.plot.text(
            "middle", "top", "text", source=self.bracket, text_align="center", text_baseline="bottom", y_offset=-2, text_font=value(FONT),
            text_font_size="12px", level=_UNDER_HAND,
        )  # fmt: skip
        self.mark_label = Label(x=0, y=0, text="", x_offset=4, y_offset=-16, text_font=FONT, text_font_size="12px", level=_UNDER_HAND)
        upper.plot.add_layout(self.mark_label)
        self.bar = Sheet(self._handle)
        panes = [pn.pane.Bokeh(strip.plot, sizing_mode="stretch_both", min_height=110) for strip in self.strips]
        self.root = pn.Column(self.bar, *panes, sizing_mode="stretch_both")
        self.duration = 0.0
        self.lower = ""
        self.others: dict[str, str] = {}
        bench.listen("moving", self.follow)
        bench.listen("settled", self.draw)
        bench.listen("units", self.draw)
        bench.listen("theme", self.dress)
        self.dress()
        self.draw()

    def dress(self) -> None:
        palette = PALETTES[self.bench.theme]
        for strip in self.strips:
            dress(strip.plot, palette)
            strip.lines["before"].glyph.line_color = palette.before
            strip.lines["now"].glyph.line_color = palette.ink
            strip.lines["after"].glyph.line_color = palette.inside
            strip.mark.line_color = palette.quiet
        self.silence_bars.glyph.line_color = palette.outside
        self.silence_texts.glyph.text_color = palette.outside
        self.silence_texts.glyph.background_fill_color = palette.paper
        self.bracket_line.glyph.line_color = palette.quiet
        self.bracket_text.glyph.text_color = palette.ink
        self.mark_label.text_color = palette.quiet

    def follow(self) -> None:
        """Redraw only what follows the hand."""
        # Bokeh would look at every number of every curve to see whether it is one.
        with validate(False):
            self._run("now", self.bench.case, self.bench.judged.judgement, grow_only=True)

    def draw(self) -> None:
        """Redraw all: the run's length, the start behind, the levers' answer, the bar of disturbances."""
        bench = self.bench
        case, judged = bench.case, bench.judged.judgement
        self.duration = run_length(judged)
        self.time.update(start=0.0, end=self.duration, reset_start=0.0, reset_end=self.duration)
        for strip in self.strips:
            strip.show("before", [], [])
            strip.show("after", [], [])
        start = bench.start
        if start.case.numbers != case.numbers or start.case.choices != case.choices:
            self._run("before", case, start.judgement, grow_only=False)
        if bench.judged.with_levers is not None:
            self._run("after", case, bench.judged.with_levers, grow_only=False)
        self._run("now", case, judged, grow_only=False)
        self._draw_bar(case)

    def _run(self, name: str, case: Case, judged: Any, grow_only: bool) -> None:
        response = respond(case, judged, self.duration, points=_MOVING_POINTS if grow_only else _POINTS)
        upper, *others = response.signals
        self.others = {signal.name: signal.label for signal in others}
        chosen = next((signal for signal in others if signal.name == self.lower), others[0])
        for strip, signal in zip(self.strips, (upper, chosen), strict=True):
            values = signal.values
            unit = signal.unit
            factor, shown_unit = to_display(1.0, unit, self.bench.units)
            strip.show(name, response.times, values * factor)
            if not grow_only:
                title = f"{signal.label} ({shown_unit})" if shown_unit else signal.label
                strip.plot.yaxis.axis_label = title
        if name == "now":
            floors = (None if case.kind == "reflex" else 0.0, None)
            grown = [strip.fit(grow_only, floor) for strip, floor in zip(self.strips, floors, strict=True)]
            self._mark_silences(response)
            self._mark_cycle(response, judged.linear_cycle_length if grow_only else judged.cycle_length)
            if any(grown) or not grow_only:
                self._mark_disturbance(case, response)

    def _mark_silences(self, response: Response) -> None:
        silences = response.trace.silences
        text = [f"{end - start:.0f} s" for start, end in silences]
        if len(silences) > _MOST_SILENCE_LABELS:
            text = [""] * len(silences)
        self.silences.data = {
            "start": [start for start, _ in silences],
            "end": [end for _, end in silences],
            "middle": [0.5 * (start + end) for start, end in silences],
            "text": text,
        }

    def _mark_cycle(self, response: Response, length: float | None) -> None:
        pair = cycle_bracket(response, length)
        top = self.strips[0].range.end
        if pair is None:
            self.bracket.data = {name: [] for name in self.bracket.data}
            return
        bottom = self.strips[0].range.start
        level, foot = bottom + 0.90 * (top - bottom), bottom + 0.86 * (top - bottom)
        seconds = pair[1] - pair[0]
        words = f"{seconds:.0f} s" if seconds >= 10.0 else f"{figures(seconds, 2)} s" if seconds >= 1.0 else f"{1000.0 * seconds:.0f} ms"
        self.bracket.data = {
            "x": [[pair[0], pair[0], pair[1], pair[1]]],
            "y": [[foot, level, level, foot]],
            "middle": [0.5 * (pair[0] + pair[1])],
            "top": [level],
            "text": [words],
        }

    def _mark_disturbance(self, case: Case, response: Response) -> None:
        words = ""
        if case.disturbance is not None and case.disturbance.size != 0.0:
            kind = DISTURBANCES[case.kind].get(case.disturbance.name)
            words = kind.label if kind is not None else case.disturbance.name
        for strip in self.strips:
            strip.mark.location = response.start_s
            strip.mark.visible = bool(words)
        self.mark_label.update(x=response.start_s, y=self.strips[0].range.end, text=words)

    def _draw_bar(self, case: Case) -> None:
        known = DISTURBANCES[case.kind]
        setting = case.disturbance
        chosen = setting.name if setting is not None else ""
        options = "".join(
            f'<option value="{name}"{" selected" if name == chosen else ""}>{escape(kind.label)}</option>' for name, kind in known.items()
        )
        unit = disturbance_units(case.kind).get(chosen, "")
        size = setting.size if setting is not None else 0.0
        shown, unit = to_display(size, unit, self.bench.units)
        below = "".join(
            f'<option value="{name}"{" selected" if name == self.lower else ""}>{escape(label)}</option>' for name, label in self.others.items()
        )
        lower = f'<label>Lower trace <select data-act="lower" aria-label="Lower trace">{below}</select></label>' if len(self.others) > 1 else ""
        refusal = self.bench.refusals.get("disturbance")
        said = f'<span class="refusal" role="alert">{escape(refusal)}</span>' if refusal else ""
        after = '<span class="line after"></span>with levers' if self.bench.judged.with_levers is not None else ""
        self.bar.show(
            '<div class="trace-bar"><label>Disturbance <select data-act="kind" aria-label="Disturbance">'
            f'{options}</select></label><input class="box" type="text" inputmode="decimal" data-act="size" value="{figures(shown)}"'
            f' aria-label="Size of the disturbance, {escape(unit)}"><span class="unit">{escape(unit)}</span>{lower}'
            f'<span class="lines"><span class="line now"></span>now<span class="line before"></span>start{after}</span>{said}</div>'
        )

    def _handle(self, request: Request) -> None:
        bench, case = self.bench, self.bench.case
        if request.act == "kind":
            kind = DISTURBANCES[case.kind][request.value]
            bench.attempt("disturbance", lambda: case.with_disturbance(kind.channel, kind.size))
        elif request.act == "lower":
            self.lower = request.value
            self.draw()
        elif request.act == "size" and case.disturbance is not None:
            bench.attempt("disturbance", lambda: self._sized(case, request.value))

    def _sized(self, case: Case, text: str) -> Case:
        assert case.disturbance is not None
        kind = DISTURBANCES[case.kind][case.disturbance.name]
        unit = disturbance_units(case.kind)[kind.channel]
        factor, shown_unit = to_display(1.0, unit, self.bench.units)
        rule = f"{kind.label} must be a number from 0 to {figures(kind.largest * factor)} {shown_unit}"
        try:
            size = float(text.strip().replace(",", ".").replace("−", "-")) / factor
        except ValueError:
            raise InvalidInputError(f"{rule}; got {text.strip()[:30]!r}.") from None
        if not 0.0 <= size <= kind.largest:
            raise InvalidInputError(f"{rule}; got {text.strip()[:30]}.")
        return case.with_disturbance(kind.channel, size)
