"""What is in a result file, and what is refused."""

import hashlib
import json

import h5py
import numpy as np
import pytest
import store_scenario as scenario
from hypothesis import given, settings
from hypothesis import strategies as st

from trajcage.errors import FrameError, InputError, ResultFileError, UsageError
from trajcage.model import Field
from trajcage.store import ArraySpec, TableSpec, describe_file, open_result


@pytest.fixture(scope="module")
def path(tmp_path_factory):
    path = tmp_path_factory.mktemp("store") / "cages.h5"
    scenario.run(path, 12, flush_every=5)
    return path


@pytest.fixture
def result(path):
    with open_result(path) as result:
        yield result


def test_what_went_in_comes_out(result):
    assert (result.complete, result.frames_complete) == (True, 12)
    assert (result.n_particles, result.dimensions) == (40, 3)
    assert result.periodic == (True, True, True)
    assert np.array_equal(result.ids, np.arange(40) + 7)
    assert np.array_equal(result.species, np.arange(40) % 2)
    assert result.type_names == ["A", "B"]
    assert np.array_equal(result.radii, np.full(40, 0.5))
    assert result.parameters["options"] == scenario.OPTIONS
    assert result.parameters["time_unit"] == "tau"
    assert np.array_equal(result.times, 0.5 * np.arange(12))
    for k in range(12):
        frame = scenario.record(k)
        assert np.array_equal(result.boxes[k], frame.box.vectors)
        assert np.array_equal(result.box(k).origin, frame.box.origin)
        for name, values in frame.values.items():
            np.testing.assert_array_equal(result[name][k], values)
    events = [scenario.rows(k)["events"] for k in range(12)]
    table = result.table("events")
    assert np.array_equal(
        table["neighbors_lost"], np.concatenate([e["neighbors_lost"] for e in events])
    )
    lengths = np.concatenate([np.diff(e["neighbors_lost_offsets"]) for e in events])
    assert np.array_equal(np.diff(table["neighbors_lost_offsets"]), lengths)
    assert result.table("regions/clusters")["size"][-1] == 99
    assert result.summary == {"frames": 12}
    assert result.array("correlations/overlap").shape == (5, 2)
    assert list(result.array("lattice_reference/names")) == [b"sc", b"fcc"]
    assert result.array("lifetime") == 0.5 * sum(range(12))
    assert result.arrays_frames == 12
    assert "complete" in repr(result)
    assert "12 frames" in repr(result)


def test_events_as_a_table(result):
    pandas = pytest.importorskip("pandas")
    events = result.events
    assert isinstance(events, pandas.DataFrame)
    table = result.table("events")
    offsets = table["neighbors_lost_offsets"]
    assert len(events) == len(table["particle"]) > 3
    for i, lost in enumerate(events["neighbors_lost"]):
        assert np.array_equal(
            lost, table["neighbors_lost"][offsets[i] : offsets[i + 1]]
        )


def test_fields_know_what_they_are(result):
    volume, status = result.fields["free_volume"], result.fields["cage_status"]
    assert (volume.unit, volume.dtype, volume.per_particle) == ("sigma+3", "f8", True)
    assert result.fields["ring"].unit == "sigma+2 tau-1"
    assert result.fields["ring"].shape == (3,)
    assert status.codes == scenario.STATUS
    assert result["cage_status"].dtype == np.uint8
    assert result["free_volume"].dtype == np.float64


def test_h5md_as_the_standard_says(path):
    # H5MD 1.1 specification: root group, box, shared step and time, units module.
    with h5py.File(path) as file:
        assert list(file["h5md"].attrs["version"]) == [1, 1]
        for name in ("author", "creator"):
            assert file[f"h5md/{name}"].attrs["name"].dtype.kind == "S"
        assert list(file["h5md/modules/units"].attrs["version"]) == [1, 0]
        box = file["particles/all/box"]
        assert box.attrs["dimension"] == 3
        assert list(box.attrs["boundary"]) == [b"periodic"] * 3
        elements = [box["edges"]]
        elements += [file[f"particles/all/{n}"] for n in ("free_volume", "cage_status")]
        elements += list(file["observables"].values())
        for element in elements:
            assert element["step"] == box["edges/step"]
            assert element["time"] == box["edges/time"]
            assert len(element["value"]) == len(element["step"]) == 12
        assert np.all(np.diff(box["edges/step"]) > 0)


