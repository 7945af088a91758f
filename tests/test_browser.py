"""The pages in a real browser: drawn, silent, and fetching nothing."""

import numpy as np
import pytest
import run_scenario as scenario
from browser import NAMES, Browser, find_chromium

import trajcage
from trajcage.analysis.cage_mesh import mesh_cage
from trajcage.plots import draw_figures, write_cage
from trajcage.plots.report import report_page
from trajcage.run.single_frame import single_frame

pytestmark = pytest.mark.skipif(
    find_chromium() is None,
    reason=f"no browser: none of {', '.join(NAMES)} on the PATH, nor in CHROMIUM",
)


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    opened = Browser(find_chromium(), tmp_path_factory.mktemp("profile"))
    yield opened
    opened.close()


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    frames = [scenario.shaken(seed) for seed in range(4)]
    source = scenario.write_gsd(folder / "shaken.gsd", frames)
    frame, options = single_frame(source)
    write_cage(mesh_cage(frame, 13, options), folder / "cage.html", "shaken.gsd")
    path = folder / "shaken.h5"
    trajcage.measure(source, output=path, store_positions=True).close()
    with trajcage.open_result(path) as result:
        figures = draw_figures(result, ["free-volume", "slice", "regions"])
        (folder / "report.html").write_text(report_page(result, figures), "utf-8")
    return folder


def assert_quiet(browser, path):
    """The page itself is the only thing that was asked for, embedded data aside."""
    asked = [url for url in browser.requests if not url.startswith("data:")]
    assert asked == [path.as_uri()]
    assert browser.complaints == []


def colored(pixels):
    """Share of pixels that are neither white, gray nor black."""
    return np.mean(np.ptp(pixels, axis=2) > 0.08)


def test_a_cage_is_drawn_and_turns(browser, pages):
    path = pages / "cage.html"
    browser.open(path)
    before = browser.screenshot()
    assert before.std() > 0.03
    assert colored(before) > 0.02
    x, y, width, height = browser.evaluate(
        "(b => [b.x, b.y, b.width, b.height])"
        '(document.getElementById("view").getBoundingClientRect())'
    )
    center = (x + width / 2, y + height / 2)
    browser.drag(center, (center[0] + 120, center[1] + 60))
    after = browser.screenshot()
    assert np.mean(np.any(after != before, axis=2)) > 0.01
    assert colored(after) > 0.02
    browser.evaluate('document.getElementById("neighbors").click()')
    browser.settle()
    assert colored(browser.screenshot()) < colored(after)
    assert_quiet(browser, path)


@pytest.mark.parametrize("width", [1280, 400])
def test_a_report_is_drawn_and_fits_the_window(browser, pages, width):
    path = pages / "report.html"
    browser.open(path, width)
    shown = browser.screenshot(whole=True)
    assert shown.std() > 0.05
    assert colored(shown) > 0.01
    # every picture is decoded, and nothing sticks out of the window
    assert browser.evaluate(
        "[...document.images].every(i => i.complete && i.naturalWidth > 100)"
    )
    assert browser.evaluate("document.images.length") == 3
    assert browser.evaluate("document.documentElement.scrollWidth") <= width
    headings = browser.evaluate(
        '[...document.querySelectorAll("h2")].map(h => h.textContent)'
    )
    assert headings[0] == "Warnings"
    assert_quiet(browser, path)


def test_the_browser_would_tell_of_requests_and_errors(browser, tmp_path):
    path = tmp_path / "noisy.html"
    path.write_text(
        '<img src="missing.png"><script>console.error("no"); undefined_name();</script>'
    )
    browser.open(path)
    assert (tmp_path / "missing.png").as_uri() in browser.requests
    assert len(browser.complaints) >= 2
    assert browser.screenshot().std() < 0.03
