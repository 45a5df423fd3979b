"""Decomposable scores of a DAG: a sum over families, each variable with its parents. Natural logarithms.

For a variable with r states whose parents have q joint states, N_jk rows in its state k and the parents'
joint state j, and N_j = sum over k of N_jk:

- *BIC* (Schwarz 1978): sum over j, k of N_jk log(N_jk / N_j), less (r - 1) q log(n) / 2;
- *AIC* (Akaike 1974): the same sum, less (r - 1) q;
- *BDeu* (Heckerman, Geiger and Chickering 1995): sum over j of
  [log G(ess / q) - log G(ess / q + N_j) + sum over k of log G(ess / (q r) + N_jk) - log G(ess / (q r))],
  G the gamma function, ess the equivalent sample size;
- *K2* (Cooper and Herskovits 1992): sum over j of [log (r - 1)! - log (N_j + r - 1)! + sum over k of
  log N_jk!].

r and q are nominal: the declared states and their products, whether rows show them or not. A joint state
of the parents that no row shows adds nothing to the sums over j, but counts in q. BIC, AIC and BDeu are
score equivalent: they give Markov equivalent DAGs the same score. K2 does not.

Seen from a table of counts all four are sums of one function over cells less another over their margins.
That is how the kernels in the lower half compute them, from tables of the functions' values.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal, NamedTuple, get_args

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, xlogy

from generators.compiled import inlined
from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from harness.counts import (
    Columns,
    Workspace,
    index_rows,
    split_planes,
    tabulate_index,
    tabulate_occurring,
)

Score = Literal["bic", "aic", "bdeu", "k2"]
SCORE_EQUIVALENT = frozenset({"bic", "aic", "bdeu"})

MAX_JOINT_STATES = 1e300  # q is kept below this, so that ess / q stays above 0
MEMO_ROWS = 64  # 2^6
MEMO_COUNTS = 2048
HASH_FACTOR = 0x9E3779B97F4A7C15  # 2^64 over the golden ratio: multiplicative hashing (Knuth 1973)


def family_score(
    data: Dataset, variable: str, parents: Sequence[str], *, score: Score = "bic", ess: float = 1.0
) -> float:
    """Score one family, a variable with its parents.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    variable : str
    parents : sequence of str
    score : {"bic", "aic", "bdeu", "k2"}
    ess : float
        Equivalent sample size of BDeu, above 0; the other scores do without.

    Returns
    -------
    float
        In nats; larger is better.

    Raises
    ------
    InputError
        If a name is unknown or stands twice, a cell is missing, or a setting is not accepted.

    Examples
    --------
    The worked example of Cooper and Herskovits (1992): x2 with the parent x1 has the factor 1 / 900.

    >>> codes = np.array([[1, 0], [1, 1], [0, 0], [1, 1], [0, 0], [0, 1], [1, 1], [0, 0], [1, 1], [0, 0]])
    >>> data = Dataset(("x1", "x2"), (("0", "1"),) * 2, codes.astype(np.uint8))
    >>> round(1 / np.exp(family_score(data, "x2", ["x1"], score="k2")), 6)
    np.float64(900.0)
    """
    _check_settings(score, ess)
    family = [*parents, variable]
    unknown = [name for name in family if name not in data.names]
    if unknown:
        raise InputError(f"{unknown[0]!r} is not a variable of this dataset")
    if len(set(family)) < len(family):
        raise InputError(f"a family names each variable once, got {', '.join(family)}")
    positions = [data.names.index(name) for name in family]
    codes = data.codes[:, positions].astype(np.int64)
    if (codes == data.missing_code).any():
        raise InputError(f"the family of {variable!r} has missing cells; only complete rows are scored")

    *shape, r = (len(data.states[j]) for j in positions)
    q = float(min(math.prod(shape), int(MAX_JOINT_STATES)))
    configuration = np.zeros(data.n_rows, dtype=np.int64)
    for j, side in enumerate(shape):
        # Ranked after each parent, so that numbers stay small however many joint states there are.
        configuration = np.unique(configuration * side + codes[:, j], return_inverse=True)[1]
    n_seen = int(configuration.max(initial=-1)) + 1
    cells = np.bincount(configuration * r + codes[:, -1], minlength=n_seen * r).reshape(n_seen, r)
    margins = cells.sum(axis=1)
    if score == "bdeu":
        prior, cell_prior = ess / q, ess / (q * r)
        return float(
            (gammaln(prior) - gammaln(prior + margins)).sum()
            + (gammaln(cell_prior + cells) - gammaln(cell_prior)).sum()
        )
    if score == "k2":
        return float((gammaln(r) - gammaln(margins + r)).sum() + gammaln(cells + 1).sum())
    log_likelihood = float(xlogy(cells, cells).sum() - xlogy(margins, margins).sum())
    return log_likelihood - _penalty(score, data.n_rows) * (r - 1) * q


def network_score(data: Dataset, graph: Graph, *, score: Score = "bic", ess: float = 1.0) -> float:
    """Score a DAG: the sum of the scores of its families.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    graph : Graph
        A DAG over the dataset's variables, in any order.
    score, ess
        As in `family_score`.

    Returns
    -------
    float
        In nats; larger is better. For BDeu and K2 it is the log marginal likelihood; add the log prior
        of the graph.

    Raises
    ------
    InputError
        If the graph is no DAG over the dataset's variables, a cell is missing, or a setting is not
        accepted.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"),) * 2, np.array([[0, 0], [1, 1]], dtype=np.uint8))
    >>> round(network_score(data, Graph.from_edges("ab", directed=[("a", "b")]), score="aic"), 6)
    -4.386294
    """
    if set(graph.names) != set(data.names):
        raise InputError("the graph must be over the dataset's variables")
    if not graph.is_dag:
        raise InputError("only a DAG has a score; the graph has an undirected edge or a directed cycle")
    return math.fsum(
        family_score(data, name, graph.parents(name), score=score, ess=ess) for name in data.names
    )


def _check_settings(score: str, ess: float) -> None:
    if score not in get_args(Score):
        raise InputError(f"score must be one of {', '.join(get_args(Score))}, got {score!r}")
    if not 0 < ess < math.inf:
        raise InputError(f"ess must be a number above 0, got {ess!r}")


def _penalty(score: str, n: int) -> float:
    """Return what BIC and AIC take off per free parameter."""
    return {"bic": math.log(max(n, 1)) / 2, "aic": 1.0}.get(score, 0.0)


# What learners compile into their loops ---------------------------------------------------------------


class Scoring(NamedTuple):
    """A score made ready for one dataset; kernels take it as it is.

    A family's score is the sum of ``terms[N_jk]`` over cells, less the sum of ``terms[N_j + shift] -
    terms[shift]`` over joint states of the parents, less ``penalty`` times (r - 1) q. For BIC and AIC
    ``terms[m]`` is m log m and the shift is 0; for K2 it is log m! and r - 1. For BDeu both terms are
    log(G(m + a) / G(a)) with a = ess / (q r) for cells and ess / q for margins; they are remembered in
    `memo` for each such divisor of ess.

    Parameters
    ----------
    terms : float64 array, shape (n + greatest number of states,)
        Empty for BDeu.
    shifts : bool
        Whether the shift is r - 1.
    penalty : float
    ess : float
        0 for all scores but BDeu.
    memo : float64 array, shape (2, MEMO_ROWS, min(n, MEMO_COUNTS - 1) + 1)
        For cells and for margins: in each row the terms of one divisor, NaN where not yet computed; in
        place of the first term, which is 0, stands log G(a).
    divisors : float64 array, shape (2, MEMO_ROWS)
        The divisor whose terms each row holds; 0 for none.
    """

    terms: NDArray[np.float64]
    shifts: bool
    penalty: float
    ess: float
    memo: NDArray[np.float64]
    divisors: NDArray[np.float64]


def scoring(columns: Columns, score: Score, ess: float = 1.0) -> Scoring:
    """Make a score ready for one dataset.

    Parameters
    ----------
    columns : Columns
    score : {"bic", "aic", "bdeu", "k2"}
    ess : float
        Equivalent sample size of BDeu, above 0.

    Raises
    ------
    InputError
        If a setting is not accepted.
    """
    _check_settings(score, ess)
    n = columns.codes.shape[1]
    counts = np.arange(n + int(columns.cardinalities.max(initial=1)), dtype=np.float64)
    n_memo_rows = MEMO_ROWS if score == "bdeu" else 0
    if score == "bdeu":
        terms = np.empty(0)
    else:
        terms = np.asarray(gammaln(counts + 1) if score == "k2" else xlogy(counts, counts), dtype=np.float64)
    return Scoring(
        terms=terms,
        shifts=score == "k2",
        penalty=_penalty(score, n),
        ess=float(ess) if score == "bdeu" else 0.0,
        memo=np.empty((2, n_memo_rows, min(n, MEMO_COUNTS - 1) + 1)),
        divisors=np.zeros((2, n_memo_rows)),
    )


@inlined
def joint_states(columns: Columns, variables: NDArray[np.int64]) -> float:
    """Return the product of the variables' numbers of states, at most `MAX_JOINT_STATES`."""
    q = 1.0
    for j in range(variables.shape[0]):
        q = min(q * columns.cardinalities[variables[j]], MAX_JOINT_STATES)
    return q


