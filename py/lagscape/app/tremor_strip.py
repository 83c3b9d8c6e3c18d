"""A tremor's channels drawn: the whole recording as a strip with the window to drag, and some seconds of it close up.

The axes of a sensor lie under each other on one scale, each about its own middle; what was masked is hatched.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, FixedTicker, Range1d, RangeTool
from bokeh.plotting import figure

from lagscape.app.palette import Palette, dress
from lagscape.app.time_axis import time_ticks
from lagscape.recordings import overview
from lagscape.recordings.recording import Signal
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["TremorStrip"]

_STRIP_BINS = 1000
_CLOSE_BINS = 1600
_CLOSE_S = 4.0


class TremorStrip:
    """`strip` and `close`, over the time range `whole` and a few seconds in the middle of `shown`."""

    def __init__(self, border: dict[str, Any]) -> None:
        self.signals: tuple[Signal, ...] = ()
        self._middles: list[float] = []
        self._scale = 1.0
        self.whole, self.shown = Range1d(0.0, 1.0), Range1d(0.0, 1.0)
        self._near = Range1d(0.0, 1.0)
        self.lanes = Range1d(0.0, 1.0)
        self.strip = figure(height=120, x_range=self.whole, y_range=self.lanes, tools=[], min_border_bottom=30, **border)
        self.close = figure(height=150, x_range=self._near, y_range=self.lanes, tools=[], min_border_bottom=44, **border)
        # A range tool moves only a range that some figure has.
        self.close.extra_x_ranges = {"window": self.shown}
        self.tool = RangeTool(x_range=self.shown)
        self.tool.overlay.fill_alpha = 0.18
        self.strip.add_tools(self.tool)
        empty: dict[str, list[float]] = {"time": [], "low": [], "high": []}
        self.bands, self.traces = ColumnDataSource(dict(empty)), ColumnDataSource(dict(empty))
        self.masked = ColumnDataSource({"start": [], "stop": []})
        self.drawn = [
            plot.segment("time", "low", "time", "high", source=source, line_width=width)
            for plot, source, width in ((self.strip, self.bands, 1.2), (self.close, self.traces, 1.0))
        ]
        self.line = self.close.line("time", "high", source=self.traces, line_width=1.2)
        self.covers = [
            plot.hbar(
                y=0.0, left="start", right="stop", height=20.0, source=self.masked, fill_alpha=0.08, hatch_pattern="x", hatch_alpha=0.35,
                line_alpha=0.0,
            )
            for plot in (self.strip, self.close)
        ]  # fmt: skip
        for plot in (self.strip, self.close):
            plot.xaxis.ticker = FixedTicker(ticks=[])
            plot.yaxis.ticker = FixedTicker(ticks=[])
        self.strip.yaxis.visible = False
        self.close.xaxis.axis_label = "Close up, the middle of the window (min:s)"

    def dress(self, palette: Palette) -> None:
        for plot in (self.strip, self.close):
            dress(plot, palette)
        for band in self.drawn:
            band.glyph.line_color = palette.quiet
        self.line.glyph.line_color = palette.ink
        for cover in self.covers:
            cover.glyph.fill_color = cover.glyph.hatch_color = palette.outside
        self.tool.overlay.fill_color = self.tool.overlay.line_color = palette.inside

    def draw(self, signals: tuple[Signal, ...]) -> None:
        """Show the whole of these channels, the window unchanged; nothing for none."""
        self.signals = signals
        if not signals:
            for source in (self.bands, self.traces):
                source.data = {"time": [], "low": [], "high": []}
            return
        start, stop = signals[0].segments[0].start_s, signals[0].segments[-1].stop_s
        parts = [overview(signal, _STRIP_BINS) for signal in signals]
        self._middles = [float(np.nanmedian(0.5 * (part.lowest + part.highest))) for part in parts]
        # One scale for all axes; the farthest hundredth of the bins may leave its lane, as a knock does.
        away = [np.fmax(part.highest - middle, middle - part.lowest) for part, middle in zip(parts, self._middles, strict=True)]
        self._scale = float(np.nanpercentile(np.concatenate(away), 99.0)) or 1.0
        self.bands.data = self._lanes(parts)
        self.whole.update(start=start, end=stop)
        self.lanes.update(start=-(len(signals) - 1) - 0.75, end=0.75)
        ticks = [-float(i) for i in range(len(signals))]
        self.close.yaxis.ticker.ticks = ticks if len(signals) > 1 else []
        self.close.yaxis.major_label_overrides = {at: _axis_of(signal.name) for at, signal in zip(ticks, signals, strict=True)}
        time_ticks(self.strip, start, stop)

    def show_window(self, start: float, stop: float) -> None:
        """Put the window there and draw its middle close up."""
        if (self.shown.start, self.shown.end) != (start, stop):
            self.shown.update(start=start, end=stop)
        self.draw_close()

    def draw_close(self) -> None:
        """The middle of the window, close up."""
        if not self.signals:
            return
        first, last = self.signals[0].segments[0].start_s, self.signals[0].segments[-1].stop_s
        start, stop = max(first, float(self.shown.start)), min(last, float(self.shown.end))
        middle = 0.5 * (start + stop)
        near = (max(start, middle - 0.5 * _CLOSE_S), min(stop, middle + 0.5 * _CLOSE_S))
        if near[1] <= near[0]:
            return
        bins = max(8, min(_CLOSE_BINS, round((near[1] - near[0]) * self.signals[0].sampling_frequency_hz)))
        self.traces.data = self._lanes([overview(signal, bins, window=near) for signal in self.signals])
        self._near.update(start=near[0], end=near[1])
        time_ticks(self.close, *near)

    def draw_masked(self, measured: TremorMeasurement | None) -> None:
        """Hatch what was left out of the measurement."""
        stretches = () if measured is None else measured.masked
        self.masked.data = {"start": [item.start_s for item in stretches], "stop": [item.stop_s for item in stretches]}

    def _lanes(self, parts: list[Any]) -> dict[str, Any]:
        """The axes under each other, a gap between; two lanes' height for the largest."""
        times: list[Any] = []
        lows: list[Any] = []
        highs: list[Any] = []
        for i, (part, middle) in enumerate(zip(parts, self._middles, strict=True)):
            times += [0.5 * (part.edges_s[1:] + part.edges_s[:-1]), [np.nan]]
            lows += [np.clip(0.5 * (part.lowest - middle) / self._scale, -0.75, 0.75) - i, [np.nan]]
            highs += [np.clip(0.5 * (part.highest - middle) / self._scale, -0.75, 0.75) - i, [np.nan]]
        return {"time": np.concatenate(times), "low": np.concatenate(lows), "high": np.concatenate(highs)}


def _axis_of(name: str) -> str:
    """The letter that tells an axis, or the name's end where there is none."""
    letters = [word for word in name.replace("_", " ").replace("-", " ").replace(".", " ").split() if word.casefold() in ("x", "y", "z")]
    return letters[0].upper() if letters else name[-6:]
