"""The pages in a real browser: drawn, silent, and fetching nothing."""

import numpy as np
import pytest
import run_scenario as scenario
from browser import NAMES, Browser, find_chromium
from matplotlib.colors import to_rgb

import trajcage
from trajcage.analysis.cage_mesh import mesh_cage
from trajcage.analysis.cage_outline import outline_cage
from trajcage.plots import draw_figures, write_cage
from trajcage.plots.cage_picture import WINDOW
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
    flat, options = single_frame(scenario.MONOLAYER)
    write_cage(outline_cage(flat, 7, options), folder / "disk.html", "monolayer")
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


def reddish(pixels):
    """Share of pixels in the dark red of weakest windows."""
    near = np.abs(pixels - np.array(to_rgb(WINDOW))).max(axis=2) < 0.1
    return np.mean(near)


def place(browser, name):
    """Center of an element of the page, and the size of it."""
    x, y, width, height = browser.evaluate(
        "(b => [b.x, b.y, b.width, b.height])"
        f'(document.getElementById("{name}").getBoundingClientRect())'
    )
    return (x + width / 2, y + height / 2), (width, height)


def click(browser, name):
    browser.evaluate(f'document.getElementById("{name}").click()')
    browser.settle()
    return browser.screenshot()


def test_a_cage_is_drawn_and_turns(browser, pages):
    path = pages / "cage.html"
    browser.open(path, 900, 700)
    before = browser.screenshot()
    assert browser.evaluate(
        '!!document.querySelector("#view canvas").getContext("webgl2")'
    )
    assert before.std() > 0.03
    assert colored(before) > 0.02
    (x, y), (_, height) = place(browser, "view")
    # the cage itself fills the middle of its view
    middle = before[
        int(y - height / 20) : int(y + height / 20), int(x - 20) : int(x + 20)
    ]
    assert colored(middle) > 0.5
    browser.drag((x, y), (x + 120, y + 60))
    after = browser.screenshot()
    assert np.mean(np.any(after != before, axis=2)) > 0.01
    assert colored(after) > 0.02
    scale = browser.evaluate('document.getElementById("bar-text").textContent')
    assert "in the unit of the input" in scale
    assert colored(click(browser, "neighbors")) < colored(after)
    assert reddish(click(browser, "window")) < 0.7 * reddish(after)
    assert_quiet(browser, path)


def test_a_cage_of_disks_is_drawn_and_zooms(browser, pages):
    path = pages / "disk.html"
    browser.open(path, 900, 700)
    near = browser.screenshot()
    assert colored(near) > 0.02
    far = click(browser, "far")
    assert colored(far) > 0.02
    assert np.mean(np.any(far != near, axis=2)) > 0.1
    assert reddish(click(browser, "window")) < 0.7 * reddish(far)
    assert_quiet(browser, path)


def test_a_browser_without_webgl_is_told(browser, pages, tmp_path):
    path = tmp_path / "cage.html"
    without = "<script>HTMLCanvasElement.prototype.getContext = () => null;"
    path.write_text((pages / "cage.html").read_text().replace("<script>", without, 1))
    browser.open(path)
    told = browser.evaluate('document.getElementById("view").textContent')
    assert "no WebGL" in told
    assert "-o cage.png" in told


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
