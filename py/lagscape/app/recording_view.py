"""The recording: the whole of it as one strip, a window with its cycles bracketed and numbered, and what they come to."""

from __future__ import annotations

import asyncio
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
from lagscape.app.scipy_loader import ensure_scipy
from lagscape.app.threshold_forms import with_threshold
from lagscape.app.trace_view import SHOW_ALL
from lagscape.app.workbench import Workbench
from lagscape.errors import InvalidInputError, RecordingError
from lagscape.questions.fit import Fit, fit_recording
from lagscape.questions.fit_measured import Measured, RingDown, measured_from
from lagscape.questions.fit_ring_down import ring_down_after_events, ring_down_from_variability
from lagscape.questions.lay import Laying, lay_measurement
from lagscape.questions.standing import judge
from lagscape.recordings import (
    BreathingMeasurement,
    Recording,
    Thresholds,
    measure_breathing,
    measure_saturation_lag,
    overview,
    read_recording,
    with_derived_channels,
)
from lagscape.recordings.recording import Signal
from lagscape.recordings.saturation_lag import SaturationLag

__all__ = ["RecordingView"]

_STRIP_BINS = 1200
_WINDOW_BINS = 1600
_FIRST_WINDOW_S = 300.0
_SHOW_FIRST_S = 0.05
_SIGH = 2.0
"""A breath this many times the usual one is taken for a sigh (common practice, no source)."""
_READABLE_KINDS = ("ventilation", "airflow", "effort")


