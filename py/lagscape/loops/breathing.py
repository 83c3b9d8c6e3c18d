"""The breathing loop: lungs, body stores and the two chemoreflexes, in clinical units.

    lung     V_L dPa/dt = 863 beta Q (Pv - Pa) - E V_E (Pa - P_I)
    tissue   V_T 863 beta dPv/dt = 863 VCO2 - 863 beta Q (Pv - Pa)
    central  T_c dPc/dt = Pa(t - tau_c) - Pc
    drive    V_E = max(0, V_line + S_p g (Pa(t - tau_p) - P_line) + S_c (Pc - P_line)), or a sigmoid of the same point and slope
    rest     E V_E (Pa - P_I) = 863 VCO2                                                (alveolar ventilation equation)

g = exp(-0.05 (PaO2 - 100)) multiplies the peripheral gain (secondary sources only). The line passes through the person's own
eupnoeic point (P_line, V_line); a change of the plant moves the rest along it. Pressures in mmHg, volumes in L, flows in L/min.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from lagscape.case.parameters import Choice, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops import breathing_numbers
from lagscape.loops.protocol import Array, Channel, DriveForm, Rest, Signal, batch_shape
from lagscape.units import ALVEOLAR_CONSTANT, SECONDS_PER_MINUTE

__all__ = ["BreathingLoop", "SigmoidDrive", "ThresholdDrive", "hypoxic_multiplier"]

_SIGMOID_APNOEA_SHARE = 0.1
"""A sigmoid never reaches zero; ventilation under a tenth of eupnoea counts as apnoea (common practice, no source)."""

_NO_PRESSURE = 1e-30
"""A share of P_line at or under which the sigmoid's pressure counts as none: the power law has no value below zero."""


def hypoxic_multiplier(arterial_po2_mmhg: Any) -> Any:
    """g = exp(-0.05 (PaO2 - 100)), no unit, 1 at 100 mmHg. Secondary sources only."""
    return np.exp(-0.05 * (np.asarray(arterial_po2_mmhg, dtype=float) - 100.0))


@dataclass(frozen=True)
class ThresholdDrive:
    """V_E = max(0, V_line + G_p (y - P_line) + S_c (c - P_line) + push)."""

    line_ventilation: Any
    line_pressure: Any
    peripheral: Any
    central: Any
    has_kink: ClassVar[bool] = True

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return (
            self.line_ventilation
            + self.peripheral * (sensed[0] - self.line_pressure)
            + self.central * (control[0] - self.line_pressure)
            + push
        )

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.maximum(self.switch(sensed, control, push), 0.0)

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        open_ = self.switch(sensed, control, push) > 0.0
        zero = np.zeros_like(open_, dtype=float)
        return np.stack([open_ * (self.peripheral + zero), zero, open_ * (self.central + zero)])

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        drive = (
            self.line_ventilation
            + self.peripheral * (sensed[0] - self.line_pressure)
            + self.central * (control[0] - self.line_pressure)
            + push
        )
        return drive if drive > 0.0 else 0.0


