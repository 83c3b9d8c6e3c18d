"""Nothing leaves the origin: the content security policy holds in the page and in the worker, on a server that sends no headers."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

import pytest

from support.watched_pages import Watch, open_ready

NewContext = Callable[..., tuple[Any, Watch]]


class Elsewhere:
    """A second server, that is another origin, which counts what reaches it."""

    def __init__(self) -> None:
        self.reached: list[str] = []
        reached = self.reached

        class Handler(BaseHTTPRequestHandler):
            def do_GET(self) -> None:
                reached.append(self.path)
                self.send_response(200)
                self.send_header("Access-Control-Allow-Origin", "*")
                self.end_headers()

            do_POST = do_GET

            def log_message(self, format: str, *args: object) -> None:
                pass

        self.server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self.address = f"http://127.0.0.1:{self.server.server_port}/"
        threading.Thread(target=self.server.serve_forever, daemon=True).start()


@pytest.fixture
def elsewhere() -> Iterator[Elsewhere]:
    other = Elsewhere()
    yield other
    other.server.shutdown()
    other.server.server_close()


def test_the_other_server_can_be_reached_from_an_ordinary_page(browser: Any, server: str, elsewhere: Elsewhere) -> None:
    # Without this the next tests would pass against a server that nobody can reach.
    page = browser.new_page()
    page.goto(f"{server}runtime/index.html")
    assert page.evaluate("(address) => fetch(address).then((answer) => answer.status)", elsewhere.address) == 200
    assert elsewhere.reached == ["/"]
    page.close()


@pytest.mark.parametrize("inside", ["page", "worker"])
def test_a_request_to_another_origin_is_refused(new_context: NewContext, site: str, elsewhere: Elsewhere, inside: str) -> None:
    context, watch = new_context()
    page = open_ready(context, site)
    place = page if inside == "page" else page.workers[0]
    for attempt in (
        "(address) => fetch(address).then(() => 'sent', () => 'refused')",
        "(address) => fetch(address, { method: 'POST', body: 'case', mode: 'no-cors' }).then(() => 'sent', () => 'refused')",
        """(address) => new Promise((settle) => {
            const request = new XMLHttpRequest();
            request.onload = () => settle('sent');
            request.onerror = () => settle('refused');
            request.open('GET', address);
            request.send();
        })""",
        "(address) => import(address).then(() => 'sent', () => 'refused')",
    ):
        assert place.evaluate(attempt, elsewhere.address) == "refused"
    if inside == "page":
        answer = page.evaluate(
            "(address) => new Promise((settle) => { const image = new Image(); image.onload = () => settle('sent');"
            " image.onerror = () => settle('refused'); image.src = address; })",
            elsewhere.address,
        )
        assert answer == "refused"
    assert elsewhere.reached == []
    # Chromium lists a refused attempt as a request that was never sent, and tells the page's own refusals on its console.
    assert watch.foreign and all(request.startswith(elsewhere.address) for request in watch.foreign)
    watch.foreign.clear()
    if inside == "page":
        watch.expect_errors("Content Security Policy")
        watch.errors.clear()


def test_the_link_s_text_is_never_sent(new_context: NewContext, site: str) -> None:
    context, watch = new_context()
    page = context.new_page()
    page.goto(f"{site}#secret-case-text")
    page.wait_for_function("document.body.dataset.state !== 'booting'", timeout=120_000)
    assert len(watch.requests) > 5
    assert [request for request in watch.requests if "secret-case-text" in request.split("#")[0]] == []
