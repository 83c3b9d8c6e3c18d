"""The rightmost characteristic roots of one loop: a pseudospectral generator for the seeds, Newton steps for the digits.

The generator keeps history only of what is delayed. With one delay that is a single scalar, the drive's answer, because in a loop of
one controlled signal the delay may stand anywhere along the loop; with several it is one scalar for each distinct sensed row. The
seeds are polished on the quasi-polynomial D + sum_j N_j e^(-s tau_j). Two more families of seeds stand beside them, the phase
crossovers and the poles of the open loop, and the count of unstable roots by Nyquist's criterion says whether a root was missed; if so the
generator is made finer.

References
----------
Breda, Maset, Vermiglio 2005, SIAM J. Sci. Comput. 27, 482-495 (from memory).
Trefethen 2000, Spectral Methods in MATLAB, chapter 6 (from memory).
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from enum import StrEnum
from functools import lru_cache

import numpy as np

from lagscape.engine.margins import Margins, margins
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["RootStatus", "Roots", "crossing_root", "generator_eigenvalues", "polish_root", "rightmost_roots"]

_NODES = 14
_FINER = (24, 40, 72)
_RESIDUAL = 1e-12
"""Of F relative to the sum of its terms' sizes: a root polished to rounding has a few 1e-16."""
_REAL = 1e-8
"""|Im s| below this share of |s| counts as real: a double real root splits by the square root of rounding."""


class RootStatus(StrEnum):
    """How the roots came out."""

    CONVERGED = "converged"
    NO_OSCILLATORY_ROOT = "no_oscillatory_root"
    """Every root found is real: nothing rings. The real roots are given."""
    COUNT_DISAGREES = "count_disagrees"
    """The roots found do not match Nyquist's count of unstable ones: read the growth rate with caution."""


@dataclass(frozen=True)
class Roots:
    """The rightmost roots of one loop. Of a complex pair the member with positive imaginary part stands for both."""

    values: tuple[complex, ...]
    """1/s, by falling real part."""
    residuals: tuple[float, ...]
    """|D + sum N_j e^(-s tau_j)| over the sum of the terms' sizes, for each."""
    spectral_abscissa: float
    """1/s, the largest real part; positive means that the loop does not settle."""
    oscillatory: complex | None
    """1/s, the dominant oscillation: of an unstable loop the rightmost pair, of a stable one the pair that the deciding phase
    crossover becomes, the one that would hunt if the gain were raised. (A pair of the slow stores may lie to its right; it dies within
    its own period and nobody would call it a cycle.)"""
    slow_real: float | None
    """1/s, the rightmost real root: how slowly the stores come back, without a cycle."""
    status: RootStatus

    @property
    def growth_rate_per_s(self) -> float | None:
        """Growth of the dominant oscillation, 1/s; negative while it dies."""
        return None if self.oscillatory is None else self.oscillatory.real

    @property
    def cycle_length_s(self) -> float | None:
        """Period of the dominant oscillation, s."""
        return None if self.oscillatory is None else 2.0 * math.pi / self.oscillatory.imag


