"""Loops drawn from a prior, and the recordings that they would give."""

from __future__ import annotations

import numpy as np

from lagscape.case.case import Case
from lagscape.engine.simulate import simulate
from lagscape.loops.register import LOOPS
from lagscape.questions.fit import Measured
from lagscape.questions.fit_features import Likelihood
from lagscape.questions.fit_prior import prior_of
from lagscape.recordings import Recording, Spread, read_recording

DURATION_S = 2400.0
SETTLED_AFTER_S = 1200.0


def about(median: float, deviation: float, n: int) -> Spread:
    """Median and quartiles of n values of a normal law."""
    return Spread(median, median - 0.6745 * deviation, median + 0.6745 * deviation, n)


ASKED = Measured(about(60.0, 3.0, 20), about(0.6, 0.03, 20), lag_s=about(40.0, 3.0, 20), saturation_drop=about(5.0, 1.0, 20))
TWO_GASES = Case.from_starting_case("heart-failure-periodic").with_choice("gases", "co2_o2").with_number("peripheral_gain_l_min_mmhg", 0.8)
ONE_GAS = Case.from_starting_case("heart-failure-periodic")


def drawn(case: Case, count: int, seed: int):
    prior = prior_of(case, ASKED)
    points = np.random.default_rng(seed).standard_normal((count, prior.size))
    likelihood = Likelihood(prior, ASKED, ())
    shown = likelihood.shown(points)
    return prior, points, shown, likelihood.values(shown, points)


def with_apnoea(shown, count: int) -> list[int]:
    """The first members that hunt with an apnoea."""
    members = np.flatnonzero(shown.hunts & shown.possible & (shown.duty_ratio > 0.3) & (shown.duty_ratio < 0.9))[:count].tolist()
    assert len(members) == count
    return members


def loop_of(case: Case, numbers: dict, index: int):
    values = {name: float(value[index]) if np.ndim(value) else float(value) for name, value in numbers.items()}
    return LOOPS[case.kind](**values, **case.choices)


def run(loop, disturbances=(), offset_share=0.05, duration=DURATION_S):
    """A trace that starts a little off its rest, so that a hunting loop finds its cycle."""
    rest = loop.rest()
    offset = np.zeros(rest.state.size)
    offset[0] = offset_share * rest.state[0]
    return simulate(loop, duration=duration, disturbances=disturbances, offset=offset, output_times=int(duration) * 4 + 1)


def recording_of(loop, *, seed: int, noise_db: float = 10.0, since: float = SETTLED_AFTER_S) -> Recording:
    """Effort (breaths of varying length under the loop's own ventilation, with white noise) and SpO2 in whole tenths, at 8 and 1 Hz."""
    trace = run(loop)
    assert trace.status == "completed"
    rng = np.random.default_rng(seed)
    t = np.arange(0.0, DURATION_S - since, 0.125)
    envelope = np.interp(t + since, trace.times, trace.output)
    envelope = envelope / envelope.max()
    wander = np.interp(t, np.arange(0.0, t[-1] + 20.0, 10.0), rng.normal(size=int(t[-1] / 10.0) + 3)[: np.arange(0.0, t[-1] + 20.0, 10.0).size])
    breathing = envelope * np.sin(2.0 * np.pi * np.cumsum(0.27 * (1.0 + 0.05 * wander)) * 0.125)
    effort = breathing + rng.normal(size=t.size) * np.sqrt(np.mean(breathing**2)) * 10.0 ** (-noise_db / 20.0)
    curve = {signal.name: signal.values for signal in loop.signals(trace.states, trace.output, trace.times)}["spo2"]
    saturation = np.round(np.interp(t + since, trace.times, curve), 1)
    lines = "\n".join(f"{a:.3f},{b:.5g},{c:.1f}" for a, b, c in zip(t, effort, saturation, strict=True))
    return read_recording(f"time_s,effort,SpO2 (%)\n{lines}\n".encode())
