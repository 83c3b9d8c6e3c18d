"""Builds the site and serves it on this machine.

    python3 build_scripts/serve.py                 builds what changed, serves on 127.0.0.1, prints the address
    python3 build_scripts/serve.py --build-only    builds dist/ and stops
    python3 build_scripts/serve.py --port 9000     serves on another port (0: any free one)
"""

from __future__ import annotations

import argparse
import os
import sys
from functools import partial
from http.server import SimpleHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

from build_environment import ROOT
from build_progress import BuildError, Progress
from build_site import build_site

DEFAULT_PORT = 8600
CONTENT_TYPES = {
    ".wasm": "application/wasm", ".js": "text/javascript", ".mjs": "text/javascript", ".css": "text/css", ".svg": "image/svg+xml",
    ".webmanifest": "application/manifest+json", ".zip": "application/zip", ".bundle": "application/octet-stream",
}


class SiteHandler(SimpleHTTPRequestHandler):
    """A plain file server; folders named by their content may be kept for ever, all else is asked for again."""

    def guess_type(self, path: str | os.PathLike[str]) -> str:
        """The content type; WebAssembly and modules must be named right, whatever this machine's own table says."""
        return CONTENT_TYPES.get(Path(path).suffix) or super().guess_type(path)

    def end_headers(self) -> None:
        """Adds how long the browser may keep the answer."""
        lasting = self.path.lstrip("/").startswith(("lib-", "app-"))
        self.send_header("Cache-Control", "public, max-age=31536000, immutable" if lasting else "no-cache")
        super().end_headers()

    def log_message(self, format: str, *args: object) -> None:
        """Says nothing: every request of a page would be a line."""


class SiteServer(ThreadingHTTPServer):
    """Says nothing when a browser closes a connection early, as it does with every tab that is closed while loading."""

    def handle_error(self, request: object, client_address: object) -> None:
        """Prints only what is not a closed connection."""
        if not isinstance(sys.exc_info()[1], ConnectionError):
            super().handle_error(request, client_address)  # type: ignore[arg-type]


def serve(dist: Path, port: int) -> None:
    """Serves `dist` on 127.0.0.1 until interrupted; the address is printed first."""
    try:
        server = SiteServer(("127.0.0.1", port), partial(SiteHandler, directory=str(dist)))
    except OSError as error:
        raise BuildError(f"Port {port} cannot be used ({error.strerror}): give another with --port.") from error
    print(f"Lagscape is at http://127.0.0.1:{server.server_port}/  (Ctrl+C stops it)", flush=True)
    try:
        server.serve_forever()
    except KeyboardInterrupt:
        print()
    finally:
        server.server_close()


def main() -> int:
    """Reads the command line; returns the exit status."""
    parser = argparse.ArgumentParser(description="Builds Lagscape's static site and serves it on this machine.")
    parser.add_argument("--build-only", action="store_true", help="write dist/ and stop")
    parser.add_argument("--port", type=int, default=DEFAULT_PORT, help="port on 127.0.0.1, 0 for any free one")
    arguments = parser.parse_args()
    try:
        dist = build_site(ROOT / "dist", Progress())
        if not arguments.build_only:
            serve(dist, arguments.port)
    except BuildError as error:
        print(f"Stopped: {error}", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
