"""One step of the plant on a fixed mesh when the controlled signal is already known.

    x'(t) = A x + v (N x + b) + e + w(t),        v and w known at the Radau nodes of m pieces

A one-state plant has a closed-form integrating factor. A linear plant (N = 0) is one constant matrix. Any other is solved in groups of a
few pieces: with N = R S, S picking the few states z that v multiplies, z = Z x_start + Z_v v + Z_w w + K (v z) is a small linear system,
and everything else is one constant matrix times (x_start, v, v z, w). (One small system a piece and a chain of their ends is no faster:
the calls cost what the smaller systems save, natively and in the browser.)
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np

from lagscape.engine.mesh import Kept, integration, nodes
from lagscape.loops.protocol import Array, DriveForm

__all__ = ["MOST_DECAY", "GroupedStep", "LinearStep", "ScalarStep", "chained_operator", "plant_step"]

_groups = Kept(32)
_linear = Kept(4)

MOST_DECAY = 10.0
"""Largest integral of the decay rate over a piece before the integrating factor swamps the piece's start (numerical experiment)."""

_MOST_UNKNOWNS = 40
"""Largest system solved at once; two of half the size cost more calls, one of twice the size more arithmetic."""


def chained_operator(matrix: Array, lengths: Array, n: int) -> tuple[Array, Array]:
    """For x' = A x + w over m pieces in a row: x at the points = Y0 x_start + Yw w.

    Returns
    -------
    Y0, Yw : shapes (n_x, m, n + 1, n_x) and (n_x, m, n + 1, n_x, m, n)
        w is given at the nodes.
    """
    size, m = len(matrix), len(lengths)
    q = integration(n)
    system = -(matrix[:, None, :, None] * q[None, :, None, :]).reshape(size * n, size * n) * lengths[:, None, None]
    diagonal = np.arange(size * n)
    system[:, diagonal, diagonal] += 1.0
    right = np.zeros((size, n, size * (1 + n)))
    for i in range(size):
        right[i, :, i] = 1.0
        right[i, :, size + i * n : size + (i + 1) * n] = q
    solved = np.linalg.solve(system, right.reshape(1, size * n, -1).repeat(m, axis=0)).reshape(m, size, n, -1)
    start_part = solved[..., :size]
    forcing_part = (solved[..., size:] * lengths[:, None, None, None]).reshape(m, size, n, size, n)
    at_start = np.eye(size)
    by_forcing = np.zeros((size, size * m * n))
    y0 = np.empty((size, m, n + 1, size))
    yw = np.zeros((size, m, n + 1, size, m, n))
    flat = yw.reshape(size, m, n + 1, -1)
    for i in range(m):
        y0[:, i, 0], flat[:, i, 0] = at_start, by_forcing
        y0[:, i, 1:] = start_part[i] @ at_start
        flat[:, i, 1:] = start_part[i] @ by_forcing
        yw[:, i, 1:, :, i, :] += forcing_part[i]
        at_start, by_forcing = y0[:, i, n], flat[:, i, n]
    return y0, yw


class ScalarStep:
    """One state: x = (x_start + integral of g exp(int a)) / exp(int a), with a = -(A + v N), g = v b + e + w."""

    def __init__(self, form: DriveForm, rows: Array, lengths: Array, n: int) -> None:
        self._a0, self._a1 = -float(form.plant[0, 0]), -float(form.plant_by_output[0, 0])
        self._b, self._e = float(form.input_vector[0]), float(form.constant[0])
        # Pieces of one length, the usual case, have that length folded into the matrices: two array calls less a step.
        longest = float(lengths.max())
        self._scale = None if lengths.min() > longest * (1.0 - 1e-13) else lengths[:, None] / longest
        self._q = longest * integration(n).T
        self._rate_q, self._constant_q = self._a1 * self._q, self._e * self._q
        self._constant = self._a0 * lengths[:, None] * nodes(n)
        self._row = rows[:, 0][:, None, None]
        self._plain = len(rows) == 1 and float(rows[0, 0]) == 1.0
        self._shape = (len(lengths), n + 1)

    def _exponent(self, v: Array) -> Array:
        exponent: Array = v.dot(self._rate_q)
        if self._scale is not None:
            exponent *= self._scale
        if self._a0 != 0.0:
            exponent += self._constant
        return exponent

    def _gain(self, v: Array, growth: Array, forcing: Array | None) -> Array:
        if self._b == 0.0 and forcing is None:
            gain: Array = growth.dot(self._constant_q)
        else:
            source = self._b * v + self._e
            if forcing is not None:
                source += forcing
            source *= growth
            gain = source.dot(self._q)
        if self._scale is not None:
            gain *= self._scale
        return gain

    def advance(self, start: Array, v: Array, forcing: Array | None, into: Array) -> Array:
        """Fills `into`, (n_rows, m, n + 1), with the observed signals and returns the end state. `forcing`: (n_plant, m, n) or None."""
        growth = np.exp(self._exponent(v))
        gained = self._gain(v, growth, None if forcing is None else forcing[0])
        x = float(start[0])
        starts = []
        for gain, factor in zip(gained[:, -1].tolist(), growth[:, -1].tolist(), strict=True):
            starts.append(x)
            x = (x + gain) / factor
        values = into[0] if self._plain else np.empty(self._shape)
        values[:, 0] = starts
        gained += values[:, :1]
        np.divide(gained, growth, out=values[:, 1:])
        if not self._plain:
            np.multiply(self._row, values, out=into)
        return np.array([x])

    def states(self, starts: Array, v: Array, forcing: Array | None) -> Array:
        """All states of all steps at the points, shape (n_steps, m, n + 1, n_plant); `forcing`: (n_steps, n_plant, m, n) or None."""
        growth = np.exp(self._exponent(v))
        gained = self._gain(v, growth, None if forcing is None else forcing[:, 0])
        values = np.empty((len(starts), *self._shape))
        x = starts[:, 0]
        for i in range(self._shape[0]):
            values[:, i, 0] = x
            x = (x + gained[:, i, -1]) / growth[:, i, -1]
        values[..., 1:] = (values[..., :1] + gained) / growth
        return values[..., None]

    def trusted(self, v: Array) -> bool:
        """Whether no piece decays (or grows) so far that the integrating factor loses the start of the piece."""
        ends = np.abs(self._exponent(v)[..., -1])
        return not ends.size or bool(ends.max() <= MOST_DECAY)


