"""Builds the views round one shared state and answers the page's own buttons, keys, drops and links."""

from __future__ import annotations

from typing import Any

import panel as pn

from lagscape.app.case_view import CaseView
from lagscape.app.certainty_view import CertaintyView
from lagscape.app.handover_view import HandoverView
from lagscape.app.lever_view import LeverView
from lagscape.app.map_view import MapView
from lagscape.app.page_link import PageLink
from lagscape.app.recording_view import RecordingView
from lagscape.app.scipy_loader import prepare_scipy
from lagscape.app.share_view import ShareView
from lagscape.app.standing_view import StandingView
from lagscape.app.trace_view import TraceView
from lagscape.app.workbench import Workbench
from lagscape.case.case import Case
from lagscape.errors import CaseFormatError, InvalidInputError
from lagscape.questions.levers import check_lever

__all__ = ["build"]

_LARGEST_CASE_FILE = 1_000_000


def build(page: PageLink) -> dict[str, Any]:
    """The views by slot name, drawn once; they follow the workbench from then on."""
    bench = Workbench(page)
    if page.link:
        _take_link(bench, page.link)
    commands = _Commands(bench)
    recording = RecordingView(bench)
    commands.recording = recording
    right = (StandingView, ShareView, LeverView, CertaintyView)
    return {
        "case": CaseView(bench).root,
        "map": MapView(bench).root,
        "traces": TraceView(bench).root,
        "standing": pn.Column(*(view(bench).root for view in right), sizing_mode="stretch_width"),
        "recording": lambda: recording.root,
        "handover": lambda: HandoverView(bench).root,
    }


def _take_link(bench: Workbench, link: str) -> None:
    """The case in a link; a broken one is refused in words and the case stays."""
    try:
        bench.begin(Case.from_link(link, check_lever))
    except (CaseFormatError, InvalidInputError) as problem:
        bench.page.send("say", {"place": "bar", "text": str(problem), "tone": "refused"})
    else:
        bench.page.send("say", {"place": "bar", "text": "", "tone": "note"})


class _Commands:
    """The bar, the keys and the drops."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.recording: RecordingView | None = None
        page = bench.page
        page.on("open_case", self.open_case)
        page.on("drop_file", self.drop_file)
        page.on("save_case", self.save_case)
        page.on("copy_link", lambda _: page.send("copy_link", {"link": bench.case.to_link()}))
        page.on("set_units", lambda payload: bench.set_units(payload["pressure"]))
        page.on("set_link", lambda payload: _take_link(bench, payload["link"]) if payload["link"] else None)
        page.on("undo", lambda _: bench.undo())
        page.on("redo", lambda _: bench.redo())
        page.on("theme", lambda payload: bench.set_theme(payload["theme"]))
        page.on("idle", self.prepare)
        bench.listen("settled", self.keep)
        bench.listen("units", lambda: page.send("units", {"pressure": bench.units}))
        self.keep()

    def keep(self) -> None:
        self.bench.page.send("keep_case", {"link": self.bench.case.to_link()})

    async def prepare(self, _payload: Any) -> None:
        """Fetch scipy while nothing happens; a failure is said when a recording asks for it."""
        try:
            await prepare_scipy()
        except ImportError:
            return

    def save_case(self, _payload: Any) -> None:
        data = self.bench.case.to_json().encode()
        self.bench.page.send("download", {"name": "lagscape-case.json", "type": "application/json", "data": data})

    def open_case(self, payload: Any) -> None:
        say = self.bench.page.send
        if payload["bytes"] > _LARGEST_CASE_FILE:
            text = f"{payload['name']} is too large for a case file ({payload['bytes'] // 1000} kB). Choose a Lagscape case, a small JSON file."
            say("say", {"place": "bar", "text": text, "tone": "refused"})
            return
        try:
            case = Case.from_json(payload["file"].read(), check_lever)
        except (CaseFormatError, InvalidInputError) as problem:
            say("say", {"place": "bar", "text": f"{payload['name']}: {problem}", "tone": "refused"})
            return
        say("say", {"place": "bar", "text": f"{payload['name']} is open. Undo goes back to the case before.", "tone": "note"})
        self.bench.begin(case)

    async def drop_file(self, payload: Any) -> None:
        first = payload["file"].read(512)
        payload["file"].seek(0)
        if payload["name"].lower().endswith(".json") or first.lstrip(b"\xef\xbb\xbf \t\r\n").startswith(b"{"):
            self.open_case(payload)
        elif self.recording is not None:
            await self.recording.open(payload)
