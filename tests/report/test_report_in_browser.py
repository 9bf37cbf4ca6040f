"""The report opened from disk in Chromium, with its network switched off."""

import pytest
from browser import CHROMIUM, Browser
from made_report import bare_graph, made_content, one_tube
from small_graphs import random_tree

from ramulus.report.figures import figures
from ramulus.report.page import report_html

pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(CHROMIUM is None, reason="Chromium is not installed"),
]

SCENE = "document.getElementById('scene')"
READY = f"{SCENE}.dataset.ready === '1'"


NO_PICTURES = {"image_graph.png": "this test needs none"}


def opened(browser, html, folder):
    page = folder / "report.html"
    page.write_text(html, encoding="utf-8")
    browser.command(
        "Network.emulateNetworkConditions", offline=True, latency=0, downloadThroughput=0,
        uploadThroughput=0,
    )  # fmt: skip
    browser.open(page)


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    content = made_content()
    folder = tmp_path_factory.mktemp("page")
    with Browser(folder / "profile") as found:
        opened(found, report_html(content, *figures(content)), folder)
        found.wait_for(READY)
        yield found


def clean(browser):
    """No error on the console, and nothing asked for but the page and what it holds."""
    outside = [u for u in browser.requests if not u.startswith(("file:", "data:", "blob:"))]
    return browser.problems == [] and outside == []


def picked(browser):
    return browser.run("document.getElementById('picked').innerText")


def test_the_page_opens_without_an_error_or_a_request(browser):
    assert clean(browser), (browser.problems, browser.requests)


def test_a_segment_of_the_table_shows_its_figures_and_its_cuts(browser):
    browser.run("document.querySelector('button[data-segment=\"30\"]').click()")
    length_um = made_content().graph.segment_length_um()[30]
    assert "Segment 30" in picked(browser)
    assert f"{length_um:.3g} µm" in picked(browser)
    assert browser.run("document.querySelectorAll('#cuts canvas').length") == 3
    assert clean(browser), (browser.problems, browser.requests)


def test_the_colours_follow_the_quantity(browser):
    browser.run(
        "(() => { const c = document.getElementById('quantity'); c.value = 'flow_um3_per_s';"
        " c.dispatchEvent(new Event('change')); })()"
    )
    assert browser.run(f"{SCENE}.dataset.colour") == "flow_um3_per_s"
    assert browser.run(f"{SCENE}.data[0].colorbar.title.text") == "flow in µm³/s"
    # One segment has no flow: its colour is the grey below the scale.
    assert browser.run(f"Math.min(...{SCENE}.data[0].intensity)") < 0
    assert clean(browser), (browser.problems, browser.requests)


def test_the_picture_is_switched_to_the_image_alone_and_both_are_printed(browser):
    shown = "getComputedStyle(document.getElementById('view-{}')).display"
    assert browser.run(shown.format("image")) == "none"
    browser.run("document.querySelector('button[data-show=\"image\"]').click()")
    assert browser.run(shown.format("image")) == "block"
    assert browser.run(shown.format("image_graph")) == "none"
    browser.command("Emulation.setEmulatedMedia", media="print")
    assert browser.run(shown.format("image_graph")) == "block"
    browser.command("Emulation.setEmulatedMedia", media="")
    assert len(browser.pdf()) > 50_000


@pytest.mark.parametrize("width", [1400, 700])
def test_the_page_needs_no_scrolling_to_the_side(browser, width):
    browser.command(
        "Emulation.setDeviceMetricsOverride", width=width, height=900, deviceScaleFactor=1,
        mobile=False,
    )  # fmt: skip
    browser.wait_for(f"window.innerWidth === {width}")
    browser.wait_for(f"document.documentElement.scrollWidth <= {width}", seconds=10)


def test_a_click_on_a_vessel_shows_its_figures(tmp_path):
    content = bare_graph(made_content(), one_tube(6.0))
    with Browser(tmp_path / "profile") as browser:
        opened(browser, report_html(content, {}, NO_PICTURES), tmp_path)
        browser.wait_for(READY)
        browser.run("document.getElementById('space').scrollIntoView()")
        left, top, width, height = browser.run(
            f"(() => {{ const r = {SCENE}.getBoundingClientRect();"
            " return [r.left, r.top, r.width, r.height]; })()"
        )
        # The view turns about the vessel's middle; the colour bar takes some of the width.
        for across in (0.45, 0.5, 0.4):
            browser.click(left + across * width, top + 0.5 * height)
            if browser.run(f"{SCENE}.dataset.segment"):
                break
        browser.wait_for("document.getElementById('picked').innerText.includes('Segment 0')")
        assert clean(browser), (browser.problems, browser.requests)


@pytest.mark.slow
def test_a_hundred_thousand_segments_open_in_five_seconds(tmp_path):
    content = bare_graph(made_content(), random_tree(100_000, seed=2))
    with Browser(tmp_path / "profile") as browser:
        opened(browser, report_html(content, *figures(content)), tmp_path)
        browser.wait_for(READY, seconds=60)
        # From the start of the load to tables and pictures in place, as the browser measures it;
        # the view in space, drawn without a graphics processor here, may follow.
        load_ms = browser.run("performance.getEntriesByType('navigation')[0].loadEventEnd")
        assert load_ms < 5000
        assert "Shown are 8,000 of 100,000" in browser.run(
            "document.getElementById('note').textContent"
        )
        assert clean(browser), (browser.problems, browser.requests)
