"""The smallest pair of levers that is enough, where no single lever is."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations, product

import numpy as np

from lagscape.case.case import Case
from lagscape.case.parts import LeverSetting
from lagscape.loops.protocol import Array
from lagscape.quantities import figure
from lagscape.questions.enough import SAFE_GAIN_MARGIN, amount_words, checked_margin, margins_of_rows, smallest_doses
from lagscape.questions.lever import Lever
from lagscape.questions.levers import LEVERS

__all__ = ["PairAnswer", "smallest_pair"]

_NET = 13
_ROUNDS = 4
_KEPT = 12
"""Pairs followed to the end: those whose coarse sum is within two net widths of the least, at most so many."""


@dataclass(frozen=True)
class PairAnswer:
    """The smallest pair of levers, or why there is none."""

    gain_margin: float
    """What was asked for."""
    settings: tuple[LeverSetting, ...]
    """Two levers with their doses; empty where a single lever is enough, none is needed, or no pair is enough."""
    reached: float | None
    """The pair's own gain margin."""
    sentence: str


@dataclass
class _Pair:
    first: Lever
    second: Lever
    ends: tuple[float, float]
    best: tuple[float, float] = (1.0, 1.0)
    reached: float = 0.0
    total: float = np.inf

    def row(self, u: Array, v: Array) -> dict[str, Array]:
        return {self.first.name: u * self.ends[0], self.second.name: v * self.ends[1]}

    def take(self, u: Array, v: Array, margins: Array, wanted: float) -> None:
        """Keep the least sum that is enough; the old one stays where no new one is smaller."""
        total = np.where(margins >= wanted, u + v, np.inf)
        at = int(np.argmin(total))
        if total[at] < self.total:
            self.total, self.best, self.reached = float(total[at]), (float(u[at]), float(v[at])), float(margins[at])


def smallest_pair(case: Case, gain_margin: float = SAFE_GAIN_MARGIN) -> PairAnswer:
    """The smallest pair of levers that gives this gain margin where no single lever does.

    Smallest is the least sum of the two doses, each as a share of its lever's range, to a thousandth of a range. Levers on the case that
    are not of the pair stay.

    Raises
    ------
    InvalidInputError
        If the margin is not finite and positive, or the case is impossible as it stands.
    """
    wanted = checked_margin(gain_margin)
    margin = f"a gain margin of {figure(wanted)}"
    single = {name: answer.dose for name, answer in smallest_doses(case, wanted).items() if answer.dose is not None}
    if any(dose == 0.0 for dose in single.values()):
        return PairAnswer(wanted, (), None, f"No lever is needed for {margin}.")
    levers = LEVERS[case.kind]
    if single:
        some = ", ".join(f"{levers[name].label} ({amount_words(levers[name], dose)})" for name, dose in single.items())
        return PairAnswer(wanted, (), None, f"One lever is enough for {margin}: {some}.")
    pairs = [
        _Pair(first, second, ends)
        for first, second in combinations(levers.values(), 2)
        for ends in product(_ends(first), _ends(second))
    ]
    share = np.linspace(0.0, 1.0, _NET)
    u, v = (axis.ravel() for axis in np.meshgrid(share, share, indexing="ij"))
    for pair, margins in zip(pairs, margins_of_rows(case, [pair.row(u, v) for pair in pairs]), strict=True):
        pair.take(u, v, margins, wanted)
    pairs = _refined(case, sorted(pairs, key=lambda pair: pair.total), wanted)
    if not pairs:
        return PairAnswer(wanted, (), None, f"No single lever and no pair gives {margin} within their ranges.")
    best = min(pairs, key=lambda pair: pair.total)
    settings = tuple(
        LeverSetting(lever.name, part * end)
        for lever, part, end in zip((best.first, best.second), best.best, best.ends, strict=True)
    )
    words = " with ".join(f"{levers[item.name].label} {amount_words(levers[item.name], item.dose)}" for item in settings)
    sentence = f"No single lever gives {margin} within its range. The smallest pair that does: {words}."
    return PairAnswer(wanted, settings, best.reached, sentence)


def _ends(lever: Lever) -> list[float]:
    return [end for end in (lever.maximum, lever.minimum) if end]


def _refined(case: Case, pairs: list[_Pair], wanted: float) -> list[_Pair]:
    """The pairs that may be the smallest, each closed by nets about its best point, every net four times finer."""
    kept = [pair for pair in pairs if np.isfinite(pair.total) and pair.total <= pairs[0].total + 2.0 / (_NET - 1)][:_KEPT]
    half = 1.0 / (_NET - 1)
    for _ in range(_ROUNDS if kept else 0):
        offset = np.linspace(-half, half, _NET)
        nets = []
        for pair in kept:
            axes = (np.clip(part + offset, 0.0, 1.0) for part in pair.best)
            u, v = (axis.ravel() for axis in np.meshgrid(*axes, indexing="ij"))
            nets.append((u, v))
        found = margins_of_rows(case, [pair.row(u, v) for pair, (u, v) in zip(kept, nets, strict=True)])
        for pair, (u, v), margins in zip(kept, nets, found, strict=True):
            pair.take(u, v, margins, wanted)
        half /= 4.0
    return kept
