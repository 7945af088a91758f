"""The triangulated wall of a cage against closed forms, distances, and its files."""

import io
from html.parser import HTMLParser

import numpy as np
import pytest
import run_scenario as scenario
from click.testing import CliRunner
from matplotlib.image import imread

import trajcage
from trajcage.analysis.cage_mesh import mesh_cage
from trajcage.analysis.cages import frame_cages
from trajcage.cli import main
from trajcage.errors import FrameError, InputError, ResultFileError, UsageError
from trajcage.lattices import lattice, lattice_sites
from trajcage.model import Box, Frame
from trajcage.run.single_frame import single_frame


def call(*words, code=0):
    done = CliRunner().invoke(main, [str(word) for word in words])
    assert done.exit_code == code, done.output
    return done


def crystal(name, packing_fraction, repeats=(4, 4, 4)):
    reference = lattice(name, packing_fraction)
    sites, vectors = lattice_sites(name, repeats, reference.spacing)
    box = Box(vectors, np.zeros(3), (True, True, True))
    return reference, Frame(sites, np.full(len(sites), 0.5), box)


def mixture(n=60, seed=3):
    """Spheres of two sizes, placed at random without overlap, in a tilted box."""
    rng = np.random.default_rng(seed)
    box = Box(
        np.array([[4.2, 0.0, 0.0], [1.0, 4.0, 0.0], [-0.6, 0.8, 4.1]]),
        np.array([1.0, -2.0, 0.5]),
        (True, True, True),
    )
    positions, radii = np.zeros((0, 3)), np.zeros(0)
    for k in range(n):
        radius = 0.5 if k < 30 else 0.35
        while True:
            point = box.origin + rng.random(3) @ box.vectors
            apart = np.linalg.norm(box.minimum_image(point - positions), axis=1)
            if np.all(apart > radius + radii):
                break
        positions = np.vstack((positions, point))
        radii = np.append(radii, radius)
    return Frame(positions, radii, box)


@pytest.mark.parametrize(
    ("name", "packing_fraction"),
    [("fcc", 0.6), ("sc", 0.45), ("sc", 0.25), ("bcc", 0.4), ("fcc", 0.7404)],
)
def test_volume_and_area_converge_to_those_of_lattice_cages(name, packing_fraction):
    # closed forms and integrals of trajcage.lattices; flat triangles on a sphere are
    # wrong by the square of their size (differential geometry)
    reference, frame = crystal(name, packing_fraction)
    for fineness in (3.0, 12.0):
        mesh = mesh_cage(frame, 0, fineness=fineness)
        bound = 0.4 / fineness**2
        assert mesh.area == pytest.approx(reference.free_surface, rel=bound)
        assert mesh.volume == pytest.approx(reference.free_volume, rel=0.2 * bound)
    assert mesh.volume == pytest.approx(reference.free_volume, rel=1e-5)


def closed_cages(frame, n):
    """The largest closed cages and others."""
    table, _ = frame_cages(frame, trajcage.analysis.cages.CageOptions(), windows=True)
    closed = np.flatnonzero(table.closed)
    order = closed[np.argsort(-table.free_volume[closed])]
    return table, np.unique(order[np.linspace(0, len(order) - 1, n).astype(int)])


def glass():
    # spheres of two sizes on sites of a crystal, shaken
    _, frame = crystal("fcc", 0.5, (3, 3, 3))
    rng = np.random.default_rng(2)
    radii = np.where(rng.random(len(frame.radii)) < 0.5, 0.5, 0.42)
    step = rng.uniform(-0.03, 0.03, frame.positions.shape)
    return Frame(frame.positions + step, radii, frame.box)


@pytest.mark.parametrize(
    ("frame", "n"),
    [(mixture(), 8), (mixture(40, 5), 6), (glass(), 6)],
    ids=["mixture", "fluid", "glass"],
)
def test_meshes_are_closed_and_hold_the_free_volume(frame, n):
    table, chosen = closed_cages(frame, n)
    assert len(chosen) == n
    for i in chosen:
        mesh = mesh_cage(frame, int(frame.ids[i]))
        assert mesh.free_volume == pytest.approx(table.free_volume[i], rel=1e-9)
        assert mesh.volume == pytest.approx(table.free_volume[i], rel=1e-3)
        assert mesh.area == pytest.approx(table.free_surface[i], rel=0.01)
        own = slice(*table.walls.offsets[i : i + 2])
        areas = np.bincount(mesh.patch, triangle_areas(mesh), len(mesh.neighbors))
        assert areas == pytest.approx(
            table.walls.areas[own], rel=0.02, abs=2e-3 * mesh.free_surface
        )
        # each side belongs to two triangles that run along it in opposite directions
        sides = mesh.triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2)
        counts = np.unique(sides, axis=0, return_counts=True)[1]
        assert counts.max() == 1
        back = np.unique(np.concatenate((sides, sides[:, ::-1])), axis=0)
        assert len(back) == len(sides)


def triangle_areas(mesh):
    a, b, c = np.swapaxes(mesh.vertices[mesh.triangles], 0, 1)
    return 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1)


