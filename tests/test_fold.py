"""The ordered fold: order, interruption, absent results."""

import io
import tracemalloc

import numpy as np
import pytest
from moving import collect, frames, run, triangular, vibration

from trajcage.analysis.conclusion import CURVE_ARRAYS, CURVES, SUMMARY
from trajcage.analysis.fold import FIELDS, TimeFold
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import FrameError, ResultFileError, UsageError
from trajcage.model import Box, Frame

OPTIONS = TimeOptions(origin_interval=2, max_lag=16, hop_half_window=3)


def lively(n_frames=40):
    """Vibration, drift, many exchanges, and what would be measured on it."""
    sites, box = triangular(4, 1.1)
    n = len(sites)
    rng = np.random.default_rng(9)
    home, paths = np.arange(n), []
    for _ in range(n_frames):
        i = rng.integers(n)
        near = np.linalg.norm(box.minimum_image(sites - sites[home[i]]), axis=1)
        j = int(np.flatnonzero(home == np.argsort(near)[1])[0])
        home[i], home[j] = home[j], home[i]
        paths.append(sites[home])
    paths = np.array(paths) + vibration(rng, (n_frames, n, 2), 0.1)
    paths += np.array([0.2, 0.1]) * np.arange(n_frames)[:, None, None]
    values = [
        {
            "free_volume": rng.random(n),
            "weakest_window": rng.random(n),
            "weakest_window_neighbors": rng.integers(-1, n, (n, 2)),
            "region": rng.integers(0, 3, n),
        }
        for _ in range(n_frames)
    ]
    return paths, box, values


def same(a, b):
    """Equal bit for bit, NaN included."""
    if isinstance(a, dict):
        return list(a) == list(b) and all(same(a[key], b[key]) for key in a)
    return np.asarray(a).tobytes() == np.asarray(b).tobytes()


def test_interrupted_at_every_frame_and_not_at_all_agree_bit_for_bit():
    paths, box, values = lively()
    n, d = paths.shape[1:]
    whole, broken_off = TimeFold(OPTIONS, n, d, 1.0), TimeFold(OPTIONS, n, d, 1.0)
    n_events = 0
    for frame, measured in zip(frames(paths, box), values, strict=True):
        file = io.BytesIO()  # through a file without pickle, as a store would
        np.savez(file, **broken_off.state())
        file.seek(0)
        broken_off = TimeFold(OPTIONS, n, d, 1.0)
        with np.load(file, allow_pickle=False) as saved:
            broken_off.restore(dict(saved))
        a, b = whole.update(frame, measured), broken_off.update(frame, measured)
        assert same(a.values, b.values)
        assert same(a.rows, b.rows)
        assert same(a.broken, b.broken)
        assert same(whole.state(), broken_off.state())
        n_events += len(a.rows["events"]["particle"])
    first, second = whole.conclude(), broken_off.conclude()
    assert n_events > 20
    assert first.summary["jumps"] > 5
    assert same(first.curves, second.curves)
    assert same(first.summary, second.summary)
    assert first.reasons == second.reasons


def test_concluding_early_changes_nothing():
    paths, box, values = lively(20)
    fold = TimeFold(OPTIONS, *paths.shape[1:], 1.0)
    for frame, measured in zip(frames(paths, box), values, strict=True):
        fold.update(frame, measured)
        before = fold.state()
        fold.conclude()
        assert same(before, fold.state())
    assert fold.n_frames == 20


def test_the_frames_first_shown_do_not_matter_to_the_events():
    # Events are the same in any translation, periodic wrapping and particle order.
    paths, box, _ = lively()
    *_, events, jumps = run(paths, box, OPTIONS)
    order = np.random.default_rng(1).permutation(paths.shape[1])
    *_, moved, jumped = run((paths + np.array([0.37, 4.2]))[:, order], box, OPTIONS)
    key = np.lexsort((order[moved["particle"]], moved["end_frame"]))
    np.testing.assert_array_equal(order[moved["particle"]][key], events["particle"])
    np.testing.assert_array_equal(moved["start_frame"][key], events["start_frame"])
    np.testing.assert_allclose(
        moved["displacement"][key], events["displacement"], atol=1e-11
    )
    assert len(jumped["particle"]) == len(jumps["particle"])