@inlined
def score_family(
    columns: Columns, parents: NDArray[np.int64], child: int, rule: Scoring, space: Workspace
) -> float:
    """Score one family, whatever the number of its parents and of their states.

    Parameters
    ----------
    columns : Columns
    parents : int64 array, shape (k,)
    child : int
    rule : Scoring
    space : Workspace
        Base, index and table are overwritten.
    """
    q = joint_states(columns, parents)
    r = columns.cardinalities[child]
    n_parts = split_planes(columns, parents, child, space)
    if n_parts > 0:
        return score_table(space.base_sizes, n_parts, r, np.int64(1), q, rule)
    n_parts = index_rows(columns, parents, space)
    if tabulate_index(columns, child, n_parts, space):
        return score_table(space.table, n_parts, r, np.int64(1), q, rule)
    family = np.empty(parents.shape[0] + 1, dtype=np.int64)
    family[0] = child
    for j in range(parents.shape[0]):
        family[j + 1] = parents[j]
    return score_occurring(columns, family, q, rule, space)


@inlined
def score_table(
    table: NDArray[np.uint32], n_parts: int, r: int, r_added: int | np.int64, q: float, rule: Scoring
) -> float:
    """Score a family, or a family with one more parent, from its table of counts.

    Parameters
    ----------
    table : uint32 array, shape (at least n_parts * r * r_added,)
        ``table[(c * r + k) * r_added + x]``: rows in the c-th joint state of the parents, the child in
        state k, the added parent in state x. Joint states that no row shows may be left out.
    n_parts : int
        Joint states of the parents in the table.
    r : int
        States of the child.
    r_added : int
        States of the added parent; 1 where there is none.
    q : float
        Nominal joint states of all parents, the added one included.
    rule : Scoring
    """
    if rule.ess > 0.0:
        of_cells = remembered(rule.memo[0], rule.divisors[0], rule.ess, q * r)
        of_margins = remembered(rule.memo[1], rule.divisors[1], rule.ess, q)
        return sum_rises(table, n_parts, r, r_added, of_cells, rule.ess / (q * r), of_margins, rule.ess / q)
    shift = r - 1 if rule.shifts else 0
    return sum_terms(table, n_parts, r, r_added, rule.terms, shift) - rule.penalty * (r - 1) * q


