"""The fit's intervals hold what they promise: 200 loops drawn from the prior, what each shows with its error, the truth inside 90 %.

Oracle: the drawn truth itself. All numbers together must be inside their intervals in 85 to 95 % of cases. A single number's share over n
cases has a standard deviation of sqrt(0.09 / n); it is allowed three of them, and 2 % more for the draws behind an interval.
"""

from __future__ import annotations

import math
from collections import Counter

import numpy as np
import pytest

from lagscape.case.case import Case
from lagscape.questions import fit_measured as errors
from lagscape.questions.fit import FitStatus, Measured, RingDown, fit_recording
from lagscape.questions.fit_features import Likelihood
from lagscape.questions.fit_prior import prior_of
from questions.fit_truths import about

CASES = 200
N = 20


def noisy(value: float, deviation: float, model: float, draw: float, low: float = 1e-3, high: float = np.inf) -> float:
    return float(np.clip(value + draw * math.hypot(1.2533 * deviation / math.sqrt(N), model), low, high))


def observed(shown, values, ringing, index: int, saturation: bool, rng) -> Measured | None:
    """What a recording of this truth would give, with the very errors that the fit states; None where it gives nothing."""
    z = rng.standard_normal(4)
    duty = float(values["duty_ratio"][index])
    if shown.hunts[index] and duty < 0.97:
        length = float(values["cycle_length_s"][index])
        length *= math.exp(noisy(0.0, 0.05, errors.CYCLE_ERROR, z[0], low=-np.inf))
        length = about(length, 0.05 * length, N)
        ratio = noisy(duty, 0.03, errors.DUTY_ERROR, z[1], 0.05, 0.97)
        if not saturation:
            return Measured(length, about(ratio, 0.03, N))
        lag = noisy(float(values["lag_s"][index]), 2.0, errors.LAG_ERROR_S, z[2])
        deep = float(values["saturation_drop"][index]) + errors.DROP_OFFSET
        drop = max(deep * math.exp(noisy(0.0, 0.15, errors.DROP_ERROR, z[3], low=-np.inf)) - errors.DROP_OFFSET, 0.05)
        return Measured(length, about(ratio, 0.03, N), lag_s=about(lag, 2.0, N), saturation_drop=about(drop, 0.15 * drop, N))
    if shown.hunts[index] or not ringing.oscillation_s[index] > 0.0:
        return None
    period = float(ringing.oscillation_s[index])
    period *= math.exp(noisy(0.0, 0.10, errors.RINGING_CYCLE_ERROR, z[0], low=-np.inf))
    damping = noisy(float(ringing.damping_ratio[index]), 0.10, errors.RINGING_DAMPING_ERROR, z[1], -0.9, 0.95)
    return Measured(ring_down=RingDown(about(period, 0.10 * period, N), about(damping, 0.10, N)))


@pytest.mark.parametrize("saturation", [False, True], ids=["cycles", "cycles and saturation"])
def test_the_ninety_percent_interval_covers_the_truth(saturation: bool) -> None:
    cases = CASES // 2
    case = Case.from_starting_case("heart-failure-periodic")
    spread = about(60.0, 3.0, N)
    asked = Measured(spread, about(0.6, 0.03, N), lag_s=spread if saturation else None, saturation_drop=spread if saturation else None)
    prior = prior_of(case, asked)
    rng = np.random.default_rng(11 if saturation else 5)
    points = rng.standard_normal((cases, prior.size))
    truth = prior.numbers(points)
    cycling, settling = Likelihood(prior, asked, ()), Likelihood(prior, Measured(ring_down=RingDown(spread, spread)), ())
    shown, ringing = cycling.shown(points), settling.shown(points)
    values = cycling.values(shown, points)
    sensitivity = np.asarray(prior.builder(points)(np.arange(cases)).sensitivity)
    held, asked_of, pinned = Counter(), Counter(), Counter()
    for index in range(cases):
        measured = observed(shown, values, ringing, index, saturation, rng)
        if measured is None:
            continue
        fit = fit_recording(case, measured, draws=300)
        assert fit.status is not FitStatus.NOT_FITTED
        for item in fit.numbers:
            held[item.name] += item.posterior.low <= truth[item.name][index] <= item.posterior.high
            asked_of[item.name] += 1
            pinned[item.name] += item.pinned
        for item, true in zip(fit.figures, (sensitivity[index], shown.loop_gain[index]), strict=True):
            held[item.name] += item.posterior.low <= true <= item.posterior.high
            asked_of[item.name] += 1
    assert asked_of["peripheral_delay_s"] >= 0.9 * cases
    assert pinned["peripheral_delay_s"] > 0.9 * asked_of["peripheral_delay_s"], "an interval that never narrows would cover trivially"
    share = {name: held[name] / asked_of[name] for name in asked_of}
    print({name: f"{value:.3f}" for name, value in share.items()})
    wide = 3.0 * math.sqrt(0.09 / cases) + 0.02
    for name, value in share.items():
        assert 0.9 - wide <= value <= 0.9 + wide + 0.02, (name, value)
    pooled = sum(held.values()) / sum(asked_of.values())
    print(f"pooled {pooled:.3f}")
    assert 0.85 <= pooled <= 0.95
