"""Kaplan-Meier survival against scipy."""

import warnings

import numpy as np
import pytest
from scipy import stats

from trajcage.analysis.survival import SURVIVAL_FIELDS, LifetimeCounts, kaplan_meier
from trajcage.errors import UsageError


def censored_sample(seed, n=200, whole=True):
    rng = np.random.default_rng(seed)
    lifetimes, limits = rng.exponential(10.0, n), rng.uniform(1.0, 30.0, n)
    durations = np.minimum(lifetimes, limits)
    if whole:
        durations = np.ceil(durations)  # many ties
    return durations, lifetimes <= limits


@pytest.mark.parametrize("whole", [True, False])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_against_scipy(seed, whole):
    durations, ended = censored_sample(seed, whole=whole)
    curve = kaplan_meier(durations, ended)
    data = stats.CensoredData(uncensored=durations[ended], right=durations[~ended])
    expected = stats.ecdf(data).sf
    np.testing.assert_array_equal(curve.time, expected.quantiles)
    np.testing.assert_allclose(curve.survival, expected.probabilities, rtol=1e-12)
    with warnings.catch_warnings(), np.errstate(divide="ignore", invalid="ignore"):
        warnings.simplefilter("ignore")  # where the band is undefined
        band = expected.confidence_interval(0.95, method="log-log")
    between = (curve.survival > 0.0) & (curve.survival < 1.0)
    for ours, theirs in ((curve.lower, band.low), (curve.upper, band.high)):
        np.testing.assert_allclose(
            ours[between], theirs.probabilities[between], rtol=1e-10
        )
        assert np.isnan(ours[~between]).all()


def test_a_published_example():
    # Remission of the 21 patients on 6-MP, Freireich et al., Blood 21, 699 (1963), the
    # standard example of the method: S(10) = 0.753, S(23) = 0.448, median 23 weeks
    # (values from memory of the textbooks).
    ended = [6, 6, 6, 7, 10, 13, 16, 22, 23]
    left = [6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]
    curve = kaplan_meier(ended + left, [True] * 9 + [False] * 12)
    at = dict(zip(curve.time, curve.survival, strict=True))
    assert at[10] == pytest.approx(0.753, abs=5e-4)
    assert at[23] == pytest.approx(0.448, abs=5e-4)
    assert curve.median == 23
    assert np.isnan(curve.mean)
    assert (curve.n_ended, curve.n_censored) == (9, 12)


def test_mean_and_median_without_censoring_are_the_plain_ones():
    durations = np.array([1.0, 2.0, 4.0, 9.0, 10.0])
    curve = kaplan_meier(durations, np.ones(5, dtype=bool))
    assert curve.mean == pytest.approx(durations.mean())
    assert curve.median == 4.0
    assert curve.summary("x")[1] == {}


def test_the_mean_of_completed_lifetimes_is_not_what_is_reported():
    # Exponential lifetimes of mean 10, seen for 5 at most: completed ones average 2.3.
    rng = np.random.default_rng(4)
    lifetimes = rng.exponential(10.0, 20_000)
    durations, ended = np.minimum(lifetimes, 5.0), lifetimes <= 5.0
    assert durations[ended].mean() < 2.4
    curve = kaplan_meier(durations, ended)
    values, reasons = curve.summary("lifetime")
    assert np.isnan(values["lifetime_mean"])
    assert np.isnan(values["lifetime_median"])
    assert "above 1/2" in reasons["lifetime_median"]
    assert "restricted_mean" in reasons["lifetime_mean"]
    # Restricted mean of an exponential: 10 (1 - exp(-0.5)).
    exact = 10.0 * (1.0 - np.exp(-0.5))
    assert values["lifetime_restricted_mean"] == pytest.approx(exact, rel=0.01)
    assert values["lifetime_restriction"] == 5.0


def test_counts_give_the_same_curve_as_the_durations():
    durations, ended = censored_sample(5)
    ticks = durations.astype(np.int64)
    counts = LifetimeCounts()
    for part in np.array_split(ticks[ended], 7):
        counts.add(part)
    assert counts.total == ended.sum()
    curve = counts.curve(ticks[~ended], 0.5)
    expected = kaplan_meier(0.5 * durations, ended)
    for name, column in expected.table().items():
        np.testing.assert_array_equal(curve.table()[name], column)
    assert [field.name for field in SURVIVAL_FIELDS] == list(curve.table())
    again = LifetimeCounts()
    again.restore(counts.state())
    np.testing.assert_array_equal(again.curve(ticks[~ended], 0.5).time, curve.time)


def test_counts_keep_three_digits_of_long_lifetimes():
    exact = np.unique(np.geomspace(1, 1e9, 500).astype(np.int64))
    for ticks in exact:
        counts = LifetimeCounts()
        counts.add(np.array([ticks]))
        time = counts.curve(np.zeros(0, np.int64), 1.0).time[0]
        assert time == ticks if ticks < 2048 else abs(time / ticks - 1.0) < 1 / 2048
    assert sum(array.nbytes for array in LifetimeCounts().state().values()) == 0


def test_nothing_observed():
    curve = LifetimeCounts().curve(np.zeros(0, np.int64), 1.0)
    values, reasons = curve.summary("lifetime")
    assert np.isnan(values["lifetime_restricted_mean"])
    assert "no cage" in reasons["lifetime_restricted_mean"]


@pytest.mark.parametrize(
    ("durations", "ended", "message"),
    [
        ([1.0, 2.0], [True], r"shapes \(2,\) and \(1,\)"),
        ([1.0, -2.0], [True, False], "got -2"),
        ([1.0, np.nan], [True, False], "got nan"),
    ],
)
def test_bad_durations(durations, ended, message):
    with pytest.raises(UsageError, match=message):
        kaplan_meier(durations, ended)
