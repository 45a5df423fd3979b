"""Greedy search over DAGs by a decomposable score: hill climbing with a cache of gains.

A move adds an arc, deletes one or reverses one, and keeps the graph acyclic and every variable at
`max_parents` parents or fewer. The search makes the move that gains most until none gains.

*Ties.* Score-equivalent moves gain exactly the same in theory and differ by rounding in practice, so
without a rule two correct programs end in different graphs. Here, of all legal moves that gain within
`tie_width` of the greatest gain, the first is made: in order of x, then y, for the arc x -> y; where x -> y
is there, deleting it comes before reversing it. A move that gains no more than that width is not made.

*Speed.* The gains of all changes to a variable's parents are kept, and computed anew only for the one or
two variables whose parents changed: all tables of such a column share one base (`harness.counts`). Each
column's best legal addition is kept too. Adding an arc only ever makes additions illegal, so a kept best
that is still legal is still best; after other moves the columns whose descendants changed are searched
again.
"""

from __future__ import annotations

from typing import Annotated, NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from generators.topologies.random_order import draw_along_random_order
from harness.counts import (
    WORD_ROWS,
    Columns,
    Workspace,
    append_column,
    count_within,
    index_rows,
    prepare,
    split_planes,
    tabulate_index,
    workspace,
)
from harness.family_scores import (
    MAX_JOINT_STATES,
    SCORE_EQUIVALENT,
    Score,
    Scoring,
    joint_states,
    remembered,
    score_family,
    score_occurring,
    score_table,
    scoring,
    sum_rises,
    sum_terms,
)
from harness.learners.specification import learner
from harness.records import Declined

MAX_MEGABYTES = 1024
START_MEAN_PARENTS = 1.0
MAX_OVERLAPS = 128  # tables with more cells to count on planes are counted by index
NONE, ADD, DELETE, REVERSE = range(4)


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
    rng: np.random.Generator,
) -> Graph:
    """Add, delete or reverse the arc that improves a score most, until none does.

    The first search starts from no arcs. Each restart is one more search, from a random sparse DAG: along
    a uniformly random order of the variables each pair is an arc with probability 2 / (p - 1), at most 1,
    which makes one parent per variable on average, and a variable that got more than `max_parents` keeps
    that many of them, chosen at random. The graph with the greatest score of all searches is returned, the
    earliest among equals.

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
    rng : numpy.random.Generator
        Draws the random starts; without restarts nothing is drawn.

    Returns
    -------
    Graph
        A DAG that no single move improves. Its directions within a Markov equivalence class are
        arbitrary.

    Raises
    ------
    Declined
        If the search would need more than 1 GiB.

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
    """
    needed = megabytes(data)
    if needed > MAX_MEGABYTES:
        raise Declined(
            f"hill-climbing would need about {needed:,.0f} MB here; it takes at most {MAX_MEGABYTES}"
        )
    p = data.n_variables
    columns = prepare(data)
    rule, space = scoring(columns, score, ess), workspace(columns)
    width = tie_width(data.n_rows)
    cap = max(1, min(max_parents, p - 1))

    alone = np.empty((p, p))
    best, best_score = np.zeros((p, p), dtype=np.bool_), -np.inf
    for search in range(restarts + 1):
        start = np.zeros((p, p), dtype=np.bool_)
        if search > 0:
            mean_parents = min(START_MEAN_PARENTS, (p - 1) / 2)
            start = draw_along_random_order(p, mean_parents=mean_parents, max_parents=cap, rng=rng)
        found, reached = _climb(
            columns, rule, score in SCORE_EQUIVALENT, cap, width, start, search == 0, alone, space
        )
        if reached > best_score + width:
            best, best_score = found, reached
    return Graph(data.names, best)


def tie_width(n: int) -> float:
    """Return the difference of gains, in nats, up to which two moves count as equally good.

    Scores are sums of numbers of the size of n log n, so their rounding errors grow with n: about 1e-9
    at 1e5 rows. The width is 1e-7 up to there and grows in proportion beyond.
    """
    return 1e-7 * max(1.0, n / 1e5)


def megabytes(data: Dataset) -> float:
    """Return what a search takes at most, in units of 2^20 bytes.

    The gains are two arrays of p x p numbers of 8 bytes, beside p x p bytes and bits; the planes take one
    bit per row and state, scratch arrays about 70 bytes a row.
    """
    p, n = data.n_variables, data.n_rows
    return (18 * p * p + n * (int(data.cardinalities.sum()) / 8 + 70)) / 2**20