@inlined
def sum_terms(
    table: NDArray[np.uint32],
    n_parts: int,
    r: int,
    r_added: int | np.int64,
    terms: NDArray[np.float64],
    shift: int,
) -> float:
    """Sum the terms of all scores but BDeu: see `score_table`, and `harness.counts.count_within`."""
    total = 0.0
    offset = np.uint32(shift)
    for c in range(n_parts):
        part = table[c * r * r_added : (c + 1) * r * r_added]
        for x in range(r_added):
            margin = np.uint32(0)
            for k in range(r):
                rows = part[k * r_added + x]
                margin += rows
                total += terms[rows]
            total -= terms[margin + offset] - terms[offset]
    return total


@inlined
def sum_rises(
    table: NDArray[np.uint32],
    n_parts: int,
    r: int,
    r_added: int | np.int64,
    of_cells: NDArray[np.float64],
    a: float,
    of_margins: NDArray[np.float64],
    b: float,
) -> float:
    """Sum the terms of BDeu: see `score_table`, and `harness.counts.count_within`.

    Parameters
    ----------
    table, n_parts, r, r_added
        As in `score_table`.
    of_cells, of_margins : float64 arrays
        From `remembered`.
    a, b : float
        The priors of a cell and of a margin.
    """
    total = 0.0
    for c in range(n_parts):
        part = table[c * r * r_added : (c + 1) * r * r_added]
        for x in range(r_added):
            margin = np.uint32(0)
            for k in range(r):
                rows = part[k * r_added + x]
                margin += rows
                if rows > 0:
                    term = of_cells[rows] if rows < of_cells.shape[0] else np.nan
                    total += _log_rise(of_cells, a, rows) if math.isnan(term) else term
            if margin > 0:
                term = of_margins[margin] if margin < of_margins.shape[0] else np.nan
                total -= _log_rise(of_margins, b, margin) if math.isnan(term) else term
    return total


