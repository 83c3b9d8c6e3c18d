"""What a loop would show, against the project's own simulator and recordings measured as a user's are: neither shares code with it."""

from __future__ import annotations

import numpy as np
import pytest

from lagscape.engine.cycle import limit_cycle
from lagscape.loops.gases import saturation
from lagscape.questions.fit_forward import shown_by
from lagscape.questions.standing import judge_loop
from lagscape.recordings import measure_breathing, measure_saturation_lag
from questions.fit_truths import ONE_GAS, TWO_GASES, drawn, loop_of, recording_of, run, with_apnoea


def test_cycle_and_apnoea_are_those_of_many_harmonics() -> None:
    # Oracle: harmonic balance of one loop with 48 harmonics by its own search. Tolerance: what seven harmonics leave out (ORDER).
    prior, points, shown, _ = drawn(ONE_GAS, 30, 1)
    numbers = prior.numbers(points)
    compared = 0
    for index in np.flatnonzero(shown.hunts & shown.possible)[:12]:
        judged = judge_loop(loop_of(ONE_GAS, numbers, index))
        cycle = limit_cycle(judged.form, judged.rest, known=judged.margins, order=48)
        assert shown.cycle_length_s[index] == pytest.approx(cycle.period_s, rel=5e-3)
        assert shown.apnoea_share[index] == pytest.approx(cycle.silent_fraction, abs=0.01)
        compared += 1
    assert compared >= 8


def test_a_loop_that_settles_shows_its_dominant_root() -> None:
    # Oracle: the roots of one loop, polished one by one. Tolerance: those Newton steps stop at 1e-8.
    prior, points, shown, _ = drawn(ONE_GAS, 40, 2)
    ringing = shown_by(prior.builder(points), 40, ringing=True, cycles=False)
    numbers = prior.numbers(points)
    settled = np.flatnonzero(~shown.hunts)
    assert settled.size >= 5
    for index in settled[:6]:
        root = judge_loop(loop_of(ONE_GAS, numbers, index)).roots.oscillatory
        assert ringing.oscillation_s[index] == pytest.approx(2.0 * np.pi / abs(root.imag), rel=1e-6)
        assert ringing.damping_ratio[index] == pytest.approx(-root.real / abs(root), abs=1e-6)


def test_saturation_swings_as_the_simulated_two_gas_loop_does() -> None:
    # Oracle: the simulator's PaO2 state. Tolerance: 5 % of the swing for the harmonics left out.
    prior, points, shown, _ = drawn(TWO_GASES, 24, 3)
    numbers = prior.numbers(points)
    members = with_apnoea(shown, 3)
    for index in members:
        trace = run(loop_of(TWO_GASES, numbers, index))
        late = trace.times > 1200.0
        curve = 100.0 * saturation(trace.state("PaO2")[late])
        assert shown.saturation_drop[index] == pytest.approx(np.ptp(curve), rel=0.05)


def test_what_is_shown_is_what_is_measured_in_a_recording_of_it() -> None:
    # Oracle: breaths and noise on the simulated ventilation, measured as a user's recording is. Tolerances: cycle length 2 % and duty ratio
    # 0.03, which the recordings' own tests hold to at 10 dB; lag 3 s and drop 10 % or half a point, the turn's reading in noise.
    prior, points, shown, values = drawn(TWO_GASES, 24, 3)
    numbers = prior.numbers(points)
    members = with_apnoea(shown, 3)
    for index in members:
        recording = recording_of(loop_of(TWO_GASES, numbers, index), seed=int(index))
        breathing = measure_breathing(recording, "effort")
        lag = measure_saturation_lag(recording, breathing)
        assert values["cycle_length_s"][index] == pytest.approx(breathing.cycle_length_s.median, rel=0.02)
        assert values["duty_ratio"][index] == pytest.approx(breathing.duty_ratio.median, abs=0.03)
        assert values["lag_s"][index] == pytest.approx(lag.lag_s.median, abs=3.0)
        assert values["saturation_drop"][index] == pytest.approx(lag.drop.median, rel=0.10, abs=0.5)


def test_a_warm_start_comes_to_the_same_cycle() -> None:
    # Oracle: the same members begun cold. Tolerance: Newton's last step, 1e-4 of the force and squared on the way.
    prior, points, cold, _ = drawn(ONE_GAS, 20, 4)
    warm = shown_by(prior.builder(points), 20, start=cold.harmonics)
    assert np.array_equal(warm.hunts, cold.hunts)
    both = cold.hunts & cold.possible
    assert np.allclose(warm.cycle_length_s[both], cold.cycle_length_s[both], rtol=1e-5)
    assert np.allclose(warm.duty_ratio[both], cold.duty_ratio[both], atol=1e-4)


def test_impossible_members_stand_alone() -> None:
    # A resting PaCO2 under the inspired one allows no rest; its neighbours are worked out all the same.
    loop = ONE_GAS.loop()
    pressure = np.array([36.0, 15.0, 37.0])

    def build(which):
        zeros = np.zeros(which.size)
        return loop.with_numbers(resting_paco2_mmhg=pressure[which], inspired_pco2_mmhg=20.0 + zeros)

    shown = shown_by(build, 3)
    assert shown.possible.tolist() == [True, False, True]