class Search(NamedTuple):
    """The state of one search.

    Parameters
    ----------
    is_parent : bool array, shape (p, p)
        ``[y, x]``: x is a parent of y.
    parents : int64 array, shape (p, max_parents)
        The first ``n_parents[y]`` of row y are the parents of y, ascending.
    n_parents : int64 array, shape (p,)
    scores : float64 array, shape (p,)
        Of each family.
    gains : float64 array, shape (p, p)
        ``[y, x]``: the change of y's score if x were taken out of its parents or, where it is none, put
        in, legal or not; minus infinity where y has no room.
    alone : float64 array, shape (p, p)
        The gains while no variable has parents; on the diagonal the scores.
    best_gain : float64 array, shape (p,)
        The gain of the best addition to y's parents that was legal when it was found; minus infinity if
        none was.
    best_source : int64 array, shape (p,)
        The variable that it adds.
    reaches : uint64 array, shape (p, ceil(p / 64))
        Bit x of row y: a directed path leads from y to x.
    """

    is_parent: NDArray[np.bool_]
    parents: NDArray[np.int64]
    n_parents: NDArray[np.int64]
    scores: NDArray[np.float64]
    gains: NDArray[np.float64]
    alone: NDArray[np.float64]
    best_gain: NDArray[np.float64]
    best_source: NDArray[np.int64]
    reaches: NDArray[np.uint64]


