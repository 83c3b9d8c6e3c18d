"""The colours that Bokeh draws with, for light and dark; the page's own are in its style sheet under the same names."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

__all__ = ["PALETTES", "Palette", "dress"]

FONT = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Liberation Sans', sans-serif"


@dataclass(frozen=True)
class Palette:
    paper: str
    ink: str
    quiet: str
    hairline: str
    inside: str
    outside: str
    before: str


PALETTES = {
    "light": Palette("#FAFAF7", "#1C2530", "#5C6670", "#D8D8D0", "#0B6E6E", "#B5541C", "#9AA0A6"),
    "dark": Palette("#14181D", "#E6E8E4", "#A0A8AE", "#363D44", "#4FB3AE", "#E58A55", "#6E767D"),
}


def dress(figure: Any, palette: Palette) -> None:
    """Give a Bokeh figure the paper, the ink and the hairlines."""
    figure.background_fill_color = palette.paper
    figure.border_fill_color = palette.paper
    figure.outline_line_color = palette.hairline
    for axis in figure.axis:
        axis.axis_line_color = palette.hairline
        axis.major_tick_line_color = palette.hairline
        axis.minor_tick_line_color = None
        axis.major_label_text_color = palette.quiet
        axis.major_label_text_font = FONT
        axis.major_label_text_font_size = "12px"
        axis.axis_label_text_color = palette.ink
        axis.axis_label_text_font = FONT
        axis.axis_label_text_font_size = "13px"
        axis.axis_label_text_font_style = "normal"
    for grid in figure.grid:
        grid.grid_line_color = None
