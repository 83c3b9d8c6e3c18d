"""Roots of polynomials on pieces: where a cut-off begins or ends inside a piece, grazing included.

Each polynomial is sampled densely enough that between two samples it cannot reach zero unseen, except where it comes very near: there
it is looked at more finely. A root is then refined by Newton steps on the Chebyshev series that halve where they leave the bracket.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from lagscape.engine.history import to_chebyshev
from lagscape.loops.protocol import Array

__all__ = ["roots_inside"]

_SAME_PLACE = 1e-6
"""A root closer than this share of a piece to its end is that end: what is cut off there is the square of it."""
_GRAZING = 0.01
"""A polynomial that stays further from zero than this share of its range at all samples cannot reach it between two of them."""
_BOTTOM = 1e-7
"""How closely the bottom of a dip is looked for; what is missed there is the square of it."""


@lru_cache(maxsize=16)
def _dense(n: int) -> tuple[list[float], Array]:
    """4 n + 1 places of [0, 1], closer near the ends; values at the points to values there, shape (n + 1, 4 n + 1)."""
    dense = np.cos(np.pi * np.arange(4 * n + 1)[::-1] / (4 * n))
    return (0.5 * (1.0 + dense)).tolist(), (np.polynomial.chebyshev.chebvander(dense, n) @ to_chebyshev(n)).T


def roots_inside(values: Array) -> dict[int, list[float]]:
    """Sign changes well inside the pieces, of the polynomials through these values at the points, shape (m, n + 1).

    Returns
    -------
    dict
        Number of a piece to the places within it, in (0, 1), in no order; pieces without any are not in it.
    """
    n = values.shape[1] - 1
    places, to_dense = _dense(n)
    dense = values.dot(to_dense)
    lowest, highest = dense.min(axis=1), dense.max(axis=1)
    near = _GRAZING * (highest - lowest)
    close = ((lowest <= near) & (highest >= -near)).nonzero()[0]
    found: dict[int, list[float]] = {}
    if not close.size:
        return found
    all_series = values[close].dot(to_chebyshev(n).T).tolist()
    for piece, row, series in zip(close.tolist(), dense[close].tolist(), all_series, strict=True):
        for left, right in _brackets(places, row, series):
            place = _refined(series, left, right)
            if _SAME_PLACE < place < 1.0 - _SAME_PLACE:
                found.setdefault(piece, []).append(place)
    return found


def _brackets(places: list[float], row: list[float], series: list[float]) -> list[tuple[float, float]]:
    """An interval of [0, 1] round each sign change: between dense samples, or beside a dip that no sample shows."""
    found: list[tuple[float, float]] = []
    heights = [abs(value) for value in row]
    size = max(heights)
    nothing, low = 1e-9 * size, 2.0 * _GRAZING * size
    before, positive = -1, False
    for i, height in enumerate(heights):
        signless = height <= nothing  # a sample on a root
        if height < low and 0 < i < len(row) - 1 and height < heights[i - 1] and height < heights[i + 1]:
            around = row[i - 1] > 0.0
            if around == (row[i + 1] > 0.0) and (signless or around == (row[i] > 0.0)):
                found += _beside_a_dip(series, places[i - 1], places[i + 1], 1.0 if around else -1.0)
        if signless:
            continue
        here = row[i] > 0.0
        if before >= 0 and here != positive:
            found.append((places[before], places[i]))
        before, positive = i, here
    return found


def _beside_a_dip(series: list[float], left: float, right: float, sign: float) -> list[tuple[float, float]]:
    """The two intervals beside the bottom of a dip where it reaches through zero; the bottom by halving on the slope."""
    low, high = left, right
    while high - low > _BOTTOM:
        middle = 0.5 * (low + high)
        value, slope = _value_and_slope(series, middle)
        if sign * value < 0.0:
            return [(left, middle), (middle, right)]
        if sign * slope < 0.0:
            low = middle
        else:
            high = middle
    return []


def _value_and_slope(series: list[float], place: float) -> tuple[float, float]:
    """A Chebyshev series and its derivative at a place of [0, 1], by Clenshaw's recurrence in plain floats."""
    x = 2.0 * place - 1.0
    b1 = b2 = d1 = d2 = 0.0
    for coefficient in series[:0:-1]:
        d1, d2 = 2.0 * (b1 + x * d1) - d2, d1
        b1, b2 = coefficient + 2.0 * x * b1 - b2, b1
    return series[0] + x * b1 - b2, 2.0 * (b1 + x * d1 - d2)


def _refined(series: list[float], low: float, high: float) -> float:
    """The root of a Chebyshev series between two places of [0, 1]: Newton steps, halving where a step leaves the bracket."""
    rising = _value_and_slope(series, high)[0] > 0.0
    place = 0.5 * (low + high)
    for _ in range(60):
        value, slope = _value_and_slope(series, place)
        if (value > 0.0) == rising:
            high = place
        else:
            low = place
        if abs(value) <= 1e-12 * abs(slope):
            break  # a step this small may round onto an end of the bracket, and halving would start anew
        following = place - value / slope if slope != 0.0 else low
        if not low < following < high:
            following = 0.5 * (low + high)
        moved, place = abs(following - place), following
        if moved < 1e-11:
            break
    return place
