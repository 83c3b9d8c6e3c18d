"""The likelihood of a fit: what was measured against what a loop would show, each in standard errors.

Where a model does not cycle, or its ventilation does not stop, a feature must still say which way is better: the duty ratio is carried on
over 1 the shallower the waning is, and a loop that should hunt and does not (or the reverse) is charged by its loop gain. Cycles
without apnoea are those of a loop on its boundary: there the formula of the duty ratio, LG = 2 pi/(2 pi DR - sin 2 pi DR), gives 1 as well
(Sands et al. 2011, AJRCCM 184:1067).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lagscape.engine.harmonic import Harmonics
from lagscape.loops.protocol import Array
from lagscape.questions.fit_forward import Shown, shown_by
from lagscape.questions.fit_measured import (
    CYCLE_ERROR,
    DROP_ERROR,
    DROP_OFFSET,
    DUTY_ERROR,
    LAG_ERROR_S,
    LEAST_CYCLE,
    LEAST_DROP,
    LEAST_DUTY,
    LEAST_LAG_S,
    LEAST_RINGING,
    RINGING_CYCLE_ERROR,
    RINGING_DAMPING_ERROR,
    WEAK_CYCLE_ERROR,
    WEAK_DAMPING_ERROR,
    Measured,
    error_of,
)
from lagscape.questions.fit_posterior import Evaluated
from lagscape.questions.fit_prior import Prior
from lagscape.recordings.breathing_result import Spread

__all__ = ["Feature", "Likelihood", "features_of"]

_SURE = 0.03
"""Of ln(loop gain), one standard error of a loop that should hunt, with apnoea, and does not."""
_BOUNDARY = 0.10
"""Of ln(loop gain) about 0 for cycles without apnoea, which noise can keep going a little inside the boundary, and for a loop that rings
down and so should not hunt (common practice, no source)."""


@dataclass(frozen=True)
class Feature:
    """One measured feature as the fit reads it."""

    name: str
    label: str
    unit: str
    measured: float
    error: float
    """One standard error, the model's own included, in `unit`."""


@dataclass(frozen=True)
class Likelihood:
    """Misfits of any points of a prior."""

    prior: Prior
    measured: Measured
    features: tuple[Feature, ...]

    def values(self, shown: Shown, points: Array) -> dict[str, Array]:
        """Feature name to what the loops show, shape (n,), in the feature's unit."""
        sensor = np.asarray(self.prior.numbers(points)["sensor_delay_s"], dtype=float)
        return {
            "cycle_length_s": shown.cycle_length_s,
            "duty_ratio": shown.duty_ratio,
            "lag_s": sensor + shown.turn_s,
            "saturation_drop": shown.saturation_drop,
            "period_s": shown.oscillation_s,
            "damping_ratio": shown.damping_ratio,
        }

    def shown(self, points: Array, start: Harmonics | None = None) -> Shown:
        """What the loops at these points would show."""
        rings = self.measured.ring_down is not None
        asks = self.measured.saturation_drop is not None or self.measured.lag_s is not None
        return shown_by(self.prior.builder(points), points.shape[0], start=start, oxygen=asks, ringing=rings, cycles=not rings)

    def __call__(self, points: Array, start: Harmonics | None = None) -> Evaluated:
        shown = self.shown(points, start)
        values = self.values(shown, points)
        columns = []
        for feature in self.features:
            value, aim, error = values[feature.name], feature.measured, feature.error
            if feature.name in ("cycle_length_s", "period_s"):
                # A loop that does not oscillate at all is far away, whatever the period.
                columns.append(np.log(np.where(value > 0.0, value, 10.0 * aim) / aim) / (error / aim))
            elif feature.name == "saturation_drop":
                columns.append(np.log((value + DROP_OFFSET) / (aim + DROP_OFFSET)) / (error / (aim + DROP_OFFSET)))
            else:
                columns.append((value - aim) / error)
        columns.append(self._wrong_side(shown))
        residuals = np.stack(columns, axis=1)
        residuals = np.where(np.isfinite(residuals), residuals, 1e3)
        return Evaluated(residuals, shown.possible, shown.harmonics, shown.loop_gain)

    def _wrong_side(self, shown: Shown) -> Array:
        """How far a loop that should hunt settles, or the reverse, in standard errors."""
        log_gain = np.log(np.maximum(shown.loop_gain, 1e-6))
        if self.measured.ring_down is not None:
            return np.where(shown.hunts, np.maximum(log_gain, 0.0), 0.0) / _BOUNDARY
        if self.measured.duty_ratio is None:
            return np.asarray(log_gain / _BOUNDARY)
        return np.where(shown.hunts, 0.0, np.minimum(log_gain, 0.0)) / _SURE


def features_of(measured: Measured) -> tuple[Feature, ...]:
    """The measured features with their standard errors."""
    found = []
    if measured.cycle_length_s is not None:
        found.append(_relative("cycle_length_s", "Cycle length", "s", measured.cycle_length_s, LEAST_CYCLE, CYCLE_ERROR))
    if measured.duty_ratio is not None:
        spread = measured.duty_ratio
        found.append(Feature("duty_ratio", "Duty ratio", "", spread.median, error_of(spread, LEAST_DUTY, DUTY_ERROR)))
    if measured.lag_s is not None:
        spread = measured.lag_s
        found.append(Feature("lag_s", "Lag of the saturation", "s", spread.median, error_of(spread, LEAST_LAG_S, LAG_ERROR_S)))
    if measured.saturation_drop is not None:
        spread = measured.saturation_drop
        size = spread.median + DROP_OFFSET
        error = error_of(spread, LEAST_DROP * spread.median, DROP_ERROR * size)
        found.append(Feature("saturation_drop", "Drop of the saturation", "% points", spread.median, error))
    if measured.ring_down is not None:
        weak = measured.ring_down.source == "variability"
        length, damping = (WEAK_CYCLE_ERROR, WEAK_DAMPING_ERROR) if weak else (RINGING_CYCLE_ERROR, RINGING_DAMPING_ERROR)
        found.append(_relative("period_s", "Period of the ring-down", "s", measured.ring_down.period_s, LEAST_RINGING, length))
        spread = measured.ring_down.damping_ratio
        found.append(Feature("damping_ratio", "Damping ratio", "", spread.median, error_of(spread, LEAST_RINGING, damping)))
    return tuple(found)


def _relative(name: str, label: str, unit: str, spread: Spread, least: float, model: float) -> Feature:
    return Feature(name, label, unit, spread.median, error_of(spread, least * spread.median, model * spread.median))
