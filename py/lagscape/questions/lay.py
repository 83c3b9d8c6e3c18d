"""From a measured recording to the case: which of the loop's numbers the cycles fix, and what they become.

Two measured figures fix two numbers. The cycle length fixes the loop's delay: the loop must go round once in the measured time. The
loop gain, from the duty ratio (Sands et al. 2011, AJRCCM 184:1067), fixes the sensitivity: |L| there must be the measured one. The
split between the paths, the lungs and the stores stay as the case has them; a cycle length alone cannot tell them from the delay.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from typing import Protocol

from lagscape.case.case import Case
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.questions.standing import Judgement, Standing, judge, judge_loop

__all__ = ["Change", "Laying", "MeasuredSpread", "lay_measurement"]

_NEAR = 1e-4
"""The laid loop's cycle agrees with the measured one to this share: far inside any measurement's own spread."""


class MeasuredSpread(Protocol):
    """A median with its quartiles."""

    @property
    def median(self) -> float: ...
    @property
    def lower_quartile(self) -> float: ...
    @property
    def upper_quartile(self) -> float: ...


@dataclass(frozen=True)
class Change:
    """One number that laying would change, in its specification's unit."""

    name: str
    label: str
    unit: str
    before: float
    after: float
    because: str


@dataclass(frozen=True)
class Laying:
    """What laying a measurement on a case does, before it is done."""

    case: Case
    changes: tuple[Change, ...]
    notes: tuple[str, ...]


def lay_measurement(case: Case, cycle_length: MeasuredSpread | None, loop_gain: MeasuredSpread | None) -> Laying:
    """The case with the measured cycle length and loop gain on it.

    Parameters
    ----------
    case : Case
        A breathing case.
    cycle_length : median and quartiles, s
    loop_gain : median and quartiles, no unit; None where no cycle had an apnoea, then the sensitivity stays.

    Returns
    -------
    Laying
        The new case, its changes and what a reader should know of them.

    Raises
    ------
    InvalidInputError
        If the case is no breathing case, nothing was measured, or no delay in range gives the measured cycle.
    """
    if case.kind != "breathing":
        raise InvalidInputError("A recording of breathing is laid on a breathing case; choose the breathing loop first.")
    if cycle_length is None:
        raise InvalidInputError("No cycle was measured, so there is nothing to lay on the case. Choose another window or channel.")
    gain = None if loop_gain is None else loop_gain.median
    laid = _solved(case, cycle_length.median, gain)
    delay_spread = _log_spread(cycle_length)
    gain_spread = None if loop_gain is None else _log_spread(loop_gain)
    changes = []
    for name, number in case.numbers.items():
        after = laid.value(name)
        is_delay = name in ("peripheral_delay_s", "central_delay_s")
        touched = is_delay or (gain is not None and name in ("peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg"))
        if not touched:
            continue
        because = "so that the cycle is the measured one" if is_delay else "so that the loop gain is the measured one"
        laid = laid.with_number(name, after, Basis.MEASURED, delay_spread if is_delay else gain_spread)
        specification = case.specifications[name]
        changes.append(Change(name, specification.label, specification.unit, number.value, after, because))
    return Laying(laid, tuple(changes), _notes(gain, judge(laid)))


def _solved(case: Case, length: float, gain: float | None) -> Case:
    """Delay from the linear phase condition, then corrected until the loop's own cycle, clipped or not, has the length."""
    aim = length
    laid = case
    for _ in range(12):
        laid = _linear(laid, aim, gain)
        judged = judge(laid)
        period = judged.cycle_length if judged.standing is Standing.HUNTS else None
        if period is None or abs(period / length - 1.0) < _NEAR:
            break
        aim *= length / period
    return laid


def _linear(case: Case, length: float, gain: float | None) -> Case:
    judged = judge_loop(case.loop())
    frequency = 2.0 * math.pi / length
    response, _ = judged.opened.at(1j * frequency)
    if response == 0.0:
        raise InvalidInputError("This case has no chemoreflex gain, so no delay gives it a cycle. Raise the gain first.")
    longer = (math.pi + cmath.phase(response)) / frequency
    shortest = float(judged.loop.delay) + longer
    shortest -= length * math.floor((shortest - case.specifications["peripheral_delay_s"].minimum) / length)
    try:
        moved = case.with_delay(shortest)
        return moved if gain is None else moved.with_sensitivity(float(judged.loop.sensitivity) * gain / abs(response))
    except InvalidInputError as problem:
        raise InvalidInputError(f"The measured cycle of {length:.3g} s does not fit this case: {problem} Start from a closer case.") from None


def _log_spread(measured: MeasuredSpread) -> float:
    """Standard deviation of the logarithm from the quartiles of the cycles, as for a normal law (0.6745 of it each side)."""
    low, high = max(measured.lower_quartile, 1e-9), max(measured.upper_quartile, 1e-9)
    return min(2.0, max(0.02, math.log(high / low) / (2.0 * 0.6745)))


def _notes(gain: float | None, judged: Judgement) -> tuple[str, ...]:
    notes = ["The split between peripheral and central gain, the lungs and the stores stay as the case has them."]
    if gain is None:
        notes.append("No cycle had an apnoea, so the loop gain could not be measured and the sensitivity stays.")
    elif judged.margins.loop_gain is not None and judged.duty_ratio is not None:
        notes.append(f"The laid loop's own duty ratio is {judged.duty_ratio:.2f}.")
    return tuple(notes)
