"""The breathing loop: lungs, body stores and the two chemoreflexes, in clinical units.

    lung     V_L dPa/dt = 863 beta Q (Pv - Pa) - E V_E (Pa - P_I)
    tissue   V_T 863 beta dPv/dt = 863 VCO2 - 863 beta Q (Pv - Pa)
    central  T_c dPc/dt = Pa(t - tau_c) - Pc
    drive    V_E = max(0, V_line + S_p g (Pa(t - tau_p) - P_line) + S_c (Pc - P_line)), or a sigmoid of the same point and slope
    rest     E V_E (Pa - P_I) = 863 VCO2                                                (alveolar ventilation equation)

g = exp(-0.05 (PaO2 - 100)) multiplies the peripheral gain (secondary sources only). The line passes through the person's own
eupnoeic point (P_line, V_line); a change of the plant moves the rest along it. Pressures in mmHg, volumes in L, flows in L/min.

With the choice gases = "co2_o2" PaO2 is a state of its own instead of a number: see `breathing_oxygen`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np

from lagscape.case.parameters import Choice, ParameterSpecification, StartingCase
from lagscape.errors import InvalidInputError
from lagscape.loops import breathing_numbers, breathing_oxygen
from lagscape.loops.breathing_drive import SigmoidDrive, ThresholdDrive
from lagscape.loops.gases import WATER_VAPOUR_MMHG, hypoxic_multiplier
from lagscape.loops.protocol import Array, Channel, DriveForm, Rest, Signal, batch_shape
from lagscape.units import ALVEOLAR_CONSTANT, SECONDS_PER_MINUTE

__all__ = ["BreathingLoop", "SigmoidDrive", "ThresholdDrive", "hypoxic_multiplier"]

_SIGMOID_APNOEA_SHARE = 0.1
"""A sigmoid never reaches zero; ventilation under a tenth of eupnoea counts as apnoea (common practice, no source)."""

_LARGEST_PAO2 = 600.0
"""mmHg: the largest PaO2 that its specification allows."""


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
    inspired_o2_fraction: Any = 0.2093
    barometric_pressure_mmhg: Any = 760.0
    respiratory_quotient: Any = 0.8
    alveolar_arterial_difference_mmhg: Any = 10.0
    sensor_delay_s: Any = 20.0
    drive_shape: str = "threshold"
    delays_follow_flow: str = "no"
    gases: str = "co2"
    line_ventilation_l_min: Any = None
    """V_line of a controller that was fixed before the plant changed; None puts the line through this loop's own rest."""
    line_po2_mmhg: Any = None
    """PaO2 that the line was fixed at, with both gases; None for a line that is not fixed, and with CO2 only."""

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
    def has_oxygen(self) -> bool:
        """Whether lung O2 is a state of its own."""
        return self.gases == "co2_o2"

    @property
    def resting_po2_mmhg(self) -> Any:
        """PaO2 at rest: the number typed, or with both gases by the alveolar gas equation."""
        if not self.has_oxygen:
            return self.arterial_po2_mmhg
        if self.line_ventilation_l_min is None:
            return breathing_oxygen.line_po2_mmhg(self)
        return self.rest().state[2]

    @property
    def effective_peripheral_gain(self) -> Any:
        """S_p g(PaO2) at the resting PaO2, L/min/mmHg."""
        return self.peripheral_gain_l_min_mmhg * hypoxic_multiplier(self.resting_po2_mmhg)

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
        # With both gases a fixed line is turned about the loop's own rest: about any other point PaO2 would move with the gain.
        pivot = self._lined_through_rest() if self.has_oxygen and self.line_ventilation_l_min is not None else self
        factor = sensitivity / pivot.sensitivity
        return replace(
            pivot,
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

    def with_inspired_po2_rise(self, rise_mmhg: Any) -> BreathingLoop:
        """The same loop breathing gas whose PO2 is higher by so many mmHg, PaCO2 apart: PaO2 gains as much, or FIO2 what it takes."""
        if not self.has_oxygen:
            return self.with_numbers(arterial_po2_mmhg=np.minimum(self.arterial_po2_mmhg + rise_mmhg, _LARGEST_PAO2))
        richer = self.inspired_o2_fraction + rise_mmhg / (self.barometric_pressure_mmhg - WATER_VAPOUR_MMHG)
        return self.with_numbers(inspired_o2_fraction=np.minimum(richer, 1.0))

    def freeze_line(self) -> BreathingLoop:
        """The same loop whose controller stays where it is when the plant is changed afterwards."""
        line_po2 = breathing_oxygen.line_po2_mmhg(self) if self.has_oxygen else self.line_po2_mmhg
        return replace(self, line_ventilation_l_min=self.line_ventilation, line_po2_mmhg=line_po2)

    def _lined_through_rest(self) -> BreathingLoop:
        rest = self.rest()
        pressure, oxygen = (value if np.ndim(value) else float(value) for value in (rest.state[0], rest.state[2]))
        return replace(self, resting_paco2_mmhg=pressure, line_ventilation_l_min=rest.output, line_po2_mmhg=oxygen)

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
            If the inspired PCO2 is not below the resting PaCO2, the sigmoid's ceiling is below the resting ventilation, or, with
            both gases, no PaO2 above 0 is left.
        """
        self._check()
        if self.has_oxygen:
            return breathing_oxygen.rest_with_oxygen(self)
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
        channels = {"sigh": Channel(output=1.0, unit="L/min"), "arousal": Channel(drive=1.0, unit="L/min")}
        silent_level = _SIGMOID_APNOEA_SHARE * self.line_ventilation if self.drive_shape == "sigmoid" else 0.0
        if self.has_oxygen:
            return breathing_oxygen.form_with_oxygen(self, channels, silent_level)
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
            silent_level=silent_level,
        )

    def signals(self, states: Array, output: Array, times: Array | None = None) -> tuple[Signal, ...]:
        curves = (
            Signal("ventilation", "Ventilation", "L/min", output),
            Signal("paco2", "PaCO2", "mmHg", states[:, 0]),
            Signal("pvco2", "Mixed venous PCO2", "mmHg", states[:, 1]),
            Signal("central_pco2", "Central PCO2", "mmHg", states[:, -1]),
        )
        return (*curves, *breathing_oxygen.oxygen_signals(self, states[:, 2], times)) if self.has_oxygen else curves

    def co2_reserve_mmhg(self) -> Any:
        """Eupnoeic PaCO2 minus the apnoeic threshold, mmHg: V_E / (S_p g + S_c) on the line through the rest."""
        return self.rest().output / self.sensitivity
