"""Small forms beside a number: what the clinic has, turned into what the loop takes."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

from lagscape.case import clinic_numbers as clinic
from lagscape.case.case import Case
from lagscape.case.parameters import Basis
from lagscape.errors import InvalidInputError
from lagscape.quantities import from_display

__all__ = ["ENTRIES", "Entry", "Field", "apply_entry"]

_SEX = ("female", "male")
_STATE = ("asleep", "awake")
_POSTURE = ("supine", "side", "seated")


@dataclass(frozen=True)
class Field:
    """One box or choice of a form. `options` makes it a choice; `first` stands there at the start, empty for nothing."""

    label: str
    unit: str = ""
    first: str = ""
    options: tuple[str, ...] = ()
    may_be_empty: bool = False


@dataclass(frozen=True)
class Entry:
    """One form: its words, its fields, the conversion, and whether its result counts as measured."""

    label: str
    fields: tuple[Field, ...]
    convert: Callable[..., clinic.ClinicNumber]
    basis: Basis = Basis.MEASURED


ENTRIES: Mapping[str, tuple[Entry, ...]] = MappingProxyType(
    {
        "resting_paco2_mmhg": (
            Entry(
                "From end-tidal PCO2", (Field("End-tidal", "mmHg"), Field("Arterial less end-tidal", "mmHg", may_be_empty=True)),
                clinic.paco2_from_end_tidal,
            ),
        ),
        "co2_production_l_min": (
            Entry(
                "Estimated from the person",
                (Field("Weight", "kg"), Field("Sex", options=_SEX), Field("Age", "years"), Field("State", options=_STATE)),
                clinic.co2_production, Basis.ASSUMED,
            ),
        ),
        "dead_space_fraction": (
            Entry("From dead space and tidal volume", (Field("Dead space", "mL"), Field("Tidal volume", "mL")), clinic.dead_space_fraction),
            Entry(
                "From dead space, ventilation and rate", (Field("Dead space", "mL"), Field("Ventilation", "L/min"), Field("Rate", "1/min")),
                clinic.dead_space_fraction_from_rate,
            ),
        ),
        "lung_volume_l": (
            Entry(
                "From a measured FRC", (Field("FRC", "L"), Field("Measured", options=("seated", "supine", "side")), Field("Now", options=_POSTURE)),
                clinic.lung_volume_by_posture,
            ),
            Entry(
                "Predicted", (Field("Height", "m"), Field("Sex", options=_SEX), Field("Age", "years"), Field("Posture", options=_POSTURE)),
                clinic.lung_volume_predicted, Basis.ASSUMED,
            ),
        ),
        "cardiac_output_l_min": (
            Entry("From cardiac index", (Field("Index", "L/min/m2"), Field("Height", "m"), Field("Weight", "kg")), clinic.cardiac_output),
        ),
        "peripheral_delay_s": (
            Entry(
                "From circulation time", (Field("Lung to oximeter", "s"), Field("Oximeter at the", options=("ear", "finger"))),
                clinic.loop_delay_from_circulation_time,
            ),
        ),
        "arterial_po2_mmhg": (Entry("From SpO2", (Field("SpO2", "%"),), clinic.pao2_from_spo2),),
        "barometric_pressure_mmhg": (Entry("From altitude", (Field("Altitude", "m"),), clinic.barometric_pressure),),
    }
)
"""Parameter of the breathing loop to its forms."""


def apply_entry(case: Case, entry: Entry, typed: tuple[str, ...], pressure_unit: str) -> tuple[Case, str]:
    """The case with the number that this form gives, and the sentence that says how it came about.

    Raises
    ------
    InvalidInputError
        If a field is no number, or the conversion refuses it.
    """
    values = [_value(field, text, pressure_unit) for field, text in zip(entry.fields, typed, strict=True)]
    found = entry.convert(*values)
    if found.parameter == "peripheral_delay_s":
        case = case.with_delay(found.value)
    return case.with_number(found.parameter, found.value, entry.basis, found.spread), f"{found.sentence} {getattr(found, 'source', '')}".strip()


def _value(field: Field, text: str, pressure_unit: str) -> Any:
    if field.options:
        return text or field.options[0]
    plain = text.strip().replace(",", ".").replace("−", "-")
    if not plain and field.may_be_empty:
        return None
    try:
        return from_display(float(plain), field.unit, pressure_unit)
    except ValueError:
        raise InvalidInputError(f"{field.label} must be a number in {field.unit}; got {text.strip()[:30]!r}.") from None
