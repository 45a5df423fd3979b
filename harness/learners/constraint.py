"""Constraint-based learning: the PC algorithm in its order-independent form.

1. *Skeleton* (Spirtes, Glymour and Scheines 2000; by levels as in Colombo and Maathuis 2014). All pairs
   are joined; at level k an edge x - y goes if x and y test independent given some k neighbours of x, or
   some k neighbours of y. Who is a neighbour is fixed when a level begins, so the skeleton does not
   depend on the order of the columns. The set that separated a pair is the first found, in an order that
   does not depend on it either: sets of strongly associated neighbours come first (see `find_skeleton`).
2. *Colliders*. Where x - z - y, x and y are not adjacent, and z is not in the set S that separated them,
   the edges are directed x -> z <- y. Colliders that direct an edge against each other are taken in order
   of their evidence: conditioning on a collider makes its ends dependent, so the one with the smaller
   p-value of x and y given S and z comes first, and one that contradicts an earlier one is left out.
3. *Meek's rules* (`generators.classes.meek_rules`) direct what follows.

So the order of the columns enters only where two values that are compared agree, and where the directed
edges still contradict each other, in what `meek_rules` makes of that.
"""

from __future__ import annotations

from typing import Annotated, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from generators.adjacency import Nodes, neighbour_lists
from generators.classes import meek_rules
from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.counts import Columns, prepare
from harness.independence import (
    ROUNDING,
    CriticalValues,
    StatisticWorkspace,
    Test,
    attainable_critical_values,
    conditional_statistic,
    conditional_statistics,
    critical_value,
    dependent_pairs,
    pair_statistics,
    statistic_ceilings,
    statistic_workspace,
)
from harness.learners.specification import learner

DECIMALS = 6  # to which statistics are compared when they are ordered


@learner(
    "pc",
    returns="pdag",
    directions="class",
    reference="Spirtes, Glymour and Scheines 2000; Colombo and Maathuis 2014",
)
def pc(
    data: Dataset,
    *,
    alpha: Annotated[float, Between(0, 1, inside=True)] = 0.01,
    test: Test = "g2",
    min_per_cell: Annotated[float, Between(0)] = 0.0,
    max_conditioning: Annotated[int, Between(0)] | None = None,
) -> Graph:
    """Remove edges that a test of conditional independence explains, then direct what that implies.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha : float
        Level of each test; strictly between 0 and 1.
    test : {"g2", "pearson"}
        With nominal degrees of freedom; see `harness.independence`.
    min_per_cell : float
        A test needs at least this many rows per cell of its nominal table, the product of the declared
        numbers of states of all its variables; a test that has fewer is not made, and the pair keeps its
        edge. 0: every test is made, and one that cannot be significant separates the pair.
    max_conditioning : int, optional
        The greatest number of variables conditioned on; by default as many as there are neighbours.

    Returns
    -------
    Graph
        Partially directed. On finite data it may contradict itself, and then has no consistent
        extension.

    Notes
    -----
    Of columns that determine each other (copies, say) any one explains the others: all their edges go
    as soon as one is conditioned on. The published method does the same; it assumes faithfulness.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a, b = rng.integers(0, 2, (2, 1000))
    >>> c = np.where(rng.random(1000) < 0.1, 1, a & b)
    >>> codes = np.stack([a, b, c], axis=1).astype(np.uint8)
    >>> pc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'c', 'directed'), ('b', 'c', 'directed'))
    """
    columns = prepare(data)
    found = find_skeleton(
        columns, alpha=alpha, test=test, min_per_cell=min_per_cell, max_conditioning=max_conditioning
    )
    arrow = found.adjacent.copy()
    _direct(arrow, find_colliders(columns, found, test))
    meek_rules(arrow)
    return Graph(data.names, arrow)


class Separators(NamedTuple):
    """What separated each pair of variables that something did; kernels take it as it is.

    Parameters
    ----------
    pair : int64 array, shape (m,)
        x p + y for the pair x < y; ascending. Pairs that are neither adjacent nor listed were separated
        by nothing: the empty set.
    start, end : int64 array, shape (m,)
        Where the separating variables of each pair stand in `variables`.
    variables : int64 array
    """

    pair: NDArray[np.int64]
    start: NDArray[np.int64]
    end: NDArray[np.int64]
    variables: NDArray[np.int64]


