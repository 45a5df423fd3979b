"""Learning by Markov blankets: find every variable's blanket, then who in it is a neighbour.

In a faithful network, a variable's blanket holds its neighbours and its spouses, the other parents of its
children; given the blanket, it is independent of everything else (Pearl 1988).

*Blankets.* Each variable x has its blanket found by itself, by growing a set B and shrinking it:

- "grow-shrink" (Margaritis and Thrun 1999) goes round and round through the variables, in descending order
  of their statistic with x, and takes in each one that is dependent on x given B, until a whole round adds
  none. Then B shrinks.
- "iamb" (Tsamardinos, Aliferis and Statnikov 2003) takes in the variable that is most associated with x
  given B, as long as any is dependent on x given B. Then B shrinks.
- "inter-iamb" (the same) does as "iamb", but B shrinks after every addition. On finite data it may go
  round in circles: what B is after additions number 1, 2, 4, 8, ... is kept, and the search ends when an
  addition and the shrinking after it lead back to what was kept last.

B shrinks by looking at its members once, in ascending order of their statistic with x; each one goes that is
independent of x given the others that are left. Statistics and associations that agree to six decimals are
equal; of equal ones the greater is that of the earlier column.

Only variables that are marginally dependent on x are looked at, and those that are dependent on one that
stands or stood in B, marginally and given x. The papers look at all variables. But under faithfulness, which
they assume, members of the blanket are neighbours of x or of a neighbour of x, and neighbours are dependent
whatever is conditioned on. So no member is missed; and on finite data, fewer of the many variables that have
nothing to do with x are taken in by chance.

*Neighbours*, after Margaritis and Thrun (1999). Variables x and y that stand in each other's blankets are
neighbours if they are dependent given each subset of the smaller of B(x) without y and B(y) without x; of two
of one size, that of the variable with the smaller sum of statistics. Subsets are tried by size, those of one
size in lexicographic order of the members in descending order of their statistic with the blanket's owner;
the first that separates counts. One that does not stand in the other's blanket is separated from it by that
blanket, which holds all neighbours that they have in common: so none of these is a collider between them.

*Directions* are those of `harness.learners.orientation`, with the rule "plain".

*Knowledge.* Arcs that are there are never tested: their ends stand in each other's blanket from the start
and stay there. Pairs that exclude each other's arc may be spouses, so blankets do not care; such a pair is
not adjacent, but what separates it is looked for. Where nothing does, no neighbour in common is a collider.
"""

from __future__ import annotations

from typing import Annotated, Literal

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import neighbour_lists
from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.independence.evidence import (
    Evidence,
    Test,
    associations,
    data_tests,
    is_dependent,
    marginally_dependent,
    set_base,
)
from harness.knowledge import Knowledge
from harness.learners.orientation import orient
from harness.learners.skeleton import DECIMALS, Separators, Skeleton, next_combination
from harness.learners.specification import learner

Method = Literal["grow-shrink", "iamb", "inter-iamb"]
GROW_SHRINK, IAMB, INTER_IAMB = range(3)
METHODS = {"grow-shrink": GROW_SHRINK, "iamb": IAMB, "inter-iamb": INTER_IAMB}


@learner("grow-shrink", returns="pdag", directions="class", reference="Margaritis and Thrun 1999")
def grow_shrink(
    data: Dataset,
    *,
    alpha: Annotated[float, Between(0, 1, inside=True)] = 0.01,
    test: Test = "g2",
    permutations: Annotated[int, Between(1)] | None = None,
    max_conditioning: Annotated[int, Between(0)] | None = None,
    knowledge: Knowledge | None = None,
    rng: np.random.Generator | None = None,
) -> Graph:
    """Grow and shrink each variable's Markov blanket, then tell its neighbours from its spouses.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha : float
        Level of each test; strictly between 0 and 1.
    test : {"g2", "pearson", "permutation"}
        The first two with nominal degrees of freedom; the last compares G2 with its values after random
        permutations within strata, and suits tables with few rows per cell. See `harness.independence`.
        A test that cannot be significant, for its table has too many cells, finds independence.
    permutations : int, optional
        Of each permutation test, at most; at least 1 / `alpha` - 1, by default 10 / `alpha` - 1.
    max_conditioning : int, optional
        The greatest number of variables that are tried to separate two from each other's blanket; by
        default as many as the smaller blanket has, which takes up to 2^k tests for k of them. (Finding a
        blanket takes few, and does without a limit.)
    knowledge : Knowledge, optional
    rng : numpy.random.Generator, optional
        Needed by the permutation test only.

    Returns
    -------
    Graph
        Partially directed. On finite data it may contradict itself, and then has no consistent
        extension.

    Raises
    ------
    InputError
        If there are too few permutations for `alpha`.

    Notes
    -----
    Unlike the paper's, the search leaves out variables that are dependent neither on the one whose blanket is
    sought nor on any that was taken in: see the top of `harness.learners.blankets`.

    Both ends must find each other, so that errors in one blanket are made good by the other, at the cost
    of arcs that are missed.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a, b = rng.integers(0, 2, (2, 1000))
    >>> c = np.where(rng.random(1000) < 0.1, 1, a & b)
    >>> codes = np.stack([a, b, c], axis=1).astype(np.uint8)
    >>> grow_shrink(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'c', 'directed'), ('b', 'c', 'directed'))
    """
    evidence = data_tests(data, alpha=alpha, test=test, permutations=permutations, rng=rng)
    return blankets_on(
        evidence, data.names, "grow-shrink", max_conditioning=max_conditioning, knowledge=knowledge
    )


