"""The worker's end of the Bokeh document: gathers what Python changed and hands it over as one patch."""

from __future__ import annotations

import asyncio
import json
from collections.abc import Callable
from typing import Any

from bokeh.core.serialization import Buffer, Ref, Serializer
from bokeh.document import Document
from bokeh.document.events import ColumnDataChangedEvent, DocumentPatchedEvent, ModelChangedEvent
from bokeh.document.json import PatchJson
from bokeh.document.models import DocumentModelManager
from bokeh.model import Model

__all__ = ["DocumentLink"]

# Marks changes that came from the page, so that they are not sent back to it.
PAGE = "page"

_OF_DATA = (ModelChangedEvent, ColumnDataChangedEvent)


class DocumentLink:
    """Gathers the changes of a document while a message is worked through, then sends them in one go.

    One patch a message means one redraw on the page, and several settings of the same property cost one.

    Parameters
    ----------
    document
        The document to watch, just written out for the page: what it holds now the page is taken to have.
    send
        Takes the patch as JSON text and its binary parts by name.
    """

    def __init__(self, document: Document, send: Callable[[str, dict[str, bytes]], None]) -> None:
        self._document, self._send = document, send
        self._events: list[DocumentPatchedEvent] = []
        self._inside = False
        self._scheduled = False
        self._open = False
        # Else all of them would be looked through after every patch.
        document.models.flush_synced()
        document.on_change(self._gather)

    def open(self) -> None:
        """The page has drawn the document: what gathered meanwhile goes, and from now on everything does."""
        self._open = True
        self.flush()

    def apply(self, patch: str) -> None:
        """Lays a patch of the page on the document; changes that follow from it go back in one patch."""
        self._inside = True
        try:
            self._document.apply_json_patch(json.loads(patch), setter=PAGE)
        finally:
            self._inside = False
            self.flush()

    def __enter__(self) -> None:
        self._inside = True

    def __exit__(self, *_: object) -> None:
        self._inside = False
        self.flush()

    def flush(self) -> None:
        """Sends what has gathered; nothing before the page has the document."""
        self._scheduled = False
        if not self._open:
            return
        events, self._events = self._events, []
        if not events:
            return
        models = self._document.models
        serializer = _PatchSerializer(models)
        patch = PatchJson(events=serializer.encode(events))
        models.flush_synced(lambda model: not serializer.has_ref(model))
        parts = {buffer.id: buffer.to_bytes() for buffer in serializer.buffers}
        self._send(json.dumps(patch, default=_reference), parts)

    def _gather(self, event: Any) -> None:
        if not isinstance(event, DocumentPatchedEvent) or event.setter == PAGE:
            return
        if not self._joined(event) and not any(older.combine(event) for older in reversed(self._events)):
            self._events.append(event)
        # A change outside any message, from a task or a timer: sent as soon as that step is done.
        if not self._inside and not self._scheduled:
            self._scheduled = True
            asyncio.get_running_loop().call_soon(self.flush)


    def _joined(self, event: DocumentPatchedEvent) -> bool:
        """Whether the event became part of one that waits already: the data of a source go once.

        A changed column is read when the patch is made. Sent before a later change of all columns, it would have that one's length, the
        others on the page still theirs, and Bokeh would stop in the middle of the patch.
        """
        if not isinstance(event, _OF_DATA) or event.attr != "data":
            return False
        for place, older in enumerate(self._events):
            if isinstance(older, _OF_DATA) and older.attr == "data" and older.model is event.model:
                if isinstance(event, ModelChangedEvent):
                    self._events[place] = event
                elif isinstance(older, ModelChangedEvent):
                    older.new = event.model.data
                elif older.cols is None or event.cols is None:
                    older.cols = None
                else:
                    older.cols = list(dict.fromkeys([*older.cols, *event.cols]))
                return True
        return False


class _PatchSerializer(Serializer):
    """Asks of a model whether the page has it already when it meets one; Bokeh's own lists all models of the document for every patch."""

    def __init__(self, models: DocumentModelManager) -> None:
        super().__init__()
        self._models = models

    def get_ref(self, obj: Any) -> Ref | None:
        if isinstance(obj, Model) and obj.id in self._models and obj not in self._models._new_models:
            return obj.ref
        return super().get_ref(obj)

    def has_ref(self, obj: Any) -> bool:
        return self.get_ref(obj) is not None


def _reference(value: Any) -> Any:
    if isinstance(value, Buffer):
        return value.ref
    raise TypeError(f"a patch holds a {type(value).__name__}, which has no JSON form")