@dataclass(frozen=True)
class SigmoidDrive:
    """V_E = V_max P^n / (theta^n + P^n), P the pressure that the line would read, with the line's point and slope.

    n = S P_line / V_line / (1 - V_line / V_max).
    """

    line_ventilation: Any
    line_pressure: Any
    peripheral: Any
    central: Any
    largest_ventilation: Any
    has_kink: ClassVar[bool] = False

    @property
    def _exponent(self) -> Any:
        slope = self.peripheral + self.central
        return slope * self.line_pressure / self.line_ventilation / (1.0 - self.line_ventilation / self.largest_ventilation)

    def _effective(self, sensed: Array, control: Array, push: Any) -> Array:
        slope = self.peripheral + self.central
        weight = self.peripheral / slope
        return weight * sensed[0] + (1.0 - weight) * control[0] + push / slope

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return np.ones_like(self._effective(sensed, control, push))

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        ratio = self._effective(sensed, control, push) / self.line_pressure
        odds = (self.largest_ventilation / self.line_ventilation - 1.0) * np.exp(
            np.minimum(-self._exponent * np.log(np.maximum(ratio, _NO_PRESSURE)), 690.0)
        )
        return np.where(ratio > _NO_PRESSURE, self.largest_ventilation / (1.0 + odds), 0.0)

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        effective = np.maximum(self._effective(sensed, control, push), _NO_PRESSURE * self.line_pressure)
        ventilation = self.value(sensed, control, push)
        slope = self._exponent * ventilation * (1.0 - ventilation / self.largest_ventilation) / effective
        weight = self.peripheral / (self.peripheral + self.central)
        return np.stack([slope * weight, np.zeros_like(slope), slope * (1.0 - weight)])

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        slope = self.peripheral + self.central
        weight = self.peripheral / slope
        ratio = (weight * sensed[0] + (1.0 - weight) * control[0] + push / slope) / self.line_pressure
        if ratio <= _NO_PRESSURE:
            return 0.0
        power = -self._exponent * math.log(ratio)
        odds = (self.largest_ventilation / self.line_ventilation - 1.0) * math.exp(min(power, 690.0))
        return float(self.largest_ventilation / (1.0 + odds))


