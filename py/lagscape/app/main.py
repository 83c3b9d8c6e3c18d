"""The application's views, slot by slot."""

from __future__ import annotations

from typing import Any

import panel as pn
from bokeh.events import Pan
from bokeh.models import ColumnDataSource
from bokeh.plotting import figure

from .page_link import PageLink

__all__ = ["build"]


def build(page: PageLink) -> dict[str, Any]:
    """Viewables by slot name. A proving ground for the path page - Python - page, soon to be replaced by the real views."""
    source = ColumnDataSource({"x": [5.0], "y": [5.0]})
    plot = figure(x_range=(0, 10), y_range=(0, 10), height=400, sizing_mode="stretch_width", tools="", toolbar_location=None,
                  x_axis_label="delay (s)", y_axis_label="sensitivity", name="map")
    plot.scatter("x", "y", source=source, size=16, name="dot")
    slider = pn.widgets.FloatSlider(name="Delay (s)", start=0, end=10, value=5, sizing_mode="stretch_width")
    text = pn.pane.HTML("<p>Drag the dot.</p>")

    def place(x: float, y: float) -> None:
        source.data = {"x": [x], "y": [y]}
        page.send("standing", {"text": f"The dot is at {x:.2f}, {y:.2f}.", "state": "rings"})

    def pan(event: Pan) -> None:
        place(event.x, event.y)

    def slide(event: Any) -> None:
        place(event.new, source.data["y"][0])
        text.object = f"<p>Delay {event.new:.2f} s</p>"

    def nudge(payload: Any) -> None:
        step = 1.0 if payload["large"] else 0.1
        place(source.data["x"][0] + step * payload["right"], source.data["y"][0] + step * payload["up"])

    plot.on_event(Pan, pan)
    slider.param.watch(slide, "value")
    page.on("nudge", nudge)
    page.send("standing", {"text": "Drag the dot, move the slider, press the arrow keys.", "state": "settles"})
    return {"map": pn.pane.Bokeh(plot, sizing_mode="stretch_width"), "case": slider, "standing": text}