@kernel
def _climb(
    columns: Columns,
    rule: Scoring,
    is_equivalent: bool,
    max_parents: int,
    width: float,
    start: NDArray[np.bool_],
    is_first: bool,
    alone: NDArray[np.float64],
    space: Workspace,
) -> tuple[NDArray[np.bool_], float]:
    # One search from the DAG `start`, [x, y] for x -> y. Returns the DAG that it ends in, and its score.
    # The first search fills `alone` (see `Search`), the others use it.
    p = start.shape[0]
    if is_first:
        nothing = np.empty(0, dtype=np.int64)
        is_parent = np.zeros(p, dtype=np.bool_)
        for y in range(p):
            # Score-equivalent scores gain the same from x -> y as from y -> x.
            first = y + 1 if is_equivalent else np.int64(0)
            alone[y, y] = _score_additions(columns, rule, nothing, y, is_parent, first, alone[y], space)
            if is_equivalent:
                for x in range(first, p):
                    alone[x, y] = alone[y, x]
    state = Search(
        np.zeros((p, p), dtype=np.bool_),
        np.empty((p, max_parents), dtype=np.int64),
        np.zeros(p, dtype=np.int64),
        np.empty(p),
        np.empty((p, p)),
        alone,
        np.empty(p),
        np.zeros(p, dtype=np.int64),
        np.zeros((p, (p + WORD_ROWS - 1) // WORD_ROWS), dtype=np.uint64),
    )
    for y in range(p):
        for x in range(p):
            if start[x, y]:
                _insert_parent(state, x, y)
    _trace_paths(state)
    for y in range(p):
        _score_changes(columns, rule, y, state, space)
        _find_best_addition(state, y)
    while True:
        move, x, y = _choose_move(width, max_parents, state)
        if move == NONE:
            return state.is_parent.T.copy(), state.scores.sum()
        if move == ADD:
            _insert_parent(state, x, y)
            _extend_paths(state, x, y)
            _score_changes(columns, rule, y, state, space)
            _find_best_addition(state, y)
            continue
        _remove_parent(state, x, y)
        _score_changes(columns, rule, y, state, space)
        if move == REVERSE:
            _insert_parent(state, y, x)
            _score_changes(columns, rule, x, state, space)
        before = state.reaches.copy()
        _trace_paths(state)
        for v in range(p):
            if v in (x, y) or (before[v] != state.reaches[v]).any():
                _find_best_addition(state, v)


@inlined
def _choose_move(width: float, max_parents: int, state: Search) -> tuple[int, int, int]:
    # The move, and the arc x -> y that it adds, deletes or reverses.
    gains, parents, n_parents = state.gains, state.parents, state.n_parents
    is_parent, best_gain, reaches = state.is_parent, state.best_gain, state.reaches
    p = gains.shape[0]
    greatest = -np.inf
    for y in range(p):
        for x in parents[y, : n_parents[y]]:
            greatest = max(greatest, gains[y, x])
            gain = gains[y, x] + gains[x, y]
            if gain > greatest and _may_reverse(state, x, y, max_parents):
                greatest = gain
    for y in range(p):
        if best_gain[y] >= greatest - width:
            if _has_bit(reaches[y], state.best_source[y]):
                _find_best_addition(state, y)
            greatest = max(greatest, best_gain[y])
    if not greatest > width:
        return NONE, -1, -1

    enough = max(greatest - width, width)
    move, first_x, first_y = NONE, p, p
    for y in range(p):
        for x in parents[y, : n_parents[y]]:
            if (x, y) < (first_x, first_y):
                gain = gains[y, x] + gains[x, y]
                if gains[y, x] >= enough:
                    move, first_x, first_y = DELETE, x, y
                elif gain >= enough and _may_reverse(state, x, y, max_parents):
                    move, first_x, first_y = REVERSE, x, y
        if best_gain[y] >= enough:
            for x in range(min(p, first_x + 1)):
                is_legal = not is_parent[y, x] and not _has_bit(reaches[y], x)
                if gains[y, x] >= enough and is_legal and (x, y) < (first_x, first_y):
                    move, first_x, first_y = ADD, x, y
                    break
    return move, first_x, first_y


@inlined
def _find_best_addition(state: Search, y: int) -> None:
    gains = state.gains[y]
    best, source = -np.inf, 0
    is_parent, reached = state.is_parent[y], state.reaches[y]
    for x in range(gains.shape[0]):
        if gains[x] > best and not is_parent[x] and not _has_bit(reached, x):
            best, source = gains[x], x
    state.best_gain[y] = best
    state.best_source[y] = source


@inlined
def _has_bit(bits: NDArray[np.uint64], v: int) -> bool:
    return bool((bits[v // WORD_ROWS] >> np.uint64(v % WORD_ROWS)) & np.uint64(1))


@inlined
def _may_reverse(state: Search, x: int, y: int, max_parents: int) -> bool:
    # Reversing x -> y closes a cycle where another path leads from x to y, through another parent of y.
    if state.n_parents[x] == max_parents:
        return False
    closes = False
    for z in state.parents[y, : state.n_parents[y]]:
        closes |= z != x and _has_bit(state.reaches[x], z)
    return not closes


@inlined
def _insert_parent(state: Search, x: int, y: int) -> None:
    parents = state.parents[y]
    j = state.n_parents[y]
    while j > 0 and parents[j - 1] > x:
        parents[j] = parents[j - 1]
        j -= 1
    parents[j] = x
    state.n_parents[y] += 1
    state.is_parent[y, x] = True


@inlined
def _remove_parent(state: Search, x: int, y: int) -> None:
    parents = state.parents[y]
    state.n_parents[y] -= 1
    j = 0
    while parents[j] != x:
        j += 1
    for k in range(j, state.n_parents[y]):
        parents[k] = parents[k + 1]
    state.is_parent[y, x] = False


@inlined
def _add_reach(own: NDArray[np.uint64], others: NDArray[np.uint64], y: int) -> None:
    # Who reaches y reaches all that y does.
    for w in range(own.shape[0]):
        own[w] |= others[w]
    own[y // WORD_ROWS] |= np.uint64(1) << np.uint64(y % WORD_ROWS)


@inlined
def _extend_paths(state: Search, x: int, y: int) -> None:
    # After x -> y was added.
    for v in range(state.scores.shape[0]):
        if v == x or _has_bit(state.reaches[v], x):
            _add_reach(state.reaches[v], state.reaches[y], y)


@inlined
def _trace_paths(state: Search) -> None:
    # From the sinks upwards: a variable's turn comes when all its children have had theirs.
    p = state.scores.shape[0]
    n_children = np.zeros(p, dtype=np.int64)
    for y in range(p):
        for x in state.parents[y, : state.n_parents[y]]:
            n_children[x] += 1
    order = np.empty(p, dtype=np.int64)
    n_ready = 0
    for v in range(p):
        if n_children[v] == 0:
            order[n_ready] = v
            n_ready += 1
    state.reaches.fill(0)
    for k in range(p):
        y = order[k]
        for x in state.parents[y, : state.n_parents[y]]:
            _add_reach(state.reaches[x], state.reaches[y], y)
            n_children[x] -= 1
            if n_children[x] == 0:
                order[n_ready] = x
                n_ready += 1


@inlined
def _score_changes(columns: Columns, rule: Scoring, y: int, state: Search, space: Workspace) -> None:
    # Scores y's family and the gain of every change to it.
    k = state.n_parents[y]
    parents, gains = state.parents[y, :k], state.gains[y]
    if k == 0:
        state.scores[y] = state.alone[y, y]
        for x in range(gains.shape[0]):
            gains[x] = state.alone[y, x]
    elif k < state.parents.shape[1]:
        state.scores[y] = _score_additions(
            columns, rule, parents, y, state.is_parent[y], np.int64(0), gains, space
        )
    else:
        state.scores[y] = score_family(columns, parents, y, rule, space)
        for x in range(gains.shape[0]):
            gains[x] = -np.inf
    gains[y] = -np.inf
    for j in range(k):
        others = np.empty(k - 1, dtype=np.int64)
        for i in range(k - 1):
            others[i] = parents[i if i < j else i + 1]
        gains[parents[j]] = score_family(columns, others, y, rule, space) - state.scores[y]


@inlined
def _score_additions(
    columns: Columns,
    rule: Scoring,
    parents: NDArray[np.int64],
    y: int,
    is_parent: NDArray[np.bool_],
    first: int | np.int64,
    gains: NDArray[np.float64],
    space: Workspace,
) -> float:
    # Fills gains[x] for x = first, ..., p - 1 that are neither y nor its parents, and returns the score
    # of y with its parents alone.
    r = columns.cardinalities[y]
    n_planes = split_planes(columns, parents, y, space) * r
    if n_planes > 0:
        q = joint_states(columns, parents)
        own = score_table(space.base_sizes, n_planes // r, r, np.int64(1), q, rule)
        _score_on_planes(columns, rule, parents, y, is_parent, first, gains, n_planes, own, space)
    else:
        own = score_family(columns, parents, y, rule, space)
    _score_by_index(columns, rule, parents, y, is_parent, first, gains, n_planes, own, space)
    return own


@inlined
def _fits_planes(n_planes: int, offsets: NDArray[np.int64], x: int) -> bool:
    r_added = offsets[x + 1] - offsets[x]
    return bool(r_added > 0 and 0 < n_planes * (r_added - 1) <= MAX_OVERLAPS)


@inlined
def _score_on_planes(
    columns: Columns,
    rule: Scoring,
    parents: NDArray[np.int64],
    y: int,
    is_parent: NDArray[np.bool_],
    first: int | np.int64,
    gains: NDArray[np.float64],
    n_planes: int,
    own: float,
    space: Workspace,
) -> None:
    # The innermost loop of the search: nothing in it takes a tuple of arrays (see `count_within`).
    planes, offsets, plane_sizes = columns.planes, columns.offsets, columns.plane_sizes
    base, base_sizes, table = space.base, space.base_sizes, space.table
    terms, memo, divisors, ess = rule.terms, rule.memo, rule.divisors, rule.ess
    n_words, r = planes.shape[1], columns.cardinalities[y]
    n_parts, q = n_planes // r, joint_states(columns, parents)
    shift, penalty = r - 1 if rule.shifts else 0, rule.penalty * (r - 1)
    # Without parents, the cells of y's last state follow from the margins.
    n_counted = n_planes - 1 if parents.shape[0] == 0 else n_planes
    for x in range(first, offsets.shape[0] - 1):
        if x == y or is_parent[x] or not _fits_planes(n_planes, offsets, x):
            continue
        at = offsets[x]
        r_added = offsets[x + 1] - at
        for c in range(n_planes * r_added):
            table[c] = 0
        count_within(planes, at, r_added, 0, n_words, base, base_sizes, n_counted, table)
        if n_counted < n_planes:
            for s in range(r_added):
                rest = plane_sizes[at + s]
                for c in range(n_counted):
                    rest -= table[c * r_added + s]
                table[n_counted * r_added + s] = rest
        q_added = min(q * r_added, MAX_JOINT_STATES)
        if ess > 0.0:
            of_cells = remembered(memo[0], divisors[0], ess, q_added * r)
            of_margins = remembered(memo[1], divisors[1], ess, q_added)
            a, b = ess / (q_added * r), ess / q_added
            score = sum_rises(table, n_parts, r, r_added, of_cells, a, of_margins, b)
        else:
            score = sum_terms(table, n_parts, r, r_added, terms, shift) - penalty * q_added
        gains[x] = score - own


@inlined
def _score_by_index(
    columns: Columns,
    rule: Scoring,
    parents: NDArray[np.int64],
    y: int,
    is_parent: NDArray[np.bool_],
    first: int | np.int64,
    gains: NDArray[np.float64],
    n_planes: int,
    own: float,
    space: Workspace,
) -> None:
    # The index is made when it is first needed; tables that do not fit overwrite it.
    r, q, room = columns.cardinalities[y], joint_states(columns, parents), space.table.shape[0]
    family = np.empty(parents.shape[0] + 2, dtype=np.int64)
    family[0] = y
    for j in range(parents.shape[0]):
        family[j + 2] = parents[j]
    n_numbers = 0
    is_indexed = False
    for x in range(first, columns.offsets.shape[0] - 1):
        if x == y or is_parent[x] or _fits_planes(n_planes, columns.offsets, x):
            continue
        r_added = columns.cardinalities[x]
        q_added = min(q * r_added, MAX_JOINT_STATES)
        if not is_indexed and n_numbers * r_added <= room:
            n_numbers = index_rows(columns, parents, space) * r
            if n_numbers <= room:
                append_column(columns, y, space)
                is_indexed = True
        if is_indexed and tabulate_index(columns, x, n_numbers, space):
            score = score_table(space.table, n_numbers // r, r, r_added, q_added, rule)
        else:
            family[1] = x
            score = score_occurring(columns, family, q_added, rule, space)
            is_indexed = False
        gains[x] = score - own


@warm_up
def _compile() -> None:
    rng = np.random.default_rng(0)
    data = Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((2, 2), dtype=np.uint8))
    hill_climbing(data, restarts=1, rng=rng)
