"""Intervals of shares: Wilson's, and the same where a network has several datasets."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from harness.analysis.resampling import mean_with_error
from harness.records import Interval

METHOD = "Wilson's score interval"
CLUSTERED_METHOD = "Wilson's score interval at the effective number of runs"


def wilson(share: float, n: float, confidence: float = 0.95, method: str = METHOD) -> Interval:
    """Return Wilson's score interval of a share (Wilson 1927; Newcombe 1998, method 3).

    Parameters
    ----------
    share : float
        Between 0 and 1.
    n : float
        The number of independent runs; need not be whole.
    confidence : float
    method : str
        What the interval calls itself.

    Raises
    ------
    ValueError
        If there are no runs or the share is none.

    Examples
    --------
    >>> interval = wilson(81 / 263, 263)
    >>> f"{interval.low:.4f} {interval.high:.4f}"
    '0.2553 0.3662'
    """
    if not n > 0 or not 0 <= share <= 1:
        raise ValueError(f"an interval needs a share between 0 and 1 of at least one run, got {share} of {n}")
    z2 = _z(confidence) ** 2
    middle = (share + z2 / (2 * n)) / (1 + z2 / n)
    reach = math.sqrt(z2 * (share * (1 - share) / n + z2 / (4 * n * n))) / (1 + z2 / n)
    # At 0 and 1 the score equation has these roots exactly; the arithmetic misses them by rounding.
    low = 0.0 if share == 0 else middle - reach
    high = 1.0 if share == 1 else middle + reach
    return Interval(share, low, high, confidence, method, n)


def clustered_wilson(
    successes: ArrayLike, clusters: Sequence[Any] | NDArray[Any], confidence: float = 0.95
) -> Interval:
    """Return Wilson's interval at the effective number of runs (Kish 1965, from memory).

    Several datasets of one network do not count as independent: n runs count as n divided by the design
    effect, the variance of the share by the cluster bootstrap over that of n independent runs (the idea
    of Korn and Graubard 1998, from memory).

    Parameters
    ----------
    successes : bool array, shape (n,)
    clusters : sequence of length n
        The network of each run.
    confidence : float

    Returns
    -------
    Interval
        Its `n` is the effective number of runs: n when no network repeats, at most n, and at least what
        it would be if all runs on a network always agreed. A share of 0 or 1 shows no spread to judge
        by, and takes that least number.

    Examples
    --------
    Ten networks with four datasets each, all four alike: as good as ten runs.

    >>> networks = np.repeat(np.arange(10), 4)
    >>> clustered_wilson(networks < 7, networks).n
    10.0
    """
    values = np.asarray(successes, dtype=np.float64)
    n = len(values)
    if n == 0:
        raise ValueError("an interval needs at least one run")
    share = float(values.mean())
    sizes = np.unique(np.asarray(clusters), return_counts=True)[1]
    if sizes.max() == 1:
        return wilson(share, n, confidence)
    least = n**2 / float((sizes.astype(np.float64) ** 2).sum())
    error = mean_with_error(values, clusters).mcse
    effective = share * (1 - share) / error**2 if error > 0 else least
    return wilson(share, float(min(max(effective, least), n)), confidence, CLUSTERED_METHOD)


def least_n_to_show(target: float, confidence: float = 0.95) -> int:
    """Return how many runs, all successful, put Wilson's lower limit at or above a target share.

    With n of n successes the lower limit is n / (n + z^2).

    Examples
    --------
    >>> least_n_to_show(0.8), wilson(1.0, 16).low >= 0.8, wilson(1.0, 15).low >= 0.8
    (16, True, False)
    """
    if not 0 <= target < 1:
        raise ValueError(f"only a target from 0 to below 1 can be shown, got {target}")
    return max(1, math.ceil(_z(confidence) ** 2 * target / (1 - target)))


def _z(confidence: float) -> float:
    from scipy.special import ndtri  # a fraction of the time that scipy.stats takes to import

    return float(ndtri(0.5 + confidence / 2))
