"""The statistics of a dataset, compiled.

The second half of this file is for learners to compile into their loops. A loop compares the statistic
with a critical value and never computes a p-value. It need not count at all where the critical value is
above the *ceiling* of the statistic, the greatest value that it can take given the two margins: G2 is at
most 2 n times the smaller entropy, X2 at most n (r - 1) for the smaller number of seen states r. The
critical value grows with the degrees of freedom, so that tables with far more cells than rows are rarely
asked for; where they are, the rows are gone through instead, and nothing of the table's size is allocated.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from harness.counts import (
    MAX_PLANE_CELLS,
    Columns,
    Workspace,
    append_column,
    count_within,
    index_rows,
    prepare,
    split_planes,
    tabulate_index,
    tabulate_occurring,
    tabulate_pair,
    tabulate_planes,
    workspace,
)
from harness.independence.critical import critical_values
from harness.independence.tables import Statistic, is_pearson_statistic

# Statistics come from sums whose rounding error is far below this, and it is far below any difference
# that matters: at most this far above its critical value, a statistic counts as equal to it.
ROUNDING = 1e-6

MAX_UNRANKED = 512  # measured: above it, empty cells cost more than leaving them out


def statistic_ceilings(columns: Columns, test: Statistic) -> NDArray[np.float64]:
    """Return the greatest statistic that each variable can take part in, given its margin.

    Parameters
    ----------
    columns : Columns
    test : {"g2", "pearson"}

    Returns
    -------
    float64 array, shape (p,)
        No test of two variables, whatever is conditioned on, exceeds the smaller of their two values:
        2 n times the entropy (for G2 is 2 n times an estimate of mutual information), or n times the
        number of seen states less one (X2 / n is at most that, Cramer 1946).

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 1], [1, 1]], dtype=np.uint8))
    >>> statistic_ceilings(prepare(data), "pearson").tolist()
    [2.0, 0.0]
    """
    return _ceilings(columns, is_pearson_statistic(test))


def pair_statistics(columns: Columns, test: Statistic = "g2") -> NDArray[np.float64]:
    """Compute the statistic of every pair of variables, conditioned on nothing.

    Parameters
    ----------
    columns : Columns
    test : {"g2", "pearson"}
        G2 is 2 n times the mutual information of the counts, in nats.

    Returns
    -------
    float64 array, shape (p, p)
        Symmetric, the diagonal 0.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 0], [1, 1]] * 5, dtype=np.uint8))
    >>> pair_statistics(prepare(data), "pearson").tolist()
    [[0.0, 10.0], [10.0, 0.0]]
    """
    upper = _pair_statistics(columns, statistic_workspace(columns), is_pearson_statistic(test))
    return upper + upper.T


def dependent_pairs(
    statistics: NDArray[np.float64], cardinalities: NDArray[np.int64], alpha: float
) -> NDArray[np.bool_]:
    """Say which pairs of variables a test finds dependent, conditioned on nothing.

    Parameters
    ----------
    statistics : float64 array, shape (p, p)
        From `pair_statistics`.
    cardinalities : int64 array, shape (p,)
        Declared states of each variable.
    alpha : float
        Strictly between 0 and 1.

    Returns
    -------
    bool array, shape (p, p)
        Symmetric, the diagonal False.

    Examples
    --------
    >>> dependent_pairs(np.array([[0.0, 10.0], [10.0, 0.0]]), np.array([2, 2]), 0.01).tolist()
    [[False, True], [True, False]]
    """
    sizes, kind = np.unique(cardinalities, return_inverse=True)
    limits = critical_values(alpha, np.multiply.outer(sizes - 1, sizes - 1)) + ROUNDING
    return statistics > limits[np.ix_(kind, kind)]


def conditional_statistics(
    columns: Columns,
    pairs: Sequence[tuple[int, int]],
    given: Sequence[Sequence[int]],
    test: Statistic = "g2",
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Compute the statistics of pairs of variables, each conditioned on others of its own.

    Parameters
    ----------
    columns : Columns
    pairs : sequence of (int, int)
        Positions of two different variables.
    given : sequence of sequences of int
        For each pair, positions of other variables.
    test : {"g2", "pearson"}

    Returns
    -------
    statistic : float64 array, shape (m,)
        What `independence_test` gives for the tables over the given variables and the pair, which may be
        of any size.
    df : float64 array, shape (m,)
        Nominal degrees of freedom.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 0], [1, 1]] * 5, dtype=np.uint8))
    >>> statistic, df = conditional_statistics(prepare(data), [(0, 1)], [()], "pearson")
    >>> statistic.tolist(), df.tolist()
    ([10.0], [1.0])
    """
    ends = np.cumsum([len(own) for own in given], dtype=np.int64)
    variables = np.array([v for own in given for v in own], dtype=np.int64)
    questions = np.array(pairs, dtype=np.int64).reshape(-1, 2)
    return _conditional_statistics(
        columns, questions, ends, variables, statistic_workspace(columns), is_pearson_statistic(test)
    )


