"""One server for all browser tests; a browser and its pages for each file or test."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from playwright.sync_api import Browser, BrowserContext, expect

from tests.browser.scene import Scene, Seen, browsing, serving

# A machine that runs other tests beside these may take long; what fails for another reason fails
# just the same, only later.
PATIENCE_MS = 45_000
expect.set_options(timeout=PATIENCE_MS)


@pytest.fixture(scope="session")
def scene(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Scene]:
    """A server with something to see."""
    with serving(tmp_path_factory.mktemp("watched")) as one:
        yield one


# Not for the whole run: while it is open, no other test could run an event loop.
@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    """Debian's Chromium."""
    with browsing() as one:
        yield one


@pytest.fixture
def context(browser: Browser, scene: Scene) -> Iterator[BrowserContext]:
    """A fresh profile; whatever test used it, no other host was asked and nothing complained."""
    seen = Seen(scene.server.address)
    opened = browser.new_context(viewport={"width": 1440, "height": 900})
    opened.set_default_timeout(PATIENCE_MS)
    opened.on("page", seen.watch)
    yield opened
    opened.close()
    assert seen.foreign == []
    assert [said for said in seen.complaints if "ERR_INTERNET_DISCONNECTED" not in said] == []
