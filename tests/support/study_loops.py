"""The loops on which the simulation was studied: a relaxation cycle, three breathing loops from damped to apnoea, a limb; invented."""

from __future__ import annotations

from typing import Any

import numpy as np

from lagscape.engine.run import Run
from lagscape.engine.trace import Trace
from lagscape.loops.breathing import BreathingLoop
from lagscape.loops.plain import PlainLoop
from lagscape.loops.reflex import ReflexLoop

__all__ = ["apnoeic", "clipping", "damped", "difference", "limb", "plain", "run_of"]


def plain(**numbers: Any) -> PlainLoop:
    """Steep and late: a relaxation cycle of 25.5 s."""
    return PlainLoop(**{"production_per_s": 0.2, "largest_clearance_per_s": 0.8, "exponent": 8.0, "delay_s": 10.0, **numbers})


def _breathing(peripheral: float, central: float, **numbers: Any) -> BreathingLoop:
    return BreathingLoop(
        **{
            "co2_production_l_min": 0.2, "resting_paco2_mmhg": 40.0, "inspired_pco2_mmhg": 0.0, "dead_space_fraction": 0.0,
            "lung_volume_l": 3.0, "tissue_volume_l": 15.0, "cardiac_output_l_min": 5.0, "co2_solubility_per_mmhg": 0.0065,
            "peripheral_gain_l_min_mmhg": peripheral, "central_gain_l_min_mmhg": central, "peripheral_delay_s": 12.0,
            "central_delay_s": 17.0, "central_time_constant_s": 60.0, "arterial_po2_mmhg": 100.0, **numbers,
        }
    )  # fmt: skip


def damped(**numbers: Any) -> BreathingLoop:
    """Settles, and never stops."""
    return _breathing(0.5, 0.4, **numbers)


def clipping(**numbers: Any) -> BreathingLoop:
    """Hunts with short silences."""
    return _breathing(1.5, 1.0, **numbers)


def apnoeic(**numbers: Any) -> BreathingLoop:
    """Hunts, silent for nearly half of each cycle."""
    return _breathing(3.0, 1.0, **numbers)


def limb(**numbers: Any) -> ReflexLoop:
    """A light limb with a strong reflex, delay 30 ms: shakes."""
    return ReflexLoop(
        **{
            "inertia_kg_m2": 0.003, "damping_n_m_s_rad": 0.02, "stiffness_n_m_rad": 1.5, "activation_time_s": 0.03,
            "largest_torque_n_m": 0.05, "reflex_gain_per_rad": 80.0, "velocity_sensitivity_s": 0.01, **numbers,
        }
    ).with_delay(0.03)  # fmt: skip


def run_of(loop: Any, duration: float, offset: Any = 0.0, disturbances: Any = ()) -> Run:
    """A run for the solvers themselves, past the front's checks."""
    state = loop.rest().state
    return Run(loop.form(), state + offset, duration, tuple(disturbances), state)


def difference(trace: Trace, reference: Trace) -> float:
    """Largest difference of any state, as a share of that state's largest size."""
    size = np.maximum(np.abs(reference.states).max(axis=0), 1e-300)
    return float((np.abs(trace.states - reference.states).max(axis=0) / size).max())
