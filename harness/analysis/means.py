"""Means of measures with their errors, failures beside them, and median times under a limit."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from harness.analysis.resampling import MeanEstimate, means_with_errors
from harness.analysis.runs import ANSWER, LEARNER, TRUTH, Cell, Runs, undefined_by
from harness.records import Status

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class MeasureSummary:
    """The mean of a measure over the finished runs of a cell.

    Parameters
    ----------
    mean : MeanEstimate
        Over the runs where the measure is defined.
    undefined_by_truth, undefined_by_answer, undefined_by_learner : float
        Shares of the finished runs, NaN when no run finished.
    """

    mean: MeanEstimate
    undefined_by_truth: float
    undefined_by_answer: float
    undefined_by_learner: float

    @property
    def share_undefined(self) -> float:
        """The share of finished runs that have no value, for whatever reason."""
        return self.undefined_by_truth + self.undefined_by_answer + self.undefined_by_learner


@dataclass(frozen=True, slots=True)
class Durations:
    """Wall times of a cell, cut off at the limit where a run timed out.

    Parameters
    ----------
    median, low_quartile, high_quartile : float
        Seconds; infinite where so many runs timed out that the quantile lies over the limit, NaN
        without runs.
    n : int
        Finished and timed-out runs.
    n_timeouts : int
    longest_seen : float
        Seconds: the greatest time at which a run finished or was cut off.
    """

    median: float
    low_quartile: float
    high_quartile: float
    n: int
    n_timeouts: int
    longest_seen: float


@dataclass(frozen=True, slots=True)
class Summary:
    """What one cell shows.

    Parameters
    ----------
    cell : Cell
    unit : str
        "network", or "dataset" where the condition has a single network.
    n_runs, n_units : int
        Settled runs, failed ones included, and the independent units behind them.
    statuses : mapping of str to int
        Runs by how they ended.
    measures : mapping of str to MeasureSummary
    durations : Durations
    """

    cell: Cell
    unit: str
    n_runs: int
    n_units: int
    statuses: Mapping[str, int]
    measures: Mapping[str, MeasureSummary]
    durations: Durations

    @property
    def n_failed(self) -> int:
        """The number of runs that did not end done."""
        return self.n_runs - self.statuses.get(Status.DONE.value, 0)

    @property
    def share_failed(self) -> float:
        """The share of runs that did not end done."""
        return self.n_failed / self.n_runs


def summarise(runs: Runs) -> tuple[Summary, ...]:
    """Summarise every cell: one learner at one row count of one condition.

    Parameters
    ----------
    runs : Runs
        Interrupted runs are no results and are left out; every other run is counted.

    Returns
    -------
    tuple of Summary
        By condition, rows and label.
    """
    settled = runs.settled()
    units = settled.units()
    return tuple(
        _summary(cell, frame, units[cell.condition], settled.measures) for cell, frame in settled.cells()
    )


def _summary(cell: Cell, frame: pd.DataFrame, unit: str, measures: tuple[str, ...]) -> Summary:
    counts = frame["status"].value_counts()
    finished = frame[frame["status"] == Status.DONE.value]
    means = means_with_errors(
        finished[list(measures)].to_numpy(dtype=np.float64), finished[unit].to_numpy(dtype=object)
    )
    return Summary(
        cell,
        unit,
        len(frame),
        int(frame[unit].nunique()),
        {str(status): int(count) for status, count in sorted(counts.items())},
        {
            measure: _measure_summary(finished, measure, mean)
            for measure, mean in zip(measures, means, strict=True)
        },
        durations(frame),
    )


def _measure_summary(finished: pd.DataFrame, measure: str, mean: MeanEstimate) -> MeasureSummary:
    if len(finished) == 0:
        return MeasureSummary(mean, math.nan, math.nan, math.nan)
    by = undefined_by(finished, measure)
    return MeasureSummary(mean, *(float((by == culprit).mean()) for culprit in (TRUTH, ANSWER, LEARNER)))


def durations(frame: pd.DataFrame) -> Durations:
    """Return the median and quartiles of wall time, timed-out runs counted as longer than their limit.

    Parameters
    ----------
    frame : pandas.DataFrame
        Runs of one cell. Only `timeout` is censored: a run that failed otherwise has no time of its own.
    """
    status = frame["status"].to_numpy(dtype=object)
    timed_out = status == Status.TIMEOUT.value
    seconds = frame["wall_seconds"].to_numpy(dtype=np.float64)
    known = timed_out | ((status == Status.DONE.value) & ~np.isnan(seconds))
    seconds, timed_out = seconds[known], timed_out[known]
    seen = seconds[~np.isnan(seconds)]
    # A timeout without a time of its own was cut off somewhere beyond: after everything seen.
    seconds = np.where(np.isnan(seconds), np.inf, seconds)
    low, median, high = (censored_quantile(seconds, timed_out, q) for q in (0.25, 0.5, 0.75))
    longest = float(seen.max()) if len(seen) else math.nan
    return Durations(median, low, high, len(seconds), int(timed_out.sum()), longest)


def censored_quantile(times: ArrayLike, censored: ArrayLike, q: float) -> float:
    """Return a quantile of times of which some are only known to be longer (Kaplan and Meier 1958).

    Parameters
    ----------
    times : float array, shape (n,)
        When each run ended or was cut off.
    censored : bool array, shape (n,)
        Whether it was cut off.
    q : float
        Between 0 and 1.

    Returns
    -------
    float
        Where the product-limit estimate of the share finished first exceeds q, or midway to there from
        where it equals q, so that without censoring this is numpy's "averaged_inverted_cdf" (for q = 1/2
        the ordinary median); infinite when the estimate never exceeds q, NaN without runs.

    Examples
    --------
    >>> censored_quantile([1.0, 2.0, 4.0, 9.0], [False] * 4, 0.5)
    3.0
    >>> censored_quantile([1.0, 2.0, 5.0, 5.0], [False, False, True, True], 0.5)
    inf
    """
    times, censored = np.asarray(times, dtype=np.float64), np.asarray(censored, dtype=bool)
    if len(times) == 0:
        return math.nan
    ends, finished = _share_finished(times, censored)
    beyond = np.append(ends, np.inf)
    tolerance = 1e-9  # the product of fractions misses an exact 1/2 by rounding
    first_above = int(np.searchsorted(finished, q + tolerance, side="right"))
    if first_above > 0 and abs(finished[first_above - 1] - q) <= tolerance:
        return float((beyond[first_above - 1] + beyond[first_above]) / 2)
    return float(beyond[first_above])


def _share_finished(
    times: NDArray[np.float64], censored: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the times at which runs finished, ascending, and the share finished by then."""
    ends, n_ending = np.unique(times[~censored], return_counts=True)
    n_at_risk = len(times) - np.searchsorted(np.sort(times), ends, side="left")
    return ends, np.asarray(1 - np.cumprod(1 - n_ending / n_at_risk), dtype=np.float64)
