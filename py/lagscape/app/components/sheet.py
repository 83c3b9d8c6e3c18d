"""A Panel component that shows HTML written in Python and reports what the hand does to its native controls.

The browser keeps the shown elements and changes only what differs, so focus, scroll and an unfinished entry survive an update.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from importlib.resources import files
from typing import Any, ClassVar

import param
from panel.reactive import ReactiveHTML

__all__ = ["Request", "Sheet"]


def _asset(name: str) -> str:
    return files("lagscape.app.components").joinpath(name).read_text(encoding="utf-8")


@dataclass(frozen=True)
class Request:
    """One thing the hand did: the act and key named in the HTML, the control's value, and whether it is still moving."""

    act: str
    key: str
    value: str
    live: bool
    event: str


class Sheet(ReactiveHTML):
    """HTML in, requests out. Give `handle`; it is called once for each request, in order."""

    content = param.Dict(default={"html": ""})
    """The HTML, wrapped: Panel strips the tags of a plain string parameter."""
    adjusted = param.Dict(default={})
    """Values of single controls, by their key: laid over the HTML while a hand moves, until the next HTML."""
    live = param.Dict(default={})
    requests = param.List(default=[])

    _template: ClassVar[str] = '<div id="root" class="sheet"></div>'
    _scripts: ClassVar[dict[str, Any]] = {"render": _asset("sheet.js"), "content": "state.apply()", "adjusted": "state.adjust()"}
    _stylesheets: ClassVar[list[str]] = [_asset("sheet.css")]

    def __init__(self, handle: Callable[[Request], None] | None = None, **params: Any) -> None:
        super().__init__(**params)
        self._handle = handle
        self._seen = 0
        self.param.watch(self._on_live, "live")
        self.param.watch(self._on_requests, "requests")

    def show(self, html: str) -> None:
        """Show this HTML; nothing is sent where it is what stands there already."""
        if html != self.content["html"] or self.adjusted:
            self.adjusted = {}
            self.content = {"html": html, "turn": self.content.get("turn", 0) + 1}

    def adjust(self, values: dict[str, dict[str, str]]) -> None:
        """Set the values of single controls and leave the rest as it stands: by `data-key`, then by `data-act`, the value as text.

        Much less work than new HTML, for the page and here. The next `show` counts again, whatever was adjusted.
        """
        if values != self.adjusted:
            self.adjusted = values

    def _on_live(self, event: Any) -> None:
        if event.new and event.new.get("serial", 0) > self._seen:
            self._pass_on(event.new)

    def _on_requests(self, event: Any) -> None:
        for entry in event.new:
            if entry["serial"] > self._seen:
                self._seen = entry["serial"]
                self._pass_on(entry)

    def _pass_on(self, entry: dict[str, Any]) -> None:
        if self._handle is not None:
            fields = ("act", "key", "value", "live", "event")
            self._handle(Request(**{name: entry[name] for name in fields}))