class Skeleton(NamedTuple):
    """Which variables are adjacent, and what separated those that are not.

    Parameters
    ----------
    adjacent : bool array, shape (p, p)
        Symmetric.
    separators : Separators
    """

    adjacent: NDArray[np.bool_]
    separators: Separators

    def separator(self, x: int, y: int) -> tuple[int, ...]:
        """Return the variables that separated two that are not adjacent, in the order they were taken."""
        known = self.separators
        pair = min(x, y) * len(self.adjacent) + max(x, y)
        k = int(np.searchsorted(known.pair, pair))
        if k == len(known.pair) or known.pair[k] != pair:
            return ()
        return tuple(known.variables[known.start[k] : known.end[k]].tolist())


def find_skeleton(
    columns: Columns,
    *,
    alpha: float,
    test: Test = "g2",
    min_per_cell: float = 0.0,
    max_conditioning: int | None = None,
) -> Skeleton:
    """Find the skeleton level by level, with the settings of `pc`.

    Variables take their turns as x in ascending order of the sum of their pairwise statistics; each looks
    at sets of its neighbours, which stand in descending order of their statistic with x, in lexicographic
    order. Statistics that agree to six decimals are equal; the earlier column then comes first. The first
    set that separates x and y counts, so strong explanations come before weak ones, and few tests are
    needed to find one.

    Parameters
    ----------
    columns : Columns
    alpha, test, min_per_cell, max_conditioning
        See `pc`.

    Returns
    -------
    Skeleton
    """
    n = columns.codes.shape[1]
    max_cells = n / min_per_cell if min_per_cell > 0 else np.inf
    statistics = pair_statistics(columns, test)
    adjacent = dependent_pairs(statistics, columns.cardinalities, alpha)
    if min_per_cell > 0:
        adjacent |= _untestable_pairs(columns.cardinalities, max_cells)
    order = np.argsort(np.round(statistics.sum(axis=1), DECIMALS), kind="stable")
    ceilings = statistic_ceilings(columns, test)
    work = statistic_workspace(columns)
    is_pearson = test == "pearson"
    levels: list[tuple[NDArray[np.int64], NDArray[np.int64]]] = []
    while max_conditioning is None or len(levels) < max_conditioning:
        n_given = len(levels) + 1
        critical = attainable_critical_values(
            alpha, columns.cardinalities, n_given, ceilings.max(initial=0.0)
        )
        pairs, given, is_any_made = _separate(
            columns, statistics, order, n_given, adjacent, critical, ceilings, max_cells, work, is_pearson
        )
        if not is_any_made:
            break
        levels.append((pairs, given))
    return Skeleton(adjacent, _collect(levels))


def _collect(levels: list[tuple[NDArray[np.int64], NDArray[np.int64]]]) -> Separators:
    nothing = np.empty(0, dtype=np.int64)
    pair = np.concatenate([nothing, *[pairs for pairs, _ in levels]])
    size = np.concatenate([nothing, *[np.full(len(pairs), given.shape[1]) for pairs, given in levels]])
    variables = np.concatenate([nothing, *[given.ravel() for _, given in levels]])
    end = np.cumsum(size)
    order = np.argsort(pair)
    return Separators(pair[order], (end - size)[order], end[order], variables)


def find_colliders(columns: Columns, skeleton: Skeleton, test: Test) -> NDArray[np.int64]:
    """Find the colliders of a skeleton, the better founded of contradicting ones first.

    Parameters
    ----------
    columns : Columns
    skeleton : Skeleton
    test : {"g2", "pearson"}

    Returns
    -------
    int64 array, shape (m, 3)
        Rows (x, z, y), x < y, for x -> z <- y: first those whose edges no other collider directs the other
        way, then the others by the p-value of the test of x and y given what separated them and z. Equal
        p-values (those of strong dependence are 0) are ordered by the statistic, the larger first, then by
        column.
    """
    colliders = _find_colliders(skeleton.adjacent, skeleton.separators)
    into = np.zeros_like(skeleton.adjacent)
    into[colliders[:, 0], colliders[:, 1]] = True
    into[colliders[:, 2], colliders[:, 1]] = True
    both = into & into.T
    is_contested = both[colliders[:, 0], colliders[:, 1]] | both[colliders[:, 2], colliders[:, 1]]
    contested = colliders[is_contested]
    given = [(*skeleton.separator(x, y), z) for x, z, y in contested.tolist()]
    statistic, df = conditional_statistics(columns, contested[:, ::2].tolist(), given, test)
    statistic = np.round(statistic, DECIMALS)
    order = np.lexsort((-statistic, chdtrc(df, statistic)))
    return np.concatenate([colliders[~is_contested], contested[order]])


