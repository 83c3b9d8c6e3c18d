"""How loop gain and growth rate answer to each number of a loop: derivatives, by implicit differentiation.

At the deciding phase crossover w, L(i w; p) is real; so dw/dp = -(d arg L/dp) / (d arg L/dw) and d ln|L|/dp follows. A root s of
1 + L(s; p) = 0 moves by ds/dp = -(dL/dp) / (dL/ds). Only the partial derivatives of L by p at a fixed point are taken by central differences,
of the exact open loop, with steps near the cube root of rounding; everything else is analytic.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from lagscape.engine.margins import Margins, margins
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.engine.roots import Roots, rightmost_roots
from lagscape.errors import InvalidInputError
from lagscape.loops.protocol import Loop

__all__ = ["ParameterSensitivity", "sensitivities"]

_RELATIVE_STEP = 2e-5
"""Central differences err by its square, 4e-10, and by rounding over it, 1e-11."""


@dataclass(frozen=True)
class ParameterSensitivity:
    """Derivatives by one number of the loop; None where the loop has no such figure."""

    name: str
    value: float
    loop_gain: float | None
    """d loop_gain / d number, 1 / the number's unit."""
    loop_gain_elasticity: float | None
    """d ln loop_gain / d ln number: 1 means 1 % more of the number gives 1 % more loop gain. 0 where the number is 0."""
    crossover_frequency: float | None
    """d w / d number, rad/s / the number's unit."""
    growth_rate: float | None
    """d growth rate of the dominant oscillation / d number, 1/s / the number's unit."""
    cycle_length: float | None
    """d period of the dominant oscillation / d number, s / the number's unit."""


def sensitivities(
    loop: Loop, names: Sequence[str], known: Margins | None = None, roots: Roots | None = None
) -> tuple[ParameterSensitivity, ...]:
    """Derivatives by every number named.

    Parameters
    ----------
    loop : Loop
        One loop.
    names : sequence of str
        Names of numbers of the loop, as `with_numbers` takes them.
    known, roots : optional
        Margins and roots of the same loop, if the caller has them already.

    Raises
    ------
    InvalidInputError
        If a name is not a number of the loop.
    """
    form, rest = loop.form(), loop.rest()
    opened = open_loop(form, rest)
    known = margins(form, rest, opened) if known is None else known
    roots = rightmost_roots(form, rest, 4, opened, known) if roots is None else roots
    return tuple(_one(loop, name, opened, known, roots) for name in names)


def _one(loop: Loop, name: str, opened: OpenLoop, known: Margins, roots: Roots) -> ParameterSensitivity:
    given = getattr(loop, name, None)
    if isinstance(given, bool) or not isinstance(given, (int, float)):
        raise InvalidInputError(f"{name} must be a number of the {loop.kind} loop; got {given!r}.")
    value = float(given)
    step = _RELATIVE_STEP * (abs(value) if value else 1.0)
    around: Any = loop.with_numbers(**{name: np.array([value - step, value + step])})
    pair = open_loop(around.form(), around.rest())
    width = 2.0 * step

    gain = elasticity = frequency = None
    if known.loop_gain and known.phase_crossover_frequency:
        s = 1j * known.phase_crossover_frequency
        here, slope = opened.at(s)
        change = _logarithm_change(pair, s) / width
        by_frequency = 1j * slope / here
        frequency = -change.imag / by_frequency.imag
        relative = change.real + by_frequency.real * frequency
        gain, elasticity = known.loop_gain * relative, value * relative

    growth = cycle = None
    if roots.oscillatory is not None:
        s = roots.oscillatory
        _, slope = opened.at(s)
        # L = -1 at a root, so dL/dp = -d ln L/dp.
        moved = _logarithm_change(pair, s) / width / slope
        growth, cycle = moved.real, -2.0 * math.pi * moved.imag / s.imag**2
    return ParameterSensitivity(name, value, gain, elasticity, frequency, growth, cycle)


def _logarithm_change(pair: OpenLoop, s: complex) -> complex:
    """ln L at the second member minus ln L at the first."""
    value, _ = pair.with_slope(np.full(pair.batch, s))
    low, high = np.broadcast_to(value, (2,))
    return complex(np.log(high / low))
