"""The test of one table, in plain numpy: what everything compiled must equal."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from generators.errors import InputError

Statistic = Literal["g2", "pearson"]


@dataclass(frozen=True, slots=True)
class TestResult:
    """The outcome of a test of independence.

    Parameters
    ----------
    statistic : float
    df : int
        Nominal degrees of freedom.
    p_value : float
        Of the chi-square distribution with `df` degrees of freedom; 1 where `df` is 0.
    """

    __test__: ClassVar[bool] = False  # pytest: the name begins with "Test", but this is none

    statistic: float
    df: int
    p_value: float


def independence_test(table: NDArray[np.integer[Any]], *, test: Statistic = "g2") -> TestResult:
    """Test whether two variables are independent given a third, or given several taken as one.

    Parameters
    ----------
    table : int array, shape (q, r_x, r_y)
        Counts; the first axis is over all declared joint states of the conditioning variables (q = 1
        where there are none), the others over the declared states of the two variables.
    test : {"g2", "pearson"}

    Returns
    -------
    TestResult

    Raises
    ------
    InputError
        If the table has not three axes, no cell, a negative count, or the test is unknown.

    Examples
    --------
    Admission (columns) by sex (rows) at Berkeley in 1973, six departments taken together (Bickel,
    Hammel and O'Connell 1975):

    >>> result = independence_test(np.array([[[1198, 1493], [557, 1278]]]))
    >>> round(result.statistic, 4), result.df
    (93.4494, 1)
    """
    counts = np.asarray(table)
    if counts.ndim != 3 or counts.size == 0 or counts.dtype.kind not in "iu" or counts.min() < 0:
        raise InputError(
            f"a table must hold counts on three axes (strata, x, y), none empty, got {counts.dtype} of "
            f"shape {counts.shape}"
        )
    is_pearson = is_pearson_statistic(test)
    seen = counts.astype(np.float64)
    strata = seen.sum(axis=(1, 2), keepdims=True)
    expected = seen.sum(axis=2, keepdims=True) * seen.sum(axis=1, keepdims=True) / np.maximum(strata, 1)
    possible = expected > 0
    seen, expected = seen[possible], expected[possible]
    if is_pearson:
        statistic = float(((seen - expected) ** 2 / expected).sum())
    else:
        statistic = 2 * float((seen * np.log(np.where(seen > 0, seen / expected, 1))).sum())
    q, r_x, r_y = counts.shape
    df = q * (r_x - 1) * (r_y - 1)
    statistic = max(statistic, 0.0) if df else 0.0
    return TestResult(statistic, df, float(chdtrc(df, statistic)) if df else 1.0)


def is_pearson_statistic(test: str) -> bool:
    """Say which of the two statistics a name means, or that it means neither."""
    if test not in ("g2", "pearson"):
        raise InputError(f"test must be one of g2, pearson, got {test!r}")
    return test == "pearson"
