"""Plain and extended XYZ, written by hand."""

import numpy as np
import pytest

from trajcage.errors import FrameError, InputError
from trajcage.readers import InputOptions, open_trajectory

ROWS = ["A 1.0 2.0 3.0", "B 4.0 5.0 6.0", "A 7.5 8.25 9.125"]


def xyz_frame(rows=ROWS, comment=""):
    return f"{len(rows)}\n{comment}\n" + "\n".join(rows) + "\n"


def open_xyz(path, text, **options):
    path.write_text(text)
    options.setdefault("diameter", 1.0)
    return open_trajectory(InputOptions(path, **options))


def test_plain_xyz_needs_a_box(tmp_path):
    with pytest.raises(InputError, match=r"no box.*--box.*--periodic none"):
        open_xyz(tmp_path / "a.xyz", xyz_frame())
    with open_xyz(tmp_path / "a.xyz", xyz_frame() * 2, box="10,11,12") as trajectory:
        assert trajectory.n_frames == 2
        frame, description = trajectory.frame(1), trajectory.describe()
    assert frame.positions.tolist() == [[1, 2, 3], [4, 5, 6], [7.5, 8.25, 9.125]]
    assert frame.box.lengths.tolist() == [10, 11, 12]
    assert (frame.step, frame.time) == (1, 1.0)
    assert description.species == {"A": 2, "B": 1}
    assert description.box_source == "Box given by the user."


def test_extended_xyz(tmp_path):
    comment = (
        'Lattice="10 0 0 3 12 0 1 0.5 14" Origin="-1 -2 -3" pbc="T F T" step=700 '
        "Time=3.5 Properties=id:I:1:radius:R:1:pos:R:3:species:S:1"
    )
    rows = ["9 0.7 1 2 3 big", "4 0.5 4 5 6 small"]
    with open_xyz(
        tmp_path / "a.extxyz", xyz_frame(rows, comment), diameter=None
    ) as trajectory:
        frame = trajectory.frame(0)
        assert trajectory.type_names == ("big", "small")
        assert trajectory.time_unit == "time"
    assert frame.ids.tolist() == [4, 9]
    assert frame.positions.tolist() == [[4, 5, 6], [1, 2, 3]]
    assert frame.radii.tolist() == [0.5, 0.7]
    assert frame.species.tolist() == [1, 0]
    assert frame.box.vectors.tolist() == [[10, 0, 0], [3, 12, 0], [1, 0.5, 14]]
    assert frame.box.origin.tolist() == [-1, -2, -3]
    assert frame.box.periodic == (True, False, True)
    assert (frame.step, frame.time) == (700, 3.5)


def test_changed_particle_number_names_the_frame(tmp_path):
    text = xyz_frame() + xyz_frame() + xyz_frame(ROWS[:2])
    with open_xyz(tmp_path / "a.xyz", text, box="10,10,10") as trajectory:
        assert trajectory.n_frames == 3
        trajectory.frame(1)
        with pytest.raises(FrameError, match=r"frame 2: expected the 3.*found 2"):
            trajectory.frame(2)


def test_truncated_file(tmp_path):
    text = xyz_frame() * 3
    with open_xyz(tmp_path / "a.xyz", text[:-25], box="10,10,10") as trajectory:
        assert trajectory.n_frames == 3
        assert trajectory.frame(1).n_particles == 3
        with pytest.raises(FrameError, match=r"frame 2.*truncated"):
            trajectory.frame(2)


def test_no_cut_changes_a_number(tmp_path):
    text = xyz_frame() * 2
    with open_xyz(tmp_path / "a.xyz", text, box="10,10,10") as trajectory:
        truth = trajectory.frame(0).positions
    for cut in range(1, len(text)):
        try:
            with open_xyz(tmp_path / "b.xyz", text[:cut], box="10,10,10") as trajectory:
                for index in range(trajectory.n_frames):
                    np.testing.assert_array_equal(
                        trajectory.frame(index).positions, truth
                    )
        except InputError:
            continue
    with pytest.raises(FrameError, match="with a line break"):
        open_xyz(tmp_path / "c.xyz", xyz_frame().rstrip(), box="10,10,10")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("hello\n", "expected a particle number, found b'hello'"),
        (xyz_frame(["A 1 2"]), "expected 4 columns, found 2|found 3"),
        (xyz_frame(["A 1 2 x3"]), "expected a number, found 'x3'"),
        (xyz_frame(comment='Lattice="1 2 3"'), "expected 9 numbers in lattice"),
        (xyz_frame(comment="Properties=species:S:1"), "Properties with pos:R:3"),
        (xyz_frame(comment='pbc="yes"'), "expected pbc="),
        ("0\n\n", "expected particles, found none"),
    ],
)
def test_what_is_wrong_is_quoted(tmp_path, text, message):
    with pytest.raises(InputError, match=message):
        open_xyz(tmp_path / "a.xyz", text, box="10,10,10")


