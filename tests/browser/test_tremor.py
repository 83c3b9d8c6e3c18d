"""A tremor in the real browser: an accelerometer opened, an unloaded and a loaded window taken, and laid on a reflex case."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from support.page_hands import numbers_of, save_case
from support.watched_pages import Watch, open_ready

NewContext = Callable[..., tuple[Any, Watch]]

_PATIENCE_MS = 90_000
"""The first recording fetches and starts scipy; a slow shared machine takes many times the usual seconds."""
_BARE_HZ, _LOADED_HZ = 6.0, 4.2
_PHONE = {"viewport": {"width": 390, "height": 844}, "has_touch": True, "is_mobile": True}


def _invented_hand(path: Path) -> Path:
    """Two minutes of three axes in g, a weight on the limb from the second one on; invented."""
    rate, rng = 100.0, np.random.default_rng(9)
    phase = 2.0 * np.pi * np.cumsum(np.repeat([_BARE_HZ, _LOADED_HZ], 6000)) / rate
    axes = np.outer(np.sin(phase), (0.05, 0.03, 0.01)) + 0.004 * rng.standard_normal((phase.size, 3)) + (0.0, 0.0, 1.0)
    rows = "\n".join(f"{i / rate:.2f}," + ",".join(f"{value:.5f}" for value in row) for i, row in enumerate(axes))
    path.write_text("time_s,Acc X (g),Acc Y (g),Acc Z (g)\n" + rows, encoding="utf-8")
    return path


def _type(page: Any, label: str, text: str) -> None:
    """By keyboard alone: into a box, and Enter."""
    box = page.get_by_role("textbox", name=label)
    box.focus()
    page.keyboard.press("ControlOrMeta+A")
    page.keyboard.type(text)
    page.keyboard.press("Enter")


def _press(page: Any, name: str) -> None:
    button = page.get_by_role("button", name=name)
    button.focus()
    page.keyboard.press("Enter")


def _peak(page: Any, column: int = 0) -> str:
    return page.locator("#over-recording tr", has_text="Peak frequency").first.locator("td").nth(column).inner_text()


@pytest.mark.parametrize("options", [{}, _PHONE], ids=["desktop", "phone"])
def test_a_tremor_is_opened_compared_under_load_laid_and_handed_over(
    new_context: NewContext, site: str, tmp_path: Path, options: dict[str, Any], browser: Any, server: str
) -> None:
    if options:
        context = browser.new_context(accept_downloads=True, **options)
        watch = Watch(server.rstrip("/"))
        watch.follow(context)
    else:
        context, watch = new_context(accept_downloads=True)
    page = open_ready(context, site)
    before = save_case(page)
    page.locator("#recording-input").set_input_files(_invented_hand(tmp_path / "hand.csv"))
    page.get_by_role("heading", name="The tremor").wait_for(timeout=_PATIENCE_MS)
    channels = page.get_by_role("combobox", name="Channel").locator("option").all_inner_texts()
    assert channels[0] == "Acc X + Acc Y + Acc Z (3 axes, accelerometer, 100 Hz)" and channels[1] == "Acc X (accelerometer, 100 Hz)"
    # Nothing is wider than the screen, and by touch every control of the view is 44 px high or stands in a label that is.
    assert page.evaluate("document.documentElement.scrollWidth <= innerWidth")

    # Oracle of both peaks: the recording's construction. The whole job goes by keyboard.
    _type(page, "Window to, s", "60")
    page.locator("#over-recording tr", has_text="0:00 to 1:00").wait_for(timeout=_PATIENCE_MS)
    assert _peak(page) == f"{_BARE_HZ:.2f} Hz"
    if not options:
        # The window follows the hand on the strip, and is measured when the hand rests.
        place = page.evaluate(_STRIP)
        page.mouse.move(place["middle"], place["top"])
        page.mouse.down()
        for step in range(1, 13):
            page.mouse.move(place["middle"] + place["half"] * step / 12.0, place["top"])
            page.wait_for_timeout(25)
        page.mouse.up()
        page.locator("#over-recording tr", has_text=f"{_LOADED_HZ:.2f} Hz").first.wait_for(timeout=_PATIENCE_MS)
        _type(page, "Window from, s", "0")
        page.locator("#over-recording tr", has_text="0:00 to").wait_for(timeout=_PATIENCE_MS)
        _type(page, "Window to, s", "60")
        page.locator("#over-recording tr", has_text="0:00 to 1:00").wait_for(timeout=_PATIENCE_MS)
    _press(page, "Take this window as unloaded")
    page.get_by_text("Unloaded: 0:00 to 1:00 of hand.csv").wait_for(timeout=_PATIENCE_MS)
    _type(page, "Window to, s", "120")
    page.locator("#over-recording tr", has_text="0:00 to 2:00").wait_for(timeout=_PATIENCE_MS)
    _type(page, "Window from, s", "60")
    page.locator("#over-recording tr", has_text="1:00 to 2:00").wait_for(timeout=_PATIENCE_MS)
    _press(page, "Take this window as loaded")
    page.get_by_text("Loaded: 1:00 to 2:00 of hand.csv").wait_for(timeout=_PATIENCE_MS)
    assert (_peak(page, 0), _peak(page, 1)) == (f"{_BARE_HZ:.2f} Hz", f"{_LOADED_HZ:.2f} Hz")
    _type(page, "Mass of the load, g", "2000")
    _type(page, "Lever arm of the load, cm", "15")
    page.get_by_text("0.0450 kg m²").wait_for(timeout=_PATIENCE_MS)
    if options:
        small = page.evaluate(_SMALL_TARGETS)
        assert small == []

    # The case breathes: a reflex case is offered, and nothing changes before it is laid.
    _press(page, "Lay these on the case")
    page.get_by_role("heading", name="A tremor is laid on a reflex case").wait_for(timeout=_PATIENCE_MS)
    page.get_by_role("region", name="A reflex case").get_by_role("button", name="Ankle, ordinary reflex").click()
    page.get_by_role("heading", name="What will change").wait_for(timeout=_PATIENCE_MS)
    assert page.get_by_text("points to the mechanical-reflex loop").is_visible()
    assert save_case(page) == before

    page.get_by_role("button", name="Lay them").click()
    page.get_by_role("button", name=re.compile("Basis of Limb inertia: measured")).wait_for(timeout=_PATIENCE_MS)
    laid = numbers_of(save_case(page))
    assert laid["stiffness_n_m_rad"]["basis"] == "measured" and 0.01 < laid["inertia_kg_m2"]["value"] < 0.06

    page.locator("#open-handover").click()
    with page.expect_download() as waiting:
        page.get_by_role("button", name="Save the tremor (JSON)").click()
    handed = json.loads(Path(waiting.value.path()).read_text(encoding="utf-8"))
    assert handed["answer"]["verdict"] == "moves" and abs(handed["answer"]["shift_hz"] - (_LOADED_HZ - _BARE_HZ)) < 0.05
    page.get_by_role("button", name="Close").click()

    page.get_by_role("button", name="Undo").click()
    page.get_by_role("button", name=re.compile("Basis of Lung gas volume")).wait_for(timeout=_PATIENCE_MS)
    assert save_case(page) == before
    page.close()
    if options:
        context.close()
        watch.check()


_STRIP = """() => {
  const figures = [...Bokeh.documents[0]._all_models.values()].filter((m) => m.type === "Figure")
  const shown = (m) => Bokeh.index.find_one(m)?.el.getBoundingClientRect().width > 0
  const strip = figures.find((m) => m.toolbar.tools.some((t) => t.type === "RangeTool") && shown(m))
  const view = Bokeh.index.find_one(strip)
  const area = view.el.getBoundingClientRect()
  const range = strip.toolbar.tools.find((t) => t.type === "RangeTool").x_range
  const [a, b] = [range.start, range.end].map((x) => area.left + view.frame.x_scale.compute(x))
  return {middle: (a + b) / 2, half: b - a, top: area.top + 40}
}"""

_SMALL_TARGETS = """() => {
  const found = []
  const walk = (place) => {
    for (const each of place.querySelectorAll("button, select, input, summary")) {
      const box = (each.type === "checkbox" ? each.closest("label") : each).getBoundingClientRect()
      if (box.width > 0 && box.height < 43.5) found.push(`${each.nodeName} ${each.dataset.act ?? each.textContent} ${box.height}`)
    }
    for (const each of place.querySelectorAll("*")) if (each.shadowRoot) walk(each.shadowRoot)
  }
  walk(document.getElementById("over-recording"))
  return found
}"""
