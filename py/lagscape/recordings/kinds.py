"""A guess of what a channel is, from its name and its unit. A guess only: the person may overrule it.

The words are those that amplifiers and analysis programs in sleep and respiratory laboratories commonly write; common
practice, no source.
"""

import re

__all__ = ["BREATHING_KINDS", "KINDS", "TREMOR_KINDS", "guess_kind"]

KINDS = ("ventilation", "airflow", "effort", "SpO2", "CO2", "acceleration", "rotation", "EMG", "unknown")
BREATHING_KINDS = ("ventilation", "airflow", "effort")
TREMOR_KINDS = ("acceleration", "rotation", "EMG")

_BY_NAME = (
    ("CO2", r"co2|capno"),
    ("SpO2", r"spo2|sao2|\bso2\b|sat(uration)?\b|oxim|pulse ?ox"),
    ("rotation", r"gyro|\bgyr\b|\bgyr ?[xyz]\b|angular (velocity|rate)|\bang ?vel"),
    ("acceleration", r"accel|\bacc\b|\bacc ?[xyz]\b|tremor|^axis ?[xyz]$"),
    ("EMG", r"emg|electromyo|tibialis|\b[lr]at\b|soleus|gastrocn|extensor|flexor|biceps|triceps|masseter|mentalis|\bchin"),
    ("ventilation", r"ventilation|\bve\b|\bv e\b|minute ?vol|\bmv\b|\bvdot"),
    ("effort", r"effort|thor|chest|abdo|\babd\b|belt|\brip\b|rib ?cage|\btho\b|torax|bauch|brust"),
    ("airflow", r"flow|nasal|cannula|pneumo|therm|naso|\bnp\b|mask ?pres|atem"),
    ("effort", r"\bresp\b|respiration|\bvolume\b"),
)

_BY_UNIT = (
    ("ventilation", r"l ?/ ?min|lpm|l min"),
    ("airflow", r"l ?/ ?s|ml ?/ ?s"),
    ("acceleration", r"g|mg|mm? ?/ ?s(2|²|\^2)|m ?/ ?s ?/ ?s"),
    ("rotation", r"(deg|degrees?|°|m?rad) ?/ ?s|m?dps"),
    ("CO2", r"mmhg|kpa|torr"),
    ("effort", r"l|ml|litre|liter"),
)


def guess_kind(name: str, unit: str = "") -> str:
    """One of KINDS. The name decides; the unit only where the name says nothing."""
    words = re.sub(r"[_./()\[\]-]+", " ", name).casefold()
    plain_unit = unit.strip().casefold()
    for kind, pattern in _BY_NAME:
        if re.search(pattern, words):
            return kind
    for kind, pattern in _BY_UNIT:
        if re.fullmatch(pattern, plain_unit):
            return kind
    return "unknown"
