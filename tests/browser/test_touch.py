"""A finger on the drawings: near the dot it drags the dot all the way, along the traces it moves the time, elsewhere it scrolls the page."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import pytest

from support.page_hands import dot_on_screen
from support.watched_pages import open_ready

PHONE = {"viewport": {"width": 390, "height": 844}, "has_touch": True, "is_mobile": True, "device_scale_factor": 2, "reduced_motion": "reduce"}


class Finger:
    """One finger on a page, through the browser's own touch input."""

    def __init__(self, page: Any) -> None:
        self._page, self._input = page, page.context.new_cdp_session(page)

    def drag(self, start: tuple[float, float], right: float, down: float, steps: int = 12) -> None:
        for step in range(steps + 1):
            kind = "touchMove" if step else "touchStart"
            point = {"x": start[0] + right * step / steps, "y": start[1] + down * step / steps}
            self._input.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": [point]})
            self._page.wait_for_timeout(40)
        self._input.send("Input.dispatchTouchEvent", {"type": "touchEnd", "touchPoints": []})
        self._page.wait_for_timeout(600)


@pytest.fixture
def phone(new_context: Callable[..., Any], site: str) -> Iterator[Any]:
    context, _ = new_context(**PHONE)
    yield open_ready(context, site)


def test_a_finger_on_the_dot_takes_it_all_the_way_and_one_beside_it_scrolls(phone: Any) -> None:
    # Oracle: the finger's own path. Tolerance: Bokeh begins a pan after a few pixels and the dot goes to the finger, not along with it.
    finger, before = Finger(phone), dot_on_screen(phone)
    finger.drag(tuple(before["dot"]), -40.0, 96.0)
    after = dot_on_screen(phone)
    assert after["dot"][0] == pytest.approx(before["dot"][0] - 40.0, abs=6.0)
    assert after["dot"][1] == pytest.approx(before["dot"][1] + 96.0, abs=6.0)
    assert phone.evaluate("scrollY") == 0
    # Upwards over the map, well beside the dot: the page scrolls and the case stays.
    beside = (after["high"][0] - 30.0, after["low"][1] - 40.0)
    assert abs(beside[0] - after["dot"][0]) > 60.0
    finger.drag(beside, 0.0, -160.0)
    assert phone.evaluate("scrollY") > 60
    still = dot_on_screen(phone)
    assert (still["delay"], still["sensitivity"]) == (after["delay"], after["sensitivity"])


def test_a_finger_along_the_traces_moves_the_time_and_one_across_them_scrolls(phone: Any) -> None:
    place = """() => {
        const figures = [...Bokeh.documents[0]._all_models.values()].filter((model) => model.type === "Figure")
        const upper = figures.find((model) => (model.left[0].axis_label ?? "").startsWith("Ventilation"))
        const area = Bokeh.index.find_one(upper).el.getBoundingClientRect()
        return { x: area.left + area.width / 2, y: area.top + area.height / 2, start: upper.x_range.start }
    }"""
    finger, before = Finger(phone), phone.evaluate(place)
    finger.drag((before["x"], min(before["y"], 800.0)), 80.0, 4.0)
    after = phone.evaluate(place)
    assert after["start"] < before["start"] - 20.0, "the traces did not follow the finger"
    assert phone.evaluate("scrollY") == 0
    finger.drag((after["x"], min(after["y"], 800.0)), 3.0, -160.0)
    assert phone.evaluate("scrollY") > 60
    assert phone.evaluate(place)["start"] == pytest.approx(after["start"], abs=5.0)
