"""The posterior of a fit: the most plausible points by Gauss-Newton steps, then weighted draws about them.

With u standard normal beforehand and r(u) the misfits in standard errors, the posterior is exp(-(|u|^2 + |r|^2) / 2). Damped Gauss-Newton
steps lead from several starts, all at once, to its modes. About each mode the draws come from the normal law of the linearised posterior,
a little widened along what the recording speaks of, and are weighted by posterior over proposal (importance sampling), so that the
figures do not rest on the linearisation. Same seed, same answer.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from lagscape.engine.harmonic import Harmonics
from lagscape.loops.protocol import Array
from lagscape.questions.many import Index, Mask
from lagscape.recordings.stepwise import Steps, finished

__all__ = ["Evaluated", "Mode", "Sample", "climb", "climb_steps", "distinct", "draw"]

_STEP = 0.04
"""Of the differences, in prior standard deviations: far above the solver's tolerance, far below a bend."""
_LONGEST = 1.5
_FLAT = 5e-3
"""A step that betters the objective by less has arrived: a point this far off weighs the same within a quarter of a percent."""
_SAME_WAY = 0.6
"""A start that comes this near to a better one, in prior standard deviations, goes where that one goes."""
_WIDER = 1.5
"""Factor on the proposal's variance along informed directions, for tails heavier than normal."""
_INFORMED = 0.1
"""A direction counts as informed where its curvature by the recording is over this share of the prior's."""
_ROUNDS = 2
_WIDER_AGAIN = 1.2
_APART = 2.0
"""Modes nearer than this, in posterior standard deviations, are one."""
_WORSE = 8.0
"""A mode whose twice negative log posterior is higher by more than this weighs under 2 % and is left out."""


@dataclass(frozen=True)
class Evaluated:
    """Misfits at n points."""

    residuals: Array
    """Shape (n, m), in standard errors."""
    possible: Mask
    cycles: Harmonics
    loop_gain: Array


Evaluate = Callable[[Array, Harmonics | None], Evaluated]
"""From points (n, d) and cycles to start from (one a point, or None) to their misfits."""


@dataclass(frozen=True)
class Mode:
    """One most plausible point."""

    point: Array
    """u, shape (d,)."""
    objective: float
    """|u|^2 + |r|^2."""
    residuals: Array
    precision: Array
    """I + J^T J, shape (d, d)."""
    cycle: Harmonics


@dataclass(frozen=True)
class Sample:
    """Weighted draws from the posterior."""

    points: Array
    """(n, d)."""
    weights: Array
    """(n,), summing to 1; 0 where a loop is impossible."""
    loop_gain: Array
    mode: Index
    """Which mode each draw belongs to."""
    effective: float
    """1 / sum of the squared weights: so many independent draws say as much."""


def climb(evaluate: Evaluate, starts: Array, most: int = 12, free: Mask | None = None) -> list[Mode]:
    """The modes that the starts, shape (k, d), lead to; `free` names the coordinates that may move (all by default)."""
    return finished(climb_steps(evaluate, starts, most, free))


