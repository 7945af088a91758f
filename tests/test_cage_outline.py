"""The outline of a cage of hard disks: drawn exactly, whatever its shape."""

import io
import re

import numpy as np
import pytest
import run_scenario as scenario
import shapely
from click.testing import CliRunner
from matplotlib.image import imread

from trajcage.analysis.cage_outline import outline_cage
from trajcage.analysis.cages import CageOptions, frame_cages
from trajcage.cli import main
from trajcage.errors import FrameError, UsageError
from trajcage.lattices import lattice, lattice_sites
from trajcage.model import Box, Frame
from trajcage.run.single_frame import single_frame


def mixture(n=36, seed=4):
    """Disks of two sizes placed at random without overlap in a tilted box."""
    rng = np.random.default_rng(seed)
    box = Box.from_any([[8.0, 0.0], [1.5, 7.0]])
    positions, radii = np.zeros((0, 2)), np.zeros(0)
    while len(radii) < n:
        radius = 0.6 if len(radii) < n // 2 else 0.35
        point = rng.random(2) @ box.vectors
        apart = np.linalg.norm(box.minimum_image(point - positions), axis=1)
        if np.all(apart > radius + radii):
            positions, radii = np.vstack((positions, point)), np.append(radii, radius)
    return Frame(positions, radii, box)


def island():
    """A wide cage with a disk in its midst that no other circle reaches."""
    angle = np.linspace(0.0, 2.0 * np.pi, 24, endpoint=False)
    ring = 4.0 * np.column_stack((np.cos(angle), np.sin(angle)))
    positions = np.vstack(([2.0, 0.0], [0.0, 0.0], ring))
    return Frame(positions, np.full(26, 0.5), Box.from_any([20.0, 20.0]))


def region(frame, i):
    """The cage by general polygon operations (shapely), circles as fine polygons."""
    shifts = [
        np.array([a, b]) @ frame.box.vectors for a in (-1, 0, 1) for b in (-1, 0, 1)
    ]
    taken = []
    for shift in shifts:
        for j, position in enumerate(frame.positions):
            if j == i and not shift.any():
                continue
            center = position + shift - frame.positions[i]
            sigma = frame.radii[i] + frame.radii[j]
            if np.linalg.norm(center) - sigma < 6.0:
                taken.append(shapely.Point(center).buffer(sigma, quad_segs=150))
    around = shapely.Point(0.0, 0.0).buffer(6.0) - shapely.union_all(taken)
    parts = shapely.get_parts(around)
    return next(part for part in parts if part.covers(shapely.Point(0.0, 0.0)))


@pytest.mark.parametrize("make", [mixture, island])
def test_an_outline_is_that_of_general_polygon_operations(make):
    frame = make()
    table, _ = frame_cages(frame, CageOptions())
    n_loops = set()
    for i in np.flatnonzero(table.closed)[:3]:
        outline = outline_cage(frame, int(i))
        assert outline.area == pytest.approx(table.free_volume[i], rel=1e-9)
        assert outline.length == pytest.approx(table.free_surface[i], rel=1e-9)
        n_loops.add(len(outline.loops))
        lines = [
            np.concatenate([outline.points(arc, 200)[::-1] for arc in loop])
            for loop in outline.loops
        ]
        drawn = shapely.Polygon()
        for line in lines:
            drawn = drawn.symmetric_difference(shapely.Polygon(line).buffer(0.0))
        wanted = region(frame, i)
        assert drawn.symmetric_difference(wanted).area < 1e-3 * wanted.area
        rows = list(outline.window)
        names = sorted(table.weakest_window_neighbors[i])
        assert sorted(outline.neighbors[rows]) == names
    assert n_loops == ({1} if make is mixture else {2})


@pytest.mark.parametrize("name", ["triangular", "square"])
def test_cages_of_lattices_are_outlined(name):
    # closed forms of trajcage.lattices
    reference = lattice(name, 0.7)
    sites, vectors = lattice_sites(name, (6, 6), reference.spacing)
    frame = Frame(sites, np.full(len(sites), 0.5), Box.from_any(vectors))
    outline = outline_cage(frame, 7)
    assert outline.area == pytest.approx(reference.free_volume, rel=1e-9)
    assert outline.length == pytest.approx(reference.free_surface, rel=1e-9)


def test_what_has_no_outline_is_refused():
    frame = mixture()
    with pytest.raises(UsageError, match="ids go from 0 to 35"):
        outline_cage(frame, 36)
    alone = Frame(np.zeros((1, 2)), np.ones(1), Box.from_any([90.0, 90.0]))
    with pytest.raises(FrameError, match="is open"):
        outline_cage(alone, 0)
    space = Frame(np.zeros((1, 3)), np.ones(1), Box.from_any([9.0, 9.0, 9.0]))
    with pytest.raises(UsageError, match="lie in space"):
        outline_cage(space, 0)


def drawn_area(path):
    """Area within an SVG path of circular arcs, each cut into 100 chords."""
    total = 0.0
    for line in path.split("Z")[:-1]:
        pieces = re.findall(r"([MA])([^MA]+)", line)
        points = [np.array(pieces[0][1].split(), float)]
        for _, text in pieces[1:]:
            radius, same, *flags, x, y = (float(word) for word in text.split())
            assert same == radius
            assert flags == [0.0, 0.0, 1.0]
            start, end = points[-1], np.array([x, y])
            # a small arc of positive angle: its center lies to the right of the chord
            # as written, where y points down (SVG 1.1, implementation notes F.6)
            chord = end - start
            half = 0.5 * np.linalg.norm(chord)
            normal = np.array([-chord[1], chord[0]]) / (2.0 * half)
            center = 0.5 * (start + end) + normal * np.sqrt(
                max(radius**2 - half**2, 0.0)
            )
            first = np.arctan2(*(start - center)[::-1])
            turn = np.linspace(0.0, 2.0 * np.arcsin(min(half / radius, 1.0)), 101)[1:]
            angle = first + turn
            around = np.column_stack((np.cos(angle), np.sin(angle)))
            points += list(center + radius * around)
        x, y = np.array(points).T
        # y points down: the cage on the left, in the plane, is counterclockwise there
        total -= 0.5 * np.sum(x * np.roll(y, -1) - y * np.roll(x, -1))
    return total


def test_the_command_draws_a_disk_and_refuses_a_mesh(tmp_path):
    words = ["cage", str(scenario.MONOLAYER), "--particle", "7", "--frame", "2", "-o"]
    for form in ("html", "png", "svg"):
        done = CliRunner().invoke(main, [*words, str(tmp_path / f"cage.{form}")])
        assert done.exit_code == 0, done.output
    refused = CliRunner().invoke(main, [*words, str(tmp_path / "cage.ply")])
    assert refused.exit_code == 2
    assert "lie in a plane" in refused.stderr
    assert not (tmp_path / "cage.ply").exists()
    assert imread(io.BytesIO((tmp_path / "cage.png").read_bytes())).std() > 0.05
    frame, options = single_frame(scenario.MONOLAYER, frame=2)
    table, _ = frame_cages(frame, options)
    row = int(np.flatnonzero(frame.ids == 7)[0])
    text = (tmp_path / "cage.html").read_text()
    path = re.search(r'<path id="cage" d="([^"]+)"', text)[1]
    area = drawn_area(path) * (2.0 * frame.radii[row] / 1000.0) ** 2
    assert area == pytest.approx(table.free_volume[row], rel=1e-3)
    assert "http" not in text.replace('http-equiv="Content-Security-Policy"', "")
    for i in outline_cage(frame, 7).neighbors:
        assert f">{i}</text>" in text
