"""The front of the simulation: the three solvers against one another, hard cases, statuses, refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lagscape.engine.disturbance import noise, periodic, pulse, step
from lagscape.engine.runge_kutta import runge_kutta, step_for
from lagscape.engine.simulate import DRAG_ERROR, RELEASE_ERROR, simulate
from lagscape.errors import InvalidInputError
from lagscape.loops.register import LOOPS
from support.study_loops import apnoeic, clipping, damped, difference, limb, plain, run_of

# The silence of the steady cycle and its length, by harmonic balance with 128 harmonics, computed outside this package.
APNOEIC_CYCLE = 33.817627
APNOEIC_SHARE = 0.469392

CASES = {
    "plain": (plain(), 300.0, np.array([0.5]) - plain().rest().state),
    "damped": (damped(), 300.0, 2.0),
    "clipping": (clipping(), 300.0, 2.0),
    "apnoeic": (apnoeic(), 300.0, 2.0),
    "limb": (limb(), 2.0, np.array([0.05, 0.0, 0.0, 0.0])),
}


@pytest.mark.parametrize("name", CASES)
def test_drag_and_release_agree_with_plain_steps(name: str) -> None:
    # Oracle: the Runge-Kutta loop, which shares no code with the collocations, at a step far below what 1e-6 needs.
    # Tolerances: what each purpose promises; the step's own error is below 3e-7 by its measured order, 2e-6 beside corners.
    loop, duration, offset = CASES[name]
    drag = simulate(loop, duration=duration, offset=offset, output_times=301)
    release = simulate(loop, duration=duration, offset=offset, purpose="release", output_times=301)
    run = run_of(loop, duration, offset)
    oracle = runge_kutta(run, drag.times, step_for(run, run.form.delays[0] / 480), error_estimate=0.0)
    assert (drag.status, release.status) == ("completed", "completed")
    assert difference(release, oracle) < 2.0 * RELEASE_ERROR
    assert difference(drag, oracle) < DRAG_ERROR
    np.testing.assert_allclose(release.output, oracle.output, atol=2e-4 * (1.0 + np.abs(oracle.output).max()))


@pytest.mark.parametrize("name", CASES)
def test_the_estimate_is_of_the_size_of_the_error(name: str) -> None:
    # Oracle: the release trace. An estimate may be pessimistic, but an error above three times it would mislead.
    loop, duration, offset = CASES[name]
    drag = simulate(loop, duration=duration, offset=offset)
    release = simulate(loop, duration=duration, offset=offset, purpose="release")
    assert difference(drag, release) < 3.0 * drag.error_estimate + RELEASE_ERROR


DISTURBED = {
    "sigh": (apnoeic(), 200.0, pulse("sigh", 20.3, 3.1, 20.0)),
    "sigh in a damped loop": (damped(), 200.0, pulse("sigh", 20.3, 3.1, 20.0)),
    "arousal": (clipping(), 200.0, pulse("arousal", 7.7, 15.0, 5.0)),
    "CO2 step": (apnoeic(), 200.0, step("inspired_pco2", 11.1, 8.0)),
    "noise": (clipping(), 200.0, noise("arousal", 0.0, 1.7, 1.0, 5)),
    "production": (plain(), 200.0, pulse("production", 3.3, 2.5, 0.2)),
    "torque": (limb(), 2.0, periodic("torque", 0.1, 0.25, 0.02)),
}


@pytest.mark.parametrize("name", DISTURBED)
def test_disturbances_enter_exactly(name: str) -> None:
    # Oracle: plain steps with every jump on a step's end (a grid of 0.1 s, or 1/20 of it for the limb).
    loop, duration, disturbance = DISTURBED[name]
    drag = simulate(loop, duration=duration, disturbances=disturbance, output_times=201)
    release = simulate(loop, duration=duration, disturbances=disturbance, purpose="release", output_times=201)
    run = run_of(loop, duration, 0.0, [disturbance])
    oracle = runge_kutta(run, drag.times, 0.05 if duration > 10.0 else 0.0005, error_estimate=0.0)
    # 2e-5: the plain steps' own corner error at this step, measured by halving it.
    assert difference(release, oracle) < 2e-5
    assert difference(drag, release) < DRAG_ERROR


def test_a_loop_at_rest_stays_until_it_is_disturbed() -> None:
    # Oracle: the rest itself, although this loop hunts: rounding must not grow into a cycle before the push. Tolerance: a few eps.
    trace = simulate(apnoeic(), duration=600.0, disturbances=pulse("sigh", 400.0, 3.0, 20.0), output_times=601)
    before = trace.times <= 400.0
    np.testing.assert_allclose(trace.states[before], trace.states[:1].repeat(before.sum(), axis=0), rtol=1e-14)
    assert np.abs(trace.states[-1] - trace.states[0]).max() > 1.0


@pytest.mark.parametrize("purpose", ["drag", "release"])
def test_silences_are_those_of_the_steady_cycle(purpose: str) -> None:
    # Tolerances: the run has settled to 1e-3 of its swing after 2400 s; ends of silence on the drag's half-second grid are good to 0.02 s.
    trace = simulate(apnoeic(), duration=3000.0, offset=2.0, purpose=purpose, output_times=6001)  # type: ignore[arg-type]
    ends = np.array(trace.silences)[-8:-1]
    cycles = np.diff(ends[:, 0])
    np.testing.assert_allclose(cycles, APNOEIC_CYCLE, atol=0.02)
    np.testing.assert_allclose((ends[:, 1] - ends[:, 0]) / APNOEIC_CYCLE, APNOEIC_SHARE, atol=1e-3)
    assert trace.output.min() == 0.0


@pytest.mark.parametrize(
    ("loop", "duration", "offset"),
    [
        (clipping(peripheral_delay_s=3.0, central_delay_s=60.0), 200.0, 2.0),
        (clipping(peripheral_delay_s=50.0, central_delay_s=2.5), 200.0, 2.0),
    ],
)
def test_a_delay_ratio_of_twenty(loop: object, duration: float, offset: float) -> None:
    # Oracle: plain steps at 1/40 s, whose own error there is below 1e-5 (measured by halving).
    drag = simulate(loop, duration=duration, offset=offset)
    release = simulate(loop, duration=duration, offset=offset, purpose="release")
    run = run_of(loop, duration, offset)
    oracle = runge_kutta(run, drag.times, step_for(run, 0.025), error_estimate=0.0)
    assert difference(release, oracle) < 1e-5
    assert difference(drag, oracle) < 2.0 * DRAG_ERROR


@pytest.mark.parametrize("purpose", ["drag", "release"])
@pytest.mark.parametrize(
    ("loop", "duration"),
    [
        (plain(delay_s=0.01), 3.0),
        (plain(delay_s=1000.0), 30.0),
        (plain(delay_s=1000.0), 6000.0),
        (plain(exponent=60.0), 200.0),
        (plain(largest_clearance_per_s=1000.0), 200.0),
        (damped(peripheral_gain_l_min_mmhg=0.0), 200.0),
        (limb(reflex_gain_per_rad=0.0), 2.0),
        (apnoeic(peripheral_delay_s=2.0, central_delay_s=80.0), 60.0),
    ],
    ids=["tiny delay", "short run in a long delay", "long delay", "steep", "stiff", "no peripheral gain", "no gain", "ratio 40"],
)
def test_hard_numbers_give_a_finite_trace(loop: object, duration: float, purpose: str) -> None:
    offset = 0.05 if loop.kind == "reflex" else 0.1 * np.abs(loop.rest().state)  # type: ignore[attr-defined]
    trace = simulate(loop, duration=duration, offset=offset, purpose=purpose)  # type: ignore[arg-type]
    assert trace.status in ("completed", "low_accuracy")
    assert trace.times.size == 1201
    assert np.all(np.isfinite(trace.states)) and np.all(np.isfinite(trace.output)) and math.isfinite(trace.error_estimate)


def test_a_stiff_plain_loop_agrees_with_plain_steps() -> None:
    # Oracle: plain steps of 1 ms, stable to 2.78 for a rate of up to 1000/s. Tolerance: what release promises, doubled for theirs.
    loop = plain(largest_clearance_per_s=300.0, delay_s=1.0)
    offset = 0.2 * loop.rest().state
    release = simulate(loop, duration=8.0, offset=offset, purpose="release")
    oracle = runge_kutta(run_of(loop, 8.0, offset), release.times, 0.001, error_estimate=0.0)
    assert release.status == "completed"
    assert difference(release, oracle) < 2e-5


def _drawn(kind: str, data: st.DataObject) -> object:
    numbers = {item.name: data.draw(st.floats(item.minimum, item.maximum), item.name) for item in LOOPS[kind].specifications}
    return LOOPS[kind]().with_numbers(**numbers)


@settings(max_examples=15)
@given(st.sampled_from(sorted(LOOPS)), st.data())
def test_finite_numbers_in_range_never_give_nan_nor_negative_ventilation(kind: str, data: st.DataObject) -> None:
    loop = _drawn(kind, data)
    try:
        channels = sorted(loop.form().channels)  # type: ignore[attr-defined]
        loop.rest()  # type: ignore[attr-defined]
    except InvalidInputError:
        return
    duration = {"breathing": 120.0, "plain": 20.0 * loop.delay, "reflex": 1.0}[kind]  # type: ignore[attr-defined]
    channel = data.draw(st.sampled_from(channels), "channel")
    push = pulse(channel, 0.1 * duration, 0.05 * duration, data.draw(st.floats(-10.0, 10.0), "amplitude"))
    trace = simulate(loop, duration=duration, disturbances=push)
    assert trace.status in ("completed", "low_accuracy", "diverged")
    assert np.all(np.isfinite(trace.states)) and np.all(np.isfinite(trace.output))
    if kind != "reflex":
        assert trace.output.min(initial=0.0) >= 0.0


def test_a_diverging_loop_is_a_status() -> None:
    from support.linear_loop import linear_form, linear_rest

    trace = simulate(linear_form(-50.0, 1.0, 1.0), rest=linear_rest(), offset=1.0, duration=100.0)
    assert trace.status == "diverged"
    assert np.all(np.isfinite(trace.states)) and 0 < trace.times.size < 1201


@pytest.mark.parametrize("purpose", ["drag", "release"])
def test_a_form_with_its_rest_is_the_loop(purpose: str) -> None:
    loop = damped()
    a = simulate(loop, duration=60.0, offset={"PaCO2": 1.0}, purpose=purpose)  # type: ignore[arg-type]
    b = simulate(loop.form(), rest=loop.rest(), duration=60.0, offset=[1.0, 0.0, 0.0], purpose=purpose)  # type: ignore[arg-type]
    assert np.array_equal(a.states, b.states)
    assert a.state("PaCO2")[0] == pytest.approx(loop.rest().state[0] + 1.0, rel=1e-14)


def test_output_times_are_kept() -> None:
    times = np.array([0.0, 0.7, 59.9, 60.0])
    trace = simulate(damped(), duration=60.0, offset=1.0, output_times=times)
    assert np.array_equal(trace.times, times)
    dense = simulate(damped(), duration=60.0, offset=1.0, output_times=601)
    np.testing.assert_allclose(trace.states[[0, 1, 3]], dense.states[[0, 7, 600]], rtol=1e-12)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"duration": 0.0}, "duration must be finite and positive"),
        ({"duration": math.nan}, "duration must be finite and positive"),
        ({"duration": 10.0, "purpose": "fast"}, "purpose must be 'drag' or 'release'"),
        ({"duration": 10.0, "offset": [1.0]}, "offset must be one number or one a state"),
        ({"duration": 10.0, "offset": {"PaO3": 1.0}}, "no state 'PaO3'"),
        ({"duration": 10.0, "offset": math.inf}, "rest and offset must be finite"),
        ({"duration": 10.0, "output_times": 1}, "2 or more points"),
        ({"duration": 10.0, "output_times": [5.0, 1.0]}, "must ascend"),
        ({"duration": 10.0, "output_times": [0.0, 11.0]}, "must ascend"),
        ({"duration": 10.0, "disturbances": step("cough", 0.0, 1.0)}, "no channel 'cough'"),
    ],
)
def test_bad_arguments_are_refused(arguments: dict[str, object], message: str) -> None:
    with pytest.raises(InvalidInputError, match=message):
        simulate(damped(), **arguments)  # type: ignore[arg-type]


def test_a_batch_and_a_form_without_rest_are_refused() -> None:
    with pytest.raises(InvalidInputError, match="takes one loop"):
        simulate(damped(peripheral_gain_l_min_mmhg=np.array([1.0, 2.0])), duration=10.0)
    with pytest.raises(InvalidInputError, match="does not know its rest"):
        simulate(damped().form(), duration=10.0)
    with pytest.raises(InvalidInputError, match="every delay must be finite and positive"):
        simulate(plain(delay_s=0.0), duration=10.0)
