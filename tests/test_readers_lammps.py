"""LAMMPS dumps and data files: numbers worked out from the LAMMPS manual's formulas."""

import MDAnalysis
import numpy as np
import pytest

from trajcage.errors import FrameError, InputError
from trajcage.readers import InputOptions, open_trajectory


def dump_frame(
    rows, columns="id type x y z", *, step=0, bounds=None, head="pp pp pp", n=None
):
    bounds = bounds or ["0 10", "0 10", "0 10"]
    lines = [
        "ITEM: TIMESTEP",
        str(step),
        "ITEM: NUMBER OF ATOMS",
        str(len(rows) if n is None else n),
        f"ITEM: BOX BOUNDS {head}",
        *bounds,
        f"ITEM: ATOMS {columns}",
        *rows,
    ]
    return "\n".join(lines) + "\n"


def write(path, *frames):
    path.write_text("".join(frames))
    return path


def open_dump(path, **options):
    options.setdefault("diameter", 1.0)
    return open_trajectory(InputOptions(path, **options))


def test_scaled_coordinates_with_a_shifted_corner(tmp_path):
    # x = lo + xs (hi - lo): 5 + 10 (0.2, 0.3, 0.4) = (7, 8, 9).
    path = write(
        tmp_path / "a.dump",
        dump_frame(["1 1 0.2 0.3 0.4"], "id type xs ys zs", bounds=["5 15"] * 3),
    )
    with open_dump(path) as trajectory:
        frame = trajectory.frame(0)
    np.testing.assert_allclose(frame.positions, [[7, 8, 9]], rtol=1e-15)
    np.testing.assert_array_equal(frame.box.origin, [5, 5, 5])
    np.testing.assert_array_equal(frame.box.vectors, 10 * np.eye(3))


def test_tilted_box_and_scaled_coordinates(tmp_path):
    # Edges (10,0,0), (-3,8,0), (2,1,6) from the corner (1,2,3). The bounds are
    # those of the bounding box: x from 1-3 to 11+2, y from 2 to 10+1.
    bounds = ["-2 13 -3", "2 11 2", "3 9 1"]
    path = write(
        tmp_path / "a.lammpstrj",
        dump_frame(
            ["1 1 0.5 0.25 0.75"],
            "id type xs ys zs",
            bounds=bounds,
            head="xy xz yz pp pp ff",
        ),
    )
    with open_dump(path) as trajectory:
        frame = trajectory.frame(0)
    vectors = [[10, 0, 0], [-3, 8, 0], [2, 1, 6]]
    np.testing.assert_array_equal(frame.box.vectors, vectors)
    np.testing.assert_array_equal(frame.box.origin, [1, 2, 3])
    # (1,2,3) + a/2 + b/4 + 3c/4
    np.testing.assert_array_equal(frame.positions, [[6.75, 4.75, 7.5]])
    np.testing.assert_allclose(
        frame.box.fractional(frame.positions), [[0.5, 0.25, 0.75]]
    )
    assert frame.box.periodic == (True, True, False)


def test_general_triclinic_box(tmp_path):
    path = write(
        tmp_path / "a.dump",
        dump_frame(
            ["1 1 1 2 3"],
            head="abc origin pp pp pp",
            bounds=["0 5 0 -1", "-4 0 0 -2", "0 0 6 -3"],
        ),
    )
    with open_dump(path) as trajectory:
        box = trajectory.frame(0).box
    np.testing.assert_array_equal(box.vectors, [[0, 5, 0], [-4, 0, 0], [0, 0, 6]])
    np.testing.assert_array_equal(box.origin, [-1, -2, -3])


@pytest.mark.parametrize(
    ("flags", "periodic"),
    [
        ("pp pp pp", (True, True, True)),
        ("pp ff pp", (True, False, True)),
        ("ss mm ff", (False, False, False)),
        ("fs pp sm", (False, True, False)),
    ],
)
def test_boundary_flags(tmp_path, flags, periodic):
    path = write(tmp_path / "a.dump", dump_frame(["1 1 1 2 3"], head=flags))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).box.periodic == periodic
        assert trajectory.describe().periodic == periodic
    with open_dump(path, periodic="x") as trajectory:  # the user goes before the file
        assert trajectory.frame(0).box.periodic == (True, False, False)


