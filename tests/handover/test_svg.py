"""The SVG writer. Oracles: the XML parser of the standard library, and places worked out by hand."""

import math
import re
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.handover.svg import Axis, Plot, Style, document, tick_values

NAMESPACE = "{http://www.w3.org/2000/svg}"


def plot() -> Plot:
    return Plot(Axis("Delay", "s", 0.0, 10.0), Axis("Gain", "", 0.0, 2.0), 100.0, 50.0, 200.0, 80.0, "one")


def parsed(*parts: str) -> ElementTree.Element:
    return ElementTree.fromstring(document(400.0, 200.0, "Title <1>", "Words & more", parts))


@given(st.floats(-1e6, 1e6), st.floats(1e-6, 1e6), st.integers(2, 10))
def test_ticks_are_few_round_and_inside(low, span, most):
    axis = Axis("x", "", low, low + span)
    ticks = tick_values(axis, most)
    assert 2 <= len(ticks) <= max(most + 1, 5)
    # Rounding of the multiples: one step in the last place of the axis's ends.
    slack = 1e-9 * span + 1e-12 * max(abs(axis.low), abs(axis.high))
    assert all(axis.low - slack <= value <= axis.high + slack for value in ticks)
    step = ticks[1] - ticks[0]
    lead = step / 10.0 ** math.floor(math.log10(step))
    # The difference of two ticks keeps their rounding: one step in the last place of the ends, as a share of the step.
    rounding = 1e-9 + 10.0 * 2.2e-16 * max(abs(axis.low), abs(axis.high)) / step
    assert min(abs(lead / part - 1.0) for part in (1.0, 2.0, 5.0, 10.0)) <= rounding


@given(st.floats(1e-6, 1e3), st.floats(1.01, 1e6))
def test_ticks_of_a_logarithmic_axis_are_inside_it(low, ratio):
    axis = Axis("x", "", low, low * ratio, logarithmic=True)
    ticks = tick_values(axis)
    assert ticks and all(axis.low * (1 - 1e-9) <= value <= axis.high * (1 + 1e-9) for value in ticks)


def test_a_point_lands_where_the_axes_say():
    # Oracle by hand: halfway along 0 to 10 is 100 + 100; a quarter up 0 to 2 is 50 + 80 * 3 / 4.
    one = plot()
    one.mark(5.0, 0.5, "disc")
    circle = parsed(one.text()).find(f".//{NAMESPACE}circle")
    assert circle is not None and (circle.get("cx"), circle.get("cy")) == ("200.00", "110.00")


def test_a_logarithmic_axis_puts_the_geometric_mean_in_the_middle():
    assert Axis("x", "", 1.0, 100.0, logarithmic=True).share(10.0) == pytest.approx(0.5, abs=1e-15)


def test_a_curve_breaks_where_it_is_not_finite():
    one = plot()
    one.curve([0.0, 1.0, 2.0, 3.0], [1.0, np.nan, 1.0, 2.0], Style())
    path = parsed(one.text()).findall(f".//{NAMESPACE}path")[-1].get("d")
    assert path == "M100.00,90.00 M140.00,90.00 L160.00,50.00"


def test_coordinates_stay_moderate_however_far_a_point_lies():
    one = plot()
    one.curve([0.0, 1e300], [1.0, -1e300], Style())
    numbers = [abs(float(number)) for number in re.findall(r"-?\d+\.\d+", one.parts[0])]
    assert max(numbers) <= 1e4


def test_words_are_escaped_and_a_picture_has_a_title_and_a_description():
    one = plot()
    one.words(1.0, 1.0, "<b> & co")
    root = parsed(one.text())
    assert root.find(f"{NAMESPACE}title").text == "Title <1>" and root.find(f"{NAMESPACE}desc").text == "Words & more"
    assert "<b> & co" in [item.text for item in root.iter(f"{NAMESPACE}text")]
    assert root.get("role") == "img"


@pytest.mark.parametrize("ends", [(1.0, 1.0), (2.0, 1.0), (math.nan, 1.0), (0.0, math.inf)])
def test_an_axis_without_a_span_is_refused(ends):
    with pytest.raises(InvalidInputError, match="The ends of the axis Delay must be finite and rising"):
        Axis("Delay", "s", *ends)
    with pytest.raises(InvalidInputError, match="must be positive, finite and rising"):
        Axis("Delay", "s", 0.0, 1.0, logarithmic=True)


def test_a_curve_of_unequal_lengths_is_refused():
    with pytest.raises(InvalidInputError, match="as many x as y values"):
        plot().curve([1.0], [1.0, 2.0], Style())