def test_a_state_of_another_run_is_refused():
    paths, box, _ = lively(3)
    fold, *_ = run(paths, box, OPTIONS)
    other = TimeFold(TimeOptions(), *paths.shape[1:], 1.0)
    with pytest.raises(ResultFileError, match="other options or particles"):
        other.restore(fold.state())


def test_one_frame_gives_reasons_instead_of_results():
    paths, box, _ = lively(1)
    fold, outputs, events, _ = run(paths, box, OPTIONS)
    assert len(events["particle"]) == 0
    assert not outputs[0].broken.any()
    assert outputs[0].values["broken_fraction"] == 0.0
    result = fold.conclude()
    for name, fields in CURVES.items():
        assert list(result.curves[name]) == [field.name for field in fields]
        assert all(len(column) == 0 for column in result.curves[name].values())
        assert "1 frames: the time analysis needs at least two" in result.reasons[name]
    assert [spec.name for spec in CURVE_ARRAYS] == list(result.arrays)
    for field in SUMMARY:
        missing = np.isnan(result.summary[field.name])
        assert missing == (field.name in result.reasons), field.name
    assert "p_hop needs 6" in result.reasons["jumps"]


@pytest.mark.parametrize("n_frames", [0, 2, 3, 40])
def test_every_scalar_has_a_value_or_a_reason(n_frames):
    paths, box, values = lively(40)
    fold = TimeFold(OPTIONS, *paths.shape[1:], 1.0)
    for k, frame in enumerate(frames(paths[:n_frames], box)):
        output = fold.update(frame, values[k])
        assert list(output.values) == [field.name for field in FIELDS]
    result = fold.conclude()
    assert list(result.summary) == [field.name for field in SUMMARY]
    for name, value in result.summary.items():
        assert np.isnan(value) == (name in result.reasons), name


def follow(**changes):
    """Show a fold one good frame, then one with changes."""
    x = np.array([[1.0, 1.0], [2.0, 1.0], [3.0, 3.0]])
    box = Box.from_any([9.0, 9.0])
    given = {"positions": x, "radii": np.full(3, 0.5), "box": box}
    fold = TimeFold(TimeOptions(), 3, 2, 1.0)
    fold.update(Frame(**given, index=4, step=400, time=4.0), {})
    after = {**given, "index": 5, "step": 500, "time": 5.0, **changes}
    fold.update(Frame(**after), {})


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"step": 400}, r"frame 5 \(step 400\).*before is frame 4 with step 400; sort"),
        ({"step": 300}, "in order, each step once"),
        ({"index": 3}, "in order, each step once"),
        ({"time": 4.0}, "expected a time after 4, .* found 4"),
        ({"time": -1.0}, "expected a time after 4, .* found -1"),
        ({"ids": np.array([0, 2, 1])}, "same order, found particles 2, 1"),
        (
            {"positions": np.ones((2, 2)), "radii": np.full(2, 0.5)},
            "expected 3 particles in 2 dimensions as before, found 2 in 2",
        ),
        (
            {"positions": np.array([[5.2, 1.0], [2.0, 1.0], [3.0, 3.0]])},
            "0.467 for particle 0; .*save frames more often",
        ),
    ],
)
def test_frames_that_do_not_follow(changes, message):
    with pytest.raises(FrameError, match=message):
        follow(**changes)


def test_a_frame_that_follows():
    follow()


