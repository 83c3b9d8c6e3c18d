"""Numbers as the clinic has them: by hand, by second published equations, and by what is refused."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case import clinic_numbers as clinic
from lagscape.case.case import Case, largest_spread
from lagscape.case.parameters import Basis
from lagscape.case.plausibility import implausible
from lagscape.errors import InvalidInputError

EVERY = [
    clinic.paco2_from_end_tidal(36.0),
    clinic.paco2_from_end_tidal(36.0, 5.0),
    clinic.pao2_from_spo2(90.0),
    clinic.co2_production(70.0, "male", 40.0, "asleep"),
    clinic.dead_space_fraction(150.0, 500.0),
    clinic.dead_space_fraction_from_rate(150.0, 7.5, 15.0),
    clinic.lung_volume_by_posture(3.0),
    clinic.lung_volume_predicted(1.75, "male", 40.0),
    clinic.cardiac_output(2.5, 1.75, 70.0),
    clinic.loop_delay_from_circulation_time(24.3, "ear"),
    clinic.loop_delay_from_circulation_time(26.1, "finger"),
    clinic.barometric_pressure(4559.0),
    clinic.alveolar_arterial_difference(90.0, 40.0),
]


@pytest.mark.parametrize("number", EVERY, ids=lambda number: number.parameter)
def test_every_number_can_be_laid_on_a_case_with_its_spread(number: clinic.ClinicNumber) -> None:
    case = Case.typical("breathing").with_number(number.parameter, number.value, Basis.ASSUMED, number.spread)
    assert case.value(number.parameter) == number.value
    assert case.spread(number.parameter) == number.spread
    assert 0.0 < number.spread < largest_spread(case.specifications[number.parameter])
    assert number.sentence.endswith((".", "can.")) and number.source.endswith(".")


def test_end_tidal_pco2_needs_a_gradient() -> None:
    # By hand: 36 + 3 and 36 + 5. A measured gradient leaves less doubt than a usual one.
    usual, measured = clinic.paco2_from_end_tidal(36.0), clinic.paco2_from_end_tidal(36.0, 5.0)
    assert (usual.value, measured.value) == (39.0, 41.0)
    assert usual.spread > measured.spread
    with pytest.raises(InvalidInputError, match="The arterial less end-tidal difference must be a number from -10 to 30 mmHg; got 50"):
        clinic.paco2_from_end_tidal(36.0, 50.0)


@pytest.mark.parametrize(("percent", "po2"), [(85.08, 50.0), (90.85, 60.0), (95.84, 80.0)])
def test_spo2_by_the_tabled_curve(percent: float, po2: float) -> None:
    # Oracle: the table of Severinghaus 1979. Its distance of 0.55 % from the formula over the curve's slope at the table's point,
    # which the rows beside it give: 0.58, 0.32 and 0.10 % per mmHg.
    per_mmhg = {50.0: 0.58, 60.0: 0.32, 80.0: 0.10}[po2]
    number = clinic.pao2_from_spo2(percent)
    assert number.value == pytest.approx(po2, abs=0.55 / per_mmhg)
    # The oximeter's 2 % over the same slope; the formula's own slope is within a third of the table's.
    assert number.spread == pytest.approx(2.0 / per_mmhg, rel=0.35)


def test_a_high_spo2_says_little_and_a_higher_one_is_refused() -> None:
    assert clinic.pao2_from_spo2(97.0).spread > 4.0 * clinic.pao2_from_spo2(88.0).spread
    with pytest.raises(InvalidInputError, match=r"SpO2 must be from 50 to 97 % .* got 98 %\. Above it the curve is flat"):
        clinic.pao2_from_spo2(98.0)
    with pytest.raises(InvalidInputError, match=r"got 49 %\. Take a blood gas"):
        clinic.pao2_from_spo2(49.0)


def test_co2_production_by_hand() -> None:
    # By hand, man of 70 kg and 40 years awake: (0.048 x 70 + 3.653) = 7.013 MJ/day = 1676 kcal/day = 1.1640 kcal/min; times 1.1;
    # over 3.941/0.8 + 1.106 = 6.0323 kcal per litre of CO2: 0.21226 L/min.
    number = clinic.co2_production(70.0, "male", 40.0, "awake")
    assert number.value == pytest.approx(7.013e3 / 4.184 / 1440.0 * 1.1 / 6.03225, rel=1e-12)
    assert number.value == pytest.approx(0.21226, abs=5e-5)
    asleep = clinic.co2_production(70.0, "male", 40.0, "asleep")
    assert asleep.value / number.value == pytest.approx(0.95 / 1.10, rel=1e-12)
    assert "1676 kcal/day" in number.sentence


@pytest.mark.parametrize(
    ("sex", "age", "slope", "constant"),
    [
        ("male", 25.0, 15.057, 692.2), ("male", 45.0, 11.472, 873.1), ("male", 70.0, 11.711, 587.7),
        ("female", 25.0, 14.818, 486.6), ("female", 45.0, 8.126, 845.6), ("female", 70.0, 9.082, 658.5),
    ],
)  # fmt: skip
@given(weight=st.floats(45.0, 110.0))
def test_the_basal_rate_in_joules_is_the_one_printed_in_kilocalories(
    sex: clinic.Sex, age: float, slope: float, constant: float, weight: float
) -> None:
    # Oracle: the same paper's second print of the equations, in kcal/day (Schofield 1985). Slopes are printed to 1 kJ in 34 to 63.
    vco2 = clinic.co2_production(weight, sex, age, "awake").value
    printed = (slope * weight + constant) / 1440.0 * 1.1 / (3.941 / 0.8 + 1.106)
    assert vco2 == pytest.approx(printed, rel=0.01)


def test_dead_space_two_ways() -> None:
    # By hand: 150 mL of 500 mL; 7.5 L/min in 15 breaths is 500 mL.
    assert clinic.dead_space_fraction(150.0, 500.0).value == pytest.approx(0.3, rel=1e-15)
    assert clinic.dead_space_fraction_from_rate(150.0, 7.5, 15.0).value == pytest.approx(0.3, rel=1e-15)
    with pytest.raises(InvalidInputError, match=r"Dead space must be smaller than the tidal volume; got 500 and 400 mL\. No breath"):
        clinic.dead_space_fraction(500.0, 400.0)


def test_posture_moves_the_lung_volume_and_back() -> None:
    supine = clinic.lung_volume_by_posture(3.0, "seated", "supine")
    assert supine.value == pytest.approx(2.43, rel=1e-12)
    assert clinic.lung_volume_by_posture(supine.value, "supine", "seated").value == pytest.approx(3.0, rel=1e-12)
    side = clinic.lung_volume_by_posture(supine.value, "supine", "side").value
    assert side / supine.value == pytest.approx(87.3 / 81.0, rel=1e-12)
    assert clinic.lung_volume_by_posture(3.0, "supine", "supine").spread < supine.spread


@pytest.mark.parametrize(
    ("sex", "height", "age", "crapo"),
    [("male", 1.75, 40.0, 0.0472 * 175 + 0.009 * 40 - 5.29), ("female", 1.63, 50.0, 0.0360 * 163 + 0.0031 * 50 - 3.182)],
)
def test_predicted_lung_volume_agrees_with_a_second_equation(sex: clinic.Sex, height: float, age: float, crapo: float) -> None:
    # Oracle: Crapo 1982, other persons and another method. Tolerance: half the residual deviation of our equation, 0.5 to 0.6 L.
    assert clinic.lung_volume_predicted(height, sex, age, "seated").value == pytest.approx(crapo, abs=0.3)


def test_cardiac_output_from_the_index() -> None:
    # By hand: sqrt(180 x 80 / 3600) = 2 m2 exactly. Oracle of the area: Du Bois 1916, 0.007184 W^0.425 H^0.725, 1.9964 m2.
    assert clinic.cardiac_output(2.5, 1.80, 80.0).value == pytest.approx(5.0, rel=1e-12)
    assert clinic.cardiac_output(1.0, 1.80, 80.0).value == pytest.approx(0.007184 * 80.0**0.425 * 180.0**0.725, rel=0.02)


def test_the_finger_s_time_is_never_the_loop_s() -> None:
    # Oracle: ear 14.9 and 9.0 s (Ryan and Bradley 2005), finger 26.1 and 18.5 s (Kwon 2014), with and without heart failure: the ear's
    # own spread is 3.4 and 1.8 s.
    for finger, ear, spread in ((26.1, 14.9, 3.4), (18.5, 9.0, 1.8)):
        number = clinic.loop_delay_from_circulation_time(finger, "finger")
        assert number.value == pytest.approx(ear, abs=spread)
        assert number.value < 0.7 * finger
        low, high = number.value * math.exp(-2 * number.spread), number.value * math.exp(2 * number.spread)
        assert low < ear < high
        assert "Measure at the ear" in number.sentence
    direct = clinic.loop_delay_from_circulation_time(24.3, "ear")
    assert direct.value == 24.3 and direct.spread < clinic.loop_delay_from_circulation_time(26.1, "finger").spread
    with pytest.raises(InvalidInputError, match="The site must be one of ear, finger; got 'toe'"):
        clinic.loop_delay_from_circulation_time(24.3, "toe")  # type: ignore[arg-type]


def test_pressure_by_altitude_and_its_range() -> None:
    assert clinic.barometric_pressure(0.0).value == pytest.approx(759.5, abs=0.1)
    with pytest.raises(InvalidInputError, match="Altitude must be a number from 0 to 9000 m; got 9500"):
        clinic.barometric_pressure(9500.0)


def test_the_alveolar_arterial_difference_and_its_impossible_sign() -> None:
    # By hand: 0.2093 x 713 - 40/0.8 + 40 x 0.2093 x 0.25 = 101.32; less 90.
    assert clinic.alveolar_arterial_difference(90.0, 40.0).value == pytest.approx(11.324, abs=1e-3)
    with pytest.raises(InvalidInputError, match=r"PaO2 120 mmHg lies above the alveolar PO2 of 101\.3 mmHg"):
        clinic.alveolar_arterial_difference(120.0, 40.0)


def test_a_gain_from_the_apnoeic_threshold_and_a_negative_reserve() -> None:
    # By hand: 6 L/min over 40 - 37 mmHg.
    assert clinic.whole_gain_from_threshold(40.0, 37.0, 6.0) == 2.0
    with pytest.raises(InvalidInputError, match=r"The CO2 reserve must be above 0; .* 41 mmHg .* 39 mmHg leave -2 mmHg, and nobody"):
        clinic.whole_gain_from_threshold(39.0, 41.0, 6.0)


@pytest.mark.parametrize(
    ("ask", "message"),
    [
        (lambda: clinic.co2_production(20.0, "male", 40.0, "awake"), "Weight must be a number from 30 to 250 kg; got 20"),
        (lambda: clinic.co2_production(70.0, "male", 12.0, "awake"), "Age must be a number from 18 to 110 years; got 12"),
        (lambda: clinic.co2_production(70.0, "man", 40.0, "awake"), "Sex must be one of male, female; got 'man'"),
        (lambda: clinic.co2_production(70.0, "male", 40.0, "running"), "State must be one of asleep, awake; got 'running'"),
        (lambda: clinic.lung_volume_by_posture(3.0, "prone"), "Posture must be one of seated, supine, side; got 'prone'"),
        (lambda: clinic.lung_volume_predicted(175.0, "male", 40.0), r"Height must be a number from 1.3 to 2.2 m; got 175"),
        (lambda: clinic.paco2_from_end_tidal(math.nan), "End-tidal PCO2 must be finite and positive"),
        (lambda: clinic.paco2_from_end_tidal(90.0), "Resting PaCO2 must be a number from 15 to 80 mmHg; got 93"),
        (lambda: clinic.cardiac_output(True, 1.8, 80.0), "Cardiac index must be finite and positive"),
    ],
)
def test_what_cannot_be_is_refused_in_words(ask: object, message: str) -> None:
    with pytest.raises(InvalidInputError, match=message):
        ask()  # type: ignore[operator]


# ---- combinations -----------------------------------------------------------------------------------------------------------------
LOOP = Case.typical("breathing").loop()


def test_no_starting_case_is_implausible() -> None:
    for item in type(LOOP).starting_cases:
        assert implausible(Case.from_starting_case(item.name).loop()) == (), item.name
    assert implausible(Case.typical("reflex").loop()) == ()


@pytest.mark.parametrize(
    ("numbers", "words"),
    [
        # By hand: 863 x 0.5 / (0.4 x 20) = 53.9 L/min; 863 x 0.06 / (0.9 x 60) = 0.96; 0.25 / (0.0065 x 1) = 38 mmHg.
        ({"co2_production_l_min": 0.5, "dead_space_fraction": 0.6, "resting_paco2_mmhg": 20.0}, "Rest needs 54 L/min of ventilation, which"),
        ({"co2_production_l_min": 0.06, "dead_space_fraction": 0.1, "resting_paco2_mmhg": 60.0}, "Rest needs only 1.0 L/min"),
        ({"co2_production_l_min": 0.25, "cardiac_output_l_min": 1.0}, "Mixed venous PCO2 would stand 38 mmHg above"),
        ({"peripheral_delay_s": 15.0, "central_delay_s": 12.0}, r"The delay to the brainstem \(12 s\) is shorter than"),
        ({"inspired_pco2_mmhg": 40.0}, "Resting PaCO2 must lie above inspired PCO2; got 40 and 40 mmHg"),
        ({"gases": "co2_o2", "barometric_pressure_mmhg": 250.0}, "leave an arterial PO2 of"),
        ({"peripheral_gain_l_min_mmhg": -3.0, "central_gain_l_min_mmhg": 0.5}, "The CO2 reserve is -1.* nobody breathes under"),
    ],
)
def test_an_impossible_combination_is_said_in_a_sentence(numbers: dict[str, float], words: str) -> None:
    import re

    said = implausible(replace(LOOP, **numbers))
    assert len(said) == 1 and re.search(words, said[0]), said


def test_exercise_may_need_what_rest_may_not() -> None:
    runner = replace(LOOP, co2_production_l_min=2.5, dead_space_fraction=0.2, cardiac_output_l_min=18.0)
    assert runner.rest().output > 60.0 and implausible(runner) == ()
