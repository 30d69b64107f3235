"""A server with something to see, and a browser that tells what went wrong in it."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from urllib.parse import urljoin, urlsplit

import httpx
from playwright.sync_api import (
    Browser,
    BrowserContext,
    ConsoleMessage,
    Page,
    expect,
    sync_playwright,
)

from service.commands.server_process import ServerProcess
from tests.house import ROOT

NAME = "garden"
ITEM = f"/watch/line-items/{NAME}"
HOSTILE = "<script>document.title='owned'</script>"
CALM_S = 10_000  # Milliseconds in which the page must have renewed itself.
ITEMS: tuple[dict[str, Any], ...] = (
    {"id": NAME, "name": "Day tickets, an invented garden", "daily_budget": "20.00"},
    {"id": "alpine-season-pass-with-a-very-long-identifier-of-its-own", "name": "Season pass " * 8},
    {"id": "hostile", "name": HOSTILE, "currency": "CHF"},
    {"id": "asleep", "name": "Not yet", "flight": {"starts_at": "2199-01-01T00:00:00Z"}},
)
COMMON: dict[str, Any] = {
    "currency": "EUR",
    "budget": "50.00",
    "bid_cap_cpm": 8,
    "flight": {"starts_at": "2026-01-01T00:00:00Z", "time_zone": "Europe/Zurich"},
    "value": {"ceiling": "0.10", "arrival": "once"},
    "policy": {"method": "kl-ucbid"},
    "pacing": {"method": "none"},
}


@dataclass
class Scene:
    """A server that serves, and what a test asks of it."""

    server: ServerProcess
    api: httpx.Client

    def post(self, path: str, body: dict[str, Any]) -> dict[str, Any]:
        """Call the API with the admin key."""
        answer = self.api.post(f"/v1/{path}", json=body)
        assert answer.is_success, answer.text
        return dict(answer.json())

    def state(self, name: str = NAME) -> dict[str, Any]:
        """The state of a line item."""
        return dict(self.api.get(f"/v1/line-items/{name}/state").json())

    def thaw(self) -> None:
        """Let everything bid again, whatever a test has left."""
        self.post("thaw", {"reason": "between two tests"})
        self.post(f"line-items/{NAME}/thaw", {"reason": "between two tests"})


@dataclass
class Seen:
    """What went through a page: requests, and complaints of the browser."""

    origin: str
    foreign: list[str] = field(default_factory=list)
    complaints: list[str] = field(default_factory=list)

    def watch(self, page: Page) -> None:
        """Listen to a page."""
        page.on("request", lambda request: self._asked(request.url))
        page.on("console", self._said)
        page.on("pageerror", lambda error: self.complaints.append(str(error)))

    def _asked(self, url: str) -> None:
        if urlsplit(url).netloc != urlsplit(self.origin).netloc:
            self.foreign.append(url)

    def _said(self, message: ConsoleMessage) -> None:
        # A refused policy is an error on the console; hints are none.
        if message.type in ("error", "warning"):
            self.complaints.append(message.text)


@contextmanager
def serving(directory: Path) -> Iterator[Scene]:
    """A server whose line items have bid, won, lost and learnt."""
    # A machine that runs other tests beside this one is slow.
    patient = {"BIDKEEL_DEADLINE_MS": "5000", "BIDKEEL_DEADLINE_MS_MAX": "5000"}
    with ServerProcess(directory, patient) as server:
        headers = {"Authorization": f"Bearer {server.key}"}
        with httpx.Client(base_url=server.address, headers=headers, timeout=20) as api:
            scene = Scene(server, api)
            for item in ITEMS:
                scene.post("line-items", COMMON | item)
            _play(scene)
            yield scene


def _play(scene: Scene) -> None:
    wishes = [{"line_item": NAME, "floor_cpm": 1 + n % 9} for n in range(120)]
    answers = scene.post("bids/batch", {"opportunities": wishes})["answers"]
    bids = [answer for answer in answers if answer.get("ticket")]
    wins = [
        {"ticket": bid["ticket"], "kind": "won", "clearing_cpm": 1 + n % 5}
        if n % 3
        else {"ticket": bid["ticket"], "kind": "lost"}
        for n, bid in enumerate(bids[:-10])  # The last ten stay open.
    ]
    scene.post("outcomes", {"outcomes": wins})
    values = [
        {"ref": bid["ref"], "kind": "value", "value": f"0.00{n % 9}", "event_id": f"e{n}"}
        for n, bid in enumerate(bids[:-10])
        if n % 3
    ]
    scene.post("outcomes", {"outcomes": values})


def chromium() -> str:
    """Where the browser lies: CHROMIUM names another place."""
    found = os.environ.get("CHROMIUM") or shutil.which("chromium")
    if found is None:
        raise FileNotFoundError("no chromium; deploy/test says how these tests get one")
    return found


def axe() -> str:
    """The script that looks for what keeps people out: AXE_PATH names another place."""
    installed = ROOT / ".venv/node/axe-core/node_modules/axe-core/axe.min.js"
    return Path(os.environ.get("AXE_PATH") or installed).read_text("utf-8")


@contextmanager
def browsing() -> Iterator[Browser]:
    """A browser without a window."""
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(
            executable_path=chromium(),
            # Its own sandbox does not start for root, as which a container runs.
            args=["--no-sandbox", "--disable-dev-shm-usage"],
        )
        yield browser
        browser.close()


def sign_in(context: BrowserContext, scene: Scene, path: str = "/watch") -> Page:
    """A page of somebody who may give orders, at this path."""
    page = context.new_page()
    page.goto(scene.server.address + "/watch/sign-in?next=" + path)
    page.get_by_label("Access key").fill(scene.server.key)
    page.get_by_role("button", name="Sign in").click()
    page.wait_for_url("**" + path)
    return page


def rehearse(page: Page, rounds: int = 300) -> None:
    """From a line item's page by the form to the charts of what a rehearsal came to."""
    page.goto(urljoin(page.url, ITEM))
    page.locator("#rehearse").click()
    page.get_by_label("Name of the rehearsal").fill("two methods")
    page.get_by_label("mean", exact=True).check()
    page.get_by_label("Auctions a seed").fill(f"{rounds}")
    page.get_by_label("Market", exact=True).select_option("own_curve")
    page.locator("#begin").click()
    expect(page.locator("#state")).to_have_text("done", timeout=30_000)
    for name in ("surplus", "spend", "bid"):
        expect(page.locator(f"[data-plot={name}] .main-svg").first).to_be_visible()