def test_uneven_frames_have_events_but_no_correlations():
    sites, box = triangular(4, 1.1)
    fold = TimeFold(OPTIONS, len(sites), 2, 1.0)
    outputs = []
    for k, time in enumerate([0.0, 1.0, 2.0, 4.0, 8.0, 16.0]):
        x = sites.copy()
        if k >= 3:
            x[[0, 1]] = x[[1, 0]]
        radii = np.full(len(x), 0.5)
        frame = Frame(x, radii, box, index=k, step=k, time=time)
        outputs.append(fold.update(frame, {}))
    assert collect(outputs, "events")["end_time"].tolist() == [4.0, 4.0]
    result = fold.conclude()
    assert (
        "not equally spaced in time: 2 before frame 3" in result.reasons["correlations"]
    )
    assert result.curves["persistence"]["time"].tolist() == [4.0, 16.0]
    assert result.curves["survival"]["time"].tolist() == [12.0]


def test_times_rounded_to_single_precision_count_as_even():
    sites, box = triangular(4, 1.1)
    fold = TimeFold(OPTIONS, len(sites), 2, 1.0)
    for k in range(20):
        time = float(np.float32(1e5 + 0.1 * k))
        radii = np.full(len(sites), 0.5)
        fold.update(Frame(sites, radii, box, index=k, step=k, time=time), {})
    assert "correlations" not in fold.conclude().reasons


def test_memory_is_flat():
    paths, box, values = lively()
    n, d = paths.shape[1:]
    fold = TimeFold(OPTIONS, n, d, 1.0)
    radii = np.full(n, 0.5)
    peaks = []
    tracemalloc.start()
    try:
        for repeat in range(8):
            tracemalloc.reset_peak()
            for k in range(40):
                index = 40 * repeat + k
                # There and back, so that no step is long.
                x = box.wrap(paths[k if repeat % 2 == 0 else 39 - k])
                frame = Frame(x, radii, box, index=index, step=index, time=float(index))
                fold.update(frame, values[k])
            peaks.append(tracemalloc.get_traced_memory()[1])
    finally:
        tracemalloc.stop()
    assert max(peaks[5:]) < 1.1 * max(peaks[2:5])


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"hop_half_window": 0}, "hop_half_window of 1 or more, got 0"),
        ({"caging_length": -0.1}, "positive caging length, got -0.1"),
        ({"bonded": 2.0}, "bonded 2.0 and broken 1.6"),
        ({"overlap_length": 0.0}, "positive overlap_length"),
    ],
)
def test_options_that_make_no_sense(options, message):
    with pytest.raises(UsageError, match=message):
        TimeOptions(**options)


def test_interruption_in_a_changing_tilted_box_with_flags():
    rng = np.random.default_rng(12)
    n, n_frames = 60, 24
    vectors = np.array([[5.0, 0, 0], [1.5, 4.5, 0], [-1.0, 0.7, 4.0]])
    fractional = rng.random((n, 3)) + np.cumsum(
        rng.normal(0.0, 0.06, (n_frames, n, 3)), axis=0
    )
    radii = rng.uniform(0.3, 0.6, n)

    def shown():
        for k in range(n_frames):
            box = Box(vectors * (1.0 + 0.01 * np.sin(k)), np.ones(3), (True,) * 3)
            images = np.floor(fractional[k]).astype(np.int32)
            inside = (fractional[k] - images) @ box.vectors + box.origin
            yield Frame(inside, radii, box, k, k, float(k), images=images)

    options = TimeOptions(
        origin_interval=1, max_lag=8, hop_half_window=2, minimum_duration=2.0
    )
    whole, broken_off = (TimeFold(options, n, 3, 0.9) for _ in range(2))
    n_events = 0
    for frame in shown():
        state = broken_off.state()
        broken_off = TimeFold(options, n, 3, 0.9)
        broken_off.restore(state)
        a, b = whole.update(frame, {}), broken_off.update(frame, {})
        assert same(a.rows, b.rows)
        n_events += len(a.rows["events"]["particle"])
    assert n_events > 20
    assert same(whole.state(), broken_off.state())
    assert same(whole.conclude().curves, broken_off.conclude().curves)
