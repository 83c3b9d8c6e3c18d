"""The verdict: does this loop settle, ring or hunt, and how far is it from the boundary.

    settles   a disturbance falls under 5 % within one cycle of the dominant oscillation
    rings     it dies, over several cycles
    hunts     it does not die

`judge` is quick and follows the hand; `analyse` is the whole answer for a file, a report or a script.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property
from typing import Any

from lagscape.case.case import Case
from lagscape.engine.cycle import Cycle, CycleStatus, limit_cycle
from lagscape.engine.margins import Margins, MarginStatus, margins
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.engine.roots import Roots, rightmost_roots
from lagscape.loops.protocol import DriveForm, Rest

__all__ = ["SETTLED_SHARE", "Analysis", "Judgement", "Standing", "analyse", "judge", "judge_loop", "standing_of"]

SETTLED_SHARE = 0.05
"""A disturbance under this share of its first size counts as gone."""

_NO_GROWTH = 1e-9
"""Growth per radian of oscillation above which rounding cannot be told from growth; a loop on the boundary hunts."""


class Standing(StrEnum):
    SETTLES = "settles"
    RINGS = "rings"
    HUNTS = "hunts"


def standing_of(growth_rate: float, frequency: float) -> Standing:
    """The standing of a dominant oscillation.

    Parameters
    ----------
    growth_rate : float
        Real part of the dominant oscillatory root, 1/s.
    frequency : float
        Its imaginary part, rad/s, positive.
    """
    if growth_rate >= -_NO_GROWTH * frequency:
        return Standing.HUNTS
    left_after_one_cycle = growth_rate * 2.0 * math.pi / frequency
    return Standing.SETTLES if left_after_one_cycle < math.log(SETTLED_SHARE) else Standing.RINGS


@dataclass(frozen=True)
class Judgement:
    """One loop judged. What is costly is worked out when first asked for."""

    loop: Any
    rest: Rest
    form: DriveForm
    opened: OpenLoop

    @cached_property
    def margins(self) -> Margins:
        return margins(self.form, self.rest, self.opened)

    @cached_property
    def roots(self) -> Roots:
        return rightmost_roots(self.form, self.rest, 4, self.opened, self.margins)

    @cached_property
    def standing(self) -> Standing:
        root = self.roots.oscillatory
        if not self.margins.stable or self.roots.spectral_abscissa > 0.0:
            return Standing.HUNTS
        if root is None:
            return Standing.SETTLES
        return standing_of(root.real, abs(root.imag))

    @cached_property
    def growth_rate(self) -> float | None:
        """Real part of the dominant oscillatory root, 1/s; None where nothing oscillates."""
        root = self.roots.oscillatory
        return None if root is None else root.real

    @cached_property
    def linear_cycle_length(self) -> float | None:
        """Period of the dominant oscillatory root, s; None where nothing oscillates."""
        root = self.roots.oscillatory
        return None if root is None else 2.0 * math.pi / abs(root.imag)

    @cached_property
    def cycle(self) -> Cycle | None:
        """The cycle that a hunting loop comes to; None where the loop does not hunt or no cycle was found."""
        if self.standing is not Standing.HUNTS:
            return None
        found = limit_cycle(self.form, self.rest, known=self.margins)
        return found if found.status is CycleStatus.CONVERGED else None

    @cached_property
    def cycle_length(self) -> float | None:
        """s; of the cycle where the loop hunts, else of the dominant oscillation."""
        return self.cycle.period_s if self.cycle is not None else self.linear_cycle_length

    @cached_property
    def cycles_to_settle(self) -> float | None:
        """How many cycles a disturbance takes to fall under 5 %; None where it does not, or where nothing oscillates."""
        if self.standing is Standing.HUNTS or self.growth_rate is None or self.linear_cycle_length is None:
            return None
        return math.log(SETTLED_SHARE) / (self.growth_rate * self.linear_cycle_length)

    @cached_property
    def silent_time(self) -> float | None:
        """Apnoea in each cycle, s; None where there is no cycle."""
        cycle = self.cycle
        if cycle is None or cycle.silent_fraction is None or cycle.period_s is None:
            return None
        return cycle.silent_fraction * cycle.period_s

    @cached_property
    def duty_ratio(self) -> float | None:
        """Share of the cycle that is not apnoea; None where there is no cycle."""
        return None if self.cycle is None else self.cycle.duty_ratio


def judge_loop(loop: Any) -> Judgement:
    """Judge a loop.

    Raises
    ------
    InvalidInputError
        If its numbers allow no rest.
    """
    rest, form = loop.rest(), loop.form()
    return Judgement(loop, rest, form, open_loop(form, rest))


def judge(case: Case) -> Judgement:
    """Judge a case without its levers; see `questions.levers` for the case with them.

    Raises
    ------
    InvalidInputError
        If its numbers allow no rest.
    """
    return judge_loop(case.loop())


_MISSING: Mapping[MarginStatus, str] = {
    MarginStatus.NO_FEEDBACK: "Nothing comes back from the controller, so the loop cannot hunt at any gain or delay.",
    MarginStatus.NO_PHASE_CROSSOVER: "The signal never comes back against itself, so no gain makes this loop hunt.",
    MarginStatus.NO_GAIN_CROSSOVER: "The loop's gain is under 1 at every frequency, so no lag and no delay makes it hunt.",
    MarginStatus.NO_LAG_RESTORES: "The loop hunts, and no phase lead within a turn settles it.",
    MarginStatus.NO_DELAY_RESTORES: "The loop hunts, and would even with its shortest delay taken away.",
}


@dataclass(frozen=True)
class Analysis:
    """The whole answer to question one. Times in s, rates in 1/s, phase in rad; a missing value has its reason in `reasons`."""

    kind: str
    standing: Standing
    sentence: str
    loop_gain: float | None
    gain_margin: float | None
    phase_margin_rad: float | None
    delay_margin_s: float | None
    cycle_length_s: float | None
    growth_rate_per_s: float | None
    slow_root_per_s: float | None
    duty_ratio: float | None
    apnoea_s: float | None
    equilibrium: Mapping[str, float]
    co2_reserve_mmhg: float | None
    reasons: Mapping[str, str]
    levers: tuple[tuple[str, float], ...] = ()

    def to_json(self) -> dict[str, Any]:
        """A plain dict for JSON; a missing value is null, with `reasons` beside it. Only breathing has a CO2 reserve."""
        names = (
            "kind", "standing", "sentence", "loop_gain", "gain_margin", "phase_margin_rad", "delay_margin_s", "cycle_length_s",
            "growth_rate_per_s", "slow_root_per_s", "duty_ratio", "apnoea_s",
        )  # fmt: skip
        plain: dict[str, Any] = {name: getattr(self, name) for name in names}
        plain["standing"] = str(self.standing)
        plain["equilibrium"] = dict(self.equilibrium)
        if self.kind == "breathing":
            plain["co2_reserve_mmHg"] = self.co2_reserve_mmhg
        plain["levers"] = [{"name": name, "dose": dose} for name, dose in self.levers]
        plain["reasons"] = dict(self.reasons)
        return plain


def analyse(case: Case) -> Analysis:
    """Judge a case in full, with the levers laid on it.

    Parameters
    ----------
    case : Case

    Returns
    -------
    Analysis

    Raises
    ------
    InvalidInputError
        If its numbers allow no rest, or a lever is unknown to its loop.
    """
    from lagscape.questions.levers import apply_levers
    from lagscape.questions.wording import standing_sentence

    judged = judge_loop(apply_levers(case))
    return analysis_of(judged, standing_sentence(judged), tuple((setting.name, setting.dose) for setting in case.levers))


def analysis_of(judged: Judgement, sentence: str, levers: tuple[tuple[str, float], ...] = ()) -> Analysis:
    """The analysis of a judged loop."""
    found = judged.margins
    reasons = {
        name: _MISSING[status]
        for name, value, status in (
            ("gain_margin", found.gain_margin, found.gain_status),
            ("phase_margin_rad", found.phase_margin_rad, found.phase_status),
            ("delay_margin_s", found.delay_margin_s, found.delay_status),
        )
        if value is None
    }
    if judged.roots.oscillatory is None:
        reasons["cycle_length_s"] = reasons["growth_rate_per_s"] = "Nothing oscillates in this loop."
    if judged.cycle is None:
        why = "The loop does not hunt." if judged.standing is not Standing.HUNTS else "The cycle could not be followed to its end."
        reasons["duty_ratio"] = reasons["apnoea_s"] = why
    if judged.roots.slow_real is None:
        reasons["slow_root_per_s"] = "No slow real root was found."
    equilibrium = {name: float(value) for name, value in zip(judged.form.state_names, judged.rest.state, strict=True)}
    equilibrium["controlled signal"] = float(judged.rest.output)
    reserve = judged.loop.co2_reserve_mmhg() if judged.loop.kind == "breathing" else None
    return Analysis(
        kind=judged.loop.kind,
        standing=judged.standing,
        sentence=sentence,
        loop_gain=found.loop_gain,
        gain_margin=found.gain_margin,
        phase_margin_rad=found.phase_margin_rad,
        delay_margin_s=found.delay_margin_s,
        cycle_length_s=judged.cycle_length,
        growth_rate_per_s=judged.growth_rate,
        slow_root_per_s=judged.roots.slow_real,
        duty_ratio=judged.duty_ratio,
        apnoea_s=judged.silent_time,
        equilibrium=equilibrium,
        co2_reserve_mmhg=None if reserve is None else float(reserve),
        reasons=reasons,
        levers=levers,
    )
