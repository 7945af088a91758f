"""Figures and reports: nothing blank, clipped, invented, or fetched from elsewhere."""

import base64
import io
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
import run_scenario as scenario
from click.testing import CliRunner
from matplotlib.image import imread

import trajcage
from trajcage.analysis.time_options import TimeOptions
from trajcage.cli import main
from trajcage.errors import ResultFileError, UsageError
from trajcage.model import Box
from trajcage.plots import FIGURES, FORMATS, draw_figures, write_figures
from trajcage.plots.distributions import quantiles
from trajcage.plots.report import report_page
from trajcage.plots.saving import figure_bytes
from trajcage.plots.slices import cut
from trajcage.plots.style import PALETTE

SCRIPTS = Path(__file__).parents[1] / "scripts"
WANTED = {"space": list(FIGURES), "plane": ["lattices", "pressure", "windows", "slice"]}
TIME_UNIT = "$<b>&"  # neither mathematics nor markup


def call(*words, code=0):
    done = CliRunner().invoke(main, [str(word) for word in words])
    assert done.exit_code == code, done.output
    return done


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    """Result files: in space, in the plane, of a mixture, and without much."""
    folder = tmp_path_factory.mktemp("plots")
    frames = [scenario.shaken(seed) for seed in range(12)]
    space = scenario.write_gsd(folder / "space.gsd", frames)
    sizes = folder / "diameters.txt"
    sizes.write_text("".join(f"{1.3 + 0.06 * (k % 2)}\n" for k in range(27)))
    often = TimeOptions(origin_interval=1)
    runs = {
        "space": ((space,), {"time_unit": TIME_UNIT, "time_analysis": often}),
        "plane": ((scenario.MONOLAYER,), {"stop": 3}),
        "mixture": ((space,), {"stop": 2, "diameter": f"@{sizes}"}),
        "bare": (
            (space,),
            {"stop": 1, "skip": ["time", "order", "rattlers"]},
        ),
    }
    paths = {}
    for name, (inputs, options) in runs.items():
        paths[name] = folder / f"{name}.h5"
        store = name != "bare"
        trajcage.measure(
            *inputs, output=paths[name], store_positions=store, **options
        ).close()
    return paths


@pytest.fixture(scope="module")
def drawn(results):
    found = {}
    for name, chosen in WANTED.items():
        with trajcage.open_result(results[name]) as result:
            found[name] = draw_figures(result, chosen)
    return found


@pytest.fixture(scope="module")
def page(results, drawn):
    with trajcage.open_result(results["space"]) as result:
        return report_page(result, drawn["space"])


@pytest.mark.parametrize("name", ["space", "plane"])
def test_every_figure_is_a_picture_with_nothing_clipped(drawn, name):
    figures = drawn[name]
    assert list(figures.drawn) == WANTED[name]
    assert figures.missing == {}
    for drawing in figures.drawn.values():
        pixels = imread(io.BytesIO(figure_bytes(drawing, "png", 60.0)))[..., :3]
        assert pixels.std() > 0.05
        # something is drawn in every quarter of its height
        assert all(part.std() > 0.01 for part in np.array_split(pixels, 4))
        figure = drawing.figure
        width, height = figure.get_size_inches() * figure.dpi
        title, caption = (text.get_window_extent() for text in figure.texts[:2])
        for extent in [title, caption, *(a.get_tightbbox() for a in figure.axes)]:
            assert extent.x0 >= 0.0, drawing.title
            assert extent.y0 >= 0.0, drawing.title
            assert extent.x1 <= width, drawing.title
            assert extent.y1 <= height, drawing.title
        for axes in figure.axes:
            assert not axes.get_tightbbox().overlaps(caption), drawing.title
            assert not axes.get_tightbbox().overlaps(title), drawing.title


def test_captions_tell_particles_frames_unit_and_what_was_left_out(drawn):
    for figures in drawn.values():
        for drawing in figures.drawn.values():
            assert "particles, " in drawing.caption
            assert "mean diameter D = 1." in drawing.caption
    caption = drawn["space"].drawn["free-volume"].caption
    assert "27 particles, 12 frames" in caption
    assert "All 324 cages are closed; none was left out." in caption


def test_the_distribution_is_that_of_the_particles(results, drawn):
    with trajcage.open_result(results["space"]) as result:
        volumes = np.asarray(result["free_volume"]).ravel() / 1.3**3
    axes = drawn["space"].drawn["free-volume"].figure.axes[0]
    stairs = axes.patches[0].get_data()
    counts, _ = np.histogram(volumes, stairs.edges)
    density = counts / len(volumes) / np.diff(np.log10(stairs.edges))
    assert np.sum(stairs.values * np.diff(np.log10(stairs.edges))) == pytest.approx(1.0)
    assert stairs.values == pytest.approx(density)


def test_window_figure_counts_every_closed_cage(results, drawn):
    with trajcage.open_result(results["plane"]) as result:
        ratios = np.asarray(result["weakest_window"]).ravel()
    stairs = drawn["plane"].drawn["windows"].figure.axes[0].patches[0].get_data()
    counts, _ = np.histogram(ratios, stairs.edges)
    assert stairs.values == pytest.approx(counts / len(ratios) / 0.005)