def test_type_that_appears_later(tmp_path):
    text = xyz_frame() + xyz_frame(["A 1 2 3", "C 1 3 3", "A 3 3 3"])
    with (
        open_xyz(tmp_path / "a.xyz", text, box="10,10,10") as trajectory,
        pytest.raises(FrameError, match=r"frame 1.*types A, B.*found C"),
    ):
        trajectory.frame(1)


def test_no_box_in_the_open(tmp_path):
    with open_xyz(tmp_path / "a.xyz", xyz_frame(), periodic="none") as trajectory:
        box = trajectory.frame(0).box
        assert "bounding box" in trajectory.describe().box_source
    np.testing.assert_allclose(box.origin, [1, 2, 3])
    np.testing.assert_allclose(box.lengths, [6.5, 6.25, 6.125])
    assert box.periodic == (False, False, False)


def test_open_edges_find_the_corner_of_a_given_box(tmp_path):
    shifted = ["A -1.0 -2.0 -3.0", "B 4.0 5.0 4.0", "A 4.5 -4.25 3.125"]
    with open_xyz(tmp_path / "a.xyz", xyz_frame(), box="10,10,10", periodic="xy") as t:
        assert t.frame(0).box.origin.tolist() == [0, 0, 0]
    with open_xyz(
        tmp_path / "b.xyz", xyz_frame(shifted), box="10,10,10", periodic="xy"
    ) as t:
        assert t.frame(0).box.origin.tolist() == [-5, -5, -5]
    with pytest.raises(InputError, match="1 of 3 lie outside if it starts"):
        open_xyz(tmp_path / "c.xyz", xyz_frame(), box="10,10,8", periodic="xy")


def test_types_and_radii_of_a_topology(tmp_path):
    topology = tmp_path / "top.xyz"
    topology.write_text(
        "2\nProperties=species:S:1:pos:R:3:radius:R:1\nA 0 0 0 0.5\nB 1 1 1 0.7\n"
    )
    run = tmp_path / "run.xyz"
    run.write_text(xyz_frame(["X 1 2 3", "X 4 5 6"]) * 2)
    options = InputOptions(topology, run, box="9,9,9")
    with open_trajectory(options) as trajectory:
        frame = trajectory.frame(1)
        assert trajectory.type_names == ("A", "B")
        assert "radius column" in trajectory.describe().radii_source
    assert frame.radii.tolist() == [0.5, 0.7]
    assert frame.positions.tolist() == [[1, 2, 3], [4, 5, 6]]
    run.write_text(xyz_frame())
    with pytest.raises(InputError, match="topology has 2 particles"):
        open_trajectory(options)


def test_two_coordinates(tmp_path):
    comment = 'Lattice="10 0 0 0 12 0 0 0 1" Properties=pos:R:2:diameter:R:1'
    text = xyz_frame(["1 2 1.5", "4 5 1.0"], comment)
    with open_xyz(tmp_path / "a.xyz", text, diameter=None) as trajectory:
        frame = trajectory.frame(0)
        assert trajectory.type_names == ("A",)
    assert frame.positions.tolist() == [[1, 2], [4, 5]]
    assert frame.radii.tolist() == [0.75, 0.5]
    assert frame.box.volume == pytest.approx(120.0)


def test_one_particle_spans_no_region(tmp_path):
    with pytest.raises(InputError, match="at least two particles"):
        open_xyz(tmp_path / "a.xyz", xyz_frame(ROWS[:1]), periodic="none")


def test_box_that_leaves_the_plane(tmp_path):
    text = xyz_frame(["A 1 2 0", "A 4 5 0"])
    box = [[10, 0, 1], [0, 10, 0], [0, 0, 10]]
    with pytest.raises(InputError, match="leave the xy plane"):
        open_xyz(tmp_path / "a.xyz", text, box=box, dimensions=2)


def test_frame_without_box_after_one_with(tmp_path):
    text = xyz_frame(comment='Lattice="9 0 0 0 9 0 0 0 9"') + xyz_frame()
    with (
        open_xyz(tmp_path / "a.xyz", text) as trajectory,
        pytest.raises(FrameError, match=r"frame 1: .*no box, unlike the first"),
    ):
        trajectory.frame(1)
