"""The breathing loop with both gases: lung O2 as a plant state, and a peripheral drive that low oxygen multiplies.

    oxygen   V_L dPaO2/dt = E V_E (PIO2 - D - PaO2) - 863 VCO2 k - 863 Q s (PaO2 - PaO2*)        D: alveolar-arterial difference
    drive    V_E = max(0, S_p g(PaO2(t - tau_p)) (Pa(t - tau_p) - B) + S_c (Pc - B)),   B = P_line - V_line / (S_p g_line + S_c)
    rest     E V_E (Pa - P_I) = 863 VCO2,   PaO2* = PIO2 - D - k (Pa - P_I),   k = (1 - F (1 - R)) / R  (alveolar gas equation)

The lines of ventilation on CO2 at different PaO2 fan out from the apnoeic threshold B, so that hypoxia multiplies the peripheral drive
itself. At the line's own PaO2 this is the line of the form without oxygen; the sigmoid reads the same line.

Blood takes up O2 by its content. The mixed venous content is held at its resting value, since its store (a minute's flow and more)
hardly follows a cycle, and the arterial content by its slope s at rest: as PaO2 falls, less is taken up. One slope is for small
swings: from the flat part of the curve a deep fall of PaO2 is slower in truth than here.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.loops.breathing_drive import SigmoidDrive, ThresholdDrive
from lagscape.loops.gases import (
    HYPOXIC_RATE,
    LOWEST_PRESSURE,
    hypoxic_multiplier,
    inspired_po2_mmhg,
    oxygen_content_slope,
    oxygen_loss,
    saturation,
)
from lagscape.loops.protocol import Array, Channel, DriveForm, Rest, Signal, batch_shape
from lagscape.units import ALVEOLAR_CONSTANT, SECONDS_PER_MINUTE

__all__ = [
    "OxygenSigmoidDrive",
    "OxygenThresholdDrive",
    "drive_with_oxygen",
    "form_with_oxygen",
    "line_po2_mmhg",
    "oxygen_signals",
    "rest_with_oxygen",
]

_HALVINGS = 80
_HIGHEST_PACO2 = 200.0
"""mmHg: nobody lives there; a drive that is met only beyond it counts as none."""


@dataclass(frozen=True)
class _OxygenDrive:
    """A drive on CO2, pushed by what the PaO2 makes of its peripheral part: S_p (g(PaO2) - g_line) (Pa - B)."""

    on_co2: Any
    peripheral: Any
    """S_p at a PaO2 of 100 mmHg, L/min/mmHg."""
    line_multiplier: Any
    """g at the line's PaO2."""
    threshold: Any
    """B, mmHg."""

    def _push(self, sensed: Array, push: Any) -> Array:
        return push + self.peripheral * (hypoxic_multiplier(sensed[2]) - self.line_multiplier) * (sensed[0] - self.threshold)

    def switch(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return self.on_co2.switch(sensed, control, self._push(sensed, push))

    def value(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        return self.on_co2.value(sensed, control, self._push(sensed, push))

    def gradient(self, sensed: Array, control: Array, push: Any = 0.0) -> Array:
        whole = self._push(sensed, push)
        by_co2 = self.on_co2.gradient(sensed, control, whole)
        by_push = self.on_co2.push_slope(sensed, control, whole)
        multiplier = hypoxic_multiplier(sensed[2])
        falls = -HYPOXIC_RATE * multiplier * (np.asarray(sensed[2]) > LOWEST_PRESSURE)
        return np.stack(
            np.broadcast_arrays(
                by_co2[0] + by_push * self.peripheral * (multiplier - self.line_multiplier),
                by_co2[1],
                by_push * self.peripheral * falls * (sensed[0] - self.threshold),
                by_co2[2],
            )
        )

    def scalar(self, sensed: tuple[float, ...], control: tuple[float, ...], push: float) -> float:
        multiplier = math.exp(-HYPOXIC_RATE * (max(sensed[2], LOWEST_PRESSURE) - 100.0))
        whole = push + self.peripheral * (multiplier - self.line_multiplier) * (sensed[0] - self.threshold)
        return float(self.on_co2.scalar(sensed, control, whole))


@dataclass(frozen=True)
class OxygenThresholdDrive(_OxygenDrive):
    """The threshold line at each PaO2; all of them meet at B."""

    has_kink: ClassVar[bool] = True


@dataclass(frozen=True)
class OxygenSigmoidDrive(_OxygenDrive):
    """The sigmoid of the pressure at which the line of the resting PaO2 would read what the line of this PaO2 reads."""

    has_kink: ClassVar[bool] = False


def line_po2_mmhg(loop: Any) -> Any:
    """PaO2 in mmHg that belongs to the loop's line: the one it was fixed at, else by the alveolar gas equation at its resting PaCO2."""
    if loop.line_po2_mmhg is not None:
        return loop.line_po2_mmhg
    return _arterial_po2(loop, loop.resting_paco2_mmhg)


def drive_with_oxygen(loop: Any) -> OxygenThresholdDrive | OxygenSigmoidDrive:
    """The loop's drive; see the module."""
    multiplier = hypoxic_multiplier(line_po2_mmhg(loop))
    peripheral, central = loop.peripheral_gain_l_min_mmhg, loop.central_gain_l_min_mmhg
    line = (loop.line_ventilation, loop.resting_paco2_mmhg, peripheral * multiplier, central)
    threshold = loop.resting_paco2_mmhg - loop.line_ventilation / (peripheral * multiplier + central)
    if loop.drive_shape == "sigmoid":
        return OxygenSigmoidDrive(SigmoidDrive(*line, loop.largest_ventilation_l_min), peripheral, multiplier, threshold)
    return OxygenThresholdDrive(ThresholdDrive(*line), peripheral, multiplier, threshold)


def rest_with_oxygen(loop: Any) -> Rest:
    """Where drive, CO2 and O2 agree: at the line's own point, or, for a line fixed before the plant changed, where they meet.

    Raises
    ------
    InvalidInputError
        If the arterial PO2 at rest is not above zero, or the drive never reaches what the CO2 production asks for.
    """
    load = ALVEOLAR_CONSTANT * loop.co2_production_l_min / loop.alveolar_share
    if loop.line_ventilation_l_min is None:
        pressure, ventilation = loop.resting_paco2_mmhg, loop.line_ventilation
    else:
        pressure = _resting_pco2(loop, load)
        ventilation = load / (pressure - loop.inspired_pco2_mmhg)
    oxygen = _arterial_po2(loop, pressure)
    if not np.all(np.asarray(oxygen) > 0.0):
        raise InvalidInputError(
            f"These numbers leave an arterial PO2 of {float(np.min(oxygen)):.3g} mmHg at rest, and it must be above 0: the inspired "
            f"PO2 is {float(np.min(_inspired(loop))):.3g} mmHg and the PaCO2 {float(np.max(pressure)):.3g} mmHg. Raise the inspired "
            "oxygen or the barometric pressure, or lower the PaCO2 or the alveolar-arterial difference."
        )
    venous = pressure + loop.co2_production_l_min / (loop.co2_solubility_per_mmhg * loop.cardiac_output_l_min)
    state = np.stack(np.broadcast_arrays(pressure, venous, oxygen, pressure)).astype(float)
    if state.ndim == 1:
        ventilation = float(ventilation)
    return Rest(state, ventilation)


def form_with_oxygen(loop: Any, channels: Mapping[str, Channel], silent_level: Any) -> DriveForm:
    """The loop as matrices with the plant (PaCO2, PvCO2, PaO2)."""
    rest = rest_with_oxygen(loop)
    batch = batch_shape(loop)
    flow, volume = loop.cardiac_output_l_min / SECONDS_PER_MINUTE, loop.lung_volume_l
    lung = ALVEOLAR_CONSTANT * loop.co2_solubility_per_mmhg * flow / volume
    tissue = flow / loop.tissue_volume_l
    washout = loop.alveolar_share / SECONDS_PER_MINUTE / volume
    uptake = ALVEOLAR_CONSTANT * flow * oxygen_content_slope(rest.state[2]) / volume
    spent = ALVEOLAR_CONSTANT * loop.co2_production_l_min * _loss(loop) / SECONDS_PER_MINUTE / volume
    plant = np.zeros((3, 3, *batch))
    plant[0, 0], plant[0, 1], plant[1, 0], plant[1, 1], plant[2, 2] = -lung, lung, tissue, -tissue, -uptake
    by_output = np.zeros((3, 3, *batch))
    by_output[0, 0] = by_output[2, 2] = -washout
    input_vector = np.zeros((3, *batch))
    input_vector[0] = washout * loop.inspired_pco2_mmhg
    input_vector[2] = washout * (_inspired(loop) - loop.alveolar_arterial_difference_mmhg)
    constant = np.zeros((3, *batch))
    constant[1] = loop.co2_production_l_min / SECONDS_PER_MINUTE / (loop.tissue_volume_l * loop.co2_solubility_per_mmhg)
    constant[2] = uptake * rest.state[2] - spent
    follows = 1.0 / loop.central_time_constant_s
    control = np.zeros((1, 1, *batch)) - follows
    by_sensed = np.zeros((1, 3, *batch))
    by_sensed[0, 1] = follows
    named = dict(channels)
    if not batch:
        named["inspired_pco2"] = Channel(plant_by_output=np.array([float(washout), 0.0, 0.0]), unit="mmHg")
        named["inspired_po2"] = Channel(plant_by_output=np.array([0.0, 0.0, float(washout)]), unit="mmHg")
    return DriveForm(
        plant_names=("PaCO2", "PvCO2", "PaO2"),
        control_names=("central PCO2",),
        plant=plant,
        plant_by_output=by_output,
        input_vector=input_vector,
        constant=constant,
        sensed_rows=np.array([[1.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]]),
        sensed_delays=(loop.peripheral_delay_s, loop.central_delay_s, loop.peripheral_delay_s),
        control=control,
        control_by_sensed=by_sensed,
        control_constant=np.zeros((1, *batch)),
        drive=drive_with_oxygen(loop),
        channels=named,
        silent_level=silent_level,
    )


def oxygen_signals(loop: Any, arterial_po2: Array, times: Array | None) -> tuple[Signal, ...]:
    """PaO2 and its saturation where the blood leaves the lung and, where the times (s) are given, SpO2 as the sensor shows it.

    The sensor shows the blood of `sensor_delay_s` ago; before the run it was at its first value.
    """
    curves = [
        Signal("pao2", "PaO2", "mmHg", arterial_po2),
        Signal("sao2", "Arterial O2 saturation", "%", 100.0 * saturation(arterial_po2)),
    ]
    if times is not None:
        seen = np.interp(np.asarray(times) - float(loop.sensor_delay_s), times, arterial_po2)
        curves.append(Signal("spo2", "SpO2", "%", 100.0 * saturation(seen)))
    return tuple(curves)


def _inspired(loop: Any) -> Any:
    return inspired_po2_mmhg(loop.inspired_o2_fraction, loop.barometric_pressure_mmhg)


def _loss(loop: Any) -> Any:
    return oxygen_loss(loop.inspired_o2_fraction, loop.respiratory_quotient)


def _arterial_po2(loop: Any, pressure: Any) -> Any:
    alveolar = _inspired(loop) - (pressure - loop.inspired_pco2_mmhg) * _loss(loop)
    return alveolar - loop.alveolar_arterial_difference_mmhg


def _resting_pco2(loop: Any, load: Any) -> Array:
    """PaCO2 where a fixed controller meets the plant, by halving: more CO2 goes with less O2, and both drive."""
    drive = drive_with_oxygen(loop)
    inspired = loop.inspired_pco2_mmhg

    def enough(pressure: Array) -> Array:
        sensed = np.stack(np.broadcast_arrays(pressure, pressure, _arterial_po2(loop, pressure)))
        return drive.value(sensed, sensed[:1]) * (pressure - inspired) > load

    low = np.zeros(batch_shape(loop)) + inspired
    high = np.maximum(loop.resting_paco2_mmhg, low + load / loop.line_ventilation)
    reached = enough(high)
    if not np.all(reached):
        high = np.where(reached, high, np.maximum(high, _HIGHEST_PACO2))
        if not np.all(enough(high)):
            raise InvalidInputError(
                f"With these levers the drive to breathe does not meet the CO2 production below a PaCO2 of {_HIGHEST_PACO2:.0f} mmHg, "
                "so the loop has no rest. Give less oxygen, or keep more of the chemoreflex gain."
            )
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        above = enough(middle)
        low, high = np.where(above, low, middle), np.where(above, middle, high)
    return 0.5 * (low + high)
