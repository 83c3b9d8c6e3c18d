"""Times in a recording as the screen writes them: minutes and seconds, at round ticks."""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["clock", "time_ticks"]

_STEPS_S = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200)


def time_ticks(plot: Any, start: float, stop: float) -> None:
    """Ticks at round minutes, written as minutes and seconds, hours where there are some."""
    span = max(stop - start, 1.0)
    step = next((s for s in _STEPS_S if span / s <= 10), 14400)
    ticks = [step * k for k in range(int(np.ceil(start / step)), int(np.floor(stop / step)) + 1)]
    plot.xaxis.ticker.ticks = ticks
    plot.xaxis.major_label_overrides = {tick: clock(tick) for tick in ticks}


def clock(seconds: float) -> str:
    """A time in a recording as min:s, or h:min:s."""
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    return f"{hours}:{rest // 60:02d}:{rest % 60:02d}" if hours else f"{rest // 60}:{rest % 60:02d}"
