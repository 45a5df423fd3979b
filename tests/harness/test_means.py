"""Means, failures and censored times on runs with known answers."""

from __future__ import annotations

import math

import numpy as np
import pytest

from harness.analysis.curves import measure_curves, runtime_curves
from harness.analysis.means import censored_quantile, durations, summarise
from harness.analysis.resampling import N_RESAMPLES


def test_means_are_over_finished_runs_and_failures_stand_beside_them(make_runs):
    """A failed run enters the share failed, not the mean; an interrupted one enters nothing."""
    runs = make_runs(
        [
            {"class_shd": 2.0},
            {"class_shd": 6.0},
            {"status": "crashed", "cause": "signal 11"},
            {"status": "declined", "cause": "too large"},
            {"status": "interrupted"},
        ]
    )

    (summary,) = summarise(runs)

    assert summary.measures["class_shd"].mean.value == 4.0
    assert (summary.n_runs, summary.n_failed, summary.share_failed) == (4, 2, 0.5)
    assert summary.statuses == {"done": 2, "crashed": 1, "declined": 1}


def test_the_error_of_a_mean_is_the_published_one(make_runs):
    """With one run per network it is sd / sqrt(R) (Morris, White and Crowther 2019, Table 6)."""
    values = np.array([3.0, 5.0, 4.0, 9.0, 1.0, 2.0, 8.0, 7.0])
    runs = make_runs([{"class_shd": value} for value in values])

    (summary,) = summarise(runs)

    expected = values.std(ddof=1) / math.sqrt(8)
    error = summary.measures["class_shd"].mean.mcse
    assert math.isclose(expected, error, rel_tol=6 / math.sqrt(2 * N_RESAMPLES))


def test_undefined_measures_are_counted_by_what_made_them_so(make_runs):
    """Shares undefined are of the finished runs, by truth, answer and learner; the mean leaves them out."""
    runs = make_runs(
        [
            {"skeleton_precision": 0.5},
            {"undefined": {"skeleton_precision": "answer: no edge was learned"}},
            {"undefined": {"skeleton_precision": "answer: no edge was learned"}},
            {"undefined": {"skeleton_precision": "truth: no edge to find"}},
            {"undefined": {"skeleton_precision": "learner: has none"}},
            {"status": "error", "cause": "x"},
        ]
    )

    (summary,) = summarise(runs)

    precision = summary.measures["skeleton_precision"]
    assert (precision.mean.value, precision.mean.n_values) == (0.5, 1)
    assert (
        precision.undefined_by_truth,
        precision.undefined_by_answer,
        precision.undefined_by_learner,
    ) == (0.2, 0.4, 0.2)
    assert math.isclose(0.8, precision.share_undefined)


def test_a_cell_of_failures_only_has_no_mean(make_runs):
    """Where nothing finished the mean is NaN with its reason, and nothing breaks."""
    runs = make_runs([{"status": "error", "cause": "x"}] * 3)

    (summary,) = summarise(runs)

    assert summary.measures["class_shd"].mean.reason == "no run has a value"
    assert math.isnan(summary.durations.median)
    assert summary.share_failed == 1.0


def test_cells_keep_conditions_rows_and_labels_apart(make_runs):
    """Cells come by condition and rows, labels in the order in which the runs name them."""
    runs = make_runs(
        [
            {"condition": condition, "rows": rows, "label": label, "class_shd": condition + rows}
            for label in ("second", "first")
            for rows in (500, 100)
            for condition in (1, 0)
        ]
    )

    summaries = summarise(runs)

    assert [tuple(each.cell) for each in summaries[:3]] == [
        (0, 100, "second"),
        (0, 100, "first"),
        (0, 500, "second"),
    ]
    assert [each.measures["class_shd"].mean.value for each in summaries] == [
        100,
        100,
        500,
        500,
        101,
        101,
        501,
        501,
    ]


