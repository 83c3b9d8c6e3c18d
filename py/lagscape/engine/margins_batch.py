"""Margins, stability and the dominant oscillation of thousands of loops at once.

Each member is sampled on its own frequencies, scaled by its delays and its gain; all its crossings of the negative real axis and of
the unit circle are bracketed, counted for Nyquist's criterion and closed together by Newton steps. From the deciding phase crossover
Newton steps on log(-L) = 0 lead to the dominant oscillatory root. A member whose steps do not settle, or whose growth disagrees in
sign with Nyquist's count, is done again one by one with all the care of `roots`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.margins import ON_BOUNDARY
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["GainCrossings", "MarginsBatch", "Multiples", "gain_crossings", "margins_batch", "margins_of"]

_CHUNK = 2048
"""Members worked on at once, so that the work arrays stay in the cache."""
_LEAST_FREQUENCIES, _MOST_FREQUENCIES = 20, 400
_STEPS_PER_HALF_TURN = 3.0
_FINEST = 60.0
"""Grids are made four times denser up to this factor."""
_ABOUT_RESONANCE = np.array([-3.0, -1.2, -0.6, -0.25, 0.0, 0.25, 0.6, 1.2, 3.0])[:, None]
_KINDS = (bool, int, float, bool, float, bool, float, float, bool, float, float)
"""Of the columns of `MarginsBatch`, in order."""
_TURN = 2.0 * math.pi


@dataclass(frozen=True)
class MarginsBatch:
    """One entry a member, arrays of the batch's shape. Where a `has_` array is False the numbers beside it are 0 and mean nothing."""

    stable: np.ndarray
    """bool; by Nyquist's criterion."""
    unstable_roots: np.ndarray
    """Roots with positive real part, a pair counted twice."""
    loop_gain: Array
    """|L| at the deciding phase crossover; 0 where there is none."""
    has_phase_crossover: np.ndarray
    phase_crossover_frequency: Array
    """rad/s."""
    has_gain_crossover: np.ndarray
    phase_margin_rad: Array
    """The smallest lag missing to the boundary of a stable member; of an unstable one the negative lead at its last gain crossover."""
    delay_margin_s: Array
    """The same as a delay."""
    has_oscillation: np.ndarray
    growth_rate_per_s: Array
    """Of the dominant oscillation; negative while it dies."""
    cycle_length_s: Array
    """Period of the dominant oscillation."""
    careful: int
    """How many members had to be done one by one."""


@dataclass(frozen=True)
class Multiples:
    """Which members have the same open loop up to a positive factor: then one of a family is sampled for all. Arrays of one shape (n,)."""

    family: np.ndarray
    """int; members of one family have equal delays, equal D, and numerators in the ratio of their factors."""
    factor: Array

    def member(self, which: Any) -> Multiples:
        return Multiples(self.family[which], self.factor[which])

    def shared(self, value: Array) -> tuple[np.ndarray, np.ndarray, Array]:
        """Members of one family with an equal `value`, (n,), form a group: its first member, each member's group and factor on that first."""
        _, first, group = np.unique(self.family + 1j * value, return_index=True, return_inverse=True)
        return first, group, self.factor / self.factor[first][group]


def margins_batch(
    form: DriveForm, rest: Rest, opened: OpenLoop | None = None, growth: bool = True, multiples: Multiples | None = None
) -> MarginsBatch:
    """Margins and dominant oscillation of every member of a batch.

    Parameters
    ----------
    form : DriveForm
        A batch, with any number of trailing axes.
    rest : Rest
    opened : OpenLoop, optional
        The open loop of the same form and rest, if the caller has it already.
    growth : bool
        False leaves the dominant root out: margins and stability alone, in half the time.
    multiples : Multiples, optional
        Of the members in one flat axis, if the caller knows that they come in families: the same result in less time.

    Notes
    -----
    The dominant oscillation is the root that belongs to the deciding phase crossover, as in `roots`. Where several pairs are unstable
    it is in rare cases not the rightmost; its sign is always right, because it is checked against Nyquist's count.
    """
    return margins_of(open_loop(form, rest) if opened is None else opened, growth, multiples)


