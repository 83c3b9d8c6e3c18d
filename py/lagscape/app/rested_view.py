"""A view whose answer takes longer than a frame: worked out when the hand has rested, the old one greyed until then."""

from __future__ import annotations

from lagscape.app.components.sheet import Sheet
from lagscape.app.workbench import Workbench

__all__ = ["RestedView"]


class RestedView:
    """Subclasses give `words`, the HTML of the answer for the case as it stands."""

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench
        self.root = Sheet()
        self._shown = ""
        bench.listen("settled", self.draw)
        self.draw()

    def words(self) -> str:
        raise NotImplementedError

    def draw(self) -> None:
        self.root.show(f'<div class="waiting">{self._shown}</div>' if self._shown else "")
        self.bench.when_rested(self._work_out)

    def _work_out(self) -> None:
        self._shown = self.words()
        self.root.show(self._shown)
