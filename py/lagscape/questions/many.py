"""Thousands of loops judged at once, also where some of them are impossible."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from lagscape.engine.dominant_batch import dominant_batch
from lagscape.engine.margins_batch import margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest, batch_shape
from lagscape.questions.standing import SETTLED_SHARE, Standing

__all__ = ["Index", "Many", "Mask", "judge_many"]

Mask = npt.NDArray[np.bool_]
Index = npt.NDArray[np.intp]

_NO_GROWTH = 1e-9
"""Growth per radian above which a member hunts: the rule of `standing.standing_of`."""


@dataclass(frozen=True)
class Many:
    """One entry a member, arrays of shape (n,). Entries of an impossible member mean nothing."""

    possible: Mask
    """bool; False where the numbers allow no rest."""
    stable: Mask
    """bool."""
    loop_gain: Array
    """|L| at the deciding phase crossover; 0 where there is none."""
    has_phase_crossover: Mask
    has_oscillation: Mask
    growth_rate_per_s: Array
    cycle_length_s: Array
    """Period of the dominant oscillation, s; 0 where there is none."""

    @property
    def gain_margin(self) -> Array:
        """1 / loop gain; infinite where no gain makes the member hunt, 0 where it hunts at every gain or is impossible."""
        with np.errstate(divide="ignore"):
            margin = np.where(self.stable, np.inf, 0.0)
            margin = np.where(self.has_phase_crossover & (self.loop_gain > 0.0), 1.0 / self.loop_gain, margin)
        return np.where(self.possible, margin, 0.0)

    def standings(self) -> dict[Standing, Mask]:
        """Standing to a mask of the possible members that have it, by the rules of `standing`."""
        # A real unstable root makes a member unstable without a growing oscillation: it hunts all the same.
        grows = self.has_oscillation & (self.growth_rate_per_s * self.cycle_length_s >= -_NO_GROWTH * 2.0 * np.pi)
        hunts = self.possible & (~self.stable | grows)
        gone = ~self.has_oscillation | (self.growth_rate_per_s * self.cycle_length_s < np.log(SETTLED_SHARE))
        settles = self.possible & ~hunts & gone
        return {Standing.HUNTS: hunts, Standing.RINGS: self.possible & ~hunts & ~settles, Standing.SETTLES: settles}


def judge_many(build: Callable[[Index], Any], count: int, growth: bool = False) -> Many:
    """Judge `count` loops.

    Parameters
    ----------
    build : callable
        From an index array of shape (n,) to the loop that holds those members as one batch.
    count : int
        How many members there are.
    growth : bool
        False leaves the dominant oscillation out, in half the time.

    Notes
    -----
    A batch is refused whole where one member is impossible, so a refused batch is split until the impossible members stand alone; only
    their rest and form are asked for meanwhile.
    """
    columns: list[Any] = [np.zeros(count, dtype=bool if index in (0, 1, 3, 4) else float) for index in range(7)]
    which, parts = _possible(build, count)
    if which.size:
        form, rest = parts if parts is not None else _parts(build, which)
        opened = open_loop(form, rest)
        found = margins_batch(form, rest, opened, growth=False)
        values: list[Any] = [True, found.stable, found.loop_gain, found.has_phase_crossover]
        if growth:
            dominant = dominant_batch(opened, found)
            values += [dominant.has, dominant.growth_rate_per_s, dominant.cycle_length_s]
        for column, value in zip(columns, values, strict=False):
            column[which] = value
    return Many(*columns)


def _parts(build: Callable[[Index], Any], which: Index) -> tuple[DriveForm, Rest]:
    loop = build(which)
    if batch_shape(loop) != which.shape:
        loop = loop.with_delay(loop.delay + np.zeros(which.size))
    rest = loop.rest()
    return loop.form(), rest


def _possible(build: Callable[[Index], Any], count: int) -> tuple[Index, tuple[DriveForm, Rest] | None]:
    """The possible members, ascending, and their form and rest where no member had to be left out."""
    good = []
    waiting = [np.arange(count)] if count else []
    while waiting:
        which = waiting.pop()
        try:
            parts = _parts(build, which)
        except InvalidInputError:
            if which.size > 1:
                waiting += [which[: which.size // 2], which[which.size // 2 :]]
            continue
        if which.size == count:
            return which, parts
        good.append(which)
    return (np.sort(np.concatenate(good)) if good else np.arange(0)), None
