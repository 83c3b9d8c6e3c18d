"""The limit cycle of one loop that hunts: how large, how long, how much of it in silence.

Harmonic balance (see `harmonic`) from one of four starts: the cycle of the last moment, while a case is dragged; the describing
function, which balances the first harmonic alone over a range of amplitudes; where that fails, the branch of cycles followed
from the boundary, with the drive's excursions scaled so that the loop stands on the boundary and the scale brought back to 1; and
last, a simulation.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from lagscape.engine.harmonic import Balance, Harmonics, prepare, solve, to_spectrum, to_time
from lagscape.engine.harmonic_single import single_balance
from lagscape.engine.margins import Margins, margins
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["BranchPoint", "Cycle", "CycleSolver", "CycleStatus", "first_harmonic_gain", "follow_branch", "interpolated_at", "limit_cycle"]

_ORDER = 16
_FIRST_ORDER = 6
_DRAWN = 256
_FINE = 1024
"""Samples a period for extremes and silence."""
_SMALLEST = 1e-7
"""A solution whose first harmonic is under this share of the guess's has fallen back to rest."""


class CycleStatus(StrEnum):
    """What the search for a cycle came to."""

    CONVERGED = "converged"
    SETTLES = "settles"
    """The rest is stable; no cycle was sought."""
    NOT_FOUND = "not_found"
    """The rest is unstable and no cycle was found."""


@dataclass(frozen=True)
class Cycle:
    """One period of the limit cycle. Every figure is None, and every array empty, where the status is not CONVERGED."""

    status: CycleStatus
    period_s: float | None = None
    output_amplitude: float | None = None
    """Peak to trough of the controlled signal, in its unit."""
    output_mean: float | None = None
    state_amplitudes: Array | None = None
    """Peak to trough of each state, shape (n_states,)."""
    state_means: Array | None = None
    silent_fraction: float | None = None
    """Share of the period with the controlled signal at its silent level (apnoea)."""
    duty_ratio: float | None = None
    """1 - silent_fraction."""
    times: Array | None = None
    """s, shape (n_times,), from 0 to one period, both ends included."""
    states: Array | None = None
    """Shape (n_times, n_states)."""
    output: Array | None = None
    """Shape (n_times,)."""
    residual: float | None = None
    """Imbalance of the harmonics kept, relative to their norm, before the last Newton step; what is left is of the order of its square."""
    last_harmonic: float | None = None
    """Size of the last harmonic kept relative to the first: what truncation leaves out is of this order."""
    harmonics: Harmonics | None = None
    """For the next warm start, and for Floquet multipliers."""


def limit_cycle(
    form: DriveForm,
    rest: Rest,
    start: Cycle | None = None,
    order: int = _ORDER,
    known: Margins | None = None,
) -> Cycle:
    """The limit cycle of one loop.

    Parameters
    ----------
    form : DriveForm
        One loop, not a batch.
    rest : Rest
    start : Cycle, optional
        A converged cycle of a similar loop (the last one while dragging): the quickest start.
    order : int
        Harmonics kept. 16 gives about 1e-3 of the amplitude with a clipped drive and 1e-5 of the period; 64 about 2e-5.
    known : Margins, optional
        Margins of the same form and rest, if the caller has them already.

    Notes
    -----
    Harmonic balance does not say whether the cycle attracts; `floquet` does.
    """
    known = margins(form, rest) if known is None else known
    if known.stable:
        return Cycle(CycleStatus.SETTLES)
    solver = CycleSolver(form, rest)
    if start is not None and start.harmonics is not None:
        found = solver.settle(start.harmonics.resized(order))
        if found is not None:
            return solver.describe(*found)
    if known.phase_crossover_frequency is None:
        return Cycle(CycleStatus.NOT_FOUND)
    found = _from_describing_function(solver, known.phase_crossover_frequency, order)
    if found is None:
        found = _from_boundary(solver, known, order)
    if found is None:
        found = _from_simulation(solver, known.phase_crossover_frequency, order)
    return Cycle(CycleStatus.NOT_FOUND) if found is None else solver.describe(*found)


