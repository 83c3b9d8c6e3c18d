"""Harmonic balance of one loop whose controlled signal enters one plant row: the path for dragging.

The same equations as in `harmonic`, with as few array calls as possible. The transfer functions come from the polynomials of the open
loop's parts, evaluated at all harmonics by one product; all signals go to the time domain and back in one transform each.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from lagscape.engine.harmonic import SMALLEST_POLE, Harmonics, samples_for
from lagscape.engine.open_loop import resolvent
from lagscape.loops.protocol import Array, Drive, DriveForm, Rest

__all__ = ["SingleBalance", "single_balance"]


@lru_cache(maxsize=8)
def _tables(order: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    j, k = np.arange(order + 1)[:, None], np.arange(order + 1)[None, :]
    samples = samples_for(order)
    return (j - k) % samples, (j + k) % samples, np.arange(order + 1), np.arange(2 * (order + 1))


@dataclass(frozen=True)
class SingleBalance:
    """The balance equations of one loop with one row of w; made by `single_balance`."""

    polynomials: Array
    """Rows: each term's numerator, then the common denominator; powers from 0 up, (n_terms + 1, degree + 1)."""
    delays: Array
    """s, (n_terms,): 0 for mu, which comes first."""
    gather: Array
    """(1 + n_arguments, n_terms) of 0 and 1: which terms add up to mu and to each argument of the drive."""
    level: float
    shift: float
    output_rest: float
    rest: Array
    """Arguments of the drive at rest, (n_arguments,)."""
    state_polynomials: Array
    """The same for the plant states, without delays."""
    state_rest: Array
    n_sensed: int
    drive: Drive

    def curves(self, harmonics: Harmonics, samples: int) -> tuple[Array, Array, Array]:
        """States (n_states, samples), sensed signals (n_sensed, samples) and mean states (n_states,) over one period."""
        force = harmonics.force[0, 0]
        omega = float(harmonics.omega[0])
        transfer, _ = self.transfers(omega, force.size - 1)
        powers = (1j * omega * np.arange(force.size)) ** np.arange(self.polynomials.shape[1])[:, None]
        value = self.state_polynomials @ powers
        spectrum = np.concatenate([value[:-1] / value[-1] * force, transfer[1:] * force])
        n_plant = value.shape[0] - 1
        level = np.concatenate([self.state_rest[:n_plant], self.rest])
        curves = np.fft.irfft(spectrum, samples, axis=1) * samples + level[:, None]
        means = spectrum[:, 0].real + level
        order = [*range(n_plant), *range(n_plant + self.n_sensed, level.size)]
        return curves[order], curves[n_plant : n_plant + self.n_sensed], means[order]

    def transfers(self, omega: float, order: int) -> tuple[np.ndarray, np.ndarray]:
        """T of mu and of each argument, (1 + n_a, K), and the derivatives by omega."""
        k = _tables(order)[2]
        s = 1j * omega * k
        powers = np.empty((self.polynomials.shape[1], k.size), dtype=complex)
        powers[0] = 1.0
        for row in range(1, powers.shape[0]):
            np.multiply(powers[row - 1], s, out=powers[row])
        value = self.polynomials @ powers
        degrees = np.arange(1, powers.shape[0])
        slope = (self.polynomials[:, 1:] * degrees) @ powers[:-1]
        turn = np.exp(-self.delays[:, None] * s)
        term = value[:-1] / value[-1] * turn
        term_slope = slope[:-1] / value[-1] * turn - term * (slope[-1] / value[-1] + self.delays[:, None])
        return self.gather @ term, (self.gather @ term_slope) * (1j * k)

    def step(self, force: np.ndarray, omega: float) -> tuple[np.ndarray, float, float]:
        """One Newton step: change of w (K,), change of omega, and the norm of the imbalance before it."""
        order = force.size - 1
        samples = samples_for(order)
        minus, plus, _, diagonal = _tables(order)
        size = order + 1
        transfer, transfer_slope = self.transfers(omega, order)
        both = np.concatenate([transfer * force, transfer_slope * force])
        signals = np.fft.irfft(both, samples, axis=1) * samples
        rows = transfer.shape[0]
        arguments = signals[1:rows] + self.rest[:, None]
        sensed, control = arguments[: self.n_sensed], arguments[self.n_sensed :]
        output = self.drive.value(sensed, control) - self.output_rest + self.shift
        level = self.level + signals[0]
        weight = np.concatenate([output[None], level * self.drive.gradient(sensed, control)])
        change = (weight * signals[rows:]).sum(axis=0)
        product = output * level - self.shift * self.level
        spectrum = np.fft.fft(np.concatenate([product[None], change[None], weight]), axis=1) / samples
        residual = force - spectrum[0, :size]
        turned = spectrum[2:]
        active = np.flatnonzero(np.abs(turned).max(axis=1) > 0.0)
        turned, transfer = turned[active], transfer[active]
        direct = (turned[:, minus] * transfer[:, None]).sum(axis=0)
        mirror = (turned[:, plus] * transfer.conj()[:, None]).sum(axis=0)
        mirror[:, 0] = 0.0
        matrix = np.empty((2 * size, 2 * size))
        total, difference = direct + mirror, direct - mirror
        matrix[:size, :size], matrix[size:, :size] = -total.real, -total.imag
        matrix[:size, size:], matrix[size:, size:] = difference.imag, -difference.real
        matrix[diagonal, diagonal] += 1.0
        # The mean has no imaginary part; its place holds omega and the phase condition.
        by_omega = -spectrum[1, :size]
        matrix[:size, size], matrix[size:, size] = by_omega.real, by_omega.imag
        matrix[size] = 0.0
        matrix[size, size + 1] = 1.0
        rhs = -np.concatenate([residual.real, residual.imag])
        rhs[size] = -force[1].imag
        step = np.linalg.solve(matrix, rhs)
        omega_step = float(step[size])
        step[size] = 0.0
        return step[:size] + 1j * step[size:], omega_step, float(np.linalg.norm(residual))

    def solve(self, guess: Harmonics, most: int = 12, tolerance: float = 1e-7) -> tuple[Harmonics, float] | None:
        """Damped Newton steps; the solution and its relative imbalance, or None where they do not settle."""
        force, omega = guess.force[0, 0].copy(), float(guess.omega[0])
        with np.errstate(all="ignore"):
            for _ in range(most):
                norm = float(np.linalg.norm(force))
                try:
                    move, omega_step, residual = self.step(force, omega)
                except np.linalg.LinAlgError:
                    return None
                length = float(np.linalg.norm(move))
                if not (length < np.inf and norm > 0.0):
                    return None
                damp = min(1.0, 0.25 * omega / max(abs(omega_step), 1e-300), norm / max(length, 1e-300))
                force, omega = force + damp * move, omega + damp * omega_step
                if length / norm + abs(omega_step) / omega < tolerance:
                    return Harmonics(force[None, None], np.array([omega])), residual / norm
        return None


