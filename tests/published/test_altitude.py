"""A newcomer at 4,559 m against the published first night, and the starting cases against the measured cycles and CO2 reserves."""

from __future__ import annotations

import pytest

from lagscape.case.case import Case
from lagscape.engine.cycle import CycleStatus, limit_cycle
from lagscape.engine.margins import margins
from lagscape.engine.roots import rightmost_roots
from lagscape.loops import gases

# Nussbaumer-Ochsner 2012, Sleep 35:419, medians of 16 mountaineers: 490 m, then the first night at 4,559 m.
SPO2_LOW_ALTITUDE, SPO2_HIGH_ALTITUDE = 96.0, 67.0
VENTILATION_LOW_ALTITUDE, VENTILATION_HIGH_ALTITUDE = 4.4, 6.3


def period_s(loop) -> float:
    found = limit_cycle(loop.form(), loop.rest())
    assert found.status is CycleStatus.CONVERGED
    assert found.period_s is not None
    return found.period_s


def loop_of(name: str):
    return Case.from_starting_case(name).loop()


def test_the_newcomer_lies_inside_the_published_change() -> None:
    night = loop_of("altitude-4559-night")
    assert night.barometric_pressure_mmhg == pytest.approx(float(gases.barometric_pressure_mmhg(4559.0)), abs=0.05)
    rest = night.rest()
    spo2 = 100.0 * float(gases.saturation(rest.state[2]))
    assert SPO2_HIGH_ALTITUDE < spo2 < SPO2_LOW_ALTITUDE
    assert VENTILATION_LOW_ALTITUDE < rest.output < VENTILATION_HIGH_ALTITUDE
    # And nearer the mountain than the valley: seen 70.7 % and 6.16 L/min.
    assert spo2 < 0.5 * (SPO2_HIGH_ALTITUDE + SPO2_LOW_ALTITUDE)
    assert rest.output > 0.5 * (VENTILATION_LOW_ALTITUDE + VENTILATION_HIGH_ALTITUDE)


def test_the_same_person_at_490_m_breathes_as_published_and_steadily() -> None:
    # CO2 production of the night case; PaCO2 42 mmHg asleep. Oracle: 4.4 L/min to the digit printed; SpO2 96 to the digit printed.
    valley = loop_of("altitude-4559-night").with_numbers(
        barometric_pressure_mmhg=float(gases.barometric_pressure_mmhg(490.0)), resting_paco2_mmhg=42.0
    )
    rest = valley.rest()
    assert rest.output == pytest.approx(VENTILATION_LOW_ALTITUDE, abs=0.05)
    assert 100.0 * float(gases.saturation(rest.state[2])) == pytest.approx(SPO2_LOW_ALTITUDE, abs=0.5)
    assert margins(valley.form(), rest).stable


def test_the_newcomer_hunts_with_short_cycles_and_heart_failure_with_long_ones() -> None:
    # Oracle: under 30 s at altitude (20.5 s with 7.9 s of apnoea at 6,300 m: West 1986), over 45 s in heart failure (59.0 +- 4.9 s:
    # Hall 1996).
    night, failing = loop_of("altitude-4559-night"), loop_of("heart-failure-periodic")
    for loop in (night, failing):
        root = rightmost_roots(loop.form(), loop.rest()).oscillatory
        assert root is not None and root.real > 0.0
    assert period_s(night) < 30.0
    assert period_s(failing) > 45.0
    assert period_s(loop_of("altitude-4559-day")) < 30.0


def test_an_acclimatised_climber_at_6300_m_cycles_as_measured() -> None:
    # Oracle: 20.5 s (West 1986), its spread not printed where we read it: 20 %, twice the spread of the delay that sets the cycle.
    # PaCO2 18.4 mmHg at 6,300 m: from memory, American Medical Research Expedition.
    climber = loop_of("altitude-4559-night").with_numbers(
        barometric_pressure_mmhg=351.0, resting_paco2_mmhg=18.4, co2_production_l_min=0.2, alveolar_arterial_difference_mmhg=7.9
    )
    assert period_s(climber) == pytest.approx(20.5, rel=0.2)
    # 7.9 s of apnoea in each, 38.5 % of the cycle; seen 7.9 of 19.3 s, 41 %. Its spread, too, we have not read: 20 %.
    silent = limit_cycle(climber.form(), climber.rest()).silent_fraction
    assert silent == pytest.approx(7.9 / 20.5, rel=0.2)


def test_a_controller_that_stays_as_at_490_m_does_not_give_the_published_ventilation() -> None:
    # A limit of the model, kept in sight: carried up at once, with the valley's own line, it breathes 4.5 L/min, not 6.3: the lines of
    # all PaO2 meet at the apnoeic threshold, so that PaCO2 cannot fall below it. Acclimatisation moves the line; a case at altitude
    # needs its own PaCO2.
    valley = loop_of("altitude-4559-night").with_numbers(
        barometric_pressure_mmhg=float(gases.barometric_pressure_mmhg(490.0)), resting_paco2_mmhg=42.0
    )
    carried = valley.freeze_line().with_numbers(barometric_pressure_mmhg=443.5)
    rest = carried.rest()
    assert valley.rest().output < rest.output < 5.0
    assert rest.state[0] > valley.resting_paco2_mmhg - valley.co2_reserve_mmhg()


def test_co2_reserve_of_heart_failure_lies_on_the_published_sides() -> None:
    # Oracle: Xie 2002, AJRCCM 165:1245: with central apnoea 2.8 +- 0.3, without 5.1 +- 0.7 mmHg. Seen here: 2.28 and 2.84. The order
    # and the side of the group with apnoea agree; the steady case's size does not, since its gain is one measured awake.
    with_apnoea, without = loop_of("heart-failure-periodic"), loop_of("heart-failure-steady")
    assert with_apnoea.co2_reserve_mmhg() < 2.8 < without.co2_reserve_mmhg()
    # Asleep the gain is 0.75/1.60 of awake (Douglas 1982): then the steady case is within two spreads of the published 5.1.
    asleep = without.with_sensitivity(without.sensitivity * 0.75 / 1.60)
    assert asleep.co2_reserve_mmhg() == pytest.approx(5.1, abs=2 * 0.7)


def test_idiopathic_central_apnoea_cycles_as_measured() -> None:
    # Oracle: Hall 1996, 37.3 +- 3.0 s with a lung-to-ear time of 10.3 s. The loop with the measured gains rings at this period.
    idiopathic = loop_of("idiopathic-central-apnoea")
    found = rightmost_roots(idiopathic.form(), idiopathic.rest()).oscillatory
    assert found is not None and found.real < 0.0
    assert 2.0 * 3.141592653589793 / abs(found.imag) == pytest.approx(37.3, abs=3.0)
