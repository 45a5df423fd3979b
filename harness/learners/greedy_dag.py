"""Hill climbing: greedy search for a DAG, from no arcs or from random ones, in accord with knowledge."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Annotated

import numpy as np
from numpy.typing import NDArray

from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from generators.topologies.random_order import draw_along_random_order
from harness.counts import prepare
from harness.family_scores import Score
from harness.knowledge import Knowledge
from harness.learners.greedy_search import climb
from harness.learners.specification import learner
from harness.records import Declined

Arrow = NDArray[np.bool_]

MAX_MEGABYTES = 1024
START_MEAN_PARENTS = 1.0


@learner(
    "hill-climbing",
    returns="dag",
    directions="class",
    reference="Heckerman, Geiger and Chickering 1995",
    exempt={
        "permuted-columns": "Of equally good moves the first in the order of the columns is made.",
    },
)
def hill_climbing(
    data: Dataset,
    *,
    score: Score = "bic",
    ess: Annotated[float, Between(0, inside=True)] = 1.0,
    max_parents: Annotated[int, Between(1)] = 4,
    restarts: Annotated[int, Between(0)] = 0,
    knowledge: Knowledge | None = None,
    rng: np.random.Generator,
) -> Graph:
    """Add, delete or reverse the arc that improves a score most, until none does.

    The first search starts from no arcs. Each restart is one more search, from a random sparse DAG: along
    a uniformly random order of the variables each pair is an arc with probability 2 / (p - 1), at most 1,
    which makes one parent per variable on average, and a variable that got more than `max_parents` keeps
    that many of them, chosen at random. The graph with the greatest score of all searches is returned, the
    earliest among equals.

    With knowledge, arcs that are known to be there are in every graph of every search, and excluded ones
    in none. The first search starts from the known arcs alone. Each restart starts from them and those
    arcs of the random DAG that go with them: taken in order of x, then y, for x -> y, an arc is left out
    if it is excluded, if it would close a directed cycle with the arcs so far, or if y has `max_parents`
    parents already.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    score : {"bic", "aic", "bdeu", "k2"}
        See `harness.family_scores`.
    ess : float
        Equivalent sample size of BDeu; above 0.
    max_parents : int
        The greatest number of parents of a variable; at least 1.
    restarts : int
        The number of searches from random starts after the first.
    knowledge : Knowledge, optional
        Over the data's variables, in their order.
    rng : numpy.random.Generator
        Draws the random starts; without restarts nothing is drawn.

    Returns
    -------
    Graph
        A DAG that no single move improves. Its directions within a Markov equivalence class are
        arbitrary, but for those that knowledge decides.

    Raises
    ------
    Declined
        If the search would need more than 1 GiB, or a variable has more known parents than `max_parents`.
    InputError
        If the knowledge is over other variables.

    Notes
    -----
    Which of several equally good moves is made depends on the order of the columns, and so may the graph.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> a = rng.integers(0, 2, 500)
    >>> b = np.where(rng.random(500) < 0.1, 1 - a, a)
    >>> data = Dataset(("a", "b"), (("0", "1"),) * 2, np.stack([a, b], axis=1).astype(np.uint8))
    >>> hill_climbing(data, rng=rng).edges()
    (('a', 'b', 'directed'),)
    >>> hill_climbing(data, knowledge=Knowledge.of("ab", excluded=[("a", "b")]), rng=rng).edges()
    (('b', 'a', 'directed'),)
    """
    needed = megabytes(data, restarts)
    if needed > MAX_MEGABYTES:
        raise Declined(
            f"hill-climbing would need about {needed:,.0f} MB here; it takes at most {MAX_MEGABYTES}"
        )
    p = data.n_variables
    permitted, required = np.ones((p, p), dtype=np.bool_), np.zeros((p, p), dtype=np.bool_)
    if knowledge is not None:
        known = knowledge.over(data.names)
        permitted, required = ~known.excluded, known.arcs

    def random_starts() -> Iterable[Arrow]:
        cap = max(1, min(max_parents, p - 1))
        for _ in range(restarts):
            mean_parents = min(START_MEAN_PARENTS, (p - 1) / 2)
            drawn = draw_along_random_order(p, mean_parents=mean_parents, max_parents=cap, rng=rng)
            yield drawn if knowledge is None else _admit(drawn & permitted, required, max_parents)

    arrow = climb(
        prepare(data),
        score=score,
        ess=ess,
        max_parents=max_parents,
        permitted=permitted,
        required=required,
        starts=random_starts(),
    )
    return Graph(data.names, arrow)


def _admit(drawn: Arrow, required: Arrow, max_parents: int) -> Arrow:
    # The required arcs and, one by one, each drawn one that goes with those before it.
    arrow = required.copy()
    for x, y in np.argwhere(drawn).tolist():
        if arrow[:, y].sum() < max_parents and not _leads(arrow, y, x):
            arrow[x, y] = True
    return arrow


def _leads(arrow: Arrow, start: int, end: int) -> bool:
    reached = {start}
    stack = [start]
    while stack:
        for v in np.flatnonzero(arrow[stack.pop()]).tolist():
            if v not in reached:
                reached.add(v)
                stack.append(v)
    return end in reached


def megabytes(data: Dataset, restarts: int = 0) -> float:
    """Return what a search without knowledge takes at most, in units of 2^20 bytes.

    For each arc two gains of 8 bytes and a source of 4, beside p x p bytes and bits; drawing a random start
    takes about 5 bytes more. The planes take one bit per row and state, scratch arrays about 70 bytes a row.
    """
    p, n = data.n_variables, data.n_rows
    per_pair = 30 if restarts > 0 else 25
    return (per_pair * p * p + n * (int(data.cardinalities.sum()) / 8 + 70)) / 2**20
