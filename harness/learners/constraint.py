"""Constraint-based learning: the PC algorithm in its order-independent form.

1. *Skeleton* (Spirtes, Glymour and Scheines 2000; by levels as in Colombo and Maathuis 2014). All pairs
   are joined; at level k an edge x - y goes if x and y test independent given some k neighbours of x, or
   some k neighbours of y. Who is a neighbour is fixed when a level begins, so the skeleton does not
   depend on the order of the columns. The set that separated a pair is the first found: those among the
   neighbours of the pair's earlier column come first, in lexicographic order of their columns, then those
   among the neighbours of the later one.
2. *Colliders*. Where x - z - y, x and y are not adjacent, and z is not in the set that separated x and y,
   the edges are directed x -> z <- y. An edge that two colliders direct against each other is left
   undirected for the next step.
3. *Meek's rules* (`generators.classes.meek_rules`) direct what follows.

Only step 1 is free of the columns' order: the separating sets, and what `meek_rules` makes of colliders
that contradict each other, are not.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Nodes, Offsets, neighbour_lists
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
    attainable_critical_values,
    conditional_statistic,
    critical_value,
    dependent_pairs,
    statistic_ceilings,
    statistic_workspace,
)
from harness.learners.specification import learner


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
    test: Literal["g2", "pearson"] = "g2",
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
    arrow = direct_colliders(found.adjacent, find_colliders(found))
    meek_rules(arrow)
    return Graph(data.names, arrow)


@dataclass(frozen=True, slots=True, eq=False)
class Skeleton:
    """Which variables are adjacent, and what separated those that are not.

    Parameters
    ----------
    adjacent : bool array, shape (p, p)
        Symmetric.
    separated : tuple of (pairs, given)
        One entry per number k = 1, 2, ... of variables conditioned on: ``pairs``, int64 array, shape
        (m, 2), holds the pairs (x, y), x < y, that some k variables separated, and ``given``, int64
        array, shape (m, k), those variables, ascending. Pairs listed nowhere and not adjacent are
        separated by nothing: the empty set.
    """

    adjacent: NDArray[np.bool_]
    separated: tuple[tuple[NDArray[np.int64], NDArray[np.int64]], ...]


def find_skeleton(
    columns: Columns,
    *,
    alpha: float,
    test: Literal["g2", "pearson"] = "g2",
    min_per_cell: float = 0.0,
    max_conditioning: int | None = None,
) -> Skeleton:
    """Find the skeleton level by level, with the settings of `pc`.

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
    adjacent = dependent_pairs(columns, alpha=alpha, test=test) | _untestable_pairs(columns, max_cells)
    ceilings = statistic_ceilings(columns, test)
    work = statistic_workspace(columns)
    separated: list[tuple[NDArray[np.int64], NDArray[np.int64]]] = []
    while max_conditioning is None or len(separated) < max_conditioning:
        n_given = len(separated) + 1
        critical = attainable_critical_values(
            alpha, columns.cardinalities, n_given, ceilings.max(initial=0.0)
        )
        at, nodes = neighbour_lists(adjacent)
        pairs, given, is_any_made = _separate(
            columns, at, nodes, n_given, adjacent, critical, ceilings, max_cells, work, test == "pearson"
        )
        if not is_any_made:
            break
        separated.append((pairs, given))
    return Skeleton(adjacent, tuple(separated))


def find_colliders(skeleton: Skeleton) -> NDArray[np.int64]:
    """List the unshielded triples whose middle is not in the set that separated its ends.

    Parameters
    ----------
    skeleton : Skeleton

    Returns
    -------
    int64 array, shape (m, 3)
        Rows (x, z, y), x < y, for x -> z <- y.

    Examples
    --------
    >>> chain = np.array([[0, 1, 0], [1, 0, 1], [0, 1, 0]], dtype=bool)
    >>> find_colliders(Skeleton(chain, ())).tolist()
    [[0, 1, 2]]
    >>> find_colliders(Skeleton(chain, ((np.array([[0, 2]]), np.array([[1]])),))).tolist()
    []
    """
    p = len(skeleton.adjacent)
    triples = _unshielded_triples(skeleton.adjacent, *neighbour_lists(skeleton.adjacent))
    weights = np.array([p * p, p, 1])
    explained = [
        np.insert(pairs, 1, given[:, j], axis=1) @ weights
        for pairs, given in skeleton.separated
        for j in range(given.shape[1])
    ]
    return triples[~np.isin(triples @ weights, np.concatenate([np.empty(0, np.int64), *explained]))]


