"""The boundary map: delay across, sensitivity up, the case as a dot that is dragged or moved by the arrow keys."""

from __future__ import annotations

from typing import Any

import numpy as np
import panel as pn
from bokeh.core.properties import value
from bokeh.events import MouseLeave, MouseMove, Pan, PanEnd, PanStart, Press, PressUp, Tap
from bokeh.models import Arrow, ColumnDataSource, CustomJS, CustomJSTickFormatter, Label, NormalHead, Range1d
from bokeh.plotting import figure

from lagscape.app.components.sheet import Sheet
from lagscape.app.palette import FONT, PALETTES, dress
from lagscape.app.workbench import Workbench
from lagscape.quantities import figure as figures
from lagscape.quantities import quantity, to_display
from lagscape.questions.boundary_map import BoundaryMap, cycle_contours, map_of, standing_point, window_of
from lagscape.questions.standing import judge
from lagscape.questions.wording import cycle_words, seconds_words

__all__ = ["MapView"]

_FOLLOW_POINTER = """
const {start, end} = x, across = Math.min(end, Math.max(start, cb_obj.x))
const up = Math.min(y.end, Math.max(y.start, cb_obj.y))
dot.setv({data: {delay: [across], sensitivity: [up]}}, {sync: false})
"""
"""Runs in the page, so that the dot is under the pointer before Python has answered; the event itself tells Python where it is."""

_STEP = {"fine": 0.01, "coarse": 0.10}

_UNDER_HAND = "overlay"
"""Level of what follows the hand: a canvas of its own, so that boundary, contours and axes need not be painted anew."""

_REACH = ("from_delay", "from_sensitivity", "to_delay", "to_sensitivity", "words_delay", "words_sensitivity", "words", "align", "right", "down")
"""Columns of the arrows to the boundary: both ends, where the words stand, their alignment and their distance from there in px."""


