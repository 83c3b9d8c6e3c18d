"""Share of the excess: how much of the distance from a typical loop each part of this one accounts for.

The excess is the logarithm of loop gain over the typical loop's, each |L| at the deciding phase crossover of its own loop. It is shared
by Shapley's rule: every mix of this loop's parts with typical parts is judged (64 loops for six parts), and a part's share is its mean
step over all orders in which the parts could be put in. So the shares add up exactly, and no order of asking changes them.

References
----------
Shapley 1953, A value for n-person games, Contributions to the Theory of Games II, 307-317 (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array
from lagscape.loops.register import LOOPS
from lagscape.quantities import figure
from lagscape.questions.many import Index, judge_many
from lagscape.questions.standing import Judgement, Standing, judge_loop

__all__ = ["PARTS", "Part", "PartShare", "Share", "parts_of", "shapley_values", "share_of_excess", "typical_case"]

_NO_EXCESS = math.log(1.05)
"""A loop gain within 5 % of the typical one has no excess worth sharing: far inside the spread of any of its numbers."""
_AGAINST = 0.10
"""A part that takes back at least this share of the excess is named."""


@dataclass(frozen=True)
class Part:
    """One part of a loop that may be to blame: its words, and the groups or single numbers that it holds."""

    name: str
    label: str
    groups: tuple[str, ...] = ()
    numbers: tuple[str, ...] = ()
    """Numbers that belong here whatever their group."""


PARTS: Mapping[str, tuple[Part, ...]] = MappingProxyType(
    {
        "breathing": (
            Part("sensitivity", "sensitivity", groups=("Chemoreflex",)),
            Part("delay", "delay", numbers=("peripheral_delay_s", "central_delay_s")),
            Part("lungs_and_stores", "lungs and stores", groups=("Lungs",), numbers=("tissue_volume_l", "co2_solubility_per_mmhg")),
            Part("co2_level", "CO2 level", groups=("Metabolism",)),
            Part("circulation", "circulation", groups=("Circulation",)),
            Part("oxygen", "oxygen", groups=("Oxygen",)),
        ),
        "reflex": (
            Part("sensitivity", "sensitivity", groups=("Reflex",)),
            Part("delay", "delay", groups=("Conduction",)),
            Part("limb", "limb", groups=("Limb",)),
            Part("muscle", "muscle", groups=("Muscle",)),
        ),
        "plain": (
            Part("sensitivity", "sensitivity", numbers=("exponent",)),
            Part("delay", "delay", groups=("delay",)),
            Part("level", "level", groups=("plant", "controller")),
        ),
    }
)
"""Loop kind to its parts. A number goes to the part that names it, else to the part of its group."""

_TYPICAL: Mapping[str, str] = MappingProxyType({"breathing": "healthy-asleep", "reflex": "ankle-calm", "plain": "plain-gentle"})
"""Loop kind to the starting case that stands for a typical person: for breathing one asleep, as whoever is asked about is."""

_TYPICAL_OF_STATE: Mapping[str, str] = MappingProxyType(
    {name: name for name in ("healthy-awake", "healthy-rem", "exercise")} | {"altitude-4559-day": "healthy-awake"}
)
"""Starting cases in another state than NREM sleep, to the healthy starting case in that state."""


@dataclass(frozen=True)
class PartShare:
    """One part's share, and where the loop would stand with this part alone made typical."""

    part: Part
    numbers: tuple[str, ...]
    log_gain: float
    """Its share of the log loop-gain ratio; all parts' sum to `Share.log_excess`."""
    share: float | None
    """The same as a share of the excess (or of the shortfall); negative where the part works against it; None where there is neither."""
    standing_if_typical: Standing | None
    """None where the loop with this part typical is impossible; then the two figures below are None as well."""
    loop_gain_if_typical: float | None
    gain_margin_if_typical: float | None


@dataclass(frozen=True)
class Share:
    """The excess over a typical loop and the parts' shares of it."""

    loop_gain: float
    typical_loop_gain: float
    log_excess: float
    """ln(loop_gain / typical_loop_gain); negative: a shortfall."""
    parts: tuple[PartShare, ...]
    """In the order of PARTS."""
    against: str
    """The title of the typical loop."""
    sentence: str


def typical_case(case: Case) -> Case:
    """The typical loop that a case is compared with: the healthy starting case in the same state, asleep where the state is not known.

    Where a loop has no such starting case, the specification's typical numbers.
    """
    name = _TYPICAL_OF_STATE.get(case.started_from or "", _TYPICAL.get(case.kind))
    if name is not None and any(item.name == name for item in LOOPS[case.kind].starting_cases):
        return Case.from_starting_case(name)
    return Case.typical(case.kind)


def parts_of(kind: str) -> Mapping[Part, tuple[str, ...]]:
    """Each part of a loop with the names of its numbers; every number belongs to exactly one."""
    parts = PARTS[kind]
    named = {name: part for part in parts for name in part.numbers}
    grouped = {group: part for part in parts for group in part.groups}
    held: dict[Part, list[str]] = {part: [] for part in parts}
    for item in LOOPS[kind].specifications:
        held[named.get(item.name) or grouped.get(item.group) or parts[-1]].append(item.name)
    return {part: tuple(names) for part, names in held.items()}


