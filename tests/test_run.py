"""Runs from input files to result files: physics, bad input, stopping, resuming."""

import json
import os
import signal
import subprocess
import sys
import threading
import time

import h5py
import numpy as np
import pytest
import run_scenario as scenario
import xarray as xr

import trajcage
from trajcage.errors import (
    FrameError,
    InputError,
    InterruptedRunError,
    ResultFileError,
    UsageError,
)
from trajcage.lattices import EQUATIONS, effective_diameter_wca
from trajcage.model import CageStatus
from trajcage.run import FAMILIES

ALL_BUT_CAGES = tuple(FAMILIES)


def measure(source, output, **options):
    files = source if isinstance(source, tuple) else (source,)
    return trajcage.measure(*files, output=output, **options)


@pytest.fixture(scope="module")
def glass(tmp_path_factory):
    """Eight frames of the glass, measured in one go."""
    path = tmp_path_factory.mktemp("glass") / "cages.h5"
    measure(scenario.GLASS, path, stop=8, store_positions=True).close()
    return path


def estimate(result, name):
    found = result.summary["observables"][name]
    return found["mean"], found["error"]


# Equations of state from published papers, see trajcage.lattices: the fluid by
# Kolafa, Labik & Malijevsky (2004), the crystal by Hall (1972), disks by Kolafa &
# Rottner (2006). The samples are equilibrium runs of our own Monte Carlo.
@pytest.mark.parametrize(
    ("source", "options", "equation", "largest_error"),
    [
        (
            scenario.FLUID,
            {"diameter": 1.62, "stop": 20},
            "kolafa-labik-malijevsky",
            0.01,
        ),
        (scenario.CRYSTAL, {}, "hall", 0.01),
        (scenario.MONOLAYER, {}, "kolafa-rottner", 0.015),
    ],
)
def test_the_pressure_of_cages_is_that_of_the_equation_of_state(
    source, options, equation, largest_error, tmp_path
):
    with measure(source, tmp_path / "r.h5", skip=ALL_BUT_CAGES, **options) as result:
        assert (np.asarray(result["cage_status"]) == CageStatus.CLOSED).all()
        factor, error = estimate(result, "compressibility_factor")
        phi, _ = estimate(result, "packing_fraction")
        published = EQUATIONS[equation].compressibility_factor(phi)
        assert error < largest_error * factor
        assert abs(factor - published) < 3.0 * error
        rows = {row["name"]: row for row in result.summary["equations_of_state"]}
        row = rows[equation]
        assert row["compressibility_factor"] == pytest.approx(published)
        assert row["deviation"] == pytest.approx(factor - published)
        assert row["deviation_in_errors"] == pytest.approx((factor - published) / error)


def test_stored_numbers_agree_with_each_other(glass):
    with trajcage.open_result(glass) as result:
        volume = np.asarray(result["free_volume"])
        ratio = np.asarray(result["wall_sum"]) / volume
        assert np.allclose(result["free_volume_mean"], volume.mean(axis=1))
        assert np.allclose(
            result["free_volume_geometric_mean"], np.exp(np.log(volume).mean(axis=1))
        )
        assert np.allclose(result["compressibility_factor"], 1 + ratio.mean(axis=1) / 6)
        cells = np.asarray(result["cell_volume"]).sum(axis=1)
        assert np.allclose(cells, np.abs(np.linalg.det(result.boxes)), rtol=1e-5)
        counts = result.array("histograms/free_volume/counts")
        edges = result.array("histograms/free_volume/edges")
        assert np.array_equal(counts, np.histogram(volume, edges)[0])
        assert result.array("histograms/free_volume/left_out") == 0
        unit = result.summary["mean_diameter"] ** 3
        told = result.summary["free_volume"]
        assert told["n_values"] == volume.size
        assert told["mean"] == pytest.approx(volume.mean() / unit)
        centered = volume / unit - told["mean"]
        assert told["standard_deviation"] == pytest.approx(np.std(volume) / unit)
        skewness = np.mean(centered**3) / told["standard_deviation"] ** 3
        assert told["skewness"] == pytest.approx(skewness, rel=1e-6)


