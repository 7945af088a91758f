"""Cage breaking: exact events in made-up trajectories."""

import numpy as np
import pytest
from moving import collect, fcc, frames, run, triangular, vibration

from trajcage.analysis.breaking_rule import BreakingRule
from trajcage.analysis.fold import TimeFold, growing_tables
from trajcage.analysis.regions import Region
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import UsageError
from trajcage.model import Box

EVERY = TimeOptions(origin_interval=1, max_lag=16)


def neighbors_on(sites, box, i, cutoff):
    apart = box.minimum_image(sites - sites[i])
    near = np.linalg.norm(apart, axis=1) < cutoff
    near[i] = False
    return np.flatnonzero(near)


@pytest.mark.parametrize("lattice", ["triangular", "fcc"])
def test_vibration_up_to_a_tenth_of_the_spacing_is_no_event(lattice):
    sites, box = triangular(6, 1.1) if lattice == "triangular" else fcc(4, 1.1)
    rng = np.random.default_rng(5)
    paths = sites + vibration(rng, (30, *sites.shape), 0.11)
    fold, outputs, events, jumps = run(paths, box, EVERY)
    assert len(events["particle"]) == 0
    assert len(jumps["particle"]) == 0
    assert all(output.values["persisting_fraction"] == 1.0 for output in outputs)
    result = fold.conclude()
    assert result.summary["persistence_ended"] == 0
    assert result.summary["persistence_censored"] == len(sites)
    assert np.isnan(result.summary["lifetime_median"])
    assert "no cage of this kind" in result.reasons["lifetime_median"]
    assert "above 1/2" in result.reasons["persistence_median"]


def test_exchange_of_two_neighbors_gives_exactly_their_events():
    # Two neighbors of a triangular crystal change places at frame 12 and back at
    # frame 30. Each then has 3 of its 6 old neighbors (the other one and the two
    # common ones); the particles around lose one of six.
    sites, box = triangular(6, 1.1)
    i = 30
    j = int(neighbors_on(sites, box, i, 1.2)[0])
    rng = np.random.default_rng(6)
    paths = sites + vibration(rng, (45, *sites.shape), 0.11)
    shift = box.minimum_image(sites[[j]] - sites[[i]])[0]
    paths[12:30, i] += shift
    paths[12:30, j] -= shift
    options = TimeOptions(origin_interval=1, hop_half_window=5)
    fold, outputs, events, jumps = run(paths, box, options)
    assert events["particle"].tolist() == sorted([i, j]) * 2
    assert events["start_frame"].tolist() == [0, 0, 12, 12]
    assert events["end_frame"].tolist() == [12, 12, 30, 30]
    assert events["end_step"].tolist() == [120, 120, 300, 300]
    assert events["end_time"].tolist() == [12.0, 12.0, 30.0, 30.0]
    assert events["from_record_start"].tolist() == [1, 1, 0, 0]
    expected = paths[events["end_frame"], events["particle"]]
    expected = expected - paths[events["start_frame"], events["particle"]]
    np.testing.assert_allclose(events["displacement"], expected, atol=1e-12)
    around = {p: set(neighbors_on(sites, box, p, 1.2)) for p in (i, j)}
    assert events["n_neighbors_start"].tolist() == [6] * 4
    assert np.diff(events["neighbors_lost_offsets"]).tolist() == [3] * 4
    assert np.diff(events["neighbors_gained_offsets"]).tolist() == [3] * 4
    lost = np.split(events["neighbors_lost"], [3, 6, 9])
    gained = np.split(events["neighbors_gained"], [3, 6, 9])
    for row, p in enumerate(sorted([i, j]) * 2):
        other = j if p == i else i
        only_here = around[p] - around[other] - {other}
        only_there = around[other] - around[p] - {p}
        if row >= 2:
            only_here, only_there = only_there, only_here
        assert set(lost[row]) == only_here
        assert set(gained[row]) == only_there
    # The hop indicator sees the same two moves of the same two particles.
    assert sorted(zip(jumps["frame"], jumps["particle"], strict=True)) == sorted(
        [(12, i), (12, j), (30, i), (30, j)]
    )
    # Everything else is censored at the end of the record.
    summary = fold.conclude().summary
    assert summary["persistence_ended"] == 2
    assert summary["persistence_censored"] == len(sites) - 2
    assert summary["lifetime_ended"] == 2
    assert summary["lifetime_censored"] == 2
    assert [o.values["cage_breaks"] for o in outputs][12] == 2
    # Mobile for ten frames, the window unless set.
    broken = np.array([output.broken[i] for output in outputs])
    assert np.flatnonzero(broken).tolist() == [*range(12, 22), *range(30, 40)]