@learner("iamb", returns="pdag", directions="class", reference="Tsamardinos, Aliferis and Statnikov 2003")
def iamb(
    data: Dataset,
    *,
    alpha: Annotated[float, Between(0, 1, inside=True)] = 0.01,
    test: Test = "g2",
    permutations: Annotated[int, Between(1)] | None = None,
    max_conditioning: Annotated[int, Between(0)] | None = None,
    knowledge: Knowledge | None = None,
    rng: np.random.Generator | None = None,
) -> Graph:
    """Grow each variable's Markov blanket by what is most associated with it, shrink it, find neighbours.

    Parameters, result and errors are those of `grow_shrink`; what "most associated" means is said in
    `harness.independence.evidence`.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a, b = rng.integers(0, 2, (2, 1000))
    >>> c = np.where(rng.random(1000) < 0.1, 1, a & b)
    >>> codes = np.stack([a, b, c], axis=1).astype(np.uint8)
    >>> iamb(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'c', 'directed'), ('b', 'c', 'directed'))
    """
    evidence = data_tests(data, alpha=alpha, test=test, permutations=permutations, rng=rng)
    return blankets_on(evidence, data.names, "iamb", max_conditioning=max_conditioning, knowledge=knowledge)


@learner(
    "inter-iamb", returns="pdag", directions="class", reference="Tsamardinos, Aliferis and Statnikov 2003"
)
def inter_iamb(
    data: Dataset,
    *,
    alpha: Annotated[float, Between(0, 1, inside=True)] = 0.01,
    test: Test = "g2",
    permutations: Annotated[int, Between(1)] | None = None,
    max_conditioning: Annotated[int, Between(0)] | None = None,
    knowledge: Knowledge | None = None,
    rng: np.random.Generator | None = None,
) -> Graph:
    """Grow each variable's Markov blanket, shrinking it after every addition, then find neighbours.

    So sets stay smaller than those of `iamb`, and tests have more rows per cell. Parameters, result and
    errors are those of `grow_shrink`.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a, b = rng.integers(0, 2, (2, 1000))
    >>> c = np.where(rng.random(1000) < 0.1, 1, a & b)
    >>> codes = np.stack([a, b, c], axis=1).astype(np.uint8)
    >>> inter_iamb(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'c', 'directed'), ('b', 'c', 'directed'))
    """
    evidence = data_tests(data, alpha=alpha, test=test, permutations=permutations, rng=rng)
    return blankets_on(
        evidence, data.names, "inter-iamb", max_conditioning=max_conditioning, knowledge=knowledge
    )


def blankets_on(
    evidence: Evidence,
    names: tuple[str, ...],
    method: Method,
    *,
    max_conditioning: int | None = None,
    knowledge: Knowledge | None = None,
) -> Graph:
    """Apply a blanket method to evidence of any kind; settings are those of `grow_shrink`."""
    knowledge = None if knowledge is None else knowledge.over(names)
    blankets = find_blankets(evidence, method, knowledge=knowledge)
    skeleton = find_neighbours(evidence, blankets, knowledge=knowledge, max_conditioning=max_conditioning)
    return Graph(names, orient(evidence, skeleton, knowledge=knowledge))


