"""The page Across runs in a real browser, on three runs at three temperatures."""

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Page, expect

from demo_runs import dunmarolide
from demo_runs.scenario import Schedule
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import write
from tests.browser.conftest import Dashboard
from tests.recorded import STARTED, take

pytestmark = pytest.mark.browser

CELSIUS = (15.0, 25.0, 35.0)
HOSTILE = "<img src=x onerror=alert(1)> **bold** $x$"


def three_runs(home: Path) -> Path:
    """Three runs of the invented reaction in a folder of logbooks, one with a hostile title."""
    for place, celsius in enumerate(CELSIUS):
        kelvin = celsius + 273.15
        # Each is followed for the same share of its course.
        interval = 2.2 / dunmarolide.rate_constant(kelvin) / 24
        quiet = replace(
            dunmarolide.demo().habits, temperature_k=kelvin, jumps=(), episodes=(), wander_ppm=0.0
        )
        scenario = dunmarolide.scenario(
            Schedule(count=24, interval_s=interval, scans=16, recycle_s=12.0, first_after_s=60),
            quiet,
            impurity_from_s=None,
        )
        folder, sheet = home / f"raw{place}", home / f"sheet{place}.toml"
        folder.mkdir()
        for spectrum in simulate_run(scenario, seed=20 + place, started=STARTED, count=24):
            write(spectrum, folder, "raw")
        write_sheet(sheet, STARTED)
        text = sheet.read_text(encoding="utf-8")
        text = re.sub(r"temperature_c = [\d.]+", f"temperature_c = {celsius}", text)
        if place == 0:
            text = re.sub(r"(?m)^title = .*$", f"title = '{HOSTILE}'", text, count=1)
        sheet.write_text(text, encoding="utf-8")
        (home / "books").mkdir(exist_ok=True)
        take(folder, sheet, home / "books" / f"at-{celsius:.0f}.logbook")
    return home / "books"


@pytest.fixture(scope="module")
def books(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return three_runs(tmp_path_factory.mktemp("across"))


def test_activation_energy_of_three_runs(
    dashboard: Callable[..., Dashboard], page: Page, books: Path
) -> None:
    """Choose runs by hand, then all three by address: energy near the scenario's own."""
    running = dashboard(str(books))
    page.goto(f"{running.address}/across")
    expect(page.get_by_text("Choose two runs or more of the same reaction.")).to_be_visible(
        timeout=30_000
    )
    page.get_by_label("Runs to compare").click()
    page.get_by_role("option", name="at-15").click()
    page.get_by_role("option", name="at-35").click()
    expect(page.get_by_text("a line through two points has nothing to test it")).to_be_visible(
        timeout=30_000
    )
    assert page.url.endswith("across?runs=at-15&runs=at-35")  # can be passed on
    page.goto(f"{running.address}/across?runs=at-15&runs=at-25&runs=at-35")
    words = page.get_by_text("activation energy:")
    expect(words).to_be_visible(timeout=30_000)
    expect(page.get_by_text("3 temperatures leave 1 degree of freedom")).to_be_visible()
    shown = re.search(r"energy: ([\d.]+) kJ/mol \(([\d.]+) to ([\d.]+)\)", words.inner_text())
    assert shown is not None, words.inner_text()
    value, low, high = map(float, shown.groups())
    assert value == pytest.approx(dunmarolide.ACTIVATION_J_MOL / 1e3, rel=0.05)
    assert low < dunmarolide.ACTIVATION_J_MOL / 1e3 < high
    for chart in ("temperature", "overlay"):
        page.wait_for_selector(f".st-key-{chart} .main-svg", timeout=30_000)
    page.get_by_text("Eyring", exact=True).click()
    expect(page.locator(".st-key-temperature .ytitle")).to_contain_text("k/T", timeout=20_000)
    assert page.locator("img[src=x]").count() == 0


@pytest.mark.parametrize(("width", "scheme"), [(1440, "light"), (390, "dark")])
def test_fits_the_screen(
    dashboard: Callable[..., Dashboard], browser: Browser, books: Path, width: int, scheme: str
) -> None:
    running = dashboard(str(books))
    context = browser.new_context(
        viewport={"width": width, "height": 850},
        color_scheme=scheme,  # type: ignore[arg-type]
    )
    opened = context.new_page()
    opened.goto(f"{running.address}/across?runs=at-15&runs=at-25&runs=at-35")
    opened.wait_for_selector(".st-key-overlay .main-svg", timeout=60_000)
    wide = opened.evaluate("document.querySelector('[data-testid=stMain]').scrollWidth")
    context.close()
    assert wide <= width + 1
