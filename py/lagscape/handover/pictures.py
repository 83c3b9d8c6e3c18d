"""The boundary map and the traces as SVG pictures, drawn from plain arrays.

Colour never speaks alone: the outside is hatched and says so, the case is a filled dot, its start a hollow one, the levers a diamond,
and curves differ by dashes as well.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.handover.svg import BEFORE, INK, INSIDE, QUIET, Axis, Plot, Style, document

__all__ = ["Contour", "Curve", "MapPicture", "TracePanel", "above", "boundary_map_svg", "traces_svg"]

_WIDTH = 760.0
_LEFT = 68.0
_RIGHT = 18.0

_CURVES = {
    "start": Style(BEFORE, 1.4, "1 3"),
    "case": Style(INK, 1.6),
    "levers": Style(INSIDE, 1.8, "7 3"),
}
_CURVE_WORDS = {"case": "the case", "start": "where it started (dotted)", "levers": "with the levers (dashed)"}


@dataclass(frozen=True)
class Contour:
    """One line of equal cycle length, as arrays of shape (n,), and what is written on it."""

    words: str
    xs: Any
    ys: Any


@dataclass(frozen=True)
class MapPicture:
    """What the boundary map shows. Points are (delay, sensitivity) in the axes' units."""

    delay: Axis
    sensitivity: Axis
    boundary_x: Any
    """Delays along the boundary, shape (n,), s; nan breaks the line."""
    boundary_y: Any
    """Sensitivities along it, shape (n,)."""
    outside: Sequence[tuple[Any, Any]]
    """Polygons (xs, ys) of the side where the loop hunts; see `above`."""
    case: tuple[float, float]
    start: tuple[float, float] | None = None
    levers: tuple[float, float] | None = None
    contours: tuple[Contour, ...] = ()


def above(xs: Any, ys: Any, top: float) -> tuple[Any, Any]:
    """The polygon between a curve and a level above it: the outside, where the boundary is one curve over the delay."""
    xs, ys = np.asarray(xs, dtype=float), np.asarray(ys, dtype=float)
    good = np.isfinite(xs) & np.isfinite(ys)
    xs, ys = xs[good], ys[good]
    if xs.size < 2:
        return xs[:0], ys[:0]
    return np.concatenate([xs, xs[::-1]]), np.concatenate([np.minimum(ys, top), np.full(xs.size, top)])


def boundary_map_svg(picture: MapPicture) -> str:
    """The boundary map as an SVG document."""
    plot = Plot(picture.delay, picture.sensitivity, _LEFT, 44.0, _WIDTH - _LEFT - _RIGHT, 380.0, "map")
    for xs, ys in picture.outside:
        plot.area(xs, ys)
    marks = [point for point in (picture.case, picture.start, picture.levers) if point is not None]
    for contour in picture.contours:
        plot.curve(contour.xs, contour.ys, Style(QUIET, 0.7))
        spot = _clear_spot(plot, contour.xs, contour.ys, marks)
        if spot is not None:
            plot.words(*spot, contour.words, size=10)
    plot.curve(picture.boundary_x, picture.boundary_y, Style(INK, 2.2))
    if picture.start is not None:
        plot.mark(*picture.start, "disc", filled=False, colour=QUIET)
    if picture.levers is not None:
        plot.arrow(picture.case, picture.levers)
        plot.mark(*picture.levers, "diamond", colour=INSIDE)
    plot.mark(*picture.case, "disc")
    words = ["Hatched: hunts", "line: boundary", "filled dot: the case"]
    words += ["hollow dot: where it started"] if picture.start is not None else []
    words += ["diamond: with the levers"] if picture.levers is not None else []
    description = f"{picture.sensitivity.title} against {picture.delay.title}. The case lies at {_said(picture.case)}."
    return document(_WIDTH, 476.0, "Boundary map", description, [_legend("; ".join(words) + "."), plot.text()])


@dataclass(frozen=True)
class Curve:
    """One curve of a panel: values of shape (n_times,), and whose it is: case, start or levers."""

    values: Any
    role: str = "case"
    times: Any = None
    """Its own times, s; the picture's where None."""


@dataclass(frozen=True)
class TracePanel:
    """One frame of the traces. `silences` are apnoeas as (start, end) in s, drawn as bars on the baseline with their seconds."""

    label: str
    unit: str
    curves: tuple[Curve, ...]
    silences: tuple[tuple[float, float], ...] = ()
    from_zero: bool = False


