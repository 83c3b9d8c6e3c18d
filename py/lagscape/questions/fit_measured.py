"""What a recording gave, ready for a fit: each feature with its median, how well it is known, and how far a model may be trusted.

The standard error of a feature joins two parts. The median's own, 1.2533 s / sqrt(n) with s from the quartiles as for a normal law (the
asymptotic standard error of a median). And the model's: the loop is smooth, its person is steady, its oximeter does not average, so that
even the true loop would not show exactly this. Model errors are stated below; common practice, no source.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal

from lagscape.case.clinic_numbers import FINGER_SHARE
from lagscape.errors import InvalidInputError
from lagscape.recordings.breathing_result import BreathingMeasurement, Spread
from lagscape.recordings.saturation_lag import SaturationLag

__all__ = ["SITES", "Measured", "RingDown", "error_of", "measured_from"]

CYCLE_ERROR = 0.03
"""Of the cycle length, as a share."""
DUTY_ERROR = 0.03
"""Of the duty ratio: the edges of ventilation are read from an envelope that breaths blur."""
LAG_ERROR_S = 2.0
"""Of the lag: an oximeter averages over some seconds."""
DROP_ERROR, DROP_OFFSET = 0.20, 1.0
"""Of the drop of saturation plus one % point, as a share: averaging flattens it, and readings come in whole percents."""
RINGING_CYCLE_ERROR, RINGING_DAMPING_ERROR = 0.06, 0.08
"""Of the period (as a share) and the damping ratio of a ring-down after sighs or arousals."""
WEAK_CYCLE_ERROR, WEAK_DAMPING_ERROR = 0.15, 0.20
"""The same from spontaneous variability, where the noise that drives breathing shapes the spectrum as the loop does."""

LEAST_CYCLE, LEAST_DUTY, LEAST_LAG_S, LEAST_DROP = 0.05, 0.03, 2.0, 0.15
"""Least standard deviation from cycle to cycle (the first and last as a share): quartiles of a few cycles say too little."""

LEAST_RINGING = 0.10
"""The same from one ring-down to the next, of its period (as a share) and of its damping ratio."""

Site = Literal["ear", "finger"]

SITES: dict[str, tuple[float, float]] = {"ear": (1.0, 0.15), "finger": (FINGER_SHARE, 0.25)}
"""Where the oximeter sits: the loop's delay over the time to it, and one standard deviation of the logarithm (see `clinic_numbers`)."""

_MEDIAN = 1.2533
_QUARTILES = 2.0 * 0.6745


@dataclass(frozen=True)
class RingDown:
    """How a loop that does not hunt dies away after a push."""

    period_s: Spread
    """Of the oscillation that dies, s."""
    damping_ratio: Spread
    """-Re(root) / |root|: 0 on the boundary, 0.43 where a disturbance falls under 5 % in one cycle."""
    source: Literal["events", "variability"] = "events"
    """After sighs or arousals, or from the breathing's own restlessness, which says far less."""

    @property
    def frequency(self) -> float:
        """Natural frequency |root| in rad/s, of the medians."""
        return 2.0 * math.pi / self.period_s.median / math.sqrt(max(1.0 - self.damping_ratio.median**2, 1e-6))

    @property
    def strength(self) -> str:
        """How much this says, in a sentence."""
        if self.source == "variability":
            return (
                "Read from the restlessness of quiet breathing alone. That is weak: whatever stirs breathing leaves its own mark on the "
                "spectrum. The damping ratio may be off by 0.2, and a loop that settles at once looks as if it rang. Sighs or arousals "
                "would say more."
            )
        if self.damping_ratio.n < 3:
            return "Read from fewer than three sighs or arousals, so it is rough."
        return f"Read from {self.damping_ratio.n} sighs or arousals."


