"""What constraint-based learners ask: whether x and y are dependent given others, and how surely.

The answers come from tests on data (`DataTests`) or from d-separation in a known DAG (`Separations`), as
if there were infinitely many rows of a faithful network: what a learner makes of that is what it can learn
at best. The kernels of a learner take either and are compiled for each; they ask through

- `set_base(evidence)`, whenever the conditioning set or x changes;
- `is_dependent(evidence, given, x, y, at_least)`;
- `associations(...)`, of x and many others at once;
- `find_lower_bounds(...)`, of what `at_least` takes.

They ask from `inlined` functions only: numba compiles the answer anew for callers with other options.

*Association* puts the strengths of dependences with different degrees of freedom on one scale. It is 0
where a test does not find x and y dependent. Else it says how far the statistic is beyond its critical
value, in standard normal deviates (`deviates_beyond`): the smaller p-value has the greater association,
also where both p-values are too small for floating point. For permutation tests, it is the distance of
the statistic from the mean of its permutation distribution, in standard deviations.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Literal, NamedTuple, TypeVar, cast

import numpy as np
from numba.core import types
from numba.extending import overload
from numpy.typing import NDArray

from generators.adjacency import Nodes, Offsets
from generators.classes import dag_class_lists
from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from generators.separation import is_connected
from harness.counts import Columns, prepare
from harness.independence.critical import (
    CriticalValues,
    attainable_critical_values,
    critical_value,
    deviates_beyond,
)
from harness.independence.permutation import Permutations, deal_out, permutations_at
from harness.independence.statistics import (
    ROUNDING,
    StatisticWorkspace,
    conditional_statistic,
    conditional_statistics_with,
    dependent_pairs,
    entropy_ceiling,
    pair_statistics,
    statistic_ceilings,
    statistic_workspace,
)
from harness.independence.tables import Statistic

Test = Literal["g2", "pearson", "permutation"]
G2, PEARSON, PERMUTATION = range(3)
TESTS = {"g2": G2, "pearson": PEARSON, "permutation": PERMUTATION}
LEAST_ASSOCIATION = 1e-6  # of a dependence at the very edge


class DataTests(NamedTuple):
    """Tests on one dataset.

    Parameters
    ----------
    columns : Columns
    cardinalities : int64 array, shape (p,)
        The columns' own.
    alpha : float
    kind : int
        `G2`, `PEARSON` or `PERMUTATION`.
    statistics : float64 array, shape (p, p)
        Of each pair, conditioned on nothing.
    ceilings : float64 array, shape (p,)
        See `harness.independence.statistics`.
    critical : CriticalValues
    draws : Permutations
    work : StatisticWorkspace
    """

    columns: Columns
    cardinalities: NDArray[np.int64]
    alpha: float
    kind: int
    statistics: NDArray[np.float64]
    ceilings: NDArray[np.float64]
    critical: CriticalValues
    draws: Permutations
    work: StatisticWorkspace


class Separations(NamedTuple):
    """d-separation in a DAG, in place of tests.

    Parameters
    ----------
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array
        The DAG's neighbour lists.
    cardinalities : int64 array, shape (p,)
        All 2; nothing depends on it.
    statistics : float64 array, shape (p, p)
        Symmetric; in which order learners that go by strength take the variables.
    """

    at: Offsets
    nodes: Nodes
    cardinalities: NDArray[np.int64]
    statistics: NDArray[np.float64]


Evidence = DataTests | Separations


def data_tests(
    data: Dataset,
    *,
    alpha: float,
    test: Test = "g2",
    permutations: int | None = None,
    rng: np.random.Generator | None = None,
) -> DataTests:
    """Prepare tests on a dataset.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha : float
        Level of each test; strictly between 0 and 1.
    test : {"g2", "pearson", "permutation"}
    permutations : int, optional
        Of each permutation test, at most; see `permutations_at`.
    rng : numpy.random.Generator, optional
        Needed by the permutation test only, which draws one number from it.

    Raises
    ------
    InputError
        If a cell is missing, or a permutation test has no `rng` or too few permutations.

    Examples
    --------
    >>> codes = np.array([[0, 0], [1, 1]] * 20, dtype=np.uint8)
    >>> tests = data_tests(Dataset(("a", "b"), (("0", "1"), ("0", "1")), codes), alpha=0.01)
    >>> marginally_dependent(tests).tolist()
    [[False, True], [True, False]]
    """
    columns = prepare(data)
    draws = Permutations(np.uint64(0), 0, 0)
    if test == "permutation":
        if rng is None:
            raise InputError("test: a permutation test draws random numbers; rng is needed")
        draws = permutations_at(alpha, permutations, rng)
    statistic: Statistic = "pearson" if test == "pearson" else "g2"
    ceilings = statistic_ceilings(columns, statistic)
    return DataTests(
        columns=columns,
        cardinalities=columns.cardinalities,
        alpha=alpha,
        kind=TESTS[test],
        statistics=pair_statistics(columns, statistic),
        ceilings=ceilings,
        critical=attainable_critical_values(alpha, columns.cardinalities, float(ceilings.max(initial=0))),
        draws=draws,
        work=statistic_workspace(columns),
    )


def separations_in(dag: Graph, strengths: NDArray[np.float64] | None = None) -> Separations:
    """Prepare to answer from d-separation in a DAG.

    Parameters
    ----------
    dag : Graph
    strengths : float64 array, shape (p, p), optional
        Symmetric; by default all 0.

    Raises
    ------
    InputError
        If the graph is not a DAG.
    """
    lists = dag_class_lists(dag)
    p = dag.n_variables
    return Separations(
        lists.dag_at,
        lists.dag_nodes,
        np.full(p, 2, dtype=np.int64),
        np.zeros((p, p)) if strengths is None else strengths,
    )


def marginally_dependent(evidence: Evidence) -> NDArray[np.bool_]:
    """Say which pairs of variables are dependent, conditioned on nothing.

    Returns
    -------
    bool array, shape (p, p)
        Symmetric, the diagonal False.
    """
    if isinstance(evidence, DataTests) and evidence.kind != PERMUTATION:
        return dependent_pairs(evidence.statistics, evidence.cardinalities, evidence.alpha)
    return _marginally_dependent(evidence)


# What kernels call ------------------------------------------------------------------------------------

Kernel = TypeVar("Kernel", bound=Callable[..., Any])
_OPTIONS: Any = {"nogil": True, "error_model": "numpy"}


def _is(evidence: Any, kind: type) -> bool:
    return isinstance(evidence, types.NamedTuple) and evidence.instance_class is kind


def _compiled_for(function: Callable[..., Any]) -> Callable[[Kernel], Kernel]:
    return cast("Callable[[Kernel], Kernel]", overload(function, jit_options=_OPTIONS, strict=False))


def set_base(evidence: Evidence) -> None:
    """Say that the questions that follow have another conditioning set or another x."""
    raise NotImplementedError("only kernels call this")


@_compiled_for(set_base)
def _set_base(evidence: Any) -> Any:
    def of_data(evidence: DataTests) -> None:
        evidence.work.parts[:] = 0

    def of_graph(evidence: Separations) -> None:
        pass

    return of_data if _is(evidence, DataTests) else of_graph


def is_dependent(evidence: Evidence, given: NDArray[np.int64], x: int, y: int, at_least: float) -> bool:
    """Say whether x and y are dependent given others.

    Parameters
    ----------
    evidence : DataTests or Separations
    given : int64 array, shape (k,)
    x, y : int
    at_least : float
        A lower bound of the statistic, from `find_lower_bounds`: where it is significant, nothing is
        counted. 0 where none is known.
    """
    raise NotImplementedError("only kernels call this")


@_compiled_for(is_dependent)
def _is_dependent(evidence: Any, given: Any, x: Any, y: Any, at_least: Any) -> Any:
    def of_data(evidence: DataTests, given: NDArray[np.int64], x: int, y: int, at_least: float) -> bool:
        sizes = evidence.cardinalities
        df = np.float64(sizes[x] - 1) * np.float64(sizes[y] - 1)
        for v in given:
            df *= sizes[v]
        if evidence.kind == PERMUTATION:
            if df == 0:
                return False
            n_as_large, _ = deal_out(evidence.columns, given, x, y, evidence.work, evidence.draws)
            return bool(n_as_large <= evidence.draws.n_allowed)
        limit = critical_value(evidence.critical, df) if df > 0 else np.inf
        if at_least > limit + ROUNDING:
            return True
        if limit >= min(evidence.ceilings[x], evidence.ceilings[y]):
            return False
        if given.shape[0] == 0:
            return bool(evidence.statistics[x, y] > limit + ROUNDING)
        is_pearson = evidence.kind == PEARSON
        statistic = conditional_statistic(evidence.columns, given, x, y, evidence.work, is_pearson)
        return bool(statistic > limit + ROUNDING)

    def of_graph(evidence: Separations, given: NDArray[np.int64], x: int, y: int, at_least: float) -> bool:
        sources = np.array([x], dtype=np.uint32)
        is_target = np.zeros(evidence.cardinalities.shape[0], dtype=np.bool_)
        is_target[y] = True
        return is_connected(evidence.at, evidence.nodes, sources, is_target, given.astype(np.uint32))

    return of_data if _is(evidence, DataTests) else of_graph


def associations(
    evidence: Evidence,
    given: NDArray[np.int64],
    x: int,
    others: NDArray[np.int64],
    is_first_enough: bool,
    found: NDArray[np.float64],
) -> None:
    """Say how strongly x and each of others are associated given some: 0 where not found dependent.

    `set_base` need not be called before; it must be after.

    Parameters
    ----------
    evidence : DataTests or Separations
        From the latter, 1 for every dependence.
    given : int64 array, shape (k,)
    x : int
    others : int64 array, shape (m,)
        Neither x nor given.
    is_first_enough : bool
        Whether all that come after the first that is associated are passed over, as if they were not.
    found : float64 array, shape (at least m,)
        Filled.
    """
    raise NotImplementedError("only kernels call this")


@_compiled_for(associations)
def _associations(evidence: Any, given: Any, x: Any, others: Any, is_first_enough: Any, found: Any) -> Any:
    def of_data(
        evidence: DataTests,
        given: NDArray[np.int64],
        x: int,
        others: NDArray[np.int64],
        is_first_enough: bool,
        found: NDArray[np.float64],
    ) -> None:
        m, sizes, statistics = others.shape[0], evidence.cardinalities, evidence.statistics[x]
        evidence.work.parts[:] = 0
        factor = np.float64(sizes[x] - 1)
        for v in given:
            factor *= sizes[v]
        is_done = False
        if evidence.kind == PERMUTATION:
            for i in range(m):
                found[i] = 0.0
                if not is_done and factor * (sizes[others[i]] - 1) > 0:
                    n_as_large, deviate = deal_out(
                        evidence.columns, given, x, others[i], evidence.work, evidence.draws
                    )
                    if n_as_large <= evidence.draws.n_allowed:
                        found[i] = max(deviate, LEAST_ASSOCIATION)
                        is_done = is_first_enough
            return
        ceiling = evidence.ceilings[x]
        if evidence.kind == G2 and given.shape[0] > 0 and m > 1:  # for one it would cost a test to spare it
            ceiling = min(ceiling, entropy_ceiling(evidence.columns, given, x, evidence.work))
        limits = np.empty(m)
        for i in range(m):
            y, df = others[i], factor * (sizes[others[i]] - 1)
            limit = critical_value(evidence.critical, df) if df > 0 else np.inf
            limits[i] = limit + ROUNDING if limit < min(ceiling, evidence.ceilings[y]) else np.inf
            found[i] = statistics[y]
        if given.shape[0] > 0:
            is_pearson = evidence.kind == PEARSON
            conditional_statistics_with(
                evidence.columns, given, x, others, limits, is_first_enough, evidence.work, is_pearson, found
            )
        for i in range(m):
            if found[i] > limits[i] and not is_done:
                df = factor * (sizes[others[i]] - 1)
                found[i] = max(deviates_beyond(found[i], limits[i] - ROUNDING, df), LEAST_ASSOCIATION)
                is_done = is_first_enough
            else:
                found[i] = 0.0

    def of_graph(
        evidence: Separations,
        given: NDArray[np.int64],
        x: int,
        others: NDArray[np.int64],
        is_first_enough: bool,
        found: NDArray[np.float64],
    ) -> None:
        is_done = False
        for i in range(others.shape[0]):
            found[i] = 0.0
            if not is_done and is_dependent(evidence, given, x, others[i], 0.0):
                found[i] = 1.0
                is_done = is_first_enough

    return of_data if _is(evidence, DataTests) else of_graph


def find_lower_bounds(
    evidence: Evidence,
    given: NDArray[np.int64],
    x: int,
    others: NDArray[np.int64],
    is_wanted: NDArray[np.bool_],
    bounds: NDArray[np.float64],
) -> None:
    """Find what bounds statistics of x and others from below, given one variable more than `given`.

    G2 is 2 n times a mutual information I of the counts, so the chain rule holds for it:

        I(x; y | S, w) = I(x; y | S) + I(x; w | S, y) - I(x; w | S) >= I(x; y | S) - I(x; w | S).

    Where the right-hand side is significant, so is the left, which need not be counted.

    Parameters
    ----------
    evidence : DataTests or Separations
    given : int64 array, shape (k,)
        S.
    x : int
    others : array of int, shape (m,)
    is_wanted : bool array, shape (m,)
    bounds : float64 array, shape (at least m,)
        ``bounds[i]`` becomes G2 of x and the i-th of the others given S if that is wanted, else 0; so
        ``bounds[i] - bounds[j]`` is what `is_dependent` takes for y = others[i], given S and others[j].
        All 0, which says nothing, where G2 is not what is tested.
    """
    raise NotImplementedError("only kernels call this")


@_compiled_for(find_lower_bounds)
def _find_lower_bounds(evidence: Any, given: Any, x: Any, others: Any, is_wanted: Any, bounds: Any) -> Any:
    def of_data(
        evidence: DataTests,
        given: NDArray[np.int64],
        x: int,
        others: NDArray[np.int64],
        is_wanted: NDArray[np.bool_],
        bounds: NDArray[np.float64],
    ) -> None:
        evidence.work.parts[:] = 0
        is_pearson = evidence.kind == PEARSON
        for i in range(others.shape[0]):
            bounds[i] = 0.0
            if evidence.kind == G2 and is_wanted[i]:
                if given.shape[0] == 0:
                    bounds[i] = evidence.statistics[x, others[i]]
                else:
                    bounds[i] = conditional_statistic(
                        evidence.columns, given, x, others[i], evidence.work, is_pearson
                    )
        evidence.work.parts[:] = 0

    def of_graph(
        evidence: Separations,
        given: NDArray[np.int64],
        x: int,
        others: NDArray[np.int64],
        is_wanted: NDArray[np.bool_],
        bounds: NDArray[np.float64],
    ) -> None:
        bounds[: others.shape[0]] = 0.0

    return of_data if _is(evidence, DataTests) else of_graph


@kernel
def _marginally_dependent(evidence: Evidence) -> NDArray[np.bool_]:
    p = evidence.cardinalities.shape[0]
    dependent = np.zeros((p, p), dtype=np.bool_)
    nothing = np.empty(0, dtype=np.int64)
    for x in range(p):
        _mark_dependent(evidence, nothing, x, dependent)
    return dependent


@inlined
def _mark_dependent(
    evidence: Evidence, nothing: NDArray[np.int64], x: int, dependent: NDArray[np.bool_]
) -> None:
    set_base(evidence)
    for y in range(x + 1, dependent.shape[0]):
        dependent[x, y] = dependent[y, x] = is_dependent(evidence, nothing, x, y, 0.0)


@warm_up
def _compile() -> None:
    data = Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((2, 2), dtype=np.uint8))
    rng = np.random.default_rng(0)
    marginally_dependent(data_tests(data, alpha=0.5, test="permutation", permutations=1, rng=rng))
