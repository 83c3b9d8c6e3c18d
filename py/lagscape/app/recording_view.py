"""The recording: the whole of it as one strip, a window with its cycles bracketed and numbered, and what they come to."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
import panel as pn
from bokeh.core.properties import value
from bokeh.events import DoubleTap, Tap
from bokeh.models import ColumnDataSource, CustomJS, FixedTicker, PanTool, Range1d, RangeTool, ResetTool, WheelZoomTool
from bokeh.plotting import figure

from lagscape.app.components.sheet import Request, Sheet
from lagscape.app.night_figure import NightFigure
from lagscape.app.palette import FONT, PALETTES, dress
from lagscape.app.recording_words import recording_summary
from lagscape.app.recording_work import READABLE_KINDS, RecordingWork
from lagscape.app.threshold_forms import with_threshold
from lagscape.app.time_axis import time_ticks
from lagscape.app.trace_view import SHOW_ALL
from lagscape.app.tremor_view import TremorState, TremorView
from lagscape.app.workbench import Workbench
from lagscape.errors import InvalidInputError
from lagscape.questions.fit import Fit
from lagscape.questions.fit_measured import RingDown
from lagscape.questions.lay import Laying, lay_measurement
from lagscape.questions.standing import judge
from lagscape.recordings import (
    BreathingMeasurement,
    Recording,
    Thresholds,
    overview,
)
from lagscape.recordings.recording import Signal
from lagscape.recordings.saturation_lag import SaturationLag

__all__ = ["RecordingView"]

_STRIP_BINS = 1200
_WINDOW_BINS = 1600
_FIRST_WINDOW_S = 300.0


class RecordingView:
    """Opens a recording, measures its cycles, and lays them on the case."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.recording: Recording | None = None
        self.drawn: Signal | None = None
        self.signal: Signal | None = None
        self.measurement: BreathingMeasurement | None = None
        self.laying: Laying | None = None
        self.fit: Fit | None = None
        self.ring_down: RingDown | None = None
        self.thresholds = Thresholds()
        self.lag: SaturationLag | None = None
        self.refusal = ""
        self._built = False
        self.work = RecordingWork(self)
        self.waiting: tuple[Any, str] | None = None
        self.tremor = TremorView(self)
        self._whole = Range1d(0.0, 1.0)
        self._shown = Range1d(0.0, 1.0)
        bench.listen("theme", self.dress)
        bench.listen("units", self.write)
        bench.page.on("open_recording", self.open)

    @cached_property
    def root(self) -> Any:
        """The view, built when it is first asked for: the start of the page does not wait for it."""
        self._breathing = self._build()
        self._built = True
        self.dress()
        self.write()
        self.tremor.root.visible = False
        return pn.Column(self._breathing, self.tremor.root, sizing_mode="stretch_width")

    @property
    def tremor_state(self) -> TremorState:
        """What the tremor view holds; it goes and comes with what this one holds."""
        return self.tremor.state

    @tremor_state.setter
    def tremor_state(self, state: TremorState) -> None:
        self.tremor.state = state

    def _show_kind(self) -> None:
        """Show the one of the two views that the channel is read for."""
        self._breathing.visible, self.tremor.root.visible = not self.tremor.is_on, self.tremor.is_on

    def _build(self) -> Any:
        empty: dict[str, list[float]] = {"time": [], "low": [], "high": []}
        self.strip_source, self.window_source = ColumnDataSource(dict(empty)), ColumnDataSource(dict(empty))
        self.envelope = ColumnDataSource({"time": [], "value": []})
        self.modelled = ColumnDataSource({"time": [], "value": []})
        self.cycles = ColumnDataSource({"start": [], "stop": [], "turn": [], "middle": [], "text": [], "alpha": []})
        self.masked = ColumnDataSource({"start": [], "stop": [], "text": []})
        border: dict[str, Any] = {"min_border_left": 60, "min_border_right": 54, "toolbar_location": None, "sizing_mode": "stretch_width"}
        self.strip = figure(height=110, x_range=self._whole, tools=[], min_border_bottom=30, y_range=Range1d(0.0, 1.0), **border)
        tool = RangeTool(x_range=self._shown)
        tool.overlay.fill_alpha = 0.18
        self.tool = tool
        self.strip.add_tools(tool)
        pan, wheel = PanTool(dimensions="width"), WheelZoomTool(dimensions="width")
        self.window = figure(
            height=380, x_range=self._shown, y_range=Range1d(0.0, 1.0), tools=[pan, wheel, ResetTool()], min_border_bottom=44, **border
        )
        self.window.toolbar.active_scroll = wheel
        self.lanes = Range1d(0.0, 1.0)
        self.window.extra_y_ranges = {"lane": self.lanes}
        self.strip_band = self.strip.varea("time", "low", "high", source=self.strip_source)
        self.strip_marks = self.strip.segment("start", "low", "stop", "low", source=self.cycles_on_strip(), line_width=4)
        self.window_band = self.window.varea("time", "low", "high", source=self.window_source)
        self.window_line = self.window.line("time", "high", source=self.window_source, line_width=1)
        self.envelope_line = self.window.line("time", "value", source=self.envelope, line_width=1.6, line_dash=[5, 3])
        self.modelled_line = self.window.line("time", "value", source=self.modelled, line_width=2.0, line_dash=[9, 4])
        lane = {"source": self.cycles, "y_range_name": "lane"}
        self.breathing = self.window.segment("start", 0.955, "turn", 0.955, line_width=7, line_alpha="alpha", **lane)
        self.silent = self.window.segment("turn", 0.955, "stop", 0.955, line_width=2, line_alpha="alpha", **lane)
        self.edges = self.window.segment("start", 0.93, "start", 0.98, line_width=1.2, **lane)
        self.numbers = self.window.text(
            "middle", 0.90, "text", text_align="center", text_baseline="middle", text_font=value(FONT), text_font_size="12px", **lane
        )
        self.covers = self.window.hbar(
            y=0.45, left="start", right="stop", height=0.88, source=self.masked, y_range_name="lane", fill_alpha=0.08, hatch_pattern="x",
            hatch_alpha=0.35, line_alpha=0.0,
        )  # fmt: skip
        self.night = NightFigure(self._whole, border, self.window)
        for item in (self.strip, self.night.plot, self.window):
            item.xaxis.ticker = FixedTicker(ticks=[])
            item.yaxis.ticker.desired_num_ticks = 3
        self.strip.yaxis.visible = False
        self.window.xaxis.axis_label = "Time in the recording (min:s)"
        self.window.on_event(Tap, self._tapped)
        self.window.js_on_event(DoubleTap, CustomJS(args={"time": self._shown}, code=SHOW_ALL))
        self._shown.on_change("end", self._window_moved)
        self.head, self.side = Sheet(self.handle), Sheet(self.handle)
        drawn = pn.Column(
            self.head,
            pn.pane.Bokeh(self.strip, sizing_mode="stretch_width"),
            pn.pane.Bokeh(self.night.plot, sizing_mode="stretch_width"),
            pn.pane.Bokeh(self.night.breaths.plot, sizing_mode="stretch_width"),
            pn.pane.Bokeh(self.window, sizing_mode="stretch_width"),
            styles={"flex": "3 1 480px", "min-width": "0", "width": "auto"},
        )
        self.side.styles = {"flex": "1 1 310px", "min-width": "0", "width": "auto"}
        return pn.FlexBox(drawn, self.side, gap="20px", align_items="flex-start", sizing_mode="stretch_width")

    def cycles_on_strip(self) -> ColumnDataSource:
        self.strip_cycles = ColumnDataSource({"start": [], "stop": [], "low": []})
        return self.strip_cycles

    def dress(self) -> None:
        if not self._built:
            return
        self.tremor.dress()
        palette = PALETTES[self.bench.theme]
        for item in (self.strip, self.window):
            dress(item, palette)
        self.night.dress(palette)
        for band in (self.strip_band, self.window_band):
            band.glyph.fill_color = palette.quiet
            band.glyph.fill_alpha = 0.55
        self.window_line.glyph.line_color = palette.quiet
        self.strip_marks.glyph.line_color = palette.inside
        self.envelope_line.glyph.line_color = palette.inside
        self.modelled_line.glyph.line_color = palette.outside
        self.breathing.glyph.line_color = palette.inside
        self.silent.glyph.line_color = palette.outside
        self.edges.glyph.line_color = palette.ink
        self.numbers.glyph.text_color = palette.ink
        self.covers.glyph.fill_color = self.covers.glyph.hatch_color = palette.outside
        self.tool.overlay.fill_color = palette.inside
        self.tool.overlay.line_color = palette.inside

    async def open(self, payload: Any) -> None:
        """Read a file that the user chose or dropped, and measure its likeliest channel."""
        _ = self.root
        self.bench.page.send("show", {"view": "recording", "open": True})
        await self.work.open(payload["file"], payload["name"])

    def take(self, recording: Recording) -> None:
        """A file was opened: its channels are listed; what was drawn of the one before goes."""
        self.recording, self.signal = recording, self.likeliest(recording)
        self.measurement = self.lag = self.laying = self.fit = self.ring_down = self.waiting = None
        self.refusal = ""
        self.tremor.take(recording)
        self.draw_signal(empty=True)

    def likeliest(self, recording: Recording | None = None) -> Signal:
        """The channel that most looks like breathing; the first where none does."""
        recording = recording or self.recording
        assert recording is not None
        return (recording.of_kind(*READABLE_KINDS) or recording.signals)[0]

    def show_measured(self, signal: Signal, measurement: BreathingMeasurement | None, lag: SaturationLag | None, refusal: str) -> None:
        """A channel was measured, or refused with a sentence."""
        self.signal, self.measurement, self.lag, self.refusal = signal, measurement, lag, refusal
        self.laying = self.fit = self.ring_down = None
        self.draw_signal()

    def show_fit(self) -> None:
        """A fit came to something."""
        self._draw_window()
        self.write()

    def draw_signal(self, empty: bool = False) -> None:
        """Draw the channel and what was measured in it; nothing for none, or for one that is not read yet."""
        self._show_kind()
        if self.tremor.is_on:
            self.write()
            return
        self.tremor.forget()
        drawn = None if empty else self.signal
        if drawn is not self.drawn:
            self.drawn = drawn
            self._draw_strip()
        self._draw_cycles()
        self.night.draw(self.measurement)
        self._draw_window()
        self.write()

    def _draw_strip(self) -> None:
        """The whole of a channel, and its first minutes in the window."""
        if self.drawn is None:
            for source in (self.strip_source, self.window_source, self.envelope, self.modelled):
                source.data = {name: [] for name in source.data}
            return
        start, stop = self.drawn.segments[0].start_s, self.drawn.segments[-1].stop_s
        band = _band(overview(self.drawn, _STRIP_BINS))
        self.strip_source.data = band
        low, high = float(np.nanmin(band["low"])), float(np.nanmax(band["high"]))
        self.strip.y_range.update(start=low - 0.1 * (high - low), end=high + 0.05 * (high - low))
        self._whole.update(start=start, end=stop)
        self._shown.update(start=start, end=min(stop, start + _FIRST_WINDOW_S), reset_start=start, reset_end=stop)
        for item, span in ((self.strip, stop - start), (self.window, min(stop - start, _FIRST_WINDOW_S))):
            time_ticks(item, start, start + span)

    def refuse(self, sentence: str) -> None:
        """Say why something was not done; what there was stays."""
        self.refusal = sentence
        self.write()

    def write(self) -> None:
        """Rewrite the head and the side from what is known now."""
        if not self._built:
            return
        if self.bench.measurement is not self.measurement:
            self.bench.measurement = self.measurement
            self.bench.tell("recording")
        if self.tremor.is_on:
            self.tremor.draw()
            return
        head, side = recording_summary(self)
        self.head.show(head)
        self.side.show(side)

    def _draw_cycles(self) -> None:
        measurement = self.measurement
        cycles = () if measurement is None else measurement.cycles
        self.cycles.data = {
            "start": [cycle.start_s for cycle in cycles],
            "stop": [cycle.stop_s for cycle in cycles],
            "turn": [cycle.ventilation_end_s for cycle in cycles],
            "middle": [0.5 * (cycle.start_s + cycle.stop_s) for cycle in cycles],
            "text": [f"{cycle.number}" if not cycle.excluded else f"({cycle.number})" for cycle in cycles],
            "alpha": [0.3 if cycle.excluded else 1.0 for cycle in cycles],
        }
        low = float(np.nanmin(self.strip_source.data["low"])) if len(self.strip_source.data["low"]) else 0.0
        used = [cycle for cycle in cycles if not cycle.excluded]
        self.strip_cycles.data = {
            "start": [cycle.start_s for cycle in used], "stop": [cycle.stop_s for cycle in used], "low": [low] * len(used),
        }  # fmt: skip
        masked = () if measurement is None else measurement.masked
        self.masked.data = {
            "start": [item.start_s for item in masked], "stop": [item.stop_s for item in masked], "text": [item.reason for item in masked],
        }  # fmt: skip

    def _draw_window(self) -> None:
        if self.drawn is None:
            return
        start, stop = float(self._shown.start), float(self._shown.end)
        first, last = self.drawn.segments[0].start_s, self.drawn.segments[-1].stop_s
        start, stop = max(first, start), min(last, stop)
        if stop <= start:
            return
        bins = max(8, min(_WINDOW_BINS, int((stop - start) * self.drawn.sampling_frequency_hz)))
        self.window_source.data = _band(overview(self.drawn, bins, window=(start, stop)))
        times: list[Any] = [np.empty(0)]
        values: list[Any] = [np.empty(0)]
        if self.measurement is not None:
            for envelope in self.measurement.envelopes:
                inside = (envelope.times_s >= start) & (envelope.times_s <= stop)
                times.extend((envelope.times_s[inside], [np.nan]))
                values.extend((envelope.values[inside], [np.nan]))
        time, value = np.concatenate(times), np.concatenate(values)
        band = self.window_source.data
        middle = float(np.nanmedian(np.asarray(band["low"]))) if len(band["low"]) else 0.0
        if self.drawn.kind == "ventilation":
            middle = 0.0
        self.envelope.data = {"time": time, "value": value + middle}
        self._draw_model(middle)
        high, low = np.nanmax(band["high"]), np.nanmin(band["low"])
        self.window.y_range.update(start=float(low - 0.05 * (high - low)), end=float(high + 0.22 * (high - low)))
        time_ticks(self.window, start, stop)

    def _draw_model(self, middle: float) -> None:
        """The fitted loop's ventilation over each cycle from its onset, as high as the recording's cycles are in the middle."""
        model = None if self.fit is None else judge(self.fit.case).cycle
        if model is None or self.measurement is None or model.output is None or model.times is None:
            self.modelled.data = {"time": [], "value": []}
            return
        # The drawn period begins where ventilation begins, as the recording's cycles do.
        first = int(np.argmax((model.output[1:] > 0.05 * model.output.max()) & (model.output[:-1] <= 0.05 * model.output.max())))
        shape = np.roll(model.output[:-1], -first) / model.output.max()
        used = self.measurement.used
        height = float(np.median([cycle.peak for cycle in used]))
        times = np.concatenate([np.append(cycle.start_s + model.times[:-1], np.nan) for cycle in used])
        self.modelled.data = {"time": times, "value": middle + height * np.tile(np.append(shape, np.nan), len(used))}

    def _window_moved(self, _attribute: str, _old: float, _new: float) -> None:
        self._draw_window()
        self.write()

    def shown_window(self) -> tuple[float, float]:
        """Start and end of the window that is shown, s."""
        return float(self._shown.start), float(self._shown.end)

    def _tapped(self, event: Any) -> None:
        if self.measurement is None or event.x is None:
            return
        for cycle in self.measurement.cycles:
            if cycle.start_s <= event.x < cycle.stop_s:
                self._toggle(cycle.number)
                return

    def _toggle(self, number: int, use: bool | None = None) -> None:
        assert self.measurement is not None
        out = {cycle.number for cycle in self.measurement.cycles if cycle.excluded}
        if (number in out) if use is None else use:
            out.discard(number)
        else:
            out.add(number)
        self.measurement = self.measurement.without(out)
        self.laying = self.fit = None
        self._draw_cycles()
        self.night.draw(self.measurement)
        self.write()

    def handle(self, request: Request) -> None:
        bench, begin = self.bench, self.work.place.start
        if request.act == "channel":
            begin(self.work.choose(request.value))
        elif request.act == "read-as":
            begin(self.work.choose(self.tremor.chosen or (self.signal.name if self.signal else ""), request.value))
        elif request.act == "measure-window":
            begin(self.work.measure(self.shown_window()))
        elif request.act == "measure-whole":
            begin(self.work.measure(None))
        elif request.act == "use":
            self._toggle(int(request.key), request.value == "true")
        elif request.act == "go":
            middle, half = float(request.key), 0.5 * (float(self._shown.end) - float(self._shown.start))
            self._shown.update(start=middle - half, end=middle + half)
        elif request.act == "rate" and self.waiting is not None:
            self._read_with_rate(request.value)
        elif request.act == "prepare":
            self._prepare()
        elif request.act == "fit":
            begin(self.work.fit())
        elif request.act in ("threshold", "usual-thresholds") and request.event != "escape":
            self._set_thresholds(request)
        elif request.act == "quiet":
            begin(self.work.fit_quiet())
        elif request.act == "drop-fit":
            self.fit = None
            self._draw_window()
            self.write()
        elif request.act == "take-fit" and self.fit is not None:
            taken, self.fit = self.fit, None
            bench.begin(taken.case)
            bench.page.send("show", {"view": "recording", "open": False})
            bench.page.send("say", {"place": "case", "text": "The fitted loop is the case. Undo goes back.", "tone": "note"})
            self._draw_window()
            self.write()
        elif request.act == "cancel":
            self.laying = None
            self.write()
        elif request.act == "lay" and self.laying is not None:
            laid, self.laying = self.laying, None
            bench.begin(laid.case)
            bench.page.send("show", {"view": "recording", "open": False})
            bench.page.send("say", {"place": "case", "text": "The measured numbers are on the case. Undo takes them off.", "tone": "note"})
            self.write()

    def _set_thresholds(self, request: Request) -> None:
        try:
            usual = request.act == "usual-thresholds"
            thresholds = Thresholds() if usual else with_threshold(self.thresholds, request.key, request.value)
        except InvalidInputError as problem:
            self.refuse(str(problem))
            return
        window = self.measurement.window if self.measurement is not None else None
        self.work.place.start(self.work.measure(window, thresholds))

    def _read_with_rate(self, text: str) -> None:
        assert self.waiting is not None
        file, name = self.waiting
        try:
            rate = float(text.strip().replace(",", "."))
            if not 0.0 < rate < 1e6:
                raise ValueError
        except ValueError:
            self.refuse(f"The sampling rate must be a positive number of samples a second; got {text.strip()[:30]!r}.")
            return
        self.work.place.start(self.work.open(file, name, rate))

    def _prepare(self) -> None:
        assert self.measurement is not None
        try:
            self.laying = lay_measurement(self.bench.case, self.measurement.cycle_length_s, self.measurement.loop_gain)
            self.refusal = ""
        except InvalidInputError as problem:
            self.refusal = str(problem)
        self.write()


def _band(whole: Any) -> dict[str, Any]:
    middle = 0.5 * (whole.edges_s[1:] + whole.edges_s[:-1])
    return {"time": middle, "low": whole.lowest, "high": whole.highest}
