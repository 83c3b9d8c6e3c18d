"""A small SVG 1.1 writer: a plot frame with ticks, curves, hatched areas, marks and words. Nothing of it is physiology.

Coordinates are written to a hundredth of a unit; a picture is for eyes, the table has the digits.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from html import escape
from typing import Any

import numpy as np

from lagscape.errors import InvalidInputError

__all__ = ["Axis", "Plot", "Style", "document", "tick_values"]

INK, QUIET, HAIRLINE, PAPER = "#1C2530", "#5C6670", "#D8D8D0", "#FFFFFF"
INSIDE, OUTSIDE, BEFORE = "#0B6E6E", "#B5541C", "#8A9097"
FONT = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Liberation Sans', sans-serif"

_HATCH = (
    '<pattern id="hatch" width="7" height="7" patternUnits="userSpaceOnUse" patternTransform="rotate(45)">'
    f'<rect width="7" height="7" fill="{OUTSIDE}" fill-opacity="0.06"/>'
    f'<line x1="0" y1="0" x2="0" y2="7" stroke="{OUTSIDE}" stroke-width="1.2" stroke-opacity="0.55"/></pattern>'
    '<marker id="head" viewBox="0 0 8 8" refX="7" refY="4" markerWidth="7" markerHeight="7" orient="auto">'
    f'<path d="M0,0 L8,4 L0,8 Z" fill="{INK}"/></marker>'
)


@dataclass(frozen=True)
class Axis:
    """One axis: what it says, and its two ends."""

    label: str
    unit: str
    low: float
    high: float
    logarithmic: bool = False

    def __post_init__(self) -> None:
        finite = math.isfinite(self.low) and math.isfinite(self.high) and self.low < self.high
        if not finite or (self.logarithmic and self.low <= 0.0):
            rule = "positive, finite and rising" if self.logarithmic else "finite and rising"
            raise InvalidInputError(f"The ends of the axis {self.label} must be {rule}; got {self.low:.6g} and {self.high:.6g}.")

    @property
    def title(self) -> str:
        return f"{self.label}, {self.unit}" if self.unit else self.label

    def share(self, values: Any) -> Any:
        """Where values lie between the ends: 0 at the low one, 1 at the high one."""
        values = np.asarray(values, dtype=float)
        if self.logarithmic:
            with np.errstate(divide="ignore", invalid="ignore"):
                return np.log(values / self.low) / math.log(self.high / self.low)
        return (values - self.low) / (self.high - self.low)


@dataclass(frozen=True)
class Style:
    """How a curve is drawn; `dashes` as SVG's stroke-dasharray."""

    colour: str = INK
    width: float = 1.6
    dashes: str = ""


def tick_values(axis: Axis, most: int = 6) -> list[float]:
    """Round values inside an axis, two or more: steps of 1, 2 or 5 times a power of ten.

    At most `most` and one, or two more on a logarithmic axis, or five where `most` is so small that it would leave a single one.
    """
    if axis.logarithmic and axis.high / axis.low > 8.0:
        powers = range(math.floor(math.log10(axis.low)), math.ceil(math.log10(axis.high)) + 1)
        for parts in ((1, 2, 5), (1, 3), (1,)):
            values = [part * 10.0**power for power in powers for part in parts]
            inside = [value for value in values if axis.low <= value <= axis.high * (1.0 + 1e-12)]
            if len(inside) <= most + 2:
                return inside
    rough = (axis.high - axis.low) / most
    power = 10.0 ** math.floor(math.log10(rough))
    steps = [part * power for part in (0.2, 0.5, 1.0, 2.0, 5.0, 10.0)]
    at = next(index for index, step in enumerate(steps) if step >= rough * (1.0 - 1e-12))
    ticks = _multiples(axis, steps[at])
    # A step wider than half the axis may leave it with one tick, from which nobody can read a scale.
    return ticks if len(ticks) > 1 else _multiples(axis, steps[at - 1])


def _multiples(axis: Axis, step: float) -> list[float]:
    first = math.ceil(axis.low / step - 1e-9)
    last = math.floor(axis.high / step + 1e-9)
    return [index * step for index in range(first, last + 1)]


