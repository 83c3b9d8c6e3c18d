"""Harmonic balance of delayed loops: periodic solutions as Fourier coefficients, one loop or many at once.

Written about the rest, with the plant's linear part M = A + v1 N (v1 = v0 unless that makes M nearly singular),

    xi' = M xi + W w(t),     w_i = v m_i(x) - v0 m_i(x0) - v1 mu_i,     m_i(x) = N_i x + b_i,  mu_i = N_i xi

where i runs over the plant rows that the controlled signal enters. Everything but w is linear and constant in time, so plant states,
delayed signals and controller states are eliminated exactly: at each harmonic k the drive's arguments are T_a(i k omega) w_k and mu
is T_m(i k omega) w_k. The unknowns are the harmonics 0..H of w and omega; v m is formed in time on 8H samples or more and projected
back. The Jacobian is analytic: products with a known signal g(t) are Toeplitz and Hankel matrices of the transform of g.

Batch axis first here, because that is where numpy.linalg wants it. Sizes: B members, r rows of w, H harmonics, S samples.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any

import numpy as np

from lagscape.loops.protocol import Array, Drive, DriveForm, Rest

__all__ = ["Balance", "Harmonics", "Solved", "prepare", "samples_for", "solve"]

SMALLEST_POLE = 1e-9
"""M counts as singular if its smallest singular value is under this share of its size and N's together: then the loop has an integrator."""


@dataclass(frozen=True)
class Harmonics:
    """One periodic solution (or guess) a member: w_k, shape (B, r, H + 1) complex, w(t) = w_0 + 2 Re sum w_k e^(i k omega t)."""

    force: np.ndarray
    omega: Array
    """rad/s, shape (B,)."""

    @property
    def order(self) -> int:
        return self.force.shape[2] - 1

    def resized(self, order: int) -> Harmonics:
        """Cut or filled with zeros to `order` harmonics."""
        force = np.zeros((*self.force.shape[:2], order + 1), dtype=complex)
        keep = min(order, self.order) + 1
        force[:, :, :keep] = self.force[:, :, :keep]
        return Harmonics(force, self.omega)

    def member(self, which: Any) -> Harmonics:
        return Harmonics(self.force[which], self.omega[which])


@lru_cache(maxsize=16)
def _index(order: int) -> tuple[np.ndarray, np.ndarray]:
    """Where harmonics j - k and j + k stand among -2H .. 2H."""
    j, k = np.arange(order + 1)[:, None], np.arange(order + 1)[None, :]
    return j - k + 2 * order, j + k + 2 * order


@lru_cache(maxsize=16)
def _waves(count: int, samples: int) -> tuple[Array, Array]:
    """Matrices from [Re, Im] of harmonics 0 .. count - 1 to time and back; one product beats a short transform."""
    angle = 2.0 * np.pi * np.arange(count)[:, None] * np.arange(samples) / samples
    double = np.where(np.arange(count) > 0, 2.0, 1.0)[:, None]
    wave = np.concatenate([np.cos(angle), -np.sin(angle)])
    return wave * np.concatenate([double, double]), wave.T / samples


def to_time(spectrum: np.ndarray, samples: int) -> Array:
    """Real signals (..., samples) over one period from harmonics 0 .. K - 1 (..., K)."""
    wave, _ = _waves(spectrum.shape[-1], samples)
    parts = np.concatenate([spectrum.real, spectrum.imag], axis=-1)
    return (parts.reshape(-1, parts.shape[-1]) @ wave).reshape(*spectrum.shape[:-1], samples)


def to_spectrum(signal: Array, count: int) -> np.ndarray:
    """Harmonics 0 .. count - 1 of real signals (..., samples)."""
    _, back = _waves(count, signal.shape[-1])
    parts = (signal.reshape(-1, signal.shape[-1]) @ back).reshape(*signal.shape[:-1], 2 * count)
    spectrum = np.empty((*signal.shape[:-1], count), dtype=complex)
    spectrum.real, spectrum.imag = parts[..., :count], parts[..., count:]
    return spectrum