def find_blankets(
    evidence: Evidence, method: Method, *, knowledge: Knowledge | None = None
) -> NDArray[np.bool_]:
    """Find the Markov blanket of every variable.

    Parameters
    ----------
    evidence : DataTests or Separations
    method : {"grow-shrink", "iamb", "inter-iamb"}
    knowledge : Knowledge, optional
        Of its arcs both ends stand in each other's blanket.

    Returns
    -------
    bool array, shape (p, p)
        ``[x, y]``: y stands in the blanket of x. On finite data not always symmetric.

    Examples
    --------
    >>> from harness.independence.evidence import separations_in
    >>> dag = Graph.from_edges("abcd", directed=[("a", "c"), ("b", "c"), ("c", "d")])
    >>> find_blankets(separations_in(dag), "iamb").astype(int).tolist()
    [[0, 1, 1, 0], [1, 0, 1, 0], [1, 1, 0, 1], [0, 0, 1, 0]]
    """
    return _find_blankets(
        evidence,
        np.round(evidence.statistics, DECIMALS),
        marginally_dependent(evidence),
        _told_pairs(evidence, knowledge),
        METHODS[method],
    )


def find_neighbours(
    evidence: Evidence,
    blankets: NDArray[np.bool_],
    *,
    knowledge: Knowledge | None = None,
    max_conditioning: int | None = None,
) -> Skeleton:
    """Tell the neighbours in each blanket from the spouses.

    Parameters
    ----------
    evidence : DataTests or Separations
    blankets : bool array, shape (p, p)
        From `find_blankets`, with the same knowledge.
    knowledge : Knowledge, optional
    max_conditioning : int, optional

    Returns
    -------
    Skeleton
        Of pairs that no subset of a blanket separated, the variables that both are adjacent to are said
        to have separated them.

    Examples
    --------
    >>> from harness.independence.evidence import separations_in
    >>> evidence = separations_in(Graph.from_edges("abc", directed=[("a", "c"), ("b", "c")]))
    >>> find_neighbours(evidence, find_blankets(evidence, "iamb")).adjacent.astype(int).tolist()
    [[0, 0, 1], [0, 0, 1], [1, 1, 0]]
    """
    p = len(blankets)
    strength = np.round(evidence.statistics, DECIMALS)
    adjacent, separators = _separate(
        evidence,
        strength,
        np.round(strength.sum(axis=1), DECIMALS),
        blankets,
        _told_pairs(evidence, knowledge),
        p if max_conditioning is None else max_conditioning,
    )
    if knowledge is not None:
        adjacent &= ~knowledge.apart
    others = _common_neighbours(adjacent, separators.pair)
    pair = np.concatenate([separators.pair, others.pair])
    order = np.argsort(pair)
    n = len(separators.variables)
    return Skeleton(
        adjacent,
        Separators(
            pair[order],
            np.concatenate([separators.start, others.start + n])[order],
            np.concatenate([separators.end, others.end + n])[order],
            np.concatenate([separators.variables, others.variables]),
        ),
    )


def _told_pairs(evidence: Evidence, knowledge: Knowledge | None) -> NDArray[np.bool_]:
    p = len(evidence.cardinalities)
    return np.zeros((p, p), dtype=np.bool_) if knowledge is None else knowledge.joined


# Blankets ---------------------------------------------------------------------------------------------


@kernel
def _find_blankets(
    evidence: Evidence,
    strength: NDArray[np.float64],
    dependent: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    method: int,
) -> NDArray[np.bool_]:
    p = dependent.shape[0]
    blankets = np.zeros((p, p), dtype=np.bool_)
    for x in range(p):
        _find_blanket(evidence, x, strength[x], dependent, is_told[x], method, blankets[x])
    return blankets