def test_a_single_network_makes_its_datasets_the_units(make_runs):
    """With one network in a condition the error is over datasets; with several it is over networks."""
    alone = make_runs([{"network": "a", "dataset": f"d{i}", "class_shd": i} for i in range(6)])
    several = make_runs([{"network": "ab"[i % 2], "dataset": f"d{i}", "class_shd": i} for i in range(6)])

    (given,), (drawn,) = summarise(alone), summarise(several)

    assert (given.unit, given.n_units) == ("dataset", 6)
    assert (drawn.unit, drawn.n_units) == ("network", 2)
    expected = np.arange(6).std(ddof=1) / math.sqrt(6)
    assert math.isclose(
        expected, given.measures["class_shd"].mean.mcse, rel_tol=6 / math.sqrt(2 * N_RESAMPLES)
    )


@pytest.mark.parametrize("n", [1, 2, 5, 8, 11])
@pytest.mark.parametrize("q", [0.25, 0.5, 0.75])
def test_without_timeouts_quantiles_are_numpys(rng, n, q):
    """Uncensored quantiles agree with numpy's, ties and all; at 1/2 that is the ordinary median."""
    times = rng.integers(1, 6, size=n).astype(float)

    found = censored_quantile(times, np.zeros(n, dtype=bool), q)

    assert np.quantile(times, q, method="averaged_inverted_cdf") == found


def test_quantiles_follow_a_published_product_limit_estimate():
    """Freireich's 6-MP remissions (Gehan 1965; weeks, + cut off) have their known median of 23.

    The product-limit estimate there falls to .448 at 23 weeks from .538 at 22 (from memory).
    """
    ends = [6, 6, 6, 7, 10, 13, 16, 22, 23]
    cut_off = [6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]

    median = censored_quantile(ends + cut_off, [False] * 9 + [True] * 12, 0.5)

    assert median == 23


@pytest.mark.parametrize(("n_timeouts", "median"), [(0, 3.5), (2, 3.5), (3, math.inf), (5, math.inf)])
def test_the_median_is_over_the_limit_when_half_or_more_time_out(make_runs, n_timeouts, median):
    """Runs cut off at the limit count as longer; from half of them on the median is over it."""
    finished = [{"wall_seconds": float(1 + i)} for i in range(6 - n_timeouts)]
    cut_off = [{"status": "timeout", "cause": "limit", "wall_seconds": 60.0}] * n_timeouts
    runs = make_runs(finished + cut_off)

    times = durations(runs.frame)

    assert median == times.median
    assert (6, n_timeouts) == (times.n, times.n_timeouts)


def test_other_failures_leave_the_time_model(make_runs):
    """A crashed run has no time of its own: it neither shortens nor censors the median."""
    runs = make_runs(
        [
            {"wall_seconds": 1.0},
            {"wall_seconds": 2.0},
            {"status": "crashed", "cause": "x", "wall_seconds": 0.001},
        ]
    )

    times = durations(runs.frame)

    assert (times.median, times.n, times.n_timeouts) == (1.5, 2, 0)


def test_a_timeout_without_a_time_counts_as_the_longest(make_runs):
    """A timed-out run whose time was not recorded is cut off after everything seen."""
    runs = make_runs([{"wall_seconds": 1.0}, {"wall_seconds": 2.0}, {"status": "timeout", "cause": "x"}])

    times = durations(runs.frame)

    assert (2.0, 2.0, math.inf) == (times.median, times.longest_seen, times.high_quartile)


def test_curves_follow_the_cells(make_runs):
    """A curve has a point per row count with values, its interval around it; empty cells have none."""
    runs = make_runs(
        [{"rows": rows, "class_shd": rows / 100 + i} for rows in (400, 100) for i in range(5)]
        + [{"rows": 200, "status": "timeout", "cause": "x", "wall_seconds": 9.0}] * 3
    )
    summaries = summarise(runs)

    (measure,), (time,) = measure_curves(summaries, "class_shd"), runtime_curves(summaries)

    assert [(point.x, point.y) for point in measure.points] == [(100, 3.0), (400, 6.0)]
    assert all(point.low < point.y < point.high for point in measure.points)
    assert [(200, math.inf, 9.0, 3)] == [
        (point.x, point.y, point.floor, point.n_censored) for point in time.points if point.x == 200
    ]
