"""The case: one loop's numbers, each with its basis and spread, the settings, the levers laid on it and the disturbance shown.

A case is what undo steps through, what a file or a link holds, and what every question is asked of. It has no field that could
hold a name, a patient number or a date of birth. Values are checked when a case is made; a case that exists is inside every range.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Any

from lagscape.case.parameters import Basis, ParameterSpecification
from lagscape.case.parts import (
    DEFAULT_DISTURBANCES,
    LARGEST_LOG_SPREAD,
    LARGEST_SETTING,
    MOST_LEVERS,
    DisturbanceSetting,
    LeverCheck,
    LeverSetting,
    Number,
    checked_basis,
    checked_disturbance,
    checked_levers,
    checked_number,
    checked_positive,
    disturbance_units,
    largest_spread,
    refuse_names,
    shown,
    specifications,
    starting_case,
)
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS

__all__ = [
    "DEFAULT_DISTURBANCES",
    "LARGEST_LOG_SPREAD",
    "LARGEST_SETTING",
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
        refuse_names("number", self.numbers, known, self.kind)
        numbers = {name: checked_number(item, self.numbers[name]) for name, item in known.items()}
        loop_choices = {item.name: item for item in LOOPS[self.kind].choices}
        choices = {name: item.default for name, item in loop_choices.items()} | dict(self.choices)
        refuse_names("choice", choices, loop_choices, self.kind)
        choices = {name: item.check(choices[name]) for name, item in loop_choices.items()}
        object.__setattr__(self, "numbers", MappingProxyType(numbers))
        object.__setattr__(self, "choices", MappingProxyType(choices))
        object.__setattr__(self, "levers", checked_levers(self.levers))
        object.__setattr__(self, "disturbance", checked_disturbance(self.kind, self.disturbance))
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
        return self._carrying(loop.with_sensitivity(checked_positive(loop.sensitivity_name, sensitivity, loop.sensitivity_unit)))

    def with_delay(self, delay: float) -> Case:
        """The case whose loop has this delay in s, every path's delay shifted; see `with_sensitivity`."""
        loop = self.loop()
        return self._carrying(loop.with_delay(checked_positive(loop.delay_name, delay, "s")))

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
            raise InvalidInputError(f"The {self.kind} loop has no number {shown(name)}; it has: {', '.join(self.numbers)}.")
        return self.numbers[name]

    def _changed(self, name: str, value: object, basis: Basis | str | None = None, spread: float | None = None) -> Number:
        old = self._number(name)
        checked = self.specifications[name].check(value)
        same = checked == old.value
        new_basis = old.basis if same and basis is None else Basis.ASSUMED if basis is None else checked_basis(basis)
        if spread is None and new_basis is old.basis and (same or new_basis is Basis.ASSUMED):
            spread = old.spread
        return Number(checked, new_basis, spread)

    def _carrying(self, loop: Any) -> Case:
        """The case with the numbers of a changed loop of the same kind written back."""
        return replace(self, numbers={name: self._changed(name, float(getattr(loop, name))) for name in self.numbers})


def _basis_of(kind: str, name: str, value: float) -> Basis:
    item = specifications(kind).get(name)
    return Basis.TYPICAL if item is not None and item.typical == value else Basis.ASSUMED


def _moved_towards(move: Callable[[float], Case], here: float, aim: float, stay: Case) -> Case:
    """`move(aim)`, or the furthest allowed step from `here` towards it, by halving."""
    aim = checked_positive("The aim on the map", aim, "")
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
