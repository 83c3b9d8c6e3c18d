"""The whole recording in one picture: each cycle's length and duty ratio over the time at which it stands."""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, FixedTicker, LinearAxis, Range1d
from bokeh.plotting import figure

from lagscape.app.breath_quality_figure import BreathMarks, BreathQualityFigure
from lagscape.app.palette import Palette, dress
from lagscape.recordings import BreathingMeasurement

__all__ = ["NightFigure"]


class NightFigure:
    """Filled discs for the length in s, on the left axis; hollow squares for the duty ratio, on the right one.

    `breaths` goes under it, `marks` stand in the window.
    """

    def __init__(self, time: Range1d, border: dict[str, Any], window: Any) -> None:
        """`window` is the figure with a `lane` range in which every breath gets its mark."""
        self.breaths, self.marks = BreathQualityFigure(time, border), BreathMarks(window)
        self.source = ColumnDataSource({"time": [], "length": [], "duty": []})
        self.lengths = Range1d(0.0, 1.0)
        self.plot = figure(height=120, x_range=time, y_range=self.lengths, tools=[], min_border_bottom=8, **border)
        self.plot.extra_y_ranges = {"duty": Range1d(0.0, 1.05)}
        axis = LinearAxis(y_range_name="duty", axis_label="Duty ratio □", ticker=FixedTicker(ticks=[0.0, 0.5, 1.0]))
        self.plot.add_layout(axis, "right")
        self.plot.yaxis[0].axis_label = "Cycle (s) ●"
        self.plot.xaxis.visible = False
        self.length_marks = self.plot.scatter("time", "length", source=self.source, size=5)
        self.duty_marks = self.plot.scatter("time", "duty", source=self.source, size=5, marker="square", fill_alpha=0.0, y_range_name="duty")

    def dress(self, palette: Palette) -> None:
        dress(self.plot, palette)
        self.breaths.dress(palette)
        self.marks.dress(palette)
        self.length_marks.glyph.fill_color = self.length_marks.glyph.line_color = palette.inside
        self.duty_marks.glyph.line_color = palette.outside

    def draw(self, measurement: BreathingMeasurement | None) -> None:
        """Show the cycles used and the breaths' quality; nothing for no measurement."""
        self.breaths.draw(measurement)
        self.marks.draw(measurement)
        used = () if measurement is None else measurement.used
        lengths = [cycle.cycle_length_s for cycle in used]
        self.source.data = {
            "time": [0.5 * (cycle.start_s + cycle.stop_s) for cycle in used],
            "length": lengths,
            "duty": [np.nan if cycle.duty_ratio is None else cycle.duty_ratio for cycle in used],
        }
        self.lengths.update(start=0.0, end=1.15 * max(lengths, default=1.0))
