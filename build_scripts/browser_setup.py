"""Finds Chromium and fonts for the browser tests and the benchmark, or installs Debian's packages where that is permitted."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

from build_progress import BuildError, Progress

__all__ = ["CHROMIUM_ARGUMENTS", "chromium_program", "ensure_chromium"]

PROGRAMS = ("chromium", "chromium-browser", "google-chrome-stable")
PACKAGES = ("chromium", "fonts-liberation", "fonts-dejavu-core")
VARIABLE = "LAGSCAPE_CHROMIUM"

CHROMIUM_ARGUMENTS = (
    "--no-sandbox",  # as root in a container Chromium refuses its sandbox; it only ever opens our own page here
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
"""What Chromium is started with: no traffic of its own, so that every request seen is the page's."""


def chromium_program() -> Path | None:
    """The Chromium to drive: the one named in LAGSCAPE_CHROMIUM, else the machine's; None where there is none."""
    named = os.environ.get(VARIABLE)
    if named:
        return Path(named) if Path(named).is_file() else None
    found = next(filter(None, map(shutil.which, PROGRAMS)), None)
    return Path(found) if found else None


def ensure_chromium(progress: Progress) -> Path:
    """Chromium, with fonts to draw with; installed from Debian's packages first if one of the two is missing.

    Raises
    ------
    BuildError
        With one sentence that says what to install, where that cannot be done here.
    """
    found = chromium_program()
    if found and _has_fonts():
        return found
    missing = "fonts for the browser tests" if found else "Chromium"
    by_hand = f"install Debian's packages {' '.join(PACKAGES)}, name a Chromium in {VARIABLE}, or run with --quick for the rest"
    if os.environ.get(VARIABLE):
        raise BuildError(f"{VARIABLE} names a program that is not there, or there are no fonts: {by_hand}.")
    if not (sys.platform == "linux" and shutil.which("apt-get") and os.geteuid() == 0):
        raise BuildError(f"{missing} is not here and may not be installed by this user: {by_hand}.")
    progress.step(f"{missing} not found: installing {', '.join(PACKAGES)} from Debian's packages")
    quiet = {**os.environ, "DEBIAN_FRONTEND": "noninteractive"}
    for command in (["apt-get", "update", "-qq"], ["apt-get", "install", "-y", "-qq", "--no-install-recommends", *PACKAGES]):
        run = subprocess.run(command, capture_output=True, text=True, env=quiet)
        if run.returncode != 0:
            lines = run.stderr.strip().splitlines() or ["no reason given"]
            raise BuildError(f"{' '.join(command[:2])} failed ({lines[-1]}): {by_hand}.")
    found = chromium_program()
    if found is None:
        raise BuildError(f"Debian's packages were installed, yet no Chromium is on the path: {by_hand}.")
    return found


def _has_fonts() -> bool:
    lister = shutil.which("fc-list")
    return lister is not None and bool(subprocess.run([lister], capture_output=True, text=True).stdout.strip())