def test_missing_boundary_flags_are_mentioned(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["1 1 1 2 3"], head=""))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).box.fully_periodic
        assert any("boundary flags" in note for note in trajectory.describe().notes)


def test_rows_are_sorted_by_id_with_all_their_columns(tmp_path):
    columns = "radius id x y z type ix iy iz"
    one = ["0.6 7 1 2 3 B 1 0 0", "0.5 3 4 5 6 A 0 -1 0"]
    two = ["0.55 3 4 5 6 A 0 -1 2", "0.65 7 1 2 3 B 1 0 0"]
    path = write(
        tmp_path / "a.dump",
        dump_frame(one, columns, step=100),
        dump_frame(two, columns, step=250),
    )
    with open_dump(path, diameter=None) as trajectory:
        first, last = trajectory.frame(0), trajectory.frame(1)
        assert trajectory.type_names == ("A", "B")
        assert "radius column" in trajectory.describe().radii_source
    assert first.ids.tolist() == last.ids.tolist() == [3, 7]
    assert (first.step, last.step) == (100, 250)
    assert first.radii.tolist() == [0.5, 0.6]
    assert last.radii.tolist() == [0.55, 0.65]  # radii follow the frames
    assert first.species.tolist() == [0, 1]
    assert first.positions.tolist() == [[4, 5, 6], [1, 2, 3]]
    assert first.images.tolist() == [[0, -1, 0], [1, 0, 0]]
    assert last.images.tolist() == [[0, -1, 2], [1, 0, 0]]


def test_diameter_column(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["1 1.2 0 0 0"], "id diameter x y z"))
    with open_dump(path, diameter=None) as trajectory:
        assert trajectory.frame(0).radii.tolist() == [0.6]


@pytest.mark.parametrize(
    ("columns", "row"),
    [
        ("id xs ys zs ix iy iz", "1 0.2 0.5 0.5 1 0 0"),
        ("id x y z ix iy iz", "1 2 5 5 1 0 0"),
        ("id xu yu zu ix iy iz", "1 12 5 5 1 0 0"),
        ("id xsu ysu zsu ix iy iz", "1 1.2 0.5 0.5 1 0 0"),
    ],
)
def test_images_unwrap_to_the_same_place(tmp_path, columns, row):
    path = write(tmp_path / "a.dump", dump_frame([row], columns))
    with open_dump(path) as trajectory:
        frame = trajectory.frame(0)
    unwrapped = frame.positions + frame.images @ frame.box.vectors
    np.testing.assert_allclose(unwrapped, [[12, 5, 5]], rtol=1e-15)


def test_types_sort_as_numbers(tmp_path):
    rows = [f"{i} {t} {i} 0 {i}" for i, t in enumerate([10, 2, 1], start=1)]
    path = write(tmp_path / "a.dump", dump_frame(rows))
    with open_dump(path, diameter="1=1.0,2=1.4,10=2") as trajectory:
        assert trajectory.type_names == ("1", "2", "10")
        assert trajectory.frame(0).radii.tolist() == [1.0, 0.7, 0.5]


def test_changed_particle_number_names_the_frame_and_counts_all_frames(tmp_path):
    two, one = ["1 1 1 1 1", "2 1 3 3 3"], ["1 1 1 1 1"]
    path = write(
        tmp_path / "a.dump",
        dump_frame(two),
        dump_frame(one, step=10),
        dump_frame(one, step=20),
    )
    with open_dump(path) as trajectory:
        assert trajectory.n_frames == 3
        with pytest.raises(FrameError, match=r"frame 2 \(step 20\).*2 part.*found 1"):
            trajectory.frame(2)


def test_changed_ids_name_the_frame(tmp_path):
    path = write(
        tmp_path / "a.dump",
        dump_frame(["1 1 1 1 1", "2 1 3 3 3"]),
        dump_frame(["1 1 1 1 1", "5 1 3 3 3"], step=10),
    )
    with (
        open_dump(path) as trajectory,
        pytest.raises(FrameError, match=r"frame 1 .*found id 5 in place of 2"),
    ):
        trajectory.frame(1)


