"""H5MD input by the rules of H5MD 1.1, from files made with h5py."""

import h5py
import numpy as np
import pytest

from trajcage.errors import FrameError, InputError
from trajcage.readers import InputOptions, open_trajectory

POSITIONS = np.array(
    [[0.5, 1.0, 2.0], [3.0, 2.5, 0.5], [0.25, 4.0, 1.125], [1.5, 2.5, 4.5]]
)


def open_files(*files, **options):
    options.setdefault("diameter", 1.0)
    return open_trajectory(InputOptions(*files, **options))


def write_h5md(path, edges=(5.0, 6.0, 7.0), boundary=("periodic",) * 3, **options):
    positions = np.stack([POSITIONS + 0.125 * i for i in range(3)])
    with h5py.File(path, "w") as file:
        file.create_group("h5md").attrs["version"] = [1, 1]
        group = file.create_group("particles/colloids")
        element = group.create_group("position")
        element["value"] = positions.astype(options.get("dtype", "f8"))
        element["step"] = np.array([0, 1000, 2000])
        element["time"] = np.array([0.0, 2.5, 5.0])
        box = group.create_group("box")
        box.attrs["dimension"] = 3
        box.attrs["boundary"] = np.array(boundary, dtype="S8")
        frames = box.create_group("edges")
        frames["value"] = np.stack([np.array(edges)] * 3)
        frames["step"], frames["time"] = element["step"], element["time"]
        if "unit" in options:
            element["value"].attrs["unit"] = options["unit"]
        for name in ("radius", "species"):
            if name in options:
                group[name] = np.array(options[name])
    return path


def test_h5md_alone(tmp_path):
    path = write_h5md(
        tmp_path / "a.h5md",
        radius=[0.5, 0.5, 0.7, 0.5],
        species=[1, 1, 2, 1],
        boundary=("periodic", "none", "periodic"),
    )
    with open_files(path, diameter=None) as trajectory:
        frame = trajectory.frame(1)
        assert trajectory.type_names == ("1", "2")
        assert trajectory.n_frames == 3
    np.testing.assert_array_equal(frame.positions, POSITIONS + 0.125)
    assert (frame.step, frame.time) == (1000, 2.5)
    assert frame.box.lengths.tolist() == [5, 6, 7]
    assert frame.box.periodic == (True, False, True)
    assert frame.radii.tolist() == [0.5, 0.5, 0.7, 0.5]
    assert frame.resolution == np.spacing(4.625)


@pytest.mark.parametrize("unit", [np.bytes_("pm"), "nm", "um", "sigma"])
def test_h5md_units_neither_scale_nor_stop(tmp_path, unit):
    path = write_h5md(tmp_path / "a.h5", unit=unit)
    with open_files(path) as trajectory:
        np.testing.assert_array_equal(trajectory.frame(0).positions, POSITIONS)


def test_h5md_edge_vectors_keep_their_orientation(tmp_path):
    edges = [[0, 5, 0], [-6, 0, 0], [0, 0, 7]]
    path = write_h5md(tmp_path / "a.h5md", edges=edges)
    with open_files(path) as trajectory:
        np.testing.assert_array_equal(trajectory.frame(0).box.vectors, edges)


def test_h5md_with_topology(tmp_path):
    xyz = tmp_path / "a.xyz"
    xyz.write_text("4\n\n" + "".join(f"{name} 0 0 0\n" for name in "ABBA"))
    run = write_h5md(tmp_path / "a.h5md")
    with open_files(xyz, run, diameter="A=1,B=2") as trajectory:
        assert trajectory.frame(2).radii.tolist() == [0.5, 1.0, 1.0, 0.5]


def test_h5md_ids_are_looked_up_in_the_topology(tmp_path):
    data = tmp_path / "a.data"
    data.write_text(
        "title\n\n4 atoms\n\n0 5 xlo xhi\n0 6 ylo yhi\n0 7 zlo zhi\n\n"
        "Atoms # sphere\n\n3 1 1.6 1 0 0 0\n1 1 1.2 1 0 0 0\n"
        "2 2 1.4 1 0 0 0\n4 1 1.8 1 0 0 0\n"
    )
    run = write_h5md(tmp_path / "a.h5md")
    with h5py.File(run, "a") as file:
        file["particles/colloids/id"] = np.array([4, 2, 1, 3])
    with open_files(data, run, diameter=None) as trajectory:
        frame = trajectory.frame(0)
    assert frame.ids.tolist() == [1, 2, 3, 4]
    assert frame.radii.tolist() == [0.6, 0.7, 0.8, 0.9]
    assert frame.species.tolist() == [0, 1, 0, 0]
    np.testing.assert_array_equal(frame.positions, POSITIONS[[2, 1, 3, 0]])


def test_h5md_in_the_open_needs_no_edges(tmp_path):
    path = write_h5md(tmp_path / "a.h5md", boundary=("none",) * 3)
    with h5py.File(path, "a") as file:
        del file["particles/colloids/box/edges"]
    with open_files(path) as trajectory:
        box = trajectory.frame(0).box
    np.testing.assert_allclose(box.lengths, [2.75, 3.0, 4.0])
    assert box.periodic == (False, False, False)


