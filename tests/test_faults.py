"""Whatever goes wrong: one clear error, an exit code that tells, nothing lost."""

import contextlib
import os
import random
import shutil
import signal
import subprocess
import sys
import time

import crowd
import numpy as np
import psutil
import pytest
import run_scenario as scenario
import store_scenario

import trajcage
from trajcage.errors import FrameError, ResultFileError
from trajcage.run import loop

N_FRAMES = 10


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    return crowd.write(tmp_path_factory.mktemp("source") / "a.gsd", N_FRAMES)


@pytest.fixture(scope="module")
def whole(source):
    path = source.with_name("whole.h5")
    measure(source, path)
    return path


def measure(source, path, **options):
    trajcage.measure(source, output=path, **options).close()


def command(*words):
    return [sys.executable, "-m", "trajcage", *map(str, words)]


def call(*words, code=0, **options):
    done = subprocess.run(
        command(*words), capture_output=True, text=True, check=False, **options
    )
    assert done.returncode == code, done.stderr
    assert "Traceback" not in done.stderr
    return done.stderr


def write_dump(path, frames, last=1.0):
    """A LAMMPS dump; of the last frame only a share is written yet."""
    text = []
    for k, positions in enumerate(frames):
        lines = ["ITEM: TIMESTEP", str(10 * k), "ITEM: NUMBER OF ATOMS", "27"]
        lines += ["ITEM: BOX BOUNDS pp pp pp", *["-2.5 2.5"] * 3]
        lines += ["ITEM: ATOMS id type x y z"]
        lines += [
            f"{i + 1} 1 {x:.9f} {y:.9f} {z:.9f}"
            for i, (x, y, z) in enumerate(positions)
        ]
        text.append("\n".join(lines) + "\n")
    text[-1] = text[-1][: int(last * len(text[-1]))]
    path.write_text("".join(text))
    return path


class TestGrowth:
    def test_a_growing_dump_is_followed_by_resuming(self, tmp_path):
        path, dump = tmp_path / "r.h5", tmp_path / "a.lammpstrj"
        frames = crowd.crowd(9)
        options = {"diameter": crowd.DIAMETER, "resume": True}
        measure(write_dump(dump, frames[:3]), path, **options)
        write_dump(dump, frames[:6], last=0.6)  # while the simulation writes
        with pytest.raises(FrameError, match="frame 5"):
            measure(dump, path, **options)
        with trajcage.open_result(path) as result:
            assert (result.frames_complete, result.complete) == (5, False)
        measure(write_dump(dump, frames), path, **options)
        measure(dump, tmp_path / "whole.h5", diameter=crowd.DIAMETER)
        scenario.assert_same(path, tmp_path / "whole.h5")
        with trajcage.open_result(path) as result:  # as it was, and as it is
            assert result.parameters["inputs"][0]["size"] < dump.stat().st_size
            assert result.summary["inputs"][0]["size"] == dump.stat().st_size

    def test_a_file_whose_head_changes_as_it_grows(self, tmp_path):
        path, gsd = tmp_path / "r.h5", tmp_path / "a.gsd"
        for n_frames in (2, 5, 8):
            crowd.write(gsd, n_frames)
            measure(gsd, path, resume=True)
        measure(gsd, tmp_path / "whole.h5")
        scenario.assert_same(path, tmp_path / "whole.h5")

    @pytest.mark.parametrize(
        ("n_frames", "changed", "message"),
        [
            (5, 1, "is not the file that it was made from.*sha256"),
            (3, None, "is not the file that it was made from.*only a trajectory that"),
            (8, 1, "frames measured so far are no longer the same"),
        ],
    )
    def test_a_changed_trajectory_is_refused(
        self, n_frames, changed, message, tmp_path
    ):
        path, dump = tmp_path / "r.h5", tmp_path / "a.lammpstrj"
        frames = crowd.crowd(8)
        options = {"diameter": crowd.DIAMETER, "resume": True}
        measure(write_dump(dump, frames[:5]), path, **options)
        before = scenario.contents(path)
        if changed is not None:
            frames[changed] = frames[changed] + 1e-3
        with pytest.raises(ResultFileError, match=message):
            measure(write_dump(dump, frames[:n_frames]), path, **options)
        after = scenario.contents(path)
        assert all(before[k].tobytes() == after[k].tobytes() for k in before)

    def test_frames_counted_from_the_end_do_not_fit_a_grown_file(self, tmp_path):
        path, gsd = tmp_path / "r.h5", tmp_path / "a.gsd"
        measure(crowd.write(gsd, 4), path, start=-2)
        with pytest.raises(ResultFileError, match="count start and stop from"):
            measure(crowd.write(gsd, 6), path, start=-2, resume=True)


