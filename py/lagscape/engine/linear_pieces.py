"""x' = (A + v N) x + w on pieces in a row, whatever their lengths: v and w known at the Radau nodes, x wanted at the points.

`SolvedPieces` takes any linear system by one batched solve; `DecayPieces` takes a single state whose rate is constant (a lag) by its
closed form, at a third of the cost.
"""

from __future__ import annotations

from operator import mul

import numpy as np

from lagscape.engine.mesh import integration, nodes
from lagscape.engine.plant_steps import MOST_DECAY
from lagscape.loops.protocol import Array

__all__ = ["DecayPieces", "SolvedPieces", "linear_pieces"]


class SolvedPieces:
    """Collocation at the Radau nodes in integral form; N is None where v does not multiply the state."""

    def __init__(self, matrix: Array, by_output: Array | None, n: int) -> None:
        self._size, self._n = len(matrix), n
        self._q = integration(n).T
        self._constant = -np.kron(matrix, integration(n))
        self._by_output = None if by_output is None else -np.kron(by_output, integration(n))
        # The first columns on the right are a start of one in each state; the last is what is forced.
        self._right = np.zeros((self._size, n, self._size + 1))
        for i in range(self._size):
            self._right[i, :, i] = 1.0

    def solve(self, v: Array | None, forcing: Array, lengths: Array, start: list[float]) -> Array:
        """v (m, n), if N is there, and w (m, s, n) at the nodes; lengths (m,); x at the points, (m, s, n + 1)."""
        m, size, n = len(lengths), self._size, self._n
        unknowns = size * n
        scale = lengths[:, None, None]
        if self._by_output is None or v is None:
            system = self._constant * scale
        else:
            system = self._by_output * (v if size == 1 else np.concatenate([v] * size, axis=1))[:, None]
            system += self._constant
            system *= scale
        system.reshape(m, -1)[:, :: unknowns + 1] += 1.0
        right = np.empty((m, size, n, size + 1))
        right[:] = self._right
        np.multiply(forcing.reshape(-1, n).dot(self._q).reshape(m, size, n), scale, out=right[..., size])
        solved = np.linalg.solve(system, right.reshape(m, unknowns, size + 1)).reshape(m, size, n, size + 1)
        # A chain of tiny products: plain floats are faster than array calls.
        x, starts = [*start, 1.0], []
        for rows in solved[:, :, -1].tolist():
            starts.append(x)
            x = [sum(map(mul, row, x)) for row in rows]
            x.append(1.0)
        before = np.array(starts)
        values = np.empty((m, size, n + 1))
        values[:, :, 0] = before[:, :size]
        np.einsum("minj,mj->min", solved, before, out=values[:, :, 1:])
        return values


class DecayPieces:
    """One state, x' = a x + w: x = e^(a t) (x_start + integral of e^(-a t) w)."""

    def __init__(self, rate: float, n: int) -> None:
        self._exponent, self._q, self._n = -rate * nodes(n), integration(n).T, n

    def solve(self, v: Array | None, forcing: Array, lengths: Array, start: list[float]) -> Array:
        """As SolvedPieces.solve; v is not used."""
        scale = lengths[:, None]
        growth = np.exp(self._exponent * scale)
        gained = (forcing[:, 0] * growth).dot(self._q)
        gained *= scale
        x, starts = start[0], []
        for gain, factor in zip(gained[:, -1].tolist(), growth[:, -1].tolist(), strict=True):
            starts.append(x)
            x = (x + gain) / factor
        values = np.empty((len(lengths), 1, self._n + 1))
        values[:, 0, 0] = starts
        gained += values[:, 0, :1]
        np.divide(gained, growth, out=values[:, 0, 1:])
        return values


def linear_pieces(matrix: Array, by_output: Array | None, n: int, longest: float) -> SolvedPieces | DecayPieces:
    """The cheaper of the two that serves this system on pieces of at most `longest` seconds; `by_output` is None or all zero for no N."""
    still = by_output is None or not np.any(by_output)
    if still and matrix.shape == (1, 1) and abs(float(matrix[0, 0])) * longest <= MOST_DECAY:
        return DecayPieces(float(matrix[0, 0]), n)
    return SolvedPieces(matrix, None if still else by_output, n)
