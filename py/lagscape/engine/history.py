"""The past of a run as pieces of polynomials, appended as the run goes on and read at any time, with one-sided limits at piece ends."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np

from lagscape.engine.mesh import points
from lagscape.loops.protocol import Array

__all__ = ["PiecewiseHistory", "chebyshev_basis", "distinct_rows", "to_chebyshev"]


def distinct_rows(rows: Array) -> tuple[Array, list[int]]:
    """The rows without repeats, in order of first appearance, and which of them each row is: two delays may sense one signal."""
    listed = rows.tolist()
    distinct = [row for i, row in enumerate(listed) if row not in listed[:i]]
    return np.array(distinct, dtype=float).reshape(len(distinct), rows.shape[1]), [distinct.index(row) for row in listed]


@lru_cache(maxsize=16)
def to_chebyshev(n: int) -> Array:
    """Values at the n + 1 points to Chebyshev coefficients, shape (n + 1, n + 1)."""
    matrix = np.linalg.inv(np.polynomial.chebyshev.chebvander(2.0 * points(n) - 1.0, n))
    matrix.setflags(write=False)
    return matrix


def chebyshev_basis(places: Array, n: int) -> Array:
    """T_0 .. T_n at places of [-1, 1], shape (n + 1, *places.shape): T_(m+j) = 2 T_m T_j - T_(m-j) doubles the known ones at a time."""
    basis = np.empty((n + 1, *places.shape))
    basis[0] = 1.0
    basis[1] = places
    known = 1
    while known < n:
        more = min(known, n - known)
        upper = basis[known + 1 : known + more + 1]
        np.multiply(basis[1 : more + 1], 2.0 * basis[known], out=upper)
        upper -= basis[known - more : known][::-1]
        known += more
    return basis


class PiecewiseHistory:
    """Signals that are polynomials of degree n between edges; constant before `start`. Kept as Chebyshev coefficients."""

    def __init__(self, n: int, start: float, constant: Array) -> None:
        self._n = n
        self._count = 1
        # The constant past is one long piece; its length is nominal, because a constant does not depend on the place.
        self._edges = np.full(65, np.inf)
        self._edges[:2] = start - 1.0, start
        self._coefficients = np.zeros((64, n + 1, len(constant)))
        self._coefficients[0, 0] = constant

    @property
    def end(self) -> float:
        return float(self._edges[self._count])

    def append(self, edges: Array, values: Array) -> None:
        """Adds pieces: `edges`, shape (m + 1,), the first being the end so far; `values` at the points, (m, n + 1, n_signals)."""
        need = self._count + len(values)
        if need > len(self._coefficients):
            grown = np.zeros((2 * need, *self._coefficients.shape[1:]))
            grown[: self._count] = self._coefficients[: self._count]
            longer = np.full(2 * need + 1, np.inf)
            longer[: self._count + 1] = self._edges[: self._count + 1]
            self._coefficients, self._edges = grown, longer
        self._coefficients[self._count : need] = to_chebyshev(self._n) @ values
        self._edges[self._count + 1 : need + 1] = edges[1:]
        self._count = need

    def at(self, times: Array, signal: Array, inner: Array | None = None) -> Array:
        """Signal numbers `signal`, broadcasting, at `times`; `inner`, slightly moved times, decide which piece is meant."""
        piece, basis = self._basis(times, times if inner is None else inner)
        return np.einsum("k...,...k->...", basis, self._coefficients[piece, :, signal])

    def all_at(self, times: Array) -> Array:
        """Every signal at `times`, shape (n_times, n_signals)."""
        piece, basis = self._basis(times, times)
        return (np.ascontiguousarray(basis.T)[:, None] @ self._coefficients.take(piece, axis=0))[:, 0]

    def _basis(self, times: Array, inner: Array) -> tuple[Any, Array]:
        """The piece of each time, and the Chebyshev polynomials there, shape (n + 1, *times.shape)."""
        piece = self._edges[: self._count + 1].searchsorted(inner, side="right") - 1
        piece = np.minimum(np.maximum(piece, 0), self._count - 1)
        left = self._edges[piece]
        place = 2.0 * (times - left) / (self._edges[piece + 1] - left) - 1.0
        return piece, chebyshev_basis(np.minimum(np.maximum(place, -1.0), 1.0), self._n)