def _two_sided(spectrum: np.ndarray) -> np.ndarray:
    return np.concatenate([np.conj(spectrum[..., :0:-1]), spectrum], axis=-1)


def _inverse(s: np.ndarray, matrix: Array) -> np.ndarray:
    """(s - M)^-1 for s (B, K) and M (B, n, n): (B, K, n, n)."""
    n = matrix.shape[1]
    if n == 1:
        return (1.0 / (s - matrix[:, 0]))[:, :, None, None]
    if n > 2:
        return np.linalg.inv(s[:, :, None, None] * np.eye(n) - matrix[:, None])
    a, d = s - matrix[:, 0, 0, None], s - matrix[:, 1, 1, None]
    b, c = matrix[:, 0, 1, None], matrix[:, 1, 0, None]
    scale = 1.0 / (a * d - b * c)
    inverse = np.empty((*s.shape, 2, 2), dtype=complex)
    inverse[..., 0, 0], inverse[..., 0, 1], inverse[..., 1, 0], inverse[..., 1, 1] = d * scale, b * scale, c * scale, a * scale
    return inverse


def _leading(values: Any, axes: int, batch: tuple[int, ...]) -> Array:
    """Batch axes from the back to the front and flattened: shape (B, ...)."""
    array = np.asarray(values, dtype=float)
    shape = array.shape[:axes]
    size = int(np.prod(batch, dtype=int))
    if array.ndim == axes:
        return np.broadcast_to(array, (size, *shape))
    full = np.broadcast_to(array, (*shape, *batch)).reshape(*shape, size)
    return np.moveaxis(full, -1, 0)


