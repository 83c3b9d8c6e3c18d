"""What is known to harm, said where the levers are chosen. Servo-controlled ventilation is not offered as a lever; here is why."""

from __future__ import annotations

from dataclasses import dataclass

from lagscape.case.case import Case

__all__ = ["CAUTIONS", "Caution", "cautions"]


@dataclass(frozen=True)
class Caution:
    """One caution with its source and the cases beside which it stands."""

    name: str
    sentence: str
    source: str
    kind: str
    started_from: str = ""
    """Part of a starting case's name; empty for every case of the loop."""


CAUTIONS: tuple[Caution, ...] = (
    Caution(
        "servo_ventilation",
        "Servo-controlled ventilation is not offered here. In heart failure with an ejection fraction (LVEF) of 45 % or less it raised "
        "death of any cause (hazard ratio 1.28, 95 % interval 1.06 to 1.55) and cardiovascular death (1.34, 1.09 to 1.65), although the "
        "apnoea-hypopnoea index fell to 6.6 an hour.",
        "N Engl J Med 2015;373:1095",
        "breathing",
        "heart-failure",
    ),
    Caution(
        "quiet_is_not_better",
        "A quieter loop is not by itself a better outcome: fewer apnoeas have gone with more deaths. Local protocols and licensed "
        "practice decide.",
        "N Engl J Med 2015;373:1095",
        "breathing",
    ),
    Caution(
        "other_tremor",
        "These levers act on the mechanical-reflex loop only. A tremor whose frequency does not move with a load comes from elsewhere, "
        "and this loop says nothing of it.",
        "Common clinical rule of loading; see the tremor measurement.",
        "reflex",
    ),
)


def cautions(case: Case) -> tuple[Caution, ...]:
    """The cautions that stand beside this case's levers, the most particular first."""
    return tuple(
        item for item in CAUTIONS if item.kind == case.kind and (not item.started_from or item.started_from in (case.started_from or ""))
    )
