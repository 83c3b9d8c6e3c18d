"""The reflex loop: one joint, its inertia and its stretch reflex, in SI units.

    joint       J th'' + b th' + k th = T_ext - T_load - (T - T_0)      angles from the held posture, T_0 the torque that holds it
    activation  tau_m^2 a'' + 2 tau_m a' + a = G (th + c th')(t - tau)
    torque      T = T_max sat(a + a_0),  sat(u) = tanh(u)               a_0 the bias that a held load needs
    delay       tau = path / afferent velocity + path / efferent velocity + synaptic + neuromuscular + electromechanical

Demyelination scales both velocities, hyperreflexia scales G, a held mass m at distance l adds m l^2 to J and m g l to the bias.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from lagscape.case.parameters import Choice, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops import reflex_numbers
from lagscape.loops.protocol import Array, Channel, DriveForm, Rest, Signal, batch_shape

__all__ = ["ReflexLoop", "SaturatingDrive"]

_STANDARD_GRAVITY = 9.80665
"""m/s^2, CGPM 1901."""


@dataclass(frozen=True)
class SaturatingDrive:
    """T - T_0 = T_max (tanh(a + a_0) - tanh(a_0)), N m; smooth, and without a corner."""

    largest_torque: Any
    bias: Any
    has_kink: ClassVar[bool] = False

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return self.largest_torque * (np.tanh(control[0] + self.bias + push) - np.tanh(self.bias))

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        slope = self.largest_torque / np.cosh(np.clip(control[0] + self.bias + push, -350.0, 350.0)) ** 2
        zero = np.zeros_like(slope)
        return np.stack([zero, zero, slope, zero])

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.ones_like(control[0] + push)

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        return float(self.largest_torque * (math.tanh(control[0] + self.bias + push) - math.tanh(self.bias)))


@dataclass(frozen=True)
class ReflexLoop:
    """The reflex loop with its numbers; entries may be arrays of one shape for a batch."""

    inertia_kg_m2: Any = 0.03
    damping_n_m_s_rad: Any = 0.35
    stiffness_n_m_rad: Any = 40.0
    activation_time_s: Any = 0.045
    reflex_gain_per_rad: Any = 0.6
    velocity_sensitivity_s: Any = 0.07
    largest_torque_n_m: Any = 10.0
    path_length_m: Any = 0.85
    afferent_velocity_m_s: Any = 55.0
    efferent_velocity_m_s: Any = 50.0
    fixed_delay_s: Any = 0.0125
    held_mass_kg: Any = 0.0
    load_distance_m: Any = 0.15

    kind: ClassVar[str] = "reflex"
    title: ClassVar[str] = "Reflex loop"
    sensitivity_name: ClassVar[str] = "Reflex gain"
    sensitivity_unit: ClassVar[str] = "1/rad"
    delay_name: ClassVar[str] = "Reflex delay"
    choices: ClassVar[tuple[Choice, ...]] = ()
    specifications: ClassVar[tuple[ParameterSpecification, ...]] = reflex_numbers.SPECIFICATIONS
    starting_cases: ClassVar[tuple[StartingCase, ...]] = reflex_numbers.STARTING_CASES

    @property
    def sensitivity(self) -> Any:
        return self.reflex_gain_per_rad

    @property
    def delay(self) -> Any:
        """The whole loop's delay in s: conduction there and back, and the fixed parts."""
        return (
            self.path_length_m / self.afferent_velocity_m_s
            + self.path_length_m / self.efferent_velocity_m_s
            + self.fixed_delay_s
        )

    @property
    def total_inertia(self) -> Any:
        """J + m l^2, kg m2."""
        return self.inertia_kg_m2 + self.held_mass_kg * self.load_distance_m**2

    def with_sensitivity(self, sensitivity: Any) -> ReflexLoop:
        return replace(self, reflex_gain_per_rad=sensitivity)

    def with_delay(self, delay: Any) -> ReflexLoop:
        """The delay changed through both conduction velocities, in proportion, as demyelination does; the fixed part if too short."""
        conducted = self.delay - self.fixed_delay_s
        wanted = np.asarray(delay - self.fixed_delay_s, dtype=float)
        if np.all(wanted > 0.0):
            factor = conducted / (wanted if wanted.ndim else float(wanted))
            return replace(
                self,
                afferent_velocity_m_s=self.afferent_velocity_m_s * factor,
                efferent_velocity_m_s=self.efferent_velocity_m_s * factor,
            )
        share = delay / self.delay
        return replace(
            self,
            fixed_delay_s=self.fixed_delay_s * share,
            afferent_velocity_m_s=self.afferent_velocity_m_s / share,
            efferent_velocity_m_s=self.efferent_velocity_m_s / share,
        )

    def with_numbers(self, **numbers: Any) -> ReflexLoop:
        return replace(self, **numbers)

    def _bias(self) -> Any:
        """a_0 with T_max tanh(a_0) = m g l: the activation that holds the load."""
        share = self.held_mass_kg * _STANDARD_GRAVITY * self.load_distance_m / self.largest_torque_n_m
        if not np.all(np.abs(share) < 1.0):
            raise InvalidInputError(
                "The held load asks for more torque than the largest torque; got "
                f"{float(np.max(share)) * 100.0:.3g} % of it. Lower the mass or its distance."
            )
        return np.arctanh(share)

    def rest(self) -> Rest:
        """The held posture: every deviation zero.

        Raises
        ------
        InvalidInputError
            If the held load is more than the muscle can hold.
        """
        shape = np.broadcast_shapes(batch_shape(self), np.shape(self._bias()))
        return Rest(np.zeros((4, *shape)), np.zeros(shape) if shape else 0.0)

    def form(self) -> DriveForm:
        batch = batch_shape(self)
        inertia = self.total_inertia
        plant = np.zeros((2, 2, *batch))
        plant[0, 1] = 1.0
        plant[1, 0] = -self.stiffness_n_m_rad / inertia
        plant[1, 1] = -self.damping_n_m_s_rad / inertia
        input_vector = np.zeros((2, *batch))
        input_vector[1] = -1.0 / inertia
        rate = 1.0 / self.activation_time_s
        control = np.zeros((2, 2, *batch))
        control[0, 1], control[1, 0], control[1, 1] = 1.0, -(rate**2), -2.0 * rate
        by_sensed = np.zeros((2, 2, *batch))
        by_sensed[1, 0] = rate**2 * self.reflex_gain_per_rad
        by_sensed[1, 1] = rate**2 * self.reflex_gain_per_rad * self.velocity_sensitivity_s
        channels = {} if batch else {"torque": Channel(plant=np.array([0.0, 1.0 / float(inertia)]), unit="N m")}
        return DriveForm(
            plant_names=("angle", "angular velocity"),
            control_names=("activation", "activation rate"),
            plant=plant,
            plant_by_output=np.zeros((2, 2, *batch)),
            input_vector=input_vector,
            constant=np.zeros((2, *batch)),
            sensed_rows=np.eye(2),
            sensed_delays=(self.delay, self.delay),
            control=control,
            control_by_sensed=by_sensed,
            control_constant=np.zeros((2, *batch)),
            drive=SaturatingDrive(self.largest_torque_n_m, self._bias()),
            channels=channels,
            silent_level=-math.inf,
        )

    def signals(self, states: Array, output: Array, times: Array | None = None) -> tuple[Signal, ...]:
        return (
            Signal("torque", "Reflex torque", "N m", output),
            Signal("angle", "Joint angle", "deg", np.degrees(states[:, 0])),
        )
