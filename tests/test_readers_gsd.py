"""GSD input: every number below is worked out by hand from what was written."""

import json
import pickle
from dataclasses import asdict

import freud
import gsd.hoomd
import numpy as np
import pytest

from trajcage.errors import FrameError, InputError
from trajcage.readers import InputOptions, open_trajectory

POSITIONS = np.array(
    [[-4.0, 1.0, 2.0], [3.0, -2.5, 0.5], [0.0, 0.0, -6.0], [1.5, 2.5, 4.5]]
)


def make_frame(step=0, box=(10, 12, 14, 0, 0, 0), **fields):
    frame = gsd.hoomd.Frame()
    frame.configuration.step = step
    frame.configuration.box = list(box)
    positions = np.asarray(fields.pop("position", POSITIONS), float)
    frame.particles.N = len(positions)
    frame.particles.position = positions
    dimensions = fields.pop("dimensions", None)
    if dimensions is not None:
        frame.configuration.dimensions = dimensions
    for name, value in fields.items():
        setattr(frame.particles, name, value)
    return frame


def write(path, frames):
    with gsd.hoomd.open(str(path), "w") as file:
        file.extend(frames)
    return path


def open_gsd(path, **options):
    return open_trajectory(InputOptions(path, **options))


def test_tilted_box_is_exact(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(box=(10, 12, 14, 0.3, 0.2, 0.1))])
    with open_gsd(path, diameter=1.0) as trajectory:
        box = trajectory.frame(0).box
    # HOOMD's convention: a = (Lx,0,0), b = (xy Ly, Ly, 0), c = (xz Lz, yz Lz, Lz).
    expected = [[10, 0, 0], [3.6, 12, 0], [2.8, 1.4, 14]]
    np.testing.assert_allclose(box.vectors, expected, rtol=1e-6)
    assert box.volume == pytest.approx(1680.0, rel=1e-12)
    np.testing.assert_allclose(box.lengths, [10, 12.528367, 14.345731], rtol=1e-6)
    np.testing.assert_allclose(box.origin, [-8.2, -6.7, -7.0], rtol=1e-6)
    assert box.periodic == (True, True, True)


def test_step_ids_types_and_images_are_those_of_the_file(tmp_path):
    fields = {"types": ["big", "small"], "typeid": [1, 0, 1, 1], "diameter": [1.2] * 4}
    images = [[0, 0, 0], [1, 0, 0], [0, -2, 0], [0, 0, 3]]
    frames = [
        make_frame(step=500, **fields),
        make_frame(step=1500, image=images, **fields),
    ]
    path = write(tmp_path / "a.gsd", frames)
    with open_gsd(path) as trajectory:
        assert trajectory.n_frames == 2
        assert trajectory.type_names == ("big", "small")
        assert trajectory.time_unit == "step"
        first, last = trajectory.frame(0), trajectory.frame(1)
    assert (first.step, first.time, last.step, last.time) == (500, 500.0, 1500, 1500.0)
    assert first.ids.tolist() == [0, 1, 2, 3]
    assert first.species.tolist() == [1, 0, 1, 1]
    assert first.images.tolist() == [[0, 0, 0]] * 4
    assert last.images.tolist() == images
    np.testing.assert_array_equal(last.positions, POSITIONS)
    assert first.positions.dtype == np.float64


def test_images_are_unknown_unless_stored(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame()])
    with open_gsd(path, diameter=1.0) as trajectory:
        assert trajectory.frame(0).images is None


def test_dt_and_unit_apply_to_true_steps(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(step=s) for s in (0, 1000, 3000)])
    with open_gsd(path, diameter=1.0, dt=0.005, time_unit="tau") as trajectory:
        assert [trajectory.frame(i).time for i in range(3)] == [0.0, 5.0, 15.0]
        assert trajectory.time_unit == "tau"
        description = trajectory.describe()
    assert (description.first_time, description.last_time) == (0.0, 15.0)
    assert (description.first_step, description.last_step) == (0, 3000)
    assert description.dt == 0.005


