"""The public surface: what `from lagscape import ...` gives, and that importing the package stays cheap."""

import subprocess
import sys

import numpy as np
import pytest

import lagscape
from lagscape import Case, analyse, boundary, simulate
from lagscape.case.parts import LeverSetting


def test_every_public_name_is_there():
    for name in lagscape.__all__:
        assert getattr(lagscape, name) is not None


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="has no attribute 'nonsense'"):
        lagscape.nonsense  # noqa: B018


def test_importing_the_package_and_analysing_a_case_asks_for_no_scipy():
    # The drag path runs on numpy alone; a fresh interpreter shows what is really imported.
    program = (
        "import sys, lagscape; lagscape.analyse(lagscape.Case.from_starting_case('healthy-asleep'));"
        "lagscape.boundary(lagscape.Case.from_starting_case('healthy-asleep')); print('scipy' in sys.modules)"
    )
    path = {"PYTHONPATH": ":".join(sys.path)}
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True, env=path)
    assert done.stdout.strip() == "False"


def test_analyse_simulate_and_boundary_tell_one_story():
    # Oracle: three independent routes (roots and harmonic balance, the time-domain run, the frequency-domain boundary) must agree.
    case = Case.from_starting_case("heart-failure-periodic")
    answer, run, edge = analyse(case), simulate(case, 1200.0), boundary(case)
    loop = case.loop()
    critical = float(np.interp(loop.delay, edge.delays, edge.critical))
    # The boundary is drawn through points; linear interpolation between them is good to 1e-3 of the sensitivity.
    assert critical == pytest.approx(loop.sensitivity * answer.gain_margin, rel=1e-3)
    silences = [(a, b) for a, b in run.trace.silences if a > 600.0][:-1]
    starts = np.array([a for a, _ in silences])
    # Harmonic balance at 16 harmonics is good to about 1e-4 of the period, and the run has all but reached its cycle by 600 s.
    assert np.mean(np.diff(starts)) == pytest.approx(answer.cycle_length_s, rel=2e-3)
    assert np.mean([b - a for a, b in silences]) == pytest.approx(answer.apnoea_s, rel=5e-3)


def test_levers_on_a_case_count_in_the_analysis_and_in_the_run():
    # Oracle: added dead space lets CO2 rise (alveolar ventilation equation), so that the run rests higher than without.
    case = Case.from_starting_case("heart-failure-steady")
    changed = case.with_levers(LeverSetting("added_dead_space_ml", 500.0))
    before, after = simulate(case, 300.0), simulate(changed, 300.0)
    assert after.trace.states[0, 0] > before.trace.states[0, 0] + 0.5
    assert analyse(changed).levers == (("added_dead_space_ml", 500.0),)
    assert analyse(changed).equilibrium["PaCO2"] == pytest.approx(after.trace.states[0, 0], rel=1e-12)
