"""Numbers of a breathing loop that are each in range and together cannot be, or hardly can, said in a sentence."""

from __future__ import annotations

from typing import Any

from lagscape.errors import InvalidInputError

__all__ = ["LARGEST_RESTING_VENTILATION", "implausible"]

LARGEST_RESTING_VENTILATION = 40.0
"""L/min: beyond it a person is exercising (common practice, no source)."""
_SMALLEST_RESTING_VENTILATION = 2.0
_EXERCISE_CO2 = 0.6
"""L/min: a CO2 production over this is exercise."""
_LARGEST_ARTERIOVENOUS_PCO2 = 25.0
"""mmHg between mixed venous and arterial blood at rest; 4 to 8 is usual (common practice, no source)."""


def implausible(loop: Any) -> tuple[str, ...]:
    """What cannot be, or hardly can, in one breathing loop; one sentence each, empty where nothing was found.

    A combination that leaves the loop no rest gives the sentence with which `rest` refuses it.
    """
    if loop.kind != "breathing":
        return ()
    try:
        rest = loop.rest()
    except InvalidInputError as problem:
        return (str(problem),)
    found = []
    ventilation, reserve = float(rest.output), float(loop.co2_reserve_mmhg())
    exercise = loop.co2_production_l_min > _EXERCISE_CO2
    if ventilation > LARGEST_RESTING_VENTILATION and not exercise:
        found.append(
            f"Rest needs {ventilation:.0f} L/min of ventilation, which nobody keeps up at rest. Check the CO2 production, the dead "
            "space and the resting PaCO2."
        )
    if ventilation < _SMALLEST_RESTING_VENTILATION:
        found.append(
            f"Rest needs only {ventilation:.1f} L/min of ventilation, less than an adult's. Check the CO2 production and the resting PaCO2."
        )
    if not reserve > 0.0:
        found.append(f"The CO2 reserve is {reserve:.2g} mmHg, and nobody breathes under the own apnoeic threshold. Check the gains.")
    if loop.central_delay_s < loop.peripheral_delay_s:
        found.append(
            f"The delay to the brainstem ({loop.central_delay_s:.3g} s) is shorter than to the carotid body "
            f"({loop.peripheral_delay_s:.3g} s), which lies on the way."
        )
    widening = float(rest.state[1] - rest.state[0])
    if widening > _LARGEST_ARTERIOVENOUS_PCO2 and not exercise:
        found.append(
            f"Mixed venous PCO2 would stand {widening:.0f} mmHg above PaCO2 at rest. The cardiac output is too low for this CO2 production."
        )
    return tuple(found)
