"""Maps over any two numbers of a loop: growth, period and loop gain everywhere; the cycle's size and silence where it hunts.

Both kinds come coarse first and then finer, from generators that a caller may stop at any moment.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.cycle import first_harmonic_gain
from lagscape.engine.harmonic import Balance, Harmonics, prepare, solve
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.engine.two_parameters import with_named
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, Loop

__all__ = ["CycleMap", "LinearMap", "cycle_map", "linear_map", "progressive_cycle_map", "progressive_linear_map"]

_CYCLE_ORDER = 6
_FINE = 64
_CHUNK = 2000
"""Cells worked on at once, so that a large map does not ask for gigabytes."""


@dataclass(frozen=True)
class LinearMap:
    """Over a grid, arrays of shape (n_second, n_first): rows by the second number (upright), columns by the first (across)."""

    names: tuple[str, str]
    first: Array
    second: Array
    stable: np.ndarray
    loop_gain: Array
    """0 where the loop has no phase crossover."""
    growth_rate_per_s: Array
    """Of the dominant oscillation; 0 where `oscillates` is False."""
    cycle_length_s: Array
    oscillates: np.ndarray
    """False where no root oscillates."""


@dataclass(frozen=True)
class CycleMap:
    """As `LinearMap`; the figures are 0 where `found` is False."""

    names: tuple[str, str]
    first: Array
    second: Array
    stable: np.ndarray
    found: np.ndarray
    """A cycle was found. Where the loop is stable none is sought; elsewhere False is a failure of the search."""
    output_amplitude: Array
    """Peak to trough of the controlled signal, in its unit."""
    period_s: Array
    silent_fraction: Array


def linear_map(loop: Loop, first: str, firsts: Any, second: str, seconds: Any) -> LinearMap:
    """Stability, loop gain, growth and period of the dominant oscillation over a grid.

    Parameters
    ----------
    loop : Loop
        One loop.
    first, second : str
        Names of numbers as `with_numbers` takes them, or "sensitivity" or "delay".
    firsts, seconds : array_like
        The grid lines, in the numbers' units.

    Raises
    ------
    InvalidInputError
        If the two names are the same or the loop has no rest somewhere on the grid.
    """
    firsts, seconds, batch = _grid(loop, first, firsts, second, seconds)
    shape = (seconds.size, firsts.size)
    found = margins_batch(batch.form(), batch.rest())
    columns = (found.stable, found.loop_gain, found.growth_rate_per_s, found.cycle_length_s, found.has_oscillation)
    return LinearMap((first, second), firsts, seconds, *(column.reshape(shape) for column in columns))


def progressive_linear_map(loop: Loop, first: str, firsts: Any, second: str, seconds: Any, coarsest: int = 16) -> Iterator[LinearMap]:
    """`linear_map` on every fourth or so grid line, then every second, then all; each map is complete in itself."""
    for across, upright in _stages(firsts, seconds, coarsest):
        yield linear_map(loop, first, across, second, upright)


def cycle_map(loop: Loop, first: str, firsts: Any, second: str, seconds: Any, order: int = _CYCLE_ORDER) -> CycleMap:
    """Size, period and silence of the limit cycle over a grid, by harmonic balance of all hunting cells at once.

    Cells that Newton's steps do not settle from their describing function are begun again from a neighbour that did. `order` 6 is
    for pictures: about 1e-2 of the amplitude at worst, see `cycle` for one loop with all care.
    """
    firsts, seconds, batch = _grid(loop, first, firsts, second, seconds)
    shape = (seconds.size, firsts.size)
    opened = open_loop(batch.form(), batch.rest())
    known = margins_batch(batch.form(), batch.rest(), opened, growth=False)
    hunts = (~known.stable & known.has_phase_crossover).reshape(-1)
    cells = np.flatnonzero(hunts)
    result = [np.zeros(shape[0] * shape[1], dtype=kind) for kind in (bool, float, float, float)]
    if cells.size:
        omega = known.phase_crossover_frequency.reshape(-1)[cells]

        def rebuilt(which: np.ndarray) -> tuple[Any, Balance]:
            part = _cells(loop, first, firsts, second, seconds, cells[which])
            form = part.form()
            return form, prepare(form, part.rest())

        parts = [_settled(rebuilt, which, omega[which], order) for which in np.split(np.arange(cells.size), range(_CHUNK, cells.size, _CHUNK))]
        start = np.concatenate([part[0] for part in parts])
        harmonics = Harmonics(np.concatenate([part[1].force for part in parts]), np.concatenate([part[1].omega for part in parts]))
        converged = np.concatenate([part[2] for part in parts])
        harmonics, converged = _reseeded(harmonics, converged, start, cells, shape, rebuilt)
        figures = [
            _figures(*rebuilt(which), harmonics.member(which))
            for which in np.split(np.arange(cells.size), range(_CHUNK, cells.size, _CHUNK))
        ]
        amplitude, silent = (np.concatenate(column) for column in zip(*figures, strict=True))
        for column, values in zip(
            result, (converged, amplitude, 2.0 * math.pi / np.where(converged, harmonics.omega, 1.0), silent), strict=True
        ):
            column[cells] = np.where(converged, values, 0)
    return CycleMap((first, second), firsts, seconds, known.stable.reshape(shape), *(column.reshape(shape) for column in result))


def progressive_cycle_map(
    loop: Loop, first: str, firsts: Any, second: str, seconds: Any, coarsest: int = 10, order: int = _CYCLE_ORDER
) -> Iterator[CycleMap]:
    """`cycle_map` on few grid lines first, then on more, then on all."""
    for across, upright in _stages(firsts, seconds, coarsest):
        yield cycle_map(loop, first, across, second, upright, order)


def _stages(firsts: Any, seconds: Any, coarsest: int) -> Iterator[tuple[Array, Array]]:
    firsts, seconds = np.asarray(firsts, dtype=float), np.asarray(seconds, dtype=float)
    stride = 1
    while max(firsts.size, seconds.size) > 2 * coarsest * stride:
        stride *= 2
    while stride >= 1:
        yield _thinned(firsts, stride), _thinned(seconds, stride)
        stride //= 2


def _thinned(values: Array, stride: int) -> Array:
    """Every `stride`-th value, the last one always among them."""
    index = np.unique(np.append(np.arange(0, values.size, stride), values.size - 1))
    return values[index]


def _grid(loop: Any, first: str, firsts: Any, second: str, seconds: Any) -> tuple[Array, Array, Any]:
    if first == second:
        raise InvalidInputError(f"The two numbers of a map must differ; got {first} twice.")
    firsts, seconds = np.asarray(firsts, dtype=float), np.asarray(seconds, dtype=float)
    across, upright = (part.ravel() for part in np.meshgrid(firsts, seconds))
    return firsts, seconds, with_named(with_named(loop, first, across), second, upright)


def _cells(loop: Any, first: str, firsts: Array, second: str, seconds: Array, cells: np.ndarray) -> Any:
    across, upright = firsts[cells % firsts.size], seconds[cells // firsts.size]
    return with_named(with_named(loop, first, across), second, upright)


def _describing_start(balance: Balance, omega: Array, order: int) -> Harmonics:
    """Amplitudes where the first harmonic alone balances, by bisection on their logarithm in every cell at once."""
    unit = np.max(np.abs(balance.level), axis=1) * np.maximum(np.abs(balance.output_rest), 1e-3)
    low, high = np.log(unit * 1e-5), np.log(unit * 1e4)
    with np.errstate(all="ignore"):
        transfer, factor, _, _ = balance.transfers(np.asarray(omega, dtype=float), 1)
        for _ in range(11):
            middle = 0.5 * (low + high)
            above = first_harmonic_gain(balance, transfer, factor, np.exp(middle)).real >= 1.0
            low, high = np.where(above, middle, low), np.where(above, high, middle)
    force = np.zeros((balance.size, len(balance.rows), order + 1), dtype=complex)
    force[:, 0, 1] = np.exp(0.5 * (low + high))
    return Harmonics(force, np.array(omega, dtype=float))


def _settled(
    rebuilt: Callable[[np.ndarray], tuple[Any, Balance]], which: np.ndarray, omega: Array, order: int
) -> tuple[Array, Harmonics, np.ndarray]:
    """First amplitudes, harmonics and success of some cells, begun from their describing functions."""
    balance = rebuilt(which)[1]
    start = _describing_start(balance, omega, order)
    least = 1e-3 * np.abs(start.force[:, 0, 1])
    force, omega = start.force.copy(), start.omega.copy()
    good = np.zeros(which.size, dtype=bool)
    active = np.arange(which.size)
    for steps in (4, 3, 4):
        # Cells that have settled leave, so that the last steps are taken by the few that need them.
        solved = solve(balance, Harmonics(force[active], omega[active]), most=steps, tolerance=1e-3)
        force[active], omega[active] = solved.harmonics.force, solved.harmonics.omega
        kept = np.abs(force[active, 0, 1]) > least[active]
        good[active] = solved.converged & kept
        active = active[~solved.converged & np.isfinite(omega[active]) & kept]
        if not active.size:
            break
        balance = rebuilt(which[active])[1]
    return 1e3 * least, Harmonics(force, omega), good


def _reseeded(
    harmonics: Harmonics,
    good: np.ndarray,
    start: Array,
    cells: np.ndarray,
    shape: tuple[int, int],
    rebuilt: Callable[[np.ndarray], tuple[Any, Balance]],
) -> tuple[Harmonics, np.ndarray]:
    """Cells that failed, begun again from the nearest that did not, until no more come right."""
    force, omega, good = harmonics.force.copy(), harmonics.omega.copy(), good.copy()
    for _ in range(6):
        bad = np.flatnonzero(~good)
        if not bad.size or not good.any():
            break
        nearest = _nearest_good(cells, good, bad, shape)
        again = solve(rebuilt(bad)[1], Harmonics(force[nearest], omega[nearest]), most=9, tolerance=1e-3)
        alive = again.converged & (np.abs(again.harmonics.force[:, 0, 1]) > 1e-3 * start[bad])
        force[bad[alive]], omega[bad[alive]] = again.harmonics.force[alive], again.harmonics.omega[alive]
        good[bad[alive]] = True
        if not alive.any():
            break
    return Harmonics(force, omega), good


def _nearest_good(cells: np.ndarray, good: np.ndarray, bad: np.ndarray, shape: tuple[int, int]) -> np.ndarray:
    row, column = cells // shape[1], cells % shape[1]
    source = np.flatnonzero(good)
    distance = (row[bad, None] - row[source]) ** 2 + (column[bad, None] - column[source]) ** 2
    return source[np.argmin(distance, axis=1)]


def _figures(form: Any, balance: Balance, harmonics: Harmonics) -> tuple[Array, Array]:
    """Peak to trough of the controlled signal and the share of the period in silence, (B,), on a grid of samples."""
    with np.errstate(all="ignore"):
        transfer, _, _, _ = balance.transfers(harmonics.omega, harmonics.order)
        arguments = np.einsum("barK,brK->baK", transfer, harmonics.force)
        output, height = balance.heights(arguments, _FINE, form.silent_level)
    amplitude = output.max(axis=1) - output.min(axis=1)
    if height is None:
        return amplitude, np.zeros(balance.size)
    here, following = height <= 0.0, np.roll(height, -1, axis=1)
    with np.errstate(all="ignore"):
        share = np.abs(height) / (np.abs(height) + np.abs(following))
    part = np.where(here != (following <= 0.0), np.where(here, share, 1.0 - share), here)
    return amplitude, part.mean(axis=1)
