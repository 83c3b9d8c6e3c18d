"""Packs Python code for the browser: byte-code of the runtime's own Python in zip files that need no inflating.

The browser's Python is newer than the one that builds, so the runtime compiles for itself, under Node. Every compiled file is kept
in the cache by the hash of its source; a second build compiles only what changed. Without Node the sources are packed as they are.
"""

from __future__ import annotations

import fnmatch
import hashlib
import io
import json
import shutil
import subprocess
import tempfile
import zipfile
from collections.abc import Iterable, Mapping
from pathlib import Path

from build_progress import BuildError, Progress
from fetch_files import RUNTIME_LOCK

__all__ = ["Compiler", "pack", "package_files", "runtime_lock_text", "wheel_files"]

SITE = "/lib/python3.12/site-packages"
STANDARD_LIBRARY = "/lib/python312.zip"
FIXED_DATE = (1980, 1, 1, 0, 0, 0)

# Only what the programs need at run time: no tests, no stubs, no C sources, no scripts that Panel serves from a server.
LEFT_OUT = (
    "*.pyi", "*.pyx", "*.pxd", "*.a", "*.h", "*.c", "*.ts", "*.map", "*/tests/*", "*/_examples/*", "*/py.typed",
    "numpy/f2py/*", "numpy/distutils/*", "numpy/_pyinstaller/*", "numpy/conftest.py",
    "scipy/misc/*", "scipy/datasets/*", "scipy/conftest.py",
    "bokeh/server/static/*", "bokeh/sampledata/*", "bokeh/command/*",
    "panel/dist/bundled/*", "panel/dist/assets/*", "panel/dist/dts/*", "panel/dist/lib/*", "panel/dist/*.js", "panel/dist/panel.json",
    "panel/examples/*", "panel/node_modules/*", "panel/package-lock.json", "panel/dist/images/*", "*.data/*", "panel/models/*.ts",
    "panel/template/*.html", "panel/command/*",
    "*.so.*", "*/_yaml.cpython-*", "*/_speedups.*",
    "*.dist-info/RECORD", "*.dist-info/WHEEL", "*.dist-info/*.txt", "*.dist-info/licenses/*", "*.dist-info/LICENSE*",
)


def runtime_lock_text() -> str:
    """The runtime's package lock, cut down to the one package that the runtime loads itself; numpy and scipy travel in bundles."""
    lock = json.loads(RUNTIME_LOCK.read_text(encoding="utf-8"))
    return json.dumps({"info": lock["info"], "packages": {"openblas": lock["packages"]["openblas"]}})


def wheel_files(wheel: Path, keep_native: bool) -> dict[str, bytes]:
    """The files of a wheel that the browser needs, by their path under site-packages.

    keep_native says whether shared objects are kept: yes for WebAssembly wheels, no for the pure part of others.
    """
    files: dict[str, bytes] = {}
    with zipfile.ZipFile(wheel) as archive:
        for name in archive.namelist():
            native = name.endswith(".so")
            if name.endswith("/") or (native and not keep_native) or any(fnmatch.fnmatch(name, rule) for rule in LEFT_OUT):
                continue
            files[name] = archive.read(name)
    return files


def package_files(package: Path) -> dict[str, bytes]:
    """Every file of a Python package folder, by its path under the folder that holds the package."""
    return {
        path.relative_to(package.parent).as_posix(): path.read_bytes()
        for path in sorted(package.rglob("*"))
        if path.is_file() and "__pycache__" not in path.parts and path.suffix != ".pyc"
    }


def pack(files: Mapping[str, bytes]) -> bytes:
    """A zip file without compression, the same bytes for the same files."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_STORED) as archive:
        for name in sorted(files):
            archive.writestr(zipfile.ZipInfo(name, FIXED_DATE), files[name])
    return buffer.getvalue()


class Compiler:
    """Turns sources into byte-code of the browser's Python, through a cache.

    Parameters
    ----------
    node
        The Node program, or None where there is none: then sources stay sources.
    runtime
        Folder with the fetched runtime.
    cache
        Folder for compiled files, safe to delete.
    """

    def __init__(self, node: Path | None, runtime: Path, cache: Path, progress: Progress) -> None:
        self._node, self._runtime, self._cache, self._progress = node, runtime, cache / "bytecode", progress
        # Another runtime makes other byte-code, so its hash is part of every key.
        self._salt = hashlib.sha256(RUNTIME_LOCK.read_bytes()).hexdigest()

    def compile(self, files: Mapping[str, bytes], root: str = SITE) -> dict[str, bytes]:
        """The same files with `x.py` replaced by a source-free `x.pyc`; `root` is the folder shown in tracebacks."""
        if self._node is None:
            return dict(files)
        self._cache.mkdir(parents=True, exist_ok=True)
        keys = {name: self._key(root, name, data) for name, data in files.items() if name.endswith(".py")}
        missing = {name: key for name, key in keys.items() if not (self._cache / key).is_file()}
        if missing:
            self._run(missing, files, root)
        return {
            (f"{name}c" if name in keys else name): ((self._cache / keys[name]).read_bytes() if name in keys else data)
            for name, data in files.items()
        }

    def _key(self, root: str, name: str, data: bytes) -> str:
        return hashlib.sha256(f"{self._salt} {root}/{name}\n".encode() + data).hexdigest()

    def _run(self, missing: Mapping[str, str], files: Mapping[str, bytes], root: str) -> None:
        with tempfile.TemporaryDirectory(dir=self._cache.parent) as folder:
            work = Path(folder)
            jobs = []
            for number, (name, key) in enumerate(missing.items()):
                (work / f"{number}.py").write_bytes(files[name])
                jobs.append((f"{number}.py", key, f"{root}/{name}"))
            (work / "jobs.json").write_text(json.dumps(jobs), encoding="utf-8")
            (work / "lock.json").write_text(runtime_lock_text(), encoding="utf-8")
            script = Path(__file__).with_name("bundle_compile.mjs")
            command = [str(self._node), str(script), str(self._runtime), str(work / "lock.json"), str(work), "jobs.json"]
            process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
            assert process.stdout is not None and process.stderr is not None
            for line in process.stdout:
                self._progress.step(f"byte-code: {line.strip()} of {len(jobs)} files")
            if process.wait() != 0:
                lines = process.stderr.read().strip().splitlines()
                raise BuildError(f"A Python file does not compile for the browser: {lines[-1] if lines else 'no reason given'}")
            for _, key, _ in jobs:
                shutil.move(work / key, self._cache / key)


def merged(parts: Iterable[Mapping[str, bytes]]) -> dict[str, bytes]:
    """Several file sets as one; a later one wins."""
    files: dict[str, bytes] = {}
    for part in parts:
        files.update(part)
    return files
