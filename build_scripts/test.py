"""Sets up what the tests need and runs all of them; the exit status is 0 only if every step passed.

    python3 build_scripts/test.py                  everything: lint, types, tests on this Python, tests of the built page in Chromium
    python3 build_scripts/test.py --quick          without the browser
    python3 build_scripts/test.py -- -k boundary   what follows -- goes to pytest, here and in the browser tests

Steps go on after a failed one, so that one run shows everything that is wrong; the last lines say how each step ended.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

from browser_setup import ensure_chromium
from build_environment import ROOT, node_program
from build_progress import BuildError, Progress
from build_site import build_site
from test_setup import TEST_REQUIREMENTS, python_with


class Steps:
    """Runs steps one after the other and remembers how each ended."""

    def __init__(self, progress: Progress) -> None:
        self._progress = progress
        self.ended: list[tuple[str, bool, float]] = []

    def run(self, name: str, work: Callable[[], bool]) -> bool:
        """Runs one step; a BuildError is told as its sentence and counts as a failure."""
        self._progress.step(f"== {name}")
        begun = time.monotonic()
        try:
            passed = work()
        except BuildError as error:
            print(f"Stopped: {error}", file=sys.stderr, flush=True)
            passed = False
        self.ended.append((name, passed, time.monotonic() - begun))
        return passed

    def tell(self) -> bool:
        """Prints how each step ended; True if all passed."""
        for name, passed, seconds in self.ended:
            print(f"{'passed' if passed else 'FAILED'}  {seconds:6.1f} s  {name}", flush=True)
        return all(passed for _, passed, _ in self.ended)


def command(*words: str | Path) -> bool:
    """Runs a program in the project's folder with its output shown; True if it ended well."""
    # One thread for linear algebra: the arrays are small, and two cores are shared with the browser.
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "PYTHONUNBUFFERED": "1"}
    return subprocess.run([str(word) for word in words], cwd=ROOT, env=environment).returncode == 0


def pytest_run(python: Path, *words: str) -> bool:
    """Runs pytest; its closing line is the last it prints."""
    return command(python, "-m", "pytest", "-q", "--timeout=600", *words)


def main() -> int:
    """Reads the command line; returns the exit status."""
    parser = argparse.ArgumentParser(description="Runs Lagscape's tests.")
    parser.add_argument("--quick", action="store_true", help="leave out the browser")
    parser.add_argument("pytest_arguments", nargs="*", help="after --: passed on to pytest")
    arguments = parser.parse_args()
    extra: list[str] = arguments.pytest_arguments
    progress = Progress()
    steps = Steps(progress)
    try:
        python = python_with(TEST_REQUIREMENTS, progress)
        node = node_program(python, progress)
    except BuildError as error:
        print(f"Stopped: {error}", file=sys.stderr)
        return 1
    steps.run("lint (ruff)", lambda: command(python, "-m", "ruff", "check", "py", "build_scripts", "tests"))
    steps.run("types (mypy)", lambda: command(python, "-m", "mypy"))
    scripts = sorted((ROOT / "tests").rglob("*.test.mjs"))
    if scripts and node:
        steps.run("page scripts alone (node)", lambda: command(node, "--test", *scripts))
    steps.run("Python, native (pytest)", lambda: pytest_run(python, "tests", "--ignore=tests/browser", *extra))
    if not arguments.quick:
        ready = steps.run("Chromium", lambda: bool(ensure_chromium(progress)))
        built = steps.run("build of the site", lambda: bool(build_site(ROOT / "dist", progress)))
        if ready and built:
            steps.run("page and numbers in the browser (pytest)", lambda: pytest_run(python, "tests/browser", *extra))
    return 0 if steps.tell() else 1


if __name__ == "__main__":
    sys.exit(main())