def test_lattice_references_stand_beside_every_frame(glass):
    with trajcage.open_result(glass) as result:
        phi = float(result["packing_fraction"][0])
        # equal particles that fill as much at the same number density
        diameter = 2.0 * np.mean(np.asarray(result.radii) ** 3) ** (1 / 3)
        for name in ("fcc", "hcp", "bcc"):
            expected = trajcage.lattice(name, phi)
            row = next(r for r in result.summary["lattices"] if r["name"] == name)
            for part, power in (("free_volume", 3), ("free_surface", 2)):
                reference = getattr(expected, part) * diameter**power
                stored = np.asarray(result[f"lattice_{name}_{part}"])
                np.testing.assert_allclose(stored, reference, rtol=1e-12)
                ratio = np.asarray(result[part]).mean(axis=1) / reference
                stored = np.asarray(result[f"lattice_{name}_{part}_ratio"])
                np.testing.assert_allclose(stored, ratio, rtol=1e-12)
                assert row[f"{part}_ratio"] == pytest.approx(ratio.mean())
                assert 0 < row[f"{part}_ratio_error"] < 0.1 * row[f"{part}_ratio"]
        for part in ("free_volume", "free_surface"):  # diamond cannot be so dense
            assert np.isnan(result[f"lattice_diamond_{part}"]).all()
            assert np.isnan(result[f"lattice_diamond_{part}_ratio"]).all()
            absent = result.summary["observables"][f"lattice_diamond_{part}_ratio"]
            assert "cannot be so dense" in absent["reason"]
        told = {row["name"] for row in result.summary["lattices"]}
        assert told == {"fcc", "hcp", "bcc"}


def test_the_record_says_what_was_measured_and_how(glass):
    with trajcage.open_result(glass) as result:
        record = result.parameters
    assert record["inputs"][0]["size"] == scenario.GLASS.stat().st_size
    assert len(record["inputs"][0]["sha256"]) == 64
    assert record["versions"]["numpy"] == np.__version__
    assert record["options"]["frames.stop"] == 8
    assert record["options"]["time.bonded"] == 1.35
    assert "radius column" in record["input"]["radii_source"]
    assert record["command_line"] == "library call"


def test_h5py_and_xarray_read_the_file(glass):
    with h5py.File(glass, "r") as file:
        assert list(file["h5md"].attrs["version"]) == [1, 1]
        volume = file["particles/all/free_volume/value"]
        assert volume.shape == (8, 1000)
        assert volume.attrs["unit"] == b"length+3"
        assert file["trajcage/frames_complete"][()] == 8
    group = "/particles/all/free_volume"
    with xr.open_dataset(
        glass, engine="h5netcdf", group=group, phony_dims="sort"
    ) as data:
        assert data["value"].shape == (8, 1000)
    with trajcage.open_result(glass) as result:
        data = result.to_xarray(["free_volume", "packing_fraction"])
        assert data["free_volume"].dims == ("frame", "particle")


def test_particles_regions_and_events_refer_to_each_other(glass):
    with trajcage.open_result(glass) as result:
        table = result.table("regions")
        ids = np.asarray(result["region_id"])
        for k in range(len(table["size"])):
            frame = int(table["frame"][k])
            members = np.count_nonzero(ids[frame] == table["region_id"][k])
            assert members == table["size"][k]
        breaks = np.bincount(result.table("events")["end_frame"], minlength=8)
        assert np.array_equal(breaks, result["cage_breaks"])


def test_walls_tell_by_whom_each_particle_is_caged(tmp_path):
    source = scenario.write_gsd(
        tmp_path / "a.gsd", [scenario.shaken(k) for k in (1, 2)]
    )
    with measure(source, tmp_path / "r.h5", store_walls=True, skip=["time"]) as result:
        walls = result.table("walls")
        counts = np.diff(walls["neighbors_offsets"]).reshape(2, 27)
        bounding = np.asarray(result["bounding_neighbors"])
        closed = np.asarray(result["cage_status"]) == CageStatus.CLOSED
        assert closed.any()
        assert np.array_equal(counts[closed], bounding[closed])
        surfaces = np.add.reduceat(
            np.append(walls["areas"], 0.0), walls["areas_offsets"][:-1]
        )
        surfaces = surfaces.reshape(2, 27)[closed]
        assert np.allclose(surfaces, np.asarray(result["free_surface"])[closed])
        assert np.array_equal(walls["particle"].reshape(2, 27)[1], np.arange(27))