def single_balance(form: DriveForm, rest: Rest) -> SingleBalance | None:
    """The quick form of the balance equations, or None where the controlled signal enters several plant rows."""
    n_plant, n_control, n_sensed = form.n_plant, form.n_control, form.n_sensed
    used = form.plant_by_output.any(axis=1) | (form.input_vector != 0.0)
    rows = np.flatnonzero(used).tolist()
    if len(rows) != 1 or form.plant.ndim != 2:
        return None
    row = rows[0]
    state, output = rest.state, float(rest.output)
    by_output = form.plant_by_output[row]
    held = output
    matrix = form.plant + held * form.plant_by_output
    plant_determinant, plant_adjugate = resolvent(matrix.tolist())
    scale = float(np.linalg.norm(matrix) + np.linalg.norm(by_output))
    if abs(plant_determinant[-1]) < SMALLEST_POLE * scale**n_plant:
        held = output + 1.0
        plant_determinant, plant_adjugate = resolvent((form.plant + held * form.plant_by_output).tolist())
    control_determinant, control_adjugate = resolvent(form.control.tolist())
    answer = np.array([[line[row] for line in part] for part in reversed(plant_adjugate)]).T
    low_plant, low_control = np.array(plant_determinant[::-1], dtype=float), np.array(control_determinant[::-1], dtype=float)
    replies = [np.array(part) @ form.control_by_sensed for part in reversed(control_adjugate)] if n_control else []
    numerators = [np.convolve(by_output @ answer, low_control)]
    delays, targets = [0.0], [0]
    for j in range(n_sensed):
        seen = form.sensed_rows[j] @ answer
        for target, factor in [(1 + j, low_control)] + [
            (1 + n_sensed + i, np.array([reply[i, j] for reply in replies])) for i in range(n_control)
        ]:
            if factor.any():
                numerators.append(np.convolve(seen, factor))
                delays.append(float(form.sensed_delays[j]))
                targets.append(target)
    numerators += [np.convolve(line, low_control) for line in answer]
    numerators.append(np.convolve(low_plant, low_control))
    polynomials = np.zeros((len(numerators), n_plant + n_control + 1))
    for index, values in enumerate(numerators):
        polynomials[index, : values.size] = values
    gather = np.zeros((1 + n_sensed + n_control, len(delays)))
    gather[targets, np.arange(len(delays))] = 1.0
    terms = len(delays)
    return SingleBalance(
        polynomials=polynomials[[*range(terms), -1]],
        state_polynomials=polynomials[terms:],
        delays=np.array(delays),
        gather=gather,
        level=float(by_output @ state[:n_plant] + form.input_vector[row]),
        shift=output - held,
        output_rest=output,
        rest=np.concatenate([form.sensed_rows @ state[:n_plant], state[n_plant:]]),
        state_rest=state,
        n_sensed=n_sensed,
        drive=form.drive,
    )