@inlined
def score_occurring(
    columns: Columns, family: NDArray[np.int64], q: float, rule: Scoring, space: Workspace
) -> float:
    """Score a family whose table would be too large, from the joint states that occur.

    Parameters
    ----------
    columns : Columns
    family : int64 array, shape (k + 1,)
        The child first, then its parents.
    q : float
        Nominal joint states of the parents.
    rule : Scoring
    space : Workspace
        Index and table are overwritten.
    """
    r = columns.cardinalities[family[0]]
    total = -rule.penalty * float((r - 1) * q)
    shift = np.uint32(r - 1 if rule.shifts else 0)
    for side in range(2):  # cells, then margins
        n_parts = tabulate_occurring(columns, family[side:], space)
        part = 0.0
        if rule.ess > 0.0:
            divisor = q if side else q * r
            log_gamma_prior = _log_gamma(rule.ess / divisor)
            for c in range(n_parts):
                part += _log_gamma(space.table[c] + rule.ess / divisor) - log_gamma_prior
        else:
            start = shift if side else np.uint32(0)
            for c in range(n_parts):
                part += rule.terms[space.table[c] + start] - rule.terms[start]
        total += -part if side else part
    return total


@inlined
def remembered(
    memo: NDArray[np.float64], divisors: NDArray[np.float64], ess: float, divisor: float
) -> NDArray[np.float64]:
    """Return the row of a memo that remembers the terms of one divisor of ess.

    A row that held the terms of another divisor is cleared.
    """
    hashed = np.uint64(min(divisor, 1e18)) * np.uint64(HASH_FACTOR)
    slot = hashed >> np.uint64(58)  # the upper 6 of 64 bits: one of MEMO_ROWS
    row: NDArray[np.float64] = memo[slot]
    if divisors[slot] != divisor:
        divisors[slot] = divisor
        for m in range(row.shape[0]):
            row[m] = np.nan
        row[0] = _log_gamma(ess / divisor)
    return row


@inlined
def _log_rise(terms: NDArray[np.float64], a: float, m: np.uint32) -> float:
    # log(G(m + a) / G(a)), computed and, where there is room, remembered.
    term = _log_gamma(m + a) - terms[0]
    if m < terms.shape[0]:
        terms[m] = term
    return float(term)


@inlined
def _log_gamma(x: float) -> float:
    # Stirling's series from 32 on: the first term left out is below 1e-16 of the value (Abramowitz and
    # Stegun 1964, 6.1.41).
    if x < 32.0:
        return math.lgamma(x)
    y = 1.0 / x
    z = y * y
    series = y * (1 / 12 - z * (1 / 360 - z * (1 / 1260 - z / 1680)))
    return (x - 0.5) * math.log(x) - x + 0.9189385332046727 + series  # log(2 pi) / 2
