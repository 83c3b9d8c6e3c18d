"""Roots of polynomials on pieces, against the roots they were made from."""

from __future__ import annotations

import numpy as np
import pytest

from lagscape.engine.mesh import points
from lagscape.engine.piece_roots import roots_inside

DEGREE = 12


def _values(*roots: float, scale: float = 1.0) -> np.ndarray:
    """A polynomial with these roots, at the points of a piece, shape (1, n + 1)."""
    return scale * np.prod([points(DEGREE) - root for root in roots], axis=0)[None]


@pytest.mark.parametrize("roots", [(0.5,), (1e-4,), (0.9999,), (0.3, 0.31), (0.1, 0.45, 0.8), (0.5, 0.5001)])
@pytest.mark.parametrize("scale", [1.0, -1e-9, 1e12])
def test_every_root_is_found(roots: tuple[float, ...], scale: float) -> None:
    # Oracle: the roots themselves. Tolerance: rounding of the values, 1e-15, over the slope at a root of a close pair, 1e-4, tenfold.
    found = roots_inside(_values(*roots, scale=scale))
    assert sorted(found[0]) == pytest.approx(list(roots), abs=1e-10)


def test_a_root_on_an_end_or_outside_is_none() -> None:
    for root in (0.0, 1.0, -0.2, 1.3, 1e-7, 1.0 - 1e-7):
        assert roots_inside(_values(root)) == {}


def test_a_dip_that_only_grazes_zero_is_told_from_one_that_reaches_it() -> None:
    # (x - c)^2 + d has roots c +- sqrt(-d): two for d < 0, none for d > 0, however small.
    for centre in np.linspace(0.05, 0.95, 37):
        reaches = (points(DEGREE) - centre) ** 2 - 1e-7
        grazes = (points(DEGREE) - centre) ** 2 + 1e-7
        found = roots_inside(np.stack([grazes, reaches]))
        assert list(found) == [1]
        assert sorted(found[1]) == pytest.approx([centre - 1e-7**0.5, centre + 1e-7**0.5], abs=1e-8)


def test_pieces_are_told_apart() -> None:
    values = np.concatenate([_values(0.25), np.ones((1, DEGREE + 1)), _values(0.2, 0.7)])
    found = roots_inside(values)
    assert list(found) == [0, 2]
    assert found[0] == pytest.approx([0.25], abs=1e-12)
    assert sorted(found[2]) == pytest.approx([0.2, 0.7], abs=1e-12)


def test_random_polynomials_against_the_companion_matrix() -> None:
    # Oracle: numpy's roots of the Chebyshev series, by eigenvalues; only roots well apart are compared, which both must find.
    rng = np.random.default_rng(3)
    compared = 0
    for _ in range(300):
        series = np.polynomial.Chebyshev(rng.standard_normal(DEGREE + 1) * 0.5 ** np.arange(DEGREE + 1), domain=[0.0, 1.0])
        every = series.roots()
        real = np.sort(every[np.abs(every.imag) < 1e-12].real)
        inside = real[(real > 1e-3) & (real < 0.999)]
        if inside.size and (np.diff(real) > 1e-3).all() and np.abs(real[:, None] - [0.0, 1.0]).min() > 1e-3:
            found = roots_inside(series(points(DEGREE))[None])
            assert sorted(found.get(0, [])) == pytest.approx(inside.tolist(), abs=1e-9)
            compared += 1
    assert compared > 100
