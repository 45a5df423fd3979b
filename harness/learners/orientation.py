"""From a skeleton to directions: knowledge, then colliders, then Meek's rules.

1. What is known directs edges first, and nothing overrules it.
2. Where x - z - y, and x and y are not adjacent, z is a collider, x -> z <- y, if it does not stand in what
   separates x and y. By the rule

   - "plain", that is the set that separated them in the search (Spirtes, Glymour and Scheines 2000);
   - "conservative", every set of neighbours of x, or of y, that separates them: z is a collider if it
     stands in none of these sets, and none if it stands in all (Ramsey, Spirtes and Zhang 2006);
   - "majority", the same sets: z is a collider if it stands in less than half of them, and none if in
     more (Colombo and Maathuis 2014).

   What is neither, and what no set separates, is ambiguous: it is no collider, and Meek's rules do not
   take it for none either.

   Colliders that direct an edge against each other are taken in order of their evidence: conditioning on
   a collider makes its ends dependent, so the one with the smaller p-value of x and y given what separated
   them and z comes first, and one that contradicts an earlier one is left out.
3. *Meek's rules* (`generators.classes.meek_rules`) direct what follows.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from generators.adjacency import neighbour_lists
from generators.classes import meek_rules
from generators.compiled import inlined, kernel
from harness.independence.evidence import PEARSON, DataTests, Evidence, is_dependent, set_base
from harness.independence.statistics import conditional_statistics
from harness.independence.tables import Statistic
from harness.knowledge import Knowledge
from harness.learners.skeleton import DECIMALS, Separators, Skeleton, next_combination

Colliders = Literal["plain", "conservative", "majority"]
Triples = NDArray[np.int64]


def orient(
    evidence: Evidence,
    skeleton: Skeleton,
    *,
    knowledge: Knowledge | None = None,
    rule: Colliders = "plain",
    max_conditioning: int | None = None,
) -> NDArray[np.bool_]:
    """Direct the edges of a skeleton.

    Parameters
    ----------
    evidence : DataTests or Separations
    skeleton : Skeleton
    knowledge : Knowledge, optional
    rule : {"plain", "conservative", "majority"}
    max_conditioning : int, optional
        The greatest size of a set of neighbours that has a vote.

    Returns
    -------
    bool array, shape (p, p)
        [x, y] for x -> y; both ways for an undirected edge.
    """
    colliders, ambiguous = find_colliders(
        evidence, skeleton, knowledge=knowledge, rule=rule, max_conditioning=max_conditioning
    )
    arrow = skeleton.adjacent if knowledge is None else skeleton.adjacent & ~knowledge.excluded
    arrow = arrow.copy()
    _direct(arrow, _strongest_first(evidence, skeleton, colliders))
    meek_rules(arrow, _coded(ambiguous, len(arrow)))
    return arrow


def find_colliders(
    evidence: Evidence,
    skeleton: Skeleton,
    *,
    knowledge: Knowledge | None = None,
    rule: Colliders = "plain",
    max_conditioning: int | None = None,
) -> tuple[Triples, Triples]:
    """Find the colliders of a skeleton, and the triples of which it is not clear.

    Returns
    -------
    colliders, ambiguous : int64 arrays, shape (m, 3)
        Rows (x, z, y) with x < y.
    """
    if rule == "plain":
        return _unexplained(skeleton.adjacent, skeleton.separators), np.empty((0, 3), dtype=np.int64)
    p = len(skeleton.adjacent)
    may_explain = skeleton.adjacent if knowledge is None else skeleton.adjacent & ~knowledge.excluded.T
    most = p if max_conditioning is None else max_conditioning
    triples, n_with, n_sets = _poll(evidence, skeleton.adjacent, may_explain, most)
    if rule == "conservative":
        is_collider = (n_with == 0) & (n_sets > 0)
        is_none = (n_with == n_sets) & (n_sets > 0)
    else:
        is_collider, is_none = 2 * n_with < n_sets, 2 * n_with > n_sets
    return triples[is_collider], triples[~is_collider & ~is_none]


def _strongest_first(evidence: Evidence, skeleton: Skeleton, colliders: Triples) -> Triples:
    # First those whose edges no other collider directs the other way, then the others by the p-value of
    # the test of x and y given what separated them and z. Equal p-values (those of strong dependence are
    # 0) are ordered by the statistic, the larger first, then by column.
    into = np.zeros_like(skeleton.adjacent)
    into[colliders[:, 0], colliders[:, 1]] = True
    into[colliders[:, 2], colliders[:, 1]] = True
    both = into & into.T
    is_contested = both[colliders[:, 0], colliders[:, 1]] | both[colliders[:, 2], colliders[:, 1]]
    contested = colliders[is_contested]
    if not len(contested) or not isinstance(evidence, DataTests):  # no two of a DAG contradict each other
        return colliders
    given = [(*skeleton.separator(x, y), z) for x, z, y in contested.tolist()]
    test: Statistic = "pearson" if evidence.kind == PEARSON else "g2"
    statistic, df = conditional_statistics(evidence.columns, contested[:, ::2].tolist(), given, test)
    statistic = np.round(statistic, DECIMALS)
    order = np.lexsort((-statistic, chdtrc(df, statistic)))
    return np.concatenate([colliders[~is_contested], contested[order]])


def _coded(triples: Triples, p: int) -> NDArray[np.int64]:
    # As `meek_rules` takes them.
    return np.sort((triples[:, 0] * p + triples[:, 1]) * p + triples[:, 2])


@kernel
def _unexplained(adjacent: NDArray[np.bool_], separators: Separators) -> Triples:
    # Rows (x, z, y) with x - z - y, x < y, x and y not adjacent, and z not among what separated them.
    p = adjacent.shape[0]
    at, nodes = neighbour_lists(adjacent)
    triples = np.empty((nodes.shape[0], 3), dtype=np.int64)
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
                    if n == triples.shape[0]:
                        triples = np.concatenate((triples, np.empty_like(triples)))
                    triples[n, 0], triples[n, 1], triples[n, 2] = x, z, y
                    n += 1
    return triples[:n].copy()


@kernel
def _poll(
    evidence: Evidence, adjacent: NDArray[np.bool_], may_explain: NDArray[np.bool_], most: int
) -> tuple[Triples, NDArray[np.int64], NDArray[np.int64]]:
    # All (x, z, y) with x - z - y, x < y, x and y not adjacent; how many sets separate x and y, and how
    # many of these z stands in. The sets are those of variables that may explain x, or may explain y.
    p = adjacent.shape[0]
    at, nodes = neighbour_lists(adjacent)
    triples = np.empty((nodes.shape[0] + 1, 3), dtype=np.int64)
    n_with = np.empty(nodes.shape[0] + 1, dtype=np.int64)
    n_sets = np.empty(nodes.shape[0] + 1, dtype=np.int64)
    n = 0
    times = np.zeros(p, dtype=np.int64)
    for x in range(p):
        for y in range(x + 1, p):
            if adjacent[x, y] or not _has_common(adjacent, x, y, nodes[at[3 * x] : at[3 * x + 3]]):
                continue
            n_separating = _try_sets(
                evidence, may_explain, x, y, p, most, nodes[at[3 * x] : at[3 * x + 3]], times
            )
            n_separating += _try_sets(
                evidence, may_explain, y, x, x, most, nodes[at[3 * y] : at[3 * y + 3]], times
            )
            for z in nodes[at[3 * x] : at[3 * x + 3]]:
                if adjacent[y, z]:
                    if n == triples.shape[0]:
                        triples = np.concatenate((triples, np.empty_like(triples)))
                        n_with = np.concatenate((n_with, np.empty_like(n_with)))
                        n_sets = np.concatenate((n_sets, np.empty_like(n_sets)))
                    triples[n, 0], triples[n, 1], triples[n, 2] = x, z, y
                    n_with[n], n_sets[n] = times[z], n_separating
                    n += 1
            times[:] = 0
    return triples[:n].copy(), n_with[:n].copy(), n_sets[:n].copy()


@inlined
def _has_common(adjacent: NDArray[np.bool_], x: int, y: int, around_x: NDArray[np.uint32]) -> bool:
    n_common = 0
    for z in around_x:
        n_common += adjacent[y, z]
    return bool(n_common > 0)


@inlined
def _try_sets(
    evidence: Evidence,
    may_explain: NDArray[np.bool_],
    x: int,
    y: int,
    done: int,
    most: int,
    around_x: NDArray[np.uint32],
    times: NDArray[np.int64],
) -> int:
    # Tries all sets of what may explain x, but those of which every member may explain `done`; counts
    # those that separate x and y, and in `times` how many of these each variable stands in.
    candidates = np.empty(around_x.shape[0], dtype=np.int64)
    m = 0
    for v in around_x:
        if may_explain[x, v]:
            candidates[m] = v
            m += 1
    n_separating = 0
    for k in range(min(m, most) + 1):
        chosen, given = np.arange(k), np.empty(k, dtype=np.int64)
        changed = 0
        while changed >= 0:
            is_new = done == may_explain.shape[0]
            for j in range(k):
                given[j] = candidates[chosen[j]]
                is_new |= done < may_explain.shape[0] and not may_explain[done, given[j]]
            set_base(evidence)
            if is_new and not is_dependent(evidence, given, x, y, 0.0):
                n_separating += 1
                for v in given:
                    times[v] += 1
            changed = next_combination(chosen, k - 1, m)
    return n_separating


@kernel
def _direct(arrow: NDArray[np.bool_], colliders: Triples) -> None:
    # Directs the edges of the colliders, first come, first served.
    for k in range(colliders.shape[0]):
        x, z, y = colliders[k]
        if arrow[x, z] and arrow[y, z]:
            arrow[z, x] = arrow[z, y] = False
