"""What `measure_breathing` gives back: cycles, medians with quartiles, what was masked, quality in words."""

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from lagscape.errors import InvalidInputError
from lagscape.recordings.breath_result import BreathTable
from lagscape.recordings.cycles import Thresholds
from lagscape.recordings.envelope import Envelope
from lagscape.recordings.masks import MaskedStretch
from lagscape.recordings.recording import counted
from lagscape.recordings.spread import Spread

__all__ = ["BreathingCycle", "BreathingMeasurement", "Breaths", "Spread", "Stretch"]

BY_HAND = "by hand"


@dataclass(frozen=True)
class BreathingCycle:
    """One waxing and waning: from the onset of ventilation to the next onset. Times in s.

    `duty_ratio` and `loop_gain` are None where the wane is a hypopnoea: ventilation never stops, so the formula says no
    more than that the loop gain is at most 1. `excluded` cycles stand in no median; `reason` says why.
    """

    number: int
    start_s: float
    ventilation_end_s: float
    stop_s: float
    peak: float
    peak_s: float
    pause: str
    pause_level: float
    wane_s: float
    gradual: float
    duty_ratio: float | None
    loop_gain: float | None
    excluded: bool = False
    reason: str = ""

    @property
    def cycle_length_s(self) -> float:
        return self.stop_s - self.start_s

    @property
    def ventilatory_duration_s(self) -> float:
        return self.ventilation_end_s - self.start_s

    @property
    def apnoeic_duration_s(self) -> float:
        """0 where the wane is a hypopnoea."""
        return self.stop_s - self.ventilation_end_s if self.pause == "apnoea" else 0.0


@dataclass(frozen=True)
class Stretch:
    """A part of the recording with or without periodic breathing (start and stop in s), and how many cycles it holds."""

    start_s: float
    stop_s: float
    periodic: bool
    n_cycles: int

    @property
    def duration_s(self) -> float:
        return self.stop_s - self.start_s


@dataclass(frozen=True, eq=False)
class Breaths:
    """Single breaths: time of quickest rise in s and size in the signal's unit (half of peak to peak), shape (n,)."""

    times_s: np.ndarray
    sizes: np.ndarray