def climb_steps(evaluate: Evaluate, starts: Array, most: int = 12, free: Mask | None = None) -> Steps[list[Mode]]:
    """`climb` in steps; counts rounds, of which it takes `most` or fewer."""
    k, d = starts.shape
    moves = np.flatnonzero(np.ones(d, dtype=bool) if free is None else free)
    point, objective = starts.astype(float).copy(), np.full(k, np.inf)
    residual: Array | None = None
    jacobian = np.zeros((k, 0, d))
    damping, settled = np.full(k, 1e-3), np.zeros(k, dtype=bool)
    cycles: list[Harmonics | None] = [None] * k
    trial, warm = point.copy(), cycles.copy()
    for round_ in range(most):
        if round_:
            yield round_, most
        active = np.flatnonzero(~settled)
        if not active.size:
            break
        base = _with_slopes(evaluate, trial[active], [warm[i] for i in active], moves)
        size = np.sum(trial[active] ** 2, axis=1) + np.sum(base.residuals**2, axis=1)
        size = np.where(base.possible, size, np.inf)
        if residual is None:
            residual, jacobian = np.zeros((k, base.residuals.shape[1])), np.zeros((k, base.residuals.shape[1], d))
        better = size < objective[active]
        settled[active[better & (size > objective[active] - _FLAT)]] = True
        damping[active] = np.where(better, damping[active] / 5.0, damping[active] * 8.0 + 0.05)
        settled[active[damping[active] > 1e3]] = True
        took = active[better]
        point[took], objective[took] = trial[took], size[better]
        residual[took], jacobian[took] = base.residuals[better], base.slopes[better]
        for row, i in zip(np.flatnonzero(better), took, strict=True):
            cycles[i] = base.cycles.member(slice(row, row + 1))
        for i in active:
            if not np.isfinite(objective[i]):
                # Nowhere to stand yet: half way back to the middle of the prior.
                trial[i] *= 0.5
                continue
            step = _step(point[i], residual[i], jacobian[i], damping[i], moves)
            trial[i], warm[i] = point[i] + step, cycles[i]
            follows = (objective < objective[i]) & (np.linalg.norm(point - point[i], axis=1) < _SAME_WAY)
            if np.linalg.norm(step) < 5e-3 or follows.any():
                settled[i] = True
    assert residual is not None
    return [
        Mode(point[i], float(objective[i]), residual[i], np.eye(d) + jacobian[i].T @ jacobian[i], cycles[i])  # type: ignore[arg-type]
        for i in range(k)
        if cycles[i] is not None
    ]


def _step(point: Array, residual: Array, jacobian: Array, damping: float, moves: Index) -> Array:
    slopes = jacobian[:, moves]
    curvature = np.eye(moves.size) + slopes.T @ slopes
    curvature[np.diag_indices(moves.size)] *= 1.0 + damping
    step = np.zeros(point.size)
    step[moves] = -np.linalg.solve(curvature, point[moves] + slopes.T @ residual)
    length = float(np.linalg.norm(step))
    return step * min(1.0, _LONGEST / length) if length > 0.0 else step


@dataclass(frozen=True)
class _Local:
    """Misfits at k points and their derivatives there."""

    residuals: Array
    slopes: Array
    """d residual / du by forward differences, shape (k, m, d); zero where a neighbour is impossible."""
    possible: Mask
    cycles: Harmonics


def _with_slopes(evaluate: Evaluate, points: Array, cycles: list[Harmonics | None], moves: Index) -> _Local:
    """Points and their neighbours in one call: a call costs far more than a few points more in it."""
    k, d = points.shape
    near = np.repeat(points, moves.size, axis=0)
    near[np.arange(k * moves.size), np.tile(moves, k)] += _STEP
    found = evaluate(np.concatenate([points, near]), _joined([*cycles, *(item for item in cycles for _ in range(moves.size))]))
    here, around = found.residuals[:k], found.residuals[k:].reshape(k, moves.size, -1)
    slope = (around - here[:, None]) / _STEP
    slope[~found.possible[k:].reshape(k, moves.size)] = 0.0
    slopes = np.zeros((k, here.shape[1], d))
    slopes[:, :, moves] = np.swapaxes(slope, 1, 2)
    return _Local(here, slopes, found.possible[:k], found.cycles.member(slice(0, k)))


def _joined(cycles: Sequence[Harmonics | None]) -> Harmonics | None:
    """One cycle a point; points without one have frequency 0, and all of them none where no point has one."""
    known = next((item for item in cycles if item is not None and item.omega[0] > 0.0), None)
    if known is None:
        return None
    blank = Harmonics(np.zeros_like(known.force), np.zeros(1))
    parts = [blank if item is None or not item.omega[0] > 0.0 else item for item in cycles]
    return Harmonics(np.concatenate([item.force for item in parts]), np.concatenate([item.omega for item in parts]))


def distinct(modes: list[Mode]) -> list[Mode]:
    """The modes that count, best first: far apart and not much worse than the best."""
    kept: list[Mode] = []
    for mode in sorted(modes, key=lambda item: item.objective):
        if kept and mode.objective > kept[0].objective + _WORSE:
            break
        if all((mode.point - other.point) @ other.precision @ (mode.point - other.point) > _APART**2 * 2.0 for other in kept):
            kept.append(mode)
    return kept