def test_every_dataset_is_documented(path):
    without_unit = {"step", "time"}  # MDAnalysis refuses units it does not know

    def visit(name, item):
        if isinstance(item, h5py.Dataset):
            assert item.attrs["description"].decode(), name
            last = name.rsplit("/", 1)[-1]
            if last not in without_unit and not name.startswith("particles/all/box"):
                assert item.attrs["unit"].decode(), name

    with h5py.File(path) as file:
        file.visititems(visit)
        status = file["particles/all/cage_status/value"]
        assert (
            status.attrs["flag_meanings"]
            == b"closed open border overlap invalid wrapped"
        )
        assert list(status.attrs["flag_values"]) == list(range(6))


def test_mdanalysis_opens_the_file(tmp_path):
    mda = pytest.importorskip("MDAnalysis")
    path = tmp_path / "cages.h5md"
    with scenario.create(path, store_positions=True) as writer:
        for k in range(4):
            writer.append(scenario.record(k, positions=True))
        writer.finish()
    universe = mda.Universe.empty(scenario.N_PARTICLES)
    universe.load_new(str(path), convert_units=False)
    assert len(universe.trajectory) == 4
    for k, ts in enumerate(universe.trajectory):
        frame = scenario.record(k, positions=True)
        wanted = frame.values["position"].astype(np.float32)
        assert np.array_equal(ts.positions, wanted)
        assert ts.time == frame.time
        assert ts.data["packing_fraction"] == frame.values["packing_fraction"]
        np.testing.assert_allclose(
            ts.triclinic_dimensions, frame.box.vectors, atol=1e-5
        )  # MDAnalysis keeps lengths and angles in float32
    universe.trajectory.close()
    with open_result(path) as result:
        assert result["position"].shape == (4, 40, 3)


def test_xarray_opens_the_file(path, result):
    xr = pytest.importorskip("xarray")
    pytest.importorskip("h5netcdf")
    where = {"engine": "h5netcdf", "phony_dims": "sort"}
    with xr.open_dataset(path, group="/particles/all/free_volume", **where) as data:
        np.testing.assert_array_equal(data["value"], result["free_volume"])
        assert data["value"].attrs["unit"] == "sigma+3"
    with xr.open_datatree(path, **where) as tree:
        assert "particles" in tree.children
    data = result.to_xarray(["free_volume", "ring"])
    assert data["free_volume"].dims == ("frame", "particle")
    assert np.array_equal(data["time"], result.times)
    with pytest.raises(UsageError, match="no field 'nonsense'"):
        result.to_xarray(["nonsense"])


def test_two_dimensions_open_edges_changing_radii(tmp_path):
    fields = (Field("radius", "Radius.", "length"),)
    with scenario.create(
        tmp_path / "a.h5",
        fields=fields,
        tables=(),
        arrays=(),
        dimensions=2,
        periodic=(True, False),
        length_unit="um",
        time_unit="s",
        flush_every=0,
    ) as writer:
        for k in range(3):
            frame = scenario.record(k, dimensions=2)
            values = {"radius": np.full(40, 0.5 + k)}
            writer.append(type(frame)(k, k, k, frame.box, values))
        assert (writer.n_pending, writer.frames_complete) == (3, 0)
    with open_result(tmp_path / "a.h5") as result:
        assert not result.complete
        assert result.radii[:, 0].tolist() == [0.5, 1.5, 2.5]
        assert result.box(2).periodic == (True, False)
        assert result.fields["radius"].unit == "um"
        assert result.tables == ()
        assert result.arrays == ()
        assert result.summary == {}


