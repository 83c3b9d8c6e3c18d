"""The case: one loop's numbers, each with its basis and spread, the settings, the levers laid on it and the disturbance shown.

A case is what undo steps through, what a file or a link holds, and what every question is asked of. It has no field that could
hold a name, a patient number or a date of birth. Values are checked when a case is made; a case that exists is inside every range.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import cache
from types import MappingProxyType
from typing import Any

from lagscape.case.parameters import Basis, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS

__all__ = [
    "DEFAULT_DISTURBANCES",
    "LARGEST_LOG_SPREAD",
    "MOST_LEVERS",
    "Case",
    "DisturbanceSetting",
    "LeverCheck",
    "LeverSetting",
    "Number",
    "disturbance_units",
    "largest_spread",
    "specifications",
    "starting_case",
]

MOST_LEVERS = 12
"""No case carries more levers than this; the link's length counts on it."""

LARGEST_LOG_SPREAD = 2.0
"""Largest standard deviation of a number's natural logarithm: a factor of 7.4 either way, beyond any measurement."""

LARGEST_SETTING = 1e6
"""Largest size of a dose or a disturbance that a case holds, in its own unit; each lever's own rule is narrower."""

DEFAULT_DISTURBANCES: Mapping[str, tuple[str, float]] = MappingProxyType(
    {"breathing": ("sigh", 10.0), "reflex": ("torque", 1.0), "plain": ("drive", 0.1)}
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
    raise InvalidInputError(f"No starting case is called {_shown(name)}; there are: {', '.join(item.name for _, item in known)}.")


def largest_spread(specification: ParameterSpecification) -> float:
    """The largest spread that a number may state: its whole range, or LARGEST_LOG_SPREAD of its logarithm."""
    if specification.distribution == "lognormal":
        return LARGEST_LOG_SPREAD
    return specification.maximum - specification.minimum


@dataclass(frozen=True)
class Case:
    """One case. Frozen: a change gives a new case.

    Numbers and choices may be given as any mapping that holds every parameter and choice of the loop; they are kept read-only, in
    the loop's own order, so that equal cases are equal to the last bit and give the same file.

    Raises
    ------
    InvalidInputError
        If a value breaks its specification, a name is unknown or missing, or a size is not finite.
    """

    kind: str
    numbers: Mapping[str, Number]
    choices: Mapping[str, str] = field(default_factory=dict)
    levers: tuple[LeverSetting, ...] = ()
    disturbance: DisturbanceSetting | None = None
    started_from: str | None = None
    """Name of the starting case, drawn as the hollow dot; None for typical numbers."""

    def __post_init__(self) -> None:
        known = specifications(self.kind)
        _refuse_names("number", self.numbers, known, self.kind)
        numbers = {name: _checked_number(item, self.numbers[name]) for name, item in known.items()}
        loop_choices = {item.name: item for item in LOOPS[self.kind].choices}
        choices = {name: item.default for name, item in loop_choices.items()} | dict(self.choices)
        _refuse_names("choice", choices, loop_choices, self.kind)
        choices = {name: item.check(choices[name]) for name, item in loop_choices.items()}
        object.__setattr__(self, "numbers", MappingProxyType(numbers))
        object.__setattr__(self, "choices", MappingProxyType(choices))
        object.__setattr__(self, "levers", _checked_levers(self.levers))
        object.__setattr__(self, "disturbance", _checked_disturbance(self.kind, self.disturbance))
        if self.started_from is not None and starting_case(self.started_from)[0] != self.kind:
            raise InvalidInputError(f"The starting case {self.started_from} is of another loop than {self.kind}.")

    def __hash__(self) -> int:
        return hash(
            (
                self.kind,
                tuple(self.numbers.items()),
                tuple(self.choices.items()),
                self.levers,
                self.disturbance,
                self.started_from,
            )
        )

    def __reduce__(self) -> tuple[Any, ...]:
        fields = (self.kind, dict(self.numbers), dict(self.choices), self.levers, self.disturbance, self.started_from)
        return Case, fields

    @staticmethod
    def typical(kind: str) -> Case:
        """The case of a loop whose every number is typical."""
        numbers = {name: Number(item.typical, Basis.TYPICAL) for name, item in specifications(kind).items()}
        return Case(kind, numbers, disturbance=DisturbanceSetting(*DEFAULT_DISTURBANCES[kind]))

    @staticmethod
    def from_starting_case(name: str) -> Case:
        """An invented person to start from: the named numbers are assumed, the others typical.

        Raises
        ------
        InvalidInputError
            If no starting case has this name.
        """
        kind, item = starting_case(name)
        base = Case.typical(kind)
        numbers = {key: Number(float(value), _basis_of(kind, key, value)) for key, value in item.numbers.items()}
        return replace(base, numbers={**base.numbers, **numbers}, choices=item.choices, started_from=name)

    @property
    def specifications(self) -> Mapping[str, ParameterSpecification]:
        """Parameter name to specification, in the order shown."""
        return specifications(self.kind)

    def start(self) -> Case:
        """Where this case started: its starting case, or the loop's typical case."""
        return Case.typical(self.kind) if self.started_from is None else Case.from_starting_case(self.started_from)

    def value(self, name: str) -> float:
        """One number's value in its specification's unit.

        Raises
        ------
        InvalidInputError
            If the loop has no such number.
        """
        return self._number(name).value

    def spread(self, name: str) -> float:
        """The standard deviation to draw this number from, as its specification's `spread` is given."""
        number = self._number(name)
        return number.spread if number.spread is not None else self.specifications[name].spread_for(number.basis)

    def loop(self) -> Any:
        """The loop with this case's numbers and choices; levers are not on it."""
        return LOOPS[self.kind](**{name: number.value for name, number in self.numbers.items()}, **self.choices)

    def with_number(self, name: str, value: float, basis: Basis | str | None = None, spread: float | None = None) -> Case:
        """The case with one number changed.

        A basis that is not said stays where the value stays, and becomes *assumed* where it changes: a changed number is no longer
        the one that was measured, nor the typical one. The number's own spread goes with a measurement that is given up.

        Raises
        ------
        InvalidInputError
            If the loop has no such number, or the value, basis or spread breaks its rule.
        """
        changed = self._changed(name, value, basis, spread)
        return replace(self, numbers={**self.numbers, name: changed})

    def with_choice(self, name: str, value: str) -> Case:
        """The case with one setting changed."""
        return replace(self, choices={**self.choices, name: value})

    def with_levers(self, *levers: LeverSetting) -> Case:
        """The case with exactly these levers laid on it, in this order."""
        return replace(self, levers=levers)

    def with_disturbance(self, name: str, size: float) -> Case:
        """The case whose traces answer to another disturbance."""
        return replace(self, disturbance=DisturbanceSetting(name, size))

    def with_sensitivity(self, sensitivity: float) -> Case:
        """The case whose loop has this sensitivity; the numbers that carry it change as in `with_number`.

        Raises
        ------
        InvalidInputError
            If the sensitivity is not finite and positive, or takes a number out of its range.
        """
        loop = self.loop()
        return self._carrying(loop.with_sensitivity(_positive(loop.sensitivity_name, sensitivity, loop.sensitivity_unit)))

    def with_delay(self, delay: float) -> Case:
        """The case whose loop has this delay in s, every path's delay shifted; see `with_sensitivity`."""
        loop = self.loop()
        return self._carrying(loop.with_delay(_positive(loop.delay_name, delay, "s")))

    def moved_to(self, sensitivity: float | None = None, delay: float | None = None) -> Case:
        """The case moved on the boundary map towards this point, as far along each axis as the numbers' ranges allow.

        Raises
        ------
        InvalidInputError
            If an aim is not finite and positive.
        """
        moved = self
        if sensitivity is not None:
            moved = _moved_towards(moved.with_sensitivity, float(moved.loop().sensitivity), sensitivity, moved)
        if delay is not None:
            moved = _moved_towards(moved.with_delay, float(moved.loop().delay), delay, moved)
        return moved

    def to_json(self) -> str:
        """The case file's text; see `case_file`."""
        from lagscape.case.case_file import case_to_json

        return case_to_json(self)

    @staticmethod
    def from_json(text: str | bytes, check_lever: LeverCheck | None = None) -> Case:
        """The case in a case file's text; see `case_file.case_from_json`."""
        from lagscape.case.case_file import case_from_json

        return case_from_json(text, check_lever)

    def to_link(self) -> str:
        """The part of a link after `#`; see `case_link`."""
        from lagscape.case.case_link import case_to_link

        return case_to_link(self)

    @staticmethod
    def from_link(link: str, check_lever: LeverCheck | None = None) -> Case:
        """The case in a link or in its part after `#`; see `case_link.case_from_link`."""
        from lagscape.case.case_link import case_from_link

        return case_from_link(link, check_lever)

    def _number(self, name: str) -> Number:
        if name not in self.numbers:
            raise InvalidInputError(f"The {self.kind} loop has no number {_shown(name)}; it has: {', '.join(self.numbers)}.")
        return self.numbers[name]

    def _changed(self, name: str, value: object, basis: Basis | str | None = None, spread: float | None = None) -> Number:
        old = self._number(name)
        checked = self.specifications[name].check(value)
        same = checked == old.value
        new_basis = old.basis if same and basis is None else Basis.ASSUMED if basis is None else _checked_basis(basis)
        if spread is None and new_basis is old.basis and (same or new_basis is Basis.ASSUMED):
            spread = old.spread
        return Number(checked, new_basis, spread)

    def _carrying(self, loop: Any) -> Case:
        """The case with the numbers of a changed loop of the same kind written back."""
        return replace(self, numbers={name: self._changed(name, float(getattr(loop, name))) for name in self.numbers})


@cache
def _specifications(loop: Any) -> Mapping[str, ParameterSpecification]:
    return MappingProxyType({item.name: item for item in loop.specifications})


@cache
def _disturbance_units(loop: Any) -> Mapping[str, str]:
    typical = loop(**{item.name: item.typical for item in loop.specifications})
    return MappingProxyType({name: channel.unit for name, channel in typical.form().channels.items()})


def _loop_class(kind: str) -> Any:
    if not isinstance(kind, str) or kind not in LOOPS:
        raise InvalidInputError(f"The loop must be one of {', '.join(LOOPS)}; got {_shown(kind)}.")
    return LOOPS[kind]


def _shown(value: object) -> str:
    """A value for a sentence, cut short: it may come from a file."""
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _basis_of(kind: str, name: str, value: float) -> Basis:
    item = specifications(kind).get(name)
    return Basis.TYPICAL if item is not None and item.typical == value else Basis.ASSUMED


def _refuse_names(what: str, given: Mapping[str, Any], known: Mapping[str, Any], kind: str) -> None:
    if not isinstance(given, Mapping):
        raise InvalidInputError(f"The {what}s must be a mapping from name to value; got {_shown(given)}.")
    unknown = [name for name in given if name not in known]
    if unknown:
        there = f"it has: {', '.join(known)}" if known else "it has none"
        raise InvalidInputError(f"The {kind} loop has no {what} {_shown(unknown[0])}; {there}.")
    missing = [name for name in known if name not in given]
    if missing:
        raise InvalidInputError(f"The {what} {missing[0]} is missing; the {kind} loop needs every one of its {what}s.")


def _checked_basis(basis: object) -> Basis:
    try:
        return Basis(basis)  # type: ignore[arg-type]
    except ValueError:
        raise InvalidInputError(f"The basis must be one of {', '.join(Basis)}; got {_shown(basis)}.") from None


def _checked_number(specification: ParameterSpecification, number: object) -> Number:
    if not isinstance(number, Number):
        raise InvalidInputError(f"{specification.label} must be a Number with value, basis and spread; got {_shown(number)}.")
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
    return Number(value, _checked_basis(number.basis), spread)


def _checked_levers(levers: object) -> tuple[LeverSetting, ...]:
    if not isinstance(levers, (tuple, list)) or not all(isinstance(item, LeverSetting) for item in levers):
        raise InvalidInputError(f"The levers must be LeverSetting items in order; got {_shown(levers)}.")
    if len(levers) > MOST_LEVERS:
        raise InvalidInputError(f"A case carries at most {MOST_LEVERS} levers; got {len(levers)}.")
    checked: list[LeverSetting] = []
    for lever in levers:
        if not isinstance(lever.name, str) or not _LEVER_NAME.match(lever.name):
            raise InvalidInputError(f"A lever's name must be small letters, digits and underscores, at most 48; got {_shown(lever.name)}.")
        if any(lever.name == other.name for other in checked):
            raise InvalidInputError(f"The lever {lever.name} is laid twice; give it one dose.")
        checked.append(LeverSetting(lever.name, _setting(f"The dose of {lever.name}", lever.dose)))
    return tuple(checked)


def _checked_disturbance(kind: str, disturbance: object) -> DisturbanceSetting | None:
    if disturbance is None:
        return None
    if not isinstance(disturbance, DisturbanceSetting):
        raise InvalidInputError(f"The disturbance must be a DisturbanceSetting or None; got {_shown(disturbance)}.")
    units = disturbance_units(kind)
    if disturbance.name not in units:
        raise InvalidInputError(f"The {kind} loop has no disturbance {_shown(disturbance.name)}; it has: {', '.join(units)}.")
    return DisturbanceSetting(disturbance.name, _setting(f"The size of the {disturbance.name}", disturbance.size))


def _setting(what: str, value: object) -> float:
    rule = f"{what} must be a number from {-LARGEST_SETTING:g} to {LARGEST_SETTING:g}"
    number = _finite(rule, value)
    if abs(number) > LARGEST_SETTING:
        raise InvalidInputError(f"{rule}; got {number:.6g}.")
    return number + 0.0


def _finite(rule: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise InvalidInputError(f"{rule}; got {_shown(value)}.")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise InvalidInputError(f"{rule}; got {number}.")
    return number


def _positive(what: str, value: object, unit: str) -> float:
    rule = f"{what} must be finite and positive" + (f" ({unit})" if unit else "")
    number = _finite(rule, value)
    if number <= 0.0:
        raise InvalidInputError(f"{rule}; got {number:.6g}.")
    return number


def _moved_towards(move: Callable[[float], Case], here: float, aim: float, stay: Case) -> Case:
    """`move(aim)`, or the furthest allowed step from `here` towards it, by halving."""
    aim = _positive("The aim on the map", aim, "")
    try:
        return move(aim)
    except InvalidInputError:
        best, reached, refused = stay, 0.0, 1.0
    for _ in range(50):
        share = 0.5 * (reached + refused)
        try:
            best, reached = move(here + share * (aim - here)), share
        except InvalidInputError:
            refused = share
    return best