@dataclass(frozen=True)
class Measured:
    """What was measured in one stretch of recording. None where a feature was not. Either a cycle or a ring-down, not both."""

    cycle_length_s: Spread | None = None
    duty_ratio: Spread | None = None
    """Above 0 and under 1; None where the wane is a hypopnoea."""
    hypopnoea: bool = False
    """The cycle wanes without apnoea: the loop stands on its boundary, within the model's error."""
    lag_s: Spread | None = None
    """From the end of apnoea to the turn of the saturation at the oximeter, s."""
    lag_site: Site = "finger"
    saturation_drop: Spread | None = None
    """Depth of the swing of SpO2, % points."""
    ring_down: RingDown | None = None

    def check(self) -> None:
        """Refuse what no fit can use.

        Raises
        ------
        InvalidInputError
            The sentence names the rule and what came.
        """
        if self.cycle_length_s is None and self.ring_down is None:
            raise InvalidInputError(
                "A fit needs a measured cycle length or a ring-down; got neither. Choose a window with periodic breathing, or mark sighs "
                "or arousals in quiet breathing."
            )
        if self.cycle_length_s is not None and self.ring_down is not None:
            raise InvalidInputError("A stretch either cycles or rings down; got both. Fit one stretch at a time.")
        if self.ring_down is not None and any(item is not None for item in (self.duty_ratio, self.lag_s, self.saturation_drop)):
            raise InvalidInputError("A ring-down comes without duty ratio, lag and drop of saturation; leave them out.")
        if self.cycle_length_s is not None and (self.duty_ratio is None) is not self.hypopnoea:
            came = "neither" if self.duty_ratio is None else "both"
            raise InvalidInputError(f"A cycle has a duty ratio, or else its wanes are hypopnoeas; got {came}. Say which it is.")
        if self.duty_ratio is None and (self.lag_s is not None or self.saturation_drop is not None):
            raise InvalidInputError("Lag and drop of the saturation are read about an apnoea, so they need a duty ratio; got none.")
        if self.lag_site not in SITES:
            raise InvalidInputError(f"The oximeter's site must be one of {', '.join(SITES)}; got {self.lag_site!r:.40}.")
        _check("Cycle length", self.cycle_length_s, 0.0, 600.0, "s")
        _check("Duty ratio", self.duty_ratio, 0.0, 1.0, "")
        _check("Lag", self.lag_s, 0.0, 300.0, "s")
        _check("Drop of saturation", self.saturation_drop, 0.0, 100.0, "% points")
        if self.ring_down is not None:
            _check("Period of the ring-down", self.ring_down.period_s, 0.0, 600.0, "s")
            _check("Damping ratio", self.ring_down.damping_ratio, -1.0, 1.0, "")


def measured_from(breathing: BreathingMeasurement, saturation: SaturationLag | None = None, site: Site = "finger") -> Measured:
    """What the recording's cycles give a fit.

    Raises
    ------
    InvalidInputError
        If there are no cycles.
    """
    if not breathing.is_periodic:
        raise InvalidInputError("No periodic breathing was found in this window; mark sighs or arousals, or choose another window.")
    duty = breathing.duty_ratio
    # Where most wanes are hypopnoeas the few apnoeas are no pattern.
    duty = duty if duty is not None and 2 * duty.n >= len(breathing.used) else None
    usable = saturation if duty is not None else None
    return Measured(
        cycle_length_s=breathing.cycle_length_s,
        duty_ratio=duty,
        hypopnoea=duty is None,
        lag_s=None if usable is None else usable.lag_s,
        lag_site=site,
        saturation_drop=None if usable is None else usable.drop,
    )


def error_of(spread: Spread, least: float, model: float) -> float:
    """Standard error of a median with the model's own error, in the spread's unit.

    Parameters
    ----------
    spread : Spread
    least : float
        Least standard deviation of a single value that is believed.
    model : float
        One standard deviation of the model's error.
    """
    single = max((spread.upper_quartile - spread.lower_quartile) / _QUARTILES, least)
    return math.hypot(_MEDIAN * single / math.sqrt(spread.n), model)


def _check(what: str, spread: Any, low: float, high: float, unit: str) -> None:
    if spread is None:
        return
    values = (spread.median, spread.lower_quartile, spread.upper_quartile)
    rule = f"{what} must lie between {low:g} and {high:g}{' ' + unit if unit else ''}, with quartiles in order and one value or more"
    ordered = spread.lower_quartile <= spread.median <= spread.upper_quartile
    if not all(math.isfinite(value) for value in values) or not ordered or spread.n < 1 or not low < spread.median < high:
        raise InvalidInputError(f"{rule}; got {values[1]:.4g}, {values[0]:.4g}, {values[2]:.4g} of {spread.n}.")