def margins_of(opened: OpenLoop, growth: bool = True, multiples: Multiples | None = None) -> MarginsBatch:
    """The same as `margins_batch` from the open loops themselves."""
    shape = opened.batch
    members = math.prod(shape)
    flat = OpenLoop(
        opened.coefficients.reshape((*opened.coefficients.shape[:2], members)),
        tuple(np.broadcast_to(np.asarray(delay, dtype=float), shape).reshape(members) for delay in opened.delays),
        tuple((np.broadcast_to(p, shape).reshape(members), np.broadcast_to(q, shape).reshape(members)) for p, q in opened.quadratics),
    )
    columns = [np.zeros(members, dtype=kind) for kind in _KINDS]
    careful = 0
    end = _search_end(flat, multiples)
    # Members that need as many frequencies as each other go together, so that one odd member does not slow them all.
    order = np.argsort(end * flat.longest_delay, kind="stable") if members else np.empty(0, dtype=int)
    for start in range(0, members, _CHUNK):
        which = order[start : start + _CHUNK]
        part, redone = _chunk(flat.member(which), end[which], growth, multiples.member(which) if multiples else None)
        for column, values in zip(columns, part, strict=True):
            column[which] = values
        careful += redone
    shaped: list[Any] = [column.reshape(shape) for column in columns]
    return MarginsBatch(*shaped, careful=careful)  # type: ignore[misc]


def _chunk(opened: OpenLoop, end: Array, growth: bool, multiples: Multiples | None, density: float = 1.0) -> tuple[list[np.ndarray], int]:
    """The columns of some members, and how many were done one by one; members whose grid proves too coarse are done again finer."""
    members = opened.coefficients.shape[2]
    feedback = opened.has_feedback
    frequency, response = _sampled(opened, end, density, multiples)

    who, bracket, direction = _phase_brackets(frequency, response)
    w, gain = _close_phase(opened, multiples, who, *bracket)
    unstable = _count_unstable(opened, who, gain, direction, response[0])
    stable = unstable <= 0

    # The deciding crossover: of an unstable member the largest gain, of a stable one the largest under 1.
    rank = np.where(stable[who] & (gain > 1.0), -1.0, gain)
    order = np.lexsort((rank, who))
    last = np.flatnonzero(np.diff(who[order], append=members) != 0) if who.size else np.empty(0, dtype=int)
    chosen = order[last] if who.size else np.empty(0, dtype=int)
    chosen = chosen[rank[chosen] >= 0.0]
    has_phase = np.zeros(members, dtype=bool)
    loop_gain, crossover = np.zeros(members), np.zeros(members)
    has_phase[who[chosen]] = True
    loop_gain[who[chosen]], crossover[who[chosen]] = gain[chosen], w[chosen]
    has_phase &= feedback

    has_gain, phase_margin, delay_margin = _lags(opened, frequency, response, stable)
    columns = [stable, unstable, loop_gain, has_phase, crossover, has_gain & feedback, phase_margin, delay_margin]
    redone = 0
    if growth:
        has_root, root, redone = _dominant(opened, has_phase, crossover, stable)
        period = np.divide(_TURN, root.imag, out=np.zeros(members), where=has_root)
        columns += [has_root, np.where(has_root, root.real, 0.0), period]
    else:
        columns += [np.zeros(members, dtype=bool), np.zeros(members), np.zeros(members)]
    coarse = _coarse(response, density) if density < _FINEST else np.empty(0, dtype=int)
    if coarse.size:
        same = multiples.member(coarse) if multiples else None
        finer, more = _chunk(opened.member(coarse), end[coarse], growth, same, 4.0 * density)
        for column, values in zip(columns, finer, strict=True):
            column[coarse] = values
        redone += more
    return columns, redone


def _search_end(opened: OpenLoop, multiples: Multiples | None = None) -> Array:
    """Per member, rad/s: past the second phase crossover that the shortest delay makes, and past the last unit gain."""
    end = 2.6 * math.pi / opened.shortest_delay
    beyond = np.geomspace(1.0, 1e4, 16)[:, None]
    far = np.flatnonzero(_envelope(opened, end[None], multiples)[0] >= 1.0)
    if far.size:
        above = _envelope(opened.member(far), beyond * end[far], multiples.member(far) if multiples else None) >= 1.0
        last = np.where(above.any(axis=0), 16 - np.argmax(above[::-1], axis=0), 0)
        end = end.copy()
        end[far] *= beyond[np.minimum(last, 15), 0]
    return end


def _envelope(opened: OpenLoop, frequency: Array, multiples: Multiples | None) -> Array:
    if multiples is None:
        return opened.envelope(frequency)
    first, group, factor = multiples.shared(frequency[0])
    return opened.member(first).envelope(frequency[:, first])[:, group] * factor


