"""Time correlations against closed forms and direct sums."""

import numpy as np
import pytest
from moving import fcc, run, triangular, vibration
from scipy.special import erf

from trajcage.analysis.correlation_plan import CORRELATION_FIELDS, CorrelationPlan
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import UsageError
from trajcage.model import Box

EVERY = TimeOptions(origin_interval=1, max_lag=16)


def table_of(paths, box, options=EVERY, **how):
    fold, *_ = run(paths, box, options, **how)
    return fold.conclude().curves["correlations"]


def walkers(rng, n_frames, n, box, step):
    d = box.dimensions
    start = rng.random((n, d)) * box.lengths
    return start + np.cumsum(rng.normal(0.0, step, (n_frames, n, d)), axis=0)


@pytest.mark.parametrize("dimensions", [2, 3])
def test_independent_brownian_walkers(dimensions):
    rng = np.random.default_rng(dimensions)
    step, reach, wave = 0.1, 0.3, 4.0
    box = Box.from_any([1000.0] * dimensions)
    paths = walkers(rng, 600, 300, box, step)
    options = TimeOptions(
        origin_interval=1, max_lag=16, overlap_length=reach, wave_number=wave
    )
    table = table_of(paths, box, options)
    assert table["lag_frames"].tolist() == [1, 2, 3, 4, 6, 8, 11, 16]
    for row, lag in enumerate(table["lag_frames"]):
        s2 = lag * step**2  # variance per axis
        u = reach / np.sqrt(2.0 * s2)
        # Overlap of a Gaussian: the chi distribution with 3 or 2 degrees of freedom.
        q = 1.0 - np.exp(-(u**2))
        if dimensions == 3:
            q = erf(u) - 2.0 * u * np.exp(-(u**2)) / np.sqrt(np.pi)
        exact = {
            "msd": dimensions * s2,
            "non_gaussian": 0.0,
            "overlap": q,
            "self_scattering": np.exp(-0.5 * wave**2 * s2),
            # N var q = q (1 - q) for independent walkers.
            "chi_4": q * (1.0 - q),
        }
        for name, value in exact.items():
            error = table[f"{name}_error"][row]
            assert abs(table[name][row] - value) < 4.5 * error + 1e-12, (name, lag)
            # The errors mean something: far below the value where there is one.
            assert error < (0.5 if name == "chi_4" else 0.05), (name, lag)


@pytest.mark.parametrize(
    ("longest", "interval"), [(3, 3), (4, 4), (16, 8), (12, 6), (1024, 256)]
)
def test_against_direct_sums_over_the_same_origins(longest, interval):
    # origins stand a quarter of the longest interval apart until sixteen such intervals
    # have passed, then a half, and are evenly spaced over the record all the same
    rng = np.random.default_rng(3)
    sites, box = triangular(4, 1.2)
    paths = sites + np.cumsum(rng.normal(0.0, 0.05, (70, *sites.shape)), axis=0)
    options = TimeOptions(origin_interval=longest, max_lag=40, bonded=1.3, broken=1.5)
    table = table_of(paths, box, options)
    plan = options.plan(1.0)
    assert table["lag_frames"].tolist() == plan.lags()
    n = len(sites)
    for row, lag in enumerate(plan.lags()):
        origins = np.arange(0, len(paths) - lag, plan.spacing(lag, interval))
        assert table["n_origins"][row] == len(origins)
        assert table["lag"][row] == lag
        sums = np.zeros(8)
        for t in origins:
            moved = paths[t + lag] - paths[t]
            r2 = np.sum(moved**2, axis=1)
            apart = box.minimum_image(
                (paths[t][None] - paths[t][:, None]).reshape(-1, 2)
            ).reshape(n, n, 2)
            bonded = np.linalg.norm(apart, axis=2) <= 1.3
            np.fill_diagonal(bonded, val=False)
            later = apart + moved[None] - moved[:, None]
            gone = bonded & (np.linalg.norm(later, axis=2) > 1.5)
            relative = moved - bonded @ moved / bonded.sum(axis=1)[:, None]
            kept = gone.sum(axis=1) < 0.5 * bonded.sum(axis=1)
            q = np.mean(r2 <= 0.3**2)
            sums += [
                r2.mean(),
                np.sum(relative**2, axis=1).mean(),
                np.mean(r2**2),
                q,
                q**2,
                1.0 - gone.sum() / bonded.sum(),
                kept.mean(),
                0.0,
            ]
        mean = sums / len(origins)
        for name, value in (
            ("msd", mean[0]),
            ("cage_relative_msd", mean[1]),
            ("non_gaussian", mean[2] / (2.0 * mean[0] ** 2) - 1.0),
            ("overlap", mean[3]),
            ("neighbor_correlation", mean[5]),
            ("cage_correlation", mean[6]),
        ):
            assert table[name][row] == pytest.approx(value, rel=1e-10), (name, lag)
    assert 0.0 < table["cage_correlation"][-1] < 1.0


