"""Frames measured by several processes or a cluster: the same bits, whoever dies."""

import functools
import json
import os
import signal

import crowd
import fatal_blocks
import hypothesis
import MDAnalysis
import numpy as np
import psutil
import pytest
import run_scenario as scenario
from hypothesis import strategies as st

import trajcage
from trajcage.errors import (
    FrameError,
    InputError,
    InterruptedRunError,
    TrajcageError,
    UsageError,
)
from trajcage.readers import InputOptions
from trajcage.run import blocks, workers
from trajcage.run.settings import RunSettings

N_FRAMES = 14

distributed = pytest.importorskip("distributed")


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    return crowd.write(tmp_path_factory.mktemp("source") / "a.gsd", N_FRAMES)


@pytest.fixture(scope="module")
def whole(source):
    """The result of one process in one go."""
    path = source.with_name("whole.h5")
    trajcage.measure(source, output=path, store_positions=True).close()
    return path


@pytest.fixture(scope="module")
def cluster():
    """Two worker processes of one thread each."""
    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=":0"
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        yield client


def measure(source, output, **options):
    trajcage.measure(source, output=output, store_positions=True, **options).close()


def in_blocks_of(length, monkeypatch):
    cut = functools.partial(_cut, length)
    monkeypatch.setattr(workers, "cut", cut)


def _cut(length, indices, n_workers, n_particles):
    return [indices[k : k + length] for k in range(0, len(indices), length)]


def children():
    """Worker processes of this one, without multiprocessing's own helper."""
    found = psutil.Process().children()
    return [p for p in found if "spawn_main" in " ".join(p.cmdline())]


@pytest.mark.parametrize(("n_workers", "length"), [(2, 3), (4, 1)])
def test_neither_workers_nor_blocks_change_a_bit(
    n_workers, length, source, whole, tmp_path, monkeypatch
):
    in_blocks_of(length, monkeypatch)
    measure(source, tmp_path / "r.h5", workers=n_workers)
    scenario.assert_same(tmp_path / "r.h5", whole)


@hypothesis.settings(max_examples=6, deadline=None)
@hypothesis.given(st.sets(st.integers(1, N_FRAMES - 1), min_size=1, max_size=3))
def test_interruptions_do_not_change_a_bit(tmp_path_factory, source, whole, stops):
    path = tmp_path_factory.mktemp("stopped") / "r.h5"

    def interrupt(done, total):
        if done in stops:
            os.kill(os.getpid(), signal.SIGTERM)

    for k in sorted(stops):
        with pytest.raises(InterruptedRunError, match=f"after {k} of {N_FRAMES}"):
            measure(source, path, resume=True, progress=interrupt)
    measure(source, path, resume=True, progress=interrupt)
    scenario.assert_same(path, whole)


def test_blocks_are_bounded_in_frames_and_particles():
    assert [len(b) for b in blocks.cut(range(100), 2, 1000)] == [8] * 12 + [4]
    assert [len(b) for b in blocks.cut(range(100), 2, 30_000)][:2] == [3, 3]
    assert [len(b) for b in blocks.cut(range(9), 2, 10**7)] == [1] * 9
    assert [len(b) for b in blocks.cut(range(8), 4, 1000)] == [1] * 8


def test_huge_frames_are_measured_by_fewer_processes():
    assert workers.affordable(2, 20_000) == 2
    assert workers.affordable(64, 20_000) == 64
    assert workers.affordable(2, 1_000_000) == 1  # in 4 GiB, see bench_memory.py
    assert workers.affordable(8, 1_000_000) == 4
    assert workers.affordable(2, 10**9) == 1


class Recorder(blocks.Crew):
    """Remembers how many blocks were on their way at most."""

    capacity = 3

    def __init__(self):
        self.waiting, self.most, self.closed = [], 0, False

    def __len__(self):
        return len(self.waiting)

    def add(self, block):
        self.waiting.append(block)
        self.most = max(self.most, len(self))

    def take(self):
        block = self.waiting.pop(0)
        return list(block), TrajcageError("stop") if 7 in block else None

    def close(self):
        self.closed = True


def test_no_more_blocks_are_on_their_way_than_allowed():
    crew, seen = Recorder(), []
    frames = blocks.in_order(crew, [[k, k + 1] for k in range(0, 20, 2)])
    with pytest.raises(TrajcageError, match="stop"):
        seen.extend(frame for frame in map(seen.append, frames) if frame)
    assert seen == [0, 1, 2, 3, 4, 5, 6, 7]
    assert (crew.most, crew.closed) == (3, True)


