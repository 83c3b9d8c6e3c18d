"""The one way between the application and the page around it.

`send` asks the page for something, `on` hears what the user did outside the drawn parts. In the browser `boot` joins the two ends; a
test makes a bare `PageLink()`, reads `sent` and calls `receive` itself. Names and fields are those of `web/messages.js`.
"""

from __future__ import annotations

import asyncio
import inspect
from collections.abc import Callable, Mapping
from typing import Any

from ..errors import InvalidInputError

__all__ = ["RECEIVES", "SENDS", "PageLink"]

# What the application asks of the page: name, and the fields of the payload (CALLS in web/messages.js).
SENDS: dict[str, tuple[str, ...]] = {
    "download": ("name", "type", "data"),  # data: bytes; the browser saves a file of that name
    "set_hash": ("link",),  # writes the text after # in the address line, without a history entry
    "copy_link": ("link",),  # puts this page's address with # and link on the clipboard, and says so
    "copy_text": ("text", "what"),  # puts text on the clipboard; what names it in the sentence, "The summary"
    "keep_case": ("link",),  # what a restart after a failure begins with; kept in the page's memory only
    "focus": ("place",),  # gives an element of the frame the focus, by its id, "slot-map"
    "say": ("place", "text", "tone"),  # place: bar case map traces standing recording handover; tone: note refused; "" clears
    "standing": ("text", "state"),  # the sentence in the largest type; state: settles rings hunts none
    "show": ("view", "open"),  # opens or closes "recording" or "handover" over the middle
    "units": ("pressure",),  # shows which unit of pressure is on: mmHg or kPa
    "progress": ("title", "words", "share"),  # of long work, share from 0 to 1; an empty title: it is over
    "print": ("html",),  # prints a whole HTML page of its own
}

# What the user did (COMMANDS in web/messages.js). File commands carry `file`, a binary stream, beside name and bytes.
RECEIVES: dict[str, tuple[str, ...]] = {
    "open_recording": ("name", "bytes", "file"),
    "open_case": ("name", "bytes", "file"),
    "drop_file": ("name", "bytes", "file"),
    "save_case": (),
    "copy_link": (),
    "set_units": ("pressure",),
    "set_link": ("link",),
    "nudge": ("right", "up", "large"),
    "undo": (),
    "redo": (),
    "show": ("view", "open"),
    "theme": ("theme",),
    "restarted": (),
    "stop_work": (),
    "idle": (),
}

Payload = Mapping[str, Any]


class PageLink:
    """Joins application and page by named messages with plain values.

    Parameters
    ----------
    post : callable, optional
        Takes a name and a payload to the page. Without it, messages only gather in `sent`.
    address : str
        The page's address without what follows `#`.
    link : str
        What followed `#` when Python started: a case, or empty.
    theme : str
        "light" or "dark".
    touch : bool
        Whether the main pointer is a finger.

    Attributes
    ----------
    sent : list of (str, dict)
        Without `post`: every message sent, in order.
    """

    def __init__(self, post: Callable[[str, dict[str, Any]], None] | None = None, *, address: str = "", link: str = "",
                 theme: str = "light", touch: bool = False) -> None:
        self.address, self.link, self.theme, self.touch = address, link, theme, touch
        self.sent: list[tuple[str, dict[str, Any]]] = []
        self._post = post
        self._callbacks: dict[str, list[Callable[[Payload], Any]]] = {}
        self._draw: Callable[[str, Any], None] | None = None
        self._tasks: set[asyncio.Task[Any]] = set()
        self._trouble: Callable[[BaseException], None] | None = None

    def send(self, name: str, payload: Payload | None = None) -> None:
        """Asks the page for something.

        Raises
        ------
        InvalidInputError
            If the name is not in SENDS, or the payload has not exactly its fields.
        """
        fields = dict(payload or {})
        _check("send", SENDS, name, fields)
        if self._post is None:
            self.sent.append((name, fields))
        else:
            self._post(name, fields)

    def on(self, name: str, callback: Callable[[Payload], Any]) -> None:
        """Calls `callback(payload)` whenever the page says `name`; an async callback runs as a task.

        Raises
        ------
        InvalidInputError
            If the name is not in RECEIVES.
        """
        _check("on", RECEIVES, name, None)
        self._callbacks.setdefault(name, []).append(callback)

    def receive(self, name: str, payload: Payload | None = None) -> None:
        """Hands one message of the page to its callbacks; what they raise goes to the caller.

        Raises
        ------
        InvalidInputError
            If the name is not in RECEIVES, or the payload has not exactly its fields.
        """
        fields = dict(payload or {})
        _check("receive", RECEIVES, name, fields)
        for callback in self._callbacks.get(name, ()):
            outcome = callback(fields)
            if inspect.iscoroutine(outcome):
                self.spawn(outcome)

    def spawn(self, work: Any) -> None:
        """Runs a coroutine beside the page's messages; what it raises is reported like any other error."""
        task = asyncio.get_running_loop().create_task(work)
        # The loop keeps only a weak reference, so a task that nobody holds may vanish half done.
        self._tasks.add(task)
        task.add_done_callback(self._finished)

    def draw(self, slot: str, viewable: Any) -> None:
        """Draws a further Panel object into a slot after the start, for a part that is built only when it is asked for."""
        if self._draw is None:
            self.sent.append(("draw", {"slot": slot, "viewable": viewable}))
        else:
            self._draw(slot, viewable)

    def join(self, draw: Callable[[str, Any], None], trouble: Callable[[BaseException], None]) -> None:
        """Used by `boot` alone: where `draw` and the errors of tasks go."""
        self._draw, self._trouble = draw, trouble

    def _finished(self, task: asyncio.Task[Any]) -> None:
        self._tasks.discard(task)
        if not task.cancelled() and (error := task.exception()) is not None and self._trouble is not None:
            self._trouble(error)


def _check(verb: str, known: Mapping[str, tuple[str, ...]], name: str, fields: Mapping[str, Any] | None) -> None:
    if name not in known:
        raise InvalidInputError(f"{verb}: no message {name!r}; there are: {', '.join(sorted(known))}")
    if fields is not None and set(fields) != set(known[name]):
        raise InvalidInputError(f"{verb} {name}: fields must be {sorted(known[name])}, got {sorted(fields)}")
