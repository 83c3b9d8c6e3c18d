"""Draws the two still pictures that stand in the page until it is live: the opening case's boundary map and traces.

Run by the build with the environment's own Python: `python build_stills.py FOLDER`. The pictures are the application's own, as it hands
them on; only the widget that shows them in the browser is left out, because it needs Panel, which the build does not install.
"""

from __future__ import annotations

import sys
from pathlib import Path
from types import ModuleType
from typing import Any

NAMES = ("still_map.svg", "still_traces.svg")


class _NoSheet:
    """Stands for the widget: takes what it is given and shows nothing."""

    def __init__(self, *_: Any, **__: Any) -> None:
        pass

    def show(self, html: str) -> None:
        """Shows nothing."""


def main(folder: Path) -> None:
    """Writes both pictures into the folder."""
    sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "py"))
    sheet = ModuleType("lagscape.app.components.sheet")
    sheet.__dict__.update(Request=object, Sheet=_NoSheet)
    sys.modules[sheet.__name__] = sheet
    from lagscape.app.handover_view import HandoverView
    from lagscape.app.page_link import PageLink
    from lagscape.app.workbench import Workbench

    view = HandoverView(Workbench(PageLink()))
    folder.mkdir(parents=True, exist_ok=True)
    for name, picture in zip(NAMES, (view.map_picture(), view.trace_picture()), strict=True):
        (folder / name).write_text(picture, encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
