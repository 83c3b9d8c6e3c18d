"""The dose that is enough: the smallest dose of a lever that gives a chosen gain margin.

The gain margin as a function of the dose need not rise: a whole row of doses is judged at once, the first that is enough is kept with its
neighbour that is not, and the row between them is judged again, until the dose is known to a millionth of the lever's range. Rows of
several levers go into one batch.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from lagscape.case.case import Case
from lagscape.case.parts import LeverSetting
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array
from lagscape.quantities import figure
from lagscape.questions.lever import Lever
from lagscape.questions.levers import LEVERS, apply_levers, lay_levers, lever_of
from lagscape.questions.many import Index, judge_many

__all__ = ["SAFE_GAIN_MARGIN", "DoseAnswer", "amount_words", "checked_margin", "margins_of_rows", "smallest_dose", "smallest_doses"]

SAFE_GAIN_MARGIN = 1.3
"""The safety first offered: the loop still quiet at 30 % more sensitivity. A choice, without a clinical source."""

_ROW = 41
_ROUNDS = 4
"""41 doses, each round 40 times finer: 40^-4 of the range, 4e-7."""


@dataclass(frozen=True)
class DoseAnswer:
    """The smallest dose of one lever, or why there is none."""

    lever: Lever
    gain_margin: float
    """What was asked for."""
    dose: float | None
    """None where no dose in the lever's range is enough; 0 where none is needed."""
    in_steps: float | None
    """`dose` rounded away from zero to the lever's step, and checked: the first step that is enough; None where none is."""
    lost_at: float | None
    """The first larger dose, to a fortieth of the range, that is no longer enough; None where every larger one is."""
    best_dose: float
    best_gain_margin: float
    """The largest gain margin that the lever reaches in its range, and where; infinite where no gain makes the loop hunt."""
    sentence: str


def smallest_dose(case: Case, name: str, gain_margin: float = SAFE_GAIN_MARGIN) -> DoseAnswer:
    """The smallest dose of one lever that gives the case this gain margin; the case's other levers stay on it.

    Parameters
    ----------
    case : Case
    name : str
        A lever of the case's loop; if the case has it already, its dose there is not used.
    gain_margin : float
        Finite and positive; 1 is the boundary.

    Raises
    ------
    InvalidInputError
        If there is no such lever, the margin is not finite and positive, or the case is impossible as it stands.
    """
    lever_of(case.kind, name)
    return _answers(case, (name,), checked_margin(gain_margin))[name]


def smallest_doses(case: Case, gain_margin: float = SAFE_GAIN_MARGIN) -> Mapping[str, DoseAnswer]:
    """Lever name to `smallest_dose`, for every lever of the case's loop; raises as it does."""
    return _answers(case, tuple(LEVERS[case.kind]), checked_margin(gain_margin))


def checked_margin(gain_margin: object) -> float:
    """The gain margin asked for, as a float; refused unless finite and positive."""
    rule = "The gain margin asked for must be finite and positive (a factor on sensitivity; 1 is the boundary)"
    if isinstance(gain_margin, bool) or not isinstance(gain_margin, (int, float)):
        raise InvalidInputError(f"{rule}; got {gain_margin!r:.60}.")
    if not math.isfinite(gain_margin) or gain_margin <= 0.0:
        raise InvalidInputError(f"{rule}; got {gain_margin:.6g}.")
    return float(gain_margin)


def margins_of_rows(case: Case, rows: Sequence[Mapping[str, Array]]) -> list[Array]:
    """The gain margin at every dose of every row, judged as one batch.

    Parameters
    ----------
    case : Case
        Its own levers stay where a row does not name them.
    rows : sequence of mappings
        Lever name to doses, arrays of one shape (n,) within a row.

    Returns
    -------
    list of arrays
        Of each row's shape; infinite where no gain makes the loop hunt, 0 where it hunts at every gain or is impossible.
    """
    sizes = [next(iter(row.values())).size for row in rows]
    starts = np.concatenate([[0], np.cumsum(sizes)]).astype(int)
    laid = {item.name: item.dose for item in case.levers}
    names = [name for name in LEVERS[case.kind] if name in laid or any(name in row for row in rows)]
    doses = {name: np.full(starts[-1], laid.get(name, 0.0)) for name in names}
    for row, start, size in zip(rows, starts, sizes, strict=False):
        for name, values in row.items():
            doses[name][start : start + size] = values
    loop = case.loop()

    def build(which: Index) -> object:
        # A dose that is the same for all stays a number: its rule is then worked out once.
        settings = (LeverSetting(name, float(d[0]) if np.all(d == d[0]) else d[which]) for name, d in doses.items())  # type: ignore[arg-type]
        return lay_levers(loop, settings)

    margins = judge_many(build, int(starts[-1])).gain_margin
    return [margins[start : start + size] for start, size in zip(starts, sizes, strict=False)]


@dataclass
class _Search:
    """One lever in one direction from zero."""

    lever: Lever
    end: float
    row: Array
    margins: Array = field(default_factory=lambda: np.zeros(0))
    dose: float | None = None
    margin: float = 0.0
    lost_at: float | None = None
    best: tuple[float, float] = (0.0, 0.0)