def test_a_finished_file_does_not_tell_how_often_it_was_committed(tmp_path):
    paths = [tmp_path / "once.h5", tmp_path / "twice.h5"]
    for path in paths:
        with store_scenario.create(path, flush_every=0) as writer:
            writer.append(store_scenario.record(0), store_scenario.rows(0))
            if path is paths[1]:  # with a longer array on the way
                long = {"histograms/free_volume": np.arange(3000)}
                writer.flush(state={}, arrays=long, summary={})
            writer.finish(
                arrays={"histograms/free_volume": [1, 2]}, summary={}, state={}
            )
    scenario.assert_same(*paths)


def test_killed_at_random_moments_and_resumed(source, whole, tmp_path):
    """Here a few; scripts/kill_runs.py does hundreds."""
    path, moments = tmp_path / "r.h5", random.Random(4)
    for _ in range(3):
        process = subprocess.Popen(
            command("measure", source, "-o", path, "--resume", "-q")
        )
        deadline = time.monotonic() + 60
        while not path.exists() and process.poll() is None:
            assert time.monotonic() < deadline
            time.sleep(0.005)
        time.sleep(moments.uniform(0.0, 0.3))
        process.kill()
        process.wait()
        with (
            trajcage.open_result(path) as result,
            trajcage.open_result(whole) as expected,
        ):
            n = result.frames_complete
            for name in result.fields:
                one, other = np.asarray(result[name]), np.asarray(expected[name][:n])
                assert one.tobytes() == other.tobytes()
    measure(source, path, resume=True)
    scenario.assert_same(path, whole)


def test_workers_do_not_outlive_a_killed_run():
    code = (
        "import os, signal\n"
        "from trajcage.run.workers import _executor\n"
        "print(_executor(1).submit(os.getpid).result(), flush=True)\n"
        "os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", code],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, check=False,
    )  # fmt: skip
    assert done.returncode == -signal.SIGKILL
    with contextlib.suppress(psutil.NoSuchProcess):
        psutil.Process(int(done.stdout)).wait(30)  # raises TimeoutExpired


