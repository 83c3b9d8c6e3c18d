"""Linear systems on pieces in a row, against the matrix exponential and a general integrator."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from lagscape.engine.linear_pieces import DecayPieces, SolvedPieces, linear_pieces
from lagscape.engine.mesh import nodes, points

DEGREE = 12
EDGES = np.array([0.0, 0.7, 0.9, 2.4, 3.0])
LENGTHS = np.diff(EDGES)
# Tolerance: twelve nodes resolve e^(-t) and sin t on pieces of 1.5 to 1e-12 and better.
RESOLVED = 1e-11


def _places(where: np.ndarray) -> np.ndarray:
    return EDGES[:-1, None] + LENGTHS[:, None] * where


def test_a_free_system_is_the_matrix_exponential() -> None:
    matrix = np.array([[-0.5, 0.3], [0.1, -1.2]])
    start = [1.0, -2.0]
    solved = linear_pieces(matrix, None, DEGREE, 1.5).solve(None, np.zeros((4, 2, DEGREE)), LENGTHS, start)
    for i, t in np.ndenumerate(_places(points(DEGREE))):
        np.testing.assert_allclose(solved[i[0], :, i[1]], expm(matrix * t) @ start, atol=RESOLVED)


def test_the_lag_in_closed_form_and_solved_are_one() -> None:
    # Oracle: x' = -a x + sin t, x = C e^(-a t) + (a sin t - cos t)/(a^2 + 1).
    rate, start = 0.8, 0.4
    forcing = np.sin(_places(nodes(DEGREE)))[:, None]
    t = _places(points(DEGREE))
    wanted = (start + 1.0 / (rate**2 + 1.0)) * np.exp(-rate * t) + (rate * np.sin(t) - np.cos(t)) / (rate**2 + 1.0)
    lag = linear_pieces(np.array([[-rate]]), None, DEGREE, 1.5)
    assert isinstance(lag, DecayPieces)
    for pieces in (lag, SolvedPieces(np.array([[-rate]]), None, DEGREE)):
        np.testing.assert_allclose(pieces.solve(None, forcing, LENGTHS, [start])[:, 0], wanted, atol=RESOLVED)


def test_a_lag_too_fast_for_its_closed_form_is_solved_and_stays_finite() -> None:
    stiff = linear_pieces(np.array([[-1e6]]), None, DEGREE, 1.5)
    assert isinstance(stiff, SolvedPieces)
    values = stiff.solve(None, np.full((4, 1, DEGREE), 1e6), LENGTHS, [0.0])
    # It follows what forces it, 1, from the first node on: what is left of the start is of the size of 1 / (rate x first node).
    np.testing.assert_allclose(values[:, 0, 1:], 1.0, atol=1e-3)


def test_a_varying_rate_against_a_general_integrator() -> None:
    # Oracle: scipy's DOP853 at 1e-12 on x' = (A + v(t) N) x + w(t).
    matrix, by_output = np.array([[-0.4, 0.4], [0.05, -0.05]]), np.array([[-0.3, 0.0], [0.0, 0.0]])
    v, w = _places(nodes(DEGREE)) ** 2, np.cos(_places(nodes(DEGREE)))
    pieces = linear_pieces(matrix, by_output, DEGREE, 1.5)
    assert isinstance(pieces, SolvedPieces)
    found = pieces.solve(v, np.stack([w, 0.5 * w], axis=1), LENGTHS, [2.0, 1.0])

    def slope(t: float, x: np.ndarray) -> np.ndarray:
        return (matrix + t**2 * by_output) @ x + np.array([1.0, 0.5]) * np.cos(t)

    wanted = solve_ivp(slope, (0.0, 3.0), [2.0, 1.0], method="DOP853", rtol=1e-12, atol=1e-13, dense_output=True)
    for i in range(2):
        np.testing.assert_allclose(found[:, i], wanted.sol(_places(points(DEGREE)).ravel())[i].reshape(4, -1), atol=1e-9)


@pytest.mark.parametrize("by_output", [None, np.zeros((1, 1))])
def test_no_product_means_the_cheaper_way(by_output: np.ndarray | None) -> None:
    assert isinstance(linear_pieces(np.array([[-0.1]]), by_output, DEGREE, 5.0), DecayPieces)