def test_quantiles_of_a_logarithmic_histogram():
    edges = 10.0 ** np.linspace(-3.0, 0.0, 31)
    counts = np.ones(30)  # even in the logarithm: quantiles are powers
    assert quantiles(edges, counts, (0.0, 0.5, 0.9)) == pytest.approx(
        [1e-3, 10**-1.5, 10**-0.3]
    )


@pytest.mark.parametrize("periodic", ["xyz", "xy", "z", "none"])
def test_a_cut_shows_what_is_inside_particles(periodic):
    # against the distances in space to all images, in a tilted box
    rng = np.random.default_rng(5)
    vectors = np.array([[6.0, 0.3, 0.2], [1.5, 5.0, -0.4], [-1.0, 0.8, 4.0]])
    box = Box.from_any(vectors, periodic=periodic, origin=[0.5, -1.0, 2.0])
    positions = box.origin + rng.random((60, 3)) @ vectors
    radii = rng.uniform(0.2, 0.6, 60)
    found = cut(positions, radii, box)
    share = rng.random((4000, 2))
    points = box.origin + np.c_[share, np.full(len(share), 0.5)] @ vectors
    shifts = np.array(
        [
            s
            for s in np.ndindex(3, 3, 3)
            if all(k == 1 or p for k, p in zip(s, box.periodic, strict=True))
        ]
    )
    images = positions[:, None] + (shifts - 1.0) @ vectors
    apart = np.linalg.norm(points[:, None, None] - images, axis=-1)
    inside = np.any(apart < radii[:, None], axis=(1, 2))
    edges = found.outline[[1, 3]]
    flat = np.linalg.norm((share @ edges)[:, None] - found.centers, axis=-1)
    assert np.array_equal(np.any(flat < found.radii, axis=1), inside)
    assert 0.1 < inside.mean() < 0.9
    assert np.linalg.norm(edges, axis=1) == pytest.approx(box.lengths[:2])


def test_the_slice_is_that_of_the_frame_chosen(results, tmp_path):
    with trajcage.open_result(results["space"]) as result:
        figures = draw_figures(result, ["slice"], frame=4)
        expected = cut(np.asarray(result["position"][4]), result.radii, result.box(4))
        with pytest.raises(UsageError, match=r"not hold frame 12.* frames 0 to 11$"):
            draw_figures(result, frame=12)
        with pytest.raises(UsageError, match="not among the figures chosen: regions"):
            draw_figures(result, ["regions"], frame=4)
    figure = figures.drawn["slice"].figure
    assert figure.texts[0].get_text() == "Slice through frame 4"
    for axes in figure.axes[:2]:
        places = axes.collections[0].get_offsets()
        assert places == pytest.approx(expected.centers / 1.3)
    done = call("plot", results["plane"], "-o", tmp_path, "--frame", -1, code=2)
    assert "does not hold frame -1; choose among frames 0 to 2" in done.stderr
    page = tmp_path / "report.html"
    call("report", results["plane"], "-o", page, "--frame", 7, code=2)
    assert not page.exists()


def test_frames_left_out_of_a_run_are_not_offered(tmp_path):
    path = tmp_path / "every-third.h5"
    trajcage.measure(
        scenario.MONOLAYER,
        output=path,
        stop=7,
        step=3,
        skip=["time", "order", "rattlers"],
        store_positions=True,
    ).close()
    with trajcage.open_result(path) as result:
        title = draw_figures(result, ["slice"], frame=3).drawn["slice"].title
        assert title == "Map of frame 3"
        with pytest.raises(UsageError, match="frames 0 to 6 in steps of 3"):
            draw_figures(result, ["slice"], frame=1)


def test_colors_differ_for_every_eye():
    # Simulated protanopia, deuteranopia and tritanopia: Machado, Oliveira & Fernandes
    # 2009, IEEE Trans. Vis. Comput. Graph. 15, 1291, matrices from memory. Ten units
    # of CIELAB are seen at a glance (common practice).
    kinds = [
        np.eye(3),
        [[0.152, 1.053, -0.205], [0.115, 0.786, 0.099], [-0.004, -0.048, 1.052]],
        [[0.367, 0.861, -0.228], [0.280, 0.673, 0.047], [-0.012, 0.043, 0.969]],
        [[1.256, -0.077, -0.179], [-0.078, 0.931, 0.148], [0.005, 0.691, 0.304]],
    ]
    rgb = np.array([[int(c[k : k + 2], 16) / 255 for k in (1, 3, 5)] for c in PALETTE])
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    for kind in kinds:
        seen = np.clip(linear @ np.transpose(kind), 0.0, 1.0)
        x, y, z = np.cbrt(seen @ to_xyz.T / [0.9505, 1.0, 1.089] + 1e-9).T
        lab = np.stack((116 * y, 500 * (x - y), 200 * (y - z)), axis=1)
        apart = np.linalg.norm(lab[:, None] - lab, axis=-1)
        assert apart[np.triu_indices(len(lab), 1)].min() > 25.0


