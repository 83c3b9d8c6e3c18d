"""The parts of a case and the rules they keep: a number, a lever's setting, a disturbance's setting."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cache
from types import MappingProxyType
from typing import Any

from lagscape.case.parameters import Basis, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS

__all__ = [
    "DEFAULT_DISTURBANCES",
    "LARGEST_LOG_SPREAD",
    "LARGEST_SETTING",
    "MOST_LEVERS",
    "DisturbanceSetting",
    "LeverCheck",
    "LeverSetting",
    "Number",
    "checked_basis",
    "checked_disturbance",
    "checked_levers",
    "checked_number",
    "checked_positive",
    "disturbance_units",
    "largest_spread",
    "refuse_names",
    "shown",
    "specifications",
    "starting_case",
]

MOST_LEVERS = 14
"""No case carries more levers than this; the link's length counts on it."""

LARGEST_LOG_SPREAD = 2.0
"""Largest standard deviation of a number's natural logarithm: a factor of 7.4 either way, beyond any measurement."""

LARGEST_SETTING = 1e6
"""Largest size of a dose or a disturbance that a case holds, in its own unit; each lever's own rule is narrower."""

DEFAULT_DISTURBANCES: Mapping[str, tuple[str, float]] = MappingProxyType(
    {"breathing": ("sigh", 15.0), "reflex": ("torque", 2.0), "plain": ("drive", 0.1)}
)
"""Loop kind to the disturbance first shown and its size, in the unit of the loop's channel of that name."""

LeverCheck = Callable[[str, str, float], None]
"""Called with loop kind, lever name and dose; raises InvalidInputError where the lever or the dose is unknown to it."""

_LEVER_NAME = re.compile(r"[a-z][a-z0-9_]{0,47}\Z")


@dataclass(frozen=True)
class Number:
    """One number of a loop, in its specification's unit.

    `spread` is one standard deviation of this very number: in its unit where the specification's distribution is "normal", of its
    natural logarithm where it is "lognormal". None means the specification's own spread for the basis.
    """

    value: float
    basis: Basis = Basis.ASSUMED
    spread: float | None = None


@dataclass(frozen=True)
class LeverSetting:
    """A lever laid on the case. The name ends in the unit of its dose, as parameter names do."""

    name: str
    dose: float


@dataclass(frozen=True)
class DisturbanceSetting:
    """What the traces answer to: a channel of the loop and its size in the channel's unit."""

    name: str
    size: float


def specifications(kind: str) -> Mapping[str, ParameterSpecification]:
    """Parameter name to specification of a loop, in the order in which the page shows them.

    Raises
    ------
    InvalidInputError
        If no loop is of this kind; the sentence lists the kinds.
    """
    return _specifications(_loop_class(kind))


def disturbance_units(kind: str) -> Mapping[str, str]:
    """Disturbance name to the unit of its size, for the loop of this kind; raises as `specifications`."""
    return _disturbance_units(_loop_class(kind))


def starting_case(name: str) -> tuple[str, StartingCase]:
    """The loop kind and the starting case of this name.

    Raises
    ------
    InvalidInputError
        If there is none; the sentence lists those there are.
    """
    known = [(kind, item) for kind, loop in LOOPS.items() for item in loop.starting_cases]
    for kind, item in known:
        if item.name == name:
            return kind, item
    raise InvalidInputError(f"No starting case is called {shown(name)}; there are: {', '.join(item.name for _, item in known)}.")


def largest_spread(specification: ParameterSpecification) -> float:
    """The largest spread that a number may state: its whole range, or LARGEST_LOG_SPREAD of its logarithm."""
    if specification.distribution == "lognormal":
        return LARGEST_LOG_SPREAD
    return specification.maximum - specification.minimum


def refuse_names(what: str, given: Mapping[str, Any], known: Mapping[str, Any], kind: str) -> None:
    if not isinstance(given, Mapping):
        raise InvalidInputError(f"The {what}s must be a mapping from name to value; got {shown(given)}.")
    unknown = [name for name in given if name not in known]
    if unknown:
        there = f"it has: {', '.join(known)}" if known else "it has none"
        raise InvalidInputError(f"The {kind} loop has no {what} {shown(unknown[0])}; {there}.")
    missing = [name for name in known if name not in given]
    if missing:
        raise InvalidInputError(f"The {what} {missing[0]} is missing; the {kind} loop needs every one of its {what}s.")


