"""What every test shares: hypothesis draws the same examples in every run, and no example is judged by its duration."""

import sys

from hypothesis import settings

# In the browser Python is several times slower and the machine is already proven natively: fewer examples of the same draw.
EXAMPLES = 12 if sys.platform == "emscripten" else 60

# Seeded by the test itself, so a run on one machine repeats on another; the machine's speed is no reason to fail.
settings.register_profile("lagscape", derandomize=True, deadline=None, max_examples=EXAMPLES, database=None)
settings.load_profile("lagscape")


def pytest_terminal_summary(terminalreporter):
    """The table of measured errors at the end of the report."""
    reports = [report for key in ("passed", "failed") for report in terminalreporter.getreports(key) if getattr(report, "when", "") == "call"]
    rows = [value for report in reports for name, value in report.user_properties if name == "accuracy"]
    if not rows:
        return
    terminalreporter.section("accuracy of the engine: method, oracle, measured error, bound")
    for method, oracle, error, bound in rows:
        allowed = "must be worse" if bound == float("inf") else f"{bound:.0e}"
        terminalreporter.write_line(f"{method:42s} {oracle:44s} {error:9.1e}  {allowed}")