@dataclass(frozen=True)
class BreathingLoop:
    """The breathing loop with its numbers; entries may be arrays of one shape for a batch. Names carry the units."""

    co2_production_l_min: Any = 0.20
    resting_paco2_mmhg: Any = 40.0
    inspired_pco2_mmhg: Any = 0.0
    dead_space_fraction: Any = 0.30
    lung_volume_l: Any = 2.4
    tissue_volume_l: Any = 15.0
    co2_solubility_per_mmhg: Any = 0.0065
    cardiac_output_l_min: Any = 5.0
    peripheral_gain_l_min_mmhg: Any = 0.27
    central_gain_l_min_mmhg: Any = 2.14
    arterial_po2_mmhg: Any = 95.0
    peripheral_delay_s: Any = 8.0
    central_delay_s: Any = 10.0
    central_time_constant_s: Any = 60.0
    largest_ventilation_l_min: Any = 60.0
    drive_shape: str = "threshold"
    delays_follow_flow: str = "no"
    line_ventilation_l_min: Any = None
    """V_line of a controller that was fixed before the plant changed; None puts the line through this loop's own rest."""

    kind: ClassVar[str] = "breathing"
    title: ClassVar[str] = "Breathing loop"
    sensitivity_name: ClassVar[str] = "Chemoreflex sensitivity"
    sensitivity_unit: ClassVar[str] = "L/min/mmHg"
    delay_name: ClassVar[str] = "Lung-to-chemoreceptor delay"
    choices: ClassVar[tuple[Choice, ...]] = breathing_numbers.CHOICES
    specifications: ClassVar[tuple[ParameterSpecification, ...]] = breathing_numbers.SPECIFICATIONS
    starting_cases: ClassVar[tuple[StartingCase, ...]] = breathing_numbers.STARTING_CASES

    @property
    def alveolar_share(self) -> Any:
        """E, the share of ventilation that reaches the alveoli."""
        return 1.0 - self.dead_space_fraction

    @property
    def effective_peripheral_gain(self) -> Any:
        """S_p g(PaO2), L/min/mmHg."""
        return self.peripheral_gain_l_min_mmhg * hypoxic_multiplier(self.arterial_po2_mmhg)

    @property
    def line_ventilation(self) -> Any:
        """V_line in L/min: the given one, else the ventilation that holds the resting PaCO2 (alveolar ventilation equation)."""
        if self.line_ventilation_l_min is not None:
            return self.line_ventilation_l_min
        difference = self.resting_paco2_mmhg - self.inspired_pco2_mmhg
        return ALVEOLAR_CONSTANT * self.co2_production_l_min / (self.alveolar_share * difference)

    @property
    def sensitivity(self) -> Any:
        """S_p g + S_c, the whole slope of ventilation on CO2, L/min/mmHg."""
        return self.effective_peripheral_gain + self.central_gain_l_min_mmhg

    @property
    def delay(self) -> Any:
        return self.peripheral_delay_s

    def with_sensitivity(self, sensitivity: Any) -> BreathingLoop:
        factor = sensitivity / self.sensitivity
        return replace(
            self,
            peripheral_gain_l_min_mmhg=self.peripheral_gain_l_min_mmhg * factor,
            central_gain_l_min_mmhg=self.central_gain_l_min_mmhg * factor,
        )

    def with_delay(self, delay: Any) -> BreathingLoop:
        return replace(
            self, peripheral_delay_s=delay, central_delay_s=delay + (self.central_delay_s - self.peripheral_delay_s)
        )

    def with_numbers(self, **numbers: Any) -> BreathingLoop:
        """Parameters replaced; where the delays are tied to flow, a new cardiac output scales them by 1/Q."""
        changed = replace(self, **numbers)
        if changed.delays_follow_flow == "yes" and "cardiac_output_l_min" in numbers:
            ratio = self.cardiac_output_l_min / changed.cardiac_output_l_min
            for name in ("peripheral_delay_s", "central_delay_s"):
                if name not in numbers:
                    changed = replace(changed, **{name: getattr(self, name) * ratio})
        return changed

    def freeze_line(self) -> BreathingLoop:
        """The same loop whose controller stays where it is when the plant is changed afterwards."""
        return replace(self, line_ventilation_l_min=self.line_ventilation)

    def _drive(self) -> ThresholdDrive | SigmoidDrive:
        line = (self.line_ventilation, self.resting_paco2_mmhg, self.effective_peripheral_gain, self.central_gain_l_min_mmhg)
        if self.drive_shape == "sigmoid":
            return SigmoidDrive(*line, self.largest_ventilation_l_min)
        return ThresholdDrive(*line)

    def _check(self) -> None:
        if not np.all(np.asarray(self.resting_paco2_mmhg - self.inspired_pco2_mmhg) > 0.0) and self.line_ventilation_l_min is None:
            raise InvalidInputError(
                f"Resting PaCO2 must lie above inspired PCO2; got {float(np.min(self.resting_paco2_mmhg)):.4g} and "
                f"{float(np.max(self.inspired_pco2_mmhg)):.4g} mmHg. Lower the inspired PCO2."
            )
        if self.drive_shape == "sigmoid" and not np.all(self.largest_ventilation_l_min > self.line_ventilation):
            raise InvalidInputError(
                f"The largest ventilation must exceed the resting {float(np.max(self.line_ventilation)):.3g} L/min; got "
                f"{float(np.min(self.largest_ventilation_l_min)):.3g} L/min. Raise it, or take the threshold line."
            )

    def rest(self) -> Rest:
        """Where the line meets the metabolic hyperbola E V (P - P_I) = 863 VCO2, with V > 0.

        Raises
        ------
        InvalidInputError
            If the inspired PCO2 is not below the resting PaCO2, or the sigmoid's ceiling is below the resting ventilation.
        """
        self._check()
        share, inspired = self.alveolar_share, self.inspired_pco2_mmhg
        load = ALVEOLAR_CONSTANT * self.co2_production_l_min / share
        if self.line_ventilation_l_min is None:
            pressure, ventilation = self.resting_paco2_mmhg, self.line_ventilation
        elif self.drive_shape == "sigmoid":
            pressure = self._sigmoid_rest(load)
            ventilation = load / (pressure - inspired)
        else:
            # V_line + S (P - P_line) = load / (P - P_I), a quadratic in the rise above inspired; its positive root.
            slope = self.sensitivity
            offset = self.line_ventilation + slope * (inspired - self.resting_paco2_mmhg)
            root = np.sqrt(offset**2 + 4.0 * slope * load)
            rise = np.where(offset > 0.0, 2.0 * load / (offset + root), (root - offset) / (2.0 * slope))
            pressure = inspired + rise
            ventilation = load / rise
        pressure = np.asarray(pressure, dtype=float)
        venous = pressure + self.co2_production_l_min / (self.co2_solubility_per_mmhg * self.cardiac_output_l_min)
        state = np.stack(np.broadcast_arrays(pressure, venous, pressure)).astype(float)
        return Rest(state, ventilation if np.ndim(ventilation) else float(ventilation))

    def _sigmoid_rest(self, load: Any) -> Array:
        """PaCO2 where the sigmoid meets the hyperbola, by bisection.

        Always bracketed: above P_line the rising drive is at least V_line, so V (P - P_I) has passed the load where both
        P >= P_line and V_line (P - P_I) >= load.
        """
        drive = self._drive()
        low = np.zeros(batch_shape(self)) + self.inspired_pco2_mmhg
        high = np.maximum(self.resting_paco2_mmhg, low + load / self.line_ventilation)
        for _ in range(80):
            middle = 0.5 * (low + high)
            ventilation = drive.value(np.stack([middle, middle]), middle[None])
            above = ventilation * (middle - self.inspired_pco2_mmhg) > load
            low, high = np.where(above, low, middle), np.where(above, middle, high)
        return 0.5 * (low + high)

    def form(self) -> DriveForm:
        self._check()
        batch = batch_shape(self)
        blood = ALVEOLAR_CONSTANT * self.co2_solubility_per_mmhg * self.cardiac_output_l_min / SECONDS_PER_MINUTE
        lung = blood / self.lung_volume_l
        tissue = self.cardiac_output_l_min / SECONDS_PER_MINUTE / self.tissue_volume_l
        washout = self.alveolar_share / SECONDS_PER_MINUTE / self.lung_volume_l
        plant = np.zeros((2, 2, *batch))
        plant[0, 0], plant[0, 1], plant[1, 0], plant[1, 1] = -lung, lung, tissue, -tissue
        by_output = np.zeros((2, 2, *batch))
        by_output[0, 0] = -washout
        input_vector = np.zeros((2, *batch))
        input_vector[0] = washout * self.inspired_pco2_mmhg
        constant = np.zeros((2, *batch))
        constant[1] = self.co2_production_l_min / SECONDS_PER_MINUTE / (self.tissue_volume_l * self.co2_solubility_per_mmhg)
        control = np.zeros((1, 1, *batch)) - 1.0 / self.central_time_constant_s
        by_sensed = np.zeros((1, 2, *batch))
        by_sensed[0, 1] = 1.0 / self.central_time_constant_s
        rest_output = self.line_ventilation
        channels = {
            "sigh": Channel(output=1.0, unit="L/min"),
            "arousal": Channel(drive=1.0, unit="L/min"),
        }
        if not batch:
            channels["inspired_pco2"] = Channel(plant_by_output=np.array([float(washout), 0.0]), unit="mmHg")
        return DriveForm(
            plant_names=("PaCO2", "PvCO2"),
            control_names=("central PCO2",),
            plant=plant,
            plant_by_output=by_output,
            input_vector=input_vector,
            constant=constant,
            sensed_rows=np.array([[1.0, 0.0], [1.0, 0.0]]),
            sensed_delays=(self.peripheral_delay_s, self.central_delay_s),
            control=control,
            control_by_sensed=by_sensed,
            control_constant=np.zeros((1, *batch)),
            drive=self._drive(),
            channels=channels,
            silent_level=_SIGMOID_APNOEA_SHARE * rest_output if self.drive_shape == "sigmoid" else 0.0,
        )

    def signals(self, states: Array, output: Array) -> tuple[Signal, ...]:
        return (
            Signal("ventilation", "Ventilation", "L/min", output),
            Signal("paco2", "PaCO2", "mmHg", states[:, 0]),
            Signal("pvco2", "Mixed venous PCO2", "mmHg", states[:, 1]),
            Signal("central_pco2", "Central chemoreceptor PCO2", "mmHg", states[:, 2]),
        )

    def co2_reserve_mmhg(self) -> Any:
        """Eupnoeic PaCO2 minus the apnoeic threshold, mmHg: V_E / (S_p g + S_c) on the line through the rest."""
        return self.rest().output / self.sensitivity
