"""Writes `dist/`: one folder of static files with relative addresses, for any sub-path of any plain file server.

Everything but `index.html`, the service worker and the icons lies in two folders whose names hold the hash of what is in them: `lib-*`
(runtime and libraries, changes with the lock files) and `app-*` (our own code). So a browser never mixes two versions, whatever it caches.
"""

from __future__ import annotations

import gzip
import hashlib
import json
import os
import shutil
import subprocess
import zipfile
from collections.abc import Mapping
from pathlib import Path

from build_environment import ROOT, environment_python, node_program
from build_progress import Progress
from build_stills import NAMES
from bundle_python import STANDARD_LIBRARY, Compiler, merged, pack, package_files, runtime_lock_text, wheel_files
from fetch_files import RUNTIME_LOCK, WHEELS_LOCK, fetch_runtime, fetch_wheels

__all__ = ["build_site"]

CACHE = ROOT / ".cache"
WEB = ROOT / "web"
PACKAGE = ROOT / "py" / "lagscape"
TOP_FILES = ("index.html", "start.js", "service_worker.js", "icon.svg", "manifest.webmanifest")
STILLS_SCRIPT = Path(__file__).with_name("build_stills.py")
EMPTY_PICTURE = b'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 720 420"/>'
BOKEH_SCRIPTS = ("bokeh.min.js", "bokeh-widgets.min.js", "bokeh-tables.min.js")


def build_site(dist: Path, progress: Progress, package: Path = PACKAGE, web: Path = WEB) -> Path:
    """Builds the whole site into `dist`, changing only files whose content changed. Returns `dist`.

    `package` and `web` may be other folders of the same form, for a test that breaks one on purpose.

    Raises
    ------
    BuildError
        With one sentence, if a source is missing, a hash is wrong or a Python file does not compile.
    """
    CACHE.mkdir(exist_ok=True)
    python = environment_python(progress)
    node = node_program(python, progress)
    runtime = fetch_runtime(CACHE, python, progress)
    wheels = fetch_wheels(CACHE, python, progress)
    compiler = Compiler(node, runtime, CACHE, progress)

    library = _library_files(compiler, runtime, wheels, node, progress)
    library_folder = f"lib-{_hash(library)}"
    app = {path.name: path.read_bytes() for path in sorted(web.iterdir()) if path.is_file() and path.name not in TOP_FILES}
    app |= _stills(python, package, progress)
    app["lagscape.zip"] = pack(compiler.compile(package_files(package)))
    top = {name: (web / name).read_bytes() for name in TOP_FILES}
    version = _hash({**app, **top, "library": library_folder.encode()})
    app["site.js"] = _site_module(version, library_folder, library, app)
    app_folder = f"app-{version}"

    files = {f"{library_folder}/{name}": data for name, data in library.items()}
    files |= {f"{app_folder}/{name}": data for name, data in app.items()}
    for name, data in top.items():
        if name == "index.html":
            data = data.replace(b"app-version/", f"{app_folder}/".encode())
        elif name == "service_worker.js":
            data = data.replace(b"site-version", version.encode())
        files[name] = data
    files["files.json"] = _file_list(version, files)
    changed = _write(dist, files)
    progress.step(f"dist/ is up to date: {len(files)} files, {sum(map(len, files.values())) / 1e6:.1f} MB, {changed} changed")
    return dist


def _stills(python: Path, package: Path, progress: Progress) -> dict[str, bytes]:
    """The opening case's pictures, drawn anew when the package changed; empty pictures where they cannot be drawn."""
    folder = CACHE / "stills" / _hash({**package_files(package), "script": STILLS_SCRIPT.read_bytes()})
    if package == PACKAGE and not folder.is_dir():
        progress.step("drawing the still pictures")
        shutil.rmtree(folder.parent, ignore_errors=True)
        part = folder.with_suffix(".part")
        environment = {**os.environ, "PYTHONDONTWRITEBYTECODE": "1"}
        run = subprocess.run([str(python), str(STILLS_SCRIPT), str(part)], capture_output=True, text=True, env=environment)
        if run.returncode == 0:
            part.rename(folder)
        else:
            progress.step(f"note: no still pictures, the page starts with empty frames: {run.stderr.strip().splitlines()[-1]}")
    return {name: (folder / name).read_bytes() if folder.is_dir() else EMPTY_PICTURE for name in NAMES}