def test_exchange_in_a_face_centered_crystal():
    # At spacing 1.1, seven neighbors are not shared: four go to sqrt(3) and one to 2
    # spacings, beyond 1.6; two stay at sqrt(2) spacings = 1.556, within the hysteresis.
    sites, box = fcc(4, 1.1)
    i = 100
    j = int(neighbors_on(sites, box, i, 1.2)[3])
    paths = sites + vibration(np.random.default_rng(7), (9, *sites.shape), 0.02)
    shift = box.minimum_image(sites[[j]] - sites[[i]])[0]
    paths[4:, i] += shift
    paths[4:, j] -= shift
    *_, events, _ = run(paths, box, EVERY)
    assert len(events["particle"]) == 0  # 5 of 12 is less than half
    options = TimeOptions(origin_interval=1, fraction_lost=0.4)
    *_, events, _ = run(paths, box, options)
    assert events["particle"].tolist() == sorted([i, j])
    assert events["end_frame"].tolist() == [4, 4]
    assert np.diff(events["neighbors_lost_offsets"]).tolist() == [5, 5]
    assert np.diff(events["neighbors_gained_offsets"]).tolist() == [7, 7]


def test_hysteresis_stops_flicker_and_a_single_threshold_does_not():
    # All neighbors of one particle swing between 1.3 and 1.5 diameters.
    angles = np.arange(6) * np.pi / 3.0
    ring = np.stack([np.cos(angles), np.sin(angles)], axis=1)
    paths = np.zeros((12, 7, 2))
    paths[::2, 1:] = 1.3 * ring
    paths[1::2, 1:] = 1.5 * ring
    box = Box.from_any([40.0, 40.0])
    *_, events, _ = run(paths, box, EVERY)
    assert len(events["particle"]) == 0
    flicker = TimeOptions(origin_interval=1, bonded=1.35, broken=1.35)
    *_, events, _ = run(paths, box, flicker)
    assert 0 in events["particle"]


def test_a_neighbor_that_comes_back_is_not_lost():
    # Six neighbors leave one after the other, each returning before the next goes.
    angles = np.arange(6) * np.pi / 3.0
    ring = np.stack([np.cos(angles), np.sin(angles)], axis=1)
    paths = np.zeros((14, 7, 2))
    paths[:, 1:] = 1.2 * ring
    for k in range(6):
        paths[2 * k + 1, k + 1] *= 2.0
    *_, events, _ = run(paths, Box.from_any([40.0, 40.0]), EVERY)
    assert 0 not in events["particle"]


@pytest.mark.parametrize("dt", [1.0, 0.1])
def test_minimum_duration_asks_for_a_lasting_loss(dt):
    sites, box = triangular(6, 1.1)
    i = 30
    j = int(neighbors_on(sites, box, i, 1.2)[0])
    paths = np.repeat(sites[None], 20, axis=0)
    shift = box.minimum_image(sites[[j]] - sites[[i]])[0]
    for away in (slice(3, 5), slice(9, 20)):  # for 2 frames, then for good
        paths[away, i] += shift
        paths[away, j] -= shift
    options = TimeOptions(origin_interval=1, minimum_duration=3.0 * dt)
    _, outputs, events, _ = run(paths, box, options, dt=dt)
    assert events["particle"].tolist() == sorted([i, j])
    assert events["end_frame"].tolist() == [9, 9]  # when the loss began
    assert [o.values["cage_breaks"] for o in outputs].index(2) == 12  # when it counts
    mobile = [output.broken[i] for output in outputs]
    assert np.flatnonzero(mobile).tolist() == [*range(12, 20)]
    *_, events, _ = run(paths, box, EVERY, dt=dt)
    assert events["end_frame"].tolist() == [3, 3, 5, 5, 9, 9]


def test_neighbors_can_change_around_a_particle_that_does_not_move():
    # Half of the ring around particle 0 is replaced by others; 0 stays.
    angles = np.arange(6) * np.pi / 3.0
    ring = np.stack([np.cos(angles), np.sin(angles)], axis=1)
    far = 6.0 * ring[:3] + 3.0
    paths = np.zeros((40, 10, 2))
    paths[:, 1:7] = 1.2 * ring
    paths[:, 7:] = far
    paths[20:, 1:4], paths[20:, 7:] = far, 1.2 * ring[:3]
    *_, events, jumps = run(paths, Box.from_any([40.0, 40.0]), EVERY)
    row = int(np.flatnonzero(events["particle"] == 0)[0])
    assert events["end_frame"][row] == 20
    assert np.all(events["displacement"][row] == 0.0)
    assert 0 not in jumps["particle"]
    assert set(jumps["particle"]) == {1, 2, 3, 7, 8, 9}


