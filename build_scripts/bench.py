"""Prints, in one run, how fast Lagscape is: in the browser's worker, on the page, at the start, and against other solvers.

    python3 build_scripts/bench.py                 everything, some four minutes on a quiet machine
    python3 build_scripts/bench.py --native        without the browser

Times move by a fifth from run to run and by much more on a busy machine; each is also given as a ratio to a plain Python Runge-Kutta loop
timed beside it, which moves less. Nothing here passes or fails.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from browser_setup import ensure_chromium
from build_environment import ROOT
from build_progress import BuildError, Progress
from build_site import build_site
from test_setup import BENCH_REQUIREMENTS, TEST_REQUIREMENTS, python_with

INSIDE = "LAGSCAPE_BENCH_INSIDE"
HERE = Path(__file__).resolve().parent
LOOPS = ("plain Runge-Kutta loop, P1", "plain Runge-Kutta loop, P2")


def main() -> int:
    """Reads the command line; sets up and runs itself again under the project's own Python."""
    parser = argparse.ArgumentParser(description="Times Lagscape.")
    parser.add_argument("--native", action="store_true", help="leave out the browser")
    arguments = parser.parse_args()
    progress = Progress()
    try:
        if INSIDE not in os.environ:
            return _run_inside(progress)
        chromium = None if arguments.native else ensure_chromium(progress)
        dist = None if arguments.native else build_site(ROOT / "dist", progress)
    except BuildError as error:
        print(f"Stopped: {error}", file=sys.stderr)
        return 1
    # Said first, because it decides what the numbers are worth.
    load = f"{os.getloadavg()[0]:.1f}" if hasattr(os, "getloadavg") else "not known"
    print(f"Load of this machine before the run: {load}, on {os.cpu_count()} cores. Over 0.5, times are too long.", flush=True)
    _native(progress)
    with tempfile.TemporaryDirectory() as folder:
        night = _night(Path(folder), progress)
        if chromium and dist:
            _browser(dist, chromium, night, progress)
    _libraries(progress)
    return 0


def _run_inside(progress: Progress) -> int:
    python = python_with(TEST_REQUIREMENTS, progress)
    try:
        python_with(BENCH_REQUIREMENTS, progress)
    except BuildError as error:
        progress.step(f"note: {error} What is missing is said in its place below.")
    # One thread for linear algebra, as the browser has.
    paths = os.pathsep.join([str(ROOT / "py"), str(HERE)])
    environment = {**os.environ, INSIDE: "1", "PYTHONPATH": paths, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    return subprocess.run([str(python), str(Path(__file__)), *sys.argv[1:]], env=environment).returncode


def _title(text: str) -> None:
    print(f"\n{text}\n{'-' * len(text)}", flush=True)


def _tell_tasks(results: Iterable[tuple[str, Mapping[str, Any]]], wanted: bool) -> None:
    """One line a task; the Runge-Kutta loops come first, so that the others can be given as ratios to them."""
    from bench_tasks import TASKS

    loops: dict[str, float] = {}
    print(f"{'':32}{'median ms':>11}{'smallest':>10}{'/ RK4 loop':>12}{'wished ms' if wanted else '':>11}", flush=True)
    for name, found in results:
        if name in LOOPS:
            loops[name] = found["median_ms"]
        ratio = found["median_ms"] / loops[LOOPS[0] if "P1" in name else LOOPS[1]]
        most = TASKS[name][1]
        wish = f"{most:>11.0f}" if wanted and most else ""
        print(f"{name:32}{found['median_ms']:>11.2f}{found['smallest_ms']:>10.2f}{ratio:>12.2f}{wish}", flush=True)


def _native(progress: Progress) -> None:
    import platform

    import bench_tasks

    progress.step("compute, native")
    _title(f"Compute, native: Python {platform.python_version()}, numpy {bench_tasks.np.__version__}, one thread")
    _tell_tasks(((name, bench_tasks.measure(name)) for name in bench_tasks.TASKS), wanted=False)


def _night(folder: Path, progress: Progress) -> Path:
    """Writes the long night, and times it natively."""
    from bench_night import native_night, write_night

    progress.step("a night of eight hours and ten channels, native")
    path = write_night(folder / "night.edf")
    _title(f"A night of 8 hours and 10 channels, {path.stat().st_size / 1e6:.0f} MB, native, smallest of three")
    found = native_night(path)
    print(f"list of channels                 {found['list'] / 1e3:8.2f} s")
    print(f"cycles of one channel            {found['cycles'] / 1e3:8.2f} s, {found['n']:.0f} cycles", flush=True)
    return path


def _browser(dist: Path, chromium: Path, night: Path, progress: Progress) -> None:
    import bench_tasks
    from bench_browser import BrowserBench

    with BrowserBench.opened(dist, chromium) as bench:
        progress.step("compute, in the browser's worker")
        _title("Compute in the browser's worker, the built runtime")
        _tell_tasks(bench.compute(list(bench_tasks.TASKS), [HERE / "bench_tasks.py"]), wanted=True)
        progress.step("whole drag on the page")
        _title("Whole drag on the page: pointer to painted trace, one move at a time")
        drags = bench.drags()
        print(f"worker's part of a drag          {drags['worker']:8.1f} ms")
        print(f"whole drag                       {drags['whole']:8.1f} ms, from {drags['best']:.1f} to {drags['worst']:.1f} ms")
        print(f"round trip with empty callback   {drags['empty']:8.1f} ms, from {drags['empty_best']:.1f} ms")
        print(f"whole drag / empty round trip    {drags['whole'] / drags['empty']:8.2f}    (wished: at most 2)", flush=True)
        progress.step("the night on the page")
        _title("The same night on the page, smallest of two (wished: list in 2 s, cycles in 10 s)")
        for rested, words in ((False, "at once after the start"), (True, "after the page has rested")):
            found = bench.night(night, rested)
            print(f"{words:26} list {found['list'] / 1e3:6.2f} s, cycles {found['cycles'] / 1e3:6.2f} s", flush=True)
        progress.step("start of the page")
        _title("Start, nothing cached, median of three in turn")
        boots = bench.boots()
        print(f"page ready                       {boots['ready'] / 1e3:8.2f} s")
        print(f"bare runtime and numpy           {boots['bare'] / 1e3:8.2f} s")
        print(f"ratio                            {boots['ready'] / boots['bare']:8.2f}", flush=True)


def _libraries(progress: Progress) -> None:
    import bench_libraries

    progress.step("against other solvers of delay equations, native")
    _title("600 s traces against ddeint and jitcdde (its compiling not timed), native; error measured against a fine Runge-Kutta run")
    print(f"{'':4}{'solver':10}{'setting':24}{'ms':>10}{'error':>12}   Lagscape at no larger error", flush=True)
    ours: list[bench_libraries.Timed] = []
    for run in bench_libraries.compare():
        if isinstance(run, str):
            print(f"    {run}", flush=True)
            continue
        beside = ""
        if run.solver == "Lagscape":
            ours.append(run)
        else:
            rivals = [item for item in ours if item.problem == run.problem and item.error <= run.error]
            best = min(rivals, key=lambda item: item.milliseconds, default=None)
            beside = f"   {best.milliseconds:.1f} ms, {run.milliseconds / best.milliseconds:.3g} times as fast" if best else "   none"
        print(f"{run.problem:4}{run.solver:10}{run.setting:24}{run.milliseconds:>10.1f}{run.error:>12.1e}{beside}", flush=True)


if __name__ == "__main__":
    sys.exit(main())