@dataclass(frozen=True, eq=False)
class BreathingMeasurement:
    """Cycles of waxing and waning of one signal, with everything needed to draw, judge and correct them."""

    signal: str
    unit: str
    kind: str
    window: tuple[float, float]
    sampling_frequency_hz: float
    thresholds: Thresholds
    cycles: tuple[BreathingCycle, ...]
    stretches: tuple[Stretch, ...]
    masked: tuple[MaskedStretch, ...]
    envelopes: tuple[Envelope, ...]
    breaths: Breaths
    breath_frequency_hz: float | None
    notes: tuple[str, ...]
    breath_table: BreathTable
    """Every single breath with its rate, volume and ventilation, and how far the marks can be trusted."""

    @property
    def used(self) -> tuple[BreathingCycle, ...]:
        """The cycles that stand in the medians."""
        return tuple(cycle for cycle in self.cycles if not cycle.excluded)

    @property
    def cycle_length_s(self) -> Spread | None:
        return Spread.of(cycle.cycle_length_s for cycle in self.used)

    @property
    def ventilatory_duration_s(self) -> Spread | None:
        return Spread.of(cycle.ventilatory_duration_s for cycle in self.used if cycle.pause == "apnoea")

    @property
    def apnoeic_duration_s(self) -> Spread | None:
        return Spread.of(cycle.apnoeic_duration_s for cycle in self.used if cycle.pause == "apnoea")

    @property
    def duty_ratio(self) -> Spread | None:
        return Spread.of(cycle.duty_ratio for cycle in self.used if cycle.duty_ratio is not None)

    @property
    def loop_gain(self) -> Spread | None:
        """Of the loop gains of the single cycles (Sands et al. 2011, Am J Respir Crit Care Med 184:1067)."""
        return Spread.of(cycle.loop_gain for cycle in self.used if cycle.loop_gain is not None)

    @property
    def is_periodic(self) -> bool:
        return bool(self.used)

    @property
    def masked_s(self) -> float:
        """Time masked, in s, overlaps counted once; gaps in the recording are no part of it."""
        edges = sorted((m.start_s, m.stop_s) for m in self.masked if m.reason != "gap")
        total, reached = 0.0, -np.inf
        for start, stop in edges:
            total += max(stop - max(start, reached), 0.0)
            reached = max(reached, stop)
        return float(total)

    @property
    def recorded_s(self) -> float:
        return sum(stretch.duration_s for stretch in self.stretches)

    @property
    def periodic_s(self) -> float:
        return sum(stretch.duration_s for stretch in self.stretches if stretch.periodic)

    @property
    def cycle_length_variation(self) -> float | None:
        """Distance between the quartiles of the cycle length over its median: how unsteady the pattern is."""
        length = self.cycle_length_s
        return None if length is None else (length.upper_quartile - length.lower_quartile) / length.median

    @property
    def peak_position(self) -> Spread | None:
        """Where in the ventilatory phase ventilation peaks: 0 at its start, 1 at its end; 0.5 is symmetrical."""
        return Spread.of(
            (cycle.peak_s - cycle.start_s) / cycle.ventilatory_duration_s for cycle in self.used if cycle.ventilatory_duration_s > 0.0
        )

    @property
    def shape(self) -> str:
        """How ventilation waxes and wanes: crescendo-decrescendo, abrupt or mixed; '' where there are no cycles.

        By how gradual the edges are, 0 for full breaths at once and 1 for the sine of the loop-gain formula.
        """
        gradual = Spread.of(cycle.gradual for cycle in self.used if cycle.pause == "apnoea")
        if gradual is None:
            return ""
        if gradual.lower_quartile >= 0.5:
            return "crescendo-decrescendo"
        return "abrupt" if gradual.upper_quartile <= 0.5 else "mixed"

    def without(self, cycle_numbers: Iterable[int]) -> "BreathingMeasurement":
        """The same measurement with exactly these cycles excluded by hand; an empty set takes them all back in.

        Cycles that were excluded for a reason of their own stay excluded.

        Raises
        ------
        InvalidInputError
            If there is no cycle of that number.
        """
        wanted = set(cycle_numbers)
        unknown = sorted(wanted - {cycle.number for cycle in self.cycles})
        if unknown:
            raise InvalidInputError(f"no cycle {unknown[0]}; there are {counted(len(self.cycles), 'cycle')}, numbered from 1")

        def judged(cycle: BreathingCycle) -> BreathingCycle:
            if cycle.excluded and cycle.reason != BY_HAND:
                return cycle
            out = cycle.number in wanted
            return replace(cycle, excluded=out, reason=BY_HAND if out else "")

        return replace(self, cycles=tuple(judged(cycle) for cycle in self.cycles))

    @property
    def quality(self) -> str:
        """One word: good, fair, poor or none."""
        return self._judged()[0]

    @property
    def quality_reasons(self) -> tuple[str, ...]:
        """What speaks for and against the measurement, in sentences."""
        return self._judged()[1]

    def _judged(self) -> tuple[str, tuple[str, ...]]:
        """Common practice, no source: ten cycles for good, five for fair, few masked, cycles alike, pauses deep."""
        used, length = self.used, self.cycle_length_s
        if not used or length is None:
            return "none", ("No periodic breathing was found.",)
        reasons = [f"{counted(len(used), 'cycle')} used, {len(self.cycles) - len(used)} excluded."]
        word = "good" if len(used) >= 10 else "fair" if len(used) >= 5 else "poor"
        unsteady = self.cycle_length_variation or 0.0
        reasons.append(f"Cycle length varies by {100.0 * unsteady:.0f} % of its median between the quartiles.")
        if unsteady > 0.35:
            word = "fair" if word == "good" and unsteady <= 0.6 else "poor" if unsteady > 0.6 else word
        masked = self.masked_s / self.recorded_s if self.recorded_s else 0.0
        if masked > 0.05:
            reasons.append(f"{100.0 * masked:.0f} % of the time is masked.")
            word = "poor" if masked > 0.4 else "fair" if masked > 0.2 and word == "good" else word
        hypopnoeas = sum(cycle.pause == "hypopnoea" for cycle in used)
        if hypopnoeas:
            reasons.append(f"{counted(hypopnoeas, 'cycle')} without apnoea: no duty ratio there; loop gain at most 1.")
            word = "poor" if hypopnoeas == len(used) else "fair" if 2 * hypopnoeas > len(used) and word == "good" else word
        step = 1.0 / self.sampling_frequency_hz
        if step / length.median > 0.005:
            reasons.append(
                f"Sampled every {step:.2g} s: the duty ratio of a single cycle is known no better than to {step / length.median:.2f}."
            )
        return word, tuple(reasons)