class CycleSolver:
    """The balance equations of one loop in the quick form if it has one, else in the general form."""

    def __init__(self, form: DriveForm, rest: Rest) -> None:
        self.form, self.rest = form, rest
        self.single = single_balance(form, rest)
        self._general: Balance | None = None

    @property
    def general(self) -> Balance:
        if self._general is None:
            self._general = prepare(self.form, self.rest)
        return self._general

    def settle(self, guess: Harmonics, most: int = 12) -> tuple[Harmonics, float] | None:
        """The solution that Newton's steps reach from `guess` and its imbalance; None where they fail or fall back to rest."""
        if self.single is not None:
            found = self.single.solve(guess, most)
        else:
            solved = solve(self.general, guess, most=most)
            found = (solved.harmonics, float(solved.residual[0])) if solved.converged[0] else None
        if found is None or abs(found[0].force[0, 0, 1]) < _SMALLEST * abs(guess.force[0, 0, 1]):
            return None
        return found

    def describe(self, harmonics: Harmonics, residual: float) -> Cycle:
        """The figures of a solved cycle."""
        if self.single is not None:
            states, sensed, means = self.single.curves(harmonics, _FINE)
        else:
            states, sensed, means = self.general.curves(harmonics, _FINE)
        return _describe(self.form, harmonics, residual, states, sensed, means)


def first_harmonic_gain(balance: Balance, transfer: np.ndarray, factor: np.ndarray, amplitudes: Array) -> np.ndarray:
    """Complex gain of the first harmonic once round the loop, for w = 2 a cos(omega t) of each amplitude a.

    `amplitudes` has shape (B,), one for each member of `balance`; `transfer` and `factor` are its `transfers` at omega for order 1.
    """
    arguments = np.zeros((*transfer.shape[:2], 2), dtype=complex)
    arguments[:, :, 1] = transfer[:, :, 0, 1] * amplitudes[:, None]
    moved = np.zeros((balance.size, 2), dtype=complex)
    moved[:, 1] = factor[:, 0, 0, 1] * amplitudes
    raw = balance.output_in_time(arguments, 32)
    output = balance.gain[:, None] * (raw - balance.output_rest[:, None]) + balance.shift[:, None]
    return to_spectrum(output * (balance.level[:, :1] + to_time(moved, 32)), 2)[:, 1] / amplitudes


def _from_describing_function(solver: CycleSolver, omega: float, order: int) -> tuple[Harmonics, float] | None:
    copies = prepare(solver.form, solver.rest, copies=73)
    unit = float(np.max(np.abs(copies.level[0]))) * max(abs(float(copies.output_rest[0])), 1e-3)
    amplitudes = unit * np.geomspace(1e-5, 1e4, 73)
    with np.errstate(all="ignore"):
        transfer, factor, _, _ = copies.transfers(np.full(73, omega), 1)
        gain = first_harmonic_gain(copies, transfer, factor, amplitudes).real
    passes = np.flatnonzero((gain[:-1] >= 1.0) & (gain[1:] < 1.0))
    if not passes.size:
        return None
    amplitude = amplitudes[passes[0]]
    factors = np.array([1.0, 0.6, 1.6, 0.3, 2.6])
    several = prepare(solver.form, solver.rest, copies=factors.size)
    force = np.zeros((factors.size, len(several.rows), _FIRST_ORDER + 1), dtype=complex)
    force[:, 0, 1] = amplitude * factors
    solved = solve(several, Harmonics(force, np.full(factors.size, omega)), most=20, tolerance=1e-6)
    alive = solved.converged & (np.abs(solved.harmonics.force[:, 0, 1]) > 1e-3 * amplitude)
    for index in np.flatnonzero(alive).tolist():
        guess = solved.harmonics.member(slice(index, index + 1)).resized(order)
        found = solver.settle(_rotated(guess), most=20)
        if found is not None:
            return found
    return None


