"""Polynomial pieces: nodes, integration, evaluation, projection, and the history made of them."""

from __future__ import annotations

import numpy as np
import pytest

from lagscape.engine.history import PiecewiseHistory
from lagscape.engine.mesh import evaluation, gauss_places, integration, nodes, oversampling, points, tail_weights

DEGREES = [1, 2, 3, 6, 8, 12, 16, 20]
# Tolerance everywhere: rounding of an inverse of a well-conditioned Legendre matrix, a few hundred eps.
ROUNDING = 1e-13


def test_the_nodes_of_two_and_three_are_radau_s() -> None:
    # Oracle: the abscissae of Radau IIA, Hairer and Wanner, Solving ODEs II, section IV.5 (from memory).
    np.testing.assert_allclose(nodes(2), [1 / 3, 1.0], atol=ROUNDING)
    np.testing.assert_allclose(nodes(3), [(4 - np.sqrt(6)) / 10, (4 + np.sqrt(6)) / 10, 1.0], atol=ROUNDING)
    np.testing.assert_allclose(integration(2), [[5 / 12, -1 / 12], [3 / 4, 1 / 4]], atol=ROUNDING)


@pytest.mark.parametrize("n", DEGREES)
def test_integration_is_exact_for_its_polynomials_and_of_order_2n_minus_1_at_the_end(n: int) -> None:
    # Oracle: the integral of t^k is t^(k+1)/(k+1).
    for k in range(n):
        np.testing.assert_allclose(integration(n) @ nodes(n) ** k, nodes(n) ** (k + 1) / (k + 1), atol=ROUNDING)
    for k in range(2 * n - 1):
        assert abs(integration(n)[-1] @ nodes(n) ** k - 1 / (k + 1)) < ROUNDING
    assert abs(integration(n)[-1] @ nodes(n) ** (2 * n - 1) - 1 / (2 * n)) > 1e-14 or n > 8


@pytest.mark.parametrize("n", DEGREES)
def test_evaluation_is_exact_for_polynomials(n: int) -> None:
    places = np.linspace(0.0, 1.0, 7)
    np.testing.assert_allclose(evaluation(n, places) @ points(n) ** n, places**n, atol=ROUNDING)


@pytest.mark.parametrize("n", DEGREES)
def test_oversampling_keeps_a_polynomial_and_the_mean_of_anything(n: int) -> None:
    up, down = oversampling(n, 32)
    np.testing.assert_allclose(down @ (up @ points(n) ** (n - 1)), nodes(n) ** (n - 1), atol=ROUNDING)
    # A cut-off keeps its integral: least squares contains the constants.
    cut = np.maximum(gauss_places(32) - 0.37, 0.0)
    weights = np.polynomial.legendre.leggauss(32)[1] / 2
    assert abs(integration(n)[-1] @ (down @ cut) - weights @ cut) < ROUNDING


def test_the_tail_is_nought_for_what_is_resolved() -> None:
    assert np.abs(points(8) ** 6 @ tail_weights(8)).max() < ROUNDING
    assert np.abs(points(8) ** 8 @ tail_weights(8)).max() > 1e-6


def test_history_reads_back_polynomials_with_one_sided_limits() -> None:
    # Oracle: the polynomials themselves; x jumps at 3, so the side must be chosen.
    n = 6
    history = PiecewiseHistory(n, 1.0, np.array([4.0, -1.0]))
    edges = np.array([1.0, 3.0, 3.5])
    places = edges[:-1, None] + np.diff(edges)[:, None] * points(n)
    values = np.stack([np.where(places < 3.0, places**5, 0.0), places**2], axis=2)
    values[0, -1, 0], values[1, 0, 0] = 3.0**5, 7.0
    values[1, 1:, 0] = 7.0
    history.append(edges, values)
    at = np.array([-50.0, 0.999, 1.0, 2.5, 3.2])
    np.testing.assert_allclose(history.at(at, np.zeros(5, dtype=int)), [4.0, 4.0, 1.0, 2.5**5, 7.0], rtol=1e-12)
    np.testing.assert_allclose(history.at(at[3:], np.ones(2, dtype=int)), at[3:] ** 2, rtol=1e-12)
    border = np.array([3.0])
    assert history.at(border, np.array([0]), border - 1e-9)[0] == pytest.approx(243.0, rel=1e-12)
    assert history.at(border, np.array([0]), border + 1e-9)[0] == pytest.approx(7.0, rel=1e-12)
    assert history.end == 3.5


def test_history_grows() -> None:
    history = PiecewiseHistory(2, 0.0, np.array([1.0]))
    for i in range(300):
        history.append(np.array([i, i + 1.0]), np.full((1, 3, 1), float(i)))
    assert history.at(np.array([0.5, 250.5]), np.zeros(2, dtype=int)).tolist() == pytest.approx([0.0, 250.0])