def _answers(case: Case, names: tuple[str, ...], wanted: float) -> dict[str, DoseAnswer]:
    apply_levers(case).rest()
    levers = [LEVERS[case.kind][name] for name in names]
    searches = [
        _Search(lever, end, np.linspace(0.0, end, _ROW)) for lever in levers for end in (lever.maximum, lever.minimum) if end != 0.0
    ]
    for search, margins in zip(searches, margins_of_rows(case, [{item.lever.name: item.row} for item in searches]), strict=True):
        search.margins = margins
        top = int(np.argmax(margins))
        search.best = (float(margins[top]), float(search.row[top]))
    _refine(case, searches, wanted)
    chosen = {lever.name: _chosen(searches, lever) for lever in levers}
    steps = _in_steps(case, {name: search for name, search in chosen.items() if search.dose is not None}, wanted)
    return {name: _answer(search, steps.get(name), wanted) for name, search in chosen.items()}


def _refine(case: Case, searches: list[_Search], wanted: float) -> None:
    """Close each search on the first dose of its row that is enough."""
    active = []
    for search in searches:
        enough = np.flatnonzero(search.margins >= wanted)
        if not enough.size:
            continue
        first = int(enough[0])
        search.dose, search.margin = float(search.row[first]), float(search.margins[first])
        later = np.flatnonzero(search.margins[first:] < wanted)
        search.lost_at = float(search.row[first + later[0]]) if later.size else None
        if first:
            search.row = search.row[first - 1 : first + 1]
            active.append(search)
    for _ in range(1, _ROUNDS):
        if not active:
            return
        rows = [np.linspace(search.row[0], search.row[1], _ROW)[1:] for search in active]
        found = margins_of_rows(case, [{search.lever.name: row} for search, row in zip(active, rows, strict=True)])
        for search, row, margins in zip(active, rows, found, strict=True):
            # The last dose is the one known to be enough; in another batch it may differ by rounding.
            first = int(np.argmax(np.append(margins[:-1] >= wanted, True)))
            if first < row.size - 1:
                search.dose, search.margin = float(row[first]), float(margins[first])
            search.row = np.array([row[first - 1] if first else search.row[0], row[first]])


def _chosen(searches: list[_Search], lever: Lever) -> _Search:
    """Of a lever's two directions the one with the smaller dose; where neither is enough, the one that comes nearer."""
    own = [search for search in searches if search.lever is lever]
    return min(own, key=lambda item: (item.dose is None, abs(item.dose) if item.dose is not None else -item.best[0]))


def _in_steps(case: Case, found: Mapping[str, _Search], wanted: float) -> dict[str, float | None]:
    """The first whole step at or beyond each dose that is enough; None where the range ends first or the steps are too coarse."""
    rows: dict[str, Array] = {}
    for name, search in found.items():
        step = search.lever.step
        first, last = math.ceil(abs(search.dose or 0.0) / step - 1e-9), math.floor(abs(search.end) / step + 1e-9)
        if search.dose and last >= first:
            rows[name] = math.copysign(step, search.dose) * np.arange(first, last + 1)
    steps: dict[str, float | None] = {name: None if search.dose else 0.0 for name, search in found.items()}
    if rows:
        for (name, row), margins in zip(rows.items(), margins_of_rows(case, [{n: r} for n, r in rows.items()]), strict=True):
            enough = np.flatnonzero(margins >= wanted)
            steps[name] = float(row[enough[0]]) if enough.size else None
    return steps


def _answer(search: _Search, steps: float | None, wanted: float) -> DoseAnswer:
    lever, dose = search.lever, search.dose
    best_margin, best_dose = search.best
    if dose is None:
        sentence = _none_words(lever, wanted, best_dose, best_margin)
    else:
        best_margin, best_dose = max(search.best, (search.margin, dose))
        sentence = _dose_words(lever, wanted, dose, search.lost_at)
    return DoseAnswer(lever, wanted, dose, steps, search.lost_at, best_dose, best_margin, sentence)


def amount_words(lever: Lever, dose: float) -> str:
    """A dose as said, rounded away from zero to three figures so that what is said is never less than enough."""
    grain = 10.0 ** (math.floor(math.log10(abs(dose))) - 2) if dose else 1.0
    return f"{_plain(math.copysign(math.ceil(abs(dose) / grain - 1e-9) * grain, dose))} {lever.unit}".rstrip()


def _plain(value: float) -> str:
    text = figure(value)
    return text.rstrip("0").rstrip(".") if "." in text else text


def _dose_words(lever: Lever, wanted: float, dose: float, lost: float | None) -> str:
    margin = f"a gain margin of {_plain(wanted)}"
    if dose == 0.0:
        return f"{lever.label}: none is needed, {margin} is there already."
    if lever.is_switch:
        return f"{lever.label} is enough for {margin}."
    sentence = f"{lever.label}: {amount_words(lever, dose)} is enough for {margin}."
    if lost is not None:
        sentence += f" From about {amount_words(lever, lost)} on it is lost again."
    return sentence


def _none_words(lever: Lever, wanted: float, best_dose: float, best_margin: float) -> str:
    margin = f"a gain margin of {_plain(wanted)}"
    if lever.is_switch:
        return f"{lever.label} does not give {margin}; it reaches {_plain(best_margin)}."
    low = f"from {_plain(lever.minimum)} to " if lever.minimum else "up to "
    sentence = f"{lever.label}: no dose {low}{_plain(lever.maximum)} {lever.unit} gives {margin}"
    if best_margin <= 0.0:
        return f"{sentence}."
    where = f"at {amount_words(lever, best_dose)}" if best_dose else "without it"
    return f"{sentence}; the best is {_plain(best_margin)}, {where}."
