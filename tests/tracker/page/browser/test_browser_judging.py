"""Decisions in a real browser: with mouse and keyboard, in two windows, from the list."""

from __future__ import annotations

import re

import pytest
from page_browser import rest_on, row_of
from page_server import CHROMIUM, Server, wait_for
from playwright.sync_api import BrowserContext, Page, Route, expect

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no Chromium is installed")


def test_rejection_holds_after_reload_and_can_be_undone(page: Page, server: Server) -> None:
    """Reject with a reason: table and charge unit change, a reload shows it, undo takes it back."""
    keep = page.locator(".droplets tr:has(.verdict.keep)").first
    number = keep.get_attribute("data-droplet")
    keep.click()
    expect(page.locator(".facts")).to_contain_text(re.compile(r"C \(own \d\S*, shared \d\S*\)"))
    before = page.evaluate("fallrise.view.result.charge_unit_text")
    reject = page.get_by_role("button", name="Reject", exact=True)
    reject.click()
    expect(page.locator("#outcome")).to_contain_text("reason")
    page.get_by_label("Reason", exact=True).fill("<i>two</i> droplets")
    reject.click()
    row = page.locator(f'.droplets tr[data-droplet="{number}"]')
    expect(row.locator(".verdict.reject")).to_be_visible()
    expect(page.locator("#outcome")).to_contain_text("evaluated again")
    assert page.evaluate("fallrise.view.result.charge_unit_text") != before
    page.reload()
    expect(row.locator(".verdict.reject")).to_be_visible()
    row.click()
    expect(page.locator(".facts")).to_contain_text("<i>two</i> droplets")
    held: list[Route] = []
    page.route("**/undo", lambda route: held.append(route))  # noqa: PLW0108 -- the driver marks the handler
    page.get_by_role("button", name="Undo").click()
    expect(page.locator("#outcome")).to_contain_text("Taking the last decision back and evaluating again")
    expect(page.get_by_role("progressbar", name="Evaluation")).to_be_visible()
    page.get_by_label("Reason", exact=True).fill("begun in the meantime")
    assert wait_for(lambda: page.evaluate("true") and held)
    held[0].continue_()
    expect(row.locator(".verdict.keep")).to_be_visible()
    expect(page.get_by_label("Reason", exact=True)).to_have_value("begun in the meantime")
    assert page.evaluate("fallrise.view.result.charge_unit_text") == before


def test_split_says_what_is_done_and_what_became_of_it(page: Page) -> None:
    """While a split is evaluated the page says so; then it names both droplets, and the table holds them."""
    numbers = lambda: page.evaluate("fallrise.view.result.droplets.map((d) => d.droplet)")  # noqa: E731
    before = numbers()
    page.locator(row_of(page, before[0])).click()
    rest_on(page, 40)
    held: list[Route] = []
    page.route("**/decide", lambda route: held.append(route))  # noqa: PLW0108 -- the driver marks the handler
    page.get_by_label("Reason", exact=True).fill("another droplet from here")
    page.get_by_role("button", name="Split", exact=True).click()
    expect(page.locator("#outcome")).to_contain_text(
        f"Splitting droplet {before[0]} at 2.000 s and evaluating"
    )
    assert wait_for(lambda: page.evaluate("true") and held)
    held[0].continue_()
    expect(page.locator("#outcome")).to_contain_text("Kept in decisions.jsonl")
    (new,) = wait_for(lambda: set(numbers()) - set(before))
    expect(page.locator("#outcome")).to_contain_text(f"Droplet {before[0]} is now {before[0]} and {new}.")
    expect(page.locator(row_of(page, new))).to_be_visible()
    page.get_by_role("button", name="Undo").click()
    expect(page.locator(row_of(page, new))).to_have_count(0)