@pytest.mark.parametrize(
    ("which", "expected"), [("crossed", 1), ("other", 0), ("none", -1)]
)
def test_leaving_through_the_weakest_window(which, expected):
    # Particle i moves to the site of j between the two neighbors common to both.
    sites, box = triangular(6, 1.1)
    i = 30
    around = neighbors_on(sites, box, i, 1.2)
    j = int(around[0])
    common = np.intersect1d(around, neighbors_on(sites, box, j, 1.2))
    rest = np.setdiff1d(around, [*common, j])
    corners = np.full((len(sites), 2), -1)
    if which == "crossed":
        corners[i] = common
    elif which == "other":
        corners[i] = rest[:2]
    window = np.full(len(sites), 0.9)
    drift = np.array([0.3, 0.1]) * np.arange(8)[:, None, None]
    paths = sites + drift
    shift = box.minimum_image(sites[[j]] - sites[[i]])[0]
    paths[5:, i] += shift
    paths[5:, j] -= shift
    n = len(sites)
    fold = TimeFold(EVERY, n, 2, 1.0)
    outputs = []
    for k, frame in enumerate(frames(paths, box)):
        values = {
            "weakest_window": window + 0.001 * k,
            "weakest_window_neighbors": corners,
            "free_volume": np.full(n, float(k)),
        }
        outputs.append(fold.update(frame, values, lambda broken: broken.astype(int)))
    events = collect(outputs, "events")
    row = int(np.flatnonzero(events["particle"] == i)[0])
    assert events["through_weakest_window"][row] == expected
    # Before: the last frame with a whole cage; after: the end frame.
    assert events["weakest_window_before"][row] == pytest.approx(0.904)
    assert events["free_volume_before"][row] == 4.0
    assert events["free_volume_after"][row] == 5.0
    assert events["region_before"][row] == 0
    assert events["region_after"][row] == 1
    np.testing.assert_array_equal(outputs[5].region, outputs[5].broken.astype(int))


def test_what_is_not_measured_is_stored_as_unknown():
    sites, box = triangular(6, 1.1)
    paths = np.repeat(sites[None], 6, axis=0)
    paths[3:, [0, 1]] = paths[3:, [1, 0]]
    *_, events, _ = run(paths, box, EVERY)
    assert events["particle"].tolist() == [0, 1]
    for name in ("free_volume_before", "free_volume_after", "weakest_window_before"):
        assert np.isnan(events[name]).all()
    assert (events["through_weakest_window"] == -1).all()
    for name in ("region_before", "region_after"):
        assert (events[name] == Region.UNKNOWN).all()


def test_images_of_one_neighbor_in_a_small_box():
    # Two particles, each the neighbor of the other through two faces.
    paths = np.zeros((6, 2, 3))
    paths[:, 1, 0] = 1.2
    paths[3:, 1, 1] = 2.0
    box = Box.from_any([2.4, 9.0, 9.0])
    *_, events, _ = run(paths, box, EVERY)
    assert events["particle"].tolist() == [0, 1]
    assert events["n_neighbors_start"].tolist() == [2, 2]
    assert events["neighbors_lost"].tolist() == [1, 0]
    assert np.diff(events["neighbors_lost_offsets"]).tolist() == [1, 1]


def test_a_cage_starts_when_the_first_neighbor_comes():
    paths = np.zeros((9, 2, 3))
    paths[:, 1, 0] = [3, 3, 1, 1, 1, 3, 3, 3, 3]
    _, outputs, events, _ = run(paths, Box.from_any([20.0] * 3), EVERY)
    assert events["start_frame"].tolist() == [2, 2]
    assert events["end_frame"].tolist() == [5, 5]
    assert events["from_record_start"].tolist() == [0, 0]
    lonely = [output.values["without_neighbors"] for output in outputs]
    assert lonely == [2, 2, 0, 0, 0, 2, 2, 2, 2]


@pytest.mark.parametrize("dimensions", [2, 3])
def test_events_have_the_declared_columns(dimensions):
    n = 12
    rng = np.random.default_rng(8)
    paths = rng.random((60, n, dimensions)) * 2.5
    paths[30:] = paths[30]
    box = Box.from_any([8.0] * dimensions, periodic="none")
    *_, events, jumps = run(paths, box, EVERY)
    assert len(events["particle"]) > 0
    assert len(jumps["particle"]) > 0
    for table, rows in zip(growing_tables(dimensions), (events, jumps), strict=True):
        offsets = [f"{field.name}_offsets" for field in table.ragged]
        names = [field.name for field in (*table.columns, *table.ragged)]
        assert sorted([*names, *offsets]) == sorted(rows)
        for field in (*table.columns, *table.ragged):
            column = rows[field.name]
            assert np.can_cast(column.dtype, field.dtype, "same_kind"), field.name
            assert column.shape[1:] == field.shape
            if field in table.columns:
                assert len(column) == len(rows["particle"])


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"bonded": 1.7}, "bonded 1.7 and broken 1.6"),
        ({"bonded": 0.5}, "bonded 0.5"),
        ({"fraction_lost": 0.0}, "above 0 and up to 1"),
        ({"minimum_duration": -1.0}, "0 or more, got -1"),
        ({"mobility_window": 0.0}, "positive mobility window"),
    ],
)
def test_rules_that_make_no_sense(options, message):
    with pytest.raises(UsageError, match=message):
        BreakingRule(**options)