def checked_basis(basis: object) -> Basis:
    try:
        return Basis(basis)  # type: ignore[arg-type]
    except ValueError:
        raise InvalidInputError(f"The basis must be one of {', '.join(Basis)}; got {shown(basis)}.") from None


def checked_number(specification: ParameterSpecification, number: object) -> Number:
    if not isinstance(number, Number):
        raise InvalidInputError(f"{specification.label} must be a Number with value, basis and spread; got {shown(number)}.")
    # Adding zero turns -0.0 into 0.0, so that equal cases give the same file.
    value = specification.check(number.value) + 0.0
    spread = number.spread
    if spread is not None:
        limit = largest_spread(specification)
        of = "of its natural logarithm" if specification.distribution == "lognormal" else specification.unit or "in its own unit"
        rule = f"The spread of {specification.label} must be a number from 0 to {limit:g} {of}"
        spread = _finite(rule, spread)
        if not 0.0 <= spread <= limit:
            raise InvalidInputError(f"{rule}; got {spread:.6g}.")
        spread += 0.0
    return Number(value, checked_basis(number.basis), spread)


def checked_levers(levers: object) -> tuple[LeverSetting, ...]:
    if not isinstance(levers, (tuple, list)) or not all(isinstance(item, LeverSetting) for item in levers):
        raise InvalidInputError(f"The levers must be LeverSetting items in order; got {shown(levers)}.")
    if len(levers) > MOST_LEVERS:
        raise InvalidInputError(f"A case carries at most {MOST_LEVERS} levers; got {len(levers)}.")
    checked: list[LeverSetting] = []
    for lever in levers:
        if not isinstance(lever.name, str) or not _LEVER_NAME.match(lever.name):
            raise InvalidInputError(f"A lever's name must be small letters, digits and underscores, at most 48; got {shown(lever.name)}.")
        if any(lever.name == other.name for other in checked):
            raise InvalidInputError(f"The lever {lever.name} is laid twice; give it one dose.")
        checked.append(LeverSetting(lever.name, _setting(f"The dose of {lever.name}", lever.dose)))
    return tuple(checked)


def checked_disturbance(kind: str, disturbance: object) -> DisturbanceSetting | None:
    if disturbance is None:
        return None
    if not isinstance(disturbance, DisturbanceSetting):
        raise InvalidInputError(f"The disturbance must be a DisturbanceSetting or None; got {shown(disturbance)}.")
    units = disturbance_units(kind)
    if disturbance.name not in units:
        raise InvalidInputError(f"The {kind} loop has no disturbance {shown(disturbance.name)}; it has: {', '.join(units)}.")
    return DisturbanceSetting(disturbance.name, _setting(f"The size of the {disturbance.name}", disturbance.size))


def _setting(what: str, value: object) -> float:
    rule = f"{what} must be a number from {-LARGEST_SETTING:g} to {LARGEST_SETTING:g}"
    number = _finite(rule, value)
    if abs(number) > LARGEST_SETTING:
        raise InvalidInputError(f"{rule}; got {number:.6g}.")
    return number + 0.0


def _finite(rule: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise InvalidInputError(f"{rule}; got {shown(value)}.")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise InvalidInputError(f"{rule}; got {number}.")
    return number


def checked_positive(what: str, value: object, unit: str) -> float:
    rule = f"{what} must be finite and positive" + (f" ({unit})" if unit else "")
    number = _finite(rule, value)
    if number <= 0.0:
        raise InvalidInputError(f"{rule}; got {number:.6g}.")
    return number


@cache
def _specifications(loop: Any) -> Mapping[str, ParameterSpecification]:
    return MappingProxyType({item.name: item for item in loop.specifications})


@cache
def _disturbance_units(loop: Any) -> Mapping[str, str]:
    typical = loop(**{item.name: item.typical for item in loop.specifications})
    return MappingProxyType({name: channel.unit for name, channel in typical.form().channels.items()})


def _loop_class(kind: str) -> Any:
    if not isinstance(kind, str) or kind not in LOOPS:
        raise InvalidInputError(f"The loop must be one of {', '.join(LOOPS)}; got {shown(kind)}.")
    return LOOPS[kind]


def shown(value: object) -> str:
    """A value for a sentence, cut short: it may come from a file."""
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
