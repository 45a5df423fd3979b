"""The permutation test of conditional independence, for tables too sparse for chi-square distributions.

Under independence given the strata, every way to deal the states of y out anew among the rows of a stratum
is as likely as the one seen. So G2 of the data is compared with G2 after such deals, drawn at random. With
b of B drawn values as large as the one seen, the p-value is (1 + b) / (1 + B), which is never too small
(Phipson and Smyth 2010). Whether it exceeds alpha is often clear after a few deals: then the rest is not
drawn, without changing the answer (Besag and Clifford 1991, in its simplest form).

The deals of a test depend on the seed, the pair and the conditioning set alone, not on the tests made
before.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.errors import InputError
from generators.philox import draw_words
from harness.counts import Columns, Workspace, index_rows, prepare
from harness.independence.statistics import ROUNDING, StatisticWorkspace, statistic_workspace

DEALS_ALLOWED = 10  # by default: of that many, one less may be as large as what was seen


class Permutations(NamedTuple):
    """How many deals are drawn, and from which seed; kernels take it as it is.

    Parameters
    ----------
    seed : uint64
    n : int
        Deals drawn at most, B.
    n_allowed : int
        A test is significant if at most so many of them are as large as the value seen.
    """

    seed: np.uint64
    n: int
    n_allowed: int


def permutations_at(alpha: float, n: int | None, rng: np.random.Generator) -> Permutations:
    """Draw the seed of the permutation tests at one level.

    Parameters
    ----------
    alpha : float
    n : int, optional
        How many deals are drawn at most; by default 10 / alpha - 1, which is 999 at 1 %.
    rng : numpy.random.Generator

    Raises
    ------
    InputError
        If no result of so few deals would be significant at `alpha`.

    Examples
    --------
    >>> permutations_at(0.05, None, np.random.default_rng(1))[1:]
    (199, 9)
    """
    # A product such as 0.07 x 100 = 7.000000000000001 must not lose or gain one.
    if n is None:
        n = math.ceil(DEALS_ALLOWED / alpha - 1e-9) - 1
    n_allowed = math.floor(alpha * (n + 1) + 1e-9) - 1
    if n_allowed < 0:
        raise InputError(
            f"permutations: with {n} none is significant at alpha = {alpha:g}; at least "
            f"{math.ceil(1 / alpha - 1e-9) - 1} are needed"
        )
    return Permutations(rng.integers(0, 2**64, dtype=np.uint64), n, n_allowed)


def permutation_p_value(
    columns: Columns,
    x: int,
    y: int,
    given: Sequence[int] = (),
    *,
    n: int,
    rng: np.random.Generator,
) -> float:
    """Compute the p-value of the permutation test of two variables given others.

    Parameters
    ----------
    columns : Columns
    x, y : int
        Positions of two different variables.
    given : sequence of int
        Positions of other variables.
    n : int
        How many deals are drawn.
    rng : numpy.random.Generator
        Draws the seed.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 0], [1, 1]] * 5, dtype=np.uint8))
    >>> 2 / 252 / 2 < permutation_p_value(prepare(data), 0, 1, n=9999, rng=np.random.default_rng(1)) < 0.02
    True
    """
    draws = Permutations(rng.integers(0, 2**64, dtype=np.uint64), n, n)
    variables = np.array(given, dtype=np.int64)
    n_as_large, _ = deal_out(columns, variables, x, y, statistic_workspace(columns), draws)
    return (1 + n_as_large) / (1 + n)


@kernel
def deal_out(
    columns: Columns,
    given: NDArray[np.int64],
    x: int,
    y: int,
    work: StatisticWorkspace,
    draws: Permutations,
) -> tuple[int, float]:
    """Compare G2 of x and y given others with G2 after random deals.

    Parameters
    ----------
    columns : Columns
    given : int64 array, shape (k,)
        In any order.
    x, y : int
        In either order.
    work : StatisticWorkspace
        The base that stands in it is lost.
    draws : Permutations

    Returns
    -------
    n_as_large : int
        Deals with G2 as large as the data's; no more are drawn once it exceeds ``draws.n_allowed``.
    deviate : float
        By how many standard deviations of the deals G2 exceeds their mean, where all were drawn.
    """
    x, y = min(x, y), max(x, y)
    ordered = _in_order(given)
    work.parts[:] = 0
    of_y, group_ends, stratum_ends = _by_stratum(columns, ordered, x, y, work.space)
    m = of_y.shape[0]
    key = np.empty(2, dtype=np.uint64)
    key[0], key[1] = draws.seed, _label(ordered, x, y)
    words = np.empty((4, (m + 3) // 4), dtype=np.uint64)
    flat = words.reshape(words.size)
    rows = np.zeros(columns.cardinalities[y], dtype=np.uint32)
    seen = _sum_x_log_x(of_y, group_ends, rows, work.x_log_x)
    n_as_large, mean, squares = 0, 0.0, 0.0
    for draw in range(draws.n):
        draw_words(key, draw, 0, words.shape[1], words)
        start = 0
        for end in stratum_ends:
            for i in range(end - 1, start, -1):  # Fisher and Yates, by the upper halves of the words
                j = start + ((flat[i] >> np.uint64(32)) * np.uint64(i - start + 1) >> np.uint64(32))
                of_y[i], of_y[j] = of_y[j], of_y[i]
            start = end
        value = _sum_x_log_x(of_y, group_ends, rows, work.x_log_x)
        change = value - mean
        mean += change / (draw + 1)
        squares += change * (value - mean)
        if value >= seen - ROUNDING:
            n_as_large += 1
            if n_as_large > draws.n_allowed:
                break
    return n_as_large, (seen - mean) / max(math.sqrt(squares / draws.n), ROUNDING)


@inlined
def _by_stratum(
    columns: Columns, given: NDArray[np.int64], x: int, y: int, space: Workspace
) -> tuple[NDArray[np.uint16], NDArray[np.int64], NDArray[np.int64]]:
    # The states of y in those strata in which both vary (the others have one G2, whatever the deal), the
    # rows of a stratum together and in the order of x; and where the groups of rows that agree in the
    # stratum and x, and where the strata, end.
    n = columns.codes.shape[1]
    n_strata = index_rows(columns, given, space)
    by_x = _sorted_by(columns.codes[x], columns.cardinalities[x], np.arange(n, dtype=np.uint32))
    order = _sorted_by(space.index, n_strata, by_x)
    of_y = np.empty(n, dtype=np.uint16)
    group_ends, stratum_ends = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int64)
    m, n_groups, n_kept = 0, 0, 0
    start = 0
    while start < n:
        end = start
        x_varies, y_varies = False, False
        while end < n and space.index[order[end]] == space.index[order[start]]:
            x_varies |= columns.codes[x, order[end]] != columns.codes[x, order[start]]
            y_varies |= columns.codes[y, order[end]] != columns.codes[y, order[start]]
            end += 1
        if x_varies and y_varies:
            for i in range(start, end):
                of_y[m] = columns.codes[y, order[i]]
                if i > start and columns.codes[x, order[i]] != columns.codes[x, order[i - 1]]:
                    group_ends[n_groups] = m
                    n_groups += 1
                m += 1
            group_ends[n_groups] = stratum_ends[n_kept] = m
            n_groups += 1
            n_kept += 1
        start = end
    return of_y[:m], group_ends[:n_groups], stratum_ends[:n_kept]


@inlined
def _sorted_by(keys: NDArray[np.uint32], n_keys: int, order: NDArray[np.uint32]) -> NDArray[np.uint32]:
    # The rows in ascending order of their keys, rows with equal keys in the given order.
    ends = np.zeros(n_keys + 1, dtype=np.int64)
    for row in order:
        ends[keys[row] + 1] += 1
    for key in range(n_keys):
        ends[key + 1] += ends[key]
    result = np.empty_like(order)
    for row in order:
        result[ends[keys[row]]] = row
        ends[keys[row]] += 1
    return result


@inlined
def _sum_x_log_x(
    of_y: NDArray[np.uint16],
    group_ends: NDArray[np.int64],
    rows: NDArray[np.uint32],
    x_log_x: NDArray[np.float64],
) -> float:
    # Sum of N log N over the cells: half of G2, but for what no deal changes.
    total = 0.0
    start = 0
    for end in group_ends:
        for state in of_y[start:end]:
            total += x_log_x[rows[state] + 1] - x_log_x[rows[state]]
            rows[state] += np.uint32(1)
        for state in of_y[start:end]:
            rows[state] = 0
        start = end
    return total


@inlined
def _in_order(given: NDArray[np.int64]) -> NDArray[np.int64]:
    # By insertion: there are few, and numba's sort takes seconds to compile.
    ordered = np.empty_like(given)
    for i in range(given.shape[0]):
        j = i
        while j > 0 and ordered[j - 1] > given[i]:
            ordered[j] = ordered[j - 1]
            j -= 1
        ordered[j] = given[i]
    return ordered


@inlined
def _label(given: NDArray[np.int64], x: int, y: int) -> np.uint64:
    # A number for the question.
    label = _scrambled(np.uint64(x) << np.uint64(32) | np.uint64(y))
    for v in given:
        label = _scrambled(label + np.uint64(v) + np.uint64(1))
    return label


@inlined
def _scrambled(word: np.uint64) -> np.uint64:
    # The finaliser of splitmix64 (Steele, Lea and Flood 2014).
    word = (word ^ (word >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    word = (word ^ (word >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return word ^ (word >> np.uint64(31))


@warm_up
def _compile() -> None:
    data = Dataset(("a", "b", "c"), (("0", "1"),) * 3, np.zeros((2, 3), dtype=np.uint8))
    permutation_p_value(prepare(data), 0, 1, [2], n=1, rng=np.random.default_rng(0))