def _untestable_pairs(cardinalities: NDArray[np.int64], max_cells: float) -> NDArray[np.bool_]:
    untestable = np.multiply.outer(cardinalities, cardinalities) > max_cells
    # A variable of one state is independent of everything, whatever the rows.
    untestable[cardinalities == 1] = False
    untestable[:, cardinalities == 1] = False
    np.fill_diagonal(untestable, False)
    return untestable


@kernel
def _separate(
    columns: Columns,
    statistics: NDArray[np.float64],
    order: NDArray[np.int64],
    n_given: int,
    adjacent: NDArray[np.bool_],
    critical: CriticalValues,
    ceilings: NDArray[np.float64],
    max_cells: float,
    work: StatisticWorkspace,
    is_pearson: bool,
) -> tuple[NDArray[np.int64], NDArray[np.int64], bool]:
    # One level: takes from `adjacent` the pairs that sets of n_given neighbours separate. Returns these
    # pairs (x p + y for x < y), what separated them, and whether there was any test to make.
    p = adjacent.shape[0]
    sizes = columns.cardinalities
    at, nodes = neighbour_lists(adjacent)
    frozen = adjacent.copy()
    pairs = np.empty(nodes.shape[0] // 2, dtype=np.int64)
    separating = np.empty((nodes.shape[0] // 2, n_given), dtype=np.int64)
    n_separated = 0
    is_any_made = False
    is_done = np.zeros(p, dtype=np.bool_)
    is_given = np.zeros(p, dtype=np.bool_)
    chosen = np.empty(n_given, dtype=np.int64)
    given = np.empty(n_given, dtype=np.int64)
    gains = np.zeros(p)
    for x in order:
        is_done[x] = True
        neighbours = _strongest_first(nodes[at[3 * x] : at[3 * x + 3]], statistics[x])
        if neighbours.shape[0] <= n_given:
            continue
        for j in range(n_given):
            chosen[j] = j
        changed = 0
        is_new_base = True
        n_left = np.sum(adjacent[x])
        while changed >= 0 and n_left > 0:
            # A partner has 2 states or more: where even those make too many cells with the first few of
            # the given variables, all sets that begin with these few are passed over.
            cells, n_taken = np.float64(sizes[x]), 0
            while n_taken < n_given and 2 * cells <= max_cells:
                given[n_taken] = neighbours[chosen[n_taken]]
                cells *= sizes[given[n_taken]]
                n_taken += 1
            is_testable = 2 * cells <= max_cells
            if is_testable:
                if is_new_base and not is_pearson:
                    _find_gains(columns, statistics, adjacent, x, neighbours, chosen, n_left, work, gains)
                work.parts[:] = 0
                is_given[given] = True
                for i in range(neighbours.shape[0]):
                    y = neighbours[i]
                    if not adjacent[x, y] or is_given[y] or cells * sizes[y] > max_cells:
                        continue
                    if is_done[y] and _all_adjacent(frozen, y, given):
                        continue  # this very test was made when it was y's turn
                    is_any_made = True
                    df = cells / sizes[x] * (sizes[x] - 1) * (sizes[y] - 1)
                    limit = critical_value(critical, df)
                    if gains[i] - gains[chosen[n_given - 1]] > limit + ROUNDING:
                        continue
                    if limit < min(ceilings[x], ceilings[y]):
                        statistic = conditional_statistic(columns, given, x, y, work, is_pearson)
                        if statistic > limit + ROUNDING:
                            continue
                    adjacent[x, y] = adjacent[y, x] = False
                    pairs[n_separated] = min(x, y) * p + max(x, y)
                    separating[n_separated] = given
                    n_separated += 1
                    n_left -= 1
                is_given[given] = False
            changed = _next_combination(chosen, n_taken - 1, neighbours.shape[0])
            is_new_base = changed < n_given - 1 or (is_new_base and not is_testable)
    return pairs[:n_separated].copy(), separating[:n_separated].copy(), is_any_made


@inlined
def _strongest_first(neighbours: Nodes, statistics: NDArray[np.float64]) -> Nodes:
    # By insertion: neighbours are few, and numba's argsort takes seconds to compile.
    ordered = np.empty_like(neighbours)
    strength = np.empty(neighbours.shape[0])
    for i in range(neighbours.shape[0]):
        own = np.round(statistics[neighbours[i]], DECIMALS)
        j = i
        while j > 0 and strength[j - 1] < own:
            ordered[j], strength[j] = ordered[j - 1], strength[j - 1]
            j -= 1
        ordered[j], strength[j] = neighbours[i], own
    return ordered


@inlined
def _find_gains(
    columns: Columns,
    statistics: NDArray[np.float64],
    adjacent: NDArray[np.bool_],
    x: int,
    neighbours: Nodes,
    chosen: NDArray[np.int64],
    n_left: int,
    work: StatisticWorkspace,
    gains: NDArray[np.float64],
) -> None:
    # G2 is 2 n times a mutual information I of the counts, so the chain rule holds for it:
    # I(x; y | S, w) = I(x; y | S) + I(x; w | S, y) - I(x; w | S) >= I(x; y | S) - I(x; w | S).
    # Where the right-hand side is significant, so is the left, which need not be counted. Filled in here:
    # G2 of x and its neighbours given S, all chosen ones but the last; serves every w and y.
    k = chosen.shape[0] - 1
    if k == 0:
        for i in range(neighbours.shape[0]):
            gains[i] = statistics[x, neighbours[i]]
        return
    n_next = neighbours.shape[0] - 1 - chosen[k - 1]
    is_worth_it = n_left * n_next > n_left + n_next  # tests it may spare and tests it takes
    given = np.empty(k, dtype=np.int64)
    for j in range(k):
        given[j] = neighbours[chosen[j]]
    work.parts[:] = 0
    for i in range(neighbours.shape[0]):
        gains[i] = 0.0
        if is_worth_it and (adjacent[x, neighbours[i]] or i > chosen[k - 1]):
            gains[i] = conditional_statistic(columns, given, x, neighbours[i], work, False)


@inlined
def _all_adjacent(adjacent: NDArray[np.bool_], y: int, others: NDArray[np.int64]) -> bool:
    n_adjacent = 0
    for other in others:
        n_adjacent += adjacent[y, other]
    return bool(n_adjacent == others.shape[0])


@inlined
def _next_combination(chosen: NDArray[np.int64], last: int, n: int) -> int:
    # Goes on in lexicographic order to the next choice out of n that differs at `last` or before; returns
    # the first place that differs, or -1 at the end.
    k = chosen.shape[0]
    j = last
    while j >= 0 and chosen[j] == n - k + j:
        j -= 1
    if j >= 0:
        chosen[j] += 1
        for i in range(j + 1, k):
            chosen[i] = chosen[i - 1] + 1
    return j


@kernel
def _find_colliders(adjacent: NDArray[np.bool_], separators: Separators) -> NDArray[np.int64]:
    # Rows (x, z, y) with x - z - y, x < y, x and y not adjacent, and z not among what separated them.
    p = adjacent.shape[0]
    at, nodes = neighbour_lists(adjacent)
    colliders = np.empty((nodes.shape[0], 3), dtype=np.int64)
    n = 0
    for z in range(p):
        neighbours = nodes[at[3 * z] : at[3 * z + 3]]
        for i in range(neighbours.shape[0]):
            x = neighbours[i]
            for y in neighbours[i + 1 :]:
                if adjacent[x, y]:
                    continue
                pair = np.int64(x) * p + y
                k = np.searchsorted(separators.pair, pair)
                is_explained = False
                if k < separators.pair.shape[0] and separators.pair[k] == pair:
                    for v in separators.variables[separators.start[k] : separators.end[k]]:
                        is_explained |= v == z
                if not is_explained:
                    if n == colliders.shape[0]:
                        colliders = np.concatenate((colliders, np.empty_like(colliders)))
                    colliders[n, 0], colliders[n, 1], colliders[n, 2] = x, z, y
                    n += 1
    return colliders[:n].copy()


@kernel
def _direct(arrow: NDArray[np.bool_], colliders: NDArray[np.int64]) -> None:
    # Directs the edges of the colliders, first come, first served.
    for k in range(colliders.shape[0]):
        x, z, y = colliders[k]
        if arrow[x, z] and arrow[y, z]:
            arrow[z, x] = arrow[z, y] = False


@warm_up
def _compile() -> None:
    codes = np.zeros((40, 3), dtype=np.uint8)
    codes[20:] = 1
    pc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes))
