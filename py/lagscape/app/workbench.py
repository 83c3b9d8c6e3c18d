"""The one state that the views share: the case with its history, the units, the recording; and who wants to know.

Topics a view may listen to:
    moving      the case moves under the hand; only what must follow is drawn
    settled     the hand stopped; text and slow figures may follow
    units       the pressure unit changed
    recording   a recording was opened, measured or closed
    theme       light or dark
"""

from __future__ import annotations

import asyncio
from collections import defaultdict
from collections.abc import Callable, Coroutine
from functools import cached_property
from typing import Any

from lagscape.app.page_link import PageLink
from lagscape.case.case import Case
from lagscape.case.case_history import CaseHistory
from lagscape.errors import CaseFormatError, InvalidInputError, RecordingError
from lagscape.questions.levers import LeverEffect, effects, judge_with_levers
from lagscape.questions.standing import Judgement, judge

__all__ = ["Workbench"]

OPENING_CASE = "heart-failure-periodic"

_REST_S = 0.35
"""How long the hand must rest before slow figures are worked out."""


class Judged:
    """One case with what is worked out from it, each at most once."""

    def __init__(self, case: Case) -> None:
        self.case = case

    @cached_property
    def judgement(self) -> Judgement:
        return judge(self.case)

    @cached_property
    def with_levers(self) -> Judgement | None:
        """The case with its levers laid on it; None where it has none."""
        return judge_with_levers(self.case)

    @cached_property
    def effects(self) -> tuple[LeverEffect, ...]:
        """What each lever changes alone, and all together last."""
        return effects(self.case)


class Workbench:
    """The shared state. Views read it and call its verbs; it never knows a view."""

    def __init__(self, page: PageLink) -> None:
        self.page = page
        self.units = "mmHg"
        self.theme = page.theme
        self.history = CaseHistory(Case.from_starting_case(OPENING_CASE))
        self._moving: Case | None = None
        self._judged = Judged(self.case)
        self._start_judged = Judged(self.case.start())
        self._listeners: dict[str, list[Callable[[], None]]] = defaultdict(list)
        self.refusals: dict[str, str] = {}
        self.recording: Any = None
        self.measurement: Any = None
        self.tremor: Any = None

    @property
    def case(self) -> Case:
        """The case as it stands under the hand."""
        return self._moving if self._moving is not None else self.history.present

    @property
    def is_moving(self) -> bool:
        return self._moving is not None

    @property
    def judged(self) -> Judged:
        if self._judged.case is not self.case:
            self._judged = Judged(self.case)
        return self._judged

    @property
    def start(self) -> Judged:
        """The case that this one started from, drawn behind."""
        case = self.case
        held = self._start_judged.case
        if held.started_from != case.started_from or held.kind != case.kind:
            self._start_judged = Judged(case.start())
        return self._start_judged

    def listen(self, topic: str, callback: Callable[[], None]) -> None:
        self._listeners[topic].append(callback)

    def tell(self, topic: str) -> None:
        for callback in self._listeners[topic]:
            callback()

    def later(self, work: Coroutine[Any, Any, None]) -> None:
        """Start work that need not be done before the screen is drawn; without a running loop (a script, a test) it is dropped."""
        try:
            asyncio.get_running_loop()
        except RuntimeError:
            work.close()
        else:
            self.page.spawn(work)

    def when_rested(self, work: Callable[[], None]) -> None:
        """Do slow work a moment after the case has settled, and only if it still stands then."""
        case = self.case

        async def rested() -> None:
            await asyncio.sleep(_REST_S)
            if case is self.case:
                work()

        self.later(rested())

    def move(self, case: Case) -> None:
        """The case follows the hand; nothing is recorded until it settles."""
        judged = Judged(case)
        if not self._possible(judged, ""):
            return
        self._moving, self._judged = case, judged
        self.tell("moving")

    def settle(self, case: Case | None = None, place: str = "") -> bool:
        """The case stands: recorded for undo, every view follows. False where it was refused; then the last good one stays.

        Parameters
        ----------
        case : Case or None
            None settles what moved.
        place : str
            Key of the control that a refusal is said beside; empty for the whole.
        """
        wanted = case if case is not None else self.case
        judged = self._judged if self._judged.case is wanted else Judged(wanted)
        accepted = self._possible(judged, place)
        self._moving = None
        if accepted:
            self._judged = judged
            if wanted != self.history.present:
                self.history = self.history.record(wanted)
        self.tell("settled")
        return accepted

    def _possible(self, judged: Judged, place: str) -> bool:
        try:
            _ = judged.judgement, judged.with_levers
        except InvalidInputError as problem:
            self.refusals[place] = str(problem)
            return False
        self.refusals.pop(place, None)
        return True

    def refuse(self, place: str, sentence: str) -> None:
        """Say why something was not taken, beside its control; the case stays."""
        self.refusals[place] = sentence
        self.tell("settled")

    def attempt(self, place: str, change: Callable[[], Case], moving: bool = False) -> bool:
        """Make a changed case and take it; a refusal is said at `place`."""
        try:
            case = change()
        except (InvalidInputError, CaseFormatError, RecordingError) as problem:
            if not moving:
                self.refuse(place, str(problem))
            return False
        if moving:
            self.move(case)
            return True
        return self.settle(case, place)

    def begin(self, case: Case) -> None:
        """Take a case from a file, a link or the list of starting cases."""
        self.refusals.clear()
        self.settle(case)

    def undo(self) -> None:
        self._moving = None
        self.refusals.clear()
        self.history = self.history.undo()
        self.tell("settled")

    def redo(self) -> None:
        self._moving = None
        self.refusals.clear()
        self.history = self.history.redo()
        self.tell("settled")

    def set_units(self, units: str) -> None:
        if units != self.units:
            self.units = units
            self.tell("units")

    def set_theme(self, theme: str) -> None:
        if theme != self.theme:
            self.theme = theme
            self.tell("theme")
