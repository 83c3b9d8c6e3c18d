"""The levers laid on a case: the loop that they make, its standing, and what each of them changes.

The controller is the patient's own and stays where it is: its line is fixed first (`BreathingLoop.freeze_line`), then the levers move
the plant and the gains, then the loop finds its new rest. The levers act in the order of `LEVERS`, not in the order in which they
were laid, so that the same levers always make the same loop.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

from lagscape.case.case import Case
from lagscape.case.parts import LeverSetting, shown
from lagscape.errors import InvalidInputError
from lagscape.questions.cautions import CAUTIONS, Caution, cautions
from lagscape.questions.lever import Lever
from lagscape.questions.lever_list import LEVERS
from lagscape.questions.standing import Judgement, Standing, judge, judge_loop

__all__ = [
    "CAUTIONS",
    "LEVERS",
    "Caution",
    "Figures",
    "Lever",
    "LeverEffect",
    "apply_levers",
    "cautions",
    "check_lever",
    "effects",
    "figures_of",
    "judge_with_levers",
    "lay_levers",
    "lever_of",
]


def lever_of(kind: str, name: str) -> Lever:
    """The lever of this name for loops of this kind.

    Raises
    ------
    InvalidInputError
        If there is none; the sentence lists those there are.
    """
    known = LEVERS.get(kind, {})
    if name not in known:
        there = f"it has: {', '.join(known)}" if known else "it has none"
        raise InvalidInputError(f"The {kind} loop has no lever {shown(name)}; {there}.")
    return known[name]


def check_lever(kind: str, name: str, dose: float) -> None:
    """Refuse a lever that the loop does not have, or a dose outside the lever's range; a `LeverCheck` for reading cases.

    Raises
    ------
    InvalidInputError
        The sentence names the rule and what came.
    """
    lever_of(kind, name).check(dose)


def lay_levers(loop: Any, settings: Iterable[LeverSetting]) -> Any:
    """The loop (or batch of loops) with these levers on it. Doses may be arrays of the batch's shape, and are not checked then.

    Raises
    ------
    InvalidInputError
        If the loop has no such lever.
    """
    laid = {setting.name: setting.dose for setting in settings}
    for name in laid:
        lever_of(loop.kind, name)
    if not laid:
        return loop
    if hasattr(loop, "freeze_line"):
        loop = loop.freeze_line()
    for name, lever in LEVERS[loop.kind].items():
        if name in laid:
            loop = lever.act(loop, laid[name])
    return loop


def apply_levers(case: Case) -> Any:
    """The case's loop with the case's levers on it; the plain loop where none is laid.

    Raises
    ------
    InvalidInputError
        If a lever or its dose is unknown to the loop.
    """
    for setting in case.levers:
        check_lever(case.kind, setting.name, setting.dose)
    return lay_levers(case.loop(), case.levers)


def judge_with_levers(case: Case) -> Judgement | None:
    """The judgement of the case with its levers; None where no lever is laid.

    Raises
    ------
    InvalidInputError
        If a lever is unknown, its dose out of range, or the loop with it has no rest.
    """
    return judge_loop(apply_levers(case)) if case.levers else None


@dataclass(frozen=True)
class Figures:
    """What a lever's effect is read from. Times in s; None where the loop has no such figure."""

    standing: Standing
    loop_gain: float | None
    gain_margin: float | None
    cycle_length_s: float | None
    apnoea_s: float | None
    """Apnoea in each cycle; 0 where the loop does not hunt; None for a loop without apnoea or a cycle that was not found."""
    apnoea_share: float | None
    """Share of the time spent in apnoea."""
    resting_level: float
    """The first state at rest: resting PaCO2 in mmHg for breathing."""


@dataclass(frozen=True)
class LeverEffect:
    """What one lever, or all of them together, changes."""

    settings: tuple[LeverSetting, ...]
    label: str
    before: Figures
    after: Figures | None
    """None where the loop with it is impossible; then `refusal` says why."""
    refusal: str = ""

    @property
    def loop_gain_change(self) -> float | None:
        """Change of loop gain as a share of what it was: -0.4 is 40 % less."""
        if self.after is None or self.after.loop_gain is None or not self.before.loop_gain:
            return None
        return self.after.loop_gain / self.before.loop_gain - 1.0

    @property
    def gain_margin_change(self) -> float | None:
        """Gain margin after over gain margin before."""
        if self.after is None or self.after.gain_margin is None or self.before.gain_margin is None:
            return None
        return self.after.gain_margin / self.before.gain_margin

    @property
    def cycle_length_change_s(self) -> float | None:
        return _difference(self.before.cycle_length_s, None if self.after is None else self.after.cycle_length_s)

    @property
    def apnoea_change_s(self) -> float | None:
        """Change of the apnoea in each cycle, s."""
        return _difference(self.before.apnoea_s, None if self.after is None else self.after.apnoea_s)


def figures_of(judged: Judgement) -> Figures:
    """The figures of a judged loop."""
    hunts = judged.standing is Standing.HUNTS
    silent, duty = (judged.silent_time, judged.duty_ratio) if hunts else (0.0, 1.0)
    if judged.loop.kind != "breathing":
        silent = duty = None
    found = judged.margins
    return Figures(
        standing=judged.standing,
        loop_gain=found.loop_gain,
        gain_margin=found.gain_margin,
        cycle_length_s=judged.cycle_length,
        apnoea_s=silent,
        apnoea_share=None if duty is None else 1.0 - duty,
        resting_level=float(judged.rest.state[0]),
    )


def effects(case: Case) -> tuple[LeverEffect, ...]:
    """What each lever of the case changes alone, and, where there are several, what all change together (last).

    Raises
    ------
    InvalidInputError
        If the case without levers is impossible, or a lever or its dose is unknown to the loop.
    """
    for setting in case.levers:
        check_lever(case.kind, setting.name, setting.dose)
    if not case.levers:
        return ()
    before = figures_of(judge(case))
    laid: list[tuple[str, tuple[LeverSetting, ...]]] = [(LEVERS[case.kind][setting.name].label, (setting,)) for setting in case.levers]
    if len(case.levers) > 1:
        laid.append(("All together", case.levers))
    return tuple(_effect(case, label, settings, before) for label, settings in laid)


def _effect(case: Case, label: str, settings: tuple[LeverSetting, ...], before: Figures) -> LeverEffect:
    try:
        judged = judge_with_levers(replace(case, levers=settings))
    except InvalidInputError as problem:
        return LeverEffect(settings, label, before, None, str(problem))
    assert judged is not None
    return LeverEffect(settings, label, before, figures_of(judged))


def _difference(before: float | None, after: float | None) -> float | None:
    return None if before is None or after is None else after - before