def test_workers_do_not_change_a_bit(glass, tmp_path):
    path = tmp_path / "cages.h5"
    measure(scenario.GLASS, path, stop=8, store_positions=True, workers=2).close()
    scenario.assert_same(path, glass)


def test_stopped_at_any_frame_and_resumed_equals_uninterrupted(glass, tmp_path):
    """A signal comes after each frame in turn, until the run gets through."""
    path = tmp_path / "cages.h5"

    def interrupt(done, total):
        assert total == 8
        os.kill(os.getpid(), signal.SIGTERM)

    for k in range(1, 8):
        with pytest.raises(InterruptedRunError, match=f"after {k} of 8 frames"):
            measure(
                scenario.GLASS,
                path,
                stop=8,
                store_positions=True,
                resume=True,
                progress=interrupt,
            )
        with trajcage.open_result(path) as result:
            assert result.frames_complete == result.summary["n_frames"] == k
            assert not result.complete
    measure(scenario.GLASS, path, stop=8, store_positions=True, resume=True).close()
    scenario.assert_same(path, glass)
    done = []
    measure(
        scenario.GLASS,
        path,
        stop=8,
        store_positions=True,
        resume=True,
        progress=lambda *at: done.append(at),
    ).close()  # nothing is left to do
    assert done == []
    scenario.assert_same(path, glass)