# What learners compile into their loops ---------------------------------------------------------------


class StatisticWorkspace(NamedTuple):
    """What `conditional_statistic` works with, made once per call of a learner by `statistic_workspace`.

    Parameters
    ----------
    space : Workspace
        Of the counting.
    parts : int64 array, shape (2,)
        How many joint states the base that stands in `space` has: on planes, by index. 0: not made yet;
        -1: cannot be made.
    own : float64 array, shape (2,)
        2 n times the entropy of x given the others, for the two kinds of base alike; NaN: not known yet.
    x_log_x : float64 array, shape (n + 1,)
        m log m for each count m.
    margin : uint32 array, shape (max states,)
    """

    space: Workspace
    parts: NDArray[np.int64]
    own: NDArray[np.float64]
    x_log_x: NDArray[np.float64]
    margin: NDArray[np.uint32]


def statistic_workspace(columns: Columns) -> StatisticWorkspace:
    """Allocate what tests on one dataset need: about 70 bytes a row and 0.1 MB."""
    counts = np.arange(columns.codes.shape[1] + 1, dtype=np.float64)
    return StatisticWorkspace(
        space=workspace(columns),
        parts=np.zeros(2, dtype=np.int64),
        own=np.full(2, np.nan),
        x_log_x=counts * np.log(np.maximum(counts, 1)),
        margin=np.empty(int(columns.cardinalities.max(initial=1)), dtype=np.uint32),
    )


@inlined
def conditional_statistic(
    columns: Columns, given: NDArray[np.int64], x: int, y: int, work: StatisticWorkspace, is_pearson: bool
) -> float:
    """Compute the statistic of x and y given others.

    What depends on `given` and `x` alone is made once and kept for the calls that follow: the caller sets
    ``work.parts[:] = 0`` whenever either changes.

    Parameters
    ----------
    columns : Columns
    given : int64 array, shape (k,)
    x, y : int
    work : StatisticWorkspace
    is_pearson : bool
        X2 if true, else G2.
    """
    r_x, r_y = columns.cardinalities[x], columns.cardinalities[y]
    space, parts = work.space, work.parts
    if parts[0] == 0:
        _make_planes(columns, given, x, work)
    if 0 < parts[0] * r_x * r_y <= MAX_PLANE_CELLS and tabulate_planes(columns, y, parts[0] * r_x, space):
        return _table_statistic(0, r_x, r_y, work, is_pearson)
    if parts[1] == 0:
        _make_index(columns, given, x, work)
    if tabulate_index(columns, y, parts[1] * r_x, space):
        return _table_statistic(1, r_x, r_y, work, is_pearson)
    parts[1] = 0  # what follows overwrites the index
    return _statistic_by_row(columns, given, x, y, space, is_pearson)


