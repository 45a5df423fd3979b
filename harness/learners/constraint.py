"""Constraint-based learning: the PC algorithm in its order-independent form.

The skeleton comes first (`harness.learners.skeleton`), then its directions (`harness.learners.orientation`).
With the default settings the order of the columns enters only where two values that are compared agree,
and where the directed edges still contradict each other, in what Meek's rules make of that.
"""

from __future__ import annotations

from typing import Annotated, Literal

import numpy as np

from generators.compiled import warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.independence.evidence import Evidence, Test, data_tests
from harness.knowledge import Knowledge
from harness.learners.orientation import Colliders, orient
from harness.learners.skeleton import find_skeleton
from harness.learners.specification import learner

Updates = Literal["after-level", "at-once"]


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
    permutations: Annotated[int, Between(1)] | None = None,
    min_per_cell: Annotated[float, Between(0)] = 0.0,
    max_conditioning: Annotated[int, Between(0)] | None = None,
    updates: Updates = "after-level",
    colliders: Colliders = "plain",
    knowledge: Knowledge | None = None,
    rng: np.random.Generator | None = None,
) -> Graph:
    """Remove edges that a test of conditional independence explains, then direct what that implies.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha : float
        Level of each test; strictly between 0 and 1.
    test : {"g2", "pearson", "permutation"}
        The first two with nominal degrees of freedom; the last compares G2 with its values after random
        permutations within strata, and suits tables with few rows per cell. See `harness.independence`.
    permutations : int, optional
        Of each permutation test, at most; at least 1 / `alpha` - 1, by default 10 / `alpha` - 1.
    min_per_cell : float
        A test needs at least this many rows per cell of its nominal table, the product of the declared
        numbers of states of all its variables; a test that has fewer is not made, and the pair keeps its
        edge. 0: every test is made, and one that cannot be significant separates the pair.
    max_conditioning : int, optional
        The greatest number of variables conditioned on; by default as many as there are neighbours.
    updates : {"after-level", "at-once"}
        When neighbours are counted anew: after all sets of one size were tried (Colombo and Maathuis
        2014), or after each edge that goes (as in the original), which depends on the order of the
        columns.
    colliders : {"plain", "conservative", "majority"}
        Which separating sets say what a collider is: the first one found, all must agree (Ramsey, Spirtes
        and Zhang 2006), or more than half (Colombo and Maathuis 2014). See
        `harness.learners.orientation`, also for colliders that contradict each other.
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
    return pc_on(
        data_tests(data, alpha=alpha, test=test, permutations=permutations, rng=rng),
        data.names,
        max_cells=data.n_rows / min_per_cell if min_per_cell > 0 else np.inf,
        max_conditioning=max_conditioning,
        updates=updates,
        colliders=colliders,
        knowledge=knowledge,
    )


def pc_on(
    evidence: Evidence,
    names: tuple[str, ...],
    *,
    max_cells: float = np.inf,
    max_conditioning: int | None = None,
    updates: Updates = "after-level",
    colliders: Colliders = "plain",
    knowledge: Knowledge | None = None,
) -> Graph:
    """Apply PC to evidence of any kind; settings are those of `pc` and of `find_skeleton`."""
    knowledge = None if knowledge is None else knowledge.over(names)
    skeleton = find_skeleton(
        evidence,
        knowledge=knowledge,
        max_conditioning=max_conditioning,
        max_cells=max_cells,
        at_once=updates == "at-once",
    )
    arrow = orient(evidence, skeleton, knowledge=knowledge, rule=colliders, max_conditioning=max_conditioning)
    return Graph(names, arrow)


@warm_up
def _compile() -> None:
    codes = np.zeros((40, 3), dtype=np.uint8)
    codes[20:] = 1
    pc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes), colliders="majority")
    pc(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes))