def _library_files(compiler: Compiler, runtime: Path, wheels: Mapping[str, Path], node: Path | None,
                   progress: Progress) -> dict[str, bytes]:
    """What comes from others: the runtime, the libraries as byte-code, the page's copy of Bokeh and Panel."""
    # The key covers the lock files and the scripts that pick and pack, so nothing stale can be taken for new.
    scripts = [Path(__file__), *(Path(__file__).with_name(name) for name in ("bundle_python.py", "bundle_compile.mjs"))]
    inputs = {path.name: path.read_bytes() for path in (RUNTIME_LOCK, WHEELS_LOCK, *scripts)}
    kept = CACHE / "library" / f"{_hash(inputs)}{'' if node else '-sources'}.zip"
    if not kept.is_file():
        progress.step("packing the libraries")
        files = _pack_library(compiler, runtime, wheels)
        kept.parent.mkdir(exist_ok=True)
        part = kept.with_suffix(".part")
        part.write_bytes(pack(files))
        part.rename(kept)
    with zipfile.ZipFile(kept) as archive:
        return {name: archive.read(name) for name in archive.namelist()}


def _pack_library(compiler: Compiler, runtime: Path, wheels: Mapping[str, Path]) -> dict[str, bytes]:
    lock = json.loads(RUNTIME_LOCK.read_text(encoding="utf-8"))
    packages = {name: entry["file_name"] for name, entry in lock["packages"].items()}
    plain = ("pyodide.mjs", "pyodide.asm.js", "pyodide.asm.wasm", packages["openblas"])
    files = {name: (runtime / name).read_bytes() for name in plain}
    files["pyodide-lock.json"] = runtime_lock_text().encode()
    with zipfile.ZipFile(runtime / "python_stdlib.zip") as archive:
        standard = {name: archive.read(name) for name in archive.namelist() if not name.endswith("/")}
    files["python_stdlib.zip"] = pack(compiler.compile(standard, STANDARD_LIBRARY))
    numpy = wheel_files(runtime / packages["numpy"], keep_native=True)
    # scipy asks numpy for every public name, so the Fortran wrapper maker must be importable; nothing in a browser can run it.
    numpy["numpy/f2py/__init__.py"] = b""
    files["numpy.zip"] = pack(compiler.compile(numpy))
    scipy = compiler.compile(wheel_files(runtime / packages["scipy"], keep_native=True))
    files["scipy.bundle"] = gzip.compress(pack(scipy), compresslevel=6, mtime=0)
    files["libraries.zip"] = pack(compiler.compile(merged(wheel_files(path, keep_native=False) for path in wheels.values())))
    with zipfile.ZipFile(wheels["bokeh"]) as archive:
        for name in BOKEH_SCRIPTS:
            files[name] = archive.read(f"bokeh/server/static/js/{name}")
    with zipfile.ZipFile(wheels["panel"]) as archive:
        files["panel.min.js"] = archive.read("panel/dist/panel.min.js")
        for name in archive.namelist():
            if name.endswith(".css") and name.startswith(("panel/dist/css/", "panel/dist/bundled/theme/")):
                files[name] = archive.read(name)
    return files


def _site_module(version: str, library_folder: str, library: Mapping[str, bytes], app: Mapping[str, bytes]) -> bytes:
    """The one module that tells page and worker where things are and how long they are, for a true progress display."""
    sizes = {name: len(library[name]) for name in ("pyodide.asm.wasm", "python_stdlib.zip", "numpy.zip", "libraries.zip")}
    sizes["lagscape.zip"] = len(app["lagscape.zip"])
    scripts = [*BOKEH_SCRIPTS, "panel.min.js"]
    site = {
        "version": version, "library": f"../{library_folder}/", "sizes": sizes, "scripts": scripts,
        "scipyBytes": len(library["scipy.bundle"]),
    }  # fmt: skip
    return f"// Written by the build: what this version is made of.\nexport const site = {json.dumps(site, indent=2)};\n".encode()


def _file_list(version: str, files: Mapping[str, bytes]) -> bytes:
    """What the service worker keeps for use without a network: every file with its hash, so that only changed ones are fetched."""
    listed = {name: hashlib.sha256(data).hexdigest() for name, data in sorted(files.items()) if name != "service_worker.js"}
    return json.dumps({"version": version, "files": listed}, indent=1).encode()


def _hash(files: Mapping[str, bytes]) -> str:
    digest = hashlib.sha256()
    for name in sorted(files):
        digest.update(f"{name}\0{len(files[name])}\0".encode())
        digest.update(files[name])
    return digest.hexdigest()[:12]


def _write(dist: Path, files: Mapping[str, bytes]) -> int:
    """Writes what changed, then removes what no longer belongs; index.html last, so that it never names a missing folder."""
    dist.mkdir(parents=True, exist_ok=True)
    changed = 0
    for name in sorted(files, key=lambda name: (name == "index.html", name)):
        path = dist / name
        if path.is_file() and path.read_bytes() == files[name]:
            continue
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(files[name])
        changed += 1
    folders = {name.split("/")[0] for name in files if "/" in name}
    for path in dist.iterdir():
        if path.is_dir() and path.name not in folders and path.name.startswith(("lib-", "app-")):
            shutil.rmtree(path)
    return changed