class RecordingView:
    """Opens a recording, measures its cycles, and lays them on the case."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.recording: Recording | None = None
        self.signal: Signal | None = None
        self.measurement: BreathingMeasurement | None = None
        self.laying: Laying | None = None
        self.fit: Fit | None = None
        self.ring_down: RingDown | None = None
        self.thresholds = Thresholds()
        self.lag: SaturationLag | None = None
        self.refusal = ""
        self._built = False
        self._waiting: tuple[Any, str] | None = None
        self._whole = Range1d(0.0, 1.0)
        self._shown = Range1d(0.0, 1.0)
        bench.listen("theme", self.dress)
        bench.listen("units", self.write)
        bench.page.on("open_recording", self.open)

    @cached_property
    def root(self) -> Any:
        """The view, built when it is first asked for: the start of the page does not wait for it."""
        drawn = self._build()
        self._built = True
        self.dress()
        self.write()
        return drawn

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
        self.head, self.side = Sheet(self._handle), Sheet(self._handle)
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
        page = self.bench.page
        self.refusal, self.laying, self.fit, self.ring_down = "", None, None, None
        _ = self.root
        page.send("show", {"view": "recording", "open": True})
        page.send("working", {"text": f"reading {payload['name']}"})
        try:
            await ensure_scipy()
            if self._read(payload["file"], payload["name"], None):
                # The channels are on the screen before the measuring, which may take seconds, begins.
                await asyncio.sleep(_SHOW_FIRST_S)
                page.send("working", {"text": f"measuring {payload['name']}"})
                self._choose(self._likeliest())
        except ImportError as problem:
            self._refuse(str(problem))
        finally:
            page.send("working", {"text": ""})

    def _read(self, file: Any, name: str, rate: float | None) -> bool:
        """Read the file and show its channels; False where it was refused."""
        page = self.bench.page
        last = [-1]

        def progress(done: int, total: int | None) -> bool:
            share = 100 * done // total if total else -1
            if share != last[0]:
                last[0] = share
                page.send("working", {"text": f"reading {name}, {share} %" if share >= 0 else f"reading {name}"})
            return True

        try:
            recording = read_recording(file, name=name, sampling_frequency_hz=rate, progress=progress)
        except RecordingError as problem:
            self._waiting = (file, name)
            self._refuse(str(problem))
            return False
        self._waiting, self.measurement = None, None
        self.recording = with_derived_channels(recording)
        self.signal = self.recording.signal(self._likeliest())
        self.write()
        return True

    def _likeliest(self) -> str:
        """The channel that most looks like breathing; the first where none does."""
        assert self.recording is not None
        return (self.recording.of_kind(*_READABLE_KINDS) or self.recording.signals)[0].name

    def _choose(self, name: str) -> None:
        assert self.recording is not None
        self.signal = self.recording.signal(name)
        start, stop = self.signal.segments[0].start_s, self.signal.segments[-1].stop_s
        whole = overview(self.signal, _STRIP_BINS)
        band = _band(whole)
        self.strip_source.data = band
        low, high = float(np.nanmin(band["low"])), float(np.nanmax(band["high"]))
        self.strip.y_range.update(start=low - 0.1 * (high - low), end=high + 0.05 * (high - low))
        self._whole.update(start=start, end=stop)
        self._shown.update(start=start, end=min(stop, start + _FIRST_WINDOW_S), reset_start=start, reset_end=stop)
        for item, span in ((self.strip, stop - start), (self.window, min(stop - start, _FIRST_WINDOW_S))):
            _time_ticks(item, start, start + span)
        self._measure(None)

    def _measure(self, window: tuple[float, float] | None) -> None:
        assert self.recording is not None and self.signal is not None
        self.refusal, self.laying, self.fit, self.ring_down = "", None, None, None
        kind = self.signal.kind if self.signal.kind in _READABLE_KINDS else "effort"
        try:
            self.measurement = measure_breathing(
                self.recording, self.signal.name, window=window, kind=kind, thresholds=self.thresholds
            )
            self.lag = self._saturation()
        except (RecordingError, InvalidInputError) as problem:
            self.measurement = None
            self.refusal = str(problem)
        self._draw_cycles()
        self.night.draw(self.measurement)
        self._draw_window()
        self.write()

    def _saturation(self) -> SaturationLag | None:
        """How far the oximeter lags, where the recording has one and the cycles have apnoeas."""
        assert self.recording is not None and self.measurement is not None
        if not self.recording.of_kind("SpO2") or self.measurement.duty_ratio is None:
            return None
        return measure_saturation_lag(self.recording, self.measurement)

    def _refuse(self, sentence: str) -> None:
        self.refusal = sentence
        self.write()

    def write(self) -> None:
        """Rewrite the head and the side from what is known now."""
        if not self._built:
            return
        if self.bench.measurement is not self.measurement:
            self.bench.measurement = self.measurement
            self.bench.tell("recording")
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
        if self.signal is None:
            return
        start, stop = float(self._shown.start), float(self._shown.end)
        first, last = self.signal.segments[0].start_s, self.signal.segments[-1].stop_s
        start, stop = max(first, start), min(last, stop)
        if stop <= start:
            return
        bins = max(8, min(_WINDOW_BINS, int((stop - start) * self.signal.sampling_frequency_hz)))
        self.window_source.data = _band(overview(self.signal, bins, window=(start, stop)))
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
        if self.signal.kind == "ventilation":
            middle = 0.0
        self.envelope.data = {"time": time, "value": value + middle}
        self._draw_model(middle)
        high, low = np.nanmax(band["high"]), np.nanmin(band["low"])
        self.window.y_range.update(start=float(low - 0.05 * (high - low)), end=float(high + 0.22 * (high - low)))
        _time_ticks(self.window, start, stop)

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

    def _handle(self, request: Request) -> None:
        bench = self.bench
        if request.act == "channel":
            self._choose(request.value)
        elif request.act == "measure-window":
            self._measure(self.shown_window())
        elif request.act == "measure-whole":
            self._measure(None)
        elif request.act == "use":
            self._toggle(int(request.key), request.value == "true")
        elif request.act == "go":
            middle, half = float(request.key), 0.5 * (float(self._shown.end) - float(self._shown.start))
            self._shown.update(start=middle - half, end=middle + half)
        elif request.act == "rate" and self._waiting is not None:
            self._read_with_rate(request.value)
        elif request.act == "prepare":
            self._prepare()
        elif request.act == "fit":
            self._fit()
        elif request.act in ("threshold", "usual-thresholds") and request.event != "escape":
            self._set_thresholds(request)
        elif request.act == "quiet":
            self._fit_quiet()
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
            self.thresholds = Thresholds() if usual else with_threshold(self.thresholds, request.key, request.value)
        except InvalidInputError as problem:
            self._refuse(str(problem))
            return
        self._measure(self.measurement.window if self.measurement is not None else None)

    def _read_with_rate(self, text: str) -> None:
        assert self._waiting is not None
        file, name = self._waiting
        try:
            rate = float(text.strip().replace(",", "."))
            if not 0.0 < rate < 1e6:
                raise ValueError
        except ValueError:
            self._refuse(f"The sampling rate must be a positive number of samples a second; got {text.strip()[:30]!r}.")
            return
        file.seek(0)
        if self._read(file, name, rate):
            self._choose(self._likeliest())

    def _fit(self) -> None:
        """The most plausible loop behind the measured cycles, with SpO2 where the recording has it."""
        assert self.recording is not None and self.measurement is not None
        self.refusal, self.laying = "", None
        try:
            self.fit = fit_recording(self.bench.case, measured_from(self.measurement, self.lag))
        except (InvalidInputError, RecordingError) as problem:
            self.refusal = str(problem)
        self._draw_window()
        self.write()

    def _fit_quiet(self) -> None:
        """The most plausible loop behind breathing that does not cycle: from what follows sighs, else from its restlessness."""
        assert self.measurement is not None
        self.refusal, self.laying, self.ring_down = "", None, None
        envelope = max(self.measurement.envelopes, key=lambda item: item.values.size)
        breaths = self.measurement.breaths
        sighs = breaths.times_s[breaths.sizes > _SIGH * np.median(breaths.sizes)] if breaths.sizes.size else breaths.times_s
        found = ring_down_after_events(envelope.times_s, envelope.values, sighs) if sighs.size else None
        found = found if found is not None else ring_down_from_variability(envelope.times_s, envelope.values)
        if found is None:
            self.refusal = (
                "Quiet breathing says nothing of the loop here: there is less than a quarter of an hour of it, or it shows no swing. "
                "Choose a longer window, or one with sighs."
            )
        else:
            try:
                self.fit = fit_recording(self.bench.case, Measured(ring_down=found))
                self.ring_down = found
            except InvalidInputError as problem:
                self.refusal = str(problem)
        self._draw_window()
        self.write()

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


def _time_ticks(plot: Any, start: float, stop: float) -> None:
    """Ticks at round minutes, written as minutes and seconds, hours where there are some."""
    span = max(stop - start, 1.0)
    step = next((s for s in (5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200) if span / s <= 10), 14400)
    ticks = [step * k for k in range(int(np.ceil(start / step)), int(np.floor(stop / step)) + 1)]
    plot.xaxis.ticker.ticks = ticks
    plot.xaxis.major_label_overrides = {tick: clock(tick) for tick in ticks}


def clock(seconds: float) -> str:
    """A time in a recording as min:s, or h:min:s."""
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    return f"{hours}:{rest // 60:02d}:{rest % 60:02d}" if hours else f"{rest // 60}:{rest % 60:02d}"