def edit(path, change):
    with h5py.File(path, "a") as file:
        change(file["particles/colloids"])
    return path


def test_fixed_step_and_time(tmp_path):
    def fix(group):
        for element in (group["position"], group["box/edges"]):
            for name, value, offset in (("step", 1000, 500), ("time", 2.5, 0.25)):
                del element[name]
                element[name] = value
                element[name].attrs["offset"] = offset

    path = edit(write_h5md(tmp_path / "a.h5md"), fix)
    with open_files(path) as trajectory:
        frames = [trajectory.frame(i) for i in range(3)]
    assert [frame.step for frame in frames] == [500, 1500, 2500]
    assert [frame.time for frame in frames] == [0.25, 2.75, 5.25]


def test_time_may_be_absent(tmp_path):
    def remove(group):
        del group["position/time"]

    path = edit(write_h5md(tmp_path / "a.h5md"), remove)
    with open_files(path) as trajectory:
        assert trajectory.frame(2).time == 2000.0
        assert trajectory.time_unit == "step"


def test_constant_edges_and_configuration(tmp_path):
    def freeze(group):
        del group["box/edges"], group["position"]
        group["box/edges"] = np.array([5.0, 6.0, 7.0])
        group["position"] = POSITIONS

    path = edit(write_h5md(tmp_path / "a.h5md"), freeze)
    with open_files(path) as trajectory:
        assert trajectory.n_frames == 1
        frame = trajectory.frame(0)
    assert frame.box.lengths.tolist() == [5, 6, 7]
    np.testing.assert_array_equal(frame.positions, POSITIONS)


def test_two_dimensions(tmp_path):
    def flatten(group):
        del group["box/edges"], group["position/value"]
        group["box"].attrs["dimension"] = 2
        group["box"].attrs["boundary"] = np.array([b"periodic", b"none"])
        group["box/edges"] = np.array([5.0, 6.0])
        group["position/value"] = np.stack([POSITIONS[:, :2]] * 3)

    path = edit(write_h5md(tmp_path / "a.h5md"), flatten)
    with open_files(path) as trajectory:
        frame = trajectory.frame(1)
    np.testing.assert_array_equal(frame.positions, POSITIONS[:, :2])
    np.testing.assert_array_equal(frame.box.vectors, [[5, 0], [0, 6]])
    assert frame.box.periodic == (True, False)


def test_ids_images_and_named_species(tmp_path):
    def extend(group):
        group["id"] = np.array([40, 10, 30, 20])
        group["image/value"] = np.full((3, 4, 3), 2)
        group["radius/value"] = np.outer([1, 2, 3], [0.4, 0.1, 0.3, 0.2])
        named = h5py.enum_dtype({"small": 7, "big": 9}, basetype="i4")
        group.create_dataset("species", data=[9, 7, 7, 9], dtype=named)

    path = edit(write_h5md(tmp_path / "a.h5md"), extend)
    with open_files(path, diameter=None) as trajectory:
        frame = trajectory.frame(1)
        assert trajectory.type_names == ("small", "big")
    assert frame.ids.tolist() == [10, 20, 30, 40]
    np.testing.assert_allclose(frame.radii, [0.2, 0.4, 0.6, 0.8])
    np.testing.assert_array_equal(frame.positions, POSITIONS[[1, 3, 2, 0]] + 0.125)
    assert frame.species.tolist() == [0, 1, 0, 1]
    assert frame.images.tolist() == [[2, 2, 2]] * 4


def test_padding_means_a_changed_particle_number(tmp_path):
    def pad(group):
        ids = np.array([[0, 1, 2, 3], [0, 1, -1, 3], [0, 1, 2, 3]])
        group.create_dataset("id/value", data=ids, fillvalue=-1)

    path = edit(write_h5md(tmp_path / "a.h5md"), pad)
    with open_files(path) as trajectory:
        trajectory.frame(2)
        with pytest.raises(FrameError, match=r"frame 1 .step 1000.*found 3"):
            trajectory.frame(1)


def test_other_particle_groups_are_mentioned(tmp_path):
    path = write_h5md(tmp_path / "a.h5md")
    with h5py.File(path, "a") as file:
        file.create_group("particles/aaa")  # no positions: passed over
        file.copy("particles/colloids", "particles/solvent")
    with open_files(path) as trajectory:
        assert trajectory.n_particles == 4
        assert "not solvent" in trajectory.describe().notes[0]


@pytest.mark.parametrize("what", ["bytes", "no particles"])
def test_foreign_files(tmp_path, what):
    path = tmp_path / "a.h5"
    if what == "bytes":
        path.write_bytes(b"these bytes are no trajectory" * 40)
    else:
        with h5py.File(path, "w") as file:
            file["x"] = 1
    with pytest.raises(InputError, match="expected an H5MD file"):
        open_files(path)