def _sampled(opened: OpenLoop, end: Array, density: float, multiples: Multiples | None) -> tuple[Array, np.ndarray]:
    """Frequencies and L there, both (n_frequencies, n_members)."""
    if multiples is None:
        frequency = _frequencies(opened, end, density)
        return frequency, opened.response(frequency)
    first, group, factor = multiples.shared(end)
    few = opened.member(first)
    frequency = _frequencies(few, end[first], density)
    return frequency[:, group], few.response(frequency)[:, group] * factor


def _frequencies(opened: OpenLoop, end: Array, density: float) -> Array:
    """Even steps to the end of the search, a few far below for slow stores, some about a resonance; (n_frequencies, n_members)."""
    wanted = float(np.max(end * opened.longest_delay)) * _STEPS_PER_HALF_TURN / math.pi
    count = int(min(max(wanted, _LEAST_FREQUENCIES) * density, _MOST_FREQUENCIES * density))
    even = np.arange(1, count + 1) / count
    share = np.concatenate([even[0] * np.geomspace(1e-4, 0.6, int(10 * density**0.5)), even])
    frequency = share[:, None] * end
    near = [centre + width * _ABOUT_RESONANCE for centre, width in opened.resonances() if np.any(centre > 0.0)]
    if near:
        frequency = np.concatenate([frequency, *(np.where(points > 0.0, points, frequency[:1]) for points in near)])
        frequency.sort(axis=0)
    return frequency


def _coarse(response: np.ndarray, density: float) -> np.ndarray:
    """Members whose phase turns so far between neighbouring frequencies, or whose gain turns so near 1, that a crossing could be missed."""
    real, imaginary = np.ascontiguousarray(response.real), np.ascontiguousarray(response.imag)
    along = real[1:] * real[:-1] + imaginary[1:] * imaginary[:-1]
    # Few turn by more than a right angle: only they are looked at closely.
    row, who = _places(along < 0.0)
    across = imaginary[row + 1, who] * real[row, who] - real[row + 1, who] * imaginary[row, who]
    doubtful = np.zeros(response.shape[1], dtype=bool)
    doubtful[who[np.abs(across) < -2.0 * along[row, who]]] = True
    size = real * real + imaginary * imaginary
    rises = size[1:] >= size[:-1]
    row, who = _places(rises[1:] != rises[:-1])
    middle = size[row + 1, who]
    near = np.where(rises[row, who], middle < 1.0, middle > 1.0)  # peaks under 1 and dips over it
    row, who = row[near], who[near]
    before, top, after = np.log(size[row[None] + np.arange(3)[:, None], who] + 1e-300)
    # How far a parabola through three samples passes beyond the middle one; steps are not even, hence twice that.
    bend = before + after - 2.0 * top
    beyond = 2.0 * np.abs((after - before) ** 2 / (8.0 * np.where(bend != 0.0, bend, 1.0))) + 0.03 / density
    doubtful[who[np.abs(top) < beyond]] = True
    return np.flatnonzero(doubtful)


