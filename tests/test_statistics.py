"""Blocking errors against closed forms."""

import numpy as np
import pytest

from trajcage.analysis.statistics import BlockMoments, mean_estimate
from trajcage.errors import UsageError


def autoregressive(rng, n, rho):
    """Unit-variance series with correlation rho^|t|."""
    noise = rng.normal(size=n) * np.sqrt(1.0 - rho**2)
    x = np.empty(n)
    x[0] = rng.normal()
    for t in range(1, n):
        x[t] = rho * x[t - 1] + noise[t]
    return x


@pytest.mark.parametrize("rho", [0.0, 0.5, 0.9])
def test_error_of_a_correlated_series(rho):
    # Closed form for a first-order autoregressive series:
    # error^2 = (1 + rho) / (1 - rho) / n.
    n = 2**15
    estimate = mean_estimate(autoregressive(np.random.default_rng(1), n, rho))
    exact = np.sqrt((1.0 + rho) / (1.0 - rho) / n)
    assert estimate.converged
    assert abs(estimate.error - exact) < 3.0 * estimate.error_of_error + 0.05 * exact
    assert abs(estimate.mean) < 4.0 * exact


def test_errors_cover_the_mean_as_often_as_they_should():
    # Share of 1-sigma intervals that hold the true mean: 0.683 for a normal mean.
    rng = np.random.default_rng(2)
    estimates = [mean_estimate(autoregressive(rng, 1024, 0.7)) for _ in range(300)]
    covered = np.mean([abs(e.mean) < e.error for e in estimates])
    assert 0.58 < covered < 0.75
    assert np.mean([e.converged for e in estimates]) > 0.95


def test_too_short_a_series_is_a_stated_lower_bound():
    estimate = mean_estimate(np.arange(64.0))
    assert not estimate.converged
    assert "lower bound" in estimate.reason
    assert estimate.error > 0.0


def test_values_that_are_not_finite_are_left_out_and_counted():
    estimate = mean_estimate([1.0, np.nan, 3.0, np.inf])
    assert estimate.mean == 2.0
    assert (estimate.n_values, estimate.n_missing) == (2, 2)
    empty = mean_estimate([np.nan])
    assert np.isnan(empty.mean)
    assert np.isnan(empty.error)
    assert np.isnan(empty.error_of_error)
    assert "at least two" in empty.reason


def test_a_constant_series_has_no_error():
    estimate = mean_estimate(np.full(40, 0.1))
    assert estimate.mean == pytest.approx(0.1, rel=1e-15)
    assert estimate.error < 1e-15
    assert estimate.converged


def test_only_one_dimension():
    with pytest.raises(UsageError, match=r"one dimension, got shape \(2, 2\)"):
        mean_estimate(np.zeros((2, 2)))


@pytest.mark.parametrize("n", [1, 2, 7, 64, 1000])
def test_one_value_at_a_time_is_the_same_as_all_at_once(n):
    x = autoregressive(np.random.default_rng(n), n, 0.8)
    moments = BlockMoments(2, 2)
    for value in x:
        moments.add(1, np.array([value, value**2]))
    assert moments.count(0) == 0
    assert np.isnan(moments.mean(0)).all()
    assert moments.count(1) == n
    np.testing.assert_allclose(moments.mean(1), [x.mean(), (x**2).mean()])
    at_once = mean_estimate(x)
    online = moments.estimate(1, at_once.mean, np.array([1.0, 0.0]))
    assert online.error == pytest.approx(at_once.error, nan_ok=True)
    assert online.block_length == at_once.block_length
    # A linear function of the means has the error of the combined series.
    combined = mean_estimate(2.0 * x - 3.0 * x**2)
    online = moments.estimate(1, combined.mean, np.array([2.0, -3.0]))
    assert online.error == pytest.approx(combined.error, nan_ok=True)


def test_an_undefined_component_does_not_spoil_the_others():
    moments = BlockMoments(1, 2)
    for value in np.random.default_rng(4).normal(size=64):
        moments.add(0, np.array([value, np.nan]))
    assert np.isfinite(moments.estimate(0, 0.0, np.array([1.0, 0.0])).error)
    undefined = moments.estimate(0, 0.0, np.array([0.0, 1.0]))
    assert np.isnan(undefined.error)
    assert "does not exist" in undefined.reason
