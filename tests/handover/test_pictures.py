"""The pictures. Oracles: the XML parser, the closed-form boundary of x' = -a x - b x(t - tau), the rule on colour."""

import math
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest

from lagscape.errors import InvalidInputError
from lagscape.handover.pictures import Contour, Curve, MapPicture, TracePanel, above, boundary_map_svg, traces_svg
from lagscape.handover.svg import Axis

NAMESPACE = "{http://www.w3.org/2000/svg}"

# tau_c = arccos(-a/b) / sqrt(b^2 - a^2) (Hayes 1950), a = 0.5.
GAINS = np.linspace(0.52, 3.0, 200)
DELAYS = np.arccos(-0.5 / GAINS) / np.sqrt(GAINS**2 - 0.25)


def the_map(**changes) -> MapPicture:
    order = np.argsort(DELAYS)
    given = {
        "delay": Axis("Delay", "s", 0.0, 4.0),
        "sensitivity": Axis("Gain b", "1/s", 0.0, 3.0),
        "boundary_x": DELAYS[order],
        "boundary_y": GAINS[order],
        "outside": [above(DELAYS[order], GAINS[order], 3.0)],
        "case": (1.0, 1.0),
        **changes,
    }
    return MapPicture(**given)


def parsed(svg: str) -> ElementTree.Element:
    return ElementTree.fromstring(svg)


def texts(root: ElementTree.Element) -> list[str]:
    return [item.text or "" for item in root.iter(f"{NAMESPACE}text")]


def inside_polygon(point, xs, ys) -> bool:
    """Even-odd rule, written out."""
    x, y = point
    odd = False
    for index in range(len(xs)):
        x1, y1, x2, y2 = xs[index - 1], ys[index - 1], xs[index], ys[index]
        if (y1 > y) != (y2 > y) and x < (x2 - x1) * (y - y1) / (y2 - y1) + x1:
            odd = not odd
    return odd


@pytest.mark.parametrize(("delay", "gain"), [(1.0, 1.0), (1.0, 2.9), (2.4, 0.9), (2.4, 1.1), (3.0, 0.7), (3.0, 2.0)])
def test_the_hatched_side_is_where_the_loop_hunts(delay, gain):
    hunts = gain > 0.5 and delay > math.acos(-0.5 / gain) / math.sqrt(gain**2 - 0.25)
    (xs, ys), *_ = the_map().outside
    assert inside_polygon((delay, gain), xs, ys) == hunts


def test_the_map_shows_the_boundary_the_case_the_start_the_levers_and_the_contours():
    contour = Contour("60 s", np.linspace(1.0, 3.0, 9), np.full(9, 1.5))
    root = parsed(boundary_map_svg(the_map(start=(1.5, 1.2), levers=(0.8, 0.6), contours=(contour,))))
    circles = list(root.iter(f"{NAMESPACE}circle"))
    assert len(circles) == 2 and sum(circle.get("fill") == "#FFFFFF" for circle in circles) == 1
    assert len(list(root.iter(f"{NAMESPACE}polygon"))) == 1
    assert "60 s" in texts(root) and "Delay, s" in texts(root) and "Gain b, 1/s" in texts(root)
    legend = " ".join(texts(root))
    assert all(word in legend for word in ("Hatched: hunts", "filled dot: the case", "hollow dot", "diamond"))


def test_a_contours_words_keep_off_the_case():
    contour = Contour("60 s", np.full(101, 1.0), np.linspace(0.0, 3.0, 101))
    root = parsed(boundary_map_svg(the_map(case=(1.0, 1.5), contours=(contour,))))
    words = next(item for item in root.iter(f"{NAMESPACE}text") if item.text == "60 s")
    disc = next(root.iter(f"{NAMESPACE}circle"))
    assert abs(float(words.get("y")) - float(disc.get("cy"))) > 20.0


def test_without_start_and_levers_the_legend_does_not_speak_of_them():
    root = parsed(boundary_map_svg(the_map()))
    assert len(list(root.iter(f"{NAMESPACE}circle"))) == 1 and not list(root.iter(f"{NAMESPACE}polygon"))
    assert not any("hollow" in text or "diamond" in text for text in texts(root))


def test_the_outside_is_hatched_so_that_colour_is_not_the_only_sign():
    root = parsed(boundary_map_svg(the_map()))
    hatched = [item for item in root.iter(f"{NAMESPACE}path") if item.get("fill") == "url(#hatch)"]
    assert len(hatched) == 1 and root.find(f".//{NAMESPACE}pattern/{NAMESPACE}line") is not None


def test_a_boundary_that_is_not_in_the_frame_leaves_a_map_without_an_outside():
    root = parsed(boundary_map_svg(the_map(boundary_x=np.array([]), boundary_y=np.array([]), outside=[above([], [], 3.0)])))
    assert not [item for item in root.iter(f"{NAMESPACE}path") if item.get("fill") == "url(#hatch)"]


TIMES = np.linspace(0.0, 120.0, 241)
SWING = 7.0 + 5.0 * np.sin(2.0 * np.pi * TIMES / 60.0)


def panels(*roles: str) -> tuple[TracePanel, ...]:
    curves = tuple(Curve(SWING, role) for role in roles)
    return (
        TracePanel("Ventilation", "L/min", curves, silences=((40.0, 52.0), (100.0, 101.0)), from_zero=True),
        TracePanel("PaCO2", "mmHg", tuple(Curve(40.0 + SWING, role) for role in roles)),
    )


def test_traces_share_one_time_axis_and_mark_apnoeas_with_their_seconds():
    root = parsed(traces_svg(TIMES, panels("case"), 6.0, "Sigh"))
    words = texts(root)
    assert words.count("Time, s") == 1 and "Ventilation, L/min" in words and "PaCO2, mmHg" in words
    assert "12 s" in words and "1 s" not in words
    assert "Sigh" in words and any("bars: apnoea" in word for word in words)


def test_curves_differ_by_dashes_as_well_as_by_colour():
    root = parsed(traces_svg(TIMES, panels("levers", "case", "start")))
    drawn = [item for item in root.iter(f"{NAMESPACE}path") if item.get("fill") == "none"]
    dashes = [item.get("stroke-dasharray") for item in drawn]
    assert dashes == ["1 3", None, "7 3"] * 2
    legend = texts(root)[0]
    assert "dotted" in legend and "dashed" in legend


def test_a_constant_trace_has_an_axis_all_the_same():
    for value in (0.0, 40.0, -3.0):
        assert parsed(traces_svg(TIMES, [TracePanel("PaCO2", "mmHg", (Curve(np.full(241, value)),))])) is not None


def test_a_trace_cut_short_is_drawn_as_far_as_it_goes():
    broken = np.where(TIMES < 50.0, SWING, np.nan)
    root = parsed(traces_svg(TIMES, [TracePanel("Level", "", (Curve(broken),))]))
    path = next(item for item in root.iter(f"{NAMESPACE}path") if item.get("fill") == "none")
    assert "nan" not in path.get("d")


def test_what_cannot_be_drawn_is_refused_in_words():
    with pytest.raises(InvalidInputError, match="at least one panel and two times; got 0 and 241"):
        traces_svg(TIMES, [])
    with pytest.raises(InvalidInputError, match="A curve's role must be one of start, case, levers; got 'after'"):
        traces_svg(TIMES, panels("after"))
