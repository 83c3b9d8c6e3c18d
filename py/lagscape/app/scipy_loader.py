"""Fetches scipy when it is first needed: it is two thirds of the download and no drag needs it."""

from __future__ import annotations

import asyncio
import importlib
import sys
from collections.abc import Awaitable, Callable

__all__ = ["ensure_scipy", "prepare_scipy", "use_loader"]

# What scipy.signal and scipy.ndimage import, in an order in which each step adds a part of its own.
PARTS = ("special", "linalg", "sparse.linalg", "fft", "spatial", "optimize", "interpolate", "ndimage", "stats", "signal")
PAUSE_S = 0.05

_load: Callable[[], Awaitable[object]] | None = None


def use_loader(load: Callable[[], Awaitable[object]]) -> None:
    """Used by `boot` alone: how the browser fetches scipy."""
    global _load
    _load = load


async def ensure_scipy() -> None:
    """Returns when `import scipy` works; at once where it already does, as it always does outside the browser.

    Raises
    ------
    ImportError
        If scipy can neither be imported nor fetched, with a sentence for the screen.
    """
    if "scipy" in sys.modules:
        return
    if _load is not None:
        try:
            await _load()
        except Exception as error:
            raise ImportError(
                "The part that reads recordings and fits could not be fetched; check the connection to the server and try again."
            ) from error
        importlib.invalidate_caches()
    importlib.import_module("scipy")


async def prepare_scipy() -> None:
    """Fetches scipy and imports what a recording needs, a part at a time, so that whatever the user does meanwhile is answered between.

    Raises
    ------
    ImportError
        As `ensure_scipy`.
    """
    await ensure_scipy()
    for part in PARTS:
        await asyncio.sleep(PAUSE_S)
        importlib.import_module(f"scipy.{part}")
