"""The numerical tests once more, inside the built site's own Python in the browser: the numbers must not depend on the machine.

Each file of the folders below is one test here; what it holds ran in one worker, against the bundles that the page boots from.
"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import pytest

from browser_runtime import BrowserRuntime, write_bundle
from build_environment import ROOT
from build_progress import Progress
from bundle_python import wheel_files
from fetch_files import fetch_wheels

TESTS = ROOT / "tests"
FOLDERS = ("loops", "engine", "case", "questions", "published")
NATIVE_ONLY = {
    "tests/case/test_schema.py": "jsonschema needs a compiled package that has no browser build",
    "tests/questions/test_fit_coverage.py": "shares over 200 fits take minutes there, and over a dozen they say nothing; test_fit.py runs",
}
FOUND = sorted(path.relative_to(ROOT).as_posix() for folder in FOLDERS for path in (TESTS / folder).rglob("test_*.py"))
FILES = [name for name in FOUND if name not in NATIVE_ONLY]
WHEELS_LOCK = ROOT / "build_scripts" / "test_wheels.lock.json"
PROJECT = "/project"


def project_files() -> dict[str, bytes]:
    """The tests that need neither files of the machine nor other processes, with the settings they run under."""
    paths = [ROOT / "pyproject.toml", TESTS / "conftest.py"]
    for folder in (*FOLDERS, "support"):
        paths += (TESTS / folder).rglob("*.*")
    files = {path.relative_to(ROOT).as_posix(): path for path in paths if path.is_file() and path.suffix != ".pyc"}
    return {name: path.read_bytes() for name, path in files.items() if name not in NATIVE_ONLY}


@pytest.fixture(scope="module")
def outcomes(browser: Any, server: str, server_folder: Path, app_folder: str) -> dict[str, Any]:
    wheels = fetch_wheels(ROOT / ".cache", Path(sys.executable), Progress(), WHEELS_LOCK)
    packages: dict[str, bytes] = {}
    for wheel in wheels.values():
        packages |= wheel_files(wheel, keep_native=False)
    write_bundle(server_folder / "packages.zip", packages)
    write_bundle(server_folder / "tests.zip", project_files())
    page = browser.new_page()
    try:
        runtime = BrowserRuntime(page, server, app_folder)
        runtime.add_files(f"{server}packages.zip", "/lib/python3.12/site-packages")
        runtime.add_files(f"{server}tests.zip", PROJECT)
        runtime.load_scipy()
        runtime.add_path(f"{PROJECT}/tests")
        folders = sorted({str(Path(file).parent) for file in FILES})
        return runtime.run("support.runtime_tests", "run", root=PROJECT, folders=folders)
    finally:
        page.close()


@pytest.mark.timeout(1500)
@pytest.mark.parametrize("file", FILES)
def test_a_file_of_numerical_tests_passes_in_the_browser(outcomes: dict[str, Any], file: str) -> None:
    mine = {name: outcome for name, outcome in outcomes["outcomes"].items() if name.split("::")[0] == file}
    failed = {name: reason for name, reason in outcomes["failed"].items() if name in mine}
    assert not failed, "\n\n".join(f"{name}\n{reason}" for name, reason in failed.items())
    assert mine, f"no test of {file} ran in the browser"
    assert set(mine.values()) <= {"passed", "skipped"}


def test_the_whole_run_in_the_browser_ended_well(outcomes: dict[str, Any]) -> None:
    # pytest's exit code 0: everything was collected and nothing failed, also outside the files listed above.
    print(outcomes["printed"].splitlines()[-1])
    assert outcomes["exit_code"] == 0, outcomes["printed"]
    assert sum(outcome == "passed" for outcome in outcomes["outcomes"].values()) >= 150
