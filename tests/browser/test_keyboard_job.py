"""The questions of the clinic by keyboard alone: which lever, what dose, why; and a number typed, refused and mended."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any

from support.page_hands import dot_on_screen, standing
from support.watched_pages import Watch, open_ready

NewContext = Callable[..., tuple[Any, Watch]]

_PATIENCE_MS = 90_000
_FOCUSED = """() => {
  let e = document.activeElement
  while (e?.shadowRoot?.activeElement) e = e.shadowRoot.activeElement
  return {act: e?.dataset?.act ?? "", key: e?.dataset?.key ?? "", id: e?.id ?? "", text: e?.innerText ?? ""}
}"""


def _tab_to(page: Any, act: str, key: str | None = None, most: int = 250) -> None:
    """Press Tab until the control with this act (and key) has the focus; fails where the keyboard never comes to it."""
    for _ in range(most):
        page.keyboard.press("Tab")
        focused = page.evaluate(_FOCUSED)
        if focused["act"] == act and key in (None, focused["key"]):
            return
    raise AssertionError(f"Tab never reached {act} {key or ''}")


def test_which_lever_what_dose_why_by_keyboard(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    assert standing(page) == "hunts"
    page.get_by_text("Share of the excess").wait_for(timeout=_PATIENCE_MS)
    why = page.get_by_text(re.compile(r"Most of the excess \(\d+ %\) is \w+")).inner_text()
    assert "typical" in why

    _tab_to(page, "enough")
    page.keyboard.press("Enter")
    answer = page.get_by_text(re.compile(r"is enough for a gain margin of 1\.3")).first
    answer.wait_for(timeout=_PATIENCE_MS)

    # The page's trial caution stands beside the levers of a heart-failure case.
    assert page.get_by_text("N Engl J Med 2015;373:1095").first.is_visible()

    page.evaluate("document.activeElement.blur()")
    _tab_to(page, "take")
    lever = page.evaluate(_FOCUSED)["key"]
    page.keyboard.press("Enter")
    page.get_by_text("With levers:").wait_for(timeout=_PATIENCE_MS)
    after = page.locator(".after-levers").first.inner_text()
    # A gain margin of 1.3 is on the quiet side of the boundary, so whatever lever it was, the loop no longer hunts.
    assert re.search(r"With levers: (Rings|Settles)", after), (lever, after)
    page.close()


def test_arrow_keys_move_the_dot_by_one_and_ten_per_cent(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    page.locator("#slot-map").focus()
    start = dot_on_screen(page)
    page.keyboard.press("ArrowUp")
    _until(page, lambda: dot_on_screen(page)["sensitivity"] > start["sensitivity"])
    # One step is 1 % (page's own rule); the numbers are kept to rounding.
    assert abs(dot_on_screen(page)["sensitivity"] / start["sensitivity"] - 1.01) < 1e-9
    page.keyboard.press("Shift+ArrowLeft")
    _until(page, lambda: dot_on_screen(page)["delay"] < start["delay"])
    assert abs(dot_on_screen(page)["delay"] / start["delay"] - 1.0 / 1.1) < 1e-9
    page.keyboard.press("Control+z")
    _until(page, lambda: abs(dot_on_screen(page)["delay"] - start["delay"]) < 1e-9)
    page.close()


def test_a_dot_held_still_before_it_is_dragged_still_follows(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    start = dot_on_screen(page)
    page.mouse.move(*start["dot"])
    page.mouse.down()
    page.wait_for_timeout(700)
    page.mouse.move(start["dot"][0] - 40, start["dot"][1] + 30)
    page.mouse.move(start["dot"][0] - 80, start["dot"][1] + 60)
    _until(page, lambda: dot_on_screen(page)["delay"] < start["delay"])
    page.mouse.up()
    _until(page, lambda: page.get_by_role("button", name="Undo").is_enabled())
    assert dot_on_screen(page)["sensitivity"] < start["sensitivity"]
    page.close()


def test_an_impossible_number_is_refused_at_its_place_and_nothing_is_lost(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    sentence = page.locator("#standing-text").inner_text()
    _tab_to(page, "number", "lung_volume_l")
    page.keyboard.press("Control+a")
    page.keyboard.type("99")
    page.keyboard.press("Enter")
    refusal = page.get_by_role("alert").filter(has_text="Lung gas volume must be a number from 0.5 to 8 L; got 99.")
    refusal.wait_for(timeout=_PATIENCE_MS)
    assert page.locator("#standing-text").inner_text() == sentence
    # The way out: a possible number, with a decimal comma.
    page.keyboard.press("Control+a")
    page.keyboard.type("2,5")
    page.keyboard.press("Enter")
    refusal.wait_for(state="detached", timeout=_PATIENCE_MS)
    _until(page, lambda: page.get_by_role("textbox", name="Lung gas volume, L").input_value() == "2.50")
    page.close()


def test_units_switch_everywhere(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    assert page.get_by_role("textbox", name="Resting PaCO2, mmHg").input_value() == "36.0"
    page.locator("#units label", has_text="kPa").click()
    # Oracle: 1 mmHg = 133.322387415 Pa (BIPM), so 36 mmHg = 4.7996 kPa.
    box = page.get_by_role("textbox", name="Resting PaCO2, kPa")
    box.wait_for(timeout=_PATIENCE_MS)
    assert box.input_value() == "4.80"
    assert page.get_by_text("mmHg").count() <= 1, "only the switch itself still says mmHg"
    page.close()


def _until(page: Any, condition: Callable[[], bool], tries: int = 400) -> None:
    for _ in range(tries):
        if condition():
            return
        page.wait_for_timeout(100)
    raise AssertionError("it never came true")
