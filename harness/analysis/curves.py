"""Curves of measures and of times, as points with their intervals."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from harness.analysis.assurance import MetShare
from harness.analysis.means import Summary


@dataclass(frozen=True, slots=True)
class Point:
    """A point of a curve.

    Parameters
    ----------
    x : float
    y : float
        Infinite for a time over the limit.
    low, high : float
        Ends of its interval, equal to `y` where there is none.
    n_censored : int
        Runs cut off by the limit.
    floor : float
        For a time over the limit: the longest time seen, which it exceeds. NaN otherwise.
    """

    x: float
    y: float
    low: float
    high: float
    n_censored: int = 0
    floor: float = math.nan


@dataclass(frozen=True, slots=True)
class Curve:
    """The points of one learner, ascending in x."""

    label: str
    points: tuple[Point, ...]


def measure_curves(summaries: Iterable[Summary], measure: str, confidence: float = 0.95) -> tuple[Curve, ...]:
    """Return the mean of a measure against rows, with Student's interval, one curve per label.

    Parameters
    ----------
    summaries : iterable of Summary
        Of one condition. Cells where no run has a value have no point.
    measure : str
    confidence : float
    """
    points: dict[str, list[Point]] = {}
    for summary in summaries:
        own = points.setdefault(summary.cell.label, [])
        mean = summary.measures[measure].mean
        if math.isnan(mean.value):
            continue
        interval = mean.interval(confidence)
        low, high = (mean.value, mean.value) if interval is None else (interval.low, interval.high)
        own.append(Point(summary.cell.rows, mean.value, low, high))
    return _curves(points)


def share_curves(shares: Iterable[MetShare]) -> tuple[Curve, ...]:
    """Return the share that meets the requirement against rows, one curve per label.

    Parameters
    ----------
    shares : iterable of MetShare
        Of one condition.
    """
    points: dict[str, list[Point]] = {}
    for share in shares:
        own = points.setdefault(share.cell.label, [])
        if share.interval is not None:
            interval = share.interval
            own.append(Point(share.cell.rows, interval.value, interval.low, interval.high))
    return _curves(points)


def runtime_curves(summaries: Iterable[Summary], x: Mapping[int, float] | None = None) -> tuple[Curve, ...]:
    """Return median wall seconds with quartiles, one curve per label.

    Parameters
    ----------
    summaries : iterable of Summary
        Of one condition; or, with `x`, of several conditions at one row count.
    x : mapping of int to float, optional
        Condition -> where it stands on the axis, its number of variables say. By default the row count.
    """
    points: dict[str, list[Point]] = {}
    for summary in summaries:
        own = points.setdefault(summary.cell.label, [])
        times = summary.durations
        if times.n == 0:
            continue
        place = summary.cell.rows if x is None else x[summary.cell.condition]
        floor = times.longest_seen if math.isinf(times.median) else math.nan
        own.append(
            Point(place, times.median, times.low_quartile, times.high_quartile, times.n_timeouts, floor)
        )
    return _curves(points)


def _curves(points: Mapping[str, Sequence[Point]]) -> tuple[Curve, ...]:
    return tuple(Curve(label, tuple(sorted(own, key=lambda point: point.x))) for label, own in points.items())
