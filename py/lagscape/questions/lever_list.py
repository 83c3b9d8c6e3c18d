"""Every lever of every loop: its dose, the numbers it moves and by what rule, what was published of it, its source and its caution.

The order is the order in which levers act on a loop: what moves the controller's line first, what depends on the new rest last. Cooling a
limb is not offered: it slows nerve, spindle and muscle at once, and the loop has no numbers for how they share it. Servo-controlled
ventilation is not offered either; see `cautions`.
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

from lagscape.questions import lever_rules as rules
from lagscape.questions.lever import Lever

__all__ = ["LEVERS"]

_UNPUBLISHED = "No published loop gain known to us."
_OPEN = "Not from a trial"

_READING = "A way to read the loop in another state, not a treatment."

_BREATHING = (
    Lever(
        "waking_share", "Waking", "share", 0.0, 1.0, 1.0, 0.1,
        "Resting PaCO2, CO2 production and both CO2 gains: the controller's set point, threshold and slope.",
        "From quiet sleep to waking PaCO2 falls by 2 mmHg, CO2 production rises by 15 % and both gains by 8 %, as between the healthy "
        "starting cases.",
        _UNPUBLISHED, _OPEN, f"{_READING} Lay it only on a case that is asleep.", "State", rules.waking,
    ),
    Lever(
        "rem_sleep_share", "REM sleep", "share", 0.0, 1.0, 1.0, 0.1,
        "Both CO2 gains and resting PaCO2.",
        "From NREM to REM sleep both gains fall by 40 % and PaCO2 rises by 1 mmHg. REM sleep's own irregular breathing is not in the loop.",
        "Hypercapnic response 0.45 in REM against 0.75 L/min/mmHg in NREM sleep.", "Douglas 1982, Am Rev Respir Dis 126:758",
        f"{_READING} Lay it only on a case in NREM sleep.", "State", rules.rem_sleep,
    ),
    Lever(
        "exercise_co2_rise_percent", "Exercise", "%", 0.0, 400.0, 100.0, 10.0,
        "CO2 production and cardiac output together, and both delays.",
        "CO2 production is multiplied by 1 plus the dose at the same PaCO2; cardiac output rises by 6 L/min per L/min of oxygen uptake "
        "(common practice, no source) and both delays shorten by its inverse.",
        _UNPUBLISHED, _OPEN, f"{_READING} A failing heart may not raise its output so.", "State", rules.exercise,
    ),
    Lever(
        "acetazolamide_mg_day", "Acetazolamide", "mg/day", 0.0, 1000.0, 250.0, 125.0,
        "The controller's line: PCO2 falls and ventilation rises, so plant gain falls. The slope stays.",
        "The apnoeic threshold falls by 15 % at 1000 mg/day (meta-analysis of Schmickl 2021, Physiol Rep 9:e15071), by half of the largest "
        "effect at 250 mg/day (assumed, no source). The slope is left alone: the same meta-analysis found no substantial change of it.",
        "Loop gain 3.4 to 2.0 (-41 %), apnoea-hypopnoea index in NREM sleep 50 to 24 an hour. In heart failure central apnoeas 49 to 23 an "
        "hour.",
        "Edwards 2012, J Physiol 590:1199; Javaheri 2006, Am J Respir Crit Care Med 173:234",
        "Sulphonamide allergy, low potassium, acidosis, kidney or liver failure. Breathing must be able to meet the acidosis: care in "
        "severe airway obstruction. Blood gases and electrolytes first and after (common practice, no source).",
        "Drug", rules.acetazolamide,
    ),
    Lever(
        "chemoreflex_gain_fall_percent", "Less chemoreflex gain", "%", 0.0, 90.0, 30.0, 5.0,
        "Peripheral and central CO2 gain, alike.",
        "Both gains are multiplied by 1 less the dose; the eupnoeic point stays. No drug is meant: it says how much less gain would do.",
        _UNPUBLISHED, _OPEN,
        "Whatever lowers chemoreflex gain may depress breathing: sedatives and opioids can stop it.",
        "Controller", rules.chemoreflex_gain_fall,
    ),
    Lever(
        "oxygen_l_min", "Oxygen", "L/min", 0.0, 6.0, 2.0, 0.5,
        "Arterial PO2, and through it the peripheral CO2 gain.",
        "Each L/min by nasal cannula adds 0.04 to the inspired oxygen fraction (common practice): 28.5 mmHg of PaO2 at sea level in a "
        "healthy lung. The peripheral gain follows exp(-0.05 (PaO2 - 100)). With CO2 only resting PaCO2 stays; with CO2 and O2 it rises.",
        "Loop gain 0.69 to 0.34 where it was high, unchanged where it was low. In heart failure Cheyne-Stokes respiration 50.7 to 24.2 % "
        "of sleep.",
        "Wellman 2008, Respir Physiol Neurobiol 162:144; Hanly 1989, Ann Intern Med 111:777",
        "May raise PaCO2 in chronic hypercapnia. High PaO2 constricts vessels; aim at a saturation, not at a flow (common practice, no "
        "source). Fire.",
        "Gas", rules.oxygen,
    ),
    Lever(
        "descent_m", "Descent", "m", 0.0, 5000.0, 1000.0, 100.0,
        "Barometric pressure or arterial PO2, and through them the peripheral CO2 gain.",
        "Pressure by altitude after West 1996. With CO2 only PaO2 rises by the inspired PO2 gained, and where the barometric pressure is "
        "that of sea level the altitude is read from PaO2 as if the lung were healthy. The controller stays, as in the first night.",
        "From 490 to 4559 m saturation fell from 96 to 67 % and ventilation rose from 4.4 to 6.3 L/min; descent undoes it.",
        "Nussbaumer-Ochsner 2012, Sleep 35:419",
        "Only for hypoxaemia by altitude: a low PaO2 from lung disease does not rise so. Do not let descent wait for this sum where "
        "altitude illness is suspected.",
        "Gas", rules.descent,
    ),
    Lever(
        "inspired_co2_percent", "Inspired CO2", "%", 0.0, 4.0, 1.0, 0.25,
        "Inspired PCO2; resting PaCO2 and ventilation rise with it.",
        "Each percent adds 7.13 mmHg to inspired PCO2 at sea level, less high up; the rest moves along the controller's line.",
        "Idiopathic central apnoea: central events 43.7 to 5.8 an hour with PCO2 1 to 3 mmHg higher.",
        "Xie 1997, J Appl Physiol 82:918",
        "Raises ventilation and sympathetic drive; wakes sleepers. Needs supervision and a gas supply that cannot fail upwards; not for "
        "use at home (common practice, no source).",
        "Gas", rules.inspired_co2,
    ),
    Lever(
        "metabolic_rate_rise_percent", "Metabolic rate", "%", -40.0, 100.0, 20.0, 5.0,
        "CO2 production; resting ventilation rises with it and plant gain falls.",
        "CO2 production is multiplied by 1 plus the dose. Cardiac output and gains stay as they are.",
        _UNPUBLISHED, _OPEN,
        "A way to read the loop (sleep, fever, thyroid, exercise), not a treatment.",
        "Body", rules.metabolic_rate_rise,
    ),
    Lever(
        "cpap_cmh2o", "CPAP", "cmH2O", 0.0, 15.0, 8.0, 1.0,
        "Lung gas volume.",
        "Lung gas volume rises by 0.06 L per cmH2O lying down (common practice, no source). Splinting of the airway, cardiac output and "
        "afterload are not in the loop.",
        "Heart failure with central apnoea: apnoea-hypopnoea index 40 falls by 21 an hour. Loop gain followed 1/lung volume with slope 0.9 "
        "+- 0.1 (Sands 2011); this loop gives less, see the model's limits.",
        "Bradley 2005, N Engl J Med 353:2025; Sands 2011, Am J Respir Crit Care Med 184:1067",
        "May lower blood pressure and cardiac output where filling is low. In heart failure CPAP did not lengthen life over all.",
        "Lungs", rules.cpap,
    ),
    Lever(
        "lateral_posture_share", "Lying on the side", "share", 0.0, 1.0, 1.0, 1.0,
        "Lung gas volume.",
        "Lung gas volume rises by 7.8 % on the side (functional residual capacity 87.3 against 81.0 % of seated, 20 patients, PMC5895090). "
        "The airway and oxygenation are not in the loop. 0 is supine, 1 the side.",
        "Heart failure: apnoea-hypopnoea index in stage 2 sleep 43.3 to 14.4 an hour. Dynamic loop gain 0.77 supine, 0.68 on the side "
        "(PMC5895090).",
        "Szollosi 2006, Sleep 29:1045",
        "Lay it only on a case whose lung volume is the supine one. Pressure areas; lines and devices.",
        "Lungs", rules.lateral_posture,
    ),
    Lever(
        "cardiac_output_rise_percent", "More cardiac output", "%", 0.0, 100.0, 30.0, 5.0,
        "Cardiac output, and both delays by its inverse.",
        "Delay is blood volume over flow, so both delays are divided by 1 plus the dose, whether or not the case ties them.",
        "Resynchronisation lessened Cheyne-Stokes respiration, but circulation time did not change.",
        "Gabor 2005, Eur Respir J 26:95",
        "A way to read the loop: no treatment is shown to work by this path, and drugs that raise output have harmed in chronic heart "
        "failure (common practice, no source).",
        "Circulation", rules.cardiac_output_rise,
    ),
    Lever(
        "added_dead_space_ml", "Added dead space", "mL", 0.0, 800.0, 500.0, 50.0,
        "Dead-space fraction; resting PaCO2 and ventilation rise with it.",
        f"Added mL are ventilated {rules.BREATHS_PER_MIN:.0f} times a minute (common practice, no source) beside the own dead space, which "
        "keeps its mL; the new dead-space fraction is the one at the new rest. Within a cycle the loop keeps that fraction, which quiets "
        "more than if breaths changed by volume alone.",
        "400 to 600 mL: apnoeas 29 to 1 an hour, end-tidal PCO2 38.9 to 40.7 mmHg. Idiopathic central apnoea: 43.7 to 5.8 events an hour.",
        "Khayat 2003, Chest 123:1551; Xie 1997, J Appl Physiol 82:918",
        "More work of breathing and sympathetic drive; not where PaCO2 is already high or the lungs are failing (common practice, no "
        "source).",
        "Gas", rules.added_dead_space,
    ),
)  # fmt: skip


def _scaled(*names: str) -> Any:
    """A rule that multiplies these numbers by 1 plus the dose in percent."""

    def act(loop: Any, dose: Any) -> Any:
        return loop.with_numbers(**{name: getattr(loop, name) * (1.0 + dose / 100.0) for name in names})

    return act


def _lessened(*names: str) -> Any:
    """A rule that multiplies these numbers by 1 less the dose in percent."""

    def act(loop: Any, dose: Any) -> Any:
        return loop.with_numbers(**{name: getattr(loop, name) * (1.0 - dose / 100.0) for name in names})

    return act


def _held_mass(loop: Any, dose: Any) -> Any:
    return loop.with_numbers(held_mass_kg=loop.held_mass_kg + dose)


_REFLEX = (
    Lever(
        "reflex_gain_fall_percent", "Less reflex gain", "%", 0.0, 95.0, 50.0, 5.0,
        "Reflex gain.",
        "The gain is multiplied by 1 less the dose. No drug is meant: it says how much less gain would do, by a focal or a systemic way.",
        _UNPUBLISHED, _OPEN,
        "What lowers reflex gain weakens: focal injections the muscle, systemic drugs the person, with sedation and falls (common "
        "practice, no source).",
        "Reflex", _lessened("reflex_gain_per_rad"),
    ),
    Lever(
        "held_mass_rise_kg", "Held weight", "kg", 0.0, 5.0, 0.5, 0.1,
        "Held mass at the case's distance: inertia and the torque that holds it.",
        "The mass adds m l^2 to the inertia and m g l to the torque to be held; the muscle's slope falls as it nears its largest torque.",
        "Loaded, enhanced physiological tremor falls by more than 1 Hz, essential tremor by 1 Hz or less.",
        "Common clinical rule of accelerometry",
        "A test rather than a treatment. Fatigue; not on a joint that must not be loaded.",
        "Limb", _held_mass,
    ),
    Lever(
        "stiffness_rise_percent", "Bracing", "%", 0.0, 300.0, 50.0, 10.0,
        "Joint stiffness.",
        "Stiffness is multiplied by 1 plus the dose, as an orthosis or co-contraction would.",
        _UNPUBLISHED, _OPEN,
        "Skin under an orthosis; a stiffer joint beats faster, and may then beat more.",
        "Limb", _scaled("stiffness_n_m_rad"),
    ),
    Lever(
        "damping_rise_percent", "More damping", "%", 0.0, 300.0, 50.0, 10.0,
        "Joint damping.",
        "Damping is multiplied by 1 plus the dose, as a viscous orthosis would.",
        _UNPUBLISHED, _OPEN,
        "Resists wanted movement as well.",
        "Limb", _scaled("damping_n_m_s_rad"),
    ),
)  # fmt: skip

_PLAIN = (
    Lever(
        "exponent_fall_percent", "Less sensitivity", "%", 0.0, 95.0, 30.0, 5.0,
        "Exponent n.", "The exponent is multiplied by 1 less the dose.", _UNPUBLISHED, _OPEN, "A loop without a body.",
        "Controller", _lessened("exponent"),
    ),
    Lever(
        "delay_fall_percent", "Shorter delay", "%", 0.0, 95.0, 30.0, 5.0,
        "Delay.", "The delay is multiplied by 1 less the dose.", _UNPUBLISHED, _OPEN, "A loop without a body.",
        "Delay", _lessened("delay_s"),
    ),
)  # fmt: skip

LEVERS: Mapping[str, Mapping[str, Lever]] = MappingProxyType(
    {
        kind: MappingProxyType({lever.name: lever for lever in levers})
        for kind, levers in (("breathing", _BREATHING), ("reflex", _REFLEX), ("plain", _PLAIN))
    }
)
"""Loop kind, then lever name, to the lever, in the order in which they act."""