def test_a_signal_outside_the_main_thread_is_left_alone(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    before = signal.getsignal(signal.SIGTERM)
    thread = threading.Thread(target=measure, args=(source, tmp_path / "r.h5"))
    thread.start()
    thread.join()
    assert signal.getsignal(signal.SIGTERM) is before
    with trajcage.open_result(tmp_path / "r.h5") as result:
        assert result.complete


def test_killed_and_resumed_equals_uninterrupted(glass, tmp_path):
    path = tmp_path / "cages.h5"
    code = (
        "import sys, trajcage\n"
        "trajcage.measure(sys.argv[1], output=sys.argv[2], stop=8,"
        " store_positions=True, resume=True)"
    )
    process = subprocess.Popen([sys.executable, "-c", code, scenario.GLASS, path])
    deadline = time.monotonic() + 120
    while process.poll() is None and time.monotonic() < deadline:
        if path.exists():
            with trajcage.open_result(path) as result:
                if result.frames_complete >= 2:
                    break
        time.sleep(0.02)
    process.send_signal(signal.SIGKILL)
    process.wait()
    measure(scenario.GLASS, path, stop=8, store_positions=True, resume=True).close()
    scenario.assert_same(path, glass)


def bad_frame(kind):
    """A good frame with one thing wrong."""
    good = scenario.shaken()
    if kind == "nan":
        good[4, 1] = np.nan
    elif kind == "duplicate":
        good[7] = good[3]
    elif kind == "number":
        good = good[:-1]
    elif kind == "overlap":
        good[7] = good[8] + 0.8 / np.sqrt(3.0)  # toward the middle of the hole there
    return good


@pytest.mark.parametrize(
    ("kind", "workers", "message"),
    [
        ("nan", 1, r"frame 3 \(step 30\): .*particle 4"),
        ("nan", 2, r"frame 3 \(step 30\): .*particle 4"),
        ("duplicate", 1, r"frame 3 \(step 30\): .*particles 3, 7"),
        ("number", 1, r"frame 3 \(step 30\): expected the 27 particles.*found 26"),
        ("overlap", 1, r"frame 3 \(step 30\): .*particles 7 and 8 by 0\.2"),
    ],
)
def test_frames_before_a_bad_one_are_kept(kind, workers, message, tmp_path):
    frames = [scenario.shaken()] * 3 + [bad_frame(kind), scenario.shaken()]
    source = scenario.write_gsd(tmp_path / "a.gsd", frames)
    path = tmp_path / "r.h5"
    with pytest.raises(FrameError, match=message):
        measure(source, path, diameter=1.0, strict=True, workers=workers)
    with trajcage.open_result(path) as result:
        assert result.frames_complete == 3
        assert not result.complete
        assert result.summary["n_frames"] == 3


def test_a_bad_first_frame_leaves_no_file_and_an_old_one_alone(tmp_path):
    bad = scenario.write_gsd(tmp_path / "bad.gsd", [bad_frame("duplicate")])
    good = scenario.write_gsd(tmp_path / "good.gsd", [scenario.shaken()])
    path = tmp_path / "r.h5"
    with pytest.raises(FrameError, match="distinct"):
        measure(bad, path)
    assert not path.exists()
    measure(good, path).close()
    before = path.read_bytes()
    with pytest.raises(FrameError, match="distinct"):
        measure(bad, path, overwrite=True)
    assert path.read_bytes() == before


def test_overlaps_are_counted_told_and_do_not_stop_the_run(tmp_path):
    frames = [scenario.shaken(), bad_frame("overlap"), bad_frame("overlap")]
    source = scenario.write_gsd(tmp_path / "a.gsd", frames)
    told = []
    with measure(source, tmp_path / "r.h5", diameter=1.0, notify=told.append) as result:
        assert result.frames_complete == 3
        assert list(result["overlaps"]) == [0, 1, 1]
        assert list(result["cages_overlap"]) == [0, 2, 2]
        assert set(result["deepest_overlap_ids"][1]) == {7, 8}
        assert result["deepest_overlap"][1] == pytest.approx(0.2, abs=1e-6)
        codes = result.fields["compressibility_status"].codes
        assert codes[result["compressibility_status"][1]] == "unresolved"
        assert np.isnan(result["compressibility_factor"][1])
    assert any("frame 1: 1 pair overlaps" in t and "7 and 8" in t for t in told), told
    assert any("2 frames have overlaps" in t for t in told)


def test_impossible_packing_fractions_are_refused_for_equal_particles(tmp_path):
    path = tmp_path / "r.h5"
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    with pytest.raises(FrameError, match=r"above 0\.7405.*diameter \(1\.9\)"):
        measure(source, path, diameter=1.9)
    diameters = tmp_path / "d.txt"
    diameters.write_text("\n".join(["1.9"] * 13 + ["1.88"] * 14))
    told = []
    measure(source, path, diameter=f"@{diameters}", notify=told.append).close()
    assert any("right only if small particles fill" in text for text in told)


def test_a_soft_repulsion_becomes_an_effective_diameter(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()], diameter=None)
    with measure(source, tmp_path / "r.h5", diameter="wca:40") as result:
        options = result.parameters["options"]
        assert options["diameter"] == "wca:40"
        assert options["effective_diameter"] == effective_diameter_wca(40.0)
        assert np.allclose(2 * result.radii, effective_diameter_wca(40.0))
    with pytest.raises(UsageError, match="wca:EPSILON_OVER_KT"):
        measure(source, tmp_path / "r.h5", diameter="wca:strong", overwrite=True)


def test_radii_that_change_are_stored_for_every_frame(tmp_path):
    lines = []
    for step, radius in ((0, 0.5), (1, 0.55)):
        lines += ["ITEM: TIMESTEP", str(step), "ITEM: NUMBER OF ATOMS", "27"]
        lines += ["ITEM: BOX BOUNDS pp pp pp", *["-2.5 2.5"] * 3]
        lines += ["ITEM: ATOMS id type x y z radius"]
        for k, (x, y, z) in enumerate(scenario.shaken()):
            lines.append(f"{k + 1} 1 {x:.12f} {y:.12f} {z:.12f} {radius}")
    source = tmp_path / "grow.lammpstrj"
    source.write_text("\n".join(lines) + "\n")
    with measure(source, tmp_path / "r.h5") as result:
        assert np.allclose(result.radii, [[0.5] * 27, [0.55] * 27])
        assert result["packing_fraction"][1] > result["packing_fraction"][0]