def traces_svg(times: Any, panels: Sequence[TracePanel], disturbed_at_s: float | None = None, disturbance: str = "") -> str:
    """Panels under each other over one time axis, as an SVG document.

    Parameters
    ----------
    times : array, shape (n_times,)
        s, ascending.
    panels : sequence of TracePanel
        At least one.
    disturbed_at_s : float, optional
        When the disturbance begins; a dashed line marks it.
    disturbance : str
        What is written beside that line.

    Raises
    ------
    InvalidInputError
        If there is no panel or no two times, or a curve's role is unknown.
    """
    times = np.asarray(times, dtype=float)
    if not panels or times.size < 2:
        raise InvalidInputError(f"The traces need at least one panel and two times; got {len(panels)} and {times.size}.")
    span = Axis("Time", "s", float(times[0]), float(times[-1]))
    height, gap = 180.0, 16.0
    parts, roles = [], []
    for index, panel in enumerate(panels):
        plot = Plot(
            span, _range(panel), _LEFT, 44.0 + index * (height + gap), _WIDTH - _LEFT - _RIGHT, height, f"trace{index}",
            x_words=index == len(panels) - 1,
        )  # fmt: skip
        if disturbed_at_s is not None:
            plot.upright(disturbed_at_s)
            if index == 0 and disturbance:
                plot.words(disturbed_at_s, plot.y.high, disturbance, "start", (5.0, 14.0))
        for curve in sorted(panel.curves, key=_depth):
            plot.curve(times if curve.times is None else curve.times, curve.values, _CURVES[curve.role])
            roles += [curve.role] if curve.role not in roles else []
        for start, end in panel.silences:
            plot.bar(start, end, plot.y.low)
            if (end - start) > 0.035 * (span.high - span.low):
                plot.words(0.5 * (start + end), plot.y.low, f"{end - start:.0f} s", shift=(0.0, -8.0))
        parts.append(plot.text())
    words = [_CURVE_WORDS[role] for role in _CURVES if role in roles]
    words += ["bars: apnoea"] if any(panel.silences for panel in panels) else []
    bottom = 44.0 + len(panels) * (height + gap) - gap + 52.0
    names = " and ".join(panel.label for panel in panels)
    description = f"{names} over {span.high - span.low:.4g} s."
    return document(_WIDTH, bottom, "Traces", description, [_legend("Lines: " + "; ".join(words) + "."), *parts])


def _depth(curve: Curve) -> int:
    """What lies behind is drawn first."""
    if curve.role not in _CURVES:
        raise InvalidInputError(f"A curve's role must be one of {', '.join(_CURVES)}; got {curve.role!r}.")
    return list(_CURVES).index(curve.role)


def _range(panel: TracePanel) -> Axis:
    """An axis that holds every finite value, with a twentieth to spare."""
    values = np.concatenate([np.asarray(curve.values, dtype=float).ravel() for curve in panel.curves] or [np.zeros(1)])
    values = values[np.isfinite(values)]
    low, high = (float(values.min()), float(values.max())) if values.size else (0.0, 1.0)
    low = min(low, 0.0) if panel.from_zero else low
    if high - low <= 1e-9 * max(abs(high), abs(low), 1e-300):
        spare = 0.05 * abs(high) or 1.0
        low, high = low - (0.0 if panel.from_zero and low == 0.0 else spare), high + spare
    spare = 0.05 * (high - low)
    return Axis(panel.label, panel.unit, low if panel.from_zero and low == 0.0 else low - spare, high + spare)


def _clear_spot(plot: Plot, xs: Any, ys: Any, marks: Sequence[tuple[float, float]]) -> tuple[float, float] | None:
    """The point nearest to a line's middle that lies inside the frame, off its edge and off the marks; None where there is none."""
    x, y = np.asarray(xs, dtype=float), np.asarray(ys, dtype=float)
    share_x, share_y = plot.x.share(x), plot.y.share(y)
    clear = (share_x > 0.05) & (share_x < 0.95) & (share_y > 0.05) & (share_y < 0.95)
    for mark_x, mark_y in marks:
        clear &= np.hypot(share_x - plot.x.share(mark_x), share_y - plot.y.share(mark_y)) > 0.08
    spots = np.flatnonzero(clear)
    if not spots.size:
        return None
    middle = spots[spots.size // 2]
    return float(x[middle]), float(y[middle])


def _said(point: tuple[float, float]) -> str:
    return f"{point[0]:.3g} and {point[1]:.3g}"


def _legend(words: str) -> str:
    return f'<text x="{_LEFT:g}" y="26" font-size="12" fill="{QUIET}">{words}</text>'
