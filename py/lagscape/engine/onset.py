"""How hunting starts: softly, or with a jump; and which cycles stand beside a stable rest.

Near the boundary the branch of cycles is kappa(a) = kappa_0 (1 + c a^2 + ...), kappa the scale on the drive's excursions and a the
amplitude. c > 0: cycles exist only beyond the boundary and grow from nothing (soft, supercritical). c < 0: they exist before it,
repel, and the loop jumps to a large cycle (subcritical); then a large sigh can start what small noise cannot. Both c and the branch
come from harmonic balance with the amplitude prescribed and kappa unknown, so folds are no obstacle.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from lagscape.engine.boundary import PointStatus, sensitivity_at_delay
from lagscape.engine.cycle import BranchPoint, Cycle, CycleSolver, follow_branch, interpolated_at
from lagscape.engine.harmonic import Balance, Harmonics, prepare, solve
from lagscape.engine.margins import Margins, margins
from lagscape.loops.protocol import DriveForm, Loop, Rest

__all__ = ["Coexistence", "Onset", "OnsetKind", "branch_curvature", "coexisting_cycles", "onset"]

_SMALL = 0.02
"""First amplitude at which the curvature is read: of the controlled signal, as a share of its rest."""


class OnsetKind(StrEnum):
    """How the cycle begins as the sensitivity passes the boundary."""

    SOFT = "soft"
    JUMP = "jump"
    NO_BOUNDARY = "no_boundary"
    """No sensitivity in the range searched makes this loop hunt, or none settles it."""
    UNDECIDED = "undecided"
    """The curvature is lost in rounding."""


@dataclass(frozen=True)
class Onset:
    """The start of hunting at the loop's own delay."""

    kind: OnsetKind
    sensitivity: float | None = None
    """On the boundary, in the loop's unit."""
    period_s: float | None = None
    curvature: float | None = None
    """c: the relative rise of kappa, were the law parabolic throughout, for an oscillation of the controlled signal with the amplitude of
    its rest (of 1 in its unit where the rest is 0)."""


@dataclass(frozen=True)
class Coexistence:
    """The cycles of one loop that the branch from the boundary holds, by rising size."""

    rest_is_stable: bool
    repelling: tuple[Cycle, ...]
    """A disturbance larger than this starts the hunting; smaller ones die."""
    attracting: tuple[Cycle, ...]

    @property
    def both(self) -> bool:
        """True where the rest is stable and yet an attracting cycle stands beside it."""
        return self.rest_is_stable and bool(self.attracting)


def onset(loop: Loop) -> Onset:
    """Whether hunting starts softly or with a jump as the sensitivity rises at this delay."""
    point = sensitivity_at_delay(loop)
    if point.status is not PointStatus.FOUND or point.sensitivity is None:
        return Onset(OnsetKind.NO_BOUNDARY)
    there = loop.with_sensitivity(point.sensitivity)
    form, rest = there.form(), there.rest()
    curvature = branch_curvature(form, rest, margins(form, rest))
    if curvature is None or abs(curvature) < 1e-7:
        return Onset(OnsetKind.UNDECIDED, point.sensitivity, point.period_s, curvature)
    kind = OnsetKind.SOFT if curvature > 0.0 else OnsetKind.JUMP
    return Onset(kind, point.sensitivity, point.period_s, curvature)


def branch_curvature(form: DriveForm, rest: Rest, known: Margins) -> float | None:
    """c of kappa = kappa_0 (1 + c a^2), a the amplitude of the controlled signal over its rest; None where the balance fails."""
    if not known.loop_gain or known.phase_crossover_frequency is None:
        return None
    balance = prepare(form, rest).with_gain(np.array([1.0 / known.loop_gain]))
    scale = linear_scale(balance, known.phase_crossover_frequency)
    values = []
    for share in (_SMALL, 2.0 * _SMALL):
        force = np.zeros((1, len(balance.rows), 5), dtype=complex)
        force[0, 0, 1] = share * scale
        guess = Harmonics(force, np.array([known.phase_crossover_frequency]))
        solved = solve(balance, guess, free_gain=True, most=20, tolerance=1e-13)
        if not np.isfinite(solved.gain[0]) or solved.residual[0] > 1e-9:
            return None
        values.append((solved.gain[0] * known.loop_gain - 1.0) / share**2)
    # The next term of the series is quartic: Richardson.
    return float((4.0 * values[0] - values[1]) / 3.0)


def linear_scale(balance: Balance, omega: float) -> float:
    """|w_1| at which the linear oscillation of the controlled signal has the amplitude of its rest (or 1 where the rest is 0)."""
    transfer, _, _, _ = balance.transfers(np.full(balance.size, omega), 1)
    _, gradient = balance.in_time(np.zeros((balance.size, transfer.shape[1], 2), dtype=complex), 1)
    answer = abs(complex(balance.gain[0] * (gradient[0, :, 0] @ transfer[0, :, 0, 1])))
    return 0.5 * (abs(float(balance.output_rest[0])) or 1.0) / answer


def coexisting_cycles(
    form: DriveForm, rest: Rest, known: Margins | None = None, order: int = 16, most: int = 60
) -> Coexistence:
    """The cycles on the branch from the boundary at this very loop (kappa = 1), attracting and repelling.

    Along the branch by growing amplitude a cycle at which kappa falls repels and one at which it rises attracts: the sign of the slope is
    the sign of the missing multiplier just as on an amplitude-gain curve. `floquet` decides where that matters.
    """
    known = margins(form, rest) if known is None else known
    solver = CycleSolver(form, rest)
    repelling: list[Cycle] = []
    attracting: list[Cycle] = []
    previous: BranchPoint | None = None
    for previous, point in follow_branch(solver.general, known, order=8, most=most, growth=1.3, first=_SMALL):
        if (previous.gain - 1.0) * (point.gain - 1.0) < 0.0:
            found = solver.settle(interpolated_at(previous, point, 1.0).resized(order), most=20)
            if found is not None:
                (attracting if point.gain > previous.gain else repelling).append(solver.describe(*found))
        if point.gain > 4.0 and point.gain > 2.0 / (known.loop_gain or 1.0):
            break
    return Coexistence(known.stable, tuple(repelling), tuple(attracting))