class LinearStep:
    """A plant that v does not multiply: one constant matrix from (start, 1, v) to everything on a step."""

    def __init__(self, form: DriveForm, rows: Array, lengths: Array, n: int) -> None:
        self._size, self._n, self._m, self._n_rows = form.n_plant, n, len(lengths), len(rows)
        numbers = (form.plant, form.input_vector, form.constant, rows)
        key = (n, len(rows), self._size, *(np.asarray(item).tobytes() for item in numbers), lengths.tobytes())
        self._state, self._state_forcing, self._output, self._output_forcing = _linear(
            key, partial(self._built, form, rows, lengths, n)
        )
        self._input = np.ones(self._output.shape[1])

    @staticmethod
    def _built(form: DriveForm, rows: Array, lengths: Array, n: int) -> tuple[Array, ...]:
        size, points, unknowns = form.n_plant, len(lengths) * (n + 1), len(lengths) * n
        y0, yw = chained_operator(form.plant, lengths, n)
        by_forcing = yw.reshape(size * points, size, unknowns)
        constant = (by_forcing.sum(axis=2) @ form.constant)[:, None]
        state = np.concatenate([y0.reshape(size * points, size), constant, form.input_vector @ by_forcing], axis=1)
        forced = by_forcing.reshape(size * points, -1)
        # What is observed at all points, then the state at the end.
        output, output_forced = (
            np.concatenate([(rows @ table.reshape(size, -1)).reshape(len(rows) * points, -1), table[points - 1 :: points]])
            for table in (state, forced)
        )
        return state, forced, output, output_forced

    def advance(self, start: Array, v: Array, forcing: Array | None, into: Array) -> Array:
        """As ScalarStep.advance."""
        self._input[: self._size] = start
        self._input[self._size + 1 :] = v.reshape(-1)
        result = self._output.dot(self._input)
        if forcing is not None:
            result += self._output_forcing.dot(forcing.reshape(-1))
        into[:] = result[: -self._size].reshape(self._n_rows, self._m, self._n + 1)
        return result[-self._size :]

    def states(self, starts: Array, v: Array, forcing: Array | None) -> Array:
        """As ScalarStep.states."""
        count = len(starts)
        inputs = np.concatenate([starts, np.ones((count, 1)), v.reshape(count, -1)], axis=1)
        values = inputs @ self._state.T
        if forcing is not None:
            values += forcing.reshape(count, -1) @ self._state_forcing.T
        return np.moveaxis(values.reshape(count, self._size, self._m, self._n + 1), 1, 3)

    def trusted(self, v: Array) -> bool:
        return True