def _from_simulation(solver: CycleSolver, omega: float, order: int) -> tuple[Harmonics, float] | None:
    """Let the loop run until it cycles and take the last whole cycle: slow, and only for steep loops whose waves are nearly square."""
    from lagscape.engine.simulate import simulate

    form, rest = solver.form, solver.rest
    period = 2.0 * math.pi / omega
    push = 0.05 * np.where(rest.state != 0.0, np.abs(rest.state), 0.0)
    push[0] = push[0] or 0.05
    trace = simulate(form, duration=50.0 * period, rest=rest, offset=push, output_times=50 * 400 + 1)
    if trace.status == "diverged" or trace.times.size < 1000:
        return None
    late = slice(trace.times.size // 2, None)
    times, states, output = trace.times[late], trace.states[late, : form.n_plant], trace.output[late]
    height = output - 0.5 * (np.max(output) + np.min(output))
    rises = np.flatnonzero((height[:-1] < 0.0) & (height[1:] >= 0.0))
    if rises.size < 3 or not np.ptp(output) > 0.0:
        return None
    start, end = (times[i] - height[i] * (times[i + 1] - times[i]) / (height[i + 1] - height[i]) for i in rises[[-2, -1]])
    samples = 2048
    at = start + (end - start) * np.arange(samples) / samples
    balance = solver.general
    held = balance.output_rest[0] - balance.shift[0]
    state = np.array([np.interp(at, times, column) for column in states.T])
    moved = balance.by_output[0] @ (state - rest.state[: form.n_plant, None])
    level = balance.level[0][:, None]
    force = np.interp(at, times, output) * (level + moved) - balance.output_rest[0] * level - held * moved
    spectrum = np.fft.fft(force, axis=1)[:, : order + 1] / samples
    return solver.settle(_rotated(Harmonics(spectrum[None], np.array([2.0 * math.pi / (end - start)]))), most=30)


def _rotated(harmonics: Harmonics) -> Harmonics:
    """The same motion started where the first harmonic is real and positive."""
    angle = np.angle(harmonics.force[:, 0, 1])
    turn = np.exp(-1j * angle[:, None, None] * np.arange(harmonics.order + 1))
    return Harmonics(harmonics.force * turn, harmonics.omega)


def _from_boundary(solver: CycleSolver, known: Margins, order: int) -> tuple[Harmonics, float] | None:
    for previous, following in follow_branch(solver.general, known, most=80):
        if previous.gain < 1.0 <= following.gain:
            return solver.settle(interpolated_at(previous, following, 1.0).resized(order), most=20)
    return None


def interpolated_at(previous: BranchPoint, following: BranchPoint, gain: float) -> Harmonics:
    """A guess for the cycle at this kappa between two neighbours on the branch."""
    share = (gain - previous.gain) / (following.gain - previous.gain)
    force = previous.harmonics.force + share * (following.harmonics.force - previous.harmonics.force)
    omega = previous.harmonics.omega + share * (following.harmonics.omega - previous.harmonics.omega)
    return Harmonics(force, omega)


@dataclass(frozen=True)
class BranchPoint:
    """One cycle on the branch that leaves the boundary."""

    gain: float
    """kappa: the scale on the drive's excursions at which this is a cycle."""
    amplitude: float
    """|w_1| of the first row."""
    harmonics: Harmonics


def follow_branch(
    balance: Balance, known: Margins, order: int = 8, most: int = 60, growth: float = 1.25, first: float = 1e-3
) -> Iterator[tuple[BranchPoint, BranchPoint]]:
    """Neighbouring pairs of `BranchPoint` along the branch of cycles from the boundary, by growing amplitude; ends where Newton fails.

    `first` is the first amplitude as a share of the largest linear one, |m0| |v0| (or |m0| where v0 is 0).
    """
    omega, gain = known.phase_crossover_frequency, known.loop_gain
    if omega is None or not gain:
        return
    scale = float(np.max(np.abs(balance.level[0]))) * (abs(float(balance.output_rest[0])) or 1.0)
    force = np.zeros((1, len(balance.rows), order + 1), dtype=complex)
    force[0, 0, 1] = first * scale
    guess, kappa = Harmonics(force, np.array([omega])), 1.0 / gain
    previous: BranchPoint | None = None
    for _ in range(most):
        solved = solve(balance.with_gain(kappa), guess, free_gain=True, most=15)
        if not solved.converged[0] or solved.gain[0] <= 0.0:
            return
        amplitude = float(solved.harmonics.force[0, 0, 1].real)
        point = BranchPoint(float(solved.gain[0]), amplitude, solved.harmonics)
        if previous is not None:
            yield previous, point
            # Extrapolate in the logarithm of the amplitude: harmonics grow as its powers at first, then evenly.
            ahead = point.harmonics.force + (point.harmonics.force - previous.harmonics.force) * growth
            ahead[0, 0, 1] = point.harmonics.force[0, 0, 1] * growth
            guess = Harmonics(ahead, 2.0 * point.harmonics.omega - previous.harmonics.omega)
        else:
            guess = Harmonics(point.harmonics.force * growth, point.harmonics.omega)
        previous, kappa = point, point.gain


def _describe(form: DriveForm, harmonics: Harmonics, residual: float, states: Array, sensed: Array, means: Array) -> Cycle:
    n = form.n_plant
    output = np.asarray(form.drive.value(sensed, states[n:]))
    silent = _silent_share(form, sensed, states[n:], output)
    period = 2.0 * math.pi / float(harmonics.omega[0])
    every = np.append(np.arange(0, _FINE, _FINE // _DRAWN), 0)
    both = np.concatenate([states, output[None]])
    amplitude = _extreme(both) + _extreme(-both)
    force = np.abs(harmonics.force[0])
    return Cycle(
        status=CycleStatus.CONVERGED,
        period_s=period,
        output_amplitude=float(amplitude[-1]),
        output_mean=float(np.mean(output)),
        state_amplitudes=amplitude[:-1],
        state_means=means,
        silent_fraction=silent,
        duty_ratio=1.0 - silent,
        times=np.linspace(0.0, period, _DRAWN + 1),
        states=states[:, every].T,
        output=output[every],
        residual=residual,
        last_harmonic=float(np.max(force[:, -1]) / np.max(force[:, 1])),
        harmonics=harmonics,
    )


def _extreme(curves: Array) -> Array:
    """Maximum of each periodic curve, shape (n, samples), by the parabola through the three highest neighbours."""
    index = np.argmax(curves, axis=1)
    row = np.arange(curves.shape[0])
    before, top, after = curves[row, index - 1], curves[row, index], curves[row, (index + 1) % curves.shape[1]]
    bend = before - 2.0 * top + after
    with np.errstate(divide="ignore", invalid="ignore"):
        rise = -((after - before) ** 2) / (8.0 * bend)
    return top + np.where(bend < 0.0, rise, 0.0)


def _silent_share(form: DriveForm, sensed: Array, control: Array, output: Array) -> float:
    level = float(form.silent_level)
    if not math.isfinite(level):
        return 0.0
    # Where the law has a corner its smooth switch crosses zero cleanly; the clipped signal itself only touches.
    height = np.asarray(form.drive.switch(sensed, control)) if form.drive.has_kink and level == 0.0 else output - level
    here = height <= 0.0
    silent = float(np.count_nonzero(here))
    for i in np.flatnonzero(here != np.roll(here, -1)).tolist():
        # The sample counts for the step that follows it; the straight line says how much of that step is silent.
        left, right = abs(float(height[i])), abs(float(height[(i + 1) % height.size]))
        share = left / (left + right) if left + right else 0.0
        silent += share - 1.0 if here[i] else 1.0 - share
    return silent / height.size
