"""How numbers are shown. Oracles: rounding by the decimal module; 1 mmHg = 133.322387415 Pa (SI Brochure) for the pressures."""

import math
from decimal import ROUND_HALF_EVEN, Context, Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.quantities import figure, from_display, percent, quantity, to_display


@given(st.floats(1e-4, 9e5) | st.floats(-9e5, -1e-4), st.integers(1, 5))
def test_a_figure_is_the_number_rounded_to_its_digits(value, digits):
    rounded = Context(prec=digits, rounding=ROUND_HALF_EVEN).create_decimal(Decimal(value))
    assert Decimal(figure(value, digits).replace("−", "-")) == rounded
    assert "-" not in figure(value, digits) and "e" not in figure(value, digits)


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.0, "0"), (0.18, "0.180"), (99.96, "100"), (1234.5, "1230"), (-0.5, "−0.500"), (2.5e7, "2.50×10^7"), (3.2e-6, "3.20×10^−6")],
)
def test_figures_as_a_clinician_writes_them(value, text):
    assert figure(value) == text


@pytest.mark.parametrize("value", [None, math.nan, math.inf])
def test_what_is_no_number_is_a_dash(value):
    assert figure(value) == "–"


def test_pressures_turn_into_kilopascals_also_inside_a_unit():
    # 40 mmHg x 0.133322387415 kPa/mmHg = 5.3328954966 kPa. Tolerance: the nine digits of the conversion.
    assert to_display(40.0, "mmHg", "kPa") == (pytest.approx(5.3328954966, rel=1e-9), "kPa")
    assert to_display(2.0, "L/min/mmHg", "kPa") == (pytest.approx(2.0 / 0.133322387415, rel=1e-9), "L/min/kPa")
    assert to_display(5.0, "L/min", "kPa") == (5.0, "L/min") and to_display(40.0, "mmHg", "mmHg") == (40.0, "mmHg")


@given(st.floats(1e-3, 1e3), st.sampled_from(["mmHg", "L/min/mmHg", "1/mmHg", "s"]), st.sampled_from(["mmHg", "kPa"]))
def test_a_number_typed_in_the_shown_unit_comes_back(value, unit, pressure_unit):
    shown, _ = to_display(value, unit, pressure_unit)
    # One multiplication and one division.
    assert from_display(shown, unit, pressure_unit) == pytest.approx(value, rel=1e-15)


def test_a_quantity_carries_its_unit():
    assert quantity(40.0, "mmHg", "kPa") == "5.33 kPa" and quantity(0.3, "") == "0.300" and quantity(None, "s") == "–"
    assert percent(0.378) == "38 %"
