"""Killed at any moment: the file opens, what is committed is intact, it resumes."""

import os
import random
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest
import store_scenario as scenario

from trajcage.store import open_result, salvage
from trajcage.store.superblock import read_superblock

HERE = Path(__file__).parent


def start(path, n_frames, flush_every=1, **environment):
    return subprocess.Popen(
        [
            sys.executable,
            HERE / "store_scenario.py",
            path,
            str(n_frames),
            str(flush_every),
        ],
        env=os.environ | environment,
        stderr=subprocess.PIPE,
    )


def wait_for(path, process):
    while not path.exists():
        assert process.poll() is None, process.stderr.read().decode()
        time.sleep(0.001)


def stop(process):
    process.kill()
    process.wait()
    process.stderr.close()


def check_frames(result):
    """Every frame up to the counter is exactly what was appended."""
    n = result.frames_complete
    assert np.array_equal(result.steps, 100 + 10 * np.arange(n))
    assert np.array_equal(result.source_frames, 3 * np.arange(n))
    series = {name: np.asarray(result[name]) for name in result.fields}
    for k in range(n):
        frame = scenario.record(k)
        assert np.array_equal(result.box(k).vectors, frame.box.vectors)
        for name, values in frame.values.items():
            assert np.array_equal(
                series[name][k], values, equal_nan=name == "free_volume"
            )
    expected = [scenario.rows(k)["events"] for k in range(n)]
    events = result.table("events")
    assert len(events["neighbors_lost_offsets"]) == len(events["particle"]) + 1
    for name in ("particle", "time", "neighbors_lost"):
        wanted = np.concatenate([[], *(rows[name] for rows in expected)])
        assert np.array_equal(events[name], wanted)


def contents(path):
    """Every dataset and attribute except the bookkeeping of commits."""
    found = {}

    def visit(name, item):
        found.update({f"{name}@{key}": value for key, value in item.attrs.items()})
        if isinstance(item, h5py.Dataset) and not name.startswith(
            ("trajcage/state", "trajcage/commit")
        ):
            found[name] = item[()]

    with h5py.File(path) as file:
        file.visititems(visit)
    return found


def assert_same_contents(one, other):
    a, b = contents(one), contents(other)
    assert a.keys() == b.keys()
    for name, values in a.items():
        np.testing.assert_array_equal(values, b[name], err_msg=name, strict=True)


@pytest.fixture(scope="module")
def reference(tmp_path_factory):
    path = tmp_path_factory.mktemp("reference") / "whole.h5"
    scenario.run(path, 30)
    return path


@pytest.mark.parametrize("trial", range(20))
def test_killed_at_a_random_moment(trial, tmp_path):
    path = tmp_path / "cages.h5"
    process = start(path, 100_000, flush_every=(1, 1, 3, 7)[trial % 4])
    wait_for(path, process)
    time.sleep(random.Random(trial).uniform(0.0, 0.06))
    stop(process)
    assert read_superblock(path).open_for_writing
    with pytest.raises(OSError, match="already open for write"):
        h5py.File(path)
    with h5py.File(path, "r", swmr=True) as file:
        counter = int(file["trajcage/frames_complete"][()])
    with open_result(path) as result:
        committed = result.frames_complete
        assert counter in {committed, committed - (1, 1, 3, 7)[trial % 4]}
        assert not result.complete
        check_frames(result)
    files = [path]
    if trial % 3 == 0:
        files.append(tmp_path / "copy.h5")
        assert salvage(path, files[-1]) == committed
    whole = tmp_path / "whole.h5"
    scenario.run(whole, committed + 8)
    for killed in files:
        scenario.run(killed, committed + 8, flush_every=2)
        assert not read_superblock(killed).open_for_writing
        with open_result(killed) as result:
            assert result.complete
            check_frames(result)
        assert_same_contents(killed, whole)


def test_killed_again_and_again_equals_uninterrupted(tmp_path, reference):
    path = tmp_path / "cages.h5"
    seed = random.Random(5)
    kills = 0
    for _ in range(6):
        process = start(path, 30, STORE_SCENARIO_PAUSE="0.02")
        wait_for(path, process)
        time.sleep(0.35 + seed.uniform(0.0, 0.1))
        if process.poll() is None:
            kills += 1
        stop(process)
    scenario.run(path, 30)
    assert kills >= 1
    assert_same_contents(path, reference)


@pytest.mark.parametrize("moment", ["close", "_write_arrays", "_publish"])
def test_killed_while_finishing(moment, tmp_path):
    path = tmp_path / "cages.h5"
    code = f"""
import os, sys, pathlib, store_scenario
from trajcage.store import ResultWriter
writer = store_scenario.create(pathlib.Path(sys.argv[1]), flush_every=0)
writer.append(store_scenario.record(0), store_scenario.rows(0))
writer.flush(state={{}}, arrays={{"histograms/free_volume": [1]}}, summary={{"a": 1}})
writer.append(store_scenario.record(1), store_scenario.rows(1))
ResultWriter.{moment} = lambda *_, **__: os.kill(os.getpid(), 9)
writer.finish(arrays={{"histograms/free_volume": [2, 3]}}, summary={{"b": 2}})
"""
    done = subprocess.run([sys.executable, "-c", code, path], cwd=HERE, check=False)
    assert done.returncode == -9
    with open_result(path) as result:
        check_frames(result)
        histogram = result.array("histograms/free_volume").tolist()
        whole = moment == "close"
        assert (result.frames_complete, result.complete) == (
            (2, True) if whole else (1, False)
        )
        if moment == "_write_arrays":  # half-replaced arrays are not shown
            assert (histogram, result.summary, result.arrays_frames) == ([], {}, -1)
        else:
            assert histogram == ([2, 3] if whole else [1])
            assert result.summary == ({"b": 2} if whole else {"a": 1})