@inlined
def _find_blanket(
    evidence: Evidence,
    x: int,
    strength: NDArray[np.float64],
    dependent: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    method: int,
    blanket: NDArray[np.bool_],
) -> None:
    p = blanket.shape[0]
    members, others, found = np.empty(p, dtype=np.int64), np.empty(p, dtype=np.int64), np.empty(p)
    is_open = dependent[x].copy()  # may be looked at
    kept = np.zeros(p, dtype=np.bool_)
    m = 0
    for y in range(p):
        if is_told[y]:
            blanket[y] = True
            members[m] = y
            m += 1
            _open_around(evidence, x, y, dependent[y], is_open, others, found)
    newest, n_added = -1, 0
    while True:
        n_others = 0
        for y in range(p):
            if is_open[y] and not blanket[y] and y != x:
                others[n_others] = y
                n_others += 1
        if method == GROW_SHRINK:
            _sort_from(others[:n_others], strength, newest)
        associations(evidence, members[:m], x, others[:n_others], method == GROW_SHRINK, found)
        added = _most_associated(others[:n_others], found)
        if added < 0:
            break
        newest = added
        blanket[newest] = True
        members[m] = newest
        m += 1
        _open_around(evidence, x, newest, dependent[newest], is_open, others, found)
        if method == INTER_IAMB:
            m = _shrink(evidence, x, strength, is_told, members, m, newest, blanket)
            n_added += 1
            if n_added > 1 and _are_equal(blanket, kept):
                break
            if n_added & (n_added - 1) == 0:  # a power of 2
                for v in range(p):
                    kept[v] = blanket[v]
    if method != INTER_IAMB:
        _shrink(evidence, x, strength, is_told, members, m, newest, blanket)


@inlined
def _open_around(
    evidence: Evidence,
    x: int,
    member: int,
    dependent: NDArray[np.bool_],
    is_open: NDArray[np.bool_],
    others: NDArray[np.int64],
    found: NDArray[np.float64],
) -> None:
    # Opens what is dependent on a member marginally and given x.
    n_others = 0
    for y in range(dependent.shape[0]):
        if dependent[y] and not is_open[y] and y != x:
            others[n_others] = y
            n_others += 1
    given = np.empty(1, dtype=np.int64)
    given[0] = x
    associations(evidence, given, member, others[:n_others], False, found)
    for i in range(n_others):
        is_open[others[i]] = found[i] > 0.0


@inlined
def _are_equal(row: NDArray[np.bool_], other: NDArray[np.bool_]) -> bool:
    n_different = 0
    for v in range(row.shape[0]):
        n_different += row[v] != other[v]
    return n_different == 0


@inlined
def _is_before(strength: NDArray[np.float64], x: int, y: int) -> bool:
    # The order by strength: the stronger first, of equal ones the earlier column.
    return bool(strength[x] > strength[y] or (strength[x] == strength[y] and x < y))


@inlined
def _sort_from(others: NDArray[np.int64], strength: NDArray[np.float64], last: int) -> None:
    # Round the order by strength, beginning after `last`.
    for i in range(others.shape[0]):
        y, j = others[i], i
        is_later = last < 0 or _is_before(strength, last, y)
        while j > 0:
            v = others[j - 1]
            is_v_later = last < 0 or _is_before(strength, last, v)
            if (is_v_later and not is_later) or (is_v_later == is_later and _is_before(strength, v, y)):
                break
            others[j] = v
            j -= 1
        others[j] = y


@inlined
def _most_associated(others: NDArray[np.int64], found: NDArray[np.float64]) -> int:
    best, greatest = -1, 0.0
    for i in range(others.shape[0]):
        rounded = np.rint(found[i] * 10.0**DECIMALS)
        if rounded > greatest:
            best, greatest = others[i], rounded
    return best


@inlined
def _shrink(
    evidence: Evidence,
    x: int,
    strength: NDArray[np.float64],
    is_told: NDArray[np.bool_],
    members: NDArray[np.int64],
    m: int,
    newest: int,
    blanket: NDArray[np.bool_],
) -> int:
    # Returns how many members are left. Each turn goes to the weakest of those stronger than the last. That
    # the newest is dependent given all others is known already.
    n_before = m
    rest, one, found = np.empty(m, dtype=np.int64), np.empty(1, dtype=np.int64), np.empty(1)
    last = -1
    while True:
        y = -1
        for v in members[:m]:
            is_due = not is_told[v] and (last < 0 or _is_before(strength, v, last))
            if is_due and (y < 0 or _is_before(strength, y, v)):
                y = v
        if y < 0:
            return m
        last = y
        if y == newest and m == n_before:
            continue
        n_rest = 0
        for i in range(m):
            rest[n_rest] = members[i]
            n_rest += members[i] != y
        one[0] = y
        associations(evidence, rest[:n_rest], x, one, True, found)
        if found[0] == 0.0:
            blanket[y] = False
            m = n_rest
            for i in range(m):
                members[i] = rest[i]


# Neighbours -------------------------------------------------------------------------------------------