@dataclass(frozen=True)
class Balance:
    """The balance equations of one batch of loops, ready to be solved. Made by `prepare`."""

    plant: Array
    """M, (B, n, n)."""
    rows: tuple[int, ...]
    """Plant rows that the controlled signal enters: W is these columns of the unit matrix."""
    by_output: Array
    """N_i of those rows, (B, r, n)."""
    level: Array
    """m_i at rest, (B, r)."""
    shift: Array
    """v0 - v1, (B,)."""
    sensed_rows: Array
    """h, (n_sensed, n)."""
    delays: Array
    """tau_j, (B, n_sensed)."""
    control: Array
    """F, (B, m, m)."""
    control_by_sensed: Array
    """G, (B, m, n_sensed)."""
    drive: Drive
    members: tuple[int, ...] | None
    """The form's batch shape, or None for one loop."""
    sensed_rest: Array
    """(B, n_sensed)."""
    state_rest: Array
    """(B, n + m)."""
    output_rest: Array
    """v0, (B,)."""
    gain: Array
    """kappa, (B,): v is v0 + kappa (drive - v0). 1 for the loop itself; 1 / loop_gain puts it on the boundary."""

    @property
    def size(self) -> int:
        return self.plant.shape[0]

    def with_gain(self, gain: Any) -> Balance:
        return replace(self, gain=np.broadcast_to(np.asarray(gain, dtype=float), (self.size,)))

    def curves(self, harmonics: Harmonics, samples: int, member: int = 0) -> tuple[Array, Array, Array]:
        """States (n_states, samples), sensed signals (n_sensed, samples) and mean states (n_states,) of one member over a period."""
        plant, control = self._plant_control(harmonics)
        s = 1j * harmonics.omega[:, None] * np.arange(harmonics.order + 1)
        spectrum = np.concatenate([plant, control], axis=1)[member]
        rest = self.state_rest[member]
        states = np.fft.irfft(spectrum, samples, axis=1) * samples + rest[:, None]
        sensed = np.fft.irfft(self._delayed(s, plant)[member], samples, axis=1) * samples + self.sensed_rest[member][:, None]
        return states, sensed, spectrum[:, 0].real + rest

    def _plant_control(self, harmonics: Harmonics) -> tuple[np.ndarray, np.ndarray]:
        s = 1j * harmonics.omega[:, None] * np.arange(harmonics.order + 1)
        plant = np.einsum("bkni,bik->bnk", self._plant_answer(s), harmonics.force)
        delayed = self._delayed(s, plant)
        if not self.control.shape[1]:
            return plant, delayed[:, :0]
        return plant, np.einsum("bkmj,bjk->bmk", self._control_answer(s), delayed)

    def _plant_answer(self, s: np.ndarray) -> np.ndarray:
        """(s - M)^-1 W, (B, K, n, r)."""
        return _inverse(s, self.plant)[:, :, :, list(self.rows)]

    def _control_answer(self, s: np.ndarray) -> np.ndarray:
        """(s - F)^-1 G, (B, K, m, n_sensed)."""
        return _inverse(s, self.control) @ self.control_by_sensed[:, None]

    def _delayed(self, s: np.ndarray, plant: np.ndarray) -> np.ndarray:
        return np.matmul(self.sensed_rows, plant) * np.exp(-self.delays[:, :, None] * s[:, None])

    def transfers(self, omega: Array, order: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """T_a (B, n_a, r, K), T_m (B, r, r, K) at the harmonics of omega, and their derivatives by omega; K = order + 1."""
        k = np.arange(order + 1)
        value, moved, slope, moved_slope = self.transfers_at(1j * omega[:, None] * k)
        return value, moved, slope * (1j * k), moved_slope * (1j * k)

    def transfers_at(self, s: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """T_a and T_m at any complex points s (B, K), and their derivatives by s."""
        inverse = _inverse(s, self.plant)
        answer = inverse[:, :, :, list(self.rows)]
        slope = -(inverse @ answer)
        turn = np.exp(-s[:, :, None] * self.delays[:, None])[..., None]
        sensed = (self.sensed_rows @ answer) * turn
        sensed_slope = (self.sensed_rows @ slope) * turn - self.delays[:, None, :, None] * sensed
        if self.control.shape[1]:
            inner = _inverse(s, self.control)
            reply = inner @ self.control_by_sensed[:, None]
            control = reply @ sensed
            control_slope = reply @ sensed_slope - inner @ control
            sensed = np.concatenate([sensed, control], axis=2)
            sensed_slope = np.concatenate([sensed_slope, control_slope], axis=2)
        by = self.by_output[:, None]
        parts = (sensed, by @ answer, sensed_slope, by @ slope)
        return tuple(np.moveaxis(part, 1, 3) for part in parts)  # type: ignore[return-value]

    def _in_drive_order(self, arguments: np.ndarray, samples: int) -> tuple[Array, Array]:
        """Sensed signals and controller states in time, shaped as the drive takes them: samples before the loops' batch axes."""
        rest = np.concatenate([self.sensed_rest, self.state_rest[:, self.plant.shape[1] :]], axis=1)
        signal = to_time(arguments, samples) + rest[:, :, None]
        ordered = np.moveaxis(signal, 0, -1)
        if self.members is not None:
            ordered = ordered.reshape(*ordered.shape[:2], *self.members)
        return ordered[: self.sensed_rows.shape[0]], ordered[self.sensed_rows.shape[0] :]

    def _member_first(self, values: Any, samples: int) -> Array:
        """From (..., samples, batch axes) to (B, ..., samples)."""
        array = np.asarray(values, dtype=float)
        batch = (self.size,) if self.members is None else self.members
        lead = array.shape[: array.ndim - len(batch) - 1]
        return np.moveaxis(np.broadcast_to(array, (*lead, samples, *batch)).reshape(*lead, samples, self.size), -1, 0)

    def in_time(self, arguments: np.ndarray, samples: int) -> tuple[Array, Array]:
        """Controlled signal (B, S) and its gradient (B, n_a, S) from harmonics of the drive's arguments (B, n_a, K)."""
        sensed, control = self._in_drive_order(arguments, samples)
        value, gradient = self.drive.value(sensed, control), self.drive.gradient(sensed, control)
        return self._member_first(value, samples), self._member_first(gradient, samples)

    def output_in_time(self, arguments: np.ndarray, samples: int) -> Array:
        """The controlled signal alone, (B, S)."""
        return self._member_first(self.drive.value(*self._in_drive_order(arguments, samples)), samples)

    def heights(self, arguments: np.ndarray, samples: int, silent_level: Any) -> tuple[Array, Array | None]:
        """Controlled signal (B, S), and a smooth height (B, S) that is negative in silence, or None where nothing counts as silence."""
        sensed, control = self._in_drive_order(arguments, samples)
        output = self._member_first(self.drive.value(sensed, control), samples)
        level = np.asarray(silent_level, dtype=float)
        if not np.isfinite(level).all():
            return output, None
        if self.drive.has_kink and not level.any():
            return output, self._member_first(self.drive.switch(sensed, control), samples)
        return output, output - (np.broadcast_to(level, self.members).reshape(-1)[:, None] if self.members is not None else level)

    def equations(self, harmonics: Harmonics, samples: int) -> tuple[np.ndarray, Array, np.ndarray, np.ndarray]:
        """Residual (B, r, K) complex; Jacobian (B, 2rK, 2rK) real on [Re, Im] of w; columns by omega and by kappa (B, r, K) complex."""
        order = harmonics.order
        transfer, factor, transfer_slope, factor_slope = self.transfers(harmonics.omega, order)
        force = harmonics.force
        b, r, size = self.size, len(self.rows), order + 1
        arguments = np.einsum("barK,brK->baK", transfer, force)
        moved = np.einsum("bqrK,brK->bqK", factor, force)
        raw, gradient = self.in_time(arguments, samples)
        # A drive may ignore some of its arguments, as one that is heard through a lag alone.
        active = np.flatnonzero(gradient.any(axis=(0, 2)))
        if 0 < active.size < gradient.shape[1]:
            gradient, transfer, transfer_slope = gradient[:, active], transfer[:, active], transfer_slope[:, active]
        kappa = self.gain[:, None]
        excess = raw - self.output_rest[:, None]
        output = kappa * excess + self.shift[:, None]
        shift_level = self.shift[:, None, None] * self.level[:, :, None]
        level = self.level[:, :, None] + to_time(moved, samples)
        # Signals whose product with a harmonic is needed: for each row i, m_i grad_a for every argument, and v - v1.
        weight = level[:, :, None] * (kappa[:, :, None] * gradient)[:, None]
        stack = np.concatenate(
            [(output[:, None] * level - shift_level)[:, :, None], (excess[:, None] * level)[:, :, None], weight], axis=2
        )
        spectrum = to_spectrum(stack, 2 * order + 1)
        residual = force - spectrum[:, :, 0, :size]
        by_gain = -spectrum[:, :, 1, :size]
        output_spectrum = _two_sided(to_spectrum(output, 2 * order + 1))
        minus, plus = _index(order)
        # Rows i of the answer by columns r of the unknown: (B, i, a, K, K) against (B, a, r, K).
        gradient_spectrum = _two_sided(spectrum[:, :, 2:])
        direct = output_spectrum[:, None, minus, None] * np.moveaxis(factor, 3, 2)[:, :, None]
        mirror = output_spectrum[:, None, plus, None] * np.conj(np.moveaxis(factor, 3, 2))[:, :, None]
        for a in range(transfer.shape[1]):
            column = np.moveaxis(transfer[:, a], 2, 1)[:, None, None]
            direct += gradient_spectrum[:, :, a][..., minus, None] * column
            mirror += gradient_spectrum[:, :, a][..., plus, None] * np.conj(column)
        direct, mirror = np.moveaxis(direct, 4, 3), np.moveaxis(mirror, 4, 3)
        # The mean has no mirror image: its two halves are one number.
        mirror[..., 0] = 0.0
        direct = direct.reshape(b, r * size, r * size)  # rows (i, j), columns (r, k)
        mirror = mirror.reshape(b, r * size, r * size)
        jacobian = np.empty((b, 2 * r * size, 2 * r * size))
        half = r * size
        jacobian[:, :half, :half] = -(direct.real + mirror.real)
        jacobian[:, :half, half:] = direct.imag - mirror.imag
        jacobian[:, half:, :half] = -(direct.imag + mirror.imag)
        jacobian[:, half:, half:] = mirror.real - direct.real
        diagonal = np.arange(2 * half)
        jacobian[:, diagonal, diagonal] += 1.0
        turned = np.einsum("barK,brK->baK", transfer_slope, force)
        turned_level = np.einsum("bqrK,brK->bqK", factor_slope, force)
        change = np.einsum("biat,bat->bit", weight, to_time(turned, samples))
        change = change + output[:, None] * to_time(turned_level, samples)
        by_omega = -to_spectrum(change, size)
        return residual, jacobian, by_omega, by_gain


@dataclass(frozen=True)
class Solved:
    """What `solve` found, one entry a member."""

    harmonics: Harmonics
    gain: Array
    """kappa: as given, or found where an amplitude was prescribed."""
    residual: Array
    """Norm of the imbalance over the norm of w."""
    converged: Array
    iterations: int


def samples_for(order: int) -> int:
    """8H time samples, at least 32: the clip's corner aliases into the harmonics kept where there are fewer."""
    return max(32, 8 * order)


def solve(
    balance: Balance, guess: Harmonics, free_gain: bool = False, most: int = 12, tolerance: float = 1e-9
) -> Solved:
    """Damped Newton steps on the balance equations.

    Parameters
    ----------
    balance : Balance
    guess : Harmonics
        Rotated beforehand so that the first harmonic of the first row is real; that fixes the phase.
    free_gain : bool
        True holds the first harmonic's amplitude and solves for kappa instead: that walks along the branch of cycles from the
        boundary, folds included.
    most : int
        Steps allowed.
    tolerance : float
        On the last step relative to w; the error left is its square on smooth stretches.
    """
    order, samples = guess.order, samples_for(guess.order)
    size, r = order + 1, len(balance.rows)
    half = r * size
    force, omega, gain = guess.force.copy(), guess.omega.copy(), balance.gain.copy()
    dead = np.zeros(balance.size, dtype=bool)
    step_size = np.full(balance.size, np.inf)
    residual_norm = np.full(balance.size, np.inf)
    used = 0
    with np.errstate(all="ignore"):
        for used in range(1, most + 1):  # noqa: B007
            current = Harmonics(force, omega)
            residual, jacobian, by_omega, by_gain = balance.with_gain(gain).equations(current, samples)
            norm = np.sqrt(np.sum(np.abs(force) ** 2, axis=(1, 2)))
            residual_norm = np.sqrt(np.sum(np.abs(residual) ** 2, axis=(1, 2))) / norm
            matrix, rhs = _system(jacobian, residual, by_omega, by_gain, force, half, size, free_gain)
            bad = ~np.all(np.isfinite(matrix), axis=(1, 2)) | ~np.all(np.isfinite(rhs), axis=1)
            dead |= bad
            if bad.any():
                matrix[bad], rhs[bad] = np.eye(matrix.shape[1]), 0.0
            try:
                step = np.linalg.solve(matrix, rhs[..., None])[..., 0]
            except np.linalg.LinAlgError:
                step = (np.linalg.pinv(matrix) @ rhs[..., None])[..., 0]
            omega_step = step[:, half].copy()
            step[:, half] = 0.0
            move = (step[:, :half] + 1j * step[:, half : 2 * half]).reshape(force.shape)
            length = np.sqrt(np.sum(np.abs(move) ** 2, axis=(1, 2)))
            damp = np.minimum(1.0, np.minimum(0.25 * omega / np.maximum(np.abs(omega_step), 1e-300), norm / np.maximum(length, 1e-300)))
            damp[dead] = 0.0
            force = force + damp[:, None, None] * move
            omega = omega + damp * omega_step
            if free_gain:
                gain = gain + damp * np.clip(step[:, -1], -0.5 * np.abs(gain), np.abs(gain))
            step_size = np.where(dead, np.inf, length / norm + np.abs(omega_step) / np.abs(omega))
            if np.all((step_size < tolerance) | dead):
                break
    converged = (step_size < tolerance) & ~dead & (omega > 0.0)
    return Solved(Harmonics(force, omega), gain, residual_norm, converged, used)


def _system(
    jacobian: Array, residual: np.ndarray, by_omega: np.ndarray, by_gain: np.ndarray, force: np.ndarray, half: int, size: int, free: bool
) -> tuple[Array, Array]:
    """The square real system. The mean has no imaginary part; the first row's place for it holds omega and the phase condition."""
    b = jacobian.shape[0]
    flat = residual.reshape(b, half)
    rhs = -np.concatenate([flat.real, flat.imag], axis=1)
    column = by_omega.reshape(b, half)
    jacobian[:, :half, half], jacobian[:, half:, half] = column.real, column.imag
    for row in range(half, 2 * half, size):
        jacobian[:, row] = 0.0
        rhs[:, row] = 0.0
        jacobian[:, row, row] = 1.0
    jacobian[:, half] = 0.0
    jacobian[:, half, half + 1] = 1.0
    rhs[:, half] = -force[:, 0, 1].imag
    if not free:
        return jacobian, rhs
    wide = np.zeros((b, 2 * half + 1, 2 * half + 1))
    wide[:, :-1, :-1] = jacobian
    column = by_gain.reshape(b, half)
    wide[:, :half, -1], wide[:, half:-1, -1] = column.real, column.imag
    for row in range(half, 2 * half, size):
        wide[:, row, -1] = 0.0
    wide[:, -1, 1] = 1.0
    return wide, np.concatenate([rhs, np.zeros((b, 1))], axis=1)


def prepare(form: DriveForm, rest: Rest, copies: int | None = None) -> Balance:
    """The balance equations of one loop (`copies` guesses of it at once, 1 if None) or of a batch."""
    batch = np.broadcast_shapes(
        form.plant.shape[2:], rest.state.shape[1:], np.shape(rest.output), *(np.shape(delay) for delay in form.sensed_delays)
    )
    one = not batch
    shape = (copies or 1,) if one else batch
    n = form.n_plant
    state = _leading(rest.state, 1, shape)
    output = np.ascontiguousarray(_leading(rest.output, 0, shape))
    matrix, by_output = _leading(form.plant, 2, shape), _leading(form.plant_by_output, 2, shape)
    push = _leading(form.input_vector, 1, shape)
    rows = tuple(i for i in range(n) if by_output[:, i].any() or push[:, i].any())
    chosen = list(rows)
    level = np.einsum("bin,bn->bi", by_output[:, chosen], state[:, :n]) + push[:, chosen]
    held = output.copy()
    sizes = np.linalg.svd(matrix + held[:, None, None] * by_output, compute_uv=False)
    scale = sizes[:, 0] + np.sqrt(np.sum(by_output**2, axis=(1, 2)))
    held = np.where(sizes[:, -1] < SMALLEST_POLE * scale, held + 1.0, held)
    return Balance(
        plant=matrix + held[:, None, None] * by_output,
        rows=rows,
        by_output=by_output[:, chosen],
        level=level,
        shift=output - held,
        sensed_rows=form.sensed_rows,
        delays=np.stack([_leading(delay, 0, shape) for delay in form.sensed_delays], axis=1),
        control=_leading(form.control, 2, shape),
        control_by_sensed=_leading(form.control_by_sensed, 2, shape),
        drive=form.drive,
        members=None if one else batch,
        sensed_rest=state[:, :n] @ form.sensed_rows.T,
        state_rest=state,
        output_rest=output,
        gain=np.ones(shape).reshape(-1),
    )
