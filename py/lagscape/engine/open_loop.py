"""The open loop of a delayed feedback loop, exactly: L(s) = sum_j N_j(s) e^(-s tau_j) / D(s), and the closed loop 1 + L(s) = 0.

The loop is broken at the controlled signal v. With v held at its rest the plant is x' = M x + B v, M = A + v0 N, B = N x0 + b, so

    D(s)   = det(sI - M) det(sI - F)
    N_j(s) = -[g_j det(sI - F) + g_c adj(sI - F) G_j] [h_j adj(sI - M) B]

with g the gradient of the drive at rest. Determinants and adjugates come from the Faddeev-LeVerrier recursion, whose coefficients
are plain floats for one loop and arrays for a batch, so that the same lines serve both.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["OpenLoop", "open_loop", "resolvent"]


@dataclass(frozen=True)
class OpenLoop:
    """L(s) of one loop or of a batch.

    `coefficients` has shape (degree + 1, n_terms + 1, ...): powers of s from the highest down; first column D, then each N_j.
    `delays` holds tau_j in s for each term, floats or arrays of the batch's shape; equal delays are one term.
    """

    coefficients: Array
    delays: tuple[Any, ...]
    quadratics: tuple[tuple[Any, Any], ...] = ()
    """(p, q) of the factors s^2 + p s + q of D that come from two-state parts: where a resonance may hide."""

    @property
    def batch(self) -> tuple[int, ...]:
        return self.coefficients.shape[2:]

    @property
    def degree(self) -> int:
        return self.coefficients.shape[0] - 1

    @property
    def shortest_delay(self) -> Any:
        return np.minimum.reduce(np.broadcast_arrays(*self.delays)) if self.batch else min(self.delays)

    @property
    def longest_delay(self) -> Any:
        return np.maximum.reduce(np.broadcast_arrays(*self.delays)) if self.batch else max(self.delays)

    @cached_property
    def has_feedback(self) -> Any:
        """False (for each member) where every N_j is zero: nothing comes back."""
        return np.any(self.coefficients[:, 1:] != 0.0, axis=(0, 1))

    def shifted(self, seconds: Any) -> OpenLoop:
        """Every path's delay longer by `seconds` (s); a float or an array of the batch's shape."""
        return replace(self, delays=tuple(delay + seconds for delay in self.delays))

    def scaled(self, factor: Any) -> OpenLoop:
        """L times a real factor."""
        coefficients = self.coefficients.copy()
        coefficients[:, 1:] *= factor
        return replace(self, coefficients=coefficients)

    def member(self, mask: Any) -> OpenLoop:
        """The members of a one-axis batch that `mask` or an index array selects."""
        return OpenLoop(
            self.coefficients[:, :, mask],
            tuple(np.broadcast_to(delay, self.batch)[mask] for delay in self.delays),
            tuple((np.broadcast_to(p, self.batch)[mask], np.broadcast_to(q, self.batch)[mask]) for p, q in self.quadratics),
        )

    def resonances(self) -> list[tuple[Any, Any]]:
        """Frequency and half-width in rad/s of each quadratic factor with complex roots; the frequency is 0 where they are real."""
        return [(np.sqrt(np.maximum(q - 0.25 * p * p, 0.0)), 0.5 * np.abs(p)) for p, q in self.quadratics]

    # ---- arrays -------------------------------------------------------------------------------------------------------------
    def response(self, frequency: Array) -> np.ndarray:
        """L(i w), complex. `frequency` in rad/s has shape (n_frequencies, ...) with the batch's axes last."""
        square = -(frequency * frequency)
        total = self._on_axis(1, frequency, square)
        total *= _turn(frequency * self.delays[0])
        for index in range(1, len(self.delays)):
            term = self._on_axis(index + 1, frequency, square)
            term *= _turn(frequency * self.delays[index])
            total += term
        total /= self._on_axis(0, frequency, square)
        return total

    def envelope(self, frequency: Array) -> Array:
        """sum_j |N_j| / |D| at i w: an upper bound of |L(i w)| that no delay changes."""
        square = -(frequency * frequency)
        above: Any = 0.0
        for index in range(len(self.delays)):
            above = above + np.abs(self._on_axis(index + 1, frequency, square))
        return above / np.abs(self._on_axis(0, frequency, square))

    @cached_property
    def _polynomials(self) -> list[Array]:
        """D and each N_j without the leading powers that no member has, shape (degree_j + 1, ...)."""
        used = self.coefficients != 0.0
        used = np.any(used.reshape(*used.shape[:2], -1), axis=2)
        return [self.coefficients[int(np.argmax(column)) if column.any() else -1 :, j] for j, column in enumerate(used.T)]

    def _on_axis(self, column: int, frequency: Array, square: Array) -> np.ndarray:
        """D (column 0) or N_j at i w, the square being -w^2: even and odd powers are real and imaginary part, so Horner stays real."""
        coefficients = self._polynomials[column]
        degree = len(coefficients) - 1
        value = np.empty(np.broadcast_shapes(np.shape(frequency), coefficients.shape[1:]), dtype=complex)
        value.real = _real_horner(coefficients[degree % 2 :: 2], square)
        if degree:
            np.multiply(_real_horner(coefficients[1 - degree % 2 :: 2], square), frequency, out=value.imag)
        else:
            value.imag = 0.0
        return value

    def with_slope(self, s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """L and dL/ds at complex points of the batch's shape (or broadcasting with it)."""
        total: Any = 0.0
        total_slope: Any = 0.0
        for coefficients, delay in zip(self._polynomials[1:], self.delays, strict=True):
            value, slope = _with_derivative(coefficients, s)
            turn = _turn(s.imag * delay)
            turn *= np.exp(-s.real * delay)
            slope = (slope - delay * value) * turn
            total, total_slope = total + value * turn, total_slope + slope
        below, below_slope = _with_derivative(self._polynomials[0], s)
        ratio = total / below
        return ratio, (total_slope - ratio * below_slope) / below

    def with_slope_on_axis(self, frequency: Array) -> tuple[np.ndarray, np.ndarray]:
        """L and dL/ds at i w; `frequency` in rad/s has the batch's shape (or broadcasts with it). Real arithmetic, half the work."""
        total: Any = 0.0
        total_slope: Any = 0.0
        for index, delay in enumerate(self.delays):
            value, slope = self._with_slope_on_axis(index + 1, frequency)
            turn = _turn(frequency * delay)
            slope -= delay * value
            total, total_slope = total + value * turn, total_slope + slope * turn
        below, below_slope = self._with_slope_on_axis(0, frequency)
        ratio = total / below
        return ratio, (total_slope - ratio * below_slope) / below

    def _with_slope_on_axis(self, column: int, frequency: Array) -> tuple[np.ndarray, np.ndarray]:
        # P(s) = E(s^2) + s O(s^2): at s = i w, with x = -w^2, P = E + i w O and P' = O + 2 x O' + 2 i w E'.
        coefficients, square = self._polynomials[column], -(frequency * frequency)
        degree = len(coefficients) - 1
        even, even_slope = _with_derivative(coefficients[degree % 2 :: 2], square)
        odd, odd_slope = _with_derivative(coefficients[1 - degree % 2 :: 2], square) if degree else (0.0, 0.0)
        value = np.empty(np.broadcast_shapes(np.shape(frequency), coefficients.shape[1:]), dtype=complex)
        slope = np.empty_like(value)
        value.real, value.imag = even, odd * frequency
        slope.real, slope.imag = odd + 2.0 * square * odd_slope, 2.0 * frequency * even_slope
        return value, slope

    # ---- one loop, plain floats -----------------------------------------------------------------------------------------------
    @cached_property
    def _columns(self) -> list[list[float]]:
        return np.asarray(self.coefficients.T).tolist()

    def characteristic_at(self, s: complex) -> tuple[complex, complex, float]:
        """F = D + sum_j N_j e^(-s tau_j), dF/ds and the sum of the sizes of all its monomials, for one loop at one point."""
        value, slope, size = 0j, 0j, 0.0
        reach = abs(s)
        for column, delay in zip(self._columns, (0.0, *self.delays), strict=True):
            term, term_slope, weight = 0j, 0j, 0.0
            for coefficient in column:
                term_slope = term_slope * s + term
                term = term * s + coefficient
                weight = weight * reach + abs(coefficient)
            if delay:
                turn = cmath.exp(-s * delay)
                term_slope = (term_slope - delay * term) * turn
                term *= turn
                weight *= abs(turn)
            value += term
            slope += term_slope
            size += weight
        return value, slope, size

    def quasi_polynomial_at(self, s: complex) -> tuple[complex, complex]:
        """F and dF/ds alone, for one loop at one point."""
        below, below_slope = _horner(self._columns[0], s)
        above, above_slope = self._fed_back(s)
        return below + above, below_slope + above_slope

    def at(self, s: complex) -> tuple[complex, complex]:
        """L and dL/ds for one loop at one point; s must not be a root of D."""
        below, below_slope = _horner(self._columns[0], s)
        above, above_slope = self._fed_back(s)
        ratio = above / below
        return ratio, (above_slope - ratio * below_slope) / below

    def _fed_back(self, s: complex) -> tuple[complex, complex]:
        """sum_j N_j e^(-s tau_j) and its derivative."""
        value, slope = 0j, 0j
        for column, delay in zip(self._columns[1:], self.delays, strict=True):
            term, term_slope = _horner(column, s)
            turn = cmath.exp(-s * delay)
            value += term * turn
            slope += (term_slope - delay * term) * turn
        return value, slope

    @cached_property
    def poles(self) -> np.ndarray:
        """Roots of D for one loop, complex, 1/s."""
        return np.roots(self.coefficients[:, 0])


def open_loop(form: DriveForm, rest: Rest) -> OpenLoop:
    """The open loop at this rest, exact.

    Parameters
    ----------
    form : DriveForm
        One loop or a batch.
    rest : Rest
        Its equilibrium; its batch axes broadcast with the form's.

    Raises
    ------
    InvalidInputError
        If a delay is not finite and positive.

    References
    ----------
    Faddeev and Faddeeva 1963, Computational Methods of Linear Algebra, section 47 (from memory).
    """
    for delay in form.sensed_delays:
        if not (0.0 < delay < math.inf if isinstance(delay, float) else np.all(np.isfinite(delay) & (np.asarray(delay) > 0.0))):
            raise InvalidInputError(f"Every delay must be finite and positive (s); got {np.min(delay):.6g}.")
    n_plant, n_sensed = form.n_plant, form.n_sensed
    x0, c0 = rest.state[:n_plant], rest.state[n_plant:]
    sensed = form.sensed_rows @ x0 if x0.ndim == 1 else np.tensordot(form.sensed_rows, x0, axes=(1, 0))
    slopes = np.asarray(form.drive.gradient(sensed, c0), dtype=float)
    law_shape, gradient = slopes.shape[1:], _elements(slopes)
    v0 = rest.output
    by_output = [_elements(row) for row in form.plant_by_output]
    plant = [
        [_sum(entry, _times(v0, by)) for entry, by in zip(_elements(row), by_row, strict=True)]
        for row, by_row in zip(form.plant, by_output, strict=True)
    ]
    state = _elements(x0)
    push = [
        _sum(entry, _dot(by_row, state))
        for entry, by_row in zip(_elements(form.input_vector), by_output, strict=True)
    ]
    plant_determinant, plant_adjugate = resolvent(plant)
    control_determinant, control_adjugate = resolvent([_elements(row) for row in form.control])
    inputs = [_elements(row) for row in form.control_by_sensed]

    answer = [_vector_product(matrix, push) for matrix in plant_adjugate]
    grouped: list[tuple[Any, list[Any]]] = []
    for j in range(n_sensed):
        row = form.sensed_rows[j].tolist()
        seen = [_dot(row, vector) for vector in answer]
        law = [_times(gradient[j], value) for value in control_determinant]
        for k, matrix in enumerate(control_adjugate):
            reply = _vector_product(matrix, [inputs[i][j] for i in range(form.n_control)])
            law[k + 1] = _sum(law[k + 1], _dot(gradient[n_sensed:], reply))
        numerator = [_times(-1.0, value) for value in _polynomial_product(law, seen)]
        delay = form.sensed_delays[j]
        for index, (known, total) in enumerate(grouped):
            if known is delay or (isinstance(known, float) and isinstance(delay, float) and known == delay) or np.array_equal(known, delay):
                grouped[index] = (known, [_sum(a, b) for a, b in zip(total, numerator, strict=True)])
                break
        else:
            grouped.append((delay, numerator))

    denominator = _polynomial_product(plant_determinant, control_determinant)
    degree = len(denominator) - 1
    quadratics = tuple((part[1], part[2]) for part in (plant_determinant, control_determinant) if len(part) == 3)
    table = [denominator] + [[0.0] * (degree + 1 - len(total)) + total for _, total in grouped]
    shapes = (form.plant.shape[2:], rest.state.shape[1:], law_shape, *(np.shape(delay) for delay, _ in grouped))
    batch = np.broadcast_shapes(*shapes) if any(shapes) else ()
    if not batch:
        return OpenLoop(np.array(table, dtype=float).T.copy(), tuple(float(delay) for delay, _ in grouped), quadratics)
    coefficients = np.zeros((degree + 1, len(table), *batch))
    for column, values in enumerate(table):
        for power, value in enumerate(values):
            coefficients[power, column] = value
    return OpenLoop(coefficients, tuple(delay for delay, _ in grouped), quadratics)


# ---- algebra on entries that are floats (one loop) or arrays (a batch); the float 0 stands for "nothing there" --------------------
def _elements(values: Any) -> list[Any]:
    array = np.asarray(values, dtype=float)
    if array.ndim == 1:  # one loop
        return array.tolist()
    return [entry if entry.any() else 0.0 for entry in array]


def _times(a: Any, b: Any) -> Any:
    if (a.__class__ is float and a == 0.0) or (b.__class__ is float and b == 0.0):
        return 0.0
    return a * b


def _sum(*values: Any) -> Any:
    total: Any = 0.0
    for value in values:
        if value.__class__ is not float or value != 0.0:
            total = total + value
    return total


def _dot(a: list[Any], b: list[Any]) -> Any:
    total: Any = 0.0
    for left, right in zip(a, b, strict=True):
        if (left.__class__ is float and left == 0.0) or (right.__class__ is float and right == 0.0):
            continue
        total = total + left * right
    return total


def _vector_product(matrix: list[list[Any]], vector: list[Any]) -> list[Any]:
    return [_dot(row, vector) for row in matrix]


def _polynomial_product(a: list[Any], b: list[Any]) -> list[Any]:
    product: list[Any] = [0.0] * (len(a) + len(b) - 1)
    for i, left in enumerate(a):
        for j, right in enumerate(b):
            product[i + j] = product[i + j] + _times(left, right)
    return product


def _turn(angle: Array) -> np.ndarray:
    """e^(-i angle)."""
    turn = np.empty(np.shape(angle), dtype=complex)
    np.cos(angle, out=turn.real)
    np.sin(angle, out=turn.imag)
    np.negative(turn.imag, out=turn.imag)
    return turn


def _real_horner(coefficients: Array, x: Array) -> Array:
    """A polynomial, its coefficients from the highest power down along the first axis, at real places."""
    value: Array = coefficients[0]
    for row in coefficients[1:]:
        value = value * x
        value += row
    return value


def _with_derivative(coefficients: Array, x: Array) -> tuple[Any, Any]:
    """The same and its derivative, at real or complex places."""
    value: Any = coefficients[0]
    slope: Any = 0.0
    for power, row in enumerate(coefficients[1:]):
        slope = slope * x + value if power else value
        value = value * x + row
    return value, slope


def _horner(column: list[float], s: complex) -> tuple[complex, complex]:
    """A polynomial, its coefficients from the highest power down, and its derivative."""
    value, slope = 0j, 0j
    for coefficient in column:
        slope = slope * s + value
        value = value * s + coefficient
    return value, slope


def resolvent(matrix: list[list[Any]]) -> tuple[list[Any], list[list[list[Any]]]]:
    """det(sI - M) as coefficients from the highest power down, and adj(sI - M) as matrices of the same powers, one fewer."""
    size = len(matrix)
    determinant: list[Any] = [1.0]
    adjugate: list[list[list[Any]]] = []
    current: list[list[Any]] = [[1.0 if i == j else 0.0 for j in range(size)] for i in range(size)]
    for k in range(1, size + 1):
        adjugate.append(current)
        columns = [_vector_product(matrix, [current[i][j] for i in range(size)]) for j in range(size)]
        trace = _sum(*(columns[i][i] for i in range(size)))
        coefficient = _times(-1.0 / k, trace)
        determinant.append(coefficient)
        current = [[_sum(columns[j][i], coefficient if i == j else 0.0) for j in range(size)] for i in range(size)]
    return determinant, adjugate
