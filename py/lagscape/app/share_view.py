"""Share of the excess: which part of the loop its gain over a typical loop comes from, as bars that sum to the whole."""

from __future__ import annotations

from html import escape

from lagscape.app.rested_view import RestedView
from lagscape.quantities import figure
from lagscape.questions.share import Share, share_of_excess

__all__ = ["ShareView"]


class ShareView(RestedView):
    """See the module."""

    def words(self) -> str:
        return _bars(share_of_excess(self.bench.case))


def _bars(found: Share) -> str:
    rows = []
    shares = [item.share or 0.0 for item in found.parts]
    low, high = min(0.0, *shares), max(1.0, *shares)
    for item in found.parts:
        if item.share is None:
            continue
        left, right = sorted((0.0, item.share))
        start, width = (left - low) / (high - low), (right - left) / (high - low)
        less = ' class="less"' if item.share < 0.0 else ""
        typical = ""
        if item.standing_if_typical is not None:
            typical = f"With this part typical it {item.standing_if_typical}, loop gain {figure(item.loop_gain_if_typical, 2)}."
        rows.append(
            f'<span title="{escape(typical)}">{escape(item.part.label[:1].upper() + item.part.label[1:])}</span><div class="bar" aria-hidden="true">'
            f'<i{less} style="left:{100 * start:.1f}%;width:{100 * width:.1f}%"></i></div><b>{100.0 * item.share:.0f} %</b>'.replace(">-", ">−")
        )
    chart = f'<div class="bars">{"".join(rows)}</div>' if rows else ""
    telling = [item for item in found.parts if (item.share or 0.0) >= 0.1 and item.standing_if_typical is not None]
    alone = "".join(
        f"<li>{escape(item.part.label[:1].upper() + item.part.label[1:])} alone made typical: {item.standing_if_typical}, "
        f"loop gain {figure(item.loop_gain_if_typical, 2)}.</li>"
        for item in telling
    )
    listed = f"<ul>{alone}</ul>" if alone else ""
    return f"<h3>Share of the excess</h3><p>{escape(found.sentence)}</p>{chart}{listed}"
