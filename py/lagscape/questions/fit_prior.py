"""What is known of a loop before its recording is looked at: every number's law, and the plain space in which a fit works.

A point u of independent standard normal numbers stands for one loop: z = C u, then value exp(spread z) or value + spread z, cut to the
number's range, as in `certainty`. Three things differ from independent draws, because they go together in one person: the two delays of
the loop (same heart, nearly the same way) are correlated unless one was measured, and an oximeter's delay that nobody typed follows the
loop's delay by the ratio for its site.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.case.parameters import Basis
from lagscape.loops.protocol import Array
from lagscape.loops.register import LOOPS
from lagscape.questions.fit_measured import SITES, Measured
from lagscape.questions.many import Index

__all__ = ["DELAYS", "GAINS", "Prior", "prior_of"]

DELAYS = ("peripheral_delay_s", "central_delay_s")
GAINS = ("peripheral_gain_l_min_mmhg", "central_gain_l_min_mmhg")
_SENSOR = "sensor_delay_s"

DELAY_CORRELATION = 0.8
"""Between the logarithms of the two delays among persons (common practice, no source)."""


@dataclass(frozen=True)
class Prior:
    """The law of a case's numbers before the recording."""

    case: Case
    names: tuple[str, ...]
    """Numbers that the recording can speak of, one a coordinate; the others stay at the case's value."""
    factor: Array
    """C, shape (d, d), lower triangular."""
    sensor_ratio: tuple[float, float] | None
    """Oximeter's delay over the loop's, and its spread (of the logarithm), where nobody typed the oximeter's."""

    @property
    def size(self) -> int:
        return len(self.names)

    def spread(self, name: str) -> float:
        """One standard deviation of a number, as its specification gives it: of the logarithm or in its unit."""
        if name == _SENSOR and self.sensor_ratio is not None:
            return float(np.hypot(self.sensor_ratio[1], self.spread(DELAYS[0]) if DELAYS[0] in self.names else 0.0))
        return self.case.spread(name)

    def centre(self, name: str) -> float:
        """A number's most plausible value before the recording."""
        if name == _SENSOR and self.sensor_ratio is not None:
            item = self.case.specifications[name]
            return float(np.clip(self.sensor_ratio[0] * self.case.value(DELAYS[0]), item.minimum, item.maximum))
        return self.case.value(name)

    def is_lognormal(self, name: str) -> bool:
        return self.case.specifications[name].distribution == "lognormal"

    def numbers(self, points: Array) -> dict[str, Any]:
        """Number name to values, shape (n,), of points of shape (n, d); a float where the number is not asked of."""
        normal = points @ self.factor.T
        drawn: dict[str, Any] = {name: number.value for name, number in self.case.numbers.items()}
        for index, name in enumerate(self.names):
            item, z = self.case.specifications[name], normal[:, index]
            if name == _SENSOR and self.sensor_ratio is not None:
                ratio, spread = self.sensor_ratio
                raw = drawn[DELAYS[0]] * ratio * np.exp(spread * z)
            elif self.is_lognormal(name):
                raw = self.case.value(name) * np.exp(self.case.spread(name) * z)
            else:
                raw = self.case.value(name) + self.case.spread(name) * z
            drawn[name] = np.clip(raw, item.minimum, item.maximum)
        return drawn

    def builder(self, points: Array) -> Any:
        """From an index array to the batch of loops at those points."""
        drawn = self.numbers(points)

        def build(which: Index) -> Any:
            values = {name: value[which] if np.ndim(value) else value for name, value in drawn.items()}
            return LOOPS[self.case.kind](**values, **self.case.choices)

        return build


def prior_of(case: Case, measured: Measured) -> Prior:
    """The prior of a breathing case for these features."""
    names = tuple(name for name in _asked(case, measured) if _can_move(case, name))
    factor = np.eye(len(names))
    loose = all(name in names and case.numbers[name].basis is not Basis.MEASURED for name in DELAYS)
    if loose:
        first, second = sorted(names.index(name) for name in DELAYS)
        factor[second, first] = DELAY_CORRELATION
        factor[second, second] = np.sqrt(1.0 - DELAY_CORRELATION**2)
    ratio = None
    if _SENSOR in names and case.numbers[_SENSOR].basis is Basis.TYPICAL:
        share, spread = SITES[measured.lag_site]
        ratio = (1.0 / share, spread)
    return Prior(case, names, factor, ratio)


def _asked(case: Case, measured: Measured) -> list[str]:
    """Numbers that can change what was measured. Air, its CO2 and its pressure are known as they stand."""
    oxygen = case.choices["gases"] == "co2_o2"
    unused = {"inspired_pco2_mmhg", "inspired_o2_fraction", "barometric_pressure_mmhg"}
    if not oxygen:
        unused.add("alveolar_arterial_difference_mmhg")
        if measured.saturation_drop is None:
            unused.add("respiratory_quotient")
    else:
        unused.add("arterial_po2_mmhg")
    if case.choices["drive_shape"] != "sigmoid":
        unused.add("largest_ventilation_l_min")
    if measured.lag_s is None:
        unused.add(_SENSOR)
    # The oximeter's delay comes last, because it may follow the loop's.
    return [name for name in case.numbers if name not in unused and name != _SENSOR] + [_SENSOR] * (_SENSOR not in unused)


def _can_move(case: Case, name: str) -> bool:
    return case.spread(name) > 0.0 and not (case.specifications[name].distribution == "lognormal" and case.value(name) == 0.0)
