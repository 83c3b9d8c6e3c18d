"""The thresholds of a measurement, shown and adjustable: what counts as waning, as apnoea, as a cycle, as a row."""

from __future__ import annotations

from dataclasses import dataclass, replace
from html import escape
from typing import Any

from lagscape.errors import InvalidInputError
from lagscape.quantities import figure
from lagscape.recordings.cycles import Thresholds

__all__ = ["THRESHOLDS", "threshold_html", "with_threshold"]


@dataclass(frozen=True)
class _Bound:
    label: str
    unit: str
    low: float
    high: float


THRESHOLDS = {
    "wane_below": _Bound("Waned under, of the local peak", "", 0.05, 0.95),
    "apnoea_below": _Bound("Apnoea under, of the local peak", "", 0.02, 0.6),
    "shortest_cycle_s": _Bound("Shortest cycle", "s", 6.0, 100.0),
    "longest_cycle_s": _Bound("Longest cycle", "s", 20.0, 300.0),
    "shortest_pause_s": _Bound("Shortest pause", "s", 2.0, 30.0),
    "fewest_in_a_row": _Bound("Fewest cycles in a row", "", 2.0, 20.0),
}
"""Those of `Thresholds` that a person may change, with their bounds."""


def threshold_html(thresholds: Thresholds) -> str:
    """HTML of the thresholds, folded away; changed ones are said in the fold's title."""
    usual = Thresholds()
    changed = sum(getattr(thresholds, name) != getattr(usual, name) for name in THRESHOLDS)
    rows = "".join(
        f'<label>{escape(bound.label)} <input class="box short" type="text" inputmode="decimal" data-act="threshold" data-key="{name}"'
        f' value="{figure(float(getattr(thresholds, name)))}" aria-label="{escape(bound.label)}"> {bound.unit}</label>'
        for name, bound in THRESHOLDS.items()
    )
    title = f"Thresholds ({changed} changed)" if changed else "Thresholds"
    back = '<button data-act="usual-thresholds">Back to the usual ones</button>' if changed else ""
    return (
        f'<details><summary>{title}</summary><div class="entry">{rows}{back}</div>'
        '<p class="quiet">Common practice, no source, but for three in a row, the usual rule for Cheyne-Stokes respiration.</p></details>'
    )


def with_threshold(thresholds: Thresholds, name: str, text: str) -> Thresholds:
    """The thresholds with one changed to what was typed.

    Raises
    ------
    InvalidInputError
        If it is no number within its bounds, or the shortest cycle is not under the longest, or apnoea not under waning.
    """
    bound = THRESHOLDS[name]
    rule = f"{bound.label} must be a number from {bound.low:g} to {bound.high:g} {bound.unit}".rstrip()
    try:
        value = float(text.strip().replace(",", ".").replace("−", "-"))
    except ValueError:
        raise InvalidInputError(f"{rule}; got {text.strip()[:30]!r}.") from None
    if not bound.low <= value <= bound.high:
        raise InvalidInputError(f"{rule}; got {value:.6g}.")
    number: Any = round(value) if name == "fewest_in_a_row" else value
    changed = replace(thresholds, **{name: number})
    if name == "wane_below":
        changed = replace(changed, wax_above=min(0.98, max(changed.wax_above, value + 0.1)))
    if not changed.apnoea_below < changed.wane_below:
        raise InvalidInputError(f"The apnoea threshold must lie under the waning one; got {changed.apnoea_below:g} and {changed.wane_below:g}.")
    if not changed.shortest_cycle_s < changed.longest_cycle_s:
        raise InvalidInputError(f"The shortest cycle must be under the longest; got {changed.shortest_cycle_s:g} and {changed.longest_cycle_s:g} s.")
    return changed
