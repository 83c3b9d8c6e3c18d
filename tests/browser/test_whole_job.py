"""The whole job as a clinical physiologist does it: a recording, its cycles, the case, the map, the file, the link."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

from support.page_hands import dot_on_screen, drag_dot, numbers_of, recording_file, save_case, standing, trace_end
from support.watched_pages import Watch, open_ready

NewContext = Callable[..., tuple[Any, Watch]]

_PATIENCE_MS = 90_000
"""The first recording fetches and starts scipy; a slow shared machine takes many times the usual seconds."""


def _cycles(page: Any) -> int:
    heading = page.get_by_role("heading", name=re.compile(r"\d+ cycles used"))
    heading.wait_for(timeout=_PATIENCE_MS)
    return int(re.match(r"(\d+) cycles used", heading.inner_text()).group(1))  # type: ignore[union-attr]


def test_recording_to_case_to_boundary_to_file_to_link(new_context: NewContext, site: str, tmp_path: Path) -> None:
    context, _ = new_context(accept_downloads=True)
    page = open_ready(context, site)

    page.locator("#recording-input").set_input_files(recording_file(tmp_path))
    # Oracle: what a person counts in the shared recording; its note says bursts every 20 to 50 s for most of 1,200 s.
    cycles = _cycles(page)
    assert cycles >= 25

    # Leaving one cycle out counts at once.
    page.get_by_role("checkbox", name=re.compile("^Use cycle")).first.uncheck()
    page.get_by_role("heading", name=f"{cycles - 1} cycles used").wait_for(timeout=_PATIENCE_MS)

    page.get_by_role("button", name="Lay these on the case").click()
    page.get_by_role("button", name="Lay them").click()
    page.get_by_role("button", name=re.compile("Basis of Delay, lung to carotid body: measured")).wait_for(timeout=_PATIENCE_MS)
    page.wait_for_function("document.getElementById('standing').dataset.standing === 'hunts'", timeout=_PATIENCE_MS)
    for _ in range(300):
        hunting = trace_end(page)
        if hunting.min() == 0.0:
            break
        page.wait_for_timeout(100)
    assert hunting.min() == 0.0, "a hunting case of this recording has apnoea"

    # Far below the boundary the loop settles or rings, and the trace is quiet at its end.
    dot = dot_on_screen(page)
    drag_dot(page, 0.0, -0.9 * (dot["low"][1] - dot["dot"][1]))
    page.wait_for_function("document.getElementById('standing').dataset.standing !== 'hunts'", timeout=_PATIENCE_MS)
    page.wait_for_function("document.getElementById('standing-text').innerText.length > 30", timeout=_PATIENCE_MS)
    assert dot_on_screen(page)["sensitivity"] < dot["sensitivity"]
    # The sentence and the traces are two messages: the traces may come a moment later.
    for _ in range(300):
        quiet = trace_end(page)
        if quiet.max() - quiet.min() < 0.05 * (hunting.max() - hunting.min()):
            break
        page.wait_for_timeout(100)
    else:
        raise AssertionError(f"the trace never came to rest: {quiet.min()} to {quiet.max()} L/min")

    # And back across it.
    drag_dot(page, 0.0, 0.8 * (dot["low"][1] - dot["dot"][1]))
    page.wait_for_function("document.getElementById('standing').dataset.standing === 'hunts'", timeout=_PATIENCE_MS)
    page.wait_for_function("document.getElementById('standing-text').innerText.length > 30", timeout=_PATIENCE_MS)
    sentence = page.locator("#standing-text").inner_text()

    saved = save_case(page)
    assert numbers_of(saved)

    # The link, opened by a colleague in a browser that knows nothing of this one.
    context.grant_permissions(["clipboard-read", "clipboard-write"])
    page.get_by_role("button", name="Copy link").click()
    page.wait_for_function("document.getElementById('said-bar').innerText.includes('clipboard')", timeout=_PATIENCE_MS)
    link = page.evaluate("navigator.clipboard.readText()")
    assert link.startswith(site) and "#" in link and len(link.split("#")[1]) < 2000
    page.close()

    colleague, _ = new_context(accept_downloads=True)
    other = open_ready(colleague, link)
    # The same case to the last digit: the two files are equal.
    assert save_case(other) == saved
    assert other.locator("#standing-text").inner_text() == sentence
    assert standing(other) == "hunts"
    other.close()


def test_a_case_file_opens_and_a_broken_one_leaves_the_page_as_it_was(new_context: NewContext, site: str, tmp_path: Path) -> None:
    context, _ = new_context(accept_downloads=True)
    page = open_ready(context, site)
    before = save_case(page)

    broken = tmp_path / "broken.json"
    broken.write_text('{"version": 1, "numbers": ', encoding="utf-8")
    page.locator("#case-input").set_input_files(broken)
    page.wait_for_function("document.getElementById('said-bar').innerText.includes('broken.json')", timeout=_PATIENCE_MS)
    assert page.locator("#said-bar").get_attribute("data-tone") == "refused"
    assert save_case(page) == before

    from lagscape import Case

    healthy = tmp_path / "healthy.json"
    healthy.write_text(Case.from_starting_case("healthy-asleep").to_json(), encoding="utf-8")
    page.locator("#case-input").set_input_files(healthy)
    page.wait_for_function("document.getElementById('standing').dataset.standing === 'settles'", timeout=_PATIENCE_MS)
    assert Case.from_json(healthy.read_text(encoding="utf-8")) == Case.from_json(__import__("json").dumps(save_case(page)))

    page.get_by_role("button", name="Undo").click()
    page.wait_for_function("document.getElementById('standing').dataset.standing === 'hunts'", timeout=_PATIENCE_MS)
    assert save_case(page) == before
    page.close()


def test_a_broken_link_is_refused_in_words(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site + "#L1.damaged")
    said = page.locator("#said-bar")
    said.wait_for(timeout=_PATIENCE_MS)
    assert said.get_attribute("data-tone") == "refused" and len(said.inner_text()) > 20
    assert standing(page) == "hunts", "the opening case stays"
    page.close()
