from __future__ import annotations

import shutil

import pytest
from contents import failed, make_content

from bayes_sys.report.page import page

LONG = ("n" * 70, "a name with many words that goes on and on", "<b>x</b>", "d", "e", "f", "g", "h")


@pytest.fixture(scope="module")
def browser():
    path = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
    if path is None:
        pytest.skip("no Chromium on this machine")
    api = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")
    with api.sync_playwright() as playwright:
        found = playwright.chromium.launch(executable_path=path, args=["--no-sandbox", "--disable-gpu"])
        yield found
        found.close()


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    content = make_content(LONG, n_draws=10, regressors=("intercept", "r" * 80, "heat"))
    for name, one in (("good", content), ("failed", failed(content))):
        (folder / f"{name}.html").write_text(page(one), encoding="utf-8")
    return folder


@pytest.mark.parametrize("name", ["good", "failed"])
@pytest.mark.parametrize("width", [320, 390, 768, 1200])
def test_the_page_never_scrolls_sideways(browser, pages, name, width):
    tab = browser.new_page(viewport={"width": width, "height": 800})
    complaints = []
    tab.on("console", lambda message: complaints.append(message.text))
    tab.on("pageerror", lambda error: complaints.append(str(error)))
    tab.goto((pages / f"{name}.html").as_uri())
    tab.evaluate("document.querySelectorAll('details').forEach(d => d.open = true)")
    assert tab.evaluate("document.documentElement.scrollWidth") <= width
    assert tab.evaluate("[...document.images].every(i => i.complete && i.naturalWidth > 0)")
    assert complaints == [], "the content security policy lets everything through that the page needs"
    tab.close()


@pytest.mark.parametrize("width", [390, 1200])
def test_a_badge_stays_on_one_line(browser, pages, width):
    tab = browser.new_page(viewport={"width": width, "height": 800})
    tab.goto((pages / "good.html").as_uri())
    tab.evaluate("document.querySelectorAll('.verdicts .chip').forEach(c => c.textContent = 'Surprising')")
    heights = tab.evaluate(
        "[...document.querySelectorAll('.verdicts .chip')].map(c => c.getClientRects()[0].height)"
    )
    line = 0.8 * 16 * 1.5 + 2  # font size, line height and borders of the style sheet
    assert heights and max(heights) < 1.2 * line
    tab.close()


def test_the_page_asks_for_nothing_but_itself(browser, pages):
    tab = browser.new_page()
    asked = []
    tab.on("request", lambda request: asked.append(request.url))
    tab.goto((pages / "good.html").as_uri())
    assert [url for url in asked if not url.startswith("data:")] == [(pages / "good.html").as_uri()]
    tab.close()


def test_the_banner_of_a_failed_gate_is_the_first_thing_on_the_screen(browser, pages):
    tab = browser.new_page(viewport={"width": 390, "height": 700})
    tab.goto((pages / "failed.html").as_uri())
    box = tab.locator(".banner").bounding_box()
    assert box["y"] == 0 and box["width"] == 390 and box["height"] > 100
    tab.close()
