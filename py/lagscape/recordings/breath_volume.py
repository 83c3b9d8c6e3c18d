"""What a channel can say of the volume of a breath: its own reading of volume, its unit in litres, or nothing but the timing."""

import re
from dataclasses import dataclass

__all__ = ["LITRES", "RELATIVE", "VolumeReading", "volume_reading"]

LITRES = "L"
RELATIVE = "median breath"

_THERMISTOR = re.compile(r"therm", re.IGNORECASE)
_PRESSURE = re.compile(r"nas|press|ptaf|cannula|prong", re.IGNORECASE)
_ROOT = re.compile(r"square root|sqrt", re.IGNORECASE)

_LITRES = {"l": 1.0, "liter": 1.0, "litre": 1.0, "dl": 0.1, "cl": 0.01, "ml": 0.001, "cc": 0.001, "cm3": 0.001, "cm³": 0.001}
_SECONDS = {"s": 1.0, "sec": 1.0, "min": 60.0, "m": 60.0}


@dataclass(frozen=True)
class VolumeReading:
    """How the volume of a breath is read from a channel.

    `method` is "flow" (integrated), "volume" (trough to peak) or "timing" (no volume). `litres` are litres per unit of the
    channel's own volume, None where it is not calibrated; `own_unit` is that unit in words.
    """

    method: str
    litres: float | None
    own_unit: str
    notes: tuple[str, ...] = ()


def volume_reading(name: str, unit: str, kind: str) -> VolumeReading:
    """How to read volume from a channel of this name, unit and kind (airflow or effort).

    A channel called a thermistor or thermocouple gives timing alone: it senses warmth, which does not go as the volume (common
    practice, no source). Airflow is integrated. Whatever else moves with breathing is read from trough to peak.
    """
    if _THERMISTOR.search(name):
        return VolumeReading(
            "timing", None, "", (f"'{name}' senses warmth: it times breaths, but no volume and no end of inspiration is read from it.",)
        )
    if kind == "airflow":
        litres = _litres_a_second(unit)
        own = "L" if litres is not None else f"{unit or 'units'} × s"
        notes: tuple[str, ...] = ()
        if litres is None and _PRESSURE.search(name) and not _ROOT.search(name):
            notes = (
                f"'{name}' looks like nasal pressure, which goes about as the square of flow: small breaths read too small. "
                "Take its square root.",
            )
        return VolumeReading("flow", litres, own, notes + _said(litres, "integral"))
    litres = _LITRES.get(unit.strip().casefold())
    return VolumeReading("volume", litres, "L" if litres is not None else unit or "units", _said(litres, "swing"))


def _said(litres: float | None, what: str) -> tuple[str, ...]:
    return () if litres is not None else (f"The channel's unit is no unit of volume: volumes are its {what}, in shares of the median breath.",)


def _litres_a_second(unit: str) -> float | None:
    """Litres a second in one unit of flow, None where the unit is none."""
    words = unit.strip().casefold()
    if words == "lpm":
        return 1.0 / 60.0
    volume, slash, time = (part.strip() for part in re.sub(r"\s+per\s+", "/", words).partition("/"))
    if not slash and re.fullmatch(r"\S+ (s|sec|min)-?1", words):
        volume, time = words[:-2].rstrip("-").split(" ")
    if volume not in _LITRES or time not in _SECONDS:
        return None
    return _LITRES[volume] / _SECONDS[time]
