"""Files that are damaged, foreign or hostile, disks that are full, live readers."""

import os
import pickle
import random
import struct
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest
import store_scenario as scenario
from test_store_kill import check_frames, start, stop, wait_for

from trajcage.errors import ResultFileError, UsageError
from trajcage.store import open_result, salvage
from trajcage.store.commit import Commit, latest_commit
from trajcage.store.framing import pack_arrays, unpack_arrays
from trajcage.store.guard import guard
from trajcage.store.superblock import lookup3, read_superblock, repair_superblock


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    path = tmp_path_factory.mktemp("damage") / "whole.h5"
    scenario.run(path, 20)
    return path.read_bytes()


@pytest.fixture
def path(tmp_path, original):
    path = tmp_path / "cages.h5"
    path.write_bytes(original)
    return path


def test_checksum_of_the_superblock(path):
    # Test vectors printed in the comments of lookup3.c (Bob Jenkins, 2006,
    # public domain): the empty string, and 30 characters with seed 0.
    assert lookup3(b"") == 0xDEADBEEF
    assert lookup3(b"Four score and seven years ago") == 0x17770551
    # And what the HDF5 library itself wrote.
    head = path.read_bytes()[:48]
    assert struct.unpack_from("<I", head, 44)[0] == lookup3(head[:44])
    assert read_superblock(path).pack() == head


class TestForeign:
    @pytest.mark.parametrize(
        ("content", "message"),
        [
            (b"", "not an HDF5 file: found an empty file"),
            (b"ITEM: TIMESTEP\n" * 9, "not an HDF5 file: found a file that starts"),
            (b"\x89HDF\r\n\x1a\n", "not an HDF5 file"),
        ],
    )
    def test_other_bytes(self, tmp_path, content, message):
        (tmp_path / "a.h5").write_bytes(content)
        with pytest.raises(ResultFileError, match=message):
            open_result(tmp_path / "a.h5")

    def test_missing_and_directory(self, tmp_path):
        with pytest.raises(ResultFileError, match="No such file"):
            open_result(tmp_path / "a.h5")
        with pytest.raises(ResultFileError, match="Is a directory"):
            open_result(tmp_path)

    @pytest.mark.parametrize("libver", ["earliest", "v110", "latest"])
    def test_other_hdf5(self, tmp_path, libver):
        with h5py.File(tmp_path / "a.h5", "w", libver=libver) as file:
            file["x"] = 1.0
        with pytest.raises(ResultFileError, match=r"not .*trajcage"):
            open_result(tmp_path / "a.h5")

    def test_newer_format(self, path):
        with h5py.File(path, "r+") as file:
            file["trajcage/format_version"][()] = 2
        with pytest.raises(ResultFileError, match="format version 2, this trajcage"):
            open_result(path)


def _external_link(file):
    file["particles/all/alien"] = h5py.ExternalLink("/etc/other.h5", "/x")


def _soft_link(file):
    del file["observables/ring"]
    file["observables/ring"] = h5py.SoftLink("/particles/all/id")


def _virtual(file):
    layout = h5py.VirtualLayout((20, 40), "f8")
    layout[:] = h5py.VirtualSource("other.h5", "x", (20, 40))
    del file["particles/all/free_volume/value"]
    file["particles/all/free_volume"].create_virtual_dataset("value", layout)


def _external_storage(file):
    del file["particles/all/radius"]
    file.create_dataset(
        "particles/all/radius", (40,), "f8", external=[("/etc/passwd", 0, 320)]
    )


def _objects(file):
    file["trajcage"].create_dataset("text", data="x", dtype=h5py.string_dtype())


def _references(file):
    file["trajcage"].create_dataset("where", data=file.ref, dtype=h5py.ref_dtype)


def _named_type(file):
    file["trajcage/type"] = np.dtype("f8")


def _other_filter(file):
    file.create_dataset("trajcage/x", (9,), "f8", scaleoffset=3)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (_external_link, r"alien is a link \(ExternalLink\)"),
        (_soft_link, r"ring is a link \(SoftLink\)"),
        (_virtual, "free_volume/value is a virtual dataset"),
        (_external_storage, "radius keeps its data in other files"),
        (_objects, "text is of type object"),
        (_references, "where is of type object"),
        (_named_type, "neither group nor dataset"),
        (_other_filter, "unknown filters"),
    ],
)
def test_hostile_contents(path, change, message):
    with h5py.File(path, "r+") as file:
        change(file)
    with pytest.raises(ResultFileError, match=message):
        open_result(path)
    with pytest.raises(ResultFileError, match=message):
        salvage(path, path.with_name("copy.h5"))
    assert not path.with_name("copy.h5").exists()