def draw(evaluate: Evaluate, modes: list[Mode], draws: int, seed: int, enough: float = 150.0) -> Sample:
    """Weighted draws about the modes; again from their own mean and covariance while they are worth fewer than `enough`."""
    rng = np.random.default_rng(seed)
    first = laws = [_law(mode) for mode in modes]
    lowest = min(mode.objective for mode in modes)
    mass = np.array([np.exp(-0.5 * (mode.objective - lowest)) * np.exp(_log_size(law[1])) for mode, law in zip(modes, laws, strict=True)])
    mass = np.maximum(mass / mass.sum(), 0.15 / len(modes))
    mass /= mass.sum()
    counts = np.maximum(np.round(mass * draws).astype(int), 2)
    points, which, target, gain = _round(evaluate, modes, laws, counts, rng)
    log_proposal = _log_mixture(points, laws, counts / counts.sum())
    weights = _weights(target - log_proposal)
    sizes = [int(counts.sum())]
    for _ in range(_ROUNDS):
        worth = 1.0 / float(np.sum(weights**2))
        if worth >= enough or np.count_nonzero(weights) < 2:
            break
        mean = weights @ points
        away = points - mean
        # The draws' own covariance is rough where few of them count; the linearised one keeps it in shape.
        trust = worth / (worth + 2.0 * mean.size)
        scatter = trust * (away.T @ (weights[:, None] * away)) + (1.0 - trust) * first[0][1] @ first[0][1].T
        law = (mean, np.linalg.cholesky(_WIDER_AGAIN * scatter))
        again = _round(evaluate, modes[:1], [law], np.array([draws]), rng)
        laws, sizes = [*laws, law], [*sizes, draws]
        points, which = np.concatenate([points, again[0]]), np.concatenate([which, _nearest(again[0], modes)])
        target, gain = np.concatenate([target, again[2]]), np.concatenate([gain, again[3]])
        shares = np.concatenate([sizes[0] * counts / counts.sum(), sizes[1:]]) / sum(sizes)
        weights = _weights(target - _log_mixture(points, laws, shares))
    return Sample(points, weights, gain, which, float(1.0 / np.sum(weights**2)))


def _law(mode: Mode) -> tuple[Array, Array]:
    """Mean and a square root of the covariance of a mode's proposal."""
    curvature, directions = np.linalg.eigh(mode.precision)
    variance = np.where(curvature > 1.0 + _INFORMED, np.minimum(_WIDER / curvature, 1.2), 1.0 / curvature)
    return mode.point, directions * np.sqrt(variance)


def _round(
    evaluate: Evaluate, modes: list[Mode], laws: list[tuple[Array, Array]], counts: Array, rng: np.random.Generator
) -> tuple[Array, Index, Array, Array]:
    """Draws from each law, half of them mirror images of the others, with the logarithm of the posterior there."""
    parts, starts = [], []
    for mode, (mean, root), count in zip(modes, laws, counts, strict=True):
        half = rng.standard_normal(((int(count) + 1) // 2, mean.size))
        parts.append(mean + np.concatenate([half, -half])[: int(count)] @ root.T)
        starts += [mode.cycle] * int(count)
    points = np.concatenate(parts)
    found = evaluate(points, _joined(starts))
    target = -0.5 * (np.sum(points**2, axis=1) + np.sum(found.residuals**2, axis=1))
    return points, _nearest(points, modes), np.where(found.possible, target, -np.inf), found.loop_gain


def _nearest(points: Array, modes: list[Mode]) -> Index:
    """Which mode each point belongs to: the nearest, by that mode's own law."""
    distance = [np.einsum("ni,ij,nj->n", points - mode.point, mode.precision, points - mode.point) + mode.objective for mode in modes]
    return np.argmin(np.array(distance), axis=0)


def _log_size(root: Array) -> float:
    return float(np.linalg.slogdet(root)[1])


def _log_mixture(points: Array, laws: list[tuple[Array, Array]], shares: Array) -> Array:
    logs = []
    for (mean, root), share in zip(laws, shares, strict=True):
        standard = np.linalg.solve(root, (points - mean).T)
        logs.append(np.log(share) - 0.5 * np.sum(standard**2, axis=0) - _log_size(root))
    return np.logaddexp.reduce(np.array(logs), axis=0)


def _weights(logs: Array) -> Array:
    if not np.isfinite(logs).any():
        return np.full(logs.size, 1.0 / logs.size)
    weights = np.exp(logs - np.max(logs))
    return np.asarray(weights / weights.sum())