def test_many_particles_use_several_chunks(tmp_path):
    n = 300_000
    fields = (Field("x", "x."), Field("code", "c.", dtype="i4"))
    frame = scenario.record(0)
    values = {"x": np.random.default_rng(0).random(n), "code": np.arange(n)}
    many = {
        "n_particles": n,
        "ids": np.arange(n),
        "species": np.zeros(n, np.int32),
        "radii": np.ones(n),
    }
    with scenario.create(
        tmp_path / "a.h5", fields=fields, tables=(), arrays=(), **many
    ) as writer:
        for k in range(2):
            writer.append(type(frame)(k, k, k, frame.box, values))
        writer.finish()
    with h5py.File(tmp_path / "a.h5") as file:
        for name, given in values.items():
            dataset = file["particles/all"][name]["value"]
            assert dataset.chunks[1] < n
            assert np.array_equal(dataset[1], given)


class TestSeries:
    keys = st.one_of(
        st.just(...),
        st.integers(-12, 11),
        st.slices(12),
        st.tuples(st.slices(12), st.integers(-40, 39)),
        st.tuples(st.just(...), st.slices(40)),
        st.tuples(st.integers(-12, 11), st.slices(40)),
        st.lists(st.integers(-12, 11), max_size=3).map(lambda x: np.array(x, int)),
        st.lists(st.booleans(), min_size=12, max_size=12).map(np.array),
    )

    @given(key=keys)
    @settings(max_examples=60, deadline=None)
    def test_indexing_is_numpy_indexing(self, path, key):
        with open_result(path) as result:
            whole = np.asarray(result["free_volume"])
            np.testing.assert_array_equal(result["free_volume"][key], whole[key])

    def test_is_clipped_to_the_counter(self, tmp_path):
        writer = scenario.create(tmp_path / "a.h5", flush_every=2)
        for k in range(3):
            writer.append(scenario.record(k))
        with open_result(tmp_path / "a.h5") as result:
            series = result["free_volume"]
            assert series.shape == (2, 40)
            np.testing.assert_array_equal(
                series[-1], scenario.record(1).values["free_volume"]
            )
            with pytest.raises(IndexError):
                series[2]
            with pytest.raises(IndexError):
                series[0, 0, 0]
            writer.append(scenario.record(3))
            assert result.frames_complete == len(result.steps) == 2
        with open_result(tmp_path / "a.h5") as result:
            assert result.frames_complete == 4
        writer.close()


def test_unknown_names(result):
    for call in (result.particle, result.observable, result.table, result.array):
        with pytest.raises(UsageError, match=r"cages.h5 has no .* 'nothing'; it has"):
            call("nothing")
    with pytest.raises(UsageError, match="no observable 'free_volume'"):
        result.observable("free_volume")
    assert "free_volume" in result
    assert "nothing" not in result


