"""A dense fluid of 1,000 particles over 1,000 frames: cages break, and the time fold
interrupted anywhere goes on as if it had not been. scripts/long_run.py shows the same of
whole runs.
"""

import numpy as np
import pytest
from monte_carlo import polydisperse, random_fluid
from moving import collect

from trajcage.analysis.fold import TimeFold
from trajcage.analysis.path_splits import msd_crossover
from trajcage.analysis.time_options import TimeOptions
from trajcage.model import Box, Frame

N_PARTICLES, N_FRAMES, SWEEPS = 1000, 1000, 8
INTERRUPTED = sorted(np.random.default_rng(3).choice(N_FRAMES - 21, 10, replace=False))


class Fluid:
    """Hard spheres at packing fraction 0.54, radii spread by 10 %, and their fold."""

    def __init__(self):
        chain = random_fluid(
            N_PARTICLES,
            0.54,
            polydisperse(N_PARTICLES, 0.10),
            seed=41,
            sweeps=300,
            swap_fraction=0.2,
        )
        self.radii, self.box = chain.radii, Box.from_any(chain.lengths)
        self.positions, self.outputs, self.states = [], [], {}
        self.fold = self.new_fold()
        for k in range(N_FRAMES):
            self.positions.append(chain.positions)
            self.outputs.append(self.fold.update(*self.frame(k)))
            # while it goes on, and right after it was interrupted
            if any(k - start in {0, 1, 20} for start in INTERRUPTED):
                self.states[k] = self.fold.state()
            chain.run(SWEEPS)

    def new_fold(self):
        return TimeFold(TimeOptions(), N_PARTICLES, 3, 2.0 * self.radii.mean())

    def frame(self, k):
        """Frame k and, in place of its measured cages, some numbers."""
        rng = np.random.default_rng(k)
        values = {
            "free_volume": rng.random(N_PARTICLES),
            "weakest_window": rng.random(N_PARTICLES),
            "weakest_window_neighbors": rng.integers(0, N_PARTICLES, (N_PARTICLES, 3)),
            "region": rng.integers(0, 3, N_PARTICLES),
        }
        x = self.positions[k]
        return Frame(x, self.radii, self.box, k, SWEEPS * k, float(k)), values


@pytest.fixture(scope="module")
def fluid():
    return Fluid()


def test_neighbors_are_lost_slowly(fluid):
    table = fluid.fold.conclude().curves["correlations"]
    kept = table["neighbor_correlation"]
    assert table["lag_frames"][0] == 1
    assert table["lag_frames"][-1] > 700
    assert kept[0] > 0.999
    assert kept[-1] < 0.93
    assert np.all(np.diff(kept) < 0.0)
    assert np.all(np.diff(table["msd"]) > 0.0)
    assert np.all(np.diff(table["overlap"]) < 0.0)
    # Neighbors move along: the cage holds a particle closer than the MSD tells.
    assert np.all(table["cage_relative_msd"][-8:] < table["msd"][-8:])


def test_particles_that_break_their_cage_move_further_than_they_vibrate(fluid):
    table = fluid.fold.conclude().curves["correlations"]
    # Vibration: the plateau of the mean squared displacement relative to the neighbors.
    plateau, reason = msd_crossover(table["lag"], table["cage_relative_msd"])
    assert not reason
    moved = np.linalg.norm(collect(fluid.outputs, "events")["displacement"], axis=1)
    assert len(moved) > 50
    assert 0.1 < np.sqrt(plateau) < 0.25
    assert np.quantile(moved, 0.05) > np.sqrt(plateau)
    assert np.median(moved) > 3.0 * np.sqrt(plateau)


def test_lifetimes_of_the_first_cages(fluid):
    # All are watched from the first frame to their end or that of the record, so that
    # the Kaplan-Meier estimate is the plain share of those still whole.
    events = collect(fluid.outputs, "events")
    ends = events["end_time"][events["from_record_start"] == 1]
    curve = fluid.fold.conclude().curves["persistence"]
    n_whole = N_PARTICLES - np.searchsorted(np.sort(ends), curve["time"], side="right")
    np.testing.assert_allclose(curve["survival"], n_whole / N_PARTICLES, rtol=1e-12)
    assert 0.5 < curve["survival"][-1] < 0.97
    assert curve["censored"].sum() == n_whole[-1]
    inner = curve["ended"] > 0
    assert np.all(curve["survival_lower"][inner] < curve["survival"][inner])
    assert np.all(curve["survival_upper"][inner] > curve["survival"][inner])
    shares = [output.values["persisting_fraction"] for output in fluid.outputs]
    assert shares[-1] == pytest.approx(curve["survival"][-1], rel=1e-12)


@pytest.mark.parametrize("last", INTERRUPTED)
def test_interrupted_and_resumed(fluid, last):
    # Equal states have equal futures, so twenty frames stand for all that follow.
    fold = fluid.new_fold()
    fold.restore({name: array.copy() for name, array in fluid.states[last].items()})
    for k in range(last + 1, last + 21):
        output, expected = fold.update(*fluid.frame(k)), fluid.outputs[k]
        assert output.values == expected.values
        for name, columns in expected.rows.items():
            for column, array in columns.items():
                assert output.rows[name][column].tobytes() == array.tobytes()
        if k in fluid.states:
            state = fold.state()
            assert state.keys() == fluid.states[k].keys()
            for name, array in fluid.states[k].items():
                assert state[name].tobytes() == array.tobytes(), name
