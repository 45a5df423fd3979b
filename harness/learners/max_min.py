"""Max-min hill climbing: candidates by tests of independence, then a greedy search among them.

1. *Candidates* (MMPC: Tsamardinos, Brown and Aliferis 2006). For each variable, a set of neighbours grows
   by the variable whose association with it is greatest, when for each other variable the least
   association counts that it has given any set of the neighbours so far; until that is 0 for all others.
   Then those leave that some set of the others explains. A pair is a candidate if each has the other: that
   takes away what one side alone lets pass, descendants that are no children.
2. *Search.* `harness.learners.greedy_search.climb`, with arcs between candidates only. The published search
   also takes worsening steps (a tabu list); this one ends where no step improves.
"""

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.family_scores import Score
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
from harness.learners.greedy_search import climb
from harness.learners.skeleton import DECIMALS, next_combination
from harness.learners.specification import learner


@learner(
    "mmhc",
    returns="dag",
    directions="class",
    reference="Tsamardinos, Brown and Aliferis 2006",
    exempt={
        "permuted-columns": "Of equally good moves the first in the order of the columns is made.",
    },
)
def mmhc(
    data: Dataset,
    *,
    alpha: Annotated[float, Between(0, 1, inside=True)] = 0.05,
    test: Test = "g2",
    permutations: Annotated[int, Between(1)] | None = None,
    min_per_cell: Annotated[float, Between(0)] = 5.0,
    max_conditioning: Annotated[int, Between(0)] | None = None,
    score: Score = "bic",
    ess: Annotated[float, Between(0, inside=True)] = 1.0,
    max_parents: Annotated[int, Between(1)] = 4,
    knowledge: Knowledge | None = None,
    rng: np.random.Generator | None = None,
) -> Graph:
    """Search greedily among the arcs that tests of independence leave as candidates.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha, test, permutations, max_conditioning
        Of the tests; see `harness.learners.constraint.pc`.
    min_per_cell : float
        A test of a pair given others that has fewer rows than this per cell of its nominal table is not
        made, and explains nothing. 5 as published (from memory).
    score, ess, max_parents
        Of the search; see `harness.learners.greedy_dag.hill_climbing`.
    knowledge : Knowledge, optional
    rng : numpy.random.Generator, optional
        Needed by the permutation test only.

    Returns
    -------
    Graph
        A DAG. Its directions within a Markov equivalence class are arbitrary.

    Raises
    ------
    Declined
        If more arcs into a variable are known than it may have parents.
    InputError
        If there are too few permutations for `alpha`.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a, b = rng.integers(0, 2, (2, 1000))
    >>> c = np.where(rng.random(1000) < 0.1, 1, a & b)
    >>> codes = np.stack([a, b, c], axis=1).astype(np.uint8)
    >>> mmhc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'c', 'directed'), ('b', 'c', 'directed'))
    """
    knowledge = None if knowledge is None else knowledge.over(data.names)
    evidence = data_tests(data, alpha=alpha, test=test, permutations=permutations, rng=rng)
    permitted = find_candidates(
        evidence,
        knowledge=knowledge,
        max_conditioning=max_conditioning,
        max_cells=data.n_rows / min_per_cell if min_per_cell > 0 else np.inf,
    )
    required = np.zeros_like(permitted)
    if knowledge is not None:
        permitted &= ~knowledge.excluded
        required = knowledge.arcs
    arrow = climb(
        evidence.columns,
        score=score,
        ess=ess,
        max_parents=max_parents,
        permitted=permitted,
        required=required,
    )
    return Graph(data.names, arrow)


def find_candidates(
    evidence: Evidence,
    *,
    knowledge: Knowledge | None = None,
    max_conditioning: int | None = None,
    max_cells: float = np.inf,
) -> NDArray[np.bool_]:
    """Find the pairs of variables that may be adjacent.

    Of several equally associated variables the first in the order of the columns enters; associations
    that agree to six decimals are equal. Those that entered last are asked first whether they stay.

    Parameters
    ----------
    evidence : DataTests or Separations
    knowledge : Knowledge, optional
        Arcs that are there make candidates untested, from the start; pairs that exclude each other's arc
        are none.
    max_conditioning : int, optional
        The greatest number of variables conditioned on.
    max_cells : float
        Tests given others whose nominal table has more cells than this are not made.

    Returns
    -------
    bool array, shape (p, p)
        Symmetric.
    """
    p = len(evidence.cardinalities)
    dependent = marginally_dependent(evidence)
    is_told = np.zeros((p, p), dtype=np.bool_)
    if knowledge is not None:
        is_told = knowledge.joined
        dependent &= ~knowledge.apart
    neighbours = _grow_and_shrink(
        evidence, dependent, is_told, p if max_conditioning is None else max_conditioning, max_cells
    )
    return neighbours & neighbours.T


