"""How a number is shown: see `lagscape.quantities`, which the report uses too."""

from lagscape.quantities import PRESSURE_UNITS, figure, from_display, percent, quantity, to_display

__all__ = ["PRESSURE_UNITS", "figure", "from_display", "percent", "quantity", "to_display"]
