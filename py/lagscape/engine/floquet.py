"""Floquet multipliers of a limit cycle: does the cycle attract, and how fast does a disturbance of it die.

The equations about the cycle are stepped over one period by the trapezoidal rule for a whole basis of histories at once; the
eigenvalues of the resulting monodromy matrix are the multipliers. The largest are then polished by Hill's method: a disturbance
e^(lambda t) sum_k p_k e^(i k omega t) satisfies the harmonic balance with i k omega replaced by lambda + i k omega, and Newton steps on
lambda make that balance singular. One multiplier is 1, the shift along the cycle itself; how well it comes out says how good the rest is.

References
----------
Insperger and Stepan 2011, Semi-Discretization for Time-Delay Systems (from memory), for stepping with delays.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from lagscape.engine.cycle import Cycle
from lagscape.engine.harmonic import Balance, prepare, samples_for, to_spectrum, to_time
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Array, DriveForm, Rest

__all__ = ["Floquet", "FloquetStatus", "floquet_multipliers"]

_STEPS = 120
_POLISHED = 4
_WEAKEST = 0.02
"""Multipliers below this are history that one period forgets; they are not polished."""


class FloquetStatus(StrEnum):
    """Whether the multipliers may be trusted."""

    CONVERGED = "converged"
    COARSE = "coarse"
    """The multiplier that must be 1 is off by more than 0.1 before polishing: too few steps for this cycle."""


@dataclass(frozen=True)
class Floquet:
    """Multipliers of one cycle, per period."""

    multipliers: tuple[complex, ...]
    """By falling size, the trivial one left out; of a complex pair both."""
    attracts: bool
    """True where every multiplier but the trivial one is smaller than 1."""
    decay_per_cycle: float
    """Size of the largest: what one period leaves of a disturbance of the cycle."""
    trivial_error: float
    """How far the multiplier that must be 1 is from 1, before polishing: the error of the stepping."""
    status: FloquetStatus


def floquet_multipliers(form: DriveForm, rest: Rest, cycle: Cycle, steps: int = _STEPS, count: int = 6) -> Floquet:
    """The `count` largest Floquet multipliers of a converged cycle of one loop.

    Parameters
    ----------
    form : DriveForm
        One loop.
    rest : Rest
    cycle : Cycle
        Converged, of this form and rest.
    steps : int
        Time steps a period, raised where the shortest delay or the fastest rate asks for more.

    Raises
    ------
    InvalidInputError
        If the cycle has not converged.
    """
    if cycle.harmonics is None or cycle.period_s is None:
        raise InvalidInputError(f"Floquet multipliers need a converged cycle; got one whose status is {cycle.status}.")
    balance = prepare(form, rest)
    steps = max(steps, math.ceil(2.0 * cycle.period_s / form.delays[0]))
    values = np.linalg.eigvals(_monodromy(form, balance, cycle, min(steps, 2000)))
    values = values[np.argsort(-np.abs(values))][: count + 1].tolist()
    trivial = min(range(len(values)), key=lambda i: abs(values[i] - 1.0))
    error = abs(values.pop(trivial) - 1.0)
    hill = _Hill(balance, cycle)
    for i, value in enumerate(values[:_POLISHED]):
        if abs(value) > _WEAKEST and abs(value - 1.0) > 3.0 * error:
            values[i] = hill.polish(complex(value))
    largest = max((abs(value) for value in values), default=0.0)
    status = FloquetStatus.CONVERGED if error < 0.1 else FloquetStatus.COARSE
    ordered = sorted((complex(value) for value in values), key=lambda value: -abs(value))
    return Floquet(tuple(ordered), largest < 1.0, largest, error, status)


def _along(balance: Balance, cycle: Cycle, samples: int) -> tuple[Array, Array, Array]:
    """Controlled signal (S,), drive's gradient (n_a, S), plant states (n, S) along the cycle."""
    assert cycle.harmonics is not None
    transfer, _, _, _ = balance.transfers(cycle.harmonics.omega, cycle.harmonics.order)
    arguments = np.einsum("barK,brK->baK", transfer, cycle.harmonics.force)
    value, gradient = balance.in_time(arguments, samples)
    states, _, _ = balance.curves(cycle.harmonics, samples)
    return value[0], gradient[0], states[: balance.plant.shape[1]]