def test_diameters_follow_the_frames(tmp_path):
    frames = [make_frame(diameter=[0.9] * 4), make_frame(1, diameter=[1.8] * 4)]
    path = write(tmp_path / "a.gsd", frames)
    with open_gsd(path) as trajectory:
        radii = [trajectory.frame(i).radii for i in range(2)]
    np.testing.assert_allclose(radii, [[0.45] * 4, [0.9] * 4], rtol=1e-7)


def test_absent_diameters_are_not_the_default_of_the_schema(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame()])
    with pytest.raises(InputError, match=r"no particle diameters.*--diameter.*A=1\.0"):
        open_gsd(path)
    with open_gsd(path, diameter="1.4") as trajectory:
        assert trajectory.frame(0).radii.tolist() == [0.7] * 4


def test_given_diameters_go_before_those_of_the_file(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(diameter=[0.9] * 4)])
    with open_gsd(path, diameter=2.0) as trajectory:
        assert trajectory.frame(0).radii.tolist() == [1.0] * 4
        assert "not used" in trajectory.describe().radii_source


@pytest.mark.parametrize("lz", [0.0, 1.0])
def test_two_dimensions_by_the_flag(tmp_path, lz):
    flat = POSITIONS * [1, 1, 0]
    frame = make_frame(
        box=(10, 12, lz, 0.25, 0, 0), position=flat, dimensions=2, diameter=[1.1] * 4
    )
    path = write(tmp_path / "a.gsd", [frame])
    with open_gsd(path) as trajectory:
        frame = trajectory.frame(0)
        assert trajectory.describe().dimensions_source.endswith("as the file says.")
    assert frame.positions.shape == (4, 2)
    np.testing.assert_allclose(frame.box.vectors, [[10, 0], [3, 12]])
    assert frame.box.periodic == (True, True)


def test_a_plane_without_thickness_needs_no_flag(tmp_path):
    flat = POSITIONS * [1, 1, 0]
    path = write(
        tmp_path / "a.gsd", [make_frame(box=(9, 9, 0, 0, 0, 0), position=flat)]
    )
    with open_gsd(path, diameter=1.0) as trajectory:
        assert trajectory.frame(0).box.volume == pytest.approx(81.0)


def test_flag_of_two_dimensions_with_a_spread_in_z(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(step=7, dimensions=2)])
    with (
        open_gsd(path, diameter=1.0) as trajectory,
        pytest.raises(FrameError, match=r"frame 0 \(step 7\).*z from -6 to 4.5"),
    ):
        trajectory.frame(0)


def test_absent_box_is_not_the_unit_box(tmp_path):
    frame = gsd.hoomd.Frame()
    frame.particles.N = 4
    frame.particles.position = POSITIONS
    path = write(tmp_path / "a.gsd", [frame])
    with pytest.raises(InputError, match="no box; give it with --box"):
        open_gsd(path, diameter=1.0)
    with open_gsd(path, diameter=1.0, box="10,12,14", periodic="xy") as trajectory:
        box = trajectory.frame(0).box
    np.testing.assert_array_equal(box.origin, [-5, -6, -7])  # GSD boxes are centered
    assert box.periodic == (True, True, False)


def test_double_precision_is_kept(tmp_path):
    path = tmp_path / "a.gsd"
    exact = POSITIONS / 3.0
    with gsd.hoomd.open(str(path), "w", precision="double") as file:
        file.append(make_frame(position=exact))
    with open_gsd(path, diameter=1.0) as trajectory:
        frame = trajectory.frame(0)
    np.testing.assert_array_equal(frame.positions, exact)
    assert frame.resolution == np.spacing(2.0)


def test_resolution_of_single_precision(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame()])
    with open_gsd(path, diameter=1.0) as trajectory:
        # The largest coordinate is 6: floats there are 2^-21 apart.
        assert trajectory.frame(0).resolution == 2.0**-21
        assert trajectory.describe().resolution == 2.0**-21


