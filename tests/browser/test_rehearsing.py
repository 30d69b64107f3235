"""Somebody tries a change before money rides on it, and looks back, in a real browser."""

from __future__ import annotations

from playwright.sync_api import Browser, BrowserContext, expect

from tests.browser.scene import ITEM, Scene, rehearse, sign_in

LONG = "1000000"  # Auctions: longer than any test waits.


def test_a_change_is_rehearsed_and_read(context: BrowserContext, scene: Scene) -> None:
    """The page follows it to its end by itself, then has the table and a chart by policy."""
    page = sign_in(context, scene)
    rehearse(page)
    table = page.locator("#result")
    expect(table.get_by_role("row")).to_have_count(3)
    expect(table).to_contain_text("as it is")
    expect(table).to_contain_text("EUR")
    assert page.locator("[data-plot=surplus] .scatterlayer .trace").count() == 2
    page.locator("#back").click()
    expect(page.locator("#rehearsals-list")).to_contain_text("two methods")


def test_one_is_cancelled_without_scripts(browser: Browser, scene: Scene) -> None:
    """Starting, looking again and cancelling need no script."""
    context = browser.new_context(java_script_enabled=False)
    page = sign_in(context, scene, "/watch/rehearsals")
    page.get_by_label("Line item (its id)").fill("garden")
    page.get_by_label("Market", exact=True).select_option("iid")
    page.get_by_label("Auctions a seed").fill(LONG)
    page.locator("#begin").click()
    expect(page.locator("progress")).to_be_visible()
    page.get_by_label("Reason (for the journal)").fill("no time for it")
    page.locator("#cancel").click()
    # Its process may take a moment to end.
    for _ in range(50):
        if page.locator("#state").inner_text() == "cancelled":
            break
        page.wait_for_timeout(100)
        page.reload()
    expect(page.locator("#state")).to_have_text("cancelled")
    context.close()


def test_hindsight_keeps_apart_what_is_certain(context: BrowserContext, scene: Scene) -> None:
    """Another cap is asked for by hand; each kind of knowledge has a box of its own."""
    page = sign_in(context, scene, ITEM)
    page.locator("#hindsight").click()
    page.get_by_label("What else").select_option("one flat price for all")
    page.get_by_label("Price (CPM").fill("2.5")
    page.locator("#look").click()
    expect(page.locator("#certain")).to_contain_text("Known for certain")
    expect(page.locator("#bounded")).to_contain_text("worst")
    expect(page.locator("#assumed-values_alike")).to_contain_text("Assumes that")
    expect(page.locator("#evidence")).to_contain_text("kl-ucbid")
