"""Jumps of made-up paths."""

import numpy as np
import pytest
from moving import frames, run

from trajcage.analysis.jumps import HopIndicator
from trajcage.analysis.path_splits import hop_indicator, msd_crossover, split_paths
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import InputError, UsageError
from trajcage.model import Box

BOX = Box.from_any([20.0] * 3)


def step_path(n_frames, at, size):
    paths = np.zeros((n_frames, 1, 3))
    paths[at:] = size
    return paths


def test_a_clean_step_of_size_d_gives_d_squared_on_its_frame():
    # Published definition (Candelier et al. 2010); the value is exact.
    size = np.array([0.3, -0.4, 1.2])  # length 1.3
    paths = step_path(40, 17, size)
    p_hop = hop_indicator(paths, 6)[:, 0]
    assert np.nanargmax(p_hop) == 17
    assert p_hop[17] == pytest.approx(1.69, rel=1e-12)
    assert np.isnan(p_hop[[0, 5, 35, 39]]).all()
    assert np.isfinite(p_hop[[6, 34]]).all()
    options = TimeOptions(hop_half_window=6, caging_length=1.29)
    fold, _, _, jumps = run(paths, BOX, options)
    assert jumps["particle"].tolist() == [0]
    assert jumps["frame"].tolist() == [17]
    assert jumps["step"].tolist() == [170]
    assert jumps["time"].tolist() == [17.0]
    assert jumps["p_hop"][0] == pytest.approx(1.69, rel=1e-12)
    np.testing.assert_allclose(jumps["displacement"], [size], atol=1e-12)
    summary = fold.conclude().summary
    assert summary["jumps"] == 1
    assert summary["hop_threshold"] == pytest.approx(1.29**2)
    *_, jumps = run(paths, BOX, TimeOptions(hop_half_window=6, caging_length=1.31))
    assert len(jumps["particle"]) == 0


def test_online_and_whole_paths_agree():
    rng = np.random.default_rng(1)
    paths = np.cumsum(rng.normal(0.0, 0.15, (80, 30, 3)), axis=0)
    h, threshold = 4, 0.15
    paths[60:] = paths[60] + rng.normal(0.0, 0.01, (20, 30, 3))
    p_hop = hop_indicator(paths, h)
    found = []
    online = HopIndicator(30, 3, h, threshold)
    for frame, path in zip(frames(paths, BOX), paths - paths[0], strict=True):
        rows = online.advance(frame, path)
        found += list(zip(rows["particle"], rows["frame"], rows["p_hop"], strict=True))
    expected = []
    for i in range(30):
        above = np.nan_to_num(p_hop[:, i]) > threshold
        edges = np.flatnonzero(np.diff(above.astype(int)))
        for a, b in zip(edges[::2], edges[1::2], strict=False):
            peak = a + 1 + int(np.argmax(p_hop[a + 1 : b + 1, i]))
            expected.append((i, peak, p_hop[peak, i]))
    assert len(expected) > 20
    assert sorted(f[:2] for f in found) == sorted(e[:2] for e in expected)
    for ours, theirs in zip(sorted(found), sorted(expected), strict=True):
        assert ours[2] == pytest.approx(theirs[2], rel=1e-10)
    still_up = np.count_nonzero(p_hop[len(paths) - h] > threshold)
    assert online.n_jumping == still_up


def test_a_jump_at_the_end_of_the_record_is_unfinished():
    fold, _, _, jumps = run(step_path(24, 12, 1.0), BOX, TimeOptions())
    assert len(jumps["particle"]) == 0
    summary = fold.conclude().summary
    assert (summary["jumps"], summary["jumps_unfinished"]) == (0, 1)


@pytest.mark.parametrize("at", [10, 25, 40])
def test_the_split_of_a_clean_step(at):
    # p(t_c) = D^2 sqrt(x (1 - x)) at the fraction x of the path (Candelier et al. 2009).
    found = split_paths(step_path(50, at, [0.6, 0.8, 0.0]), caging_length=0.2)
    assert found.particle.tolist() == [0]
    assert found.frame.tolist() == [at]
    x = at / 50
    assert found.significance[0] == pytest.approx(np.sqrt(x * (1.0 - x)), rel=1e-12)
    np.testing.assert_allclose(found.displacement, [[0.6, 0.8, 0.0]], atol=1e-12)


def caged_paths(rng, n=20, n_frames=400, size=0.05):
    paths = rng.normal(0.0, size, (n_frames, n, 3))
    paths[100:, 3] += [0.8, 0.0, 0.0]
    paths[250:, 3] += [0.0, 0.7, 0.0]
    paths[300:, 11] += [0.0, 0.0, -0.9]
    return paths


@pytest.mark.parametrize("caging_length", [0.15, None])
def test_several_jumps_among_vibrations(caging_length):
    paths = caged_paths(np.random.default_rng(2))
    found = split_paths(paths, caging_length)
    assert found.particle.tolist() == [3, 3, 11]
    assert found.frame.tolist() == [100, 250, 300]
    moves = np.array([[0.8, 0, 0], [0, 0.7, 0], [0, 0, -0.9]])
    np.testing.assert_allclose(found.displacement, moves, atol=0.03)
    assert 0.05 < found.caging_length < 0.3


def test_free_particles_have_no_caging_length():
    paths = np.cumsum(np.random.default_rng(3).normal(size=(200, 50, 3)), axis=0)
    with pytest.raises(InputError, match=r"no plateau.*give caging_length"):
        split_paths(paths)


def test_crossover_of_a_model_with_known_plateau():
    # Diffusion in a cage of plateau A with escape: the flattest place lies where
    # the curve is close to A as long as the two times are far apart.
    t = np.geomspace(0.01, 1e5, 60)
    msd = 0.03 * (1.0 - np.exp(-t)) + 1e-6 * t
    value, reason = msd_crossover(t, msd)
    assert reason == ""
    assert value == pytest.approx(0.03, rel=0.02)
    value, reason = msd_crossover(t, t)
    assert np.isnan(value)
    assert "no plateau" in reason
    value, reason = msd_crossover(t[:2], msd[:2])
    assert np.isnan(value)
    assert "3 are needed" in reason


def test_bad_paths():
    with pytest.raises(UsageError, match=r"got shape \(3, 3\)"):
        split_paths(np.zeros((3, 3)), 0.1)
    broken = np.zeros((4, 2, 3))
    broken[2, 1, 0] = np.nan
    with pytest.raises(InputError, match="frame 2, particle 1"):
        hop_indicator(broken, 1)
    with pytest.raises(UsageError, match="half window of 1"):
        hop_indicator(np.zeros((4, 2, 3)), 0)
    with pytest.raises(UsageError, match="positive caging length, got 0"):
        split_paths(np.zeros((4, 2, 3)), 0.0)
