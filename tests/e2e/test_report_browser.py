"""The pages in a real browser, opened from disk with no network."""

import json
import shutil

import pytest
from command import ROOT, TODAY, vialbook
from playwright.sync_api import sync_playwright

pytestmark = pytest.mark.browser
ATTACKS = (
    "<script>window.hacked=1</script>",
    '"><img src=x onerror=window.hacked=1>',
    "</script><script>window.hacked=1</script>",
)


@pytest.fixture(scope="module")
def browser():
    with sync_playwright() as playwright:
        opened = playwright.chromium.launch(executable_path="/usr/bin/chromium", args=["--no-sandbox", "--disable-gpu"])
        yield opened
        opened.close()


@pytest.fixture
def tab(browser):
    """A page that notes everything it should not do."""
    page = browser.new_page(viewport={"width": 1200, "height": 900})
    page.faults = []
    page.on(
        "console", lambda message: page.faults.append(message.text) if message.type in ("error", "warning") else None
    )
    page.on("pageerror", lambda error: page.faults.append(str(error)))
    page.on(
        "request",
        lambda request: (
            None if request.url.split(":")[0] in ("file", "data", "blob") else page.faults.append(request.url)
        ),
    )
    yield page
    page.close()


def show(tab, path):
    tab.goto(f"file://{path}")
    if tab.locator("#figure-data").count():
        tab.wait_for_selector("html[data-charts=drawn]", state="attached")


def pages_of(folder):
    return [folder / "index.html", folder / "compare.html", folder / "history.html", *sorted(folder.glob("scanners/*"))]


def test_every_kind_of_page_draws_without_a_fault(tab, taken_in):
    folder = taken_in[0] / "pages"
    runs = sorted(folder.glob("runs/*.html"))
    assert len(runs) == 19
    for path in [*pages_of(folder), runs[0], runs[-1]]:
        show(tab, path)
        assert tab.faults == [], path
        figures = tab.locator("#figure-data").count()
        drawn = tab.locator(".plot .main-svg").count()
        assert bool(drawn) == bool(figures), path
        assert "Not a medical device" in tab.locator("footer").inner_text()


def test_links_lead_to_pages_that_are_there(tab, taken_in):
    folder = taken_in[0] / "pages"
    for path in [*pages_of(folder), next(folder.glob("runs/*.html"))]:
        show(tab, path)
        for link in tab.eval_on_selector_all("a[href]", "all => all.map(a => a.href)"):
            if "#" not in link:
                assert (folder / link.split("/pages/")[1]).exists(), link


def test_narrow_screens_print_and_keyboard(tab, taken_in):
    folder = taken_in[0] / "pages"
    for path in [*pages_of(folder), next(folder.glob("runs/*.html"))]:
        tab.set_viewport_size({"width": 420, "height": 800})
        show(tab, path)
        assert tab.evaluate("document.documentElement.scrollWidth <= window.innerWidth + 1"), path
    tab.keyboard.press("Tab")
    assert tab.evaluate("document.activeElement.className") == "skip"
    tab.keyboard.press("Tab")
    assert tab.evaluate("document.activeElement.tagName") == "A"
    tab.emulate_media(media="print")
    assert not tab.locator("nav").is_visible()


def test_a_front_page_to_be_mailed_needs_nothing_else(tab, own_site, tmp_path):
    vialbook("report", "--single-file", "--out", tmp_path / "out", "--today", TODAY, site=own_site)
    alone = tmp_path / "alone"
    alone.mkdir()
    shutil.copy(tmp_path / "out" / "index.html", alone)
    show(tab, alone / "index.html")
    assert tab.locator(".plot .main-svg").count() > 0
    assert tab.locator("a[href]:not(.skip)").count() == 0
    assert tab.faults == []


def test_hostile_names_stay_inert_and_are_shown_as_they_are(tab, fresh_site):
    toml = fresh_site / "site.toml"
    text = toml.read_text(encoding="utf-8")
    for name, attack in zip(("Quay east", "Tideline A", "Saltmarsh relaxometry study"), ATTACKS, strict=True):
        text = text.replace(f'"{name}"', json.dumps(attack))
    toml.write_text(text, encoding="utf-8")
    (fresh_site / "temperatures.csv").unlink()
    incoming = ROOT / "sample_site" / "incoming" / "2026-09-29-quay-east-tideline-a"
    vialbook("log", "service", ATTACKS[1], "--scanner", ATTACKS[0], "--at", "2026-09-28", site=fresh_site)
    vialbook("ingest", incoming, "--today", TODAY, site=fresh_site, codes=(0, 1))
    folder = fresh_site / "pages"
    for path in [*pages_of(folder), next(folder.glob("runs/*.html"))]:
        show(tab, path)
        assert tab.evaluate("window.hacked") is None, path
        assert tab.faults == [], path
        assert ATTACKS[0] in tab.locator("body").inner_text()
