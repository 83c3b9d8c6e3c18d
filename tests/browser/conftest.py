"""One browser and one plain server for all browser tests; every page is watched for errors and for requests that leave the origin."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from browser_runtime import SITE_PATH, plain_server, site_folder
from browser_setup import CHROMIUM_ARGUMENTS, chromium_program
from build_environment import ROOT
from support.watched_pages import Watch, open_ready


@pytest.fixture(scope="session")
def dist() -> Path:
    """The built site: the one named in LAGSCAPE_DIST, else dist/, which the test command builds first."""
    folder = Path(os.environ.get("LAGSCAPE_DIST", ROOT / "dist"))
    assert (folder / "index.html").is_file(), f"there is no built site in {folder}: run build_scripts/serve.py --build-only first"
    return folder


@pytest.fixture(scope="session")
def app_folder(dist: Path) -> str:
    """Name of the built app-* folder."""
    folders = [path.name for path in dist.glob("app-*")]
    assert len(folders) == 1, folders
    return folders[0]


@pytest.fixture(scope="session")
def server_folder(dist: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return site_folder(tmp_path_factory.mktemp("server"), dist)


@pytest.fixture(scope="session")
def server(server_folder: Path) -> Iterator[str]:
    """Address of the plain file server."""
    with plain_server(server_folder) as address:
        yield address


@pytest.fixture(scope="session")
def site(server: str) -> str:
    """Address of the site, two folders below the server's root."""
    return server + SITE_PATH


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    from playwright.sync_api import sync_playwright

    program = chromium_program()
    assert program is not None, "Chromium is not here: run build_scripts/test.py, which says how to get it"
    with sync_playwright() as playwright:
        chromium = playwright.chromium.launch(executable_path=str(program), args=list(CHROMIUM_ARGUMENTS))
        yield chromium
        chromium.close()


@pytest.fixture
def new_context(browser: Any, server: str) -> Iterator[Callable[..., tuple[Any, Watch]]]:
    """Makes a fresh browser context and its watch; checked and closed when the test ends."""
    made: list[tuple[Any, Watch]] = []

    def make(**options: Any) -> tuple[Any, Watch]:
        context = browser.new_context(**{"viewport": {"width": 1400, "height": 1000}, **options})
        watch = Watch(server.rstrip("/"))
        watch.follow(context)
        made.append((context, watch))
        return context, watch

    yield make
    for context, _ in made:
        context.close()
    for _, watch in made:
        watch.check()


@pytest.fixture(scope="session")
def _booted(browser: Any, server: str, site: str) -> Iterator[tuple[Any, Watch]]:
    context = browser.new_context(viewport={"width": 1400, "height": 1000}, accept_downloads=True)
    watch = Watch(server.rstrip("/"))
    watch.follow(context)
    yield open_ready(context, site), watch
    context.close()


@pytest.fixture
def ready_page(_booted: tuple[Any, Watch]) -> Iterator[Any]:
    """The session's one booted page, for tests that leave it usable; its watch is checked after each."""
    page, watch = _booted
    yield page
    watch.check()


@pytest.fixture
def ready_watch(_booted: tuple[Any, Watch]) -> Watch:
    """The watch of `ready_page`."""
    return _booted[1]
