"""The skeleton of a graph by tests of conditional independence, level by level.

All pairs that are marginally dependent are joined; at level k an edge x - y goes if x and y are
independent given some k neighbours of x, or some k neighbours of y (Spirtes, Glymour and Scheines 2000).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Nodes, neighbour_lists
from generators.compiled import inlined, kernel
from harness.independence.evidence import (
    Evidence,
    find_lower_bounds,
    is_dependent,
    marginally_dependent,
    set_base,
)
from harness.knowledge import Knowledge

DECIMALS = 6  # to which statistics are compared when they are ordered


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


def collect_separators(groups: list[tuple[NDArray[np.int64], NDArray[np.int64]]]) -> Separators:
    """Bring pairs and what separated them into one sorted list.

    Parameters
    ----------
    groups : list of (int64 array of shape (m,), int64 array of shape (m, k))
        Pairs x p + y for x < y, and the k variables that separated each.
    """
    nothing = np.empty(0, dtype=np.int64)
    pair = np.concatenate([nothing, *[pairs for pairs, _ in groups]])
    size = np.concatenate([nothing, *[np.full(len(pairs), given.shape[1]) for pairs, given in groups]])
    variables = np.concatenate([nothing, *[given.ravel() for _, given in groups]])
    end = np.cumsum(size)
    order = np.argsort(pair)
    return Separators(pair[order], (end - size)[order], end[order], variables)


def find_skeleton(
    evidence: Evidence,
    *,
    knowledge: Knowledge | None = None,
    max_conditioning: int | None = None,
    max_cells: float = np.inf,
    at_once: bool = False,
) -> Skeleton:
    """Find the skeleton.

    Who is a neighbour is fixed when a level begins, so the skeleton does not depend on the order of the
    columns (Colombo and Maathuis 2014). Variables take their turns as x in ascending order of the sum of
    their pairwise statistics; each looks at sets of its neighbours, which stand in descending order of
    their statistic with x, in lexicographic order. Statistics that agree to six decimals are equal; the
    earlier column then comes first. The first set that separates x and y counts, so strong explanations
    come before weak ones, and few tests are needed to find one.

    Parameters
    ----------
    evidence : DataTests or Separations
    knowledge : Knowledge, optional
        Arcs that are there are never tested. No set for x holds a variable whose arc into x is excluded:
        where x and y are not adjacent in a DAG, the parents of one of them separate them (Pearl 1988), so
        variables that cannot be parents are not needed. Pairs that exclude each other's arc are not
        adjacent, whatever the tests say; what separates them is sought all the same, since it says what
        is a collider between them. Where nothing does, nothing is.
    max_conditioning : int, optional
        The greatest number of variables conditioned on; by default as many as there are neighbours.
    max_cells : float
        Tests whose nominal table has more cells than this are not made, and leave the pair adjacent.
    at_once : bool
        Edges go the moment that they are explained: then later sets do without them, and the result
        depends on the order of the columns, in which variables and their neighbours are taken.

    Returns
    -------
    Skeleton
    """
    p = len(evidence.cardinalities)
    adjacent = marginally_dependent(evidence)
    if max_cells < np.inf:
        adjacent |= _untestable_pairs(evidence.cardinalities, max_cells)
    is_told = np.zeros((p, p), dtype=np.bool_)
    may_explain = np.ones((p, p), dtype=np.bool_)  # [x, w]: w may stand in the sets of x
    if knowledge is not None:
        is_told = knowledge.joined
        may_explain = ~knowledge.excluded.T
        adjacent |= is_told
    strength = np.zeros((p, p)) if at_once else np.round(evidence.statistics, DECIMALS)
    order = np.argsort(np.round(strength.sum(axis=1), DECIMALS), kind="stable")
    levels: list[tuple[NDArray[np.int64], NDArray[np.int64]]] = []
    while max_conditioning is None or len(levels) < max_conditioning:
        pairs, given, is_any_made = _separate(
            evidence,
            strength,
            order,
            len(levels) + 1,
            adjacent,
            is_told,
            adjacent & may_explain,
            max_cells,
            at_once,
        )
        if not is_any_made:
            break
        levels.append((pairs, given))
    if knowledge is not None:
        levels += _part(adjacent, knowledge.apart)
    return Skeleton(adjacent, collect_separators(levels))


def _part(
    adjacent: NDArray[np.bool_], is_absent: NDArray[np.bool_]
) -> list[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    # Takes pairs from `adjacent` that knowledge says are not, and lets their common neighbours stand for
    # what separates them.
    apart = np.argwhere(np.triu(adjacent & is_absent))
    adjacent &= ~is_absent
    common = [np.flatnonzero(adjacent[x] & adjacent[y]) for x, y in apart]
    return [
        (np.array([x * len(adjacent) + y]), between[np.newaxis])
        for (x, y), between in zip(apart, common, strict=True)
    ]


def _untestable_pairs(cardinalities: NDArray[np.int64], max_cells: float) -> NDArray[np.bool_]:
    untestable = np.multiply.outer(cardinalities, cardinalities) > max_cells
    # A variable of one state is independent of everything, whatever the rows.
    untestable[cardinalities == 1] = False
    untestable[:, cardinalities == 1] = False
    np.fill_diagonal(untestable, False)
    return untestable


@kernel
def _separate(
    evidence: Evidence,
    strength: NDArray[np.float64],
    order: NDArray[np.int64],
    n_given: int,
    adjacent: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    may_explain: NDArray[np.bool_],
    max_cells: float,
    at_once: bool,
) -> tuple[NDArray[np.int64], NDArray[np.int64], bool]:
    # One level: takes from `adjacent` the pairs that sets of n_given neighbours separate. Returns these
    # pairs (x p + y for x < y), what separated them, and whether there was any test to make.
    return _try_level(evidence, strength, order, n_given, adjacent, is_told, may_explain, max_cells, at_once)


@inlined
def _try_level(
    evidence: Evidence,
    strength: NDArray[np.float64],
    order: NDArray[np.int64],
    n_given: int,
    adjacent: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    may_explain: NDArray[np.bool_],
    max_cells: float,
    at_once: bool,
) -> tuple[NDArray[np.int64], NDArray[np.int64], bool]:
    p = adjacent.shape[0]
    sizes = evidence.cardinalities
    at, nodes = neighbour_lists(adjacent)
    pairs = np.empty(nodes.shape[0] // 2, dtype=np.int64)
    separating = np.empty((nodes.shape[0] // 2, n_given), dtype=np.int64)
    n_separated = 0
    is_any_made = False
    is_done = np.zeros(p, dtype=np.bool_)
    is_given = np.zeros(p, dtype=np.bool_)
    chosen = np.empty(n_given, dtype=np.int64)
    given = np.empty(n_given, dtype=np.int64)
    is_wanted = np.empty(p, dtype=np.bool_)
    bounds = np.zeros(p)
    for x in order:
        is_done[x] = True
        neighbours, n_candidates = _strongest_first(
            nodes[at[3 * x] : at[3 * x + 3]], strength[x], may_explain[x], adjacent[x], at_once
        )
        m = neighbours.shape[0]
        if n_candidates < n_given or m <= n_given:
            continue
        for j in range(n_given):
            chosen[j] = j
        changed = 0
        is_new_base = True
        n_left = 0
        for y in neighbours:
            n_left += adjacent[x, y] and not is_told[x, y]
        while changed >= 0 and n_left > 0:
            # A partner has 2 states or more: where even those make too many cells with the first few of
            # the given variables, all sets that begin with these few are passed over.
            cells, n_taken = np.float64(sizes[x]), 0
            is_current = True
            while n_taken < n_given and 2 * cells <= max_cells:
                given[n_taken] = neighbours[chosen[n_taken]]
                cells *= sizes[given[n_taken]]
                is_current &= adjacent[x, given[n_taken]]
                n_taken += 1
            is_testable = 2 * cells <= max_cells and (is_current or not at_once)
            if is_testable:
                if is_new_base:
                    last = chosen[n_given - 2] if n_given > 1 else np.int64(-1)
                    n_next = n_candidates - 1 - last
                    is_worth_it = (
                        n_given == 1 or n_left * n_next > n_left + n_next
                    )  # tests spared, tests made
                    for i in range(m):
                        is_wanted[i] = is_worth_it and (adjacent[x, neighbours[i]] or i > last)
                    find_lower_bounds(evidence, given[: n_given - 1], x, neighbours, is_wanted, bounds)
                set_base(evidence)
                for v in given:
                    is_given[v] = True
                for i in range(m):
                    y = neighbours[i]
                    if not adjacent[x, y] or is_told[x, y] or is_given[y] or cells * sizes[y] > max_cells:
                        continue
                    if is_done[y] and not at_once and _all_in(may_explain[y], given):
                        continue  # this very test was made when it was y's turn
                    is_any_made = True
                    if is_dependent(evidence, given, x, y, bounds[i] - bounds[chosen[n_given - 1]]):
                        continue
                    adjacent[x, y] = adjacent[y, x] = False
                    pairs[n_separated] = min(x, y) * p + max(x, y)
                    for j in range(n_given):
                        separating[n_separated, j] = given[j]
                    n_separated += 1
                    n_left -= 1
                for v in given:
                    is_given[v] = False
            changed = next_combination(chosen, n_taken - 1, n_candidates)
            is_new_base = changed < n_given - 1 or (is_new_base and not is_testable)
    return pairs[:n_separated].copy(), separating[:n_separated].copy(), is_any_made


@inlined
def _strongest_first(
    neighbours: Nodes,
    strength: NDArray[np.float64],
    may_explain: NDArray[np.bool_],
    is_current: NDArray[np.bool_],
    at_once: bool,
) -> tuple[NDArray[np.int64], int]:
    # Those that may explain come first; they are counted. By insertion: neighbours are few, and numba's
    # argsort takes seconds to compile.
    ordered = np.empty(neighbours.shape[0], dtype=np.int64)
    n, n_candidates = 0, 0
    for v in neighbours:
        if at_once and not is_current[v]:
            continue
        first, j = (0, n_candidates) if may_explain[v] else (n_candidates, n)
        if may_explain[v]:
            for k in range(n, n_candidates, -1):
                ordered[k] = ordered[k - 1]
            n_candidates += 1
        while j > first and strength[ordered[j - 1]] < strength[v]:
            ordered[j] = ordered[j - 1]
            j -= 1
        ordered[j] = v
        n += 1
    return ordered[:n], n_candidates


@inlined
def _all_in(is_in: NDArray[np.bool_], variables: NDArray[np.int64]) -> bool:
    n_in = 0
    for v in variables:
        n_in += is_in[v]
    return bool(n_in == variables.shape[0])


@inlined
def next_combination(chosen: NDArray[np.int64], last: int, n: int) -> int:
    """Go on in lexicographic order to the next choice of positions out of n, in place.

    Parameters
    ----------
    chosen : int64 array, shape (k,)
        Ascending.
    last : int
        The next choice must differ at this place or before.
    n : int

    Returns
    -------
    int
        The first place that differs, or -1 at the end.
    """
    k = chosen.shape[0]
    j = last
    while j >= 0 and chosen[j] == n - k + j:
        j -= 1
    if j >= 0:
        chosen[j] += 1
        for i in range(j + 1, k):
            chosen[i] = chosen[i - 1] + 1
    return j
