"""Certainty: how often the standing holds when every number is drawn from its spread.

Each number is drawn by itself from its specification's law (normal, or lognormal) about its value, with the spread of its basis, and cut
to its range. The draws are the same in every run, so that a figure moves only when the case does. Numbers are drawn independently: what
goes together in a person (both delays, say) makes the truth a little narrower or wider than shown.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array
from lagscape.loops.register import LOOPS
from lagscape.questions.levers import apply_levers, lay_levers
from lagscape.questions.many import Index, Many, Mask, judge_many
from lagscape.questions.standing import Standing, judge_loop

__all__ = ["DRAWS", "SEED", "Certainty", "Doubt", "Interval", "certainty", "drawn_numbers"]

DRAWS = 10_000
SEED = 20_240_117
"""Any fixed number would do."""
_FEWEST, _MOST = 100, 100_000


@dataclass(frozen=True)
class Interval:
    """The middle 90 % of a figure over the draws that have it, and its median."""

    low: float
    median: float
    high: float
    share: float
    """Share of the possible draws that have this figure."""


@dataclass(frozen=True)
class Doubt:
    """How much one number contributes to the doubt."""

    name: str
    label: str
    correlation: float
    """Spearman's rank correlation of the drawn number with loop gain, from -1 to 1; 0 where it is not drawn."""
    share: float
    """Square of the correlation over the sum of the squares: the shares of all numbers sum to 1."""


@dataclass(frozen=True)
class Certainty:
    """How sure the standing is, given how roughly the numbers are known."""

    standing: Standing
    """Of the case itself, with its levers."""
    holds: float
    """Share of the possible draws with the same standing."""
    shares: Mapping[Standing, float]
    """Share of the possible draws that hunt, ring and settle; they sum to 1."""
    loop_gain: Interval | None
    gain_margin: Interval | None
    cycle_length_s: Interval | None
    """Period of the dominant oscillation. A figure is None where no draw has it."""
    doubts: tuple[Doubt, ...]
    """One a number, the largest share first."""
    draws: int
    impossible: int
    """Draws whose numbers allow no rest; they are left out."""
    seed: int
    sentence: str


def certainty(case: Case, draws: int = DRAWS, seed: int = SEED) -> Certainty:
    """Draw every number of a case from its spread and judge every draw, with the case's levers on it.

    Parameters
    ----------
    case : Case
    draws : int
        From 100 to 100,000. The standard error of a share p is sqrt(p (1 - p) / draws): half a percent at most for 10,000.
    seed : int
        Equal seeds give equal answers.

    Raises
    ------
    InvalidInputError
        If `draws` is out of range, the case is impossible as it stands, or no draw is possible.
    """
    if isinstance(draws, bool) or not isinstance(draws, int) or not _FEWEST <= draws <= _MOST:
        raise InvalidInputError(f"The number of draws must be a whole number from {_FEWEST} to {_MOST}; got {draws!r:.60}.")
    standing = judge_loop(apply_levers(case)).standing
    numbers = drawn_numbers(case, draws, seed)

    def build(which: Index) -> Any:
        drawn = {name: values if isinstance(values, float) else values[which] for name, values in numbers.items()}
        return lay_levers(LOOPS[case.kind](**drawn, **case.choices), case.levers)

    found = judge_many(build, draws, growth=True)
    possible = int(found.possible.sum())
    if not possible:
        raise InvalidInputError("No draw of these numbers gives a loop at rest; lower the spreads.")
    shares = {item: float(mask.sum()) / possible for item, mask in found.standings().items()}
    doubts = _doubts(case, numbers, found)
    has_gain = found.possible & found.has_phase_crossover & (found.loop_gain > 0.0)
    with np.errstate(divide="ignore"):
        margin = _interval(1.0 / np.where(has_gain, found.loop_gain, np.inf), has_gain, possible)
    return Certainty(
        standing=standing,
        holds=shares[standing],
        shares=shares,
        loop_gain=_interval(found.loop_gain, has_gain, possible),
        gain_margin=margin,
        cycle_length_s=_interval(found.cycle_length_s, found.possible & found.has_oscillation, possible),
        doubts=doubts,
        draws=draws,
        impossible=draws - possible,
        seed=seed,
        sentence=_sentence(shares[standing], standing, doubts),
    )


def drawn_numbers(case: Case, draws: int = DRAWS, seed: int = SEED) -> dict[str, Array | float]:
    """Number name to its draws, shape (draws,), in its specification's unit; a number without spread stays a float."""
    normal = _normal_draws(len(case.numbers), draws, seed)
    drawn: dict[str, Array | float] = {}
    for row, (name, item) in zip(normal, case.specifications.items(), strict=True):
        value, spread = case.value(name), case.spread(name)
        if spread == 0.0 or (item.distribution == "lognormal" and value == 0.0):
            drawn[name] = value
        elif item.distribution == "lognormal":
            drawn[name] = np.clip(value * np.exp(spread * row), item.minimum, item.maximum)
        else:
            drawn[name] = np.clip(value + spread * row, item.minimum, item.maximum)
    return drawn


@lru_cache(maxsize=4)
def _normal_draws(count: int, draws: int, seed: int) -> Array:
    normal = np.random.default_rng(seed).standard_normal((count, draws))
    normal.flags.writeable = False
    return normal


def _interval(values: Array, has: Mask, possible: int) -> Interval | None:
    if not has.any():
        return None
    low, median, high = (float(item) for item in np.quantile(values[has], (0.05, 0.5, 0.95)))
    return Interval(low, median, high, float(has.sum()) / possible)


def _doubts(case: Case, numbers: Mapping[str, Array | float], found: Many) -> tuple[Doubt, ...]:
    usable = found.possible & found.has_phase_crossover & (found.loop_gain > 0.0)
    gain = _ranks(found.loop_gain[usable])
    correlations = {}
    for name, values in numbers.items():
        spread = not isinstance(values, float) and usable.sum() > 2
        correlations[name] = _correlation(_ranks(np.asarray(values)[usable]), gain) if spread else 0.0
    total = sum(value * value for value in correlations.values()) or 1.0
    doubts = (
        Doubt(name, case.specifications[name].label, value, value * value / total) for name, value in correlations.items()
    )
    return tuple(sorted(doubts, key=lambda item: -item.share))


def _ranks(values: Array) -> Array:
    """Ranks from 0. Ties (values cut to their range) keep their order of drawing, which is unrelated to anything."""
    ranks = np.empty(values.size)
    ranks[np.argsort(values, kind="stable")] = np.arange(values.size)
    return ranks


def _correlation(a: Array, b: Array) -> float:
    a, b = a - a.mean(), b - b.mean()
    size = float(np.sqrt(np.dot(a, a) * np.dot(b, b)))
    return float(np.dot(a, b)) / size if size > 0.0 else 0.0


def _sentence(holds: float, standing: Standing, doubts: tuple[Doubt, ...]) -> str:
    hundred = 100.0 * holds
    if hundred >= 99.5:
        often = "In nearly every draw" if holds < 1.0 else "In every draw"
    elif hundred < 0.5:
        often = "In hardly any draw"
    else:
        often = f"In {hundred:.0f} of 100 draws"
    most = doubts[0]
    if not most.share:
        return f"{often} this loop {standing}."
    part = "Most" if most.share > 0.5 else "The largest part"
    # An abbreviation such as CO2 keeps its capitals.
    label = most.label[:1].lower() + most.label[1:] if most.label[1:2].islower() else most.label
    return f"{often} this loop {standing}. {part} of the doubt comes from: {label}."
