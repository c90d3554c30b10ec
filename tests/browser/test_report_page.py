"""The page Report in a real browser: what is downloaded is what the commands write."""

import json
from collections.abc import Callable
from pathlib import Path

import pytest
from playwright.sync_api import Page, expect

from tests.browser.conftest import Dashboard

pytestmark = pytest.mark.browser


def test_report_table_and_fits_are_downloaded(
    dashboard: Callable[..., Dashboard], page: Page, night: Path
) -> None:
    """The preview stands, and all three files hold the run."""
    running = dashboard(str(night))
    page.goto(f"{running.address}/report?run=night")
    page.get_by_role("button", name="Make the report").click(timeout=60_000)
    expect(page.locator(".st-key-preview iframe")).to_be_visible(timeout=60_000)
    texts = {}
    for label in ("report (HTML)", "table (CSV)", "fits (JSON)"):
        with page.expect_download() as waiting:
            page.get_by_role("button", name=f"Download the {label}").click()
        texts[label] = Path(waiting.value.path()).read_text(encoding="utf-8")
    assert "<html" in texts["report (HTML)"]
    assert "dunmarolide" in texts["report (HTML)"]
    assert "<script" not in texts["report (HTML)"]
    assert len(texts["table (CSV)"].splitlines()) == 61  # a heading and 60 spectra
    fits = json.loads(texts["fits (JSON)"])
    assert fits["schema"] == 1
    assert fits["preferred"] == "first-order"
