"""How hunting begins: softly or with a jump, and whether a large disturbance can start what a small one cannot."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lagscape.engine.onset import OnsetKind, coexisting_cycles, onset
from lagscape.quantities import figure
from lagscape.questions.standing import Judgement, Standing

__all__ = ["Beginning", "beginning_of"]

_NEAR_GAIN = 0.5
"""Below this loop gain no cycle was ever found beside a stable rest in these loops, and the search is not worth its time."""


@dataclass(frozen=True)
class Beginning:
    """How the cycle begins as the sensitivity passes the boundary, and what stands beside a stable rest."""

    kind: OnsetKind
    beside_rest: bool
    """True where the rest is stable and yet a cycle attracts: a large disturbance can start it."""
    threshold: float | None
    """Peak to trough of the controlled signal, in its unit, that a disturbance must pass; None where nothing stands beside."""
    sentence: str


def beginning_of(judged: Judgement) -> Beginning:
    """How hunting begins in a judged loop."""
    kind = onset(judged.loop).kind
    gain = judged.margins.loop_gain
    beside, threshold = False, None
    if judged.standing is not Standing.HUNTS and gain is not None and gain > _NEAR_GAIN:
        found = coexisting_cycles(judged.form, judged.rest, judged.margins)
        beside = found.both
        if beside and found.repelling and found.repelling[0].output_amplitude is not None:
            threshold = float(found.repelling[0].output_amplitude)
    return Beginning(kind, beside, threshold, _sentence(kind, beside, threshold, judged))


def _sentence(kind: OnsetKind, beside: bool, threshold: float | None, judged: Judgement) -> str:
    if beside:
        unit = judged.loop.signals(judged.rest.state[None], np.atleast_1d(judged.rest.output))[0].unit
        swing = "" if threshold is None else f" (a swing of more than {figure(threshold, 2)} {unit}".rstrip() + " from peak to trough)"
        return f"Small disturbances die, but a large one{swing} can start a hunting that lasts."
    if kind is OnsetKind.SOFT:
        return "Hunting begins softly here: just past the boundary the swings are small."
    if kind is OnsetKind.JUMP:
        return "Hunting begins with a jump here: past the boundary the swings are large at once, and turning back may stop them only later."
    return ""
