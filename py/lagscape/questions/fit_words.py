"""The sentences of a fit."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from lagscape.case.case import Case
from lagscape.questions.fit_measured import Measured

if TYPE_CHECKING:
    from lagscape.questions.fit import FittedFigure, FittedNumber, Misfit

__all__ = ["fit_sentences", "refusal_sentences", "warning_sentence"]


def fit_sentences(
    measured: Measured,
    numbers: Sequence[FittedNumber],
    figures: Sequence[FittedFigure],
    misfits: Sequence[Misfit],
    warning: str,
    far: str | None,
    rough: bool,
    has_levers: bool,
) -> tuple[str, ...]:
    """What a reader should know of a fit, the most important first. `far` names a number that lies far from the case's."""
    from lagscape.questions.fit import SHIFTED_BEYOND

    said = [_fits(numbers, misfits, far)]
    if warning:
        said.append(warning)
    pinned = [_lower(item.label) for item in numbers if item.pinned]
    if pinned:
        said.append(f"The recording pins down: {_listed(pinned)}.")
    else:
        said.append("The recording pins down no single number of this loop.")
    for figure in figures:
        after = figure.posterior
        unit = f" {figure.unit}" if figure.unit else ""
        word = "is pinned down to" if figure.pinned else "stays between"
        join = "to" if figure.pinned else "and"
        said.append(f"{figure.label} {word} {after.low:.2f} {join} {after.high:.2f}{unit} (90 %).")
    shifted = [_lower(item.label) for item in numbers if not item.pinned and abs(item.shift) > SHIFTED_BEYOND]
    if shifted:
        said.append(f"It shifts without pinning down: {_listed(shifted)}.")
    left = [_lower(item.label) for item in numbers if not item.pinned and abs(item.shift) <= SHIFTED_BEYOND]
    if left:
        said.append(f"It leaves about as they were: {_listed(left)}.")
    if measured.ring_down is not None:
        said.append(measured.ring_down.strength)
    if measured.hypopnoea:
        said.append("Ventilation never stops in these cycles: the loop stands near its boundary, and that is all that they say of its gain.")
    if measured.lag_s is not None:
        share = "the same time again for the arm and the oximeter" if measured.lag_site == "finger" else "the ear a little behind the carotid body"
        said.append(f"The lag was read at the {measured.lag_site}: {share} is allowed for, and its spread.")
    if has_levers:
        said.append("The recording was taken to show the patient without the levers of this case.")
    if rough:
        said.append("Few draws agree with the recording, so the intervals are rough.")
    return tuple(said)


def warning_sentence(trade: float, explanations: int, difference: tuple[str, str, float, float] | None = None) -> str:
    """Where two explanations fit equally; '' where not.

    `trade` is the correlation of sensitivity and delay, 0 for none; `difference` the label, unit and values of the number in which two
    separate loops differ most.
    """
    if explanations > 1 and difference is not None:
        label, unit, one, other = difference
        return (
            f"{_count(explanations)} different loops explain this recording equally: one has {_lower(label)} of {one:.3g}, another of "
            f"{other:.3g}{' ' + unit if unit else ''}. Measure it before acting on either."
        )
    if trade < 0.0:
        return (
            "More sensitivity or more delay explain this recording equally: less of one makes up for more of the other. Measure one of "
            "the two before acting on the other."
        )
    if trade > 0.0:
        return (
            "Two explanations fit equally: a quick loop of little sensitivity, or a slow one of much. Sensitivity and delay go together "
            "here; measure one of the two before acting on the other."
        )
    return ""


def refusal_sentences(case: Case, measured: Measured) -> tuple[str, ...]:
    """Why no loop fits, and the way out."""
    if measured.ring_down is not None:
        what = f"a ring-down of {measured.ring_down.period_s.median:.3g} s"
    else:
        assert measured.cycle_length_s is not None
        what = f"a cycle of {measured.cycle_length_s.median:.3g} s"
        if measured.duty_ratio is not None:
            what += f" with a duty ratio of {measured.duty_ratio.median:.2f}"
    return (
        f"No loop near this case's numbers shows {what}, so the case stays as it was.",
        "Start from a closer case (a delay or a gain that suits the patient), or check that the cycles were measured in the right channel.",
    )


def _fits(numbers: Sequence[FittedNumber], misfits: Sequence[Misfit], far: str | None) -> str:
    from lagscape.questions.fit import POOR_MISFIT

    worst = max(misfits, key=lambda item: abs(item.standard_errors))
    if abs(worst.standard_errors) <= POOR_MISFIT:
        if far is None:
            return "A loop with plausible numbers shows what was measured."
        item = next(number for number in numbers if number.name == far)
        unit = f" {item.unit}" if item.unit else ""
        return (
            f"What was measured does not go with this case: it takes {_lower(item.label)} of {item.fitted:.3g}{unit}, and the case allows "
            f"{item.prior.low:.3g} to {item.prior.high:.3g}. Check the case and the channel before reading on."
        )
    side = "more" if worst.standard_errors > 0.0 else "less"
    unit = f" {worst.unit}" if worst.unit else ""
    return (
        f"No plausible loop shows all of what was measured: the closest has {side} {_lower(worst.label)} ({worst.fitted:.3g} against "
        f"{worst.measured:.3g}{unit}, {abs(worst.standard_errors):.1f} standard errors)."
    )


def _listed(items: Sequence[str]) -> str:
    """Semicolons, because a label may hold a comma."""
    return "; ".join(items)


def _lower(label: str) -> str:
    """A label inside a sentence; an abbreviation such as CO2 keeps its capitals."""
    return label[:1].lower() + label[1:] if label[1:2].islower() else label


def _count(number: int) -> str:
    return {2: "Two", 3: "Three", 4: "Four"}.get(number, str(number))
