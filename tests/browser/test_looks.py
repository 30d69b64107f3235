"""Every page, narrow and wide, light and dark: nothing cut off, nobody kept out, charts drawn."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, expect

from tests.browser.scene import ITEM, NAME, Scene, Seen, axe, rehearse, sign_in

PAGES = {
    "front": "/watch",
    "line-item": ITEM,
    "freeze": f"{ITEM}/freeze",
    "thaw": f"{ITEM}/thaw",
    "rewind": f"{ITEM}/rewind?to=1",
    "retract": f"{ITEM}/retract",
    "reset": f"{ITEM}/reset",
    "freeze-all": "/watch/all/freeze",
    "rehearsals": f"/watch/rehearsals?line_item={NAME}",
    "hindsight": f"{ITEM}/hindsight?other=bid_cap_cpm&price=2.5",
    "nowhere": "/watch/line-items/none",
}
# Elements that reach beyond the window; what is hidden on purpose is one pixel small, and a wide
# table scrolls in a box of its own.
BEYOND = """() => [...document.querySelectorAll('main *')].filter((one) => {
  const box = one.getBoundingClientRect();
  return !one.closest('.wide')
    && box.width > 1 && box.height > 1 && box.right > window.innerWidth + 1;
}).map((one) => one.outerHTML.slice(0, 120))"""

STROKES = """() => [...document.querySelectorAll('[data-plot=wins] .js-line')]
  .map((one) => getComputedStyle(one).stroke)"""


def look(page: Page, name: str, folder: Path, script: str) -> None:
    """Keep a picture, and look for what reaches out of the window or keeps people out."""
    page.screenshot(path=folder / f"{name}.png", full_page=True)
    assert page.evaluate("document.documentElement.scrollWidth <= window.innerWidth"), name
    assert page.evaluate(BEYOND) == [], name
    page.evaluate(script)
    found: list[dict[str, Any]] = page.evaluate("axe.run({resultTypes: ['violations']})")[
        "violations"
    ]
    grave = [one for one in found if one["impact"] in ("serious", "critical")]
    assert [(one["id"], one["nodes"][0]["html"]) for one in grave] == [], name


# Each page once in each width and in each scheme; all four pairs would take a minute more.
@pytest.mark.parametrize(("width", "scheme"), [(375, "light"), (1440, "dark")])
def test_every_page_is_whole_and_open_to_all(
    browser: Browser, scene: Scene, tmp_path: Path, width: int, scheme: Any
) -> None:
    """No page scrolls sideways, and no serious finding, the door and an answer included."""
    context = browser.new_context(
        viewport={"width": width, "height": 812}, color_scheme=scheme, reduced_motion="reduce"
    )
    seen, script = Seen(scene.server.address), axe()
    context.on("page", seen.watch)
    door = context.new_page()
    door.goto(scene.server.address + "/watch/sign-in")
    look(door, "sign-in", tmp_path, script)
    page = sign_in(context, scene)
    for name, path in PAGES.items():
        page.goto(scene.server.address + path)
        if name == "line-item":
            expect(page.locator("[data-plot=delays] .main-svg").first).to_be_visible()
        look(page, name, tmp_path, script)
    page.goto(scene.server.address + f"{ITEM}/freeze")
    page.get_by_label("Reason (for the journal)").fill("a look")
    page.locator("#confirm").click()
    look(page, "done", tmp_path, script)
    rehearse(page)
    look(page, "rehearsal", tmp_path, script)
    context.close()
    scene.thaw()
    assert seen.foreign == []
    # The page that is not there says 404, and the browser says so too.
    assert [said for said in seen.complaints if "404" not in said] == []
    assert len(list(tmp_path.glob("*.png"))) == len(PAGES) + 3


def test_the_charts_are_drawn(context: BrowserContext, scene: Scene) -> None:
    """Each figure has its lines, in the colours of the page, under the strict policy."""
    page = sign_in(context, scene, ITEM)
    for name in ("spend", "prices", "value", "wins", "delays"):
        expect(page.locator(f"[data-plot={name}] .main-svg").first).to_be_visible()
    assert page.locator("[data-plot=prices] .scatterlayer .trace").count() == 3
    assert page.locator("[data-plot=delays] .bars path").count() > 0
    strokes = page.evaluate(STROKES)
    assert "rgb(27, 96, 104)" in strokes
