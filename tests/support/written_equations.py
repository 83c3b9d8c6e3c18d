"""The three loops written out once more, by hand, from the design's equations: the oracle for `lagscape.loops`.

Plain Python floats, one line an equation, the clinic's own units inside (minutes for breathing). It shares no code with the package:
its constants are typed here, too. Each function takes the parameters by their public names and returns rates per second.
"""

from __future__ import annotations

import math

__all__ = ["breathing_drive", "breathing_rates", "plain_rates", "reflex_rates"]

CO2_CONSTANT = 863.0
GRAVITY = 9.80665


def plain_rates(p: dict[str, float], x: float, x_late: float, push: float = 0.0) -> tuple[float]:
    """x' = L - Vmax h(x_tau) x with h(u) = u^n / (theta^n + u^n), h = 0 for u <= 0."""
    u = x_late + push
    h = 0.0 if u <= 0.0 else 1.0 / (1.0 + math.exp(min(-p["exponent"] * math.log(u / p["half_level"]), 700.0)))
    return (p["production_per_s"] - p["largest_clearance_per_s"] * h * x,)


def breathing_drive(p: dict[str, float], shape: str, pa_peripheral: float, pc: float, push: float = 0.0) -> float:
    """V_E in L/min: the threshold line through (P0, V0), or the sigmoid with the line's point and slope.

    The sigmoid answers to the pressure at which the line would have the same drive, so both share the point and both slopes.
    """
    p0 = p["resting_paco2_mmhg"]
    v0 = CO2_CONSTANT * p["co2_production_l_min"] / ((1.0 - p["dead_space_fraction"]) * (p0 - p["inspired_pco2_mmhg"]))
    sp = p["peripheral_gain_l_min_mmhg"] * math.exp(-0.05 * (p["arterial_po2_mmhg"] - 100.0))
    sc = p["central_gain_l_min_mmhg"]
    line = v0 + sp * (pa_peripheral - p0) + sc * (pc - p0) + push
    if shape == "threshold":
        return max(0.0, line)
    s, vmax = sp + sc, p["largest_ventilation_l_min"]
    effective = p0 + (line - v0) / s
    if effective <= 0.0:
        return 0.0
    n = s * p0 / v0 / (1.0 - v0 / vmax)
    theta_to_n = (vmax / v0 - 1.0) * p0**n if n * abs(math.log(p0)) < 600.0 else math.inf
    if not math.isfinite(theta_to_n):
        return vmax / (1.0 + (vmax / v0 - 1.0) * math.exp(min(n * math.log(p0 / effective), 700.0)))
    return vmax * effective**n / (theta_to_n + effective**n)


def breathing_rates(p: dict[str, float], ventilation: float, pa: float, pv: float, pc: float, pa_central: float) -> tuple[float, ...]:
    """dPa/dt, dPv/dt, dPc/dt in mmHg/s. Lung and tissue are balanced per minute, the central lag per second."""
    beta, q = p["co2_solubility_per_mmhg"], p["cardiac_output_l_min"]
    share = 1.0 - p["dead_space_fraction"]
    lung_per_min = (CO2_CONSTANT * beta * q * (pv - pa) - share * ventilation * (pa - p["inspired_pco2_mmhg"])) / p["lung_volume_l"]
    tissue_per_min = (CO2_CONSTANT * p["co2_production_l_min"] - CO2_CONSTANT * beta * q * (pv - pa)) / (p["tissue_volume_l"] * CO2_CONSTANT * beta)
    central_per_s = (pa_central - pc) / p["central_time_constant_s"]
    return lung_per_min / 60.0, tissue_per_min / 60.0, central_per_s


def reflex_rates(
    p: dict[str, float], angle: float, speed: float, activation: float, activation_rate: float, angle_late: float, speed_late: float
) -> tuple[float, ...]:
    """Rates of angle, angular velocity, activation and its rate, with T = Tmax tanh and the bias that holds the load."""
    inertia = p["inertia_kg_m2"] + p["held_mass_kg"] * p["load_distance_m"] ** 2
    hold = p["held_mass_kg"] * GRAVITY * p["load_distance_m"]
    bias = math.atanh(hold / p["largest_torque_n_m"])
    torque = p["largest_torque_n_m"] * math.tanh(activation + bias)
    acceleration = (hold - torque - p["damping_n_m_s_rad"] * speed - p["stiffness_n_m_rad"] * angle) / inertia
    tau_m = p["activation_time_s"]
    stretch = p["reflex_gain_per_rad"] * (angle_late + p["velocity_sensitivity_s"] * speed_late)
    activation_acceleration = (stretch - activation - 2.0 * tau_m * activation_rate) / tau_m**2
    return speed, acceleration, activation_rate, activation_acceleration