def test_repeated_id(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["4 1 1 1 1", "4 1 3 3 3"]))
    with pytest.raises(FrameError, match="each particle id once, found 4 2 times"):
        open_dump(path)


def test_truncated_dump_leaves_the_frames_before_readable(tmp_path):
    rows = [f"{i} 1 {i}.25 0.5 {i}.125" for i in range(1, 6)]
    text = "".join(dump_frame(rows, step=s) for s in (0, 10, 20))
    path = tmp_path / "a.dump"
    for cut in (4, 25, 70, 110):  # in a number, in a row, between rows, in the head
        path.write_text(text[:-cut])
        with open_dump(path) as trajectory:
            assert trajectory.n_frames == 3
            assert trajectory.frame(1).step == 10
            with pytest.raises(FrameError, match=r"frame 2.*(truncated|expected)"):
                trajectory.frame(2)
            description = trajectory.describe()
        assert description.last_step is None
        assert any("last frame" in note for note in description.notes)


def test_number_that_is_none_is_quoted(tmp_path):
    path = write(
        tmp_path / "a.dump",
        dump_frame(["1 1 1 1 1"]),
        dump_frame(["1 1 1 1,5 1"], step=3),
    )
    with (
        open_dump(path) as trajectory,
        pytest.raises(FrameError, match=r"frame 1 \(step 3\).*found '1,5'"),
    ):
        trajectory.frame(1)


def test_not_a_number_names_ids(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["9 1 nan 1 1", "4 1 1 1 1"]))
    with (
        open_dump(path) as trajectory,
        pytest.raises(FrameError, match=r"frame 0.*particle 9"),
    ):
        trajectory.frame(0)


def test_missing_coordinates_list_the_columns(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["1 1 0.5"], "id type vx"))
    with pytest.raises(InputError, match=r"xsu ysu zsu.*has id type vx"):
        open_dump(path)


def test_a_plane_without_z_column(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["1 2 3", "2 4 4.5"], "id x y"))
    with open_dump(path) as trajectory:
        frame = trajectory.frame(0)
    assert frame.positions.tolist() == [[2, 3], [4, 4.5]]


def test_equal_z_means_two_dimensions(tmp_path):
    rows = [f"{i} 1 {i} {i} 0" for i in range(1, 5)]
    bounds = ["0 10", "0 12", "-0.5 0.5"]
    path = write(tmp_path / "a.dump", dump_frame(rows, bounds=bounds))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).box.volume == pytest.approx(120.0)
        assert "all particles have z = 0" in trajectory.describe().dimensions_source
    with open_dump(path, dimensions=3) as trajectory:
        assert trajectory.frame(0).positions.shape == (4, 3)


def test_stored_time_and_units_lines(tmp_path):
    rows = ["1 1 1 1 1"]
    text = (
        "ITEM: UNITS\nlj\nITEM: TIME\n0.5\n"
        + dump_frame(rows, step=100)
        + "ITEM: TIME\n1.25\n"
        + dump_frame(rows, step=250)
    )
    path = write(tmp_path / "a.dump", text)
    with open_dump(path) as trajectory:
        assert [trajectory.frame(i).time for i in (0, 1)] == [0.5, 1.25]
        assert trajectory.time_unit == "time"
    with open_dump(path, dt=0.01) as trajectory:
        assert [trajectory.frame(i).time for i in (0, 1)] == [1.0, 2.5]