def test_every_vertex_is_a_place_where_the_particle_touches():
    frame = mixture()
    shifts = (np.array(list(np.ndindex(5, 5, 5))) - 2) @ frame.box.vectors
    for i in (0, 45):
        mesh = mesh_cage(frame, i, fineness=8.0)
        centers = (frame.positions[:, None] - frame.positions[i] + shifts).reshape(
            -1, 3
        )
        sizes = np.repeat(frame.radii + frame.radii[i], len(shifts))
        itself = np.linalg.norm(centers, axis=1) < 1e-9
        extent = np.linalg.norm(mesh.vertices, axis=1).max()
        near = ~itself & (np.linalg.norm(centers, axis=1) - sizes < extent)
        centers, sizes = centers[near], sizes[near]
        apart = np.linalg.norm(mesh.vertices[:, None] - centers, axis=2) - sizes
        depth = apart.min(axis=1)
        edge = mesh.free_volume ** (1 / 3) / 8.0
        # within the depth of a triangle of a wall; where walls meet, on all of them
        touching = np.sum(np.abs(apart) < 1e-9, axis=1)
        assert np.abs(depth).max() < edge**2
        assert np.count_nonzero(touching >= 2) > 50
        assert np.count_nonzero(touching >= 3) >= len(mesh.neighbors)
        assert depth.min() > -1e-9


def test_the_weakest_window_is_that_of_the_table():
    frame = mixture()
    table, _ = frame_cages(frame, trajcage.analysis.cages.CageOptions())
    for i in (0, 7, 45):
        mesh = mesh_cage(frame, i, fineness=6.0)
        rows = list(mesh.window)
        wanted = sorted(table.weakest_window_neighbors[i])
        assert sorted(mesh.neighbors[rows]) == wanted
        assert mesh.weakest_window == table.weakest_window[i]
        to_corner = np.linalg.norm(mesh.vectors[rows] - mesh.window_corner, axis=1)
        assert to_corner == pytest.approx(mesh.radius + mesh.radii[rows])


def test_what_has_no_wall_is_refused():
    _, frame = crystal("sc", 0.3)
    with pytest.raises(UsageError, match="ids go from 0 to 63"):
        mesh_cage(frame, 64)
    with pytest.raises(UsageError, match="between 1 and 100"):
        mesh_cage(frame, 0, fineness=0.5)
    _, dilute = crystal("sc", 0.1)
    with pytest.raises(FrameError, match="is open"):
        mesh_cage(dilute, 0)
    flat = Frame(np.zeros((1, 2)), np.ones(1), Box.from_any([9.0, 9.0]))
    with pytest.raises(UsageError, match="in a plane"):
        mesh_cage(flat, 0)


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("cage")
    frames = [scenario.shaken(seed) for seed in range(3)]
    source = scenario.write_gsd(folder / "shaken.gsd", frames)
    stored, bare = folder / "stored.h5", folder / "bare.h5"
    trajcage.measure(source, output=stored, step=2, store_positions=True).close()
    trajcage.measure(source, output=bare, stop=1, skip=["time", "order"]).close()
    return source, stored, bare


def test_a_result_file_gives_the_cage_of_its_trajectory(files):
    source, stored, bare = files
    meshes = []
    for path in (source, stored):
        frame, options = single_frame(path, frame=2)
        meshes.append(mesh_cage(frame, 5, options))
    assert np.array_equal(meshes[0].vertices, meshes[1].vertices)
    with trajcage.open_result(stored) as result:
        assert meshes[1].free_volume == result["free_volume"][1, 5]
    with pytest.raises(InputError, match="does not hold frame 1"):
        single_frame(stored, frame=1)
    with pytest.raises(UsageError, match="dt belongs to a trajectory"):
        single_frame(stored, dt=2.0)
    with pytest.raises(ResultFileError, match="--store-positions"):
        single_frame(bare)


class Page(HTMLParser):
    def __init__(self):
        super().__init__()
        self.sources, self.text = [], []

    def handle_starttag(self, tag, attributes):
        assert tag not in ("link", "iframe", "object")
        self.sources += [v for k, v in attributes if k in ("src", "href", "srcset")]

    def handle_data(self, data):
        self.text.append(data)


def test_the_command_writes_page_mesh_and_picture(files, tmp_path):
    source, stored, _ = files
    words = ("cage", stored, "--particle", 5, "--frame", 2, "--fineness", 5)
    page, ply, png = (tmp_path / f"cage.{form}" for form in ("html", "ply", "png"))
    for path in (page, ply, png):
        call(*words, "-o", path)
    text = page.read_text()
    parsed = Page()
    parsed.feed(text)
    assert parsed.sources == []
    text = text.replace("http://www.w3.org/1999/xhtml", "")  # a name, never fetched
    assert "http:" not in text
    assert "https:" not in text
    assert "default-src 'none'" in text
    assert "Cage of particle 5" in "".join(parsed.text)
    assert imread(io.BytesIO(png.read_bytes())).std() > 0.05
    lines = ply.read_text().splitlines()
    counts = [int(line.split()[-1]) for line in lines if line.startswith("element")]
    body = lines[lines.index("end_header") + 1 :]
    assert len(body) == sum(counts)
    vertices = np.array([line.split() for line in body[: counts[0]]], float)
    faces = np.array([line.split() for line in body[counts[0] :]], int)
    a, b, c = np.swapaxes(vertices[faces[:, 1:4]], 0, 1)
    with trajcage.open_result(stored) as result:
        volume = result["free_volume"][1, 5]
    assert np.sum(a * np.cross(b, c)) / 6.0 == pytest.approx(volume, rel=0.02)
    assert "--overwrite" in call(*words, "-o", page, code=1).stderr
    assert ".html, .ply" in call(*words, "-o", tmp_path / "c.obj", code=2).stderr
    call("cage", source, "--particle", 99, "-o", tmp_path / "x.ply", code=2)
