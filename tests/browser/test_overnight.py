"""The page Overnight in a real browser, on the finished night with its pause."""

from collections.abc import Callable
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Page, expect

from kinetics.run import load_run
from tests.browser.conftest import Dashboard

pytestmark = pytest.mark.browser


def test_review_of_a_night(dashboard: Callable[..., Dashboard], page: Page, night: Path) -> None:
    """See the pause in the strip, step with the arrow keys, mark as reviewed with name and note."""
    running = dashboard(str(night))
    page.goto(f"{running.address}/overnight?run=night")
    page.wait_for_selector(".st-key-night .main-svg", timeout=60_000)
    kinds = page.evaluate(
        """() => document.querySelector('.st-key-night .chart')._fullData
        .filter(t => t.yaxis === 'y2').map(t => t.y[0])"""
    )
    assert "gap" in kinds
    assert "event" in kinds
    page.wait_for_selector(".st-key-stepped .main-svg", timeout=30_000)
    handle = page.get_by_role("slider")
    before = handle.get_attribute("aria-valuetext")
    handle.focus()
    page.keyboard.press("ArrowRight")
    expect(handle).not_to_have_attribute("aria-valuetext", str(before), timeout=20_000)
    done = page.get_by_role("button", name="Reviewed until the last spectrum")
    expect(done).to_be_disabled()
    page.get_by_label("Your name").fill("R. Vance")
    page.get_by_label("Your name").press("Tab")
    page.get_by_label("Note").fill("pause: <img src=x onerror=alert(1)>")
    page.get_by_label("Note").press("Tab")
    done.click()
    expect(page.get_by_text("The review stands in the record")).to_be_visible(timeout=30_000)
    run = load_run(night / "night.logbook")
    last = max(t for t in run.timeline.mid if t is not None)
    decision = run.decisions[-1]
    assert (decision.kind, decision.who) == ("reviewed", "R. Vance")
    assert decision.subject == last.isoformat()
    assert page.locator("img[src=x]").count() == 0


@pytest.mark.parametrize(("width", "scheme"), [(1440, "dark"), (390, "light")])
def test_fits_the_screen(
    dashboard: Callable[..., Dashboard], browser: Browser, night: Path, width: int, scheme: str
) -> None:
    running = dashboard(str(night))
    context = browser.new_context(
        viewport={"width": width, "height": 850},
        color_scheme=scheme,  # type: ignore[arg-type]
    )
    opened = context.new_page()
    opened.goto(f"{running.address}/overnight?run=night")
    opened.wait_for_selector(".st-key-stepped .main-svg", timeout=60_000)
    wide = opened.evaluate("document.querySelector('[data-testid=stMain]').scrollWidth")
    context.close()
    assert wide <= width + 1
