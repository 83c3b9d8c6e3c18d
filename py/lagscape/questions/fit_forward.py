"""From many loops at once to what a recording of each would show: cycle, apnoea, saturation at the oximeter, ring-down.

Where a loop hunts, its limit cycle by harmonic balance (engine `harmonic`), begun from the cycle of a similar loop, else from the
amplitude at which the first harmonic alone balances. Where it does not hunt, its dominant oscillation. Saturation follows from lung O2,

    V_L dPO2/dt = E V_E (P_in - PO2) - 863 VCO2 k - 863 Q s (PO2 - PO2*),   P_in = PO2* + k (PaCO2 - PICO2),

driven by the cycle's own ventilation and solved exactly over one period; with both gases in the loop this is the loop's own equation.

The duty ratio and the end of apnoea are read from the cycle as a recording's are (`recordings.cycles`): edges where ventilation crosses a
share of its peak, carried to zero along the sine of the loop-gain formula. A slow start of ventilation that an envelope cannot show is
then not seen in the model either.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.cycle import first_harmonic_gain
from lagscape.engine.dominant_batch import dominant_batch
from lagscape.engine.harmonic import Balance, Harmonics, prepare, solve
from lagscape.engine.margins_batch import MarginsBatch, margins_batch
from lagscape.engine.open_loop import open_loop
from lagscape.errors import InvalidInputError
from lagscape.loops.gases import oxygen_content_slope, oxygen_loss, saturation
from lagscape.loops.protocol import Array, DriveForm, Rest
from lagscape.questions.many import Index, Mask
from lagscape.recordings.cycles import Thresholds
from lagscape.units import ALVEOLAR_CONSTANT, SECONDS_PER_MINUTE

__all__ = ["ORDER", "Shown", "shown_by"]

ORDER = 7
"""Harmonics kept. Against 24, over 49 loops with CO2 only: cycle length within 0.2 %, duty ratio within 0.003, drop within 0.1 % points. Over
27 with both gases: 1.8 %, 0.012 and, in the deepest swings, 6 % points at worst; 0.3 %, 0.004 and 0.7 on average."""
_SAMPLES = 96
_TOLERANCE = 1e-4
_EDGE = Thresholds().edge_at
_WIDEST = float(np.arccos(2.0 * _EDGE - 1.0) / np.pi)
"""Share of a cycle over the edge level of a sine that just touches zero; where it is wider, ventilation does not stop."""
_SHALLOWEST = 2.0 - _WIDEST
_TURN_FROM, _TURN_TO = 0.25, 0.6
"""The turn of the saturation is read as `measure_saturation_lag` reads it: the line through these shares of the rise."""


@dataclass(frozen=True)
class Shown:
    """What each of n loops would show; arrays of shape (n,). Entries mean nothing where `possible` is False."""

    possible: Mask
    """The numbers allow a rest, and a hunting member's cycle was found."""
    hunts: Mask
    loop_gain: Array
    """0 where there is no phase crossover."""
    cycle_length_s: Array
    """Of the limit cycle where the member hunts, else of the dominant oscillation; 0 where nothing oscillates."""
    duty_ratio: Array
    """As a recording shows it. Over 1, up to 1.37, the shallower the waning is; 1.37 where the member does not hunt."""
    apnoea_share: Array
    """Share of the cycle in true apnoea; 0 where there is none."""
    turn_s: Array
    """From the end of apnoea, as a recording shows it, to the turn of the saturation in the lung's own blood."""
    saturation_drop: Array
    """% points, peak to trough; 0 where the member does not hunt."""
    damping_ratio: Array
    """Of the dominant oscillation: -Re / |root|; only where asked for."""
    oscillation_s: Array
    """Its period; 0 where none oscillates, and where not asked for."""
    harmonics: Harmonics
    """The cycles, for the next warm start; those of members without one are zero."""