def test_a_run_survives_the_loss_of_a_worker(source, whole, tmp_path, monkeypatch):
    in_blocks_of(2, monkeypatch)
    path, told, killed = tmp_path / "r.h5", [], []

    def kill(done, total):
        if done == 3 and not killed:
            killed.append(children()[0])
            killed[0].kill()

    measure(source, path, workers=2, progress=kill, notify=told.append)
    scenario.assert_same(path, whole)
    assert len([text for text in told if "a worker process died" in text]) == 1
    assert children() == []


def test_a_frame_that_kills_its_worker_twice_is_named(source, tmp_path, monkeypatch):
    in_blocks_of(4, monkeypatch)
    monkeypatch.setattr(workers, "measure_block", fatal_blocks.measure_block)
    path, told = tmp_path / "r.h5", []
    with pytest.raises(TrajcageError, match="frame 6: the worker process"):
        measure(source, path, workers=2, notify=told.append)
    assert any("frames 5 to 8 are measured again one by one" in text for text in told)
    with trajcage.open_result(path) as result:
        assert result.frames_complete == 6
    assert children() == []


def test_workers_tell_what_is_wrong_with_the_input(source, tmp_path):
    copy = tmp_path / "a.gsd"
    job = blocks.pack_job(InputOptions(copy), RunSettings())
    frames, error = blocks.measure_block(job, [0, 1])
    assert frames == []
    with pytest.raises(InputError, match="nothing at"):
        raise error
    copy.write_bytes(source.read_bytes())
    frames, error = blocks.measure_block(job, [3, 99])
    assert [one.frame.index for one in frames] == [3]
    with pytest.raises(InputError, match="no frame 99"):
        raise error


def test_a_cluster_gives_the_same_bits_also_when_a_worker_dies(
    cluster, source, whole, tmp_path, monkeypatch
):
    in_blocks_of(8, monkeypatch)
    # relative paths mean the same to workers, which run in another directory
    monkeypatch.chdir(source.parent)
    measure(source.name, tmp_path / "r.h5", dask=cluster)
    scenario.assert_same(tmp_path / "r.h5", whole)

    in_blocks_of(1, monkeypatch)
    pids = list(cluster.run(os.getpid).values())

    def kill(done, total):
        if done == 3:
            os.kill(pids[0], signal.SIGKILL)

    address = cluster.scheduler.address
    measure(source, tmp_path / "k.h5", dask=address, progress=kill)
    scenario.assert_same(tmp_path / "k.h5", whole)
    cluster.wait_for_workers(2, timeout=60)
    assert pids[0] not in cluster.run(os.getpid).values()


def test_a_cluster_reports_bad_frames_and_can_be_named_by_a_file(
    cluster, source, tmp_path
):
    frames = crowd.crowd(6)
    frames[4][3] = np.nan
    bad = scenario.write_gsd(tmp_path / "bad.gsd", frames, diameter=crowd.DIAMETER)
    file = tmp_path / "scheduler.json"
    file.write_text(json.dumps({"address": cluster.scheduler.address}))
    with pytest.raises(FrameError, match="frame 4"):
        measure(bad, tmp_path / "r.h5", dask=file)
    with trajcage.open_result(tmp_path / "r.h5") as result:
        assert result.frames_complete == 4


# MDAnalysis asks GSD files for a time step, which they do not hold.
@pytest.mark.filterwarnings("ignore:Reader has no dt information")
def test_an_analysis_of_mdanalysis_on_a_cluster_gives_the_same_bits(cluster, source):
    def analyze(**options):
        universe = MDAnalysis.Universe(source, convert_units=False)
        analysis = trajcage.CageAnalysis(universe.atoms, diameter=crowd.DIAMETER)
        return analysis.run(stop=4, **options).results

    backend = trajcage.ClusterBackend(cluster)
    assert backend.n_workers == 2
    found, serial = analyze(backend=backend, unsupported_backend=True), analyze()
    for name, values in serial.items():
        if isinstance(values, np.ndarray):
            assert found[name].tobytes() == values.tobytes()
    assert found.summary == serial.summary


def test_a_block_that_no_worker_of_a_cluster_survives(cluster):
    from trajcage.run.cluster import Cluster

    options = InputOptions(scenario.CRYSTAL)
    crew = Cluster(cluster, options, RunSettings())

    class Dead:
        def result(self):
            state = type("State", (), {"address": "tcp://nowhere"})()
            raise distributed.KilledWorker("task", state, 3)

        def release(self):
            pass

    crew._waiting.append(([4, 5], Dead()))
    with pytest.raises(TrajcageError, match="frames 4 to 5: 4 workers of the cluster"):
        crew.take()


def test_clusters_that_are_not_there(source, tmp_path):
    with pytest.raises(UsageError, match="leave out workers"):
        measure(source, tmp_path / "r.h5", dask="tcp://a:1", workers=2)
    with pytest.raises(TrajcageError, match=r"no dask scheduler answers at nonsense:/"):
        measure(source, tmp_path / "r.h5", dask="nonsense://a")