def test_absurd_sizes(path):
    with h5py.File(path, "r+") as file:
        for name, dtype in (("free_volume", "f8"), ("cage_status", "u1")):
            group = file["particles/all"][name]
            del group["value"]
            packed = {} if dtype == "f8" else {"compression": "gzip"}
            group.create_dataset(
                "value", (20, 1 << 40), dtype, chunks=(1, 1 << 16), **packed
            )
    with open_result(path) as result:
        for name in ("free_volume", "cage_status"):
            with pytest.raises(ResultFileError, match="damaged: it claims shape"):
                np.asarray(result[name])


def test_group_that_contains_itself(path):
    with h5py.File(path, "r+") as file:
        file["trajcage/frames/again"] = file["trajcage"]
    with open_result(path) as result:
        check_frames(result)


def test_counter_beyond_the_data(path):
    with h5py.File(path, "r+") as file:
        file["observables/ring/value"].resize(7, axis=0)
    with open_result(path) as result:
        with pytest.raises(ResultFileError, match="20 rows are marked valid, 7 are"):
            np.asarray(result["ring"])
        assert result["free_volume"].shape == (20, 40)
    assert salvage(path, path.with_name("copy.h5")) == 7


class TestCommit:
    names = ("events", "x")

    def test_later_generation_counts(self):
        one = Commit.initial(self.names)
        two = Commit(2, 5, True, 5, 10, 1, 20, {"events": 3, "x": 4})
        table = np.stack([two.encode(), one.encode()])
        assert latest_commit(table, two.columns, Path("r.h5")) == two
        for column in range(table.shape[1]):
            torn = table.copy()
            torn[0, column] += 1
            assert latest_commit(torn, two.columns, Path("r.h5")) == one

    def test_nothing_valid(self, path):
        with h5py.File(path, "r+") as file:
            file["trajcage/commit"][:, 1] = 10**12
        with pytest.raises(
            ResultFileError, match=f"{path}: the commit record is damaged"
        ):
            open_result(path)


class TestState:
    def test_round_trip(self):
        state = {
            "empty": np.zeros((0, 3)),
            "scalar": np.array(3.5),
            "größe": np.arange(6, dtype=np.uint8).reshape(2, 3),
            "text": np.array(["a", "bc"]),
        }
        state["large"] = np.arange(400_000.0).reshape(2, -1)
        back = unpack_arrays(b"".join(pack_arrays(state)), Path("r.h5"))
        assert back.keys() == state.keys()
        for name, values in state.items():
            np.testing.assert_array_equal(back[name], values, strict=True)
        assert unpack_arrays(b"".join(pack_arrays({})), Path("r.h5")) == {}

    def test_no_objects_either_way(self):
        with pytest.raises(UsageError, match="Python objects"):
            pack_arrays({"x": np.array([None])})
        with pytest.raises(ResultFileError, match="state of the run is damaged"):
            unpack_arrays(pickle.dumps({"x": 1}), Path("r.h5"))

    def test_damage_is_seen(self):
        data = b"".join(pack_arrays({"x": np.arange(9.0)}))
        for position in range(len(data)):
            wrong = bytearray(data)
            wrong[position] ^= 0x10
            with pytest.raises(ResultFileError, match="state of the run is damaged"):
                unpack_arrays(bytes(wrong), Path("r.h5"))
        with pytest.raises(ResultFileError):
            unpack_arrays(data[:-1], Path("r.h5"))


class TestTruncated:
    @pytest.mark.parametrize("part", [0.2, 0.5, 0.7, 0.8, 0.9, 0.97])
    def test_what_is_left_is_right(self, tmp_path, original, part):
        path, copy = tmp_path / "cages.h5", tmp_path / "copy.h5"
        path.write_bytes(original[: int(part * len(original))])
        with pytest.raises(ResultFileError, match="truncated"):
            open_result(path)
        try:
            frames = salvage(path, copy)
        except ResultFileError:
            assert part < 0.6  # the structure itself is cut off
            assert not copy.exists()
            return
        with open_result(copy) as result:
            assert result.frames_complete == frames
            assert not result.complete
            check_frames(result)

    def test_only_the_last_frames_are_lost(self, tmp_path):
        # Frames of 3000 particles: the end of the file is the last frames.
        path, copy = tmp_path / "cages.h5", tmp_path / "copy.h5"
        n, frame = 3000, scenario.record(0)
        many = {"n_particles": n, "ids": np.arange(n), "radii": np.ones(n)}
        with scenario.create(
            path,
            fields=scenario.FIELDS[:1],
            species=np.zeros(n, np.int32),
            tables=(),
            arrays=(),
            **many,
        ) as writer:
            for k in range(40):
                values = {"free_volume": np.full(n, float(k))}
                writer.append(type(frame)(k, k, k, frame.box, values))
        os.truncate(path, path.stat().st_size - 5 * 8 * n)
        assert 30 <= salvage(path, copy) < 40
        with open_result(copy) as result:
            values = np.asarray(result["free_volume"])
            assert np.array_equal(values[:, 5], np.arange(len(values)))


