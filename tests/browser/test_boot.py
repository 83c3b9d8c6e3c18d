"""The start of the page in a real browser: what is there at once, true progress, and what happens when a part is missing."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from support.watched_pages import BOOT_TIMEOUT_MS, Watch, open_ready, wait_ready

NewContext = Callable[..., tuple[Any, Watch]]
CAUTION = "Decision support for qualified staff. Not a medical device."


def test_frame_and_caution_are_there_before_python(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    # The runtime never arrives, so whatever the page shows, it shows without Python.
    context.route("**/pyodide.asm.wasm", lambda route: None)
    page = context.new_page()
    page.goto(site)
    assert page.locator("#caution").inner_text() == CAUTION
    assert page.locator("#boot").is_visible()
    assert page.locator("#boot-stages li").count() >= 4
    assert page.locator("#slot-map img.still").is_visible()
    page.close()


def test_progress_never_goes_back_and_ends_ready(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    # Notes the bar's value and the body's state whenever either changes, from the first moment on.
    context.add_init_script(
        """window.seen = [];
        document.addEventListener("DOMContentLoaded", () => {
            const note = () => window.seen.push([document.body.dataset.state, document.getElementById("boot-bar").value]);
            const options = { attributes: true, subtree: true, attributeFilter: ["value", "data-state"] };
            new MutationObserver(note).observe(document.body, options);
        });"""
    )
    page = open_ready(context, site)
    seen = page.evaluate("window.seen")
    while_booting = [value for state, value in seen if state == "booting"]
    assert len(while_booting) >= 6
    assert while_booting == sorted(while_booting)
    # Stages are half of the bar and bytes the other half; five of six stages end before the start does, and by then every byte is told.
    assert max(while_booting) > 0.9
    assert seen[-1][1] == 1
    states = [state for state, _ in seen]
    assert states[-1] == "ready" and "failed" not in states
    assert states == sorted(states, key=["booting", "ready"].index)


def test_the_ready_page_shows_a_case_a_standing_and_figures(ready_page: Any) -> None:
    assert ready_page.locator("#caution").inner_text() == CAUTION
    assert not ready_page.locator("#boot").is_visible()
    sentence = ready_page.locator("#standing-text").inner_text()
    assert len(sentence) > 20, sentence
    assert ready_page.locator("#standing").get_attribute("data-standing") in ("settles", "rings", "hunts")
    assert ready_page.locator("#slot-map .bk-Figure, #slot-map .bk-Figure-wrapper, #slot-map canvas").count() + _canvases(ready_page) > 0


def _canvases(page: Any) -> int:
    """Canvases anywhere on the page, inside the shadow roots that Bokeh draws in."""
    return page.evaluate(
        """() => {
            let found = 0;
            const walk = (root) => {
                for (const element of root.querySelectorAll("*")) {
                    if (element.tagName === "CANVAS") found += 1;
                    if (element.shadowRoot) walk(element.shadowRoot);
                }
            };
            walk(document);
            return found;
        }"""
    )


def test_the_page_stays_on_its_origin_and_the_worker_s_requests_are_seen(ready_page: Any, ready_watch: Watch) -> None:
    # The watch must see what the worker fetches, or its silence would prove nothing.
    assert any(request.endswith("pyodide.asm.wasm") for request in ready_watch.requests)
    assert any(request.endswith("lagscape.zip") for request in ready_watch.requests)
    assert ready_watch.foreign == []


def test_scipy_is_not_fetched_before_it_is_needed(new_context: NewContext, site: str) -> None:
    context, watch = new_context()
    open_ready(context, site)
    names = [request.rsplit("/", 1)[-1] for request in watch.requests]
    # The script that could fetch it is a few hundred bytes and belongs to the page; scipy itself is megabytes in a zip or a wheel.
    assert [name for name in names if ("scipy" in name or "openblas" in name) and not name.endswith(".js")] == []


def test_a_missing_runtime_is_said_in_a_sentence_and_can_be_tried_again(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    context.route("**/numpy.zip", lambda route: route.fulfill(status=404, body="gone"))
    page = context.new_page()
    page.goto(site)
    page.wait_for_function("document.body.dataset.state === 'failed'", timeout=BOOT_TIMEOUT_MS)
    sentence = page.locator("#failed-sentence").inner_text()
    assert sentence.startswith("Lagscape could not start: ")
    assert "numpy.zip" in sentence
    assert page.locator("#caution").is_visible()
    assert page.locator("#restart").evaluate("element => element === document.activeElement")
    context.unroute("**/numpy.zip")
    page.locator("#restart").click()
    wait_ready(page)
    assert not page.locator("#failed").is_visible()


def test_a_server_that_does_not_know_webassembly_still_starts(new_context: NewContext, site: str) -> None:
    # A plain server may send it as any bytes; the browser compiles only what comes as application/wasm.
    context, _ = new_context()

    def as_bytes(route: Any) -> None:
        answer = route.fetch()
        route.fulfill(response=answer, headers={**answer.headers, "content-type": "application/octet-stream"})

    context.route("**/*.wasm", as_bytes)
    page = open_ready(context, site)
    assert page.locator("#standing-text").inner_text()
    page.close()


def test_a_missing_page_script_is_said_in_a_sentence(new_context: NewContext, site: str) -> None:
    context, watch = new_context()
    context.route("**/page.js", lambda route: route.fulfill(status=404, body="gone"))
    page = context.new_page()
    page.goto(site)
    page.wait_for_function("document.body.dataset.state === 'failed'")
    assert "A part of the page is missing" in page.locator("#failed-sentence").inner_text()
    watch.expect_errors("404")


def test_an_old_browser_is_told_what_it_lacks(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    context.add_init_script("delete window.WebAssembly;")
    page = context.new_page()
    page.goto(site)
    page.wait_for_function("document.body.dataset.state === 'failed'")
    sentence = page.locator("#failed-sentence").inner_text()
    assert "it needs WebAssembly" in sentence and "Firefox" in sentence
    assert page.locator("#restart").is_visible()


def test_a_stopped_worker_is_said_in_a_sentence_and_starts_again(new_context: NewContext, site: str) -> None:
    context, _ = new_context()
    page = open_ready(context, site)
    # Stands for a crash of the worker itself: what the browser tells the page then is an error event on the worker.
    page.evaluate("window.lagscape.page.worker.dispatchEvent(new ErrorEvent('error', { message: 'out of memory', cancelable: true }))")
    page.wait_for_function("document.body.dataset.state === 'failed'")
    assert page.locator("#failed-sentence").inner_text() == "The calculation stopped and cannot go on."
    assert "out of memory" in page.locator("#failed-support").inner_text()
    page.locator("#restart").click()
    wait_ready(page)
    assert len(page.locator("#standing-text").inner_text()) > 20
