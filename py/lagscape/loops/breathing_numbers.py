"""The breathing loop's numbers: unit, range, typical band, spread among persons, source; its settings; its starting cases.

Spreads of one standard deviation; lognormal ones are of the natural logarithm. Groups are the order in which a clinician thinks.
"""

from lagscape.case.parameters import Choice, ParameterSpecification, StartingCase

__all__ = ["CHOICES", "SPECIFICATIONS", "STARTING_CASES"]

_TRADE = "Common practice, no source."

SPECIFICATIONS: tuple[ParameterSpecification, ...] = (
    ParameterSpecification(
        "co2_production_l_min", "CO2 production", "VCO2", "L/min STPD", "Metabolism", 0.05, 4.0, 0.20, 0.15, 0.25, 0.12,
        "lognormal", "CO2 that the body makes, at standard temperature and pressure, dry. Asleep it is lower than awake.",
        _TRADE, 0.05,
    ),
    ParameterSpecification(
        "resting_paco2_mmhg", "Resting PaCO2", "P0", "mmHg", "Metabolism", 15.0, 80.0, 40.0, 35.0, 45.0, 2.5, "normal",
        "Arterial PCO2 in steady breathing. With VCO2 and dead space it fixes the resting ventilation.",
        "Reference range 35 to 45 mmHg: common practice, no source.", 1.0,
    ),
    ParameterSpecification(
        "inspired_pco2_mmhg", "Inspired PCO2", "PICO2", "mmHg", "Metabolism", 0.0, 40.0, 0.0, 0.0, 0.5, 0.1, "normal",
        "PCO2 of the inspired gas. Nearly zero in room air.", "Room air holds 0.04 % CO2, 0.3 mmHg.", 0.1,
    ),
    ParameterSpecification(
        "lung_volume_l", "Lung gas volume", "VL", "L", "Lungs", 0.5, 8.0, 2.4, 1.8, 3.2, 0.20, "lognormal",
        "Gas volume that buffers PaCO2, about the functional residual capacity. Smaller lying down.", _TRADE, 0.08,
    ),
    ParameterSpecification(
        "dead_space_fraction", "Dead-space fraction", "VD/VT", "", "Lungs", 0.05, 0.8, 0.30, 0.25, 0.40, 0.05, "normal",
        "Share of each breath that does not reach the alveoli.", _TRADE, 0.03,
    ),
    ParameterSpecification(
        "cardiac_output_l_min", "Cardiac output", "Q", "L/min", "Circulation", 1.0, 25.0, 5.0, 4.0, 6.5, 0.18, "lognormal",
        "Blood flow between lungs and tissues.", _TRADE, 0.10,
    ),
    ParameterSpecification(
        "peripheral_delay_s", "Delay, lung to carotid body", "tau_p", "s", "Circulation", 2.0, 60.0, 10.0, 6.0, 15.0, 0.20,
        "lognormal",
        "Time from a change in the lung to the peripheral chemoreceptor's answer. The ear lies a little later, the finger "
        "much later: never type the finger's time.",
        "Blood takes about 10 to 15 s from lung to brainstem: common practice, no source. Lung to ear 14.9 +- 3.4 s with, "
        "9.0 +- 1.8 s without heart failure (Ryan and Bradley 2005).", 0.10,
    ),
    ParameterSpecification(
        "central_delay_s", "Delay, lung to brainstem", "tau_c", "s", "Circulation", 2.0, 80.0, 12.0, 8.0, 18.0, 0.20, "lognormal",
        "Time from a change in the lung to blood at the central chemoreceptor.",
        "About 2 to 4 s after the carotid body: common practice, no source.", 0.10,
    ),
    ParameterSpecification(
        "co2_solubility_per_mmhg", "Slope of blood CO2", "beta", "1/mmHg", "Circulation", 0.003, 0.012, 0.0065, 0.0058, 0.0072, 0.08,
        "lognormal", "CO2 content of blood per mmHg, near the resting point.", _TRADE, 0.05,
    ),
    ParameterSpecification(
        "tissue_volume_l", "Tissue CO2 store", "VT", "L", "Circulation", 3.0, 60.0, 15.0, 8.0, 30.0, 0.35, "lognormal",
        "Volume of tissue whose CO2 follows the blood within minutes.", _TRADE, 0.20,
    ),
    ParameterSpecification(
        "peripheral_gain_l_min_mmhg", "Peripheral CO2 gain", "Sp", "L/min/mmHg", "Chemoreflex", 0.0, 10.0, 0.27, 0.10, 0.60, 0.45,
        "lognormal", "Rise of ventilation per mmHg by the carotid bodies at a PaO2 of 100 mmHg (single-breath test).",
        "Single-breath 0.27 normal, 0.58 in heart failure with central apnoea (Solin 2000, AJRCCM 162:2194).", 0.25,
    ),
    ParameterSpecification(
        "central_gain_l_min_mmhg", "Central CO2 gain", "Sc", "L/min/mmHg", "Chemoreflex", 0.02, 20.0, 2.14, 1.5, 5.0, 0.40,
        "lognormal", "Rise of ventilation per mmHg by the brainstem (rebreathing test, HCVR).",
        "Rebreathing 2.14 normal, 5.80 in heart failure with central apnoea (Solin 2000, AJRCCM 162:2194); 80 % of persons "
        "within 1.5 to 5.0 (Irsigler 1976).", 0.20,
    ),
    ParameterSpecification(
        "central_time_constant_s", "Central time constant", "T_c", "s", "Chemoreflex", 5.0, 300.0, 60.0, 45.0, 120.0, 0.30,
        "lognormal", "How slowly the tissue around the central chemoreceptor follows its blood.", _TRADE, 0.15,
    ),
    ParameterSpecification(
        "largest_ventilation_l_min", "Largest ventilation", "Vmax", "L/min", "Chemoreflex", 10.0, 200.0, 60.0, 40.0, 100.0, 0.2,
        "lognormal", "Ceiling of the sigmoid. The threshold line does not use it.", _TRADE, 0.1,
    ),
    ParameterSpecification(
        "arterial_po2_mmhg", "Arterial PO2", "PaO2", "mmHg", "Oxygen", 20.0, 600.0, 95.0, 75.0, 100.0, 5.0, "normal",
        "Multiplies the peripheral gain by exp(-0.05 (PaO2 - 100)). Zero effect is at 100 mmHg; high oxygen nearly abolishes it. "
        "With CO2 and O2 it is not used: PaO2 follows from the numbers below.",
        "The multiplier is known from secondary sources only. Reference range 75 to 100 mmHg: common practice, no source.", 2.0,
    ),
    ParameterSpecification(
        "inspired_o2_fraction", "Inspired oxygen fraction", "FIO2", "", "Oxygen", 0.05, 1.0, 0.2093, 0.209, 0.21, 0.002, "normal",
        "Oxygen share of the dry inspired gas. Used with CO2 and O2 only.", "Dry air holds 20.93 % (standard).",
    ),
    ParameterSpecification(
        "barometric_pressure_mmhg", "Barometric pressure", "PB", "mmHg", "Oxygen", 200.0, 800.0, 760.0, 730.0, 775.0, 8.0, "normal",
        "Air pressure where the person sleeps. Used with CO2 and O2 only.", "Sea level 760 mmHg; altitude by West 1996.", 1.0,
    ),
    ParameterSpecification(
        "respiratory_quotient", "Respiratory quotient", "R", "", "Oxygen", 0.65, 1.2, 0.8, 0.75, 0.9, 0.05, "normal",
        "CO2 made per O2 used. Used with CO2 and O2 only.", "0.8 at rest on a mixed diet (standard).", 0.03,
    ),
    ParameterSpecification(
        "alveolar_arterial_difference_mmhg", "Alveolar-arterial PO2 difference", "D", "mmHg", "Oxygen", 0.0, 120.0, 10.0, 5.0, 20.0,
        4.0, "normal", "How far PaO2 lies under alveolar PO2. Used with CO2 and O2 only.",
        "5 to 20 mmHg, rising with age and lying down: common practice, no source. At 4,559 m 7.9 +- 3.7 mmHg in the well, 12.5 +- "
        "4.5 in mountain sickness (arterial blood at the Margherita hut, table in Eur Respir Rev).", 3.0,
    ),
    ParameterSpecification(
        "sensor_delay_s", "Delay, lung to oximeter", "tau_s", "s", "Oxygen", 1.0, 90.0, 20.0, 15.0, 30.0, 0.25, "lognormal",
        "Time from a change in the lung to the oximeter's reading, averaging included. It moves the SpO2 curve only, never the loop.",
        "Lung to finger 26.1 s with, 18.5 s without heart failure (Kwon 2014, J Clin Sleep Med 10:759).", 0.10,
    ),
)  # fmt: skip

