"""The page Now in a real browser, on a run that is being played."""

from collections.abc import Callable

import pytest
from playwright.sync_api import Browser, Page

from tests.browser.conftest import Dashboard, eventually

pytestmark = pytest.mark.browser

TREND = ".st-key-trend .chart"


def points(page: Page) -> int:
    """Number of points of the first species on the trend."""
    return int(
        page.evaluate(
            """s => { const c = document.querySelector(s);
            if (!c || !c._fullData) return 0;
            return c._fullData.filter(t => t.mode === 'markers')
                .reduce((n, t) => n + (t._length || 0), 0); }""",
            TREND,
        )
    )


def visible_range(page: Page) -> list[float]:
    found = page.evaluate("s => document.querySelector(s).layout.xaxis.range", TREND)
    return [float(v) for v in found]


def span(limits: list[float]) -> float:
    return limits[1] - limits[0]


def test_zoom_survives_new_spectra(dashboard: Callable[..., Dashboard], page: Page) -> None:
    """Drag a zoom on the trend, wait for two spectra: zoom kept, points more, k on the page."""
    running = dashboard("demo", "--pace", "1.2", "--count", "60")
    page.goto(running.address)
    page.wait_for_selector(f"{TREND} .main-svg", timeout=60_000)
    eventually(lambda: points(page) >= 12)
    whole = visible_range(page)
    box = page.locator(".st-key-trend .nsewdrag").first.bounding_box()
    assert box is not None
    y = box["y"] + box["height"] / 2
    page.mouse.move(box["x"] + 0.30 * box["width"], y)
    page.mouse.down()
    page.mouse.move(box["x"] + 0.65 * box["width"], y, steps=8)
    page.mouse.up()
    eventually(
        lambda: visible_range(page)[1] - visible_range(page)[0] < 0.6 * (whole[1] - whole[0])
    )
    zoomed, before = visible_range(page), points(page)
    eventually(lambda: points(page) >= before + 4)  # two spectra, two species
    assert visible_range(page) == pytest.approx(zoomed)
    answers = page.locator(".kw-answers").inner_text()
    assert "How fast?" in answers
    assert "s⁻¹" in answers
    assert page.locator("[data-title*='plotly'], .modebar-btn[data-title*='loud']").count() == 0


def test_k_settles_near_the_truth(dashboard: Callable[..., Dashboard], page: Page) -> None:
    """The demo's true k (demo_runs/README.md) lies near what the page shows in the end."""
    from demo_runs.dunmarolide import K_25C

    running = dashboard("demo", "--pace", "0.05", "--count", "60")
    page.goto(running.address)
    page.wait_for_selector(f"{TREND} .main-svg", timeout=60_000)
    eventually(lambda: points(page) >= 118, 90)
    text = page.locator(".kw-answer .a").first.inner_text()
    shown = float(text.split("=")[1].split("×")[0])
    assert shown * 1e-4 == pytest.approx(K_25C, rel=0.03)


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [1440, 390])
def test_fits_every_screen(
    dashboard: Callable[..., Dashboard], browser: Browser, width: int, scheme: str
) -> None:
    """Nothing sticks out sideways, on a bench monitor or a phone, in light or dark."""
    running = dashboard("demo", "--pace", "0.05", "--count", "8")
    context = browser.new_context(
        viewport={"width": width, "height": 850},
        color_scheme=scheme,  # type: ignore[arg-type]
    )
    opened = context.new_page()
    opened.goto(running.address)
    opened.wait_for_selector(f"{TREND} .main-svg", timeout=60_000)
    wide = opened.evaluate("document.querySelector('[data-testid=stMain]').scrollWidth")
    assert wide <= width + 1
    context.close()
