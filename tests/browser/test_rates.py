"""The page Rates in a real browser, on a run that is finished."""

from collections.abc import Callable
from pathlib import Path

import pytest
from playwright.sync_api import Page, expect

from kinetics.run import load_run
from tests.browser.conftest import Dashboard

pytestmark = pytest.mark.browser


def test_selected_spectra_are_set_aside(
    dashboard: Callable[..., Dashboard], page: Page, night: Path
) -> None:
    """Drag over residuals, give name and reason: the record holds it."""
    logbook = night / "night.logbook"
    before = load_run(logbook)
    running = dashboard(str(night))
    page.goto(f"{running.address}/rates?run=night")
    page.wait_for_selector(".st-key-residuals .nsewdrag", timeout=60_000)
    expect(page.get_by_text("Verdict", exact=True)).to_be_visible()
    expect(page.get_by_role("button", name="Set aside")).to_be_disabled()
    box = page.locator(".st-key-residuals .nsewdrag").first
    box.scroll_into_view_if_needed()
    place = box.bounding_box()
    assert place is not None
    page.mouse.move(place["x"] + 0.30 * place["width"], place["y"] + 4)
    page.mouse.down()
    page.mouse.move(place["x"] + 0.36 * place["width"], place["y"] + place["height"] - 4, steps=8)
    page.mouse.up()
    chosen = page.get_by_role("button", name="Remove ")
    expect(chosen.first).to_be_visible(timeout=20_000)
    count = chosen.count()
    assert 1 <= count < len(before.entries) / 4
    page.get_by_label("Reason").first.fill("bubble <img src=x onerror=alert(1)>")
    page.get_by_label("Reason").first.press("Tab")
    expect(page.get_by_role("button", name="Set aside")).to_be_disabled()  # still no name
    page.get_by_label("Your name").first.fill("R. Vance")
    page.get_by_label("Your name").first.press("Tab")
    page.get_by_role("button", name="Set aside").click()
    expect(page.get_by_text(f"{count} set aside by R. Vance")).to_be_visible(timeout=30_000)
    after = load_run(logbook)
    assert len(after.aside) == count
    assert {d.who for d in after.decisions if d.kind == "set-aside"} == {"R. Vance"}
    assert after.fitted.size == before.fitted.size - count
    assert page.locator("img[src=x]").count() == 0  # the reason is shown as text