@inlined
def entropy_ceiling(columns: Columns, given: NDArray[np.int64], x: int, work: StatisticWorkspace) -> float:
    """Compute 2 n times the entropy of x given others: G2 of x and anything else given them is at most that.

    Parameters are those of `conditional_statistic`.

    Returns
    -------
    float
        Infinity where it would take too long.
    """
    r_x, space = columns.cardinalities[x], work.space
    if work.parts[0] == 0:
        _make_planes(columns, given, x, work)
    if work.parts[0] > 0:
        return float(work.own[0])
    if work.parts[1] == 0:
        _make_index(columns, given, x, work)
    n_cells = work.parts[1] * r_x
    if np.isnan(work.own[1]):
        if n_cells > space.table.shape[0]:
            return np.inf
        for c in range(n_cells):
            space.table[c] = 0
        for number in space.index:
            space.table[number] += np.uint32(1)
        work.own[1] = _own_entropy(space.table, work.parts[1], r_x, 1, work.x_log_x)
    return float(work.own[1])


@inlined
def conditional_statistics_with(
    columns: Columns,
    given: NDArray[np.int64],
    x: int,
    others: NDArray[np.int64],
    limits: NDArray[np.float64],
    is_first_enough: bool,
    work: StatisticWorkspace,
    is_pearson: bool,
    statistics: NDArray[np.float64],
) -> None:
    """Compute the statistics of x and each of many variables given others.

    Parameters
    ----------
    columns : Columns
    given : int64 array, shape (k,)
    x : int
    others : int64 array, shape (m,)
    limits : float64 array, shape (m,)
        Where infinite, nothing is computed.
    is_first_enough : bool
        Whether nothing is computed after the first statistic above its limit.
    work : StatisticWorkspace
        As for `conditional_statistic`.
    is_pearson : bool
        X2 if true, else G2.
    statistics : float64 array, shape (at least m,)
        Filled; 0 for what is not computed.
    """
    if work.parts[0] == 0:
        _make_planes(columns, given, x, work)
    planes, offsets, n_words = columns.planes, columns.offsets, columns.planes.shape[1]
    base, sizes, table = work.space.base, work.space.base_sizes, work.space.table
    x_log_x, own = work.x_log_x, work.own[0]
    n_parts, r_x = work.parts[0], columns.cardinalities[x]
    n_planes = 0 if is_pearson else n_parts * r_x
    is_done = False
    for i in range(others.shape[0]):
        statistics[i] = 0.0
        if is_done or limits[i] == np.inf:
            continue
        first = offsets[others[i]]
        r_y = offsets[others[i] + 1] - first
        if 0 < n_planes * r_y <= MAX_PLANE_CELLS:  # no tuple of arrays is taken here (see `count_within`)
            for c in range(n_planes * r_y):
                table[c] = 0
            count_within(planes, first, r_y, 0, n_words, base, sizes, n_planes, table)
            statistics[i] = own - _remaining_entropy(table, n_parts, r_x, r_y, x_log_x)
        else:
            statistics[i] = conditional_statistic(columns, given, x, others[i], work, is_pearson)
        is_done = is_first_enough and statistics[i] > limits[i]


@inlined
def _make_planes(columns: Columns, given: NDArray[np.int64], x: int, work: StatisticWorkspace) -> None:
    n_parts = split_planes(columns, given, x, work.space)
    work.parts[0] = n_parts
    if n_parts > 0:
        r_x = columns.cardinalities[x]
        work.own[0] = _own_entropy(work.space.base_sizes, n_parts, r_x, 1, work.x_log_x)


@inlined
def _make_index(columns: Columns, given: NDArray[np.int64], x: int, work: StatisticWorkspace) -> None:
    work.parts[1] = _number_rows(columns, given, x, work.space)
    work.own[1] = np.nan


