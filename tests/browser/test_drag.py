"""What a dragged dot costs the page: counted, not timed, so that a busy machine cannot fail it."""

from __future__ import annotations

from typing import Any

import pytest

from support.page_hands import dot_on_screen

_PATIENCE_MS = 60_000

_COUNT = """() => {
  const { link } = window.lagscape.page
  const figures = [...link.document._all_models.values()].filter((model) => model.type === "Figure" && window.Bokeh.index.find_one(model))
  const counts = { posts: 0, answers: 0, whole: 0, layouts: 0, above: 0 }
  const count = (owner, name, key) => {
    const before = owner[name]
    owner[name] = function (...given) {
      counts[key] += 1
      return before.apply(this, given)
    }
  }
  count(link, "post", "posts")
  count(link, "apply", "answers")
  for (const figure of figures) {
    const view = window.Bokeh.index.find_one(figure)
    count(view, "_paint_primary", "whole")
    count(view, "_paint_overlays", "above")
    count(view, "compute_layout", "layouts")
  }
  window.dragCounts = counts
  return figures.length
}"""

_IDLE = "window.lagscape.page.link.underWay === null && window.lagscape.page.link.queue.length === 0"


@pytest.fixture
def held(ready_page: Any) -> Any:
    """The page with the hand on the dot, a little way from where it lay; let go and undone afterwards."""
    page = ready_page
    page.mouse.move(5, 5)
    page.wait_for_timeout(1500)  # contours and other slow figures of the settled case come when the hand has rested
    place = dot_on_screen(page)["dot"]
    page.mouse.move(*place)
    page.mouse.down()
    page.mouse.move(place[0] - 20, place[1] + 20)
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
    page.wait_for_timeout(300)
    yield page, (place[0] - 20, place[1] + 20)
    page.mouse.up()
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
    page.get_by_role("button", name="Undo").click()
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)


def test_a_move_is_one_message_one_answer_and_no_whole_figure(held: Any) -> None:
    page, (x, y) = held
    assert page.evaluate(_COUNT) >= 3
    moves = 8
    for number in range(1, moves + 1):
        page.mouse.move(x - 2 * number, y + 2 * number)
        page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
        page.wait_for_timeout(60)
    counts = page.evaluate("window.dragCounts")
    assert counts["posts"] == moves and counts["answers"] == moves
    # Towards the boundary every swing is smaller, so that no axis has to grow: axes, boundary and contours stay as they were painted.
    assert counts["whole"] == 0 and counts["layouts"] == 0
    # The map twice, with the pointer and with the answer, and each of the two traces once, at least; else nothing followed.
    assert counts["above"] >= 3 * moves


def test_the_dot_is_under_the_pointer_before_python_answers(held: Any) -> None:
    page, (x, y) = held
    page.evaluate("() => { const { link } = window.lagscape.page; link.kept = link.post; link.post = () => {} }")
    page.mouse.move(x - 30, y + 10)
    page.wait_for_timeout(100)
    dot = dot_on_screen(page)["dot"]
    # The message that was kept back is sent now, so that the page goes on.
    page.evaluate("() => { const { link } = window.lagscape.page; link.post = link.kept; link.underWay = null }")
    page.mouse.move(x - 31, y + 10)
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
    # Bokeh's events are in whole pixels of the canvas.
    assert dot == pytest.approx([x - 30, y + 10], abs=1.0)


def test_numbers_of_the_case_follow_the_drag_and_settle(held: Any) -> None:
    page, (x, y) = held
    box = page.locator('[data-act="number"][data-key="peripheral_delay_s"]')
    for number in range(1, 7):
        page.mouse.move(x - 4 * number, y)
        page.wait_for_timeout(100)
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
    start = float(box.get_attribute("value"))
    assert float(box.input_value()) < start, "what stands in the box follows, the HTML does not"
    page.mouse.up()
    page.wait_for_function(_IDLE, timeout=_PATIENCE_MS)
    page.wait_for_function("(box) => box.value === box.getAttribute('value')", arg=box.element_handle(), timeout=_PATIENCE_MS)
    assert float(box.input_value()) == pytest.approx(dot_on_screen(page)["delay"], rel=5e-3)  # three figures are shown