def test_salvage_keeps_everything_of_a_whole_file(path, tmp_path):
    assert salvage(path, tmp_path / "copy.h5") == 20
    with open_result(tmp_path / "copy.h5") as copy, open_result(path) as result:
        assert copy.complete
        assert copy.summary == result.summary
        for name in result.arrays:
            assert np.array_equal(copy.array(name), result.array(name))
        check_frames(copy)
    with h5py.File(tmp_path / "copy.h5") as file:
        particles = file["particles/all"]
        assert particles["free_volume/step"] == particles["box/edges/step"]
    with pytest.raises(ResultFileError, match="exists; choose another name"):
        salvage(path, tmp_path / "copy.h5")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["cages.h5", "copy.h5"]


def test_flipped_bits_never_escape_as_foreign_errors(path, original):
    seed = random.Random(3)
    refused = 0
    for _ in range(60):
        data = bytearray(original)
        for _ in range(seed.choice([1, 4, 40])):
            data[seed.randrange(len(data))] ^= 1 << seed.randrange(8)
        path.write_bytes(data)
        try:
            with open_result(path) as result:
                for name in result.fields:
                    np.asarray(result[name])
                for name in result.tables:
                    result.table(name)
                for name in result.arrays:
                    result.array(name)
                assert result.parameters is not None
                assert result.summary is not None
                assert len(result.boxes) == result.frames_complete
        except ResultFileError:
            refused += 1
    assert refused > 5


class TestLive:
    def test_reading_beside_a_writer(self, tmp_path):
        path = tmp_path / "cages.h5"
        process = start(path, 100_000, STORE_SCENARIO_PAUSE="0.003")
        try:
            wait_for(path, process)
            counts = []
            while len(counts) < 8:
                with open_result(path) as result:
                    counts.append(result.frames_complete)
                    check_frames(result)
            assert counts == sorted(counts)
            with pytest.raises(ResultFileError, match="being written by another"):
                scenario.resume(path)
            with pytest.raises(ResultFileError, match="is being written"):
                salvage(path, tmp_path / "copy.h5")
        finally:
            stop(process)

    def test_locks_turned_off(self, tmp_path, monkeypatch):
        monkeypatch.setenv("HDF5_USE_FILE_LOCKING", "FALSE")
        path = tmp_path / "cages.h5"
        with scenario.create(path) as writer:
            writer.append(scenario.record(0))
            assert [p.name for p in tmp_path.iterdir()] == ["cages.h5"]
            with open_result(path) as result:
                check_frames(result)


def test_repair_touches_the_superblock_only(tmp_path):
    path = tmp_path / "cages.h5"
    process = start(path, 100_000)
    wait_for(path, process)
    time.sleep(0.1)
    stop(process)
    before = path.read_bytes()
    assert repair_superblock(path)
    assert not repair_superblock(path)
    after = path.read_bytes()
    assert before[48:] == after[48:]
    assert read_superblock(path).end_of_file == len(after)
    with h5py.File(path) as file:  # the library agrees
        assert file["trajcage/frames_complete"][()] >= 1


_FULL_DISK = """
import resource, sys
import store_scenario as scenario
from pathlib import Path
from trajcage.errors import ResultFileError
path, limit = Path(sys.argv[1]), int(sys.argv[2])
resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
try:
    scenario.run(path, 100_000)
except ResultFileError as error:
    print(error)
"""


@pytest.mark.parametrize("limit", [3_000, 300_000])
def test_full_disk(tmp_path, limit):
    # The limit on the size of a file fails in the same calls as a full disk.
    path = tmp_path / "cages.h5"
    done = subprocess.run(
        [sys.executable, "-c", _FULL_DISK, path, str(limit)],
        cwd=Path(__file__).parent,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert str(path) in done.stdout, done.stderr
    assert "Traceback" not in done.stderr
    if limit == 3_000:
        assert list(tmp_path.iterdir()) == []
        return
    with open_result(path) as result:
        assert result.frames_complete > 10
        committed = result.frames_complete
        check_frames(result)
    scenario.run(path, committed + 3)
    with open_result(path) as result:
        assert result.complete
        check_frames(result)


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_directory_without_permission(tmp_path):
    tmp_path.chmod(0o500)
    with pytest.raises(ResultFileError, match="Permission denied"):
        scenario.create(tmp_path / "cages.h5")
    tmp_path.chmod(0o700)


def test_the_cause_is_found_in_the_words_of_hdf5():
    words = (
        "Unable to flush raw data (file write failed: time = Tue\n, errno = 28, ...)"
    )
    expected = pytest.raises(ResultFileError, match=r"r\.h5: writing failed: No space")
    with expected, guard(Path("r.h5"), "writing"):
        raise RuntimeError(words)
