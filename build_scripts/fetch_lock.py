"""Writes the lock files anew from the official release, for a maintainer who raises a version.

Run by hand, never by the build: `python3 build_scripts/fetch_lock.py`. It needs npm and pip. The hashes of the WebAssembly wheels are
copied from the official `pyodide-lock.json` inside the npm package `pyodide`; those of the core files are taken from that same package,
whose integrity npm checks. The hashes of the pure wheels are those of the files that pip gives for the pinned versions.
"""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
import tarfile
import tempfile
from pathlib import Path

from fetch_files import RUNTIME_LOCK, WHEELS_LOCK, download_wheel

TEST_WHEELS_LOCK = WHEELS_LOCK.with_name("test_wheels.lock.json")
CORE_FILES = ("pyodide.mjs", "pyodide.asm.js", "pyodide.asm.wasm", "python_stdlib.zip")
PACKAGES = ("numpy", "scipy", "openblas")


def file_hash(data: bytes) -> str:
    """SHA-256 of the bytes, in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def refresh_runtime_lock() -> None:
    """Takes versions from the present lock and hashes from the official npm package."""
    lock = json.loads(RUNTIME_LOCK.read_text(encoding="utf-8"))
    with tempfile.TemporaryDirectory() as folder:
        subprocess.run(["npm", "pack", "--silent", f"pyodide@{lock['version']}"], cwd=folder, check=True)
        with tarfile.open(next(Path(folder).glob("*.tgz"))) as archive:
            official = json.load(archive.extractfile("package/pyodide-lock.json"))  # type: ignore[arg-type]
            core = {name: archive.extractfile(f"package/{name}").read() for name in CORE_FILES}  # type: ignore[union-attr]
    lock["info"] = official["info"]
    lock["packages"] = {name: official["packages"][name] for name in PACKAGES}
    lock["files"] = {name: {"sha256": file_hash(data)} for name, data in core.items()}
    for entry in lock["packages"].values():
        lock["files"][entry["file_name"]] = {"sha256": entry["sha256"]}
    RUNTIME_LOCK.write_text(json.dumps(lock, indent=2) + "\n", encoding="utf-8")


def refresh_wheels_lock(lock_file: Path) -> None:
    """Downloads every pinned wheel and notes its file name and SHA-256."""
    lock = json.loads(lock_file.read_text(encoding="utf-8"))
    with tempfile.TemporaryDirectory() as folder:
        for name, entry in lock["wheels"].items():
            path = download_wheel(Path(sys.executable), name, entry["version"], Path(folder))
            entry["file"], entry["sha256"] = path.name, file_hash(path.read_bytes())
    lock_file.write_text(json.dumps(lock, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    refresh_runtime_lock()
    refresh_wheels_lock(WHEELS_LOCK)
    refresh_wheels_lock(TEST_WHEELS_LOCK)
    print("All lock files written. Look at the difference before you commit it.")