def rightmost_roots(
    form: DriveForm, rest: Rest, count: int = 4, opened: OpenLoop | None = None, known: Margins | None = None
) -> Roots:
    """The `count` rightmost roots of one loop, polished to rounding.

    Parameters
    ----------
    form : DriveForm
        One loop, not a batch.
    rest : Rest
    count : int
        How many roots to give, a complex pair counted once. The dominant oscillatory and the slow real root are found besides.
    opened, known : optional
        The open loop and the margins of the same form and rest, if the caller has them already.
    """
    opened = open_loop(form, rest) if opened is None else opened
    known = margins(form, rest, opened) if known is None else known
    seeds = [*_crossing_seeds(opened, known), *(complex(item) for item in opened.poles.tolist() if item.imag >= 0.0)]
    found: dict[complex, float] = {}
    agrees = False
    for nodes in (_NODES, *_FINER):
        seeds += generator_eigenvalues(form, rest, nodes)[: max(count, known.unstable_roots // 2) + 4]
        for seed in seeds:
            # A seed this near a root that is known already would only lead there again.
            if not any(abs(seed - root) <= 1e-4 * abs(root) for root in found):
                _keep(found, opened, seed)
        agrees = sum(1 if root.imag == 0.0 else 2 for root in found if root.real > 0.0) == known.unstable_roots
        if agrees or not known.complete or _on_boundary(found):
            agrees = True
            break
        seeds = []
    ordered = sorted(found, key=lambda root: -root.real)
    oscillatory = next((root for root in ordered if root.imag > 0.0), None)
    deciding = crossing_root(opened, known.phase_crossover_frequency) if known.phase_crossover_frequency else None
    if known.stable and deciding is not None:
        own, residual = polish_root(opened, deciding)
        if residual < _RESIDUAL and own.imag > _REAL * abs(own):
            oscillatory = own
    slow = next((root.real for root in ordered if root.imag == 0.0), None)
    status = RootStatus.CONVERGED if agrees else RootStatus.COUNT_DISAGREES
    if agrees and oscillatory is None:
        status = RootStatus.NO_OSCILLATORY_ROOT
    given = ordered[:count]
    abscissa = ordered[0].real if ordered else math.nan
    return Roots(tuple(given), tuple(found[root] for root in given), abscissa, oscillatory, slow, status)


def polish_root(opened: OpenLoop, seed: complex) -> tuple[complex, float]:
    """Newton steps on the quasi-polynomial from `seed`; the root (1/s) and its relative residual (1 where they did not settle)."""
    s = seed
    farthest = 700.0 / opened.longest_delay
    last = math.inf
    # While the steps are long the residual decides nothing, so the terms' sizes are left out.
    for _ in range(40):
        if not abs(s.real) < farthest:
            return s, 1.0
        value, slope = opened.quasi_polynomial_at(s)
        if value == 0.0 or slope == 0.0:
            break
        step = value / slope
        s -= step
        if abs(step) <= 1e-7 * abs(s):
            break
    for _ in range(10):
        if not abs(s.real) < farthest:
            return s, 1.0
        value, slope, size = opened.characteristic_at(s)
        if size == 0.0 or value == 0.0:
            return s, 0.0
        residual = abs(value) / size
        if residual < 4e-16 or (residual < 1e-13 and residual >= last) or slope == 0.0:
            return s, residual
        last = residual
        s -= value / slope
    value, _, size = opened.characteristic_at(s) if abs(s.real) < farthest else (1.0, 0.0, 1.0)
    return s, abs(value) / size


def _keep(found: dict[complex, float], opened: OpenLoop, seed: complex) -> None:
    root, residual = polish_root(opened, seed)
    if not residual < _RESIDUAL:
        return
    if abs(root.imag) <= _REAL * abs(root):
        # A complex seed ends a rounding away from the axis; the real root itself is wanted.
        root, residual = polish_root(opened, complex(root.real))
        if not residual < _RESIDUAL:
            return
        root = complex(root.real)
    root = complex(root.real, abs(root.imag))
    if not any(abs(root - other) <= 1e-7 * abs(root) for other in found):
        found[root] = residual


def _on_boundary(found: dict[complex, float]) -> bool:
    """A root on the axis to rounding may be counted on either side by either method: no disagreement."""
    return any(abs(root.real) <= 1e-9 * abs(root) for root in found)


def _crossing_seeds(opened: OpenLoop, known: Margins) -> list[complex]:
    """From i w at each strong phase crossover, the deciding one first, to the root that it becomes as the gain passes 1."""
    frequencies = [item.frequency for item in sorted(known.phase_crossovers, key=lambda item: -item.gain)[: 3 + known.unstable_roots // 2]]
    if known.phase_crossover_frequency is not None:
        frequencies = [known.phase_crossover_frequency, *(w for w in frequencies if w != known.phase_crossover_frequency)]
    found = (crossing_root(opened, w) for w in frequencies)
    return [s for s in found if s is not None]


def crossing_root(opened: OpenLoop, frequency: float) -> complex | None:
    """Newton steps on log(-L) = 0 from i w, each at most 0.4 |s| long; None where they do not settle above the real axis."""
    s = 1j * frequency
    for _ in range(12):
        value, slope = opened.at(s)
        if not slope or not value:
            return None
        step = cmath.log(-value) * value / slope
        length = abs(step)
        if length > 0.4 * abs(s):
            step *= 0.4 * abs(s) / length
        s -= step
        if length <= 1e-8 * abs(s):
            return s if s.imag > _REAL * abs(s) else None
    return None


@lru_cache(maxsize=16)
def _chebyshev(nodes: int) -> tuple[Array, Array, Array]:
    """Points on [-1, 1] from 1 down, their differentiation matrix, and barycentric weights."""
    index = np.arange(nodes + 1)
    point = np.cos(math.pi * index / nodes)
    weight = (-1.0) ** index
    weight[[0, -1]] *= 0.5
    difference = point[:, None] - point[None, :] + np.eye(nodes + 1)
    matrix = weight[None, :] / weight[:, None] / difference
    np.fill_diagonal(matrix, 0.0)
    matrix -= np.diag(matrix.sum(axis=1))
    return point, matrix, weight


def _interpolation(nodes: int, at: float) -> Array:
    point, _, weight = _chebyshev(nodes)
    distance = at - point
    hit = np.flatnonzero(np.abs(distance) < 1e-14)
    if hit.size:
        row = np.zeros(nodes + 1)
        row[hit[0]] = 1.0
        return row
    row = weight / distance
    return row / row.sum()


def generator_eigenvalues(form: DriveForm, rest: Rest, nodes: int = _NODES) -> list[complex]:
    """Eigenvalues (1/s) of the discretised generator with Im >= 0, by falling real part: approximate roots, unpolished."""
    n, m = form.n_plant, form.n_control
    sensed = form.sensed_rows @ rest.state[:n]
    gradient = np.asarray(form.drive.gradient(sensed, rest.state[n:]), dtype=float)
    by_sensed, by_control = gradient[: form.n_sensed], gradient[form.n_sensed :]
    plant = form.plant + rest.output * form.plant_by_output
    push = form.plant_by_output @ rest.state[:n] + form.input_vector
    delays = form.delays
    longest = delays[-1]
    _, matrix, _ = _chebyshev(nodes)
    matrix = matrix * (2.0 / longest)
    if len(delays) == 1:
        # One delay: put it behind the controller and keep the history of the drive's answer alone.
        present = np.concatenate([by_sensed @ form.sensed_rows, by_control])[None]
        size = n + m + nodes
        total = np.zeros((size, size))
        total[:n, :n] = plant
        total[:n, -1] = push
        total[n : n + m, :n] = form.control_by_sensed @ form.sensed_rows
        total[n : n + m, n : n + m] = form.control
        rows = 1
    else:
        keys = [tuple(row) for row in form.sensed_rows.tolist()]
        distinct = list(dict.fromkeys(keys))
        which = [distinct.index(key) for key in keys]
        rows = len(distinct)
        present = np.concatenate([np.array(distinct), np.zeros((rows, m))], axis=1)
        size = n + m + rows * nodes
        total = np.zeros((size, size))
        total[:n, :n] = plant
        total[:n, n : n + m] = np.outer(push, by_control)
        total[n : n + m, n : n + m] = form.control
        for j, delay in enumerate(form.sensed_delays):
            look = _interpolation(nodes, 1.0 - 2.0 * float(delay) / longest)
            first = n + m + which[j] * nodes
            target = np.concatenate([push * by_sensed[j], form.control_by_sensed[:, j]])
            total[: n + m, first : first + nodes] += np.outer(target, look[1:])
            total[: n + m, : n + m] += np.outer(target, look[0] * present[which[j]])
    for row in range(rows):
        first = n + m + row * nodes
        total[first : first + nodes, first : first + nodes] = matrix[1:, 1:]
        total[first : first + nodes, : n + m] += np.outer(matrix[1:, 0], present[row])
    values = np.linalg.eigvals(total)
    values = values[values.imag >= 0.0]
    return [complex(value) for value in values[np.argsort(-values.real)].tolist()]
