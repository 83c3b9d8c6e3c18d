"""The fit's answers: what is pinned down, what trades off, what is refused. Coverage is in test_fit_coverage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lagscape.case.case import Case, LeverSetting
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.questions.fit import FitStatus, Measured, RingDown, fit_recording, measured_from
from lagscape.questions.fit_measured import CYCLE_ERROR, error_of
from lagscape.questions.fit_words import warning_sentence
from lagscape.questions.standing import Standing, judge
from lagscape.recordings import Spread, measure_breathing, measure_saturation_lag
from questions.fit_truths import TWO_GASES, about, drawn, loop_of, recording_of, with_apnoea

CASE = Case.from_starting_case("heart-failure-periodic")
CYCLES = Measured(about(64.0, 4.0, 25), about(0.60, 0.03, 25))


@pytest.fixture(scope="module")
def fitted():
    return fit_recording(CASE, CYCLES)


def test_the_fitted_case_shows_what_was_measured(fitted) -> None:
    # Oracle: the standing's own cycle with 16 harmonics, one loop. Tolerance: two standard errors, which a well-explained feature keeps.
    judged = judge(fitted.case)
    assert fitted.status is FitStatus.FITTED
    assert judged.standing is Standing.HUNTS
    length = next(item for item in fitted.misfits if item.name == "cycle_length_s")
    assert abs(judged.cycle_length - 64.0) < 2.0 * length.standard_error
    assert length.fitted == pytest.approx(judged.cycle_length, rel=5e-3)
    assert length.standard_errors == pytest.approx(np.log(length.fitted / 64.0) * 64.0 / length.standard_error, abs=0.05)


def test_a_cycle_pins_down_the_delay_and_not_the_stores(fitted) -> None:
    # Reason: the loop goes round once in a cycle; the tissue store hardly turns in one (numbers of `narrowed` follow by definition).
    delay, store = fitted.number("peripheral_delay_s"), fitted.number("tissue_volume_l")
    assert delay.pinned and delay.narrowed < 0.5
    assert not store.pinned and store.narrowed > 0.8
    assert "tissue_volume_l" in fitted.left and "tissue_volume_l" not in fitted.pinned
    assert all(item.pinned is (item.narrowed < 0.7) for item in fitted.numbers)
    assert any(sentence.startswith("The recording pins down: ") and "carotid" in sentence for sentence in fitted.sentences)
    assert any(sentence.startswith("It leaves about as they were: ") and "tissue CO2 store" in sentence for sentence in fitted.sentences)


def test_bases_follow_the_rule(fitted) -> None:
    for name, number in fitted.case.numbers.items():
        before = CASE.numbers[name]
        if name in fitted.pinned:
            assert number.basis is Basis.MEASURED
            assert number.spread == pytest.approx(fitted.number(name).narrowed * CASE.spread(name))
        elif number.value == before.value:
            assert number == before
        else:
            assert number.basis is Basis.ASSUMED


def test_a_measured_number_is_held_where_it_was_measured() -> None:
    # Oracle: the prior alone. A delay measured to 1 % may not move by 5 %, whatever the cycle says; the other numbers take the strain.
    held = CASE.with_number("peripheral_delay_s", 24.3, Basis.MEASURED, 0.01)
    fit = fit_recording(held, Measured(about(75.0, 4.0, 25), about(0.60, 0.03, 25)))
    assert fit.case.value("peripheral_delay_s") == pytest.approx(24.3, rel=0.05)
    assert not fit.number("peripheral_delay_s").pinned
    assert fit.case.numbers["peripheral_delay_s"].basis is Basis.MEASURED


def test_the_lag_tells_of_the_loop_delay() -> None:
    # Oracle: with a long lag the posterior delay must be longer than with a short one, and both narrower than without a lag.
    weak = replace(CYCLES, cycle_length_s=Spread(64.0, 40.0, 100.0, 1))
    plain, short, long = (
        fit_recording(CASE, item)
        for item in (weak, replace(weak, lag_s=about(20.0, 2.0, 20), lag_site="ear"), replace(weak, lag_s=about(32.0, 2.0, 20), lag_site="ear"))
    )
    delays = [fit.number("peripheral_delay_s") for fit in (plain, short, long)]
    assert delays[1].posterior.median < 0.85 * delays[2].posterior.median
    assert max(delays[1].narrowed, delays[2].narrowed) < delays[0].narrowed


def test_two_explanations_are_warned_of() -> None:
    # Oracle: a loop known to be on its boundary, with a cycle length that is hardly known, lies on the boundary's own line in the plane of
    # sensitivity against delay, where a longer delay takes less sensitivity; so the correlation must be strongly negative.
    free = CASE.with_number("central_gain_l_min_mmhg", 0.1, Basis.MEASURED, 0.05)
    for name in ("peripheral_delay_s", "central_delay_s"):
        free = free.with_number(name, free.value(name), Basis.ASSUMED, 0.6)
    for name in ("lung_volume_l", "cardiac_output_l_min", "dead_space_fraction", "resting_paco2_mmhg", "arterial_po2_mmhg", "co2_production_l_min"):
        free = free.with_number(name, free.value(name), Basis.MEASURED, 0.005)
    fit = fit_recording(free, Measured(Spread(60.0, 20.0, 180.0, 1), hypopnoea=True))
    assert fit.trade < -0.6
    assert "More sensitivity or more delay explain this recording equally" in fit.warning
    assert fit.warning in fit.sentences


def test_two_separate_loops_are_warned_of() -> None:
    # Oracle: either chemoreflex alone can bring this loop to its boundary with this cycle; both loops found must stand there.
    steady = Case.from_starting_case("heart-failure-steady")
    fit = fit_recording(steady, Measured(Spread(55.0, 30.0, 70.0, 3), hypopnoea=True))
    assert fit.explanations == 2
    assert "Two different loops explain this recording equally: one has " in fit.warning and "CO2 gain of" in fit.warning


def test_the_warning_has_words_for_each_kind() -> None:
    assert warning_sentence(0.0, 1) == ""
    assert "one has lung gas volume of 2, another of 3 L" in warning_sentence(0.0, 2, ("Lung gas volume", "L", 2.0, 3.0))
    assert "go together" in warning_sentence(0.8, 1)


def test_no_warning_where_cycle_and_duty_ratio_part_them(fitted) -> None:
    assert abs(fitted.trade) < 0.6 and fitted.warning == "" and fitted.explanations == 1


def test_equal_seeds_give_equal_answers(fitted) -> None:
    assert fit_recording(CASE, CYCLES) == fitted
    other = fit_recording(CASE, CYCLES, seed=1)
    # The fitted case comes from the climb, which draws nothing; the intervals move by their sampling error, under a tenth of their width.
    assert other.case.value("peripheral_delay_s") == pytest.approx(fitted.case.value("peripheral_delay_s"), rel=1e-3)
    a, b = (fit.number("peripheral_delay_s").posterior for fit in (other, fitted))
    assert a != b and abs(a.median - b.median) < 0.1 * (b.high - b.low)


def test_cycles_without_apnoea_put_the_loop_on_its_boundary() -> None:
    # Oracle: Sands et al. 2011, a duty ratio of 1 is a loop gain of 1.
    fit = fit_recording(CASE, Measured(about(62.0, 4.0, 20), hypopnoea=True))
    gain = next(item for item in fit.figures if item.name == "loop_gain")
    assert 0.8 < gain.posterior.low < 1.0 < gain.posterior.high < 1.25 and gain.pinned
    assert any("near its boundary" in sentence for sentence in fit.sentences)


def test_a_ring_down_puts_the_loop_inside_its_boundary() -> None:
    # Oracle: the roots of the fitted loop itself, within two standard errors of what was measured.
    fit = fit_recording(CASE, Measured(ring_down=RingDown(about(60.0, 5.0, 6), about(0.2, 0.05, 6))))
    judged = judge(fit.case)
    assert judged.standing is not Standing.HUNTS
    damping = next(item for item in fit.misfits if item.name == "damping_ratio")
    root = judged.roots.oscillatory
    assert abs(-root.real / abs(root) - 0.2) < 2.0 * damping.standard_error
    assert any("6 sighs or arousals" in sentence for sentence in fit.sentences)


def test_the_weak_source_says_so_and_counts_less() -> None:
    strong = RingDown(about(60.0, 5.0, 6), about(0.2, 0.05, 6))
    weak = replace(strong, source="variability")
    fits = [fit_recording(CASE, Measured(ring_down=item)) for item in (strong, weak)]
    gains = [next(item for item in fit.figures if item.name == "loop_gain") for fit in fits]
    assert gains[1].narrowed > gains[0].narrowed
    assert any("That is weak" in sentence for sentence in fits[1].sentences)


def test_a_recording_that_does_not_go_with_the_case_is_said() -> None:
    fit = fit_recording(CASE, Measured(about(20.0, 1.0, 20), about(0.5, 0.03, 20)))
    assert fit.status is FitStatus.POOR
    assert "does not go with this case" in fit.sentences[0] or "No plausible loop" in fit.sentences[0]


def test_where_no_loop_fits_the_case_stays() -> None:
    tight = CASE
    for name in CASE.numbers:
        tight = tight.with_number(name, tight.value(name), Basis.MEASURED, 0.001)
    fit = fit_recording(tight, Measured(about(25.0, 1.0, 20), about(0.5, 0.03, 20)))
    assert fit.status is FitStatus.NOT_FITTED and fit.case == tight and not fit.numbers
    assert "No loop near this case's numbers shows a cycle of 25 s with a duty ratio of 0.50" in fit.sentences[0]
    assert "Start from a closer case" in fit.sentences[1]


def test_levers_are_named_and_not_laid() -> None:
    levered = CASE.with_levers(LeverSetting("oxygen_l_min", 2.0))
    fit = fit_recording(levered, CYCLES)
    assert fit.case.levers == levered.levers
    assert any("without the levers" in sentence for sentence in fit.sentences)


def test_the_error_of_a_median() -> None:
    # Oracle: the asymptotic standard error of a normal median, sqrt(pi / 2) s / sqrt(n).
    spread = about(60.0, 6.0, 36)
    assert error_of(spread, 0.0, 0.0) == pytest.approx(np.sqrt(np.pi / 2.0) * 6.0 / 6.0, rel=1e-4)
    assert error_of(spread, 0.0, 3.0) == pytest.approx(np.hypot(np.sqrt(np.pi / 2.0), 3.0), rel=1e-4)
    assert error_of(Spread(60.0, 60.0, 60.0, 1), 60.0 * CYCLE_ERROR, 0.0) == pytest.approx(1.2533 * 1.8)


GOOD = about(60.0, 3.0, 20)
DUTY = about(0.6, 0.03, 20)


@pytest.mark.parametrize(
    ("measured", "words"),
    [
        (Measured(), "got neither"),
        (Measured(GOOD, DUTY, ring_down=RingDown(GOOD, DUTY)), "either cycles or rings down"),
        (Measured(duty_ratio=DUTY, ring_down=RingDown(GOOD, DUTY)), "comes without duty ratio"),
        (Measured(GOOD, DUTY, hypopnoea=True), "got both"),
        (Measured(GOOD), "got neither. Say which"),
        (Measured(GOOD, hypopnoea=True, lag_s=GOOD), "need a duty ratio"),
        (Measured(GOOD, DUTY, lag_s=GOOD, lag_site="toe"), "ear, finger"),
        (Measured(GOOD, about(1.2, 0.1, 5)), "Duty ratio must lie between 0 and 1"),
        (Measured(about(float("nan"), 1.0, 5), DUTY), "Cycle length must lie between"),
        (Measured(Spread(60.0, 61.0, 59.0, 5), DUTY), "quartiles in order"),
        (Measured(GOOD, DUTY, lag_s=about(-3.0, 1.0, 5)), "Lag must lie"),
        (Measured(GOOD, DUTY, saturation_drop=about(101.0, 1.0, 5)), "Drop of saturation"),
        (Measured(ring_down=RingDown(GOOD, about(1.5, 0.1, 5))), "Damping ratio"),
        (Measured(ring_down=RingDown(about(900.0, 1.0, 5), DUTY)), "Period of the ring-down"),
    ],
)
def test_what_cannot_be_used_is_refused(measured: Measured, words: str) -> None:
    with pytest.raises(InvalidInputError, match=words):
        fit_recording(CASE, measured)


def test_other_refusals() -> None:
    with pytest.raises(InvalidInputError, match="got the reflex loop"):
        fit_recording(Case.typical("reflex"), CYCLES)
    with pytest.raises(InvalidInputError, match="seed must be a whole number"):
        fit_recording(CASE, CYCLES, seed=-1)
    with pytest.raises(InvalidInputError, match="number of draws must be"):
        fit_recording(CASE, CYCLES, draws=True)


def test_an_unknown_number_is_refused(fitted) -> None:
    with pytest.raises(InvalidInputError, match="has no number 'sensor_delay_s'; it has: "):
        fitted.number("sensor_delay_s")


def test_whole_recordings_end_to_end() -> None:
    # Oracle: the truth behind three simulated recordings (breaths, noise at 10 dB, SpO2), fitted from the wrong place: the prior's middle.
    # 90 % intervals of 45 numbers hold 40.5 give or take 2; three standard deviations.
    prior, points, shown, _ = drawn(TWO_GASES, 24, 3)
    numbers = prior.numbers(points)
    members = with_apnoea(shown, 3)
    held = asked = 0
    for index in members:
        recording = recording_of(loop_of(TWO_GASES, numbers, index), seed=int(index))
        breathing = measure_breathing(recording, "effort")
        measured = measured_from(breathing, measure_saturation_lag(recording, breathing))
        fit = fit_recording(TWO_GASES, measured)
        assert fit.status is FitStatus.FITTED
        held += sum(item.posterior.low <= numbers[item.name][index] <= item.posterior.high for item in fit.numbers)
        asked += len(fit.numbers)
    print(held, asked)
    assert asked == 45 and held >= 34
