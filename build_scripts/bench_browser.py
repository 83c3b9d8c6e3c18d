"""The benchmark's part in the browser: compute in the worker, the whole drag on the built page, and the start of the page."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from statistics import median
from typing import Any

from bench_night import night_on_the_page
from browser_runtime import SITE_PATH, BrowserRuntime, plain_server, site_folder, write_bundle
from browser_setup import CHROMIUM_ARGUMENTS

__all__ = ["BrowserBench"]

BOOT_TIMEOUT_MS = 180_000

# From a pointer event (or a call) to the frame after the one in which the worker's answer was drawn.
_PROBE = """() => {
    const probe = { begun: 0, waiting: null, workerMs: 0 };
    const painted = () => new Promise((settle) => requestAnimationFrame(() => {
        const { port1, port2 } = new MessageChannel();
        port1.onmessage = () => settle(performance.now());
        port2.postMessage(null);
    }));
    const { link } = window.lagscape.page;
    const done = link.done.bind(link);
    link.done = (serial, milliseconds, ...patch) => {
        done(serial, milliseconds, ...patch);
        if (probe.waiting && link.underWay === null) {
            const settle = probe.waiting;
            probe.waiting = null;
            probe.workerMs = milliseconds;
            painted().then((now) => settle({ total: now - probe.begun, worker: milliseconds }));
        }
    };
    probe.next = () => new Promise((settle) => { probe.waiting = settle; });
    window.addEventListener("pointermove", () => {
        if (probe.armed) { probe.begun = performance.now(); probe.armed = false; probe.answer = probe.next(); }
    }, { capture: true });
    probe.empty = (figure) => {
        const { Pan } = window.Bokeh.require("core/bokeh_events");
        const event = new Pan(1, 1, 1, 1, 1, 1, { shift: false, ctrl: false, alt: false });
        event.origin = figure;
        probe.begun = performance.now();
        const answer = probe.next();
        window.lagscape.page.link.document.event_manager.send_event(event);
        return answer;
    };
    probe.figures = () => [...window.lagscape.page.link.document._all_models.values()].filter((model) => model.type === "Figure");
    window.probe = probe;
}"""


class BrowserBench:
    """Chromium with the built site on a plain server, for as long as the context lasts."""

    def __init__(self, browser: Any, server: str, folder: Path, app: str) -> None:
        self._browser, self._server, self._folder, self._app = browser, server, folder, app

    @classmethod
    @contextmanager
    def opened(cls, dist: Path, chromium: Path) -> Iterator[BrowserBench]:
        """Starts server and browser; ends both."""
        from playwright.sync_api import sync_playwright

        with tempfile.TemporaryDirectory() as temporary:
            folder = site_folder(Path(temporary), dist)
            app = next(dist.glob("app-*")).name
            with plain_server(folder) as server, sync_playwright() as playwright:
                browser = playwright.chromium.launch(executable_path=str(chromium), args=list(CHROMIUM_ARGUMENTS))
                yield cls(browser, server, folder, app)
                browser.close()

    def compute(self, names: list[str], modules: list[Path]) -> Iterator[tuple[str, dict[str, Any]]]:
        """Times the tasks of `bench_tasks` in a worker of the built runtime."""
        page = self._browser.new_page()
        runtime = BrowserRuntime(page, self._server, self._app)
        write_bundle(self._folder / "bench.zip", {path.name: path.read_bytes() for path in modules})
        runtime.add_files(f"{self._server}bench.zip", "/bench")
        runtime.add_path("/bench")
        for name in names:
            yield name, runtime.run("bench_tasks", "measure", name=name)
        page.close()

    def boots(self, turns: int = 3) -> dict[str, float]:
        """Median ms of the page's start to ready and of the bare runtime with numpy, each in a fresh context without a cache, in turn."""
        ready, bare = [], []
        for _ in range(turns):
            context = self._browser.new_context(service_workers="block")
            page = context.new_page()
            page.goto(self._server + SITE_PATH)
            page.wait_for_function("document.body.dataset.state === 'ready'", timeout=BOOT_TIMEOUT_MS, polling=20)
            ready.append(page.evaluate("performance.now()"))
            context.close()
            context = self._browser.new_context(service_workers="block")
            bare.append(BrowserRuntime(context.new_page(), self._server, self._app, bare=True).times["bareBootMs"])
            context.close()
        return {"ready": median(ready), "bare": median(bare)}

    def night(self, path: Path, rested: bool, turns: int = 2) -> dict[str, float]:
        """Smallest ms to the list of channels and to the cycles of a long night; `rested`: scipy is there already."""
        found = [night_on_the_page(self._browser, self._server, path, rested, BOOT_TIMEOUT_MS) for _ in range(turns)]
        return {name: min(item[name] for item in found) for name in ("list", "cycles")}

    def drags(self, moves: int = 40) -> dict[str, float]:
        """Median ms from pointer to painted trace on the map, of the worker's part of it, and of the round trip that does nothing.

        One move at a time: each waits until the one before is painted, so nothing is dropped and nothing piles up.
        """
        context = self._browser.new_context(viewport={"width": 1400, "height": 1000}, service_workers="block")
        page = context.new_page()
        page.goto(self._server + SITE_PATH)
        page.wait_for_function("document.body.dataset.state === 'ready'", timeout=BOOT_TIMEOUT_MS)
        page.wait_for_timeout(3000)
        page.evaluate(_PROBE)
        empty = [page.evaluate(_EMPTY) for _ in range(moves)]
        box = page.locator("#slot-map").bounding_box()
        assert box is not None
        left, top, width, height = box["x"] + 0.35 * box["width"], box["y"] + 0.35 * box["height"], 0.3 * box["width"], 0.3 * box["height"]
        page.mouse.move(left, top)
        page.mouse.down()
        found = []
        for number in range(moves + 5):
            page.evaluate("() => { window.probe.armed = true; }")
            page.mouse.move(left + width * (number % 20 + 1) / 20, top + height * (number % 13 + 1) / 13)
            found.append(page.evaluate("() => window.probe.answer"))
        page.mouse.up()
        context.close()
        real = found[5:]
        return {
            "empty": median(item["total"] for item in empty[5:]),
            "whole": median(item["total"] for item in real),
            "worker": median(item["worker"] for item in real),
            "best": min(item["total"] for item in real),
            "worst": max(item["total"] for item in real),
            "empty_best": min(item["total"] for item in empty[5:]),
        }


# The figure of the traces: a pan of it has no callback in Python.
_EMPTY = "() => window.probe.empty(window.probe.figures().at(-1))"
