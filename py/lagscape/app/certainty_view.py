"""Certainty: how often the standing holds when every number is drawn from its spread, and which number is to blame for the doubt."""

from __future__ import annotations

from html import escape

from lagscape.app.rested_view import RestedView
from lagscape.quantities import figure
from lagscape.questions.certainty import Certainty, Interval, certainty
from lagscape.questions.standing import Standing

__all__ = ["CertaintyView"]


class CertaintyView(RestedView):
    """See the module."""

    def words(self) -> str:
        return _words(certainty(self.bench.case), bool(self.bench.case.levers))


def _words(found: Certainty, levers: bool) -> str:
    rows = "".join(
        f'<tr><th scope="row">{label}</th><td>{_range(interval, unit)}</td></tr>'
        for label, interval, unit in (
            ("Loop gain, 90 %", found.loop_gain, ""),
            ("Gain margin, 90 %", found.gain_margin, ""),
            ("Cycle length, 90 %", found.cycle_length_s, "s"),
        )
    )
    bars = "".join(
        f'<span>{standing.capitalize()}</span><div class="bar" aria-hidden="true">'
        f'<i style="left:0;width:{100 * found.shares[standing]:.1f}%"></i></div>'
        f"<b>{100 * found.shares[standing]:.0f} %</b>"
        for standing in Standing
    )
    doubts = ", ".join(f"{item.label} {100 * item.share:.0f} %" for item in found.doubts[:3])
    with_levers = " With the levers on it." if levers else ""
    return (
        f'<h3>Certainty</h3><p>{escape(found.sentence)}{with_levers}</p><div class="bars">{bars}</div>'
        f'<table class="figures">{rows}</table><p class="quiet">Doubt comes from: {escape(doubts)}. '
        f"{found.draws} draws from each number's spread, seed {found.seed}; measured numbers are drawn more narrowly.</p>"
    )


def _range(interval: Interval | None, unit: str) -> str:
    return "none" if interval is None else f"{figure(interval.low)} to {figure(interval.high)} {unit}".rstrip()