class TestWriter:
    def test_existing_file(self, path):
        with pytest.raises(ResultFileError, match="exists; continue it with --resume"):
            scenario.create(path)
        with open_result(path) as result:
            assert result.complete

    def test_overwrite(self, tmp_path):
        scenario.run(tmp_path / "a.h5", 3)
        scenario.create(tmp_path / "a.h5", overwrite=True).close()
        with open_result(tmp_path / "a.h5") as result:
            assert (result.frames_complete, result.complete) == (0, False)
            assert result.steps.shape == (0,)
            assert result["free_volume"].shape == (0, 40)
            assert len(result.events) == 0
        assert [p.name for p in tmp_path.iterdir()] == ["a.h5"]

    def test_missing_directory(self, tmp_path):
        with pytest.raises(ResultFileError, match="No such file or directory"):
            scenario.create(tmp_path / "no" / "a.h5")

    def test_two_writers(self, tmp_path):
        with scenario.create(tmp_path / "a.h5") as writer:
            writer.append(scenario.record(0))
            for call in (scenario.create, scenario.resume):
                with pytest.raises(ResultFileError, match="being written by another"):
                    call(tmp_path / "a.h5")

    def test_error_on_its_way_keeps_only_commits(self, tmp_path):
        def interrupted():
            with scenario.create(tmp_path / "a.h5", flush_every=2) as writer:
                for k in range(3):
                    writer.append(scenario.record(k))
                raise KeyboardInterrupt

        with pytest.raises(KeyboardInterrupt):
            interrupted()
        with open_result(tmp_path / "a.h5") as result:
            assert result.frames_complete == 2

    def test_closed_for_good(self, tmp_path):
        writer = scenario.create(tmp_path / "a.h5")
        writer.close()
        writer.close()
        with pytest.raises(ResultFileError, match="it is closed"):
            writer.append(scenario.record(3))

    def test_steps_must_increase(self, tmp_path):
        with scenario.create(tmp_path / "a.h5") as writer:
            writer.append(scenario.record(3))
            with pytest.raises(FrameError, match=r"frame 6 \(step 120\).*after 130"):
                writer.append(scenario.record(2))

    @pytest.mark.parametrize(
        ("change", "message"),
        [
            ({"free_volume": np.zeros(39)}, r"'free_volume': expected shape \(40,\)"),
            ({"cage_status": np.full(40, 256)}, "do not fit the declared type uint8"),
            ({"cage_status": np.full(40, 0.5)}, "do not fit the declared type uint8"),
            ({"free_volume": np.full(40, "a")}, "do not fit the declared type float64"),
            ({"surprise": 1.0}, r"undeclared fields: \['surprise'\]"),
        ],
    )
    def test_values_that_do_not_fit(self, tmp_path, change, message):
        frame = scenario.record(0)
        wrong = type(frame)(0, 0, 0.0, frame.box, {**frame.values, **change})
        missing = type(frame)(0, 0, 0.0, frame.box, {})
        with scenario.create(tmp_path / "a.h5") as writer:
            with pytest.raises(UsageError, match=message):
                writer.append(wrong)
            with pytest.raises(UsageError, match="lacks field 'free_volume'"):
                writer.append(missing)
            writer.append(frame)
            assert writer.frames_complete == 1

    @pytest.mark.parametrize(
        ("rows", "message"),
        [
            ({"nothing": {}}, r"undeclared tables: \['nothing'\]"),
            ({"regions/clusters": {"sise": [1]}}, "expected columns"),
            ({"regions/clusters": {"size": [[1]]}}, "rows of shape"),
            (
                {
                    "events": {
                        "particle": [1],
                        "time": [1.0, 2.0],
                        "neighbors_lost": [],
                        "neighbors_lost_offsets": [0],
                    }
                },
                "must rise|different lengths|do not fit",
            ),
        ],
    )
    def test_rows_that_do_not_fit(self, tmp_path, rows, message):
        with scenario.create(tmp_path / "a.h5") as writer:
            with pytest.raises(UsageError, match=message):
                writer.append(scenario.record(0), rows)
            assert (writer.frames_complete, writer.n_pending) == (0, 0)

    def test_arrays_that_do_not_fit(self, tmp_path):
        with scenario.create(tmp_path / "a.h5") as writer:
            writer.append(scenario.record(0))
            with pytest.raises(UsageError, match="was not declared"):
                writer.flush(arrays={"x": [1]})
            with pytest.raises(UsageError, match=r"expected shape \(5, 2\)"):
                writer.flush(arrays={"correlations/overlap": np.zeros((5, 3))})
            with pytest.raises(UsageError, match="Python objects"):
                writer.flush(state={"x": np.array([{}])})

    def test_arrays_and_summary_can_shrink(self, tmp_path):
        with scenario.create(tmp_path / "a.h5") as writer:
            writer.flush(
                arrays={"histograms/free_volume": np.arange(9)},
                summary={"text": "long " * 99},
            )
            writer.flush(arrays={"histograms/free_volume": [5, 6]}, summary={"b": 1})
            with open_result(tmp_path / "a.h5") as result:
                assert result.array("histograms/free_volume").tolist() == [5, 6]
                assert result.summary == {"b": 1}
        with h5py.File(tmp_path / "a.h5") as file:
            assert json.loads(file["trajcage/summary"][()].tobytes()) == {"b": 1}

    @pytest.mark.parametrize(
        "changes",
        [
            {"fields": [Field("id", "taken")]},
            {"fields": [Field("a b", "space")]},
            {"fields": [Field("a", "one"), Field("a", "two")]},
            {"fields": [Field("a", "unit", unit="meter")]},
            {"fields": [Field("a", "type", dtype="c16")]},
            {"ids": np.arange(3)},
            {"periodic": (True,)},
            {"dimensions": 4},
            {"arrays": [ArraySpec("/trajcage/events", "clash")]},
        ],
    )
    def test_declarations_that_cannot_be(self, tmp_path, changes):
        with pytest.raises(UsageError):
            scenario.create(tmp_path / "a.h5", **changes)
        assert list(tmp_path.iterdir()) == []

    def test_paths_that_cannot_be(self):
        with pytest.raises(UsageError, match="bookkeeping"):
            TableSpec("/trajcage/state", (Field("a", "a"),))
        with pytest.raises(UsageError, match="expected a path"):
            ArraySpec("/observables/x", "x")
        with pytest.raises(UsageError, match="no columns"):
            TableSpec("/trajcage/t", ())
        with pytest.raises(UsageError, match="first axis"):
            ArraySpec("/trajcage/x", "x", shape=(3, None))


