"""The analysis for MDAnalysis: equal on all backends, and to a result file."""

import crowd
import MDAnalysis
import numpy as np
import pytest
import run_scenario as scenario

import trajcage
from trajcage.errors import InputError, UsageError

N_FRAMES = 6

# MDAnalysis asks GSD files for a time step, which they do not hold.
pytestmark = pytest.mark.filterwarnings("ignore:Reader has no dt information")


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    return crowd.write(tmp_path_factory.mktemp("source") / "a.gsd", N_FRAMES)


def analyze(source, **options):
    universe = MDAnalysis.Universe(source, convert_units=False)
    return trajcage.CageAnalysis(universe.atoms, diameter=crowd.DIAMETER, **options)


@pytest.fixture(scope="module")
def serial(source):
    return analyze(source).run().results


def same(one, other):
    """Whether two results are equal bit for bit."""
    if isinstance(one, dict):
        return one.keys() == other.keys() and all(same(one[k], other[k]) for k in one)
    if isinstance(one, np.ndarray):
        return one.dtype == other.dtype and one.tobytes() == other.tobytes()
    return repr(one) == repr(other)


@pytest.mark.parametrize("backend", ["multiprocessing", "dask"])
def test_backends_of_mdanalysis_agree_bit_for_bit(backend, source, serial):
    assert set(trajcage.CageAnalysis.get_supported_backends()) == {
        "serial",
        "multiprocessing",
        "dask",
    }
    found = analyze(source).run(backend=backend, n_workers=2, n_parts=3).results
    assert same(dict(found), dict(serial))


def test_the_result_file_holds_the_same(source, serial, tmp_path):
    with trajcage.measure(
        source, output=tmp_path / "r.h5", diameter=crowd.DIAMETER
    ) as result:
        for name, field in result.fields.items():
            found, expected = serial[name], np.asarray(result[name])
            assert found.shape == expected.shape
            # The box has another origin there, so positions are wrapped and rounded
            # in another way, and particles of a window come in another order.
            if name == "weakest_window_neighbors":
                assert np.array_equal(np.sort(found), np.sort(expected))
            elif np.dtype(field.dtype).kind == "f":
                precise = name in {"free_volume", "free_surface", "wall_sum"}
                tolerance = 1e-11 if precise else 1e-5  # freud computes in float32
                assert np.allclose(
                    found, expected, rtol=tolerance, atol=1e-6, equal_nan=True
                )
            else:
                assert np.array_equal(found, expected)
        assert serial.summary["n_frames"] == N_FRAMES
        assert serial.summary["cages"] == result.summary["cages"]
        events = result.table("events")
        assert np.array_equal(serial.events["particle"], events["particle"])
        assert np.array_equal(
            serial.events["neighbors_lost_offsets"], events["neighbors_lost_offsets"]
        )
        for name, curve in serial.curves.items():
            assert np.allclose(curve, result.array(name), equal_nan=True)


def test_frames_are_chosen_as_usual_and_the_universe_stays_where_it_was(source):
    universe = MDAnalysis.Universe(source, convert_units=False)
    universe.trajectory[2]
    analysis = trajcage.CageAnalysis(universe.atoms, diameter=1.5, skip=["time"])
    assert universe.trajectory.frame == 2
    analysis.run(start=1, stop=6, step=2)
    assert analysis.results.free_volume.shape == (3, 27)
    assert list(analysis.frames) == [1, 3, 5]


def test_what_cannot_be_analyzed_is_refused(source, tmp_path):
    universe = MDAnalysis.Universe(source, convert_units=False)
    with pytest.raises(InputError, match="no particle diameters"):
        trajcage.CageAnalysis(universe.atoms)  # MDAnalysis would say 0.75 or 0.5
    moving = universe.select_atoms("prop x > 0", updating=True)
    with pytest.raises(UsageError, match="updating"):
        trajcage.CageAnalysis(moving, diameter=1.0)
    with pytest.raises(UsageError, match="none are selected"):
        analyze(source).run(start=3, stop=3)


def test_tilted_boxes_of_gsd_files_are_refused(tmp_path):
    import gsd.hoomd

    path = tmp_path / "tilted.gsd"
    with gsd.hoomd.open(path, "w") as file:
        frame = gsd.hoomd.Frame()
        frame.configuration.box = [5, 5, 5, 0.2, 0, 0]
        frame.particles.N = 27
        frame.particles.position = scenario.shaken()
        file.append(frame)
    with pytest.raises(InputError, match=r"tilted boxes.*trajcage\.measure"):
        analyze(path)
    analyze(path, box=[5, 5, 5])
