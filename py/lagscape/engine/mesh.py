"""Polynomial pieces: Radau nodes on [0, 1], and the constant matrices that integrate, evaluate and project on them.

A piece of a solution is a polynomial of degree n, given by its start value and its values at the n right Radau nodes: n + 1 points.
The right-hand side is a polynomial of degree n - 1 through the nodes alone, so it may jump at the start of a piece. Collocation at
right Radau nodes is Radau IIA: order 2n - 1 at the ends and stable for any stiffness.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.polynomial import legendre

from lagscape.loops.protocol import Array

__all__ = ["Kept", "evaluation", "gauss_places", "integration", "nodes", "oversampling", "points", "tail_weights"]


class Kept:
    """What was built from the same numbers a moment ago: a drag repeats most of them, and building costs more than the look-up.

    The key holds every number that the building reads (arrays as bytes); what is kept must not be changed afterwards.
    """

    def __init__(self, most: int) -> None:
        self._most = most
        self._built: dict[Hashable, Any] = {}

    def __call__(self, key: Hashable, build: Callable[[], Any]) -> Any:
        found = self._built.get(key)
        if found is None:
            found = build()
            if len(self._built) >= self._most:
                del self._built[next(iter(self._built))]
            self._built[key] = found
        return found


def _frozen(array: Array) -> Array:
    array.setflags(write=False)
    return array


@lru_cache(maxsize=64)
def nodes(n: int) -> Array:
    """The n right Radau nodes on (0, 1], ascending; the last is 1. Roots of P_n - P_(n-1) on [-1, 1]."""
    series = np.zeros(n + 1)
    series[n - 1], series[n] = -1.0, 1.0
    x = np.sort(legendre.legroots(series).real)
    for _ in range(2):  # the companion matrix loses a few digits
        x = x - legendre.legval(x, series) / legendre.legval(x, legendre.legder(series))
    x[-1] = 1.0
    return _frozen(0.5 * (1.0 + x))


@lru_cache(maxsize=64)
def points(n: int) -> Array:
    """The start 0 and the n Radau nodes: where a piece of a solution is known."""
    return _frozen(np.concatenate([[0.0], nodes(n)]))


@lru_cache(maxsize=64)
def _coefficients(n: int, with_start: bool) -> Array:
    """Values at the nodes (with_start: the points) to Legendre coefficients on [0, 1]."""
    where = points(n) if with_start else nodes(n)
    return _frozen(np.linalg.inv(legendre.legvander(2.0 * where - 1.0, len(where) - 1)))


@lru_cache(maxsize=64)
def integration(n: int) -> Array:
    """Q, shape (n, n): (Q f)_i is the integral from 0 to node i of the polynomial through f at the nodes."""
    wide = legendre.legvander(2.0 * nodes(n) - 1.0, n)
    integral = np.empty((n, n))
    integral[:, 0] = nodes(n)
    for k in range(1, n):
        integral[:, k] = 0.5 * (wide[:, k + 1] - wide[:, k - 1]) / (2 * k + 1)
    return _frozen(integral @ _coefficients(n, False))


def evaluation(n: int, places: Array) -> Array:
    """Shape (*places.shape, n + 1): values at the points to values at these places of [0, 1]."""
    return legendre.legvander(2.0 * places - 1.0, n) @ _coefficients(n, True)


@lru_cache(maxsize=16)
def gauss_places(samples: int) -> Array:
    """The Gauss nodes on (0, 1), where `oversampling` samples."""
    return _frozen(0.5 * (1.0 + legendre.leggauss(samples)[0]))


@lru_cache(maxsize=64)
def oversampling(n: int, samples: int) -> tuple[Array, Array]:
    """Up (samples, n + 1): points to Gauss samples. Down (n, samples): samples to the nodes, by least squares on degree n - 1."""
    gauss, weights = legendre.leggauss(samples)
    up = legendre.legvander(gauss, n) @ _coefficients(n, True)
    low = legendre.legvander(gauss, n - 1)
    project = (low * weights[:, None]).T * (np.arange(n) + 0.5)[:, None]
    down = legendre.legvander(2.0 * nodes(n) - 1.0, n - 1) @ project
    return _frozen(up), _frozen(down)


@lru_cache(maxsize=64)
def tail_weights(n: int) -> Array:
    """Shape (n + 1, 2): values at the points to the two highest Legendre coefficients, a measure of what is not resolved."""
    return _frozen(np.ascontiguousarray(_coefficients(n, True)[-2:].T))
