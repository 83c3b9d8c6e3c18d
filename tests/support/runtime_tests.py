"""Runs the numerical tests from inside the browser's Python and hands back what each of them did, as JSON values."""

from __future__ import annotations

import contextlib
import io
import os
from typing import Any

import pytest

__all__ = ["run"]

OPTIONS = ("-q", "-p", "no:cacheprovider", "-p", "no:faulthandler", "--no-header", "--capture=sys", "--continue-on-collection-errors")


class _Notes:
    """A pytest plug-in that keeps each test's outcome and the first lines of what a failure said."""

    def __init__(self) -> None:
        self.outcomes: dict[str, str] = {}
        self.reasons: dict[str, str] = {}

    def pytest_runtest_logreport(self, report: Any) -> None:
        if report.when == "call" or report.outcome != "passed":
            self._note(report.nodeid, report.outcome, report.longreprtext)

    def pytest_collectreport(self, report: Any) -> None:
        if report.outcome != "passed":
            self._note(report.nodeid, report.outcome, report.longreprtext)

    def _note(self, name: str, outcome: str, reason: str) -> None:
        if self.outcomes.get(name) != "failed":
            self.outcomes[name] = outcome
            self.reasons[name] = reason[-1500:]


def run(root: str, folders: list[str]) -> dict[str, Any]:
    """Runs pytest over these folders of the project laid out under `root`; returns exit code, outcomes, reasons, print."""
    os.chdir(root)
    notes = _Notes()
    # The runtime has no duplicated file handles, so only what Python itself prints is captured.
    printed = io.StringIO()
    with contextlib.redirect_stdout(printed), contextlib.redirect_stderr(printed):
        code = pytest.main([*OPTIONS, *folders], plugins=[notes])
    failed = {name: notes.reasons[name] for name, outcome in notes.outcomes.items() if outcome == "failed"}
    return {"exit_code": int(code), "outcomes": notes.outcomes, "failed": failed, "printed": printed.getvalue()[-4000:]}