@kernel
def _grow_and_shrink(
    evidence: Evidence, dependent: NDArray[np.bool_], is_told: NDArray[np.bool_], most: int, max_cells: float
) -> NDArray[np.bool_]:
    # [x, y]: y is among the neighbours of x, as far as x can tell.
    p = dependent.shape[0]
    is_neighbour = np.zeros((p, p), dtype=np.bool_)
    for x in range(p):
        _find_neighbours(evidence, x, dependent[x], is_told[x], most, max_cells, is_neighbour[x])
    return is_neighbour


@inlined
def _find_neighbours(
    evidence: Evidence,
    x: int,
    dependent: NDArray[np.bool_],
    is_told: NDArray[np.bool_],
    most: int,
    max_cells: float,
    is_neighbour: NDArray[np.bool_],
) -> None:
    p = dependent.shape[0]
    neighbours, others, found = np.empty(p, dtype=np.int64), np.empty(p, dtype=np.int64), np.empty(p)
    least = np.zeros(p)
    n, n_others = 0, 0
    for y in range(p):
        if is_told[y]:
            neighbours[n] = y
            n += 1
        elif dependent[y]:
            others[n_others] = y
            n_others += 1
    associations(evidence, neighbours[:0], x, others[:n_others], False, found)
    for i in range(n_others):
        least[others[i]] = found[i]
    for k in range(1, n + 1):
        _lower(evidence, x, neighbours[:k], most, max_cells, least)
    best = _greatest(least)
    while best >= 0:
        least[best] = 0.0
        neighbours[n] = best
        n += 1
        _lower(evidence, x, neighbours[:n], most, max_cells, least)
        best = _greatest(least)
    for k in range(n - 1, -1, -1):
        y = neighbours[k]
        if not is_told[y] and _is_explained(evidence, x, k, neighbours[:n], most, max_cells):
            for j in range(k, n - 1):
                neighbours[j] = neighbours[j + 1]
            n -= 1
    for y in neighbours[:n]:
        is_neighbour[y] = True


@inlined
def _greatest(least: NDArray[np.float64]) -> int:
    best, greatest = -1, 0.0
    for y in range(least.shape[0]):
        if least[y] > 0 and (best < 0 or np.round(least[y], DECIMALS) > greatest):
            best, greatest = y, np.round(least[y], DECIMALS)
    return best


@inlined
def _lower(
    evidence: Evidence,
    x: int,
    neighbours: NDArray[np.int64],
    most: int,
    max_cells: float,
    least: NDArray[np.float64],
) -> None:
    # Takes in the associations given all sets of the neighbours that the last of them is in.
    last = neighbours.shape[0] - 1
    others, found = np.empty(least.shape[0], dtype=np.int64), np.empty(least.shape[0])
    for size in range(min(last + 1, most)):
        chosen, given = np.arange(size), np.empty(size + 1, dtype=np.int64)
        given[size] = neighbours[last]
        changed = 0
        n_tests = 0
        while changed >= 0:
            for j in range(size):
                given[j] = neighbours[chosen[j]]
            cells = _cells(evidence.cardinalities, x, given)
            m = 0
            for y in range(least.shape[0]):
                if least[y] > 0 and cells * evidence.cardinalities[y] <= max_cells:
                    others[m] = y
                    m += 1
            n_tests += m
            associations(evidence, given, x, others[:m], False, found)
            for i in range(m):
                least[others[i]] = min(least[others[i]], found[i])
            changed = next_combination(chosen, size - 1, last)
        if n_tests == 0:  # with larger sets there is none to make either
            break


@inlined
def _cells(sizes: NDArray[np.int64], x: int, given: NDArray[np.int64]) -> float:
    cells = np.float64(sizes[x])
    for v in given:
        cells *= sizes[v]
    return cells


@inlined
def _is_explained(
    evidence: Evidence, x: int, k: int, neighbours: NDArray[np.int64], most: int, max_cells: float
) -> bool:
    # Whether some set of the other neighbours makes the k-th of them and x independent. Sets of those that
    # came before it did not, when it entered; so only sets with one that came later are tried.
    n = neighbours.shape[0]
    others = np.empty(n - 1, dtype=np.int64)
    for j in range(n - 1):
        others[j] = neighbours[n - 1 - j if j < n - 1 - k else n - 2 - j]
    for size in range(1, min(n - 1, most) + 1):
        chosen, given = np.arange(size), np.empty(size, dtype=np.int64)
        changed = 0
        n_tests = 0
        # The later ones stand first, so in every choice that has one it is the first.
        while changed >= 0 and chosen[0] < n - 1 - k:
            for j in range(size):
                given[j] = others[chosen[j]]
            set_base(evidence)
            cells = _cells(evidence.cardinalities, x, given) * evidence.cardinalities[neighbours[k]]
            if cells <= max_cells:
                n_tests += 1
                if not is_dependent(evidence, given, x, neighbours[k], 0.0):
                    return True
            changed = next_combination(chosen, size - 1, n - 1)
        if n_tests == 0:
            break
    return False


@warm_up
def _compile() -> None:
    codes = np.zeros((40, 3), dtype=np.uint8)
    codes[20:] = 1
    mmhc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes))
