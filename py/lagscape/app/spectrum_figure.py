"""The spectrum of a tremor: power over frequency, the peak marked, its width at half power as a bracket, harmonics named.

Unloaded is a firm line, loaded a dashed one over hatching, the window that is neither yet a thin one, so that colour never speaks alone.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from bokeh.core.properties import value
from bokeh.models import ColumnDataSource, Range1d
from bokeh.plotting import figure

from lagscape.app.palette import FONT, Palette, dress
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["SpectrumFigure"]

ROLES = ("window", "unloaded", "loaded")
_LOWEST_SHOWN_HZ = 1.5
"""What is slower (posture, drift) may be cut off at the top."""
_DB_SHOWN = 50.0
_SHOWN_HZ, _NEAR_AXIS_HZ = 20.0, 6.0
_LABEL_PX, _LINE_PX, _LABEL_HZ = -8, 17, 6.0
"""A peak's words stand this far over it, a line higher where others stand as high within so many Hz."""
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


class SpectrumFigure:
    """One figure; `draw` shows up to three spectra by their role."""

    def __init__(self, border: dict[str, Any]) -> None:
        self.frequencies, self.powers = Range1d(0.0, 20.0), Range1d(0.0, 1.0)
        self.plot = figure(height=330, x_range=self.frequencies, y_range=self.powers, tools=[], min_border_bottom=44, **border)
        self.plot.xaxis.axis_label = "Frequency (Hz)"
        self.plot.yaxis.axis_label = "Power"
        self.plot.yaxis.ticker.desired_num_ticks = 4
        self.curves = {role: ColumnDataSource({"frequency": [], "power": [], "low": [], "high": []}) for role in ROLES}
        self.brackets = ColumnDataSource({"start": [], "stop": [], "level": []})
        self.marks = ColumnDataSource({"frequency": [], "power": [], "text": [], "raised": [], "side": []})
        self.names = ColumnDataSource({"frequency": [], "power": [], "text": []})
        self.bands = {role: self.plot.varea("frequency", "low", "high", source=self.curves[role], fill_alpha=0.16) for role in ROLES}
        self.bands["loaded"].glyph.hatch_pattern = "right_diagonal_line"
        self.bands["loaded"].glyph.hatch_alpha = 0.35
        dashes: dict[str, Any] = {"window": "solid", "unloaded": "solid", "loaded": [7, 4]}
        widths = {"window": 1.3, "unloaded": 2.2, "loaded": 2.2}
        self.lines = {
            role: self.plot.line("frequency", "power", source=self.curves[role], line_width=widths[role], line_dash=dashes[role]) for role in ROLES
        }
        self.level = self.plot.segment("start", "level", "stop", "level", source=self.brackets, line_width=2.0)
        self.ends = [
            self.plot.scatter(edge, "level", source=self.brackets, marker="dash", angle=np.pi / 2.0, size=12, line_width=2.0)
            for edge in ("start", "stop")
        ]
        self.peaks = self.plot.scatter("frequency", "power", source=self.marks, marker="inverted_triangle", size=9)
        words: dict[str, Any] = {"text_font": value(FONT), "text_align": "center", "text_baseline": "bottom"}
        beside = {**words, "text_align": "side", "y_offset": "raised"}
        self.peak_words = self.plot.text("frequency", "power", "text", source=self.marks, text_font_size="13px", **beside)
        self.harmonic_words = self.plot.text("frequency", "power", "text", source=self.names, text_font_size="12px", y_offset=-5, **words)

    def dress(self, palette: Palette) -> None:
        dress(self.plot, palette)
        colours = {"window": palette.ink, "unloaded": palette.inside, "loaded": palette.outside}
        for role, colour in colours.items():
            self.lines[role].glyph.line_color = colour
            self.bands[role].glyph.fill_color = self.bands[role].glyph.hatch_color = colour
        for mark in (self.level, *self.ends):
            mark.glyph.line_color = palette.ink
        self.peaks.glyph.fill_color = self.peaks.glyph.line_color = palette.ink
        self.peak_words.glyph.text_color = palette.ink
        self.harmonic_words.glyph.text_color = palette.quiet

    def draw(self, shown: Sequence[tuple[str, TremorMeasurement]], decibels: bool = False) -> None:
        """Show these measurements, each with its role: window, unloaded or loaded; nothing for none."""
        highest = max((float(one.power[one.frequency_hz >= _LOWEST_SHOWN_HZ].max()) for _, one in shown), default=1.0) or 1.0

        thousands = 3 * math.floor(math.log10(highest) / 3.0)

        def scaled(power: Any) -> Any:
            return 10.0 * np.log10(np.maximum(power, 1e-12 * highest) / highest) if decibels else np.asarray(power) * 10.0**-thousands

        drawn = dict(shown)
        brackets: dict[str, list[float]] = {"start": [], "stop": [], "level": []}
        marks: dict[str, list[Any]] = {"frequency": [], "power": [], "text": [], "raised": [], "side": []}
        names: dict[str, list[Any]] = {"frequency": [], "power": [], "text": []}
        for role, source in self.curves.items():
            one = drawn.get(role)
            if one is None:
                source.data = {"frequency": [], "power": [], "low": [], "high": []}
                continue
            source.data = {
                "frequency": one.frequency_hz, "power": scaled(one.power), "low": scaled(one.power_low), "high": scaled(one.power_high),
            }  # fmt: skip
            if one.peak_frequency_hz is None or one.half_power_hz is None:
                continue
            top = float(one.power[_within(one)].max())
            brackets["start"].append(one.half_power_hz[0])
            brackets["stop"].append(one.half_power_hz[1])
            brackets["level"].append(float(scaled(0.5 * top)))
            marks["frequency"].append(one.peak_frequency_hz)
            raised = _LABEL_PX
            for other, level in zip(marks["frequency"][:-1], marks["power"], strict=True):
                if abs(other - one.peak_frequency_hz) < _LABEL_HZ and abs(level - float(scaled(top))) < 0.1 * float(scaled(highest) or _DB_SHOWN):
                    raised -= _LINE_PX
            marks["raised"].append(raised)
            # Near the axis the words stand to the right of the peak, or a narrow screen would cut them off.
            marks["side"].append("left" if one.peak_frequency_hz < _NEAR_AXIS_HZ else "center")
            marks["power"].append(float(scaled(top)))
            name = "" if role == "window" else f"{role} "
            marks["text"].append(f"{name}{one.peak_frequency_hz:.2f} Hz")
            for order, at in ((round(at / one.peak_frequency_hz), at) for at in one.harmonics_hz):
                names["frequency"].append(at)
                names["power"].append(float(scaled(np.interp(at, one.frequency_hz, one.power))))
                names["text"].append(f"{order}×")
        self.brackets.data, self.marks.data, self.names.data = brackets, marks, names
        if shown:
            furthest = max(float(one.frequency_hz[-1]) for _, one in shown)
            self.frequencies.update(start=0.0, end=min(furthest, max([_SHOWN_HZ, *(1.1 * at for at in names["frequency"])])))
            low, high = (-_DB_SHOWN, 10.0) if decibels else (0.0, 1.3 * float(scaled(highest)))
            self.powers.update(start=low, end=high)
            unit = next((one.unit for _, one in shown if one.unit), "")
            self.plot.yaxis.axis_label = "Power, largest at 0 (dB)" if decibels else f"Power ({_power_of_ten(thousands)}{_squared(unit)})"


def _within(one: TremorMeasurement) -> np.ndarray:
    """Where the spectrum lies between the peak's half-power points."""
    assert one.half_power_hz is not None and one.peak_frequency_hz is not None
    found = (one.frequency_hz >= one.half_power_hz[0]) & (one.frequency_hz <= one.half_power_hz[1])
    found[int(np.abs(one.frequency_hz - one.peak_frequency_hz).argmin())] = True
    return found


def _squared(unit: str) -> str:
    if not unit:
        return "per Hz"
    return f"{unit}²/Hz" if unit.isalpha() else f"({unit})²/Hz"


def _power_of_ten(exponent: int) -> str:
    return "" if exponent == 0 else "10" + str(exponent).translate(_SUPERSCRIPT) + " "
