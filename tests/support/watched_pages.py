"""Pages under watch: what went wrong in them, what they asked of which server, and when they are ready."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urlsplit

__all__ = ["BOOT_TIMEOUT_MS", "Watch", "open_ready", "wait_ready"]

BOOT_TIMEOUT_MS = 120_000
"""A slow shared machine takes many times the usual start; a test that waits this long has found a start that never ends."""


@dataclass
class Watch:
    """What the watched pages of one context did: errors on the console, uncaught errors, and requests by origin."""

    origin: str
    errors: list[str] = field(default_factory=list)
    foreign: list[str] = field(default_factory=list)
    requests: list[str] = field(default_factory=list)

    def follow(self, context: Any) -> None:
        """Begins to note everything that happens in any page or worker of the context."""
        context.on("request", self._note_request)
        context.on("console", lambda message: self.errors.append(message.text) if message.type == "error" else None)
        context.on("weberror", lambda error: self.errors.append(str(error.error)))

    def _note_request(self, request: Any) -> None:
        address = urlsplit(request.url)
        self.requests.append(request.url)
        if address.scheme not in ("data", "blob") and f"{address.scheme}://{address.netloc}" != self.origin:
            self.foreign.append(request.url)

    def expect_errors(self, *parts: str) -> None:
        """Takes note that a test broke something on purpose: each error must hold one of these parts, and each part must occur."""
        for part in parts:
            assert any(part in error for error in self.errors), f"no console error holds {part!r}: {self.errors}"
        self.errors = [error for error in self.errors if not any(part in error for part in parts)]

    def check(self) -> None:
        """Fails on any console error and on any request to another origin."""
        assert self.errors == [], "console errors"
        assert self.foreign == [], "requests to another origin"


def open_ready(context: Any, address: str) -> Any:
    """Opens the address in a new page and waits until the application is ready."""
    page = context.new_page()
    page.goto(address)
    wait_ready(page)
    return page


def wait_ready(page: Any) -> None:
    """Waits until the page is ready; a failed start is reported with the page's own words."""
    page.wait_for_function("['ready', 'failed'].includes(document.body.dataset.state)", timeout=BOOT_TIMEOUT_MS)
    state = page.evaluate("document.body.dataset.state")
    assert state == "ready", page.locator("#failed").inner_text()