class _Group:
    """A few pieces solved together."""

    def __init__(self, form: DriveForm, rows: Array, lengths: Array, n: int, picked: Any) -> None:
        size, m = form.n_plant, len(lengths)
        unknowns, points = m * n, m * (n + 1)
        y0, yw = chained_operator(form.plant, lengths, n)
        by_forcing = yw.reshape(size * points, size, unknowns)
        columns = [y0.reshape(size * points, size), (by_forcing.sum(axis=2) @ form.constant)[:, None]]
        self.has_b = bool(np.any(form.input_vector))
        if self.has_b:
            columns.append((form.input_vector @ by_forcing).reshape(size * points, unknowns))
        known = np.concatenate(columns, axis=1)
        spread = form.plant_by_output[:, picked].T  # R, one row a solved state
        by_product = (spread @ by_forcing).reshape(size * points, -1)
        self.forcing = np.ascontiguousarray(by_forcing.reshape(size * points, -1))
        self.state = np.concatenate([known, by_product], axis=1)
        z_rows = (picked[:, None, None] * points + np.arange(m)[:, None] * (n + 1) + np.arange(1, n + 1)).reshape(-1)
        self.z_known, self.kernel, self.z_forcing = (
            np.ascontiguousarray(known[z_rows]), np.ascontiguousarray(by_product[z_rows]), self.forcing[z_rows],
        )  # fmt: skip
        by_state = self.state.reshape(size, points, -1)
        observed = (rows @ by_state.reshape(size, -1)).reshape(len(rows) * points, -1)
        self.output = np.concatenate([observed, by_state[:, -1]])
        self.output_forcing = np.concatenate(
            [(rows @ self.forcing.reshape(size, -1)).reshape(len(rows) * points, -1), self.forcing.reshape(size, points, -1)[:, -1]]
        )
        self.identity = np.eye(len(z_rows))
        self.inputs = np.ones(self.state.shape[1])
        self.known = known.shape[1]
        self.end = len(rows) * points


class GroupedStep:
    """Any plant whose states v multiplies; see the module."""

    def __init__(self, form: DriveForm, rows: Array, lengths: Array, n: int) -> None:
        picked = np.flatnonzero(np.any(form.plant_by_output != 0.0, axis=0))
        size = form.n_plant
        self._size, self._n, self._m, self._r, self._n_rows = size, n, len(lengths), len(picked), len(rows)
        per_group = max(1, _MOST_UNKNOWNS // (n * self._r))
        parts = np.array_split(np.arange(self._m), -(-self._m // per_group))
        numbers = (form.plant, form.plant_by_output, form.input_vector, form.constant, rows)
        shared = (n, len(rows), size, *(np.asarray(item).tobytes() for item in numbers))
        groups: dict[bytes, _Group] = {}
        self._groups: list[tuple[int, int, _Group]] = []
        for part in parts:
            own = lengths[part]
            key = np.round(own / lengths.max(), 9).tobytes()
            if key not in groups:
                groups[key] = _groups((*shared, own.tobytes()), partial(_Group, form, rows, own, n, picked))
            self._groups.append((int(part[0]), int(part[-1]) + 1, groups[key]))
        self._inputs: list[list[Array]] = [[] for _ in self._groups]

    def advance(self, start: Array, v: Array, forcing: Array | None, into: Array) -> Array:
        """As ScalarStep.advance. It keeps what `states` needs, so steps must be taken in order."""
        size, n = self._size, self._n
        for (first, last, group), kept in zip(self._groups, self._inputs, strict=True):
            inputs = group.inputs.copy()
            inputs[:size] = start
            own = v[first:last].reshape(-1)
            if group.has_b:
                inputs[size + 1 : size + 1 + len(own)] = own
            flat = None if forcing is None else forcing[:, first:last].reshape(-1)
            right = group.z_known.dot(inputs[: group.known])
            if flat is not None:
                right += group.z_forcing.dot(flat)
            repeated = own if self._r == 1 else np.concatenate([own] * self._r)
            z = np.linalg.solve(group.identity - group.kernel * repeated, right)
            np.multiply(z, repeated, out=inputs[group.known :])
            result = group.output.dot(inputs)
            if flat is not None:
                result += group.output_forcing.dot(flat)
            into[:, first:last] = result[: group.end].reshape(self._n_rows, last - first, n + 1)
            start = result[group.end :]
            kept.append(inputs)
        return start

    def states(self, starts: Array, v: Array, forcing: Array | None) -> Array:
        """As ScalarStep.states."""
        count, size = len(starts), self._size
        values = np.empty((count, self._m, self._n + 1, size))
        for (first, last, group), kept in zip(self._groups, self._inputs, strict=True):
            result = np.array(kept[:count]).reshape(count, -1) @ group.state.T
            if forcing is not None:
                result += forcing[:, :, first:last].reshape(count, -1) @ group.forcing.T
            values[:, first:last] = np.moveaxis(result.reshape(count, size, last - first, self._n + 1), 1, 3)
        return values

    def trusted(self, v: Array) -> bool:
        return True


def plant_step(form: DriveForm, rows: Array, lengths: Array, n: int, stiff: bool = False) -> Any:
    """The step that fits the form. `stiff` forbids the integrating factor where it was not to be trusted."""
    if not np.any(form.plant_by_output):
        return LinearStep(form, rows, lengths, n)
    return (ScalarStep if form.n_plant == 1 and not stiff else GroupedStep)(form, rows, lengths, n)