def test_a_figure_without_data_says_why_and_is_listed_last(results, tmp_path):
    done = call("plot", results["bare"], "-o", tmp_path / "figures")
    lines = done.stderr.splitlines()
    made = {line.split("/")[-1] for line in lines if line.startswith("wrote ")}
    assert made == {f.name for f in (tmp_path / "figures").iterdir()}
    assert "free-volume.png" in made
    left_out = [line for line in lines if line.startswith("left out ")]
    assert lines[-len(left_out) :] == left_out
    told = "\n".join(left_out)
    assert "left out slice: the file holds no positions" in told
    for name in ("regions", "survival", "correlations", "rattlers"):
        assert f"left out {name}: " in told
        assert "--skip time" in told


def test_a_chosen_figure_that_cannot_be_drawn_is_an_error(results, tmp_path):
    out = tmp_path / "figures"
    done = call("plot", results["bare"], "-o", out, "--only", "slice", code=1)
    assert "--store-positions" in done.stderr
    assert not out.exists()
    done = call("plot", results["bare"], "-o", out, "--only", "slcie", code=2)
    assert "choose among free-volume" in done.stderr


@pytest.mark.parametrize("form", FORMATS)
def test_formats_and_overwriting(results, tmp_path, form):
    words = ("plot", results["mixture"], "-o", tmp_path, "--only", "rattlers")
    path = tmp_path / f"rattlers.{form}"
    call(*words, "--format", form)
    head = {"png": b"\x89PNG", "svg": b"<?xml", "pdf": b"%PDF"}[form]
    before = path.read_bytes()
    assert before.startswith(head)
    assert "--overwrite" in call(*words, "--format", form, code=1).stderr
    call(*words, "--format", form, "--overwrite")
    assert path.read_bytes() == before  # same data, same figure


def test_mixtures_stand_beside_an_equation_for_mixtures(results):
    with trajcage.open_result(results["mixture"]) as result:
        figures = draw_figures(result, ["pressure", "lattices"])
    axes = figures.drawn["pressure"].figure.axes[0]
    labels = axes.get_legend_handles_labels()[1]
    assert any("mansoori" in label for label in labels)
    assert len(labels) == 2


def test_unusable_calls_are_refused(results, tmp_path):
    with trajcage.open_result(results["bare"]) as result:
        with pytest.raises(UsageError, match="png, svg, pdf"):
            write_figures(result, tmp_path, form="gif")
        blocked = tmp_path / "file"
        blocked.write_text("")
        with pytest.raises(ResultFileError, match="cannot write"):
            write_figures(result, blocked / "figures", ["free-volume"])


class Page(HTMLParser):
    """What a browser would load, and the text that it would show."""

    def __init__(self):
        super().__init__()
        self.links, self.tags, self.images, self.text = [], [], [], []

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        for name, value in attributes:
            if name in ("src", "href", "srcset", "action", "data", "poster"):
                (self.images if tag == "img" else self.links).append(value)

    def handle_data(self, data):
        self.text.append(data)


def test_the_report_is_one_page_that_loads_nothing(page, drawn):
    parsed = Page()
    parsed.feed(page)
    assert parsed.links == []
    assert not {"script", "link", "iframe", "object", "base"} & set(parsed.tags)
    assert "default-src 'none'" in page
    assert "@import" not in page
    assert "url(" not in page
    assert len(parsed.images) == len(drawn["space"].drawn)
    for source in parsed.images:
        kind, _, data = source.partition(";base64,")
        head = {"data:image/png": b"\x89PNG", "data:image/svg+xml": b"<?xml"}[kind]
        assert base64.b64decode(data, validate=True).startswith(head)
    assert len(page.encode()) < 5_000_000


def test_the_report_tells_what_the_file_tells(page, results):
    parsed = Page()
    parsed.feed(page)
    text = " ".join(parsed.text)
    with trajcage.open_result(results["space"]) as result:
        summary, parameters = result.summary, result.parameters
        for name in summary["observables"]:
            assert name in text
        for name in parameters["options"]:
            assert name in text
        for entry in parameters["inputs"]:
            assert str(entry["sha256"]) in text
        for row in summary["equations_of_state"]:
            assert row["source"] in text
    assert TIME_UNIT in text  # shown as text, not taken as markup
    assert page.index("<h2>Warnings</h2>") < page.index("<h2>What was measured</h2>")


def test_the_report_command_warns_of_what_is_missing(results, tmp_path):
    path = tmp_path / "report.html"
    call("report", results["bare"], "-o", path)
    text = path.read_text()
    assert "No figure slice" in text
    assert "--skip time" in text
    assert "--overwrite" in call("report", results["bare"], "-o", path, code=1).stderr


@pytest.mark.parametrize("name", ["plot_with_h5py", "plot_with_library"])
def test_short_scripts_draw_from_a_result_file(results, tmp_path, name):
    path = tmp_path / "figure.png"
    subprocess.run(
        [sys.executable, SCRIPTS / f"{name}.py", results["plane"], path], check=True
    )
    assert imread(path).std() > 0.05