@pytest.mark.parametrize(
    ("rows", "columns", "spacing"),
    [
        # C's %g prints six significant digits: 12.3456 ends at 1e-4.
        (["1 12.3456 1.23456 0.5", "2 3 4.5 7.25"], "id x y z", 1e-4),
        (["1 12.346 1.235 0.500", "2 3.000 4.500 7.250"], "id x y z", 1e-3),
        # Scaled: the last digit of 0.5124 stands for 1e-4 of an edge of 10.
        (["1 0.1234 0.1235 0.5000", "2 0.3001 0.4502 0.7250"], "id xs ys zs", 1e-3),
        # Printed in full: the spacing of doubles near 0.7.
        (["1 0.1 0.30000000000000004 0.7"], "id x y z", 1e-16),
    ],
)
def test_resolution_from_the_printed_digits(tmp_path, rows, columns, spacing):
    path = write(tmp_path / "a.dump", dump_frame(rows, columns))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).resolution == pytest.approx(spacing, rel=0.2)


def test_lattice_printed_in_full_is_not_taken_for_coarse(tmp_path):
    rows = [f"{i} {0.5 * i} {0.25 * i} {1.0 * i}" for i in range(9)]
    path = write(tmp_path / "a.dump", dump_frame(rows, "id x y z"))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).resolution <= 1.01e-5


def test_more_lines_than_announced(tmp_path):
    path = write(tmp_path / "a.dump", dump_frame(["1 1 1 2 3", "2 1 1 2 4"], n=1))
    with pytest.raises(FrameError, match="expected 1 particles, found more lines"):
        open_dump(path)


def test_line_of_another_length_is_named(tmp_path):
    rows = ["1 1 1 2 3", "2 1 1 2", "3 1 1 2 4 5"]
    path = write(tmp_path / "a.dump", dump_frame(rows))
    with pytest.raises(FrameError, match="5 columns, found 4 on line 2 of the"):
        open_dump(path)


def test_dump_under_any_name(tmp_path):
    path = write(tmp_path / "dump.melt", dump_frame(["1 1 1 2 3"]))
    with open_dump(path) as trajectory:
        assert trajectory.describe().format == "LAMMPS dump"


def test_box_bounds_in_the_wrong_order(tmp_path):
    path = write(
        tmp_path / "a.dump", dump_frame(["1 1 1 2 3"], bounds=["10 0", "0 9", "0 9"])
    )
    with pytest.raises(FrameError, match="bounds low < high"):
        open_dump(path)


def test_no_timestep_lines(tmp_path):
    path = tmp_path / "a.dump"
    path.write_text("nothing of the kind\n")
    with pytest.raises(InputError, match="ITEM: TIMESTEP"):
        open_dump(path)


DATA = """LAMMPS data file

3 atoms
2 atom types

-1.0 9.0 xlo xhi
-2.0 10.0 ylo yhi
0.0 14.0 zlo zhi
{tilt}
Masses

1 1.0
2 1.0

Atoms # {style}

{rows}

Velocities

1 0 0 0
2 0 0 0
3 0 0 0
"""


def test_data_file_with_spheres(tmp_path):
    rows = "3 2 1.4 1.0 7 8 9.5 0 0 1\n1 1 1.0 1.0 1 2 3 0 0 0\n2 1 1.1 1.0 4 5 6 0 0 0"
    path = tmp_path / "a.data"
    path.write_text(
        DATA.format(style="sphere", rows=rows, tilt="3.0 1.0 0.5 xy xz yz\n")
    )
    with open_trajectory(InputOptions(path)) as trajectory:
        frame, description = trajectory.frame(0), trajectory.describe()
    assert frame.ids.tolist() == [1, 2, 3]
    assert frame.radii.tolist() == [0.5, 0.55, 0.7]
    assert frame.positions.tolist() == [[1, 2, 3], [4, 5, 6], [7, 8, 9.5]]
    assert frame.images.tolist() == [[0, 0, 0], [0, 0, 0], [0, 0, 1]]
    np.testing.assert_array_equal(
        frame.box.vectors, [[10, 0, 0], [3, 12, 0], [1, 0.5, 14]]
    )
    np.testing.assert_array_equal(frame.box.origin, [-1, -2, 0])
    assert description.species == {"1": 2, "2": 1}


