"""The reflex loop: its delay, its load, its torque, each against the arithmetic of DESIGN's equations by hand."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.loops.reflex import ReflexLoop
from support.drawn_loops import typical_numbers

EPS = np.finfo(float).eps
TYPICAL = typical_numbers("reflex")


def loop(**numbers: float) -> ReflexLoop:
    return ReflexLoop(**{**TYPICAL, **numbers})


def test_the_delay_is_the_sum_of_its_parts() -> None:
    # By hand: 0.8/50 + 0.8/40 + 0.010 = 0.016 + 0.020 + 0.010 s.
    person = loop(path_length_m=0.8, afferent_velocity_m_s=50.0, efferent_velocity_m_s=40.0, fixed_delay_s=0.010)
    assert person.delay == pytest.approx(0.046, rel=8 * EPS)
    assert set(person.form().delays) == {float(person.delay)}


def test_demyelination_multiplies_the_conducted_part_only() -> None:
    # Computed: velocities 30 % lower multiply the conducted part by 1/0.7 = 1.43.
    person = loop()
    slow = person.with_numbers(
        afferent_velocity_m_s=0.7 * TYPICAL["afferent_velocity_m_s"], efferent_velocity_m_s=0.7 * TYPICAL["efferent_velocity_m_s"]
    )
    conducted = person.delay - TYPICAL["fixed_delay_s"]
    assert slow.delay - TYPICAL["fixed_delay_s"] == pytest.approx(conducted / 0.7, rel=16 * EPS)


def test_a_longer_delay_slows_both_velocities_alike() -> None:
    person = loop()
    later = person.with_delay(2.0 * person.delay)
    assert later.fixed_delay_s == person.fixed_delay_s
    ratio = later.afferent_velocity_m_s / person.afferent_velocity_m_s
    assert ratio < 1.0
    assert later.efferent_velocity_m_s / person.efferent_velocity_m_s == pytest.approx(ratio, rel=4 * EPS)


@pytest.mark.parametrize("share", [0.5, 0.1])
def test_a_delay_shorter_than_the_fixed_part_can_still_be_asked_for(share: float) -> None:
    person = loop(fixed_delay_s=0.02)
    wanted = share * 0.02
    assert person.with_delay(wanted).delay == pytest.approx(wanted, rel=16 * EPS)
    several = person.with_delay(np.array([wanted, 0.05]))
    np.testing.assert_allclose(several.delay, [wanted, 0.05], rtol=16 * EPS)


def test_a_held_mass_adds_inertia_and_the_torque_that_holds_it() -> None:
    # By hand: 2 kg at 0.15 m adds 0.045 kg m2 and 2 x 9.80665 x 0.15 = 2.941995 N m.
    person = loop(inertia_kg_m2=0.03, held_mass_kg=2.0, load_distance_m=0.15, largest_torque_n_m=10.0)
    assert person.total_inertia == pytest.approx(0.075, rel=4 * EPS)
    form = person.form()
    assert form.plant[1, 0] == pytest.approx(-TYPICAL["stiffness_n_m_rad"] / 0.075, rel=8 * EPS)
    # The torque about the held posture can fall by the load's share plus the largest torque, and rise by what is left.
    low = form.drive.value(np.zeros(2), np.array([-50.0, 0.0]))
    high = form.drive.value(np.zeros(2), np.array([50.0, 0.0]))
    assert low == pytest.approx(-10.0 - 2.941995, rel=1e-12)
    assert high == pytest.approx(10.0 - 2.941995, rel=1e-12)


@given(share=st.floats(0.0, 0.95))
def test_a_load_flattens_the_torque_s_slope(share: float) -> None:
    # Oracle: d tanh/da at tanh a0 = s is 1 - s^2.
    mass = share * 10.0 / (9.80665 * 0.15)
    form = loop(held_mass_kg=mass, load_distance_m=0.15, largest_torque_n_m=10.0).form()
    slope = form.drive.gradient(np.zeros(2), np.zeros(2))
    assert slope[2] == pytest.approx(10.0 * (1.0 - share**2), rel=1e-11)
    assert slope[[0, 1, 3]].tolist() == [0.0, 0.0, 0.0]


def test_doubling_the_inertia_slows_the_unloaded_resonance_by_root_two() -> None:
    # Hand resonance w = sqrt(K/J): doubling J takes 8 Hz to 5.66 Hz (common textbook arithmetic), without damping or reflex.
    stiffness = 0.003 * (2.0 * math.pi * 8.0) ** 2
    for inertia, frequency in ((0.003, 8.0), (0.006, 5.66)):
        plant = loop(inertia_kg_m2=inertia, stiffness_n_m_rad=stiffness, damping_n_m_s_rad=0.0).form().plant
        assert float(np.abs(np.linalg.eigvals(plant).imag).max()) / (2.0 * math.pi) == pytest.approx(frequency, abs=0.005)


def test_an_external_torque_accelerates_the_joint() -> None:
    channel = loop(inertia_kg_m2=0.04).form().channels["torque"]
    assert np.asarray(channel.plant).tolist() == [0.0, 25.0]


def test_the_angle_is_drawn_in_degrees() -> None:
    states = np.array([[math.pi / 6.0, 0.0, 0.0, 0.0]])
    angle = next(signal for signal in loop().signals(states, np.zeros(1)) if signal.name == "angle")
    assert angle.unit == "deg"
    assert angle.values[0] == pytest.approx(30.0, rel=4 * EPS)


@pytest.mark.parametrize("mass", [10.0, np.array([0.0, 10.0])])
@pytest.mark.parametrize("question", ["rest", "form"])
def test_a_load_that_cannot_be_held_is_refused(mass: Any, question: str) -> None:
    # By hand: 10 kg at 0.15 m asks 14.7 N m of 10: 147 %.
    person = ReflexLoop(**{**TYPICAL, "held_mass_kg": mass, "load_distance_m": 0.15, "largest_torque_n_m": 10.0})
    with pytest.raises(InvalidInputError, match=r"more torque than the largest torque; got 147 % of it\. Lower the mass"):
        getattr(person, question)()