def test_topology_beside_trajectory(tmp_path):
    top = write(
        tmp_path / "top.gsd",
        [make_frame(types=["A", "B"], typeid=[0, 1, 1, 0], diameter=[1, 1.4, 1.4, 1])],
    )
    bare = write(tmp_path / "run.gsd", [make_frame(step=s) for s in (10, 20)])
    with open_trajectory(InputOptions(top, bare)) as trajectory:
        frame = trajectory.frame(1)
        assert trajectory.describe().files == (str(top), str(bare))
    assert frame.step == 20
    np.testing.assert_allclose(frame.radii, [0.5, 0.7, 0.7, 0.5], rtol=1e-7)
    assert frame.species.tolist() == [0, 1, 1, 0]


def test_changed_particle_number_names_the_frame(tmp_path):
    frames = [make_frame(), make_frame(step=40, position=POSITIONS[:3])]
    path = write(tmp_path / "a.gsd", frames)
    with (
        open_gsd(path, diameter=1.0) as trajectory,
        pytest.raises(FrameError, match=r"frame 1 \(step 40\).*4 particles.*found 3"),
    ):
        trajectory.frame(1)


def test_not_a_number_names_frame_and_particles(tmp_path):
    broken = POSITIONS.copy()
    broken[2, 1] = np.nan
    path = write(tmp_path / "a.gsd", [make_frame(), make_frame(5, position=broken)])
    with open_gsd(path, diameter=1.0) as trajectory:
        trajectory.frame(0)
        with pytest.raises(FrameError, match=r"frame 1 \(step 5\).*NaN.*particle 2"):
            trajectory.frame(1)


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan])
def test_diameters_in_the_file_must_be_positive(tmp_path, bad):
    path = write(tmp_path / "a.gsd", [make_frame(diameter=[1.2, 1.2, bad, 1.2])])
    with (
        open_gsd(path) as trajectory,
        pytest.raises(FrameError, match=r"positive radii.*particle 2"),
    ):
        trajectory.frame(0)


def test_frames_own_their_arrays(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(diameter=[1.2] * 4), make_frame(1)])
    with open_gsd(path) as trajectory:
        first, again = trajectory.frame(0), trajectory.frame(0)
        later = trajectory.frame(1)
    for name in ("positions", "radii", "ids", "species"):
        assert not np.shares_memory(getattr(first, name), getattr(again, name))
        assert not np.shares_memory(getattr(first, name), getattr(later, name))
    first.positions[:] = 0.0
    np.testing.assert_array_equal(again.positions, POSITIONS)


def test_truncated_file(tmp_path):
    frames = [make_frame(step=s, position=POSITIONS + 0.1 * s) for s in range(6)]
    path = write(tmp_path / "a.gsd", frames)
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 3])
    with pytest.raises(InputError, match=r"a.gsd"):
        open_gsd(path, diameter=1.0)


def test_foreign_bytes_under_the_suffix(tmp_path):
    path = tmp_path / "a.gsd"
    path.write_bytes(b"this is no gsd file" * 100)
    with pytest.raises(InputError, match="expected a GSD file"):
        open_gsd(path)


def test_options_pickle_and_open_again(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame()])
    options = InputOptions(path, diameter={"A": 1.0}, box=[10, 12, 14])
    with open_trajectory(pickle.loads(pickle.dumps(options))) as trajectory:
        assert trajectory.frame(0).radii.tolist() == [0.5] * 4


def test_type_index_without_name(tmp_path):
    frame = make_frame(step=3, types=["A"], typeid=[0, 0, 5, 0])
    path = write(tmp_path / "a.gsd", [frame])
    with pytest.raises(FrameError, match=r"step 3\): expected type indices below 1"):
        open_gsd(path, diameter=1.0)


def test_damaged_bytes_end_in_errors_of_our_own(tmp_path):
    path = write(tmp_path / "a.gsd", [make_frame(diameter=[1.2] * 4)] * 3)
    data = path.read_bytes()
    rng = np.random.default_rng(5)
    outcomes = set()
    for _ in range(60):
        damaged = bytearray(data)
        damaged[int(rng.integers(len(data)))] = int(rng.integers(256))
        path.write_bytes(bytes(damaged))
        try:
            with open_gsd(path) as trajectory:
                for index in range(min(trajectory.n_frames, 3)):
                    trajectory.frame(index)
            outcomes.add("fine")
        except InputError:
            outcomes.add("refused")
    assert outcomes == {"fine", "refused"}