@pytest.mark.parametrize(
    ("skip", "absent", "present"),
    [
        (["time"], ["cage_breaks"], ["region", "rattler"]),
        (["rattlers"], ["rattler"], ["cage_breaks"]),
        (["order"], ["qbar6", "region"], ["cell_volume", "cage_breaks"]),
        (["cells"], ["cell_volume", "qbar6", "region"], ["rattler"]),
        (["regions"], ["region"], ["qbar6"]),
        (list(FAMILIES), ["cell_volume", "rattler", "cage_breaks"], ["free_volume"]),
    ],
)
def test_families_can_be_left_out(skip, absent, present, tmp_path):
    frames = [scenario.shaken(k) for k in range(2)]
    source = scenario.write_gsd(tmp_path / "a.gsd", frames)
    with measure(source, tmp_path / "r.h5", skip=skip) as result:
        assert not [name for name in absent if name in result]
        assert not [name for name in present if name not in result]
        assert result.complete


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"skip": ["cage"]}, "no family 'cage'"),
        ({"workers": -1}, "workers"),
        ({"resume": True, "overwrite": True}, "give one"),
        ({"start": 5}, "frames go from 0 to 1"),
        ({"step": 0}, "stride"),
        ({"reach": -1.0}, "reach"),
    ],
)
def test_options_that_make_no_sense_are_named(options, message, tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()] * 2)
    with pytest.raises(UsageError, match=message):
        measure(source, tmp_path / "r.h5", **options)
    assert not (tmp_path / "r.h5").exists()


def test_the_output_is_not_replaced_by_accident(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    other = scenario.write_gsd(tmp_path / "b.gsd", [scenario.shaken(2)])
    path = tmp_path / "r.h5"
    measure(source, path).close()
    with pytest.raises(ResultFileError, match=r"--resume.*--overwrite"):
        measure(source, path)
    with pytest.raises(
        ResultFileError, match=r"options: cages\.reach was null, now 3\.0;"
    ):
        measure(source, path, reach=3.0, resume=True)
    with pytest.raises(
        ResultFileError, match=r"b\.gsd is not the file that it was made from"
    ):
        measure(other, path, resume=True)


def test_frames_are_chosen_as_in_a_slice(tmp_path):
    frames = [scenario.shaken(k) for k in range(7)]
    source = scenario.write_gsd(tmp_path / "a.gsd", frames)
    with measure(source, tmp_path / "r.h5", start=-6, stop=6, step=2) as result:
        assert list(result.source_frames) == [1, 3, 5]
        assert list(result.steps) == [10, 30, 50]
        assert list(result["packing_fraction"])


def test_inspection_tells_what_a_run_would_do():
    found = trajcage.inspect(*scenario.FLUID, diameter=1.62)
    assert found.input.n_particles == 1372
    assert found.packing_fraction == pytest.approx(0.45, abs=1e-6)
    assert found.overlaps == 0
    assert found.overlap_tolerance == pytest.approx(2 * np.sqrt(3) * 1e-5)
    record = found.record()
    json.dumps(record)
    assert record["packing_fraction"] == found.packing_fraction
    assert record["n_frames"] == 60


def test_inspection_refuses_nonsense_and_warns_of_the_doubtful(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    with pytest.raises(FrameError, match="another unit"):
        trajcage.inspect(source, diameter=2.6)
    low = trajcage.inspect(source, diameter=0.01)
    assert any("very low" in note for note in low.notes)
    deep = trajcage.inspect(source, diameter=1.8)
    assert deep.overlaps > 0
    assert any("overlap" in note for note in deep.notes)
    with pytest.raises(InputError, match="nothing at"):
        trajcage.inspect(tmp_path / "missing.gsd")


def test_coarse_coordinates_draw_a_warning(tmp_path):
    text = ["27", 'Lattice="5 0 0 0 5 0 0 0 5"']
    text += [f"A {x:.1f} {y:.1f} {z:.1f}" for x, y, z in scenario.shaken() + 2.5]
    source = tmp_path / "coarse.xyz"
    source.write_text("\n".join(text) + "\n")
    found = trajcage.inspect(source, diameter=1.3)
    assert any("save more digits" in note for note in found.notes)
