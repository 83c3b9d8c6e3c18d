"""What the build says while it works: one line a step, bytes counted where a step is long."""

from __future__ import annotations

import sys
import time

__all__ = ["BuildError", "Progress"]


class BuildError(RuntimeError):
    """The build cannot go on; the text is one sentence for the person who started it."""


class Progress:
    """Prints steps with the seconds since the start; on a terminal a running byte count overwrites itself."""

    def __init__(self) -> None:
        self._start = time.monotonic()
        self._live = sys.stdout.isatty()

    def step(self, text: str) -> None:
        """Says one step on its own line."""
        self._clear()
        print(f"{time.monotonic() - self._start:6.1f} s  {text}", flush=True)

    def bytes(self, done: int, total: int) -> None:
        """Shows megabytes done of a total (0: not known), on a terminal only."""
        if self._live:
            of = f" of {total / 1e6:.1f}" if total else ""
            print(f"\r          {done / 1e6:.1f}{of} MB", end="", flush=True)

    def _clear(self) -> None:
        if self._live:
            print("\r\x1b[K", end="")