def test_ctrl_c_stops_workers_and_parent_in_good_order(tmp_path):
    path, source = tmp_path / "r.h5", crowd.write(tmp_path / "a.gsd", 2000)
    process = subprocess.Popen(
        command("measure", source, "-o", path, "--workers", 2),
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    deadline = time.monotonic() + 120
    done = 0
    while done < 2 and process.poll() is None:
        assert time.monotonic() < deadline
        time.sleep(0.02)
        if path.exists():  # a second process may always read
            with trajcage.open_result(path) as result:
                done = result.frames_complete
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: all processes
    told = process.communicate(timeout=120)[1]
    assert process.returncode == 130, told
    assert "stopped by SIGINT" in told
    assert "Traceback" not in told
    assert "excepthook" not in told  # of workers that leave files open
    while is_there(process.pid):
        assert time.monotonic() < deadline, "workers are left"
        time.sleep(0.02)


def is_there(group):
    try:
        os.killpg(group, 0)
    except ProcessLookupError:
        return False
    return True


@pytest.fixture
def small_disk(tmp_path):
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = shutil.which("mount")
    if os.geteuid() != 0 or mount is None:
        pytest.skip("mounting a small disk needs root")
    done = subprocess.run(
        [mount, "-t", "tmpfs", "-o", "size=2m", "tmpfs", folder],
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode:
        pytest.skip(f"cannot mount a small disk here: {done.stderr.strip()}")
    yield folder
    subprocess.run(["umount", folder], check=True)


_COMMIT_EVERY_FRAME = """
from trajcage.cli import main
from trajcage.run import loop

loop._COMMIT_EVERY = loop._COMMIT_SHARE = 0.0  # as if frames were slow
main()
"""


def test_a_full_disk_costs_nothing_committed(small_disk, tmp_path):
    path = small_disk / "r.h5"
    words = ["measure", scenario.GLASS, "-o", path, "--stop", 12]
    words += ["--skip", "order", "--skip", "time"]  # without the state of the fold
    done = subprocess.run(
        [sys.executable, "-c", _COMMIT_EVERY_FRAME, *map(str, words)],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1, done.stderr
    assert f"{path}: writing failed: No space left on device" in done.stderr
    with trajcage.open_result(path) as result:
        assert 1 <= result.frames_complete < 12
    subprocess.run(["mount", "-o", "remount,size=20m", small_disk], check=True)
    options = {"stop": 12, "skip": ["order", "time"]}
    measure(scenario.GLASS, path, resume=True, **options)
    measure(scenario.GLASS, tmp_path / "whole.h5", **options)
    scenario.assert_same(path, tmp_path / "whole.h5")


def test_a_trajectory_cut_short_while_it_is_read(tmp_path):
    path = tmp_path / "r.h5"
    dump = write_dump(tmp_path / "a.lammpstrj", crowd.crowd(6))
    size = dump.stat().st_size

    def cut(done, total):
        os.truncate(dump, size * 7 // 12)  # within the fourth frame

    with pytest.raises(FrameError, match="frame 3"):
        measure(dump, path, diameter=crowd.DIAMETER, progress=cut)
    with trajcage.open_result(path) as result:
        assert result.frames_complete == 3


def test_an_output_folder_that_is_not_there_or_goes_away(source, tmp_path):
    with pytest.raises(ResultFileError, match="No such file or directory"):
        measure(source, tmp_path / "nowhere" / "r.h5")
    folder = tmp_path / "here"
    folder.mkdir()

    def remove(done, total):
        shutil.rmtree(folder, ignore_errors=True)

    with pytest.raises(ResultFileError, match=r"r\.h5.*No such file or directory"):
        measure(source, folder / "r.h5", progress=remove)


_COMPILE = """
import numpy as np
from trajcage.kernel.jit import _CACHE_DIRECTORY, compiled

@compiled
def double(x):
    return 2.0 * x

assert _CACHE_DIRECTORY is None, _CACHE_DIRECTORY
assert double(2.0) == 4.0
"""


@pytest.mark.parametrize("kind", ["no folder", "read-only folder"])
def test_kernels_compile_without_a_writable_cache(kind, tmp_path):
    cache, rights = "/dev/null/cache", []
    if kind == "read-only folder":
        tmp_path.chmod(0o555)
        cache = str(tmp_path)
        if os.geteuid() == 0:  # who may write everywhere unless told otherwise
            rights = ["setpriv", "--bounding-set=-dac_override"]
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("NUMBA", "XDG"))}
    done = subprocess.run(
        [*rights, sys.executable, "-c", _COMPILE],
        env=kept | {"HOME": cache, "XDG_CACHE_HOME": cache, "NUMBA_CACHE_DIR": cache},
        capture_output=True,
        text=True,
        check=False,
    )
    tmp_path.chmod(0o755)
    assert done.returncode == 0, done.stderr
    assert "set NUMBA_CACHE_DIR to a writable directory" in done.stderr


def test_a_damaged_file_is_told_apart_and_salvaged(
    source, whole, tmp_path, monkeypatch
):
    damaged, copy, mended = (
        tmp_path / f"{k}.h5" for k in ("damaged", "copy", "mended")
    )
    monkeypatch.setattr(loop, "_COMMIT_EVERY", 0.0)  # as slow frames are
    monkeypatch.setattr(loop, "_COMMIT_SHARE", 0.0)
    measure(source, damaged)
    os.truncate(damaged, damaged.stat().st_size * 4 // 5)
    told = call("summary", damaged, code=1)
    assert "trajcage salvage" in told
    told = call("salvage", damaged, copy)
    with trajcage.open_result(copy) as result:
        frames = result.frames_complete
        assert 0 < frames < N_FRAMES
        assert f"{frames} complete frames" in told
        assert not result.resumable
    assert "trajcage merge" in told
    with pytest.raises(ResultFileError, match=r"salvaged.*trajcage merge"):
        measure(source, copy, resume=True)
    # what the frames alone do not hold is measured anew, then the run goes on
    trajcage.merge([copy], output=mended).close()
    measure(source, mended, resume=True)
    scenario.assert_same(mended, whole)
    told = call("salvage", damaged, copy, code=1)
    assert "exists" in told
