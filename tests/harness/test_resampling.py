"""The cluster bootstrap against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.resampling import N_RESAMPLES, mean_with_error, means_with_errors

# A standard error from B resamples has a relative error of about 1 / sqrt(2 B) (from memory; common
# practice): six of these are exceeded with a probability below 1e-8.
TOLERANCE = 6 / math.sqrt(2 * N_RESAMPLES)


def test_with_one_value_per_network_the_error_is_the_one_of_independent_runs(rng):
    """With a run per network the error is sd / sqrt(R) (Morris, White and Crowther 2019, Table 6)."""
    values = rng.gamma(2.0, size=60)

    estimate = mean_with_error(values, range(60))

    expected = math.sqrt(((values - values.mean()) ** 2).sum() / (60 * 59))
    assert math.isclose(expected, estimate.mcse, rel_tol=TOLERANCE)
    assert math.isclose(values.mean(), estimate.value)


def test_few_networks_have_the_unbiased_error():
    """With three networks the divisor is 2, not 3: 1 / sqrt(3) for -1, 0, 1, not sqrt(2) / 3."""
    estimate = mean_with_error([-1.0, 0.0, 1.0], range(3))

    assert math.isclose(1 / math.sqrt(3), estimate.mcse, rel_tol=TOLERANCE)
    assert not math.isclose(math.sqrt(2) / 3, estimate.mcse, rel_tol=TOLERANCE)


def test_the_error_of_a_proportion_is_the_published_one():
    """Power .80 from 400 runs has a Monte Carlo error of .02 (Morris, White and Crowther 2019)."""
    values = np.repeat([1.0, 0.0], [320, 80])

    estimate = mean_with_error(values, range(400))

    assert math.isclose(0.02, estimate.mcse, rel_tol=TOLERANCE)
    assert estimate.value == 0.8


def test_datasets_of_a_network_stay_together(rng):
    """The error is that of the network means when networks have equally many datasets."""
    means = rng.normal(size=25)
    clusters = np.repeat(np.arange(25), 4)
    values = means[clusters] + np.tile([-0.3, 0.1, 0.1, 0.1], 25)

    estimate = mean_with_error(values, clusters)

    assert math.isclose(means.std(ddof=1) / 5, estimate.mcse, rel_tol=TOLERANCE)
    assert (estimate.n_clusters, estimate.n_values) == (25, 100)


def test_unequal_networks_have_the_error_of_a_ratio(rng):
    """With unequal networks it agrees with the linearised error of a ratio (Cochran 1977, from memory)."""
    sizes = rng.integers(1, 6, size=200)
    clusters = np.repeat(np.arange(200), sizes)
    values = rng.normal(size=200)[clusters] + rng.normal(size=len(clusters))

    estimate = mean_with_error(values, clusters)

    residuals = np.bincount(clusters, weights=values - values.mean())
    expected = math.sqrt(200 / 199 * (residuals**2).sum()) / len(values)
    assert math.isclose(expected, estimate.mcse, rel_tol=TOLERANCE + 0.02)


def test_values_that_are_missing_are_left_out_column_by_column(rng):
    """Each column has the mean and the error of its own values."""
    table = rng.normal(size=(40, 3))
    table[:25, 1] = np.nan
    table[:, 2] = np.nan

    estimates = means_with_errors(table, np.repeat(np.arange(20), 2))

    alone = mean_with_error(table[25:, 1], np.repeat(np.arange(20), 2)[25:])
    assert math.isclose(alone.value, estimates[1].value)
    assert math.isclose(alone.mcse, estimates[1].mcse)
    assert (estimates[1].n_clusters, estimates[1].n_values) == (8, 15)
    assert math.isnan(estimates[2].value)
    assert estimates[2].reason == "no run has a value"


def test_a_single_network_has_no_error_and_says_why():
    """One unit shows no spread: the error is NaN with its reason, and there is no interval."""
    estimate = mean_with_error([1.0, 2.0], ["a", "a"])

    assert estimate.value == 1.5
    assert math.isnan(estimate.mcse)
    assert estimate.reason == "a single unit shows no spread"
    assert estimate.interval() is None


def test_equal_values_have_no_error():
    """The error of equal values is exactly 0, whatever the rounding of their sums."""
    estimate = mean_with_error(np.full(30, 0.1), np.repeat(np.arange(10), 3))

    assert (estimate.value, estimate.mcse) == (0.1, 0.0)


def test_the_same_runs_give_the_same_error():
    """Without a generator the stream is fixed; with one it is that generator's."""
    values = np.arange(30.0)

    fixed = [mean_with_error(values, range(30)).mcse for _ in range(2)]
    drawn = [mean_with_error(values, range(30), rng=np.random.default_rng(seed)).mcse for seed in (1, 1, 2)]

    assert fixed[0] == fixed[1]
    assert drawn[0] == drawn[1] != drawn[2]


def test_a_table_must_fit_its_clusters():
    """Values and cluster names of different length are refused."""
    with pytest.raises(ValueError, match="does not fit"):
        mean_with_error([1.0, 2.0], ["a"])


@pytest.mark.slow
@pytest.mark.parametrize(("n_networks", "n_datasets"), [(10, 1), (30, 3), (100, 1)])
def test_intervals_cover_as_often_as_they_say(n_networks, n_datasets):
    """Over 2,000 studies a 95 % interval covers the mean of skewed network effects nearly that often.

    The binomial standard error is .0049. The band is six of them, below 1e-8 for the right coverage, plus
    .02 downwards: t intervals of means of skewed values fall short by a little (common practice).
    """
    rng = np.random.default_rng(7)
    clusters = np.repeat(np.arange(n_networks), n_datasets)
    covered = 0
    for _ in range(2000):
        values = rng.gamma(4.0, size=n_networks)[clusters] + rng.normal(size=len(clusters))
        interval = mean_with_error(values, clusters).interval(0.95)
        covered += interval.low <= 4.0 <= interval.high

    assert 0.95 - 0.02 - 6 * 0.0049 < covered / 2000 < 0.95 + 6 * 0.0049


@pytest.mark.slow
def test_stated_errors_are_the_true_ones():
    """Over 2,000 studies the mean stated variance is the true one.

    The relative standard error of a variance of 2,000 normal values is sqrt(2 / 1999), 3.2 %, of the mean
    stated one below 1 %: 20 % is six of them.
    """
    rng = np.random.default_rng(8)
    clusters = np.repeat(np.arange(20), 3)
    estimates = [
        mean_with_error(rng.normal(size=20)[clusters] + rng.normal(size=60), clusters) for _ in range(2000)
    ]

    stated = np.mean([estimate.mcse**2 for estimate in estimates])
    true = 1 / 20 + 1 / 60

    assert math.isclose(true, stated, rel_tol=0.04)
    assert math.isclose(true, np.var([estimate.value for estimate in estimates], ddof=1), rel_tol=0.2)
