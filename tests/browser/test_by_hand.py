"""What somebody does at three in the morning, in a real browser."""

from __future__ import annotations

import re
from collections.abc import Iterator

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, expect

from tests.browser.scene import HOSTILE, ITEM, NAME, Scene, sign_in


@pytest.fixture(autouse=True)
def _thawed(scene: Scene) -> Iterator[None]:
    yield
    scene.thaw()


def give(page: Page, reason: str) -> None:
    """Say why, and press the button."""
    page.get_by_label("Reason (for the journal)").fill(reason)
    page.locator("#confirm").click()


def test_a_line_item_is_frozen_and_thawed(context: BrowserContext, scene: Scene) -> None:
    """From the front page: open it, see what is exposed, say why, and it is in force."""
    page = sign_in(context, scene)
    page.get_by_role("link", name="Day tickets, an invented garden", exact=True).click()
    page.locator("#freeze").click()
    expect(page.locator("#exposed")).to_contain_text("may still cost")
    give(page, "prices look wrong")
    expect(page.locator("#answer")).to_contain_text("In force")
    assert scene.state()["status"] == "frozen"
    page.locator("#back").click()
    expect(page.locator("#status")).to_have_text("frozen")
    expect(page.locator("#journal")).to_contain_text("prices look wrong")
    expect(page.locator("#journal")).to_contain_text("watch page")
    page.locator("#thaw").click()
    give(page, "feed mended")
    expect(page.locator("#answer")).to_contain_text("In force")
    assert scene.state()["status"] == "open"


def test_everything_is_frozen_at_once(context: BrowserContext, scene: Scene) -> None:
    """The front page says so until the switch is lifted."""
    page = sign_in(context, scene)
    page.locator("#freeze-all").click()
    expect(page.locator("#exposed")).to_contain_text("may still cost")
    give(page, "fire drill")
    page.locator("#front").click()
    expect(page.locator("#all-frozen")).to_contain_text("fire drill")
    page.locator("#thaw-all").click()
    give(page, "drill over")
    page.locator("#front").click()
    expect(page.locator("#all-frozen")).to_have_count(0)


def test_a_learner_is_rewound_from_its_stream(context: BrowserContext, scene: Scene) -> None:
    """A row of the stream leads to the order; the preview says what would change, then it does."""
    page = sign_in(context, scene, ITEM)
    before = scene.state()["learner"]["wins"]
    page.locator("#stream a").last.click()
    page.get_by_label("Reason (for the journal)").fill("a bad minute")
    page.locator("#show-preview").click()
    expect(page.locator("#cancelled")).to_contain_text("would be cancelled")
    expect(page.locator("#before-after")).to_contain_text("wins")
    assert scene.state()["learner"]["wins"] == before
    page.locator("#confirm").click()
    expect(page.locator("#answer")).to_contain_text("published at seq")
    expect(page.locator("#cancelled")).to_contain_text("were cancelled")


def test_lessons_are_retracted_by_source(context: BrowserContext, scene: Scene) -> None:
    """The fields of the form reach the order."""
    page = sign_in(context, scene, f"{ITEM}/retract")
    page.get_by_label("Source").fill("default")
    page.get_by_label("What they taught of").select_option("value")
    page.get_by_label("Reason (for the journal)").fill("a broken pixel")
    page.locator("#show-preview").click()
    expect(page.locator("#cancelled")).to_contain_text("would be cancelled")
    page.locator("#confirm").click()
    expect(page.locator("#answer")).to_be_visible()
    assert scene.state()["certainty"]["known"] == 0


def test_the_page_renews_itself(context: BrowserContext, scene: Scene) -> None:
    """What somebody else did shows without a reload, the sentence too, and focus stays."""
    page = sign_in(context, scene)
    row = page.locator(f"#row-{NAME}")
    expect(row).to_contain_text("bidding")
    row.locator("a.item").focus()
    scene.post(f"line-items/{NAME}/freeze", {"reason": "by somebody else"})
    expect(row).to_contain_text("by somebody else", timeout=10_000)
    expect(page.locator("#sentence")).to_contain_text("1 frozen by people")
    expect(row.locator("a.item")).to_be_focused()
    expect(page.locator("#seen")).to_have_text(re.compile(r"Seen \d s ago\."))