def test_tilted_box_against_freud(tmp_path):
    # freud keeps HOOMD's box convention; its matrix has the edges as columns.
    box = (10, 12, 14, 0.3, -0.2, 0.1)
    path = write(tmp_path / "a.gsd", [make_frame(box=box)])
    with open_gsd(path, diameter=1.0) as trajectory:
        found = trajectory.frame(0).box
    reference = freud.box.Box(*box)
    np.testing.assert_allclose(found.vectors, reference.to_matrix().T, rtol=1e-6)
    assert found.volume == pytest.approx(reference.volume, rel=1e-6)


def test_description_is_plain_data(tmp_path):
    frames = [
        make_frame(
            step=s, types=["A", "B"], typeid=[0, 0, 1, 0], diameter=[1, 1, 1.5, 1]
        )
        for s in (0, 50)
    ]
    path = write(tmp_path / "a.gsd", frames)
    with open_gsd(path, dt=0.5, periodic="xy") as trajectory:
        description = json.loads(json.dumps(asdict(trajectory.describe())))
    assert description == {
        "files": [str(path)],
        "format": "GSD",
        "n_particles": 4,
        "n_frames": 2,
        "dimensions": 3,
        "dimensions_source": "3 dimensions, since z differs between particles.",
        "box_vectors": [[10, 0, 0], [0, 12, 0], [0, 0, 14]],
        "box_lengths": [10, 12, 14],
        "box_origin": [-5, -6, -7],
        "box_source": "Box from the GSD file.",
        "periodic": [True, True, False],
        "periodic_source": "Boundaries given by the user.",
        "radius_min": 0.5,
        "radius_max": 0.75,
        "radius_mean": 0.5625,
        "radii_source": "Radii from the diameters in the GSD file.",
        "species": {"A": 3, "B": 1},
        "first_step": 0,
        "first_time": 0.0,
        "last_step": 50,
        "last_time": 25.0,
        "dt": 0.5,
        "time_unit": "time",
        "time_source": "Time is the step in the file times the given dt.",
        "resolution": 2.0**-21,
        "notes": [],
    }


def test_types_are_matched_by_name_in_every_frame(tmp_path):
    frames = [
        make_frame(types=["A", "B"], typeid=[0, 1, 1, 0]),
        make_frame(step=1, types=["B", "A"], typeid=[1, 0, 0, 1]),
        make_frame(step=2, types=["A", "C"], typeid=[0, 1, 1, 0]),
    ]
    path = write(tmp_path / "a.gsd", frames)
    with open_gsd(path, diameter="A=1,B=2") as trajectory:
        assert trajectory.frame(1).radii.tolist() == [0.5, 1.0, 1.0, 0.5]
        with pytest.raises(FrameError, match=r"frame 2.*types A, B.*found C"):
            trajectory.frame(2)


def test_file_without_frames(tmp_path):
    with pytest.raises(InputError, match="has no frames"):
        open_gsd(write(tmp_path / "a.gsd", []))


def test_topology_of_another_size(tmp_path):
    top = write(tmp_path / "top.gsd", [make_frame(position=POSITIONS[:3])])
    run = write(tmp_path / "run.gsd", [make_frame()])
    with pytest.raises(InputError, match=r"topology has 3 particles, .*run\.gsd has 4"):
        open_trajectory(InputOptions(top, run, diameter=1.0))


def test_types_of_the_topology_where_the_run_has_none(tmp_path):
    top = tmp_path / "top.xyz"
    top.write_text("4\n\n" + "".join(f"{name} 0 0 0\n" for name in "BAAB"))
    run = write(tmp_path / "run.gsd", [make_frame()])
    with open_trajectory(InputOptions(top, run, diameter="A=1,B=2")) as trajectory:
        assert trajectory.frame(0).radii.tolist() == [1.0, 0.5, 0.5, 1.0]