@inlined
def _number_rows(columns: Columns, given: NDArray[np.int64], x: int, space: Workspace) -> int:
    # Up to a number of joint states, counting those that do not occur costs less than finding them.
    n_joint = 1.0
    for v in given:
        n_joint *= columns.cardinalities[v]
    if n_joint * columns.cardinalities[x] <= min(MAX_UNRANKED, columns.codes.shape[1] // 16):
        space.index[:] = 0
        for v in given:
            append_column(columns, v, space)
    else:
        n_joint = index_rows(columns, given, space)
    append_column(columns, x, space)
    return int(n_joint)


@inlined
def _table_statistic(kind: int, r_x: int, r_y: int, work: StatisticWorkspace, is_pearson: bool) -> float:
    # Of the table that stands in `work`, counted on a base of the given kind (0: planes, 1: index).
    n_parts, table = work.parts[kind], work.space.table
    if is_pearson:
        total = 0.0
        for c in range(n_parts):
            total += _x2_part(table[c * r_x * r_y : (c + 1) * r_x * r_y], r_x, r_y, work.margin)
        return total
    # G2 is 2 n times an entropy of x given the conditioning variables, less that given y as well.
    if np.isnan(work.own[kind]):
        work.own[kind] = _own_entropy(table, n_parts, r_x, r_y, work.x_log_x)
    return float(work.own[kind] - _remaining_entropy(table, n_parts, r_x, r_y, work.x_log_x))


@inlined
def _own_entropy(
    table: NDArray[np.uint32], n_parts: int, r_x: int, r_y: int, x_log_x: NDArray[np.float64]
) -> float:
    # 2 n times the entropy of x given the part.
    total = 0.0
    for c in range(n_parts):
        size = np.uint32(0)
        for x in range(c * r_x, (c + 1) * r_x):
            row_size = np.uint32(0)
            for cell in table[x * r_y : (x + 1) * r_y]:
                row_size += cell
            total -= x_log_x[row_size]
            size += row_size
        total += x_log_x[size]
    return 2 * total


@inlined
def _remaining_entropy(
    table: NDArray[np.uint32], n_parts: int, r_x: int, r_y: int, x_log_x: NDArray[np.float64]
) -> float:
    # 2 n times the entropy of x given the part and y. Four sums take turns, so that one addition need not
    # wait for the last.
    n_cells = n_parts * r_x * r_y
    a, b, c, d = 0.0, 0.0, 0.0, 0.0
    fours = n_cells // 4 * 4
    for i in range(0, fours, 4):
        four = table[i : i + 4]
        a += x_log_x[four[0]]
        b += x_log_x[four[1]]
        c += x_log_x[four[2]]
        d += x_log_x[four[3]]
    for i in range(fours, n_cells):
        a += x_log_x[table[i]]
    total = 0.0
    for i in range(n_parts):
        part = table[i * r_x * r_y : (i + 1) * r_x * r_y]
        for y in range(r_y):
            column_size = np.uint32(0)
            for x in range(r_x):
                column_size += part[x * r_y + y]
            total += x_log_x[column_size]
    return 2 * (total - (a + b + c + d))


@inlined
def _x2_part(part: NDArray[np.uint32], r_x: int, r_y: int, margin: NDArray[np.uint32]) -> float:
    size = np.uint32(0)
    for y in range(r_y):
        margin[y] = 0
        for x in range(r_x):
            margin[y] += part[x * r_y + y]
        size += margin[y]
    total = 0.0
    for x in range(r_x):
        row = part[x * r_y : (x + 1) * r_y]
        row_size = np.uint32(0)
        for y in range(r_y):
            row_size += row[y]
        if row_size > 0:
            share = np.float64(row_size) / np.float64(size)
            for y in range(r_y):
                if margin[y] > 0:
                    expected = share * np.float64(margin[y])
                    total += (np.float64(row[y]) - expected) ** 2 / expected
    return total


@inlined
def _statistic_by_row(
    columns: Columns, given: NDArray[np.int64], x: int, y: int, space: Workspace, is_pearson: bool
) -> float:
    # For tables with many more cells than rows: with N / E of each row's cell, G2 = 2 sum log(N / E) and
    # X2 = sum (N / E - 1), both over the rows. N / E = N_xyz N_z / (N_xz N_yz).
    n, k = columns.codes.shape[1], given.shape[0]
    ratio = np.ones(n)
    variables = np.empty(k + 2, dtype=np.int64)
    variables[:k] = given
    for step in range(4):
        variables[k] = x if step < 2 else y
        variables[k + 1] = y
        tabulate_occurring(columns, variables[: k + (2, 1, 1, 0)[step]], space)
        for i in range(n):
            rows = np.float64(space.table[space.index[i]])
            ratio[i] = ratio[i] * rows if step == 0 or step == 3 else ratio[i] / rows
    total = 0.0
    for i in range(n):
        total += ratio[i] - 1 if is_pearson else 2 * math.log(ratio[i])
    return total


# The kernels behind the functions above ---------------------------------------------------------------


@kernel
def _conditional_statistics(
    columns: Columns,
    pairs: NDArray[np.int64],
    ends: NDArray[np.int64],
    variables: NDArray[np.int64],
    work: StatisticWorkspace,
    is_pearson: bool,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    n_pairs = pairs.shape[0]
    statistic, df = np.empty(n_pairs), np.empty(n_pairs)
    start = 0
    for k in range(n_pairs):
        x, y = pairs[k, 0], pairs[k, 1]
        given = variables[start : ends[k]]
        start = ends[k]
        work.parts[:] = 0
        statistic[k] = conditional_statistic(columns, given, x, y, work, is_pearson)
        df[k] = (columns.cardinalities[x] - 1) * (columns.cardinalities[y] - 1)
        for v in given:
            df[k] *= columns.cardinalities[v]
    return statistic, df


@kernel
def _pair_statistics(columns: Columns, work: StatisticWorkspace, is_pearson: bool) -> NDArray[np.float64]:
    p, n = columns.codes.shape
    offsets, x_log_x = columns.offsets, work.x_log_x
    statistics = np.zeros((p, p))
    nothing = np.empty(0, dtype=np.int64)
    # Half of G2 is sum N_xy log N_xy - sum N_x log N_x - sum N_y log N_y + n log n: here the middle two.
    halves = np.zeros(p)
    for v in range(p):
        for size in columns.plane_sizes[offsets[v] : offsets[v + 1]]:
            halves[v] += x_log_x[size]
    for x in range(p):
        work.parts[:] = 0
        r_x = columns.cardinalities[x]
        row = statistics[x]
        for y in range(x + 1, p):
            r_y = columns.cardinalities[y]
            has_planes = offsets[x + 1] > offsets[x] and offsets[y + 1] > offsets[y]
            if not has_planes or r_x * r_y > MAX_PLANE_CELLS:
                row[y] = conditional_statistic(columns, nothing, x, y, work, is_pearson)
                continue
            table = work.space.table[: r_x * r_y]
            tabulate_pair(columns, x, y, table)
            if is_pearson:
                row[y] = _x2_part(table, r_x, r_y, work.margin)
            else:
                half = x_log_x[n] - halves[x] - halves[y]
                for c in range(table.shape[0]):
                    half += x_log_x[table[c]]
                row[y] = 2 * half
    return statistics


@kernel
def _ceilings(columns: Columns, is_pearson: bool) -> NDArray[np.float64]:
    p, n = columns.codes.shape
    ceilings = np.zeros(p)
    for v in range(p):
        sizes = columns.plane_sizes[columns.offsets[v] : columns.offsets[v + 1]]
        if sizes.shape[0] == 0:
            sizes = np.zeros(columns.cardinalities[v], dtype=np.uint32)
            for code in columns.codes[v]:
                sizes[code] += np.uint32(1)
        n_seen = 0
        for size in sizes:
            if size > 0:
                n_seen += 1
                ceilings[v] += 0.0 if is_pearson else 2 * size * math.log(n / size)
        if is_pearson:
            ceilings[v] = n * max(n_seen - 1, 0)
    return ceilings


@warm_up
def _compile() -> None:
    columns = prepare(Dataset(("a", "b", "c"), (("0", "1"),) * 3, np.zeros((2, 3), dtype=np.uint8)))
    statistic_ceilings(columns, "g2")
    conditional_statistics(columns, [(0, 1)], [[2]])
    pair_statistics(columns)
