"""Runs our Python inside the built site's own runtime, in a browser worker; for tests and the benchmark, never part of the site.

A temporary folder is served by Python's plain file server: the site under a sub-path, and beside it the worker that drives the runtime.
"""

from __future__ import annotations

import functools
import os
import threading
import zipfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

__all__ = ["SITE_PATH", "BrowserRuntime", "plain_server", "site_folder", "write_bundle"]

SITE_PATH = "ward/tools/lagscape/"
"""Where the site lies on the test server: two folders deep, so that an absolute address anywhere in it fails."""

_WORKER = Path(__file__).with_name("browser_runtime_worker.js")
_PAGE = b'<!doctype html><html lang="en"><meta charset="utf-8"><title>Runtime</title><link rel="icon" href="data:,"></html>'


class _QuietHandler(SimpleHTTPRequestHandler):
    """Python's file server as it is, without a line a request."""

    def log_message(self, format: str, *args: object) -> None:
        pass


@contextmanager
def plain_server(folder: Path) -> Iterator[str]:
    """Serves a folder on 127.0.0.1 at a free port, with no header beyond the plain file server's; yields its address."""
    server = ThreadingHTTPServer(("127.0.0.1", 0), functools.partial(_QuietHandler, directory=str(folder)))
    server.daemon_threads = True
    thread = threading.Thread(target=server.serve_forever, daemon=True)
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_port}/"
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


def site_folder(folder: Path, dist: Path) -> Path:
    """Lays out a server's folder: the built site under SITE_PATH and the runtime's worker under runtime/. Returns it."""
    site = folder / SITE_PATH
    site.parent.mkdir(parents=True)
    os.symlink(dist.resolve(), site, target_is_directory=True)
    runtime = folder / "runtime"
    runtime.mkdir()
    (runtime / "index.html").write_bytes(_PAGE)
    (runtime / _WORKER.name).write_bytes(_WORKER.read_bytes())
    return folder


def write_bundle(path: Path, files: Mapping[str, bytes]) -> None:
    """Writes a zip without compression, as the worker unpacks it."""
    with zipfile.ZipFile(path, "w", zipfile.ZIP_STORED) as archive:
        for name, data in sorted(files.items()):
            archive.writestr(name, data)


class BrowserRuntime:
    """The site's Python in a worker of an otherwise empty page of the same origin.

    Parameters
    ----------
    page
        A Playwright page.
    server : str
        Address of a server whose folder `site_folder` laid out.
    app : str
        Name of the site's app-* folder.
    bare : bool
        Boot the runtime and numpy only.
    """

    def __init__(self, page: Any, server: str, app: str, bare: bool = False) -> None:
        self._page = page
        page.goto(f"{server}runtime/index.html")
        page.evaluate(
            """(worker) => {
                window.waiting = new Map();
                window.worker = new Worker(worker, { type: "module" });
                window.worker.onmessage = ({ data }) => window.waiting.get(data.serial)(data);
                window.worker.onerror = (event) => {
                    for (const settle of window.waiting.values()) settle({ trouble: event.message ?? "the worker stopped" });
                };
            }""",
            _WORKER.name,
        )
        self._serial = 0
        self.times: dict[str, float] = self._ask("start", app=f"{server}{SITE_PATH}{app}/", bare=bare)

    def _ask(self, task: str, **fields: Any) -> Any:
        self._serial += 1
        answer = self._page.evaluate(
            """([serial, task, fields]) => new Promise((settle) => {
                window.waiting.set(serial, settle);
                window.worker.postMessage({ serial, task, fields });
            })""",
            [self._serial, task, fields],
        )
        if "trouble" in answer:
            raise RuntimeError(f"In the browser's runtime: {answer['trouble']}")
        return answer["result"]

    def add_files(self, address: str, folder: str) -> None:
        """Lays the files of a served bundle on the runtime's disk under `folder`."""
        self._ask("files", address=address, folder=folder)

    def add_path(self, folder: str) -> None:
        """Puts a folder of the runtime's disk first among those that Python imports from."""
        self._ask("path", folder=folder)

    def load_scipy(self) -> None:
        """Loads scipy as the application does when it needs it."""
        self._ask("scipy")

    def run(self, module: str, name: str, /, **values: Any) -> Any:
        """Calls module.name(**values) inside; values and result are JSON values.

        Raises
        ------
        RuntimeError
            With the Python traceback's end.
        """
        return self._ask("run", module=module, name=name, values=values)