def shown_by(
    build: Callable[[Index], Any], count: int, *, start: Harmonics | None = None, oxygen: bool = True, ringing: bool = False, cycles: bool = True
) -> Shown:
    """What `count` breathing loops would show.

    Parameters
    ----------
    build : callable
        From an index array of shape (n,) to the loop that holds those members as one batch.
    count : int
    start : Harmonics, optional
        One cycle, or one a member, of similar loops.
    oxygen : bool
        False leaves saturation out.
    ringing : bool
        True also finds the dominant oscillation of every member.
    cycles : bool
        False leaves limit cycles out: a hunting member then shows its dominant oscillation too.
    """
    possible = np.zeros(count, dtype=bool)
    columns = {name: np.zeros(count) for name in ("gain", "length", "drop", "turn", "damping", "oscillation")}
    hunts, duty, silent = np.zeros(count, dtype=bool), np.full(count, _SHALLOWEST), np.zeros(count)
    force, omega = np.zeros((count, 1, ORDER + 1), dtype=complex), np.zeros(count)
    for which in _possible(build, count):
        loop = build(which)
        form, rest = loop.form(), loop.rest()
        opened = open_loop(form, rest)
        known = margins_batch(form, rest, opened, growth=False)
        possible[which], hunts[which] = True, ~known.stable
        columns["gain"][which] = np.where(known.has_phase_crossover, known.loop_gain, 0.0)
        if ringing or not cycles or known.stable.any():
            dominant = dominant_batch(opened, known)
            period = np.where(dominant.has, dominant.cycle_length_s, 0.0)
            columns["length"][which] = columns["oscillation"][which] = period
            turn = 2.0 * np.pi / np.where(dominant.has, period, 1.0)
            rate = dominant.growth_rate_per_s
            columns["damping"][which] = np.where(dominant.has, -rate / np.hypot(rate, turn), 1.0)
        cells = np.flatnonzero(~known.stable)
        if not cells.size or not cycles:
            continue
        found, good = _cycles(build, which[cells], known, cells, _taken(start, which[cells], count))
        possible[which[cells]] = good
        kept = cells[good]
        if not kept.size:
            continue
        here = found.member(good)
        if force.shape[1] != here.force.shape[1]:
            force = np.zeros((count, here.force.shape[1], ORDER + 1), dtype=complex)
        force[which[kept]], omega[which[kept]] = here.force, here.omega
        columns["length"][which[kept]] = 2.0 * np.pi / here.omega
        part = build(which[kept])
        output, height = _ventilation(part, here)
        silent[which[kept]] = _silent_share(height)
        duty[which[kept]], resumes = _as_read(output)
        if oxygen:
            columns["turn"][which[kept]], columns["drop"][which[kept]] = _saturation_figures(part, output, resumes, 2.0 * np.pi / here.omega)
    return Shown(
        possible, hunts, columns["gain"], columns["length"], duty, silent, columns["turn"], columns["drop"], columns["damping"],
        columns["oscillation"], Harmonics(force, omega),
    )  # fmt: skip