@pytest.mark.parametrize("remove_drift", [True, False])
def test_rigid_drift_moves_nothing_relative_to_the_cage(remove_drift):
    sites, box = fcc(3, 1.1)
    drift = np.array([0.31, -0.22, 0.17]) * np.arange(25)[:, None, None]
    options = TimeOptions(origin_interval=1, max_lag=16, remove_drift=remove_drift)
    fold, outputs, events, _ = run(sites + drift, box, options)
    table = fold.conclude().curves["correlations"]
    assert np.all(table["cage_relative_msd"] < 1e-24)
    assert np.all(table["neighbor_correlation"] == 1.0)
    assert np.all(table["cage_correlation"] == 1.0)
    assert len(events["particle"]) == 0
    expected = 0.0 if remove_drift else np.sum(drift[1] ** 2)
    np.testing.assert_allclose(table["msd"][0], expected, atol=1e-24)
    length = np.linalg.norm(drift[-1])
    assert outputs[-1].values["drift"] == pytest.approx(length)


def test_vibrating_crystal_keeps_its_cages():
    sites, box = fcc(3, 1.1)
    rng = np.random.default_rng(4)
    paths = sites + vibration(rng, (40, *sites.shape), 0.1)
    fold, *_ = run(paths, box, EVERY)
    result = fold.conclude()
    table = result.curves["correlations"]
    assert np.all(table["cage_correlation"] == 1.0)
    # Variance of a uniform ball of radius a: 3 a^2 / 5, twice for a difference.
    np.testing.assert_allclose(table["msd"], 6.0 / 5.0 * 0.1**2, rtol=0.05)
    assert result.summary["caging_length"] == pytest.approx(
        0.1 * np.sqrt(1.2), rel=0.05
    )
    assert "stays above 1/e" in result.reasons["cage_relaxation_time"]


def test_relaxation_times_are_interpolated():
    rng = np.random.default_rng(5)
    box = Box.from_any([1000.0] * 3)
    paths = walkers(rng, 200, 500, box, 0.07)
    fold, *_ = run(paths, box, EVERY)
    result = fold.conclude()
    # The Gaussian overlap formula falls to 1/e at u = 0.9051 (solved for here).
    u = np.linspace(0.5, 1.5, 100_001)
    q = erf(u) - 2.0 * u * np.exp(-(u**2)) / np.sqrt(np.pi)
    at = u[np.argmin(np.abs(q - np.exp(-1.0)))]
    exact = (0.3 / (np.sqrt(2.0) * at * 0.07)) ** 2
    assert result.summary["relaxation_time"] == pytest.approx(exact, rel=0.05)
    # No particle has neighbors in so large a box.
    table = result.curves["correlations"]
    assert np.isnan(table["cage_relative_msd"]).all()
    assert np.isfinite(table["msd_error"]).all()
    assert (table["without_neighbors"] == 500).all()
    assert "not known" in result.reasons["cage_relaxation_time"]


def test_memory_does_not_grow_with_the_number_of_frames():
    sites, box = triangular(3, 1.1)
    rng = np.random.default_rng(6)
    paths = sites + vibration(rng, (400, *sites.shape), 0.05)
    options = TimeOptions(origin_interval=2, max_lag=64)
    sizes, levels = [], []
    for n_frames in (200, 400):
        state = run(paths[:n_frames], box, options)[0].state()
        sizes.append(sum(a.nbytes for k, a in state.items() if ".moments." not in k))
        levels.append(state["correlations.moments.counts"].shape[1])
    assert abs(sizes[1] / sizes[0] - 1.0) < 0.02
    assert levels == [7, 8]  # of blocks, doubled in length up to the whole record


def test_columns_are_as_declared():
    sites, box = triangular(3, 1.1)
    table = table_of(np.repeat(sites[None], 5, axis=0), box)
    assert [field.name for field in CORRELATION_FIELDS] == list(table)
    for field in CORRELATION_FIELDS:
        assert table[field.name].dtype == np.dtype(field.dtype)
        assert len(table[field.name]) == 4


def test_lags_and_origins_of_a_plan():
    plan = CorrelationPlan(100, 5, 1, 0.3, 6.0, 1.35, 1.6, 0.5)
    assert plan.lags() == [1, 2, 4, 8, 16, 32, 64]
    spacings = [plan.spacing(lag, 5) for lag in plan.lags()]
    assert spacings == [5, 5, 5, 5, 5, 10, 20]
    with pytest.raises(UsageError, match="max_lag of 1 or more, got 0"):
        TimeOptions(max_lag=0)
    with pytest.raises(UsageError, match="positive wave_number, got -1"):
        TimeOptions(wave_number=-1.0)


def test_a_variance_needs_four_origins():
    sites, box = triangular(3, 1.1)
    paths = sites + vibration(np.random.default_rng(7), (12, *sites.shape), 0.3)
    fold, *_ = run(paths, box, EVERY)
    result = fold.conclude()
    table = result.curves["correlations"]
    enough = table["n_origins"] >= 4
    assert 0 < enough.sum() < len(enough)
    for name in ("chi_4", "chi_4_error"):
        assert np.isfinite(table[name][enough]).all()
        assert np.isnan(table[name][~enough]).all()
    peak = np.nanargmax(table["chi_4"])
    assert result.summary["chi_4_peak_lag"] == table["lag"][peak]
    fold, *_ = run(paths[:4], box, EVERY)
    assert "four or more" in fold.conclude().reasons["chi_4_peak"]
    # Unless told otherwise, fourteen frames have a lag with four origins.
    for n_frames, known in ((13, False), (14, True)):
        longer = np.concatenate((paths, paths))[:n_frames]
        fold, *_ = run(longer, box, TimeOptions())
        reasons = fold.conclude().reasons
        assert ("chi_4_peak" not in reasons) == known
        assert known or "too few frames" in reasons["chi_4_peak"]
