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
from lagscape.engine.margins_batch import Multiples, margins_batch
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.engine.two_parameters import with_named
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, Loop

__all__ = ["CycleMap", "LinearMap", "cycle_map", "linear_map", "progressive_cycle_map", "progressive_linear_map"]

_CYCLE_ORDER = 6
_FINE = 64
_SPARSE = 3
"""Every so many grid lines hold the cells that are solved first."""
_STEPS = (3, 2, 2, 4)
"""Newton steps between which cells that have settled leave."""
_ROUNDING = 1e-13
"""Relative; coefficients of a proportional loop agree this well with the first on their line times the factor."""
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
    form, rest = batch.form(), batch.rest()
    opened = open_loop(form, rest)
    found = margins_batch(form, rest, opened, multiples=_multiples(opened, first, firsts, second, seconds))
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
    form, rest = batch.form(), batch.rest()
    opened = open_loop(form, rest)
    known = margins_batch(form, rest, opened, growth=False, multiples=_multiples(opened, first, firsts, second, seconds))
    hunts = (~known.stable & known.has_phase_crossover).reshape(-1)
    cells = np.flatnonzero(hunts)
    result = [np.zeros(shape[0] * shape[1], dtype=kind) for kind in (bool, float, float, float)]
    if cells.size:
        omega = known.phase_crossover_frequency.reshape(-1)[cells]

        def rebuilt(which: np.ndarray) -> tuple[Any, Balance]:
            part = _cells(loop, first, firsts, second, seconds, cells[which])
            form = part.form()
            return form, prepare(form, part.rest())

        harmonics, converged = _solved(rebuilt, omega, cells, shape, order)
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


def _multiples(opened: OpenLoop, first: str, firsts: Array, second: str, seconds: Array) -> Multiples | None:
    """The grid lines along which only the sensitivity changes, if it is a plain factor on this grid; else None."""
    shape = (seconds.size, firsts.size)
    row, column = np.indices(shape)
    if first == "sensitivity":
        line, factor = row, np.broadcast_to(firsts, shape)
    elif second == "sensitivity":
        line, factor = column, np.broadcast_to(seconds[:, None], shape)
    else:
        return None
    axis = -1 if line is row else -2
    ratio = factor / np.take(factor, [0], axis)
    table = opened.coefficients.reshape((*opened.coefficients.shape[:2], *shape))
    wanted = np.repeat(np.take(table, [0], axis), shape[axis], axis)
    wanted[:, 1:] *= ratio
    delays = [np.broadcast_to(delay, opened.batch).reshape(shape) for delay in opened.delays]
    same = all(np.array_equal(delay, np.broadcast_to(np.take(delay, [0], axis), shape)) for delay in delays)
    if not same or np.any(np.abs(table - wanted) > _ROUNDING * np.abs(table)):
        return None
    return Multiples(line.ravel(), ratio.ravel())


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


def _solved(
    rebuilt: Callable[[np.ndarray], tuple[Any, Balance]], omega: Array, cells: np.ndarray, shape: tuple[int, int], order: int
) -> tuple[Harmonics, np.ndarray]:
    """Harmonics and success of every hunting cell: a few from their describing functions, the others from the nearest that came right."""
    row, column = cells // shape[1], cells % shape[1]
    everyone = np.arange(cells.size)
    sparse = (row % _SPARSE == 0) & (column % _SPARSE == 0)
    good = np.zeros(cells.size, dtype=bool)
    found: Harmonics | None = None
    for first in (np.flatnonzero(sparse), everyone):
        # Where the few hunt too little to begin from, or leave cells unsolved, the rest begin from their own describing functions.
        first = first[~good[first]]
        for which in np.split(first, range(_CHUNK, first.size, _CHUNK)):
            if not which.size:
                continue
            start = _describing_start(rebuilt(which)[1], omega[which], order)
            if found is None:
                found = Harmonics(np.zeros((cells.size, *start.force.shape[1:]), dtype=complex), omega.copy())
            _step_on(rebuilt, which, start, found, good)
        if found is not None:
            _spread(rebuilt, cells, shape, found, good)
    assert found is not None
    return found, good


def _step_on(
    rebuilt: Callable[[np.ndarray], tuple[Any, Balance]], which: np.ndarray, start: Harmonics, found: Harmonics, good: np.ndarray
) -> None:
    """Newton steps of some cells from their starts; `found` and `good` are written where a cell settles and has not fallen back to rest."""
    force, omega = start.force.copy(), start.omega.copy()
    least = 1e-3 * np.abs(start.force[:, 0, 1])
    active = np.arange(which.size)
    for steps in _STEPS:
        # Cells that have settled leave, so that the last steps are taken by the few that need them.
        solved = solve(rebuilt(which[active])[1], Harmonics(force[active], omega[active]), most=steps, tolerance=1e-3)
        force[active], omega[active] = solved.harmonics.force, solved.harmonics.omega
        alive = np.abs(force[active, 0, 1]) > least[active]
        done = active[solved.converged & alive]
        found.force[which[done]], found.omega[which[done]], good[which[done]] = force[done], omega[done], True
        active = active[~solved.converged & np.isfinite(omega[active]) & alive]
        if not active.size:
            break


def _spread(
    rebuilt: Callable[[np.ndarray], tuple[Any, Balance]], cells: np.ndarray, shape: tuple[int, int], found: Harmonics, good: np.ndarray
) -> None:
    """Cells not yet solved, begun from the nearest that are, until no more come right."""
    for _ in range(6):
        bad = np.flatnonzero(~good)
        if not bad.size or not good.any():
            return
        nearest = _nearest_good(cells, good, bad, shape)
        before = int(good.sum())
        for part in np.split(np.arange(bad.size), range(_CHUNK, bad.size, _CHUNK)):
            _step_on(rebuilt, bad[part], found.member(nearest[part]), found, good)
        if int(good.sum()) == before:
            return


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