@dataclass
class Plot:
    """One frame at a place on the picture, and what is drawn in it. Call the drawing methods, then `text`."""

    x: Axis
    y: Axis
    left: float
    top: float
    width: float
    height: float
    name: str
    x_words: bool = True
    """False leaves out the words under the frame, where another frame below shares them."""
    parts: list[str] = field(default_factory=list)

    def curve(self, xs: Any, ys: Any, style: Style) -> None:
        """A line through points; it breaks where a value is not finite."""
        path = self._path(xs, ys)
        if path:
            dashes = f' stroke-dasharray="{style.dashes}"' if style.dashes else ""
            self.parts.append(
                f'<path d="{path}" fill="none" stroke="{style.colour}" stroke-width="{style.width:g}"{dashes} stroke-linejoin="round"/>'
            )

    def area(self, xs: Any, ys: Any, fill: str = "url(#hatch)") -> None:
        """A filled polygon; hatched unless said."""
        path = self._path(xs, ys)
        if path:
            self.parts.append(f'<path d="{path} Z" fill="{fill}" stroke="none"/>')

    def mark(self, x: float, y: float, shape: str, filled: bool = True, colour: str = INK) -> None:
        """A disc or a diamond of 11 units."""
        px, py = self._place(x, y)
        fill = colour if filled else PAPER
        if shape == "disc":
            self.parts.append(f'<circle cx="{px:.2f}" cy="{py:.2f}" r="5.5" fill="{fill}" stroke="{colour}" stroke-width="1.8"/>')
        else:
            points = f"{px:.2f},{py - 7:.2f} {px + 7:.2f},{py:.2f} {px:.2f},{py + 7:.2f} {px - 7:.2f},{py:.2f}"
            self.parts.append(f'<polygon points="{points}" fill="{fill}" stroke="{colour}" stroke-width="1.8"/>')

    def arrow(self, start: tuple[float, float], end: tuple[float, float]) -> None:
        (x1, y1), (x2, y2) = self._place(*start), self._place(*end)
        self.parts.append(
            f'<line x1="{x1:.2f}" y1="{y1:.2f}" x2="{x2:.2f}" y2="{y2:.2f}" stroke="{INK}" stroke-width="1.2" marker-end="url(#head)"/>'
        )

    def words(self, x: float, y: float, text: str, anchor: str = "middle", shift: tuple[float, float] = (0.0, 0.0), size: int = 11) -> None:
        """Words at a point, moved by `shift` units; on a pale ground so that lines behind do not disturb."""
        px, py = self._place(x, y)
        self.parts.append(
            f'<text x="{px + shift[0]:.2f}" y="{py + shift[1]:.2f}" font-size="{size}" text-anchor="{anchor}" '
            f'paint-order="stroke" stroke="{PAPER}" stroke-width="3" fill="{INK}">{escape(text)}</text>'
        )

    def bar(self, start: float, end: float, y: float) -> None:
        """A thick bar along a level, as an apnoea on the baseline."""
        (x1, py), (x2, _) = self._place(start, y), self._place(end, y)
        self.parts.append(f'<rect x="{x1:.2f}" y="{py - 4:.2f}" width="{max(x2 - x1, 0.5):.2f}" height="4" fill="{INK}"/>')

    def upright(self, x: float) -> None:
        """A dashed upright line through the frame."""
        px, _ = self._place(x, self.y.low)
        self.parts.append(
            f'<line x1="{px:.2f}" y1="{self.top:.2f}" x2="{px:.2f}" y2="{self.top + self.height:.2f}" stroke="{QUIET}" '
            'stroke-width="1" stroke-dasharray="2 3"/>'
        )

    def text(self) -> str:
        """The frame, its ticks and everything drawn, as SVG elements."""
        clip = f"clip-{self.name}"
        bottom, right = self.top + self.height, self.left + self.width
        out = [
            f'<clipPath id="{clip}"><rect x="{self.left:g}" y="{self.top:g}" width="{self.width:g}" height="{self.height:g}"/></clipPath>',
            f'<g clip-path="url(#{clip})">{"".join(self.parts)}</g>',
            f'<rect x="{self.left:g}" y="{self.top:g}" width="{self.width:g}" height="{self.height:g}" fill="none" stroke="{QUIET}"/>',
        ]
        for value in tick_values(self.x, 8):
            px, _ = self._place(value, self.y.low)
            out.append(f'<line x1="{px:.2f}" y1="{bottom:g}" x2="{px:.2f}" y2="{bottom + 4:g}" stroke="{QUIET}"/>')
            if self.x_words:
                out.append(_label(px, bottom + 17, _tick(value), "middle"))
        for value in tick_values(self.y, 5):
            _, py = self._place(self.x.low, value)
            out.append(f'<line x1="{self.left - 4:g}" y1="{py:.2f}" x2="{self.left:g}" y2="{py:.2f}" stroke="{QUIET}"/>')
            out.append(_label(self.left - 8, py + 4, _tick(value), "end"))
        if self.x_words:
            out.append(_label(0.5 * (self.left + right), bottom + 36, self.x.title, "middle", 13, INK))
        middle = 0.5 * (self.top + bottom)
        out.append(
            f'<text transform="translate({self.left - 48:g},{middle:.2f}) rotate(-90)" font-size="13" text-anchor="middle" '
            f'fill="{INK}">{escape(self.y.title)}</text>'
        )
        return "".join(out)

    def _place(self, x: float, y: float) -> tuple[float, float]:
        return self.left + float(self.x.share(x)) * self.width, self.top + (1.0 - float(self.y.share(y))) * self.height

    def _path(self, xs: Any, ys: Any) -> str:
        px = self.left + self.x.share(xs) * self.width
        py = self.top + (1.0 - self.y.share(ys)) * self.height
        if px.shape != py.shape or px.ndim != 1:
            raise InvalidInputError(f"A curve must have as many x as y values, in one row; got shapes {px.shape} and {py.shape}.")
        # A point far outside the frame is drawn at its edge's far side: viewers differ in how they take huge coordinates.
        px, py = np.clip(px, -1e4, 1e4), np.clip(py, -1e4, 1e4)
        good = np.isfinite(px) & np.isfinite(py)
        words, pen = [], "M"
        for x, y, fine in zip(px.tolist(), py.tolist(), good.tolist(), strict=True):
            if fine:
                words.append(f"{pen}{x:.2f},{y:.2f}")
            pen = "L" if fine else "M"
        return " ".join(words)


def document(width: float, height: float, title: str, description: str, parts: Sequence[str]) -> str:
    """A whole SVG picture that stands alone, with a title and a description for who cannot see it."""
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:g} {height:g}" width="{width:g}" height="{height:g}" '
        f'role="img" font-family="{escape(FONT)}"><title>{escape(title)}</title><desc>{escape(description)}</desc>'
        f'<defs>{_HATCH}</defs><rect width="{width:g}" height="{height:g}" fill="{PAPER}"/>{"".join(parts)}</svg>\n'
    )


def _label(x: float, y: float, text: str, anchor: str, size: int = 11, colour: str = QUIET) -> str:
    return f'<text x="{x:.2f}" y="{y:.2f}" font-size="{size}" text-anchor="{anchor}" fill="{colour}">{escape(text)}</text>'


def _tick(value: float) -> str:
    return f"{value:.10g}".replace("-", "−")