class TestResume:
    def test_goes_on_behind_the_last_frame(self, tmp_path):
        fold = scenario.Fold()
        with scenario.create(tmp_path / "a.h5", flush_every=4) as writer:
            for k in range(6):
                writer.append(scenario.record(k), state=fold.add(scenario.record(k)))
        with scenario.resume(tmp_path / "a.h5") as writer:
            assert (writer.frames_complete, writer.last_source_frame) == (6, 15)
            assert not writer.complete
            assert writer.state.keys() == {"sum", "times"}
            assert np.array_equal(writer.state["sum"], fold.sum)
            with pytest.raises(FrameError, match="expected a step after 150"):
                writer.append(scenario.record(5))

    def test_names_every_option_that_differs(self, path):
        before = path.read_bytes()
        options = {"diameter": 1.1, "reach": 4.0, "fresh": True}
        with pytest.raises(ResultFileError) as caught:
            scenario.resume(path, options=options)
        for part in ("diameter was 1.0, now 1.1", "skip was []", "fresh was not set"):
            assert part in str(caught.value)
        assert "reach" not in str(caught.value)
        assert path.read_bytes() == before

    def test_other_datasets(self, path):
        with pytest.raises(ResultFileError, match="its fields differ"):
            scenario.resume(path, fields=scenario.FIELDS[1:])
        with pytest.raises(ResultFileError, match="its tables differ"):
            scenario.resume(path, tables=())
        with pytest.raises(ResultFileError, match=r"its fields differ.*position"):
            scenario.resume(path, store_positions=True)

    def test_no_such_file(self, tmp_path):
        with pytest.raises(ResultFileError, match="no such file"):
            scenario.resume(tmp_path / "a.h5")
        assert list(tmp_path.iterdir()) == []

    def test_a_finished_file_can_grow(self, tmp_path):
        scenario.run(tmp_path / "a.h5", 4)
        scenario.run(tmp_path / "b.h5", 7)
        scenario.run(tmp_path / "a.h5", 7)
        with open_result(tmp_path / "a.h5") as a, open_result(tmp_path / "b.h5") as b:
            for name in a.tables:
                for column, values in b.table(name).items():
                    assert np.array_equal(a.table(name)[column], values)
            assert a.complete


def test_describe_file(tmp_path):
    path = tmp_path / "in.gsd"
    path.write_bytes(b"hard spheres")
    found = describe_file(path)
    assert found["size"] == 12
    assert found["sha256"] == hashlib.sha256(b"hard spheres").hexdigest()
    assert found["modified"].endswith("+00:00")
    with pytest.raises(InputError, match="cannot read"):
        describe_file(tmp_path / "absent")
