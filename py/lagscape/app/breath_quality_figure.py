"""The single breaths drawn: how far they can be trusted minute by minute, and a mark for each in the window."""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, FixedTicker, Range1d
from bokeh.plotting import figure

from lagscape.app.palette import Palette, dress
from lagscape.recordings import BreathingMeasurement
from lagscape.recordings.breath_result import word_of

__all__ = ["BreathMarks", "BreathQualityFigure"]

_LANE_Y = 0.03


class BreathQualityFigure:
    """A bar for each minute, as high as its score from 0 to 1; poor minutes are cross-hatched, those without a breath are empty."""

    def __init__(self, time: Range1d, border: dict[str, Any]) -> None:
        # Two sources: a hatch that is a column of one costs a canvas of its own for every bar, seconds for a night.
        self.source, self.poor = (ColumnDataSource({"start": [], "stop": [], "score": []}) for _ in range(2))
        self.plot = figure(height=64, x_range=time, y_range=Range1d(0.0, 1.05), tools=[], min_border_bottom=4, min_border_top=4, **border)
        self.plot.yaxis.axis_label = "Quality"
        self.plot.yaxis.ticker = FixedTicker(ticks=[0.0, 0.5, 1.0])
        self.plot.xaxis.visible = False
        bar: dict[str, Any] = {"left": "start", "right": "stop", "bottom": 0.0, "top": "score", "fill_alpha": 0.35, "line_width": 0.5}
        self.bars = self.plot.quad(source=self.source, **bar)
        self.poor_bars = self.plot.quad(source=self.poor, hatch_pattern="x", hatch_alpha=0.6, **bar)

    def dress(self, palette: Palette) -> None:
        dress(self.plot, palette)
        for bars in (self.bars, self.poor_bars):
            bars.glyph.fill_color = bars.glyph.line_color = palette.inside
        self.poor_bars.glyph.hatch_color = palette.outside

    def draw(self, measurement: BreathingMeasurement | None) -> None:
        """Show the stretches that were judged; nothing for no measurement."""
        stretches = () if measurement is None else measurement.breath_table.quality.stretches
        judged = [(stretch, stretch.score) for stretch in stretches if stretch.score is not None]
        for source, poor in ((self.source, False), (self.poor, True)):
            shown = [(stretch, score) for stretch, score in judged if (word_of(score) == "poor") is poor]
            source.data = {
                "start": [stretch.start_s for stretch, _ in shown],
                "stop": [stretch.stop_s for stretch, _ in shown],
                "score": [score for _, score in shown],
            }


class BreathMarks:
    """A short bar at the foot of the window for each breath: its inspiration or, where that is not known, half of the breath."""

    def __init__(self, window: Any) -> None:
        self.source = ColumnDataSource({"start": [], "stop": []})
        self.bars = window.segment("start", _LANE_Y, "stop", _LANE_Y, source=self.source, y_range_name="lane", line_width=4)

    def dress(self, palette: Palette) -> None:
        self.bars.glyph.line_color = palette.ink

    def draw(self, measurement: BreathingMeasurement | None) -> None:
        """Show every breath; nothing for no measurement."""
        if measurement is None:
            self.source.data = {"start": [], "stop": []}
            return
        table = measurement.breath_table
        half = 0.5 * (table.start_s + table.end_s)
        self.source.data = {"start": table.start_s, "stop": np.where(np.isnan(table.inspiration_end_s), half, table.inspiration_end_s)}
