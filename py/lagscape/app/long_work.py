"""Work that may take longer than a second: done in steps between which the page is answered, with its true progress shown.

One piece of work at a time. Newer work stops what is under way; so does the user. What is stopped leaves the state as it was.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Coroutine, Mapping
from time import perf_counter
from types import TracebackType
from typing import Any, TypeVar

from lagscape.app.page_link import PageLink
from lagscape.recordings.stepwise import Steps

__all__ = ["LongWork", "Work", "WorkStopped"]

_ANSWER_EVERY_S = 0.04
"""The page is answered at least this often, as far as single steps allow."""
_TELL_EVERY_S = 0.05

Answer = TypeVar("Answer")


class WorkStopped(RuntimeError):
    """The work was stopped by the user or by newer work; its state has been set back already."""


class LongWork:
    """The place where long work is begun, run and stopped."""

    def __init__(self, page: PageLink) -> None:
        self.page = page
        self._under_way: Work | None = None
        page.on("stop_work", lambda _: self.stop())

    def begin(self, title: str, parts: Mapping[str, float], undo: Callable[[], None] = lambda: None) -> Work:
        """New work; what is under way is stopped, where it was not before, and what it did so far stays.

        Parameters
        ----------
        title : str
            What is done, for the bar: "Opening night.edf".
        parts : mapping
            The work's parts in order, with the seconds that each is likely to take: its weight in the share done.
        undo : callable
            Sets the state back when the work is stopped.
        """
        self.stop(undo=False)
        self._under_way = Work(self, title, dict(parts), undo)
        return self._under_way

    def stop(self, undo: bool = True) -> None:
        """Stop what is under way and set back what it did so far, unless `undo` is False; nothing where nothing is under way."""
        work = self._under_way
        if work is not None:
            work.stopped = True
            self.over(work)
            if undo:
                work.undo()

    def over(self, work: Work) -> None:
        """The work has ended; the bar goes, unless it is that of newer work."""
        if self._under_way is work:
            self._under_way = None
            self.page.send("progress", {"title": "", "words": "", "share": 1.0})

    def start(self, work: Coroutine[Any, Any, None]) -> None:
        """Run the work beside the page's messages; at once, to its end, where no loop is running (a script, a test)."""
        try:
            asyncio.get_running_loop()
        except RuntimeError:
            asyncio.run(work)
        else:
            self.page.spawn(work)


class Work:
    """One piece of long work. Use it in a `with` block: leaving it takes the bar away, and a stop ends the block in silence."""

    def __init__(self, place: LongWork, title: str, parts: dict[str, float], undo: Callable[[], None]) -> None:
        self.title, self.parts, self.undo = title, parts, undo
        self.stopped = False
        self._place = place
        self._share = 0.0
        self._told = -_TELL_EVERY_S
        self._answered = perf_counter()

    def __enter__(self) -> Work:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, where: TracebackType | None) -> bool:
        self._place.over(self)
        return isinstance(error, WorkStopped)

    def tell(self, part: str, words: str, share: float = 0.0) -> None:
        """Show how far the work is: `share` of this part, from 0 to 1, and all parts before it."""
        before, whole = 0.0, sum(self.parts.values())
        for name, seconds in self.parts.items():
            if name == part:
                before += seconds * share
                break
            before += seconds
        # A bar never goes back, even where a part turns out to be shorter than it was taken for.
        self._share = max(self._share, min(before / whole, 1.0))
        now = perf_counter()
        if not self.stopped and (now - self._told >= _TELL_EVERY_S or share in (0.0, 1.0)):
            self._told = now
            self._place.page.send("progress", {"title": self.title, "words": words, "share": self._share})

    async def through(self, part: str, words: Callable[[int, int | None], str], steps: Steps[Answer]) -> Answer:
        """Take the steps to their answer, telling each; between them the page is answered.

        Raises
        ------
        WorkStopped
            If the work was stopped meanwhile. What the steps raise is passed on.
        """
        try:
            while True:
                await self.answer_page()
                done, total = next(steps)
                self.tell(part, words(done, total), done / total if total else 0.0)
        except StopIteration as end:
            answer: Answer = end.value
            return answer
        finally:
            steps.close()

    async def answer_page(self, now: bool = False) -> None:
        """Let the page's messages through, where the last time is long enough ago or `now`.

        Raises
        ------
        WorkStopped
            If one of them stopped the work.
        """
        if now or perf_counter() - self._answered >= _ANSWER_EVERY_S:
            await asyncio.sleep(0)
            self._answered = perf_counter()
        if self.stopped:
            raise WorkStopped(self.title)
