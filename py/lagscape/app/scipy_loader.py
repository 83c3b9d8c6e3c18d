"""Fetches scipy when it is first needed: it is two thirds of the download and no drag needs it."""

from __future__ import annotations

import asyncio
import importlib
import sys
from collections.abc import Awaitable, Callable
from types import ModuleType
from zipimport import zipimporter

from lagscape.recordings.stepwise import Steps

__all__ = ["begin_fetching", "fetch_scipy", "prepare_scipy", "scipy_is_ready", "scipy_steps", "use_loader"]

# What scipy.signal and scipy.ndimage import, in an order in which each step adds a part of its own.
PARTS = ("special", "linalg", "sparse.linalg", "ndimage", "fft", "spatial", "optimize", "interpolate", "signal")
PAUSE_S = 0.05
_LOOK_EVERY_S = 0.1

_load: Callable[[], Awaitable[object]] | None = None
_fetched: Callable[[], float] | None = None
_on_its_way: asyncio.Future[object] | None = None


def use_loader(load: Callable[[], Awaitable[object]], fetched: Callable[[], float]) -> None:
    """Used by `boot` alone: how the browser fetches scipy, and which share of it has arrived, from 0 to 1."""
    global _load, _fetched
    _load, _fetched = load, fetched


def scipy_is_ready() -> bool:
    """Whether all that a recording needs is imported."""
    return all(f"scipy.{part}" in sys.modules for part in PARTS)


def begin_fetching() -> None:
    """Have scipy on its way while something else is done; whoever needs it calls `fetch_scipy`, which says what went wrong."""
    global _on_its_way
    if _load is not None and "scipy" not in sys.modules:
        _let_go_of_zip_finders()
        _on_its_way = asyncio.ensure_future(_load())
        _on_its_way.add_done_callback(lambda fetched: fetched.cancelled() or fetched.exception())


async def fetch_scipy(tell: Callable[[float], None] = lambda share: None) -> None:
    """Returns when `import scipy` works; at once where it already does, as it always does outside the browser.

    `tell` hears the share fetched, from 0 to 1; what it raises ends the waiting, not the fetching.

    Raises
    ------
    ImportError
        If scipy can neither be imported nor fetched, with a sentence for the screen.
    """
    if "scipy" in sys.modules:
        return
    if _load is not None:
        _let_go_of_zip_finders()
        fetching = asyncio.ensure_future(_load())
        while not fetching.done():
            tell(_fetched() if _fetched is not None else 0.0)
            await asyncio.wait({fetching}, timeout=_LOOK_EVERY_S)
        try:
            await fetching
        except Exception as error:
            raise ImportError(
                "The part that reads recordings and fits could not be fetched; check the connection to the server and try again."
            ) from error
        _let_go_of_zip_finders()
        importlib.invalidate_caches()
        _leave_out_statistics()
    importlib.import_module("scipy")


def scipy_steps() -> Steps[None]:
    """Import what a recording needs of scipy, a part a step. `fetch_scipy` comes first."""
    for done, part in enumerate(PARTS, start=1):
        importlib.import_module(f"scipy.{part}")
        yield done, len(PARTS)


async def prepare_scipy() -> None:
    """Fetches scipy and imports what a recording needs, a part at a time, so that whatever the user does meanwhile is answered between.

    Raises
    ------
    ImportError
        As `fetch_scipy`.
    """
    await fetch_scipy()
    for _ in scipy_steps():
        await asyncio.sleep(PAUSE_S)


def _let_go_of_zip_finders() -> None:
    """The standard library lies in a zip that never changes, yet each of its finders would read the zip's list anew, a second in all."""
    for path, finder in list(sys.path_importer_cache.items()):
        if isinstance(finder, zipimporter):
            del sys.path_importer_cache[path]


def _leave_out_statistics() -> None:
    """scipy.signal takes one function of scipy.stats, for a finder of peaks that nothing here uses; importing the rest takes a second."""
    if "scipy.stats" not in sys.modules:
        module = ModuleType("scipy.stats")
        module.__dict__["scoreatpercentile"] = None
        sys.modules["scipy.stats"] = module