def _places(mask: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Row and column of every True; numpy's own search of two axes takes several times as long."""
    row, column = np.divmod(np.flatnonzero(mask), mask.shape[1])
    return row, column


def _phase_brackets(frequency: Array, response: np.ndarray) -> tuple[Array, tuple[Array, ...], Array]:
    """Member, (guess, low, high, guessed gain, whether it may decide) and direction of every crossing of the negative real axis."""
    upper = response.imag > 0.0
    row, who = _places(upper[1:] != upper[:-1])
    left, right = response[row, who], response[row + 1, who]
    share = left.imag / (left.imag - right.imag)
    negative = left.real + share * (right.real - left.real) < 0.0
    row, who, share, left, right = row[negative], who[negative], share[negative], left[negative], right[negative]
    low, high = frequency[row, who], frequency[row + 1, who]
    ends = np.abs(left), np.abs(right)
    least, most = 0.8 * np.minimum(*ends), 1.25 * np.maximum(*ends)
    # A crossing clearly under another on the same side of 1 cannot decide, and which side it is on is clear as well.
    side = np.where(most < 1.0, 0, np.where(least > 1.0, 1, 2))
    best = np.zeros((3, frequency.shape[1]))
    np.maximum.at(best, (side, who), least)
    decides = (side == 2) | (most >= best[side, who])
    return who, (low + share * (high - low), low, high, np.sqrt(ends[0] * ends[1]), decides), np.where(left.imag > 0.0, -1, 1)


def _close_phase(
    opened: OpenLoop, multiples: Multiples | None, who: Array, guess: Array, low: Array, high: Array, gain: Array, decides: Array
) -> tuple[Array, Array]:
    if not who.size:
        return guess, gain
    members, guess, gain = who[decides], guess.copy(), gain.copy()
    # A factor does not move a phase crossover.
    chosen, group, factor = multiples.member(members).shared(low[decides]) if multiples else (slice(None), slice(None), 1.0)
    few, w = opened.member(members[chosen]), guess[decides][chosen]
    low, high = low[decides][chosen], high[decides][chosen]
    for _ in range(8):
        value, slope = few.with_slope_on_axis(w)
        step = -np.angle(-value) / (slope / value).real
        w, done = _inside(w, step, low, high)
        if done:
            break
    guess[decides] = w[group]
    gain[decides] = np.abs(few.response(w[None])[0])[group] * factor
    return guess, gain


def _inside(w: Array, step: Array, low: Array, high: Array) -> tuple[Array, bool]:
    """One Newton step kept in its bracket, and whether every step was so small that its square is rounding."""
    new = w + step
    leaves = (new < low) | (new > high)
    if leaves.any():
        new = np.where(leaves, 0.5 * (w + np.where(step > 0.0, high, low)), new)
        return new, False
    return new, bool(np.all(np.abs(step) <= 2e-8 * w))


def _count_unstable(opened: OpenLoop, who: Array, gain: Array, direction: Array, first: np.ndarray) -> Array:
    members = opened.coefficients.shape[2]
    unstable = 2 * np.bincount(who, weights=np.where(gain > 1.0, direction, 0), minlength=members).astype(int)
    at_zero = opened.coefficients[-1]
    total = np.sum(at_zero[1:], axis=0)
    positive = (at_zero[0] != 0.0) & (total * np.sign(at_zero[0]) < -np.abs(at_zero[0]))
    unstable += np.where(positive, np.where(first.imag > 0.0, 1, -1), 0)
    return unstable + _open_loop_unstable(opened)


def _open_loop_unstable(opened: OpenLoop) -> Array:
    """Poles of L with positive real part, by Routh's table where any coefficient of D is not positive."""
    denominator = opened.coefficients[:, 0]
    count = np.zeros(denominator.shape[1], dtype=int)
    suspect = np.flatnonzero(~_routh_stable(denominator))
    for index in suspect.tolist():
        poles = np.roots(denominator[:, index])
        count[index] = int(np.sum(poles.real > 1e-13 * np.max(np.abs(poles), initial=0.0)))
    return count


def _routh_stable(denominator: Array) -> Array:
    degree = denominator.shape[0] - 1
    positive = np.all(denominator > 0.0, axis=0)
    if degree <= 2:
        return positive
    upper, lower = denominator[0::2], denominator[1::2]
    with np.errstate(divide="ignore", invalid="ignore"):
        for _ in range(degree - 1):
            padded = np.concatenate([lower[1:], np.zeros((max(0, len(upper) - len(lower)), *lower.shape[1:]))])
            following = upper[1:] - upper[0] / lower[0] * padded[: len(upper) - 1]
            upper, lower = lower, following
            positive &= lower[0] > 0.0
    return positive


@dataclass(frozen=True)
class GainCrossings:
    """Every place where |L(i w)| = 1, over all members of a one-axis batch."""

    member: np.ndarray
    frequency: Array
    """rad/s."""
    lag_left: Array
    """rad in (-pi, pi]: pi + arg L."""
    falling: np.ndarray
    """bool: |L| falls with frequency, so that more delay moves a root pair to the right."""


def gain_crossings(opened: OpenLoop) -> GainCrossings:
    """All gain crossovers of the members of a one-axis batch."""
    frequency = _frequencies(opened, _search_end(opened), 1.0)
    return _close_gain(opened, frequency, opened.response(frequency))


def _close_gain(opened: OpenLoop, frequency: Array, response: np.ndarray) -> GainCrossings:
    size = response.real**2 + response.imag**2
    frequency = np.broadcast_to(frequency, size.shape)
    above = size > 1.0
    row, who = _places(above[1:] != above[:-1])
    falls = above[row, who]
    if not who.size:
        return GainCrossings(who, np.zeros(0), np.zeros(0), falls)
    few = opened.member(who)
    low, high = frequency[row, who], frequency[row + 1, who]
    level = np.log(size[row, who])
    share = level / (level - np.log(size[row + 1, who]))
    w = low * (high / low) ** share
    for _ in range(8):
        value, slope = few.with_slope_on_axis(w)
        w, done = _inside(w, np.log(np.abs(value)) / (slope / value).imag, low, high)
        if done:
            break
    return GainCrossings(who, w, np.angle(-few.response(w[None])[0]), falls)


def _round_turn(lag: Array) -> Array:
    return np.where((lag > -ON_BOUNDARY) & (lag <= 0.0), 0.0, np.mod(lag, _TURN))


def _lags(opened: OpenLoop, frequency: Array, response: np.ndarray, stable: np.ndarray) -> tuple[np.ndarray, Array, Array]:
    members = opened.coefficients.shape[2]
    found = _close_gain(opened, frequency, response)
    who, w, lag = found.member, found.frequency, found.lag_left
    has = np.zeros(members, dtype=bool)
    phase_margin, delay_margin = np.zeros(members), np.zeros(members)
    if not who.size:
        return has, phase_margin, delay_margin
    has[who] = True
    ahead = _round_turn(lag)
    calm = stable[who]
    # Of an unstable member only crossings with falling gain can give the roots back.
    back = np.where(found.falling, _round_turn(-lag), 0.0)
    for target, missing in ((phase_margin, 1.0), (delay_margin, w)):
        smallest = np.full(members, np.inf)
        np.minimum.at(smallest, who[calm], (ahead / missing)[calm])
        largest = np.zeros(members)
        np.maximum.at(largest, who[~calm], (back / missing)[~calm])
        target[:] = np.where(stable, np.where(np.isfinite(smallest), smallest, 0.0), -largest)
    return has, phase_margin, delay_margin


def _dominant(opened: OpenLoop, has_phase: np.ndarray, crossover: Array, stable: np.ndarray) -> tuple[np.ndarray, np.ndarray, int]:
    members = crossover.size
    root = np.zeros(members, dtype=complex)
    which = np.flatnonzero(has_phase)
    settled = np.zeros(members, dtype=bool)
    active, s = which, 1j * crossover[which]
    few = opened.member(active)
    for _ in range(12):
        with np.errstate(all="ignore"):
            value, slope = few.with_slope(s)
            logarithm = np.log(-value)
            step = logarithm * value / slope
            length = np.abs(step)
            limit = 0.4 * np.abs(s)
            step = np.where(length > limit, step * (limit / np.maximum(length, 1e-300)), step)
            s = s - step
        done = length <= 1e-8 * np.abs(s)
        finished = done & (s.imag > 1e-8 * np.abs(s)) & np.isfinite(s.real)
        root[active[finished]] = s[finished]
        settled[active[finished]] = True
        keep = ~done & np.isfinite(s.real)
        if not keep.any():
            break
        if keep.sum() < 0.7 * keep.size:
            active, s = active[keep], s[keep]
            few = few.member(keep)
    residue = settled & ((root.real > 0.0) == stable) & (np.abs(root.real) > 1e-9 * np.abs(root))
    again = np.flatnonzero((has_phase & ~settled) | residue)
    has_root = settled & ~residue
    for index in again.tolist():
        found = _carefully(opened.member(index), bool(stable[index]), 1j * float(crossover[index]))
        has_root[index] = found is not None
        root[index] = found if found is not None else 0.0
    return has_root, root, int(again.size)


def _carefully(opened: OpenLoop, stable: bool, seed: complex) -> complex | None:
    """The rightmost oscillatory root of one member from a fan of seeds about its crossover."""
    from lagscape.engine.roots import polish_root

    single = OpenLoop(opened.coefficients, tuple(float(delay) for delay in opened.delays))
    found = []
    for share in (1.0, 0.5, 1.6, 0.25, 2.5, 4.0, 6.0, 9.0):
        for tilt in (0.0, -0.3, -0.8, 0.3, -2.0):
            root, residual = polish_root(single, seed * share + tilt * abs(seed))
            if residual < 1e-12 and abs(root.imag) > 1e-8 * abs(root):
                found.append(complex(root.real, abs(root.imag)))
    if not found:
        return None
    best = max(found, key=lambda root: root.real)
    return best if (best.real <= 0.0) == stable or abs(best.real) <= 1e-9 * abs(best) else None