def _monodromy(form: DriveForm, balance: Balance, cycle: Cycle, steps: int) -> Array:
    assert cycle.period_s is not None
    n, m, n_sensed = form.n_plant, form.n_control, form.n_sensed
    h = cycle.period_s / steps
    output, gradient, states = _along(balance, cycle, steps)
    distinct, which = np.unique(form.sensed_rows, axis=0, return_inverse=True)
    which = np.ravel(which)
    # A delay is a whole number of steps and a share of one: straight lines between history points err as the rule itself does.
    back = [divmod(float(delay) / h, 1.0) for delay in form.sensed_delays]
    depth = max(int(whole) + 1 for whole, _ in back)
    push = form.plant_by_output @ states + form.input_vector[:, None]
    local = np.zeros((steps, n + m, n + m))
    local[:, :n, :n] = form.plant + output[:, None, None] * form.plant_by_output
    local[:, :n, n:] = push.T[:, :, None] * gradient[n_sensed:].T[:, None, :]
    local[:, n:, n:] = form.control
    delayed = np.zeros((steps, n + m, n_sensed))
    delayed[:, :n] = push.T[:, :, None] * gradient[:n_sensed].T[:, None, :]
    delayed[:, n:] = form.control_by_sensed
    identity = np.eye(n + m)
    forward = identity + 0.5 * h * local
    solve = np.linalg.inv(identity - 0.5 * h * np.roll(local, -1, axis=0))
    rows = len(distinct)
    columns = n + m + rows * depth
    history = np.zeros((depth + steps + 1, rows, columns))
    for r in range(rows):
        history[np.arange(depth), r, n + m + r * depth + np.arange(depth)] = 1.0
    state = np.zeros((n + m, columns))
    state[:, : n + m] = identity
    history[depth] = distinct @ state[:n]

    def seen(index: int) -> Array:
        return np.array(
            [
                (1.0 - share) * history[index - int(whole), which[j]] + share * history[index - int(whole) - 1, which[j]]
                for j, (whole, share) in enumerate(back)
            ]
        )

    before = delayed[0] @ seen(depth)
    for i in range(steps):
        after = delayed[(i + 1) % steps] @ seen(depth + i + 1)
        state = solve[i] @ (forward[i] @ state + 0.5 * h * (before + after))
        before = after
        history[depth + i + 1] = distinct @ state[:n]
    kept = history[steps : steps + depth]
    return np.concatenate([state, *(kept[:, r] for r in range(rows))])


class _Hill:
    """The harmonic balance of a disturbance of the cycle, as a matrix that is singular at each Floquet exponent."""

    def __init__(self, balance: Balance, cycle: Cycle) -> None:
        assert cycle.harmonics is not None
        self.balance, self.omega = balance, float(cycle.harmonics.omega[0])
        order = cycle.harmonics.order
        self.k = np.arange(-order, order + 1)
        samples = samples_for(order)
        output, gradient, _ = _along(balance, cycle, samples)
        _, factor, _, _ = balance.transfers(cycle.harmonics.omega, order)
        moved = np.einsum("bqrK,brK->bqK", factor, cycle.harmonics.force)[0]
        level = balance.level[0][:, None] + to_time(moved, samples)
        excess = np.broadcast_to(output - balance.output_rest[0] + balance.shift[0], (len(level), 1, samples))
        signals = np.concatenate([level[:, None] * gradient, excess], axis=1)
        spectrum = to_spectrum(signals, 2 * order + 1)
        both = np.concatenate([np.conj(spectrum[..., :0:-1]), spectrum], axis=-1)
        # (i, channel, j, k): harmonic j - k of each signal.
        self.toeplitz = both[..., self.k[:, None] - self.k[None, :] + 2 * order]

    def polish(self, multiplier: complex) -> complex:
        """Newton steps on the exponent; the multiplier as given where they do not settle."""
        period = 2.0 * math.pi / self.omega
        exponent = cmath.log(multiplier) / period
        first = exponent
        for _ in range(8):
            matrix, slope = self._matrix(exponent)
            left, sizes, right = np.linalg.svd(matrix)
            u, v = left[:, -1], np.conj(right[-1])
            turn = np.conj(u) @ slope @ v
            if turn == 0.0:
                break
            step = sizes[-1] / turn
            exponent -= step
            if abs(step) < 1e-12 * self.omega:
                break
        settled = abs(step) < 1e-8 * self.omega and abs(exponent - first) < 0.1 * self.omega
        return cmath.exp(exponent * period) if settled else multiplier

    def _matrix(self, exponent: complex) -> tuple[np.ndarray, np.ndarray]:
        transfer, factor, transfer_slope, factor_slope = self.balance.transfers_at((exponent + 1j * self.omega * self.k)[None])
        rows, size = len(self.balance.rows), self.k.size
        parts = []
        for argument, moved in ((transfer[0], factor[0]), (transfer_slope[0], factor_slope[0])):
            total = np.einsum("iajk,ark->ijrk", self.toeplitz[:, :-1], argument)
            total += np.einsum("ijk,irk->ijrk", self.toeplitz[:, -1], moved)
            parts.append(total.reshape(rows * size, rows * size))
        return np.eye(rows * size) - parts[0], -parts[1]