def test_a_lost_connection_is_said_and_forgotten(context: BrowserContext, scene: Scene) -> None:
    """A banner stands there until the service answers again."""
    page = context.new_page()
    page.clock.install()
    page.goto(scene.server.address + "/watch/sign-in")
    page.get_by_label("Access key").fill(scene.server.key)
    page.get_by_role("button", name="Sign in").click()
    expect(page.locator("#line-items")).to_be_visible()
    context.set_offline(True)
    for _ in range(3):
        page.clock.run_for(3100)
        page.wait_for_timeout(200)
    expect(page.locator("#lost")).to_contain_text("No connection")
    page.clock.run_for(20_000)
    expect(page.locator("#seen")).to_have_class("old")
    context.set_offline(False)
    page.clock.run_for(3100)
    expect(page.locator("#lost")).to_be_hidden()


def test_a_held_or_hidden_page_asks_for_nothing(context: BrowserContext, scene: Scene) -> None:
    """Neither a picture held still nor a page in the background costs a request."""
    page = sign_in(context, scene)
    page.clock.install()
    page.reload()
    asked: list[str] = []
    page.get_by_role("button", name="Hold still").click()
    page.on("request", lambda request: asked.append(request.url))
    page.clock.run_for(9000)
    assert asked == []
    page.evaluate("Object.defineProperty(document, 'hidden', {value: true, writable: true})")
    page.get_by_role("button", name="Go on").click()
    page.clock.run_for(9000)
    assert asked == []
    page.evaluate("Object.defineProperty(document, 'hidden', {value: false})")
    page.clock.run_for(3100)
    expect(page.locator("#seen")).to_contain_text("Seen")
    page.wait_for_timeout(100)
    assert asked[0].endswith("/watch/now")


def test_the_keyboard_alone_is_enough(context: BrowserContext, scene: Scene) -> None:
    """Sign in, find, freeze: no mouse; single keys can be switched off."""
    page = context.new_page()
    page.goto(scene.server.address + "/watch")
    page.keyboard.press("Tab")
    expect(page.locator(".skip")).to_be_focused()
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    page.keyboard.type(scene.server.key)
    page.keyboard.press("Enter")
    expect(page.locator("#line-items")).to_be_visible()
    page.keyboard.press("/")
    page.keyboard.type(NAME)
    page.keyboard.press("Enter")
    page.wait_for_url("**/watch?q=garden")
    page.keyboard.press("j")
    expect(page.locator(f"#row-{NAME} a.item")).to_be_focused()
    page.keyboard.press("f")
    page.wait_for_url(f"**{ITEM}/freeze")
    page.locator("#main").focus()
    page.keyboard.press("Tab")
    page.keyboard.press("Tab")
    expect(page.get_by_label("Reason (for the journal)")).to_be_focused()
    page.keyboard.type("by keyboard; f is a letter here")
    page.keyboard.press("Tab")
    page.keyboard.press("Enter")
    expect(page.locator("#answer")).to_contain_text("In force")
    assert scene.state()["freezes"][0]["reason"] == "by keyboard; f is a letter here"
    page.goto(scene.server.address + ITEM)
    page.keyboard.press("?")
    page.get_by_label("single keys on").uncheck()
    page.locator("#main").focus()
    page.keyboard.press("t")
    assert page.url.endswith(ITEM)


def test_it_works_without_scripts(browser: Browser, scene: Scene) -> None:
    """Reading, with every chart as a table, and freezing need no script at all."""
    context = browser.new_context(java_script_enabled=False)
    page = sign_in(context, scene, ITEM)
    expect(page.locator("#chart-prices details")).to_have_count(1)
    expect(page.locator("#chart-prices .says")).to_contain_text("bids")
    page.locator("#freeze").click()
    give(page, "no scripts here")
    expect(page.locator("#answer")).to_contain_text("In force")
    context.close()
    assert scene.state()["status"] == "frozen"


def test_hostile_names_stay_names(context: BrowserContext, scene: Scene) -> None:
    """They are read and not run, after a renewal too."""
    page = sign_in(context, scene)
    expect(page.locator("#row-hostile a.item")).to_have_text(HOSTILE)
    scene.post("line-items/hostile/freeze", {"reason": HOSTILE})
    expect(page.locator("#row-hostile .why")).to_contain_text(HOSTILE, timeout=10_000)
    page.goto(scene.server.address + "/watch/line-items/hostile")
    expect(page).to_have_title(re.compile("script"))