@kernel
def _separate(
    evidence: Evidence,
    strength: NDArray[np.float64],
    total: NDArray[np.float64],
    blankets: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    most: int,
) -> tuple[NDArray[np.bool_], Separators]:
    # Which pairs that stand in each other's blanket nothing separates, and what separates the others.
    p = blankets.shape[0]
    size = np.zeros(p, dtype=np.int64)
    for x in range(p):
        for is_in in blankets[x]:
            size[x] += is_in
    n, room = 0, 0
    for x in range(p):
        for y in range(x + 1, p):
            if blankets[x, y] and blankets[y, x]:
                n += 1
                room += min(size[x], size[y])
    adjacent = np.zeros((p, p), dtype=np.bool_)
    pair, end = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int64)
    start, variables = np.empty(n, dtype=np.int64), np.empty(room, dtype=np.int64)
    n, n_taken = 0, 0
    for x in range(p):
        for y in range(x + 1, p):
            if not (blankets[x, y] and blankets[y, x]):
                continue
            k = -1
            if not is_told[x, y]:
                is_first = size[x] < size[y] or (size[x] == size[y] and total[x] <= total[y])
                owner, other = (x, y) if is_first else (y, x)
                members = _strongest_first(blankets[owner], size[owner], strength[owner], other)
                k = _find_separating(evidence, owner, other, members, most, variables[n_taken:])
            if k < 0:
                adjacent[x, y] = adjacent[y, x] = True
            else:
                pair[n], start[n], end[n] = x * p + y, n_taken, n_taken + k
                n_taken += k
                n += 1
    return adjacent, Separators(pair[:n].copy(), start[:n].copy(), end[:n].copy(), variables[:n_taken].copy())


@inlined
def _strongest_first(
    blanket: NDArray[np.bool_], size: int, strength: NDArray[np.float64], other: int
) -> NDArray[np.int64]:
    ordered = np.empty(size, dtype=np.int64)
    n = 0
    for v in range(blanket.shape[0]):
        if blanket[v] and v != other:
            j = n
            while j > 0 and strength[ordered[j - 1]] < strength[v]:
                ordered[j] = ordered[j - 1]
                j -= 1
            ordered[j] = v
            n += 1
    return ordered[:n]


@inlined
def _find_separating(
    evidence: Evidence,
    x: int,
    y: int,
    members: NDArray[np.int64],
    most: int,
    separating: NDArray[np.int64],
) -> int:
    # Fills in the first subset that separates x and y, and returns its size, or -1.
    m = members.shape[0]
    for k in range(min(m, most) + 1):
        chosen, given = np.arange(k), separating[:k]
        changed = 0
        while changed >= 0:
            for j in range(k):
                given[j] = members[chosen[j]]
            set_base(evidence)
            if not is_dependent(evidence, given, x, y, 0.0):
                return k
            changed = next_combination(chosen, k - 1, m)
    return -1


@kernel
def _common_neighbours(adjacent: NDArray[np.bool_], separated: NDArray[np.int64]) -> Separators:
    # What the variables of each pair that is neither adjacent nor separated (x p + y, ascending) are both
    # adjacent to, where that is anything.
    p = adjacent.shape[0]
    at, nodes = neighbour_lists(adjacent)
    room = 0
    for v in range(p):
        room += (at[3 * v + 3] - at[3 * v]) ** 2
    pair, end = np.empty(room, dtype=np.int64), np.empty(room, dtype=np.int64)
    start, variables = np.empty(room, dtype=np.int64), np.empty(room, dtype=np.int64)
    n, n_taken, n_passed = 0, 0, 0
    is_due = np.zeros(p, dtype=np.bool_)
    for x in range(p):
        around_x = nodes[at[3 * x] : at[3 * x + 3]]
        for z in around_x:
            for y in nodes[at[3 * z] : at[3 * z + 3]]:
                is_due[y] = not adjacent[x, y]
        while n_passed < separated.shape[0] and separated[n_passed] < (x + 1) * p:
            is_due[separated[n_passed] - x * p] = False
            n_passed += 1
        for y in range(p):
            if is_due[y] and x < y:
                pair[n], start[n] = x * p + y, n_taken
                for z in around_x:
                    if adjacent[z, y]:
                        variables[n_taken] = z
                        n_taken += 1
                end[n] = n_taken
                n += 1
            is_due[y] = False
    return Separators(pair[:n].copy(), start[:n].copy(), end[:n].copy(), variables[:n_taken].copy())


@warm_up
def _compile() -> None:
    codes = np.zeros((40, 3), dtype=np.uint8)
    codes[20:] = 1
    grow_shrink(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes))