def test_stale_window_is_told(page: Page, context: BrowserContext) -> None:
    """Of two windows, the one that shows an older state is told; its decision is not taken."""
    number = int(page.locator(".droplets tr[data-droplet]").first.get_attribute("data-droplet") or 0)
    other = context.new_page()
    other.goto(page.url)
    expect(other.locator(row_of(other, number))).to_be_visible()
    page.locator(row_of(page, number)).click()
    page.get_by_label("Reason", exact=True).fill("first")
    page.get_by_role("button", name="Doubt", exact=True).click()
    expect(page.locator(row_of(page, number) + " .verdict.doubt")).to_be_visible()
    other.get_by_label("Reason", exact=True).fill("second")
    other.get_by_role("button", name="Reject", exact=True).click()
    expect(other.locator(".notice.bad")).to_contain_text("changed elsewhere")
    other.get_by_role("button", name="Show what is there now").click()
    expect(other.locator(row_of(other, number) + " .verdict.doubt")).to_be_visible()
    other.get_by_role("button", name="Undo").click()
    expect(other.locator(row_of(other, number) + " .verdict.doubt")).to_have_count(0)


def test_keyboard_alone_is_enough(context: BrowserContext, server: Server) -> None:
    """From the list to a rejection with a reason and its undo, without the mouse."""
    page = context.new_page()
    page.goto(server.address)
    expect(page.locator("a.tile").first).to_be_visible()
    tab_to(page, "a.tile")
    page.keyboard.press("Enter")
    expect(page.locator(".droplets tbody tr[data-droplet]").first).to_be_visible()
    expect(page.locator(".says")).to_be_hidden()
    tab_to(page, ".stage")
    for key in ("End", "Home", "Shift+ArrowRight", "ArrowRight"):
        page.keyboard.press(key)
    assert page.evaluate("fallrise.view.frames.wanted") == 11
    page.keyboard.press("+")
    page.keyboard.press("Alt+ArrowLeft")
    assert page.evaluate("fallrise.view.stage.zoom") > 1
    page.keyboard.press("0")
    tab_to(page, ".droplets tbody tr")
    page.keyboard.press("Home")
    page.keyboard.press("ArrowDown")
    chosen = page.evaluate("fallrise.view.chosen")
    assert page.evaluate("document.activeElement.dataset.droplet") == str(chosen)
    page.keyboard.press("r")
    page.keyboard.type("seen with the keyboard")
    tab_to(page, "button:text-is('Reject')")
    page.keyboard.press("Enter")
    expect(page.locator(row_of(page, chosen) + " .verdict.reject")).to_be_visible()
    expect(page.get_by_role("button", name="Reject", exact=True)).to_be_focused()
    page.keyboard.press("Escape")
    tab_to(page, "#tab-motion")
    page.keyboard.press("End")
    expect(page.locator("#panel-history")).to_contain_text("seen with the keyboard")
    page.keyboard.press("u")
    expect(page.locator(row_of(page, chosen) + " .verdict.reject")).to_have_count(0)


def tab_to(page: Page, selector: str) -> None:
    """Press Tab until an element has the focus; 80 stops at most."""
    for _ in range(80):
        page.keyboard.press("Tab")
        if page.evaluate("s => document.activeElement.matches(s.replace(/:text-is.*$/, ''))", selector):
            wanted = re.search(r"text-is\('(.*)'\)", selector)
            if wanted is None or page.evaluate("document.activeElement.textContent") == wanted[1]:
                return
    raise AssertionError(f"Tab never reaches {selector}")


def test_list_filters_by_reason_and_shows_the_worst_first(page: Page, server: Server) -> None:
    """With the order 'worst first' the tracks that are not kept lead the list and open where they lie."""
    number = int(page.locator(".droplets tr[data-droplet]").nth(1).get_attribute("data-droplet") or 0)
    page.locator(row_of(page, number)).click()
    page.get_by_label("Reason", exact=True).fill("for the list")
    page.get_by_role("button", name="Reject", exact=True).click()
    expect(page.locator(row_of(page, number) + " .verdict.reject")).to_be_visible()
    page.locator(".word").click()
    page.get_by_label("Order").select_option("worst")
    page.get_by_label("With reason").select_option("decided")
    expect(page.locator(".worst tbody tr")).to_have_count(1)
    page.locator(".worst tbody a").click()
    expect(page.locator(row_of(page, number))).to_have_attribute("aria-selected", "true")
    page.get_by_role("button", name="Undo").click()
    expect(page.locator(row_of(page, number) + " .verdict.reject")).to_have_count(0)