def direct_colliders(adjacent: NDArray[np.bool_], colliders: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Direct the edges of colliders; those directed both ways stay undirected.

    Parameters
    ----------
    adjacent : bool array, shape (p, p)
    colliders : int64 array, shape (m, 3)
        From `find_colliders`.

    Returns
    -------
    bool array, shape (p, p)
        As in `Graph`.
    """
    into = np.zeros_like(adjacent)
    into[colliders[:, 0], colliders[:, 1]] = True
    into[colliders[:, 2], colliders[:, 1]] = True
    return adjacent & ~(into.T & ~into)


def _untestable_pairs(columns: Columns, max_cells: float) -> NDArray[np.bool_]:
    p = len(columns.cardinalities)
    if max_cells == np.inf:
        return np.zeros((p, p), dtype=np.bool_)
    sizes = columns.cardinalities
    # A variable of one state is independent of everything, whatever the rows.
    is_varied = sizes > 1
    untestable = np.multiply.outer(sizes, sizes) > max_cells
    return untestable & np.logical_and.outer(is_varied, is_varied) & ~np.eye(p, dtype=np.bool_)


@kernel
def _separate(
    columns: Columns,
    at: Offsets,
    nodes: Nodes,
    n_given: int,
    adjacent: NDArray[np.bool_],
    critical: CriticalValues,
    ceilings: NDArray[np.float64],
    max_cells: float,
    work: StatisticWorkspace,
    is_pearson: bool,
) -> tuple[NDArray[np.int64], NDArray[np.int64], bool]:
    # One level: takes from `adjacent` the pairs that some n_given neighbours (as in `nodes`) separate.
    # Returns these pairs, what separated them, and whether there was any test to make.
    p = adjacent.shape[0]
    sizes = columns.cardinalities
    frozen = adjacent.copy()
    pairs = np.empty((nodes.shape[0] // 2, 2), dtype=np.int64)
    givens = np.empty((nodes.shape[0] // 2, n_given), dtype=np.int64)
    n_separated = 0
    is_any_made = False
    chosen = np.empty(n_given, dtype=np.int64)
    given = np.empty(n_given, dtype=np.int64)
    is_given = np.zeros(p, dtype=np.bool_)
    for x in range(p):
        neighbours = nodes[at[3 * x] : at[3 * x + 3]]
        n_neighbours = neighbours.shape[0]
        if n_neighbours <= n_given:
            continue
        for j in range(n_given):
            chosen[j] = j
        while True:
            # Given this many cells, more variables only make more: where the first few of `given` are too
            # many for any partner (2 states or more), so are all sets that begin with them.
            cells, last = np.float64(sizes[x]), n_given - 1
            for j in range(n_given):
                given[j] = neighbours[chosen[j]]
                cells *= sizes[given[j]]
                if 2 * cells > max_cells:
                    last = j
                    break
            if 2 * cells <= max_cells:
                is_given[given] = True
                work.parts[:] = 0
                df_per_state = cells / sizes[x] * (sizes[x] - 1)
                for y in neighbours:
                    if not adjacent[x, y] or is_given[y] or cells * sizes[y] > max_cells:
                        continue
                    if y < x and _all_adjacent(frozen, y, given):
                        continue  # this very test was made when it was y's turn
                    is_any_made = True
                    limit = critical_value(critical, df_per_state * (sizes[y] - 1))
                    is_separated = limit >= min(ceilings[x], ceilings[y])
                    if not is_separated:
                        statistic = conditional_statistic(columns, given, x, y, work, is_pearson)
                        is_separated = statistic <= limit + ROUNDING
                    if is_separated:
                        adjacent[x, y] = adjacent[y, x] = False
                        pairs[n_separated, 0], pairs[n_separated, 1] = min(x, y), max(x, y)
                        givens[n_separated] = given
                        n_separated += 1
                is_given[given] = False
            if not _next_combination(chosen, last, n_neighbours):
                break
    return pairs[:n_separated].copy(), givens[:n_separated].copy(), is_any_made


@inlined
def _all_adjacent(adjacent: NDArray[np.bool_], y: int, others: NDArray[np.int64]) -> bool:
    n_adjacent = 0
    for other in others:
        n_adjacent += adjacent[y, other]
    return n_adjacent == others.shape[0]


@inlined
def _next_combination(chosen: NDArray[np.int64], last: int, n: int) -> bool:
    # Goes on in lexicographic order to the next choice out of n that differs at `last` or before.
    k = chosen.shape[0]
    j = last
    while j >= 0 and chosen[j] == n - k + j:
        j -= 1
    if j < 0:
        return False
    chosen[j] += 1
    for i in range(j + 1, k):
        chosen[i] = chosen[i - 1] + 1
    return True


@kernel
def _unshielded_triples(adjacent: NDArray[np.bool_], at: Offsets, nodes: Nodes) -> NDArray[np.int64]:
    # Rows (x, z, y) with x - z - y, x < y and x, y not adjacent.
    triples = np.empty((nodes.shape[0], 3), dtype=np.int64)
    n = 0
    for z in range(adjacent.shape[0]):
        neighbours = nodes[at[3 * z] : at[3 * z + 3]]
        for i in range(neighbours.shape[0]):
            x = neighbours[i]
            for y in neighbours[i + 1 :]:
                if not adjacent[x, y]:
                    if n == triples.shape[0]:
                        triples = np.concatenate((triples, np.empty_like(triples)))
                    triples[n, 0], triples[n, 1], triples[n, 2] = x, z, y
                    n += 1
    return triples[:n].copy()


@warm_up
def _compile() -> None:
    for n_states in (2, 300):
        states = tuple(tuple(str(s) for s in range(r)) for r in (2, 2, n_states))
        codes = np.zeros((40, 3), dtype=np.uint8 if n_states < 256 else np.uint16)
        codes[20:] = 1
        pc(Dataset(("a", "b", "c"), states, codes))