def _possible(build: Callable[[Index], Any], count: int) -> list[Index]:
    """The members that allow a rest, in one piece where all do: a batch is refused whole for one impossible member."""
    good, waiting = [], [np.arange(count)] if count else []
    while waiting:
        which = waiting.pop()
        try:
            build(which).rest()
        except InvalidInputError:
            if which.size > 1:
                waiting += [which[: which.size // 2], which[which.size // 2 :]]
            continue
        good.append(which)
    return [np.sort(np.concatenate(good))] if good else []


def _taken(start: Harmonics | None, which: Index, count: int) -> Harmonics | None:
    if start is None:
        return None
    if start.omega.size == 1:
        return Harmonics(np.repeat(start.force, which.size, axis=0), np.repeat(start.omega, which.size)).resized(ORDER)
    assert start.omega.size == count
    return start.member(which).resized(ORDER)


def _cycles(
    build: Callable[[Index], Any], members: Index, known: MarginsBatch, cells: Index, start: Harmonics | None
) -> tuple[Harmonics, Mask]:
    """The limit cycles of hunting members and which of them were found."""
    balance = _balance(build(members))
    crossover = known.phase_crossover_frequency[cells]
    rows = len(balance.rows)
    force, omega = np.zeros((members.size, rows, ORDER + 1), dtype=complex), np.ones(members.size)
    good = np.zeros(members.size, dtype=bool)
    if start is not None:
        able = np.flatnonzero(start.omega > 0.0)
        _improve(build, members, able, start.member(able), force, omega, good, (5, 4, 4), 0.2)
    for share in (1.0, 0.5, 2.0) if start is None else (1.0,):
        left = np.flatnonzero(~good & known.has_phase_crossover[cells])
        if not left.size:
            break
        part = _balance(build(members[left]))
        guess = _first_harmonic(part, crossover[left])
        _improve(build, members, left, Harmonics(share * guess.force, guess.omega), force, omega, good, (5, 4, 6), 1e-3)
    return Harmonics(force, omega), good


def _improve(
    build: Callable[[Index], Any], members: Index, which: Index, guess: Harmonics,
    force: np.ndarray, omega: Array, good: Mask, turns: tuple[int, ...], least: float,
) -> None:  # fmt: skip
    """Newton's steps from a guess; members that settle are written and leave, those that fall back to rest do not count."""
    floor = least * 1e-2 * np.abs(guess.force[:, 0, 1])
    for steps in turns:
        if not which.size:
            return
        solved = solve(_balance(build(members[which])), guess, most=steps, tolerance=_TOLERANCE)
        found = solved.harmonics
        alive = (np.abs(found.force[:, 0, 1]) > floor) & np.isfinite(found.omega) & (found.omega > 0.0)
        done = solved.converged & alive
        force[which[done]], omega[which[done]], good[which[done]] = found.force[done], found.omega[done], True
        on = alive & ~solved.converged
        which, guess, floor = which[on], found.member(on), floor[on]


def _balance(loop: Any) -> Balance:
    return prepare(loop.form(), loop.rest())


def _first_harmonic(balance: Balance, omega: Array) -> Harmonics:
    """Amplitudes where the first harmonic alone balances, by bisection on their logarithm in every member at once."""
    unit = np.max(np.abs(balance.level), axis=1) * np.maximum(np.abs(balance.output_rest), 1e-3)
    low, high = np.log(unit * 1e-4), np.log(unit * 1e3)
    with np.errstate(all="ignore"):
        transfer, factor, _, _ = balance.transfers(omega, 1)
        for _ in range(11):
            middle = 0.5 * (low + high)
            above = first_harmonic_gain(balance, transfer, factor, np.exp(middle)).real >= 1.0
            low, high = np.where(above, middle, low), np.where(above, high, middle)
    force = np.zeros((balance.size, len(balance.rows), ORDER + 1), dtype=complex)
    force[:, 0, 1] = np.exp(0.5 * (low + high))
    return Harmonics(force, omega.copy())


def _ventilation(loop: Any, harmonics: Harmonics) -> tuple[Array, Array]:
    """Ventilation and its height over silence, (n, samples), over one period of each member."""
    form: DriveForm = loop.form()
    rest: Rest = loop.rest()
    balance = prepare(form, rest)
    transfer, _, _, _ = balance.transfers(harmonics.omega, harmonics.order)
    output, height = balance.heights(np.einsum("barK,brK->baK", transfer, harmonics.force), _SAMPLES, form.silent_level)
    assert height is not None
    return output, height


def _silent_share(height: Array) -> Array:
    """Share of the period under silence, by straight lines between the samples."""
    here, after = height, np.roll(height, -1, axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        crossing = np.minimum(here, after) / -np.abs(here - after)
    quiet = np.where((here <= 0.0) & (after <= 0.0), 1.0, np.where((here > 0.0) & (after > 0.0), 0.0, crossing))
    return np.mean(quiet, axis=1)


def _as_read(output: Array) -> tuple[Array, Array]:
    """Duty ratio and the place (in samples) at which ventilation starts again, both as a recording would show them."""
    n = output.shape[1]
    rows = np.arange(output.shape[0])
    peak = output.argmax(axis=1)
    turned = np.take_along_axis(output, (peak[:, None] + np.arange(n)) % n, axis=1)
    level = _EDGE * turned[:, 0]
    under = turned <= level[:, None]
    has = under.any(axis=1)
    down, up = under.argmax(axis=1), n - 1 - under[:, ::-1].argmax(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        before, after = turned[rows, down - 1], turned[rows, down]
        falls = down - 1 + (before - level) / (before - after)
        before, after = turned[rows, up], turned[rows, (up + 1) % n]
        rises = up + (level - before) / (after - before)
    wide = np.where(has, 1.0 - (rises - falls) / n, 1.0)
    # V / V_peak = (cos x - c) / (1 - c) with c = cos(pi duty) crosses the edge level at x = pi wide.
    cosine = np.clip((np.cos(np.pi * wide) - _EDGE) / (1.0 - _EDGE), -1.0, 1.0)
    duty = np.where(wide < _WIDEST, np.arccos(cosine) / np.pi, 1.0 + wide - _WIDEST)
    carried = np.maximum(np.minimum(duty, 1.0) - wide, 0.0)
    return duty, np.where(has, peak + rises - 0.5 * carried * n, 0.0)


def _saturation_figures(loop: Any, output: Array, resumed: Array, period: Array) -> tuple[Array, Array]:
    """Seconds from the end of apnoea to the turn, and the depth of the swing in % points, of the blood that leaves the lung."""
    curve = 100.0 * saturation(_lung_oxygen(loop, output, period))
    drop = np.max(curve, axis=1) - np.min(curve, axis=1)
    n = curve.shape[1]
    # Counted from a quarter of a cycle before, because the turn may come a little before the end of apnoea as it is read.
    first = np.floor(resumed - 0.25 * n).astype(int)
    curve = np.take_along_axis(curve, (first[:, None] + np.arange(n)) % n, axis=1)
    low = curve.min(axis=1)
    rise = curve.max(axis=1) - low
    nadir = n - 1 - np.argmin(curve[:, ::-1], axis=1)
    quarter, later = (_first_over(curve, nadir, low + share * rise) for share in (_TURN_FROM, _TURN_TO))
    with np.errstate(invalid="ignore"):
        turn = quarter - _TURN_FROM / (_TURN_TO - _TURN_FROM) * (later - quarter)
    seconds = (turn - (resumed - first)) * period / n
    return np.where(np.isfinite(seconds), seconds, 0.0), drop


def _first_over(curve: Array, nadir: Index, level: Array) -> Array:
    """Place (in samples) at which each row first rises over its level after its nadir."""
    n = curve.shape[1]
    over = (curve >= level[:, None]) & (np.arange(n) > nadir[:, None])
    at = np.clip(over.argmax(axis=1), 1, n - 1)
    rows = np.arange(curve.shape[0])
    left, right = curve[rows, at - 1], curve[rows, at]
    with np.errstate(divide="ignore", invalid="ignore"):
        return at - 1 + (level - left) / (right - left)


def _lung_oxygen(loop: Any, output: Array, period: Array) -> Array:
    """PO2 of the blood that leaves the lung over one period, (n, samples), by the exact map of each step with ventilation held."""
    n, samples = output.shape
    rest = loop.rest()
    resting = np.broadcast_to(np.asarray(loop.resting_po2_mmhg, dtype=float), n)
    pressure = np.broadcast_to(np.asarray(rest.state[0], dtype=float), n)
    volume = loop.lung_volume_l * SECONDS_PER_MINUTE
    loss = oxygen_loss(loop.inspired_o2_fraction, loop.respiratory_quotient)
    inspired = resting + loss * (pressure - loop.inspired_pco2_mmhg)
    uptake = np.broadcast_to(ALVEOLAR_CONSTANT * loop.cardiac_output_l_min * oxygen_content_slope(resting) / volume, n)
    spent = ALVEOLAR_CONSTANT * loop.co2_production_l_min * loss / volume
    washout = np.broadcast_to(loop.alveolar_share / volume, n)[:, None] * 0.5 * (output + np.roll(output, -1, axis=1))
    rate = washout + uptake[:, None]
    aim = (washout * inspired[:, None] + (uptake * resting - spent)[:, None]) / rate
    kept = np.exp(-rate * (period / samples)[:, None])
    # One turn is P -> whole P + gathered; the periodic start is its fixed point.
    start = np.zeros(n)
    for step in range(samples):
        start = kept[:, step] * start + (1.0 - kept[:, step]) * aim[:, step]
    curve = np.empty((n, samples))
    curve[:, 0] = start / (1.0 - np.prod(kept, axis=1))
    for step in range(samples - 1):
        curve[:, step + 1] = kept[:, step] * curve[:, step] + (1.0 - kept[:, step]) * aim[:, step]
    return curve