@pytest.mark.parametrize(
    ("style", "row"),
    [
        ("atomic", "{i} 1 {i} 2 3"),
        ("charge", "{i} 1 0.5 {i} 2 3"),
        ("molecular", "{i} 9 1 {i} 2 3"),
        ("full", "{i} 9 1 -0.5 {i} 2 3"),
    ],
)
def test_data_file_styles(tmp_path, style, row):
    path = tmp_path / "a.data"
    rows = "\n".join(row.format(i=i) for i in (1, 2, 3))
    path.write_text(DATA.format(style=style, rows=rows, tilt=""))
    with open_trajectory(InputOptions(path, diameter=1.0)) as trajectory:
        positions = trajectory.frame(0).positions
    assert positions.tolist() == [[1, 2, 3], [2, 2, 3], [3, 2, 3]]


def test_data_file_of_unknown_style(tmp_path):
    path = tmp_path / "a.data"
    path.write_text(DATA.format(style="peri", rows="1 1 1 1 1 2 3", tilt=""))
    with pytest.raises(InputError, match=r"atom style 'peri'.*sphere"):
        open_trajectory(InputOptions(path, diameter=1.0))


def test_data_beside_dump(tmp_path):
    data = tmp_path / "a.data"
    rows = "3 2 1.4 1 7 8 9\n1 1 1.0 1 1 2 3\n2 1 1.1 1 4 5 6"
    data.write_text(DATA.format(style="sphere", rows=rows, tilt=""))
    dump = write(
        tmp_path / "a.dump",
        dump_frame(["2 1 1 1", "3 2 2 2", "1 3 3 3"], "id x y z", step=50),
    )
    with open_trajectory(InputOptions(data, dump)) as trajectory:
        frame = trajectory.frame(0)
        assert trajectory.type_names == ("1", "2")
    assert frame.step == 50
    assert frame.radii.tolist() == [0.5, 0.55, 0.7]
    assert frame.species.tolist() == [0, 0, 1]
    assert frame.positions.tolist() == [[3, 3, 3], [1, 1, 1], [2, 2, 2]]


@pytest.mark.filterwarnings("ignore::UserWarning:MDAnalysis")
def test_tilted_box_against_mdanalysis(tmp_path):
    # Same shape up to its float32; its origin and flags are what we read ourselves.
    bounds = ["-2 13 -3", "2 11 2", "3 9 1"]
    path = write(
        tmp_path / "a.lammpsdump",
        dump_frame(["1 1 1 2 3"], head="xy xz yz pp pp pp", bounds=bounds),
    )
    universe = MDAnalysis.Universe(
        str(path), topology_format="LAMMPSDUMP", to_guess=(), convert_units=False
    )
    with open_dump(path) as trajectory:
        box = trajectory.frame(0).box
    expected = universe.trajectory.ts.triclinic_dimensions
    np.testing.assert_allclose(box.vectors, expected, rtol=1e-5, atol=2e-6)


def test_dump_without_ids_warns_of_the_order(tmp_path):
    text = dump_frame(["1 1 1 2 3"]), dump_frame(["1 1 1 2 3"], step=1)
    path = write(tmp_path / "a.dump", *(t.replace("id type", "mol type") for t in text))
    with open_dump(path) as trajectory:
        assert trajectory.frame(0).ids.tolist() == [0]
        assert any("no id column" in note for note in trajectory.describe().notes)


def test_column_that_vanishes(tmp_path):
    path = write(
        tmp_path / "a.dump",
        dump_frame(["1 1 1 2 3 0.5"], "id type x y z radius"),
        dump_frame(["1 1 1 2 3"], step=10),
        dump_frame(["1 1 0.1 0.2 0.3"], "id type xs ys zs", step=20),
    )
    with open_dump(path, diameter=None) as trajectory:
        with pytest.raises(FrameError, match=r"frame 1 \(step 10\): expected radii"):
            trajectory.frame(1)
        with pytest.raises(FrameError, match=r"frame 2 \(step 20\): .*a column x"):
            trajectory.frame(2)


def test_truncated_data_file(tmp_path):
    path = tmp_path / "a.data"
    path.write_text(DATA.format(style="atomic", rows="1 1 1 2 3\n2 1 1 2 3", tilt=""))
    with pytest.raises(InputError, match="expected 3 atoms, found 2"):
        open_trajectory(InputOptions(path, diameter=1.0))
