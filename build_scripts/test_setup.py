"""Fills `.venv` with what the tests and the benchmark need beyond the build, each at its pinned version."""

from __future__ import annotations

import hashlib
from pathlib import Path

from build_environment import environment_python, install
from build_progress import Progress

__all__ = ["BENCH_REQUIREMENTS", "TEST_REQUIREMENTS", "python_with"]

TEST_REQUIREMENTS = Path(__file__).with_name("test_requirements.lock.txt")
BENCH_REQUIREMENTS = Path(__file__).with_name("bench_requirements.lock.txt")


def python_with(requirements: Path, progress: Progress) -> Path:
    """The Python of `.venv` with the packages of this file in it; installs only when the file changed.

    Raises
    ------
    BuildError
        If pip cannot install them.
    """
    python = environment_python(progress)
    stamp = python.parents[1] / requirements.stem
    wanted = hashlib.sha256(requirements.read_bytes()).hexdigest()
    if not stamp.is_file() or stamp.read_text(encoding="utf-8") != wanted:
        progress.step(f"installing {requirements.name} into .venv")
        install(python, "--requirement", str(requirements))
        stamp.write_text(wanted, encoding="utf-8")
    return python
