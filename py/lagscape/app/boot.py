"""Python's side of the worker: `web/worker.js` calls these functions and nothing else of the application.

Boot goes in the order of the functions: prepare, import_drawing, import_widgets, import_application, build, drawn; then `change` and
`command` for every message of the page. Everything comes in as a value.
"""

from __future__ import annotations

import gc
import importlib
import inspect
import json
import traceback
from collections.abc import Iterable
from typing import Any

from . import panel_compat

__all__ = ["build", "change", "command", "drawn", "import_application", "import_drawing", "import_widgets", "prepare"]


def prepare(style_sheets: str) -> None:
    """Sets what must be in place before Bokeh and Panel are imported; `style_sheets`: address of Panel's own files."""
    # Importing makes hundreds of thousands of objects that stay: looking through them for garbage only costs time.
    gc.disable()
    panel_compat.stand_in_for_unused()
    panel_compat.use_own_style_sheets(style_sheets)


def import_drawing() -> None:
    """Imports Bokeh."""
    importlib.import_module("bokeh.plotting")
    panel_compat.remember_defaults()


def import_widgets() -> None:
    """Imports Panel."""
    importlib.import_module("panel")


def import_application() -> None:
    """Imports the application's views."""
    importlib.import_module("lagscape.app.main")


# Views that open over the middle: drawn when they are first opened or when nothing happens, so that the start does not wait for them.
LATER = ("recording", "handover")


class _Running:
    """The one running application of this worker."""

    def __init__(self, host: Any, settings: dict[str, Any]) -> None:
        from bokeh.document import Document
        from bokeh.io.doc import set_curdoc
        from bokeh.settings import settings as bokeh_settings
        from panel.io.state import state

        from . import main
        from .page_link import PageLink
        from .scipy_loader import use_loader

        use_loader(host.loadScipy, host.scipyFetched)
        self.host = host
        # Names that differ between restarts, so that the page's index of views never meets the same one twice.
        bokeh_settings.simple_ids.set_value(False)
        self.document = Document()
        set_curdoc(self.document)
        state.curdoc = self.document
        self.link: Any = None
        self.page = PageLink(self._post, **settings)
        self.page.join(self._draw, self.trouble)
        self.roots: dict[str, str] = {}
        viewables = main.build(self.page)
        self.waiting = {slot: viewables.pop(slot) for slot in LATER if slot in viewables}
        with self.document.models.freeze():  # the set of all models is worked out once, not once a root
            for slot, viewable in viewables.items():
                self._add_root(slot, viewable)

    def document_json(self) -> str:
        """The whole document and the slot of each root, as JSON text; what changes from here on is gathered for the page."""
        from .document_link import DocumentLink

        text = json.dumps([json.dumps(self.document.to_json(deferred=False)), json.dumps(self.roots)])
        self.link = DocumentLink(self.document, self._send_patch)
        return text

    def start(self) -> None:
        """The page has its copy of the document: joins the two."""
        from bokeh.events import DocumentReady

        self.link.open()
        with self.link:
            self.document.callbacks.trigger_event(DocumentReady())

    def draw_waiting(self, slots: Iterable[str]) -> None:
        """Draws those of the slots that still wait."""
        for slot in slots:
            if slot in self.waiting:
                viewable = self.waiting.pop(slot)
                # A function in place of a view: then even its models are made only now.
                self._draw(slot, viewable() if inspect.isfunction(viewable) or inspect.ismethod(viewable) else viewable)

    def receive(self, name: str, fields: dict[str, Any]) -> None:
        """Hands a command of the page to the application, after drawing what it may show."""
        if name == "idle":
            self.draw_waiting(LATER)
        elif name == "show":
            self.draw_waiting([fields["view"]])
        self.page.receive(name, fields)

    def trouble(self, error: BaseException) -> None:
        """Tells the page of an error that nobody expected."""
        text = "".join(traceback.format_exception(error))
        self.host.trouble(str(error) or type(error).__name__, text[-4000:])

    def _add_root(self, slot: str, viewable: Any) -> str:
        before = set(self.document.roots)
        viewable.server_doc(self.document, location=False)
        (root,) = set(self.document.roots) - before
        self.roots[root.ref["id"]] = slot
        return root.ref["id"]

    def _draw(self, slot: str, viewable: Any) -> None:
        if self.link is None:
            self._add_root(slot, viewable)
            return
        # The page must know the slot before the patch that brings the root arrives.
        self.link.flush()
        with self.link:
            root_id = self._add_root(slot, viewable)
            self.host.root(root_id, slot)

    def _post(self, name: str, payload: dict[str, Any]) -> None:
        from pyodide.ffi import to_js

        if name == "show" and self.link is not None:
            self.draw_waiting([payload["view"]])
        data = payload.pop("data", None)
        self.host.call(name, json.dumps(payload), None if data is None else to_js(data))

    def _send_patch(self, patch: str, parts: dict[str, bytes]) -> None:
        from pyodide.ffi import to_js

        self.host.patch(patch, to_js(list(parts)), to_js([to_js(part).buffer for part in parts.values()]))


_running: _Running | None = None


def build(host: Any, settings: str) -> str:
    """Builds the application's views; `settings` is the JSON text of address, link, theme and touch. Returns JSON text."""
    global _running
    _running = _Running(host, json.loads(settings))
    return _running.document_json()


def drawn() -> None:
    """The page has drawn the document: changes may flow."""
    assert _running is not None
    _running.start()
    # What is there now stays till the end: garbage is looked for among later objects only, so a drag never waits for it.
    gc.collect()
    gc.freeze()
    gc.enable()


def change(patch: str) -> None:
    """Works through one Bokeh patch of the page, JSON text; an error in the application is told to the page."""
    assert _running is not None
    try:
        _running.link.apply(patch)
    except Exception as error:
        _running.trouble(error)


def command(name: str, payload: str, file: Any) -> None:
    """Works through one typed command, its payload as JSON text and the browser's File or None."""
    assert _running is not None
    fields = json.loads(payload)
    if file is not None:
        from .browser_file import open_browser_file

        fields["file"] = open_browser_file(file, _running.host.readSlice, fields["name"], fields["bytes"])
    try:
        with _running.link:
            _running.receive(name, fields)
    except Exception as error:
        _running.trouble(error)
