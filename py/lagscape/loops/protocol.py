"""The shape every loop has, and the only thing the engine knows of one.

A delayed feedback loop is written as a plant, a controller with its own states, and a drive without memory:

    plant        x'(t) = A x + v (N x + b) + e + sum_k u_k (p_k + v q_k)          x: n_plant states
    sensed       y_j(t) = h_j . x(t - tau_j)                                      j = 1 .. n_sensed
    controller   c'(t) = F c + G y + f                                            c: n_control states
    drive        v(t) = drive(y, c, sum_k d_k u_k) + sum_k o_k u_k                v: one controlled signal

u_k(t) are the disturbances; each enters by its channel (p, q, d, o). Time is in seconds. The controlled signal keeps its
loop's own unit (ventilation in L/min, torque in N m). Every matrix may carry trailing batch axes, one loop a member, so that the
same object describes ten thousand loops; scalars and batched entries mix by numpy broadcasting.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any, ClassVar, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

__all__ = ["Array", "Channel", "Drive", "DriveForm", "Loop", "Rest", "Signal", "batch_shape"]

Array = npt.NDArray[Any]
"""Numbers, counts or truth values: numpy's own types do not follow which through an expression."""


@runtime_checkable
class Drive(Protocol):
    """The memoryless law from what is sensed to the controlled signal.

    `sensed` has shape (n_sensed, ...), `control` (n_control, ...), `push` broadcasts with (...).
    """

    has_kink: ClassVar[bool]
    """True where the law has a corner at switch = 0 (ventilation stops); False where it is smooth."""

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        """The controlled signal, shape (...)."""

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        """Derivatives by each sensed signal, then by each controller state, shape (n_sensed + n_control, ...)."""

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        """A smooth function, shape (...), that is negative exactly where the law is cut off; positive everywhere if never."""

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        """The same as `value` for one loop in plain floats: the inner step of a plain Runge-Kutta run."""


@dataclass(frozen=True)
class Channel:
    """How one disturbance u(t) enters: into the drive, onto the controlled signal, and into the plant."""

    drive: float = 0.0
    output: float = 0.0
    plant: Array | None = None
    """p, shape (n_plant,), per second and per unit of u; None for zero."""
    plant_by_output: Array | None = None
    """q, shape (n_plant,), per second, per unit of u and of the controlled signal; None for zero."""
    unit: str = ""


@dataclass(frozen=True)
class DriveForm:
    """One loop (or a batch) as matrices; see the module's equations. `...` stands for batch axes, absent for one loop."""

    plant_names: tuple[str, ...]
    control_names: tuple[str, ...]
    plant: Array
    """A, shape (n_plant, n_plant, ...), 1/s."""
    plant_by_output: Array
    """N, shape (n_plant, n_plant, ...)."""
    input_vector: Array
    """b, shape (n_plant, ...)."""
    constant: Array
    """e, shape (n_plant, ...)."""
    sensed_rows: Array
    """h, shape (n_sensed, n_plant), the same for every member of a batch."""
    sensed_delays: tuple[Any, ...]
    """tau_j in s, positive; each a float or an array of the batch's shape."""
    control: Array
    """F, shape (n_control, n_control, ...), 1/s."""
    control_by_sensed: Array
    """G, shape (n_control, n_sensed, ...), 1/s."""
    control_constant: Array
    """f, shape (n_control, ...)."""
    drive: Drive
    channels: Mapping[str, Channel] = field(default_factory=dict)
    silent_level: Any = 0.0
    """The controlled signal at or below this counts as silence (apnoea); a float or an array of the batch's shape."""

    @property
    def n_plant(self) -> int:
        return len(self.plant_names)

    @property
    def n_control(self) -> int:
        return len(self.control_names)

    @property
    def n_sensed(self) -> int:
        return len(self.sensed_delays)

    @property
    def state_names(self) -> tuple[str, ...]:
        """Plant states, then controller states: the order of every state vector."""
        return self.plant_names + self.control_names

    @property
    def delays(self) -> tuple[float, ...]:
        """The distinct delays of one loop in s, ascending."""
        return tuple(sorted({float(delay) for delay in self.sensed_delays}))

    def rhs(self, state: Array, sensed: Array, push: Any = 0.0) -> Array:
        """Time derivative, shape of `state` (n_plant + n_control, ...), at sensed signals y of shape (n_sensed, ...)."""
        x, c = state[: self.n_plant], state[self.n_plant :]
        v = self.drive.value(sensed, c, push)
        plant = (
            np.einsum("ij...,j...->i...", self.plant, x)
            + v * (np.einsum("ij...,j...->i...", self.plant_by_output, x) + self.input_vector)
            + self.constant
        )
        control = (
            np.einsum("ij...,j...->i...", self.control, c)
            + np.einsum("ij...,j...->i...", self.control_by_sensed, sensed)
            + self.control_constant
        )
        return np.concatenate([plant, control])


@dataclass(frozen=True)
class Rest:
    """The equilibrium: every signal constant."""

    state: Array
    """Shape (n_plant + n_control, ...)."""
    output: Any
    """The controlled signal at rest, a float or an array of the batch's shape."""


def batch_shape(loop: Any) -> tuple[int, ...]:
    """The batch axes of a loop dataclass: the broadcast shape of its numbers, () for one loop."""
    values = (getattr(loop, item.name) for item in fields(loop))
    return np.broadcast_shapes(*(np.shape(value) for value in values if value is not None and not isinstance(value, str)))


@dataclass(frozen=True)
class Signal:
    """One drawn or exported curve: a name a clinician reads, its unit, its values."""

    name: str
    label: str
    unit: str
    values: Array


@runtime_checkable
class Loop(Protocol):
    """A loop with its numbers. Frozen: a change gives a new loop."""

    kind: ClassVar[str]
    """The register's name of the loop: plain, breathing, reflex."""
    sensitivity_name: ClassVar[str]
    """What the map's upright axis is called, with its unit in `sensitivity_unit`."""
    sensitivity_unit: ClassVar[str]
    delay_name: ClassVar[str]

    @property
    def sensitivity(self) -> Any:
        """The one number that says how strongly the controller answers; positive."""

    @property
    def delay(self) -> Any:
        """The one delay in s that the map moves; every path's delay moves with it by the same number of seconds."""

    def with_sensitivity(self, sensitivity: Any) -> Loop:
        """The same loop with that sensitivity, the split between its paths kept. May be an array: then a batch."""

    def with_delay(self, delay: Any) -> Loop:
        """The same loop with every path's delay shifted by the same seconds so that `delay` is this. May be an array."""

    def with_numbers(self, **numbers: Any) -> Loop:
        """The same loop with these parameters replaced; the names are those of its parameter specifications."""

    def rest(self) -> Rest:
        """The equilibrium. It never depends on a delay.

        Raises
        ------
        InvalidInputError
            If the numbers allow no rest.
        """

    def form(self) -> DriveForm:
        """The loop as matrices, for the engine."""

    def signals(self, states: Array, output: Array, times: Array | None = None) -> tuple[Signal, ...]:
        """Named curves from states, shape (n_times, n_states), and the controlled signal, shape (n_times,).

        `times`, shape (n_times,), s, ascending, lets a loop add curves that a sensor shows later.
        """
