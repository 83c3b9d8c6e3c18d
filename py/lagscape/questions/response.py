"""What the loop does after a disturbance: the traces that the page draws and the CSV holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np

from lagscape.case.case import Case
from lagscape.engine.disturbance import Disturbance, pulse, step
from lagscape.engine.simulate import Purpose, simulate
from lagscape.engine.trace import Trace
from lagscape.loops.protocol import Signal
from lagscape.questions.standing import Judgement

__all__ = ["DISTURBANCES", "DisturbanceKind", "Response", "cycle_bracket", "respond", "run_length"]


@dataclass(frozen=True)
class DisturbanceKind:
    """One disturbance that the page offers: its words, the loop's channel, its shape, and the size it starts with."""

    channel: str
    label: str
    shape: str
    duration_s: float
    size: float
    largest: float


DISTURBANCES: Mapping[str, Mapping[str, DisturbanceKind]] = MappingProxyType(
    {
        "breathing": {
            "sigh": DisturbanceKind("sigh", "Sigh", "pulse", 6.0, 15.0, 60.0),
            "inspired_pco2": DisturbanceKind("inspired_pco2", "CO2 step", "step", 0.0, 3.0, 20.0),
            "arousal": DisturbanceKind("arousal", "Arousal", "pulse", 15.0, 6.0, 30.0),
        },
        "reflex": {"torque": DisturbanceKind("torque", "Tap", "pulse", 0.02, 2.0, 50.0)},
        "plain": {
            "drive": DisturbanceKind("drive", "Push on the drive", "pulse", 5.0, 0.1, 10.0),
            "production": DisturbanceKind("production", "More production", "step", 0.0, 0.02, 10.0),
        },
    }
)
"""Loop kind, then channel name, to the disturbance. Sizes are in the channel's unit; durations are the sigh of a few breaths, the
arousal of 3 to 15 s (common practice, no source)."""


@dataclass(frozen=True)
class Response:
    """One run with its named curves. Times in s."""

    trace: Trace
    signals: tuple[Signal, ...]
    start_s: float
    """When the disturbance begins."""

    @property
    def times(self) -> Any:
        return self.trace.times


def run_length(judged: Judgement) -> float:
    """How long a run shows the loop's habit, s: about ten cycles, in round figures, from 60 to 900 s for breathing."""
    length = judged.cycle_length
    if judged.loop.kind == "breathing":
        wanted = 10.0 * (length if length is not None else 30.0)
        return float(min((120.0, 180.0, 240.0, 300.0, 420.0, 600.0, 900.0), key=lambda span: abs(span - wanted)))
    if length is None:
        length = 20.0 * float(judged.loop.delay)
    exponent = np.floor(np.log10(12.0 * length))
    lead = 12.0 * length / 10.0**exponent
    return float((1.0 if lead < 1.5 else 2.0 if lead < 3.0 else 5.0 if lead < 7.0 else 10.0) * 10.0**exponent)


def disturbance_of(case: Case, duration: float) -> tuple[tuple[Disturbance, ...], float]:
    """The case's disturbance as the engine takes it, and when it starts."""
    start = 0.05 * duration
    setting = case.disturbance
    if setting is None or setting.size == 0.0:
        return (), start
    kind = DISTURBANCES[case.kind].get(setting.name)
    if kind is None or kind.shape == "step":
        return (step(setting.name, start, setting.size),), start
    return (pulse(setting.name, start, kind.duration_s, setting.size),), start


def respond(case: Case, judged: Judgement, duration: float, purpose: Purpose = "drag", points: int = 1201) -> Response:
    """Run a judged loop after the case's disturbance.

    Parameters
    ----------
    case : Case
        Whose disturbance is taken.
    judged : Judgement
        The loop that runs: the case's own, or with levers.
    duration : float
        s.
    purpose : "drag" or "release"
        Quick, or exact to 1e-6.
    """
    disturbances, start = disturbance_of(case, duration)
    trace = simulate(
        judged.form, duration=duration, rest=judged.rest, disturbances=disturbances, purpose=purpose, output_times=points
    )
    return Response(trace, judged.loop.signals(trace.states, trace.output, trace.times), start)


def cycle_bracket(response: Response, length: float | None) -> tuple[float, float] | None:
    """Two neighbouring crests of the first curve, s, to measure one cycle between; None where there are no two.

    The last pair in the run that stands clear of the flat is taken, where the habit is settled.
    """
    times, values = response.trace.times, response.signals[0].values
    if length is None or len(times) < 5:
        return None
    swing = float(values.max() - values.min())
    if swing <= 1e-3 * max(1e-12, abs(float(values.mean()))):
        return None
    crest = np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] > values[2:])) + 1
    crest = crest[times[crest] > response.start_s + 0.25 * length]
    crest = crest[values[crest] > values[0] + 0.04 * swing]
    kept: list[int] = []
    for index in crest:
        if kept and times[index] - times[kept[-1]] < 0.6 * length:
            if values[index] > values[kept[-1]]:
                kept[-1] = int(index)
        else:
            kept.append(int(index))
    if len(kept) < 2:
        return None
    first, second = kept[-2], kept[-1]
    return float(times[first]), float(times[second])
