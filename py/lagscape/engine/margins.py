"""How far a loop is from hunting: loop gain, gain margin, phase margin, delay margin.

With 1 + L(s) = 0 for the closed loop, the phase crossovers are the frequencies where L is real and negative, the gain crossovers
those where |L| = 1. A loop may have several of either; all are found and listed. The deciding phase crossover is the one whose gain
must pass 1 for the loop to change sides: of a stable loop the largest gain under 1, of an unstable one the largest of all.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

from lagscape.engine.crossings import Crossings, GainCrossing, PhaseCrossing, find_crossings
from lagscape.engine.open_loop import OpenLoop, open_loop
from lagscape.loops.protocol import DriveForm, Rest

__all__ = ["ON_BOUNDARY", "MarginStatus", "Margins", "margins"]

ON_BOUNDARY = 1e-9
"""rad; a lag this close to none is none."""


class MarginStatus(StrEnum):
    """Why a margin is given, or why there is none."""

    FOUND = "found"
    NO_FEEDBACK = "no_feedback"
    """Nothing comes back from the drive: it cannot hunt at any gain or delay."""
    NO_PHASE_CROSSOVER = "no_phase_crossover"
    """The signal never comes back against itself: no gain makes this loop hunt."""
    NO_GAIN_CROSSOVER = "no_gain_crossover"
    """The loop's gain is under 1 at every frequency: no lag and no delay makes it hunt."""
    NO_LAG_RESTORES = "no_lag_restores"
    """The loop is unstable and no phase lead settles it."""
    NO_DELAY_RESTORES = "no_delay_restores"
    """The loop is unstable and would be even without its shortest delay."""


@dataclass(frozen=True)
class Margins:
    """The margins of one loop. A margin is None exactly where its status is not FOUND."""

    stable: bool
    """True where no root of the closed loop has a positive real part (Nyquist)."""
    unstable_roots: int
    loop_gain: float | None
    """|L| at the deciding phase crossover, no unit; 0 where there is no feedback."""
    phase_crossover_frequency: float | None
    """rad/s."""
    gain_margin: float | None
    """1 / loop_gain: the factor on the gain that brings the loop to the boundary."""
    gain_status: MarginStatus
    gain_crossover_frequency: float | None
    """rad/s, of the crossover that sets the phase margin."""
    phase_margin_rad: float | None
    """The lag that brings a stable loop to the boundary; negative: the lead that an unstable one needs."""
    phase_status: MarginStatus
    delay_margin_s: float | None
    """The delay, added to every path, that brings a stable loop to the boundary; negative: what must be taken away."""
    delay_margin_frequency: float | None
    """rad/s, of the oscillation on the boundary that the delay margin reaches."""
    delay_status: MarginStatus
    phase_crossovers: tuple[PhaseCrossing, ...]
    gain_crossovers: tuple[GainCrossing, ...]
    complete: bool
    """False where the delays lie so far apart that the search was cut short."""


def margins(form: DriveForm, rest: Rest, opened: OpenLoop | None = None) -> Margins:
    """Loop gain and the three margins of one loop, all crossovers considered.

    Parameters
    ----------
    form : DriveForm
        One loop, not a batch.
    rest : Rest
    opened : OpenLoop, optional
        The open loop of the same form and rest, if the caller has it already.

    Returns
    -------
    Margins
        Frequencies in rad/s, lags in rad, delays in s.
    """
    opened = open_loop(form, rest) if opened is None else opened
    crossings = find_crossings(opened)
    gain, gain_status, deciding = _gain_part(opened, crossings)
    phase_margin, phase_frequency, phase_status = _lag_part(opened, crossings)
    delay_margin, delay_frequency, delay_status = _delay_part(opened, crossings)
    return Margins(
        stable=crossings.unstable_roots == 0,
        unstable_roots=crossings.unstable_roots,
        loop_gain=gain,
        phase_crossover_frequency=deciding,
        gain_margin=1.0 / gain if gain else None,
        gain_status=gain_status,
        gain_crossover_frequency=phase_frequency,
        phase_margin_rad=phase_margin,
        phase_status=phase_status,
        delay_margin_s=delay_margin,
        delay_margin_frequency=delay_frequency,
        delay_status=delay_status,
        phase_crossovers=crossings.phase,
        gain_crossovers=crossings.gain,
        complete=crossings.complete,
    )


def _gain_part(opened: OpenLoop, crossings: Crossings) -> tuple[float | None, MarginStatus, float | None]:
    if not opened.has_feedback:
        return 0.0, MarginStatus.NO_FEEDBACK, None
    candidates = crossings.phase
    if crossings.unstable_roots == 0:
        candidates = tuple(item for item in candidates if item.gain <= 1.0)
    if not candidates:
        return None, MarginStatus.NO_PHASE_CROSSOVER, None
    deciding = max(candidates, key=lambda item: item.gain)
    return deciding.gain, MarginStatus.FOUND, deciding.frequency


def _no_crossover(opened: OpenLoop) -> MarginStatus:
    return MarginStatus.NO_GAIN_CROSSOVER if opened.has_feedback else MarginStatus.NO_FEEDBACK


def _lag_part(opened: OpenLoop, crossings: Crossings) -> tuple[float | None, float | None, MarginStatus]:
    if not crossings.gain:
        return None, None, _no_crossover(opened)
    turn = 2.0 * math.pi
    if crossings.unstable_roots == 0:
        lag, item = min(((_round_turn(item.lag_left), item) for item in crossings.gain), key=lambda pair: pair[0])
        return lag, item.frequency, MarginStatus.FOUND
    events = sorted(
        (_round_turn(-item.lag_left) + turn * k, item.frequency, item.falling)
        for item in crossings.gain
        for k in range(crossings.unstable_roots // 2 + 1)
    )
    found = _walk_back(crossings.unstable_roots, events)
    return (None, None, MarginStatus.NO_LAG_RESTORES) if found is None else (-found[0], found[1], MarginStatus.FOUND)


def _delay_part(opened: OpenLoop, crossings: Crossings) -> tuple[float | None, float | None, MarginStatus]:
    if not crossings.gain:
        return None, None, _no_crossover(opened)
    turn = 2.0 * math.pi
    if crossings.unstable_roots == 0:
        delay, item = min(((_round_turn(item.lag_left) / item.frequency, item) for item in crossings.gain), key=lambda pair: pair[0])
        return delay, item.frequency, MarginStatus.FOUND
    events = []
    for item in crossings.gain:
        cut = _round_turn(-item.lag_left) / item.frequency
        while cut < opened.shortest_delay:
            events.append((cut, item.frequency, item.falling))
            cut += turn / item.frequency
    found = _walk_back(crossings.unstable_roots, sorted(events))
    return (None, None, MarginStatus.NO_DELAY_RESTORES) if found is None else (-found[0], found[1], MarginStatus.FOUND)


def _round_turn(lag: float) -> float:
    """The lag in [0, 2 pi); a rounding error under 0 is 0, for a loop that stands on the boundary itself."""
    return 0.0 if -ON_BOUNDARY < lag <= 0.0 else lag % (2.0 * math.pi)


def _walk_back(unstable: int, events: list[tuple[float, float, bool]]) -> tuple[float, float] | None:
    """Take lag or delay away crossing by crossing; the first place where no unstable root is left."""
    for size, frequency, falling in events:
        unstable += -2 if falling else 2
        if unstable <= 0:
            return size, frequency
    return None