def share_of_excess(case: Case, typical: Case | None = None) -> Share:
    """Share the excess of a case's loop gain over a typical loop's among its parts. Levers are not counted.

    Parameters
    ----------
    case : Case
    typical : Case, optional
        The loop to compare with, of the same kind; `typical_case(case)` if none is given. The case's own choices are kept for both.

    Raises
    ------
    InvalidInputError
        If the two are of different kinds, or a mix of the two loops is impossible or has no loop gain (nothing comes back against
        itself), so that there is nothing to share.
    """
    typical = typical_case(case) if typical is None else typical
    if typical.kind != case.kind:
        raise InvalidInputError(f"A {case.kind} case cannot be compared with a {typical.kind} loop; choose a {case.kind} loop.")
    parts = parts_of(case.kind)
    worth = np.log(_mixed_gains(case, typical, parts))
    values = shapley_values(worth, len(parts))
    excess = float(worth[-1] - worth[0])
    shared = abs(excess) > _NO_EXCESS
    found = []
    for (part, names), value in zip(parts.items(), values.tolist(), strict=True):
        alone = _judged_with_typical(case, typical, names)
        found.append(
            PartShare(
                part, names, value, value / excess if shared else None,
                None if alone is None else alone.standing,
                None if alone is None else alone.margins.loop_gain,
                None if alone is None else alone.margins.gain_margin,
            )
        )  # fmt: skip
    against = _title(typical)
    ratio = math.exp(excess)
    return Share(
        float(np.exp(worth[-1])), float(np.exp(worth[0])), excess, tuple(found), against, _sentence(found, ratio, against, shared)
    )


def shapley_values(worth: Array, parts: int) -> Array:
    """Shapley values of `parts` players.

    Parameters
    ----------
    worth : array, shape (2**parts,)
        The worth of each coalition; bit k of the index says whether player k is in.

    Returns
    -------
    array, shape (parts,)
        They sum to worth[-1] - worth[0] to rounding.
    """
    index = np.arange(2**parts)
    size = np.array([int(item).bit_count() for item in index])
    values = np.zeros(parts)
    for player in range(parts):
        without = index[(index >> player) & 1 == 0]
        weight = np.array([math.factorial(int(s)) * math.factorial(parts - int(s) - 1) for s in size[without]]) / math.factorial(parts)
        values[player] = np.sum(weight * (worth[without | (1 << player)] - worth[without]))
    return values


def _mixed_gains(case: Case, typical: Case, parts: Mapping[Part, tuple[str, ...]]) -> Array:
    """Loop gain of every mix, shape (2**n,); bit k of the index says whether part k is the case's own."""
    count = 2 ** len(parts)
    own = {name: (np.arange(count) >> k) & 1 == 1 for k, names in enumerate(parts.values()) for name in names}

    def build(which: Index) -> Any:
        numbers = {name: np.where(mask[which], case.value(name), typical.value(name)) for name, mask in own.items()}
        return LOOPS[case.kind](**numbers, **case.choices)

    found = judge_many(build, count)
    usable = found.possible & found.has_phase_crossover & (found.loop_gain > 0.0)
    if not usable.all():
        bad = int(np.argmin(usable))
        mine = [part.label for k, part in enumerate(parts) if (bad >> k) & 1]
        which = f"this case's {', '.join(mine)} and the rest typical" if mine else "every part typical"
        why = "has no loop gain" if found.possible[bad] else "is impossible"
        raise InvalidInputError(f"The excess cannot be shared: the loop with {which} {why}. Compare with another typical loop.")
    return found.loop_gain


def _judged_with_typical(case: Case, typical: Case, names: tuple[str, ...]) -> Judgement | None:
    numbers = {name: (typical if name in names else case).value(name) for name in case.numbers}
    try:
        return judge_loop(LOOPS[case.kind](**numbers, **case.choices))
    except InvalidInputError:
        return None


def _title(typical: Case) -> str:
    for item in LOOPS[typical.kind].starting_cases:
        if item.name == typical.started_from and typical.numbers == Case.from_starting_case(item.name).numbers:
            return item.title
    return "typical numbers" if typical.started_from is None else "the loop compared with"


def _sentence(found: list[PartShare], ratio: float, against: str, shared: bool) -> str:
    many = f"{figure(ratio, 2)} times" if ratio >= 1.95 else f"{figure(100.0 * abs(ratio - 1.0), 2)} % {'above' if ratio > 1.0 else 'below'}"
    if not shared:
        return f"Loop gain is within 5 % of the typical one ({against}): there is no excess to share."
    what = "excess" if ratio > 1.0 else "shortfall"
    ordered = sorted(found, key=lambda item: -(item.share or 0.0))
    top, second = ordered[0], ordered[1]
    first = f"Loop gain is {many} the typical one ({against})."
    share = top.share or 0.0
    if 0.995 <= share < 1.005:
        said = f"The whole {what} is {top.part.label}"
    elif share > 1.0:
        said = f"More than the whole {what} ({_percent(share)}) is {top.part.label}"
    elif share > 0.5:
        said = f"Most of the {what} ({_percent(share)}) is {top.part.label}"
    else:
        said = f"The largest part of the {what} ({_percent(share)}) is {top.part.label}, then {second.part.label} ({_percent(second.share)})"
    contrary = [item for item in ordered if (item.share or 0.0) <= -_AGAINST]
    if contrary:
        worst = contrary[-1]
        said += f"; {worst.part.label} works against it ({_percent(worst.share)})"
    return f"{first} {said}."


def _percent(share: float | None) -> str:
    return f"{100.0 * (share or 0.0):.0f} %".replace("-", "−")