CHOICES: tuple[Choice, ...] = (
    Choice(
        "drive_shape", "Drive", {"threshold": "threshold line", "sigmoid": "sigmoid"},
        "The line falls to zero at the apnoeic threshold; the sigmoid has the same resting point and slope and a ceiling.",
    ),
    Choice(
        "delays_follow_flow", "Delays follow cardiac output", {"no": "no", "yes": "yes"},
        "With yes, a change of cardiac output scales both delays by its inverse.",
    ),
    Choice(
        "gases", "Gases", {"co2": "CO2 only", "co2_o2": "CO2 and O2"},
        "With CO2 and O2 the lung's oxygen swings with breathing and multiplies the peripheral drive; for altitude and low oxygen.",
    ),
)  # fmt: skip

_COMMON = {"co2_solubility_per_mmhg": 0.0065, "tissue_volume_l": 15.0, "dead_space_fraction": 0.30, "arterial_po2_mmhg": 100.0}

_AT_4559_M = {
    **_COMMON, "resting_paco2_mmhg": 30.0, "barometric_pressure_mmhg": 443.5, "central_time_constant_s": 60.0,
}  # fmt: skip

STARTING_CASES: tuple[StartingCase, ...] = (
    StartingCase(
        "healthy-asleep", "Healthy adult asleep",
        "Invented: a healthy adult in quiet NREM sleep. Breathing is steady.",
        {
            **_COMMON, "co2_production_l_min": 0.18, "resting_paco2_mmhg": 42.0, "lung_volume_l": 2.2, "cardiac_output_l_min": 5.0,
            "peripheral_gain_l_min_mmhg": 0.27, "central_gain_l_min_mmhg": 2.14, "peripheral_delay_s": 8.0, "central_delay_s": 10.0,
            "central_time_constant_s": 60.0,
        },
        source="Gains: normal group of Solin 2000. Delay: Ryan and Bradley 2005 without heart failure. Rest typical.",
    ),
    StartingCase(
        "heart-failure-steady", "Heart failure, steady breathing",
        "Invented: heart failure with a long circulation time and low chemoreflex gain. Breathing is steady.",
        {
            **_COMMON, "co2_production_l_min": 0.20, "resting_paco2_mmhg": 39.0, "lung_volume_l": 2.2, "cardiac_output_l_min": 3.5,
            "peripheral_gain_l_min_mmhg": 0.23, "central_gain_l_min_mmhg": 2.0, "peripheral_delay_s": 15.0, "central_delay_s": 17.0,
            "central_time_constant_s": 90.0,
        },
        source="Gain: Javaheri 1999, heart failure without central apnoea (2.1). Delay: Ryan and Bradley 2005. Rest typical.",
    ),
    StartingCase(
        "heart-failure-periodic", "Heart failure, periodic breathing",
        "Invented: heart failure with Cheyne-Stokes respiration. The split between the chemoreflexes is peripheral-heavy, because "
        "the printed split gives cycles far longer than measured at the measured delay.",
        {
            **_COMMON, "co2_production_l_min": 0.20, "resting_paco2_mmhg": 36.0, "lung_volume_l": 2.0, "cardiac_output_l_min": 3.0,
            "peripheral_gain_l_min_mmhg": 1.5, "central_gain_l_min_mmhg": 1.5, "peripheral_delay_s": 24.3, "central_delay_s": 28.0,
            "central_time_constant_s": 90.0,
        },
        source="Delay: lung-to-ear time of Hall 1996 (24.3 s). Split chosen to meet the cycle of Hall 1996 (59.0 +- 4.9 s).",
    ),
    StartingCase(
        "altitude-newcomer", "Newcomer at altitude",
        "Invented: a healthy person's first night high up, PaO2 45 mmHg. Hypoxia multiplies the peripheral gain.",
        {
            **_COMMON, "co2_production_l_min": 0.22, "resting_paco2_mmhg": 30.0, "lung_volume_l": 2.2, "cardiac_output_l_min": 6.0,
            "peripheral_gain_l_min_mmhg": 0.27, "central_gain_l_min_mmhg": 2.14, "peripheral_delay_s": 7.0, "central_delay_s": 9.0,
            "central_time_constant_s": 60.0, "arterial_po2_mmhg": 45.0,
        },
        source="Gains: normal group of Solin 2000. Hypoxic multiplier from secondary sources. Rest typical.",
    ),
    StartingCase(
        "healthy-awake", "Healthy adult awake",
        "Invented: a healthy adult awake and seated. Breathing is steady.",
        {
            **_COMMON, "co2_production_l_min": 0.22, "resting_paco2_mmhg": 40.0, "lung_volume_l": 3.0, "cardiac_output_l_min": 5.5,
            "peripheral_gain_l_min_mmhg": 0.30, "central_gain_l_min_mmhg": 2.30, "peripheral_delay_s": 8.0, "central_delay_s": 10.0,
            "central_time_constant_s": 60.0, "arterial_po2_mmhg": 95.0,
        },
        source="Sum of the gains: 2.60 L/min/mmHg (Irsigler 1976), split as the normal group of Solin 2000. Rest typical.",
    ),
    StartingCase(
        "healthy-rem", "Healthy adult in REM sleep",
        "Invented: a healthy adult in REM sleep, whose chemoreflexes are weakest. The chemical loop is far from its boundary; REM "
        "sleep's irregular breathing comes from elsewhere, and this loop does not show it.",
        {
            **_COMMON, "co2_production_l_min": 0.18, "resting_paco2_mmhg": 43.0, "lung_volume_l": 2.1, "cardiac_output_l_min": 5.0,
            "peripheral_gain_l_min_mmhg": 0.16, "central_gain_l_min_mmhg": 1.28, "peripheral_delay_s": 8.0, "central_delay_s": 10.0,
            "central_time_constant_s": 60.0,
        },
        source="Gains: those of the sleeping adult times 0.45/0.75, the fall from NREM to REM sleep (Douglas 1982, ARRD 126:758). "
        "Rest typical.",
    ),
    StartingCase(
        "exercise", "Moderate exercise",
        "Invented: a healthy adult cycling steadily. High flow shortens the delays and the loop is far from its boundary.",
        {
            **_COMMON, "co2_production_l_min": 1.2, "resting_paco2_mmhg": 39.0, "lung_volume_l": 2.8, "cardiac_output_l_min": 12.0,
            "dead_space_fraction": 0.20, "peripheral_gain_l_min_mmhg": 0.30, "central_gain_l_min_mmhg": 2.30,
            "peripheral_delay_s": 4.0, "central_delay_s": 5.5, "central_time_constant_s": 60.0, "respiratory_quotient": 0.9,
        },
        source="Gains as awake. Delays shortened by about the rise of flow. CO2, flow and dead space: common practice, no source.",
    ),
    StartingCase(
        "heart-failure-lateral", "Heart failure, periodic breathing, on the side",
        "Invented: the person with Cheyne-Stokes respiration turned from the back to the side. The lung holds more gas; nothing else "
        "is changed.",
        {
            **_COMMON, "co2_production_l_min": 0.20, "resting_paco2_mmhg": 36.0, "lung_volume_l": 2.16, "cardiac_output_l_min": 3.0,
            "peripheral_gain_l_min_mmhg": 1.5, "central_gain_l_min_mmhg": 1.5, "peripheral_delay_s": 24.3, "central_delay_s": 28.0,
            "central_time_constant_s": 90.0,
        },
        source="As the periodic case; lung volume times 87.3/81, side over supine (20 patients, PMC5895090).",
    ),
    StartingCase(
        "idiopathic-central-apnoea", "Idiopathic central apnoea",
        "Invented: central apnoeas asleep with a healthy heart. With the gains as measured the loop rings after a sigh or an arousal "
        "and does not hunt by itself: the apnoeic threshold is near, so that each sigh can start apnoeas.",
        {
            **_COMMON, "co2_production_l_min": 0.18, "resting_paco2_mmhg": 37.8, "lung_volume_l": 2.2, "cardiac_output_l_min": 5.0,
            "peripheral_gain_l_min_mmhg": 0.58, "central_gain_l_min_mmhg": 3.53, "peripheral_delay_s": 10.3, "central_delay_s": 12.3,
            "central_time_constant_s": 60.0, "arterial_po2_mmhg": 95.0,
        },
        source="Gains: idiopathic group of Solin 2000. Sleeping PCO2: Xie 1995, AJRCCM 152:1950 (37.8). Delay: lung-to-ear time of "
        "Hall 1996 (10.3 s). Rest typical.",
    ),
    StartingCase(
        "altitude-4559-night", "Newcomer at 4,559 m, first night",
        "Invented: a healthy person's first night in a hut at 4,559 m, with lung oxygen in the loop. Breathing is periodic, with "
        "short cycles.",
        {
            **_AT_4559_M, "co2_production_l_min": 0.15, "lung_volume_l": 2.2, "cardiac_output_l_min": 6.0,
            "peripheral_gain_l_min_mmhg": 0.27, "central_gain_l_min_mmhg": 2.14, "peripheral_delay_s": 7.0, "central_delay_s": 9.0,
            "alveolar_arterial_difference_mmhg": 10.0,
        },
        {"gases": "co2_o2"},
        "PaCO2 and alveolar-arterial difference: arterial blood a few hours after arrival (table in Eur Respir Rev: 30 to 31 and 7.9 to "
        "12.5 mmHg). CO2 production: what 4.4 L/min at 490 m asks for at a PaCO2 of 42 mmHg (Nussbaumer-Ochsner 2012). Gains: normal "
        "group of Solin 2000. Pressure: West 1996.",
    ),
    StartingCase(
        "altitude-4559-day", "Newcomer at 4,559 m, by day",
        "Invented: the same stay by day, awake and seated. The chemical loop still hunts in the model; awake, other drives keep "
        "breathing steadier than this loop alone.",
        {
            **_AT_4559_M, "co2_production_l_min": 0.22, "lung_volume_l": 3.0, "cardiac_output_l_min": 7.0,
            "peripheral_gain_l_min_mmhg": 0.30, "central_gain_l_min_mmhg": 2.30, "peripheral_delay_s": 6.0, "central_delay_s": 8.0,
            "alveolar_arterial_difference_mmhg": 7.9,
        },
        {"gases": "co2_o2"},
        "PaCO2 30.0 and alveolar-arterial difference 7.9 mmHg: arterial blood of 14 persons without mountain sickness (table in Eur "
        "Respir Rev; PaO2 39.6 +- 4.5 mmHg). Gains as awake. Flow: common practice, no source. Pressure: West 1996.",
    ),
)  # fmt: skip
