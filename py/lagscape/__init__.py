"""Lagscape: judges delayed negative-feedback loops in patients. Decision support for qualified staff, not a medical device.

The public surface is loaded when first used, so that importing the package stays cheap and asks for no scipy.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from lagscape.version import VERSION as __version__

if TYPE_CHECKING:
    from lagscape.case.case import Case
    from lagscape.questions.standing import analyse
    from lagscape.recordings import measure_breathing, measure_tremor, read_recording
    from lagscape.surface import boundary, simulate

__all__ = ["Case", "__version__", "analyse", "boundary", "measure_breathing", "measure_tremor", "read_recording", "simulate"]

_HOMES = {
    "Case": "lagscape.case.case",
    "analyse": "lagscape.questions.standing",
    "boundary": "lagscape.surface",
    "measure_breathing": "lagscape.recordings",
    "measure_tremor": "lagscape.recordings",
    "read_recording": "lagscape.recordings",
    "simulate": "lagscape.surface",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
