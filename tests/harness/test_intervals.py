"""Wilson's interval against published tables, scipy and its own meaning."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom, binomtest

from harness.analysis.intervals import clustered_wilson, least_n_to_show, wilson


@pytest.mark.parametrize(
    ("successes", "n", "low", "high"),
    [
        # Newcombe 1998, Statistics in Medicine 17, 857-872, Table I, method 3.
        (81, 263, 0.2553, 0.3662),
        (15, 148, 0.0624, 0.1605),
        (0, 20, 0.0000, 0.1611),
        (1, 29, 0.0061, 0.1718),
    ],
)
def test_the_published_intervals_come_out(successes, n, low, high):
    """Newcombe's four examples agree in every printed digit."""
    interval = wilson(successes / n, n)

    assert (low, high) == (round(interval.low, 4), round(interval.high, 4))


@pytest.mark.parametrize("confidence", [0.9, 0.95, 0.99])
@pytest.mark.parametrize(("successes", "n"), [(0, 1), (1, 1), (7, 50), (16, 16), (123, 400), (999, 1000)])
def test_scipy_gives_the_same_interval(successes, n, confidence):
    """The formula and scipy's Wilson interval agree."""
    expected = binomtest(successes, n).proportion_ci(confidence, method="wilson")

    interval = wilson(successes / n, n, confidence)

    assert math.isclose(expected.low, interval.low, abs_tol=1e-12)
    assert math.isclose(expected.high, interval.high, abs_tol=1e-12)
    assert (confidence, n) == (interval.confidence, interval.n)


@pytest.mark.parametrize(("n", "coverage"), [(17, 0.951), (18, 0.969), (40, 0.962)])
def test_exact_coverage_is_the_published_one(n, coverage):
    """At p = 1/2 the exact coverage is that computed for Brown, Cai and DasGupta's (2001) examples."""
    intervals = [wilson(x / n, n) for x in range(n + 1)]

    covered = sum(binom.pmf(x, n, 0.5) for x, each in enumerate(intervals) if each.low <= 0.5 <= each.high)

    assert coverage == round(float(covered), 3)


def test_no_runs_have_no_interval():
    """A share of nothing is refused."""
    with pytest.raises(ValueError, match="at least one run"):
        wilson(0.5, 0)
    with pytest.raises(ValueError, match="at least one run"):
        clustered_wilson([], [])


def test_single_datasets_count_in_full():
    """With one run per network the interval is the ordinary one."""
    successes = np.arange(50) < 40

    assert wilson(0.8, 50) == clustered_wilson(successes, range(50))


def test_datasets_that_always_agree_count_once_per_network():
    """Four alike datasets on each of 30 networks are 30 runs, not 120."""
    networks = np.repeat(np.arange(30), 4)

    interval = clustered_wilson(networks < 21, networks)

    assert math.isclose(30, interval.n)
    assert math.isclose(wilson(0.7, 30).low, interval.low)


def test_a_share_of_one_takes_the_networks_for_the_runs():
    """Where every run succeeds no spread shows, and the least number is taken: the networks."""
    networks = np.repeat(np.arange(30), 4)

    interval = clustered_wilson(np.ones(120, dtype=bool), networks)

    assert (interval.n, interval.value, interval.high) == (30, 1.0, 1.0)


def test_datasets_that_hardly_agree_count_nearly_in_full(rng):
    """Independent datasets of 200 networks count for nearly all of their 400 runs, and for no more."""
    networks = np.repeat(np.arange(200), 2)
    successes = rng.random(400) < 0.6

    interval = clustered_wilson(successes, networks)

    # The design effect of a network's pair is 1 + correlation; with 200 pairs its error is about .07, and
    # six of these are never reached.
    assert 400 / 1.42 < interval.n <= 400


@pytest.mark.parametrize("target", [0.5, 0.8, 0.9, 0.95])
def test_the_least_number_of_networks_is_the_least(target):
    """All of n successes show the target at n, and not at n - 1, by scipy's interval too."""
    n = least_n_to_show(target)

    assert binomtest(n, n).proportion_ci(0.95, method="wilson").low >= target
    assert binomtest(n - 1, n - 1).proportion_ci(0.95, method="wilson").low < target


@pytest.mark.slow
def test_clustered_intervals_cover_as_often_as_they_say():
    """Over 3,000 studies with three correlated datasets per network 95 % intervals cover 93 to 98 %.

    The binomial standard error is .004. The ordinary interval takes the runs for independent and ignores
    the design effect 1 + 2/4: it covers about 2 Phi(1.96 / sqrt(1.5)) - 1 = .890 of the same studies.
    """
    rng = np.random.default_rng(9)
    networks = np.repeat(np.arange(60), 3)
    clustered = ordinary = 0
    for _ in range(3000):
        p = rng.beta(2.0, 1.0, size=60)  # mean 2/3, within-network correlation 1/4
        successes = rng.random(180) < p[networks]
        own, other = clustered_wilson(successes, networks), wilson(float(successes.mean()), 180)
        clustered += own.low <= 2 / 3 <= own.high
        ordinary += other.low <= 2 / 3 <= other.high

    assert 0.93 < clustered / 3000 < 0.98
    assert abs(ordinary / 3000 - 0.890) < 6 * 0.0057