class MapView:
    """The map of one case. Its window is set by where the case started and stays while the dot moves."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.delay, self.sensitivity = Range1d(0.0, 1.0), Range1d(0.0, 1.0)
        self.plot = figure(
            x_range=self.delay, y_range=self.sensitivity, tools=[], toolbar_location=None, sizing_mode="stretch_both",
            min_border_left=70, min_border_right=14, min_border_top=8, min_border_bottom=46,
        )  # fmt: skip
        one: dict[str, list[float]] = {"delay": [], "sensitivity": []}
        self.edge = ColumnDataSource({"delay": [], "critical": [], "top": []})
        self.contours = ColumnDataSource({"delay": [], "sensitivity": []})
        self.contour_texts = ColumnDataSource({"delay": [], "sensitivity": [], "text": []})
        self.dot, self.hollow, self.diamond = (ColumnDataSource(dict(one)) for _ in range(3))
        self.reach = ColumnDataSource({name: [] for name in _REACH})
        plot = self.plot
        self.outside = plot.varea("delay", "critical", "top", source=self.edge, fill_alpha=0.10, hatch_pattern="/", hatch_scale=16, hatch_weight=0.8)
        self.inside = plot.varea("delay", 0, "critical", source=self.edge, fill_alpha=0.06)
        self.contour_lines = plot.multi_line("delay", "sensitivity", source=self.contours, line_width=0.8, line_alpha=0.8)
        self.contour_words = plot.text(
            "delay", "sensitivity", "text", source=self.contour_texts, text_font=value(FONT), text_font_size="11px", text_align="center",
            text_baseline="middle",
        )  # fmt: skip
        self.edge_line = plot.line("delay", "critical", source=self.edge, line_width=2.6)
        text = {"text_font": FONT, "text_font_size": "12px"}
        self.arrows = Arrow(
            end=NormalHead(size=7), x_start="from_delay", y_start="from_sensitivity", x_end="to_delay", y_end="to_sensitivity",
            source=self.reach, level=_UNDER_HAND,
        )  # fmt: skip
        self.lever = Arrow(end=NormalHead(size=9), x_start=0, x_end=0, y_start=0, y_end=0, visible=False, level=_UNDER_HAND)
        self.hunts_words = Label(x=0, y=0, text="hunts", text_align="right", text_baseline="top", x_offset=-8, y_offset=-6, **text)
        self.quiet_words = Label(x=0, y=0, text="settles or rings", text_align="left", x_offset=8, y_offset=6, **text)
        for item in (self.arrows, self.lever, self.hunts_words, self.quiet_words):
            plot.add_layout(item)
        self.hollow_mark = plot.scatter("delay", "sensitivity", source=self.hollow, size=13, fill_alpha=0.0, line_width=2)
        self.diamond_mark = plot.scatter("delay", "sensitivity", source=self.diamond, size=16, marker="diamond")
        self.dot_mark = plot.scatter("delay", "sensitivity", source=self.dot, size=17, line_width=2, level=_UNDER_HAND, name="dot")
        self.reach_words = plot.text(
            "words_delay", "words_sensitivity", "words", source=self.reach, text_align="align", x_offset="right", y_offset="down",
            text_baseline="middle", text_font=value(FONT), text_font_size="12px", background_fill_alpha=0.8, level=_UNDER_HAND,
        )  # fmt: skip
        for event in (PanStart, Pan):
            plot.js_on_event(event, CustomJS(args={"dot": self.dot, "x": self.delay, "y": self.sensitivity}, code=_FOLLOW_POINTER))
            plot.on_event(event, self._dragged)
        plot.on_event(PanEnd, self._dropped)
        # A finger or button held still for a moment is a press to Bokeh, and no pan follows: the moves that come are taken as the drag.
        plot.on_event(Press, self._pressed)
        plot.on_event(PressUp, self._dropped)
        plot.on_event(Tap, self._tapped)
        plot.on_event(MouseMove, self._hovered)
        plot.on_event(MouseLeave, self._left)
        self.readout = Sheet()
        self.root = pn.Column(pn.pane.Bokeh(plot, sizing_mode="stretch_both", min_height=220), self.readout, sizing_mode="stretch_both")
        self.ticks = CustomJSTickFormatter(args={"factor": 1.0}, code="return String(parseFloat((tick * factor).toPrecision(3)))")
        plot.yaxis.formatter = self.ticks
        self._shape: Any = None
        self._map: BoundaryMap | None = None
        self._held = self._pressing = False
        self._contours_due = False
        bench.listen("moving", self.follow)
        bench.listen("settled", self.draw)
        bench.listen("units", self.draw)
        bench.listen("theme", self.dress)
        bench.page.on("nudge", self._nudge)
        self.dress()
        self.draw()

    def dress(self) -> None:
        palette = PALETTES[self.bench.theme]
        dress(self.plot, palette)
        for glyph in (self.outside.glyph,):
            glyph.fill_color = glyph.hatch_color = palette.outside
            glyph.hatch_alpha = 0.3
        self.inside.glyph.fill_color = palette.inside
        self.edge_line.glyph.line_color = palette.ink
        self.contour_lines.glyph.line_color = palette.quiet
        self.contour_words.glyph.text_color = palette.quiet
        for arrow in (self.arrows, self.lever):
            arrow.line_color = palette.ink
            arrow.end.fill_color = arrow.end.line_color = palette.ink
        self.reach_words.glyph.text_color = palette.ink
        self.reach_words.glyph.background_fill_color = palette.paper
        self.hunts_words.text_color = palette.outside
        self.quiet_words.text_color = palette.inside
        self.hollow_mark.glyph.line_color = palette.ink
        self.diamond_mark.glyph.fill_color = palette.inside
        self.diamond_mark.glyph.line_color = palette.paper
        self.dot_mark.glyph.fill_color = palette.ink
        self.dot_mark.glyph.line_color = palette.paper

    def draw(self) -> None:
        """Redraw all; the boundary and the contours only where the loop's shape changed."""
        case = self.bench.case
        window = window_of(case)
        shape = (case.moved_to(window.middle_sensitivity, window.middle_delay).loop(), window)
        if shape != self._shape:
            self._shape = shape
            self._map = map_of(case, window)
            self._draw_boundary(self._map)
            self.contours.data = {"delay": [], "sensitivity": []}
            self.contour_texts.data = {"delay": [], "sensitivity": [], "text": []}
            self._contours_due = True
        if self._contours_due:
            self.bench.when_rested(self._draw_contours)
        loop = case.loop()
        unit = to_display(1.0, loop.sensitivity_unit, self.bench.units)[1]
        self.plot.yaxis.axis_label = f"{loop.sensitivity_name} ({unit})" if unit else loop.sensitivity_name
        self.plot.xaxis.axis_label = f"{loop.delay_name} (s)"
        self._tick_units(loop.sensitivity_unit)
        start = self.bench.start.judgement.loop
        self.hollow.data = {"delay": [float(start.delay)], "sensitivity": [float(start.sensitivity)]}
        self._draw_levers()
        self._say("")
        self.follow(settled=True)

    def follow(self, settled: bool = False) -> None:
        """Redraw what follows the hand: the dot and its two arrows."""
        judged = self.bench.judged.judgement
        delay, sensitivity = float(judged.loop.delay), float(judged.loop.sensitivity)
        if settled:
            # Where the page moved the dot is not known here: it is put in its place even if nothing changed on this side.
            self.dot.data = {"delay": [], "sensitivity": []}
        if settled or self._pressing or not self._held:
            self.dot.data = {"delay": [delay], "sensitivity": [sensitivity]}
        found, rows = judged.margins, []
        rises = found.gain_margin is not None and found.gain_margin > 1.0
        if found.gain_margin is not None:
            top = _between(sensitivity * found.gain_margin, self.sensitivity)
            rows.append((delay, sensitivity, delay, top, delay, 0.5 * (sensitivity + top), _share_words(found.gain_margin - 1.0), "left", 7, 0))
        if found.delay_margin_s is not None:
            end = _between(delay + found.delay_margin_s, self.delay)
            middle = _between(0.5 * (delay + end), self.delay, 0.13)
            # On the other side of the line than the upright arrow, so that the two never write over each other.
            side = 13 if rises else -13
            rows.append((delay, sensitivity, end, sensitivity, middle, sensitivity, _delay_words(found.delay_margin_s), "center", 0, side))
        # One source for both arrows and their words: one change to send, however much of it moved.
        self.reach.data = {name: [row[place] for row in rows] for place, name in enumerate(_REACH)}

    def _draw_boundary(self, drawn: BoundaryMap) -> None:
        window = drawn.window
        self.delay.update(start=window.delay_low, end=window.delay_high)
        self.sensitivity.update(start=window.sensitivity_low, end=window.sensitivity_high)
        top = np.full_like(drawn.delays, window.sensitivity_high)
        self.edge.data = {"delay": drawn.delays, "critical": np.minimum(drawn.critical, 2.0 * top), "top": 2.0 * top}
        self.hunts_words.update(x=window.delay_high, y=window.sensitivity_high)
        self.quiet_words.update(x=window.delay_low, y=window.sensitivity_low)

    def _draw_contours(self) -> None:
        """The contours take longer than a frame: they come when the hand has rested."""
        _, window = self._shape
        self._contours_due = False
        lines = cycle_contours(self.bench.case, window)
        self.contours.data = {"delay": [line.delays for line in lines], "sensitivity": [line.sensitivities for line in lines]}
        self.contour_texts.data = {
            "delay": [line.label_at[0] for line in lines],
            "sensitivity": [line.label_at[1] for line in lines],
            "text": [seconds_words(line.period) if line.period >= 1.0 else f"{1000.0 * line.period:.0f} ms" for line in lines],
        }

    def _draw_levers(self) -> None:
        changed = self.bench.judged.with_levers
        if changed is None or self._map is None:
            self.diamond.data = {"delay": [], "sensitivity": []}
            self.lever.visible = False
            return
        now = self.bench.judged.judgement
        point = standing_point(self._map, changed)
        self.diamond.data = {"delay": [point[0]], "sensitivity": [point[1]]}
        self.lever.update(
            x_start=float(now.loop.delay), y_start=float(now.loop.sensitivity), x_end=point[0], y_end=point[1], visible=True
        )

    def _tick_units(self, unit: str) -> None:
        factor, _ = to_display(1.0, unit, self.bench.units)
        if self.ticks.args["factor"] != factor:
            self.ticks.args = {"factor": factor}

    def _clamped(self, event: Any) -> tuple[float, float] | None:
        if event.x is None or event.y is None:
            return None
        low, high = self.delay, self.sensitivity
        x = min(max(float(event.x), low.start + 1e-3 * (low.end - low.start)), low.end)
        y = min(max(float(event.y), high.start + 1e-3 * (high.end - high.start)), high.end)
        return x, y

    def _dragged(self, event: Any) -> None:
        point = self._clamped(event)
        if point is None:
            return
        self._held = True
        case = self.bench.case
        self.bench.attempt("map", lambda: case.moved_to(sensitivity=point[1], delay=point[0]), moving=True)

    def _pressed(self, _event: Any) -> None:
        self._pressing = True

    def _dropped(self, _event: Any) -> None:
        self._held = self._pressing = False
        self.bench.settle()

    def _tapped(self, event: Any) -> None:
        self.bench.page.send("focus", {"place": "slot-map"})

    def _hovered(self, event: Any) -> None:
        if self._pressing:
            self._dragged(event)
            return
        point = self._clamped(event)
        if point is None or self._held:
            return
        case = self.bench.case.moved_to(sensitivity=point[1], delay=point[0])
        judged = judge(case)
        loop = judged.loop
        gain = judged.margins.loop_gain
        cycle = f", cycle {cycle_words(judged)}" if judged.linear_cycle_length else ""
        self._say(
            f"Here, {quantity(float(loop.sensitivity), loop.sensitivity_unit, self.bench.units)} and {figures(float(loop.delay))} s: "
            f"{judged.standing}, loop gain {figures(gain)}{cycle}"
        )

    def _left(self, _event: Any) -> None:
        self._say("")

    def _say(self, words: str) -> None:
        hint = "Drag the dot, or use the arrow keys (Shift: larger). Thin lines: cycle length."
        self.readout.show(f'<p class="readout">{words or hint}</p>')

    def _nudge(self, payload: Any) -> None:
        """Arrow keys on the map: 1 % of the number each, with Shift 10 %."""
        step = _STEP["coarse" if payload["large"] else "fine"]
        case, loop = self.bench.case, self.bench.case.loop()
        across, up = (1.0 + step) ** payload["right"], (1.0 + step) ** payload["up"]
        sensitivity = float(loop.sensitivity) * up if payload["up"] else None
        delay = float(loop.delay) * across if payload["right"] else None
        self.bench.attempt("map", lambda: case.moved_to(sensitivity=sensitivity, delay=delay))


def _between(number: float, window: Range1d, inset: float = 0.0) -> float:
    """The number, kept inside the window less a share of it on both sides."""
    kept = inset * (window.end - window.start)
    return float(min(max(number, window.start + kept), window.end - kept))


def _share_words(change: float) -> str:
    if change < 0.0:
        return f"{-100.0 * change:.0f} % less sensitivity"
    return f"{100.0 * change:.0f} % more sensitivity" if change < 9.0 else f"{change + 1.0:.0f} times the sensitivity"


def _delay_words(delay: float) -> str:
    size = abs(delay)
    many = seconds_words(size) if size >= 1.0 else f"{figures(size, 2)} s" if size >= 0.1 else f"{1000.0 * size:.0f} ms"
    return f"{many} {'less' if delay < 0.0 else 'more'} delay"
