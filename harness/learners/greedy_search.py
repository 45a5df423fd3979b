"""Greedy search among permitted arcs by a decomposable score: a climb with a cache of gains.

A move adds an arc, deletes one or reverses one, and keeps the graph acyclic and every variable at
`max_parents` parents or fewer. The search makes the move that gains most until none gains. Only permitted
arcs are ever added, or made by a reversal; required arcs are there from the start and stay.

*Ties.* Score-equivalent moves gain exactly the same in theory and differ by rounding in practice, so
without a rule two correct programs end in different graphs. Here, of all legal moves that gain within
`tie_width` of the greatest gain, the first is made: in order of x, then y, for the arc x -> y; where x -> y
is there, deleting it comes before reversing it. A move that gains no more than that width is not made.

*Speed.* The gains of all changes to a variable's parents are kept, and computed anew only for the one or
two variables whose parents changed: all tables of such a column share one base (`harness.counts`). Of each
column the best legal addition is kept too, and the best deletion or reversal, legal or not. Adding an arc
only ever makes additions illegal, so a kept best that is still legal is still best; after other moves the
columns whose descendants changed are searched again. What is kept of a column are its permitted arcs only.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
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
from harness.records import Declined

Arrow = NDArray[np.bool_]
Int = int | np.int64  # to kernels the same

MAX_OVERLAPS = 128  # tables with more cells to count on planes are counted by index
NONE, ADD, DELETE, REVERSE = range(4)


def climb(
    columns: Columns,
    *,
    score: Score,
    ess: float,
    max_parents: int,
    permitted: Arrow,
    required: Arrow,
    starts: Iterable[Arrow] = (),
) -> Arrow:
    """Search greedily among the DAGs that have all required arcs and no arc that is not permitted.

    Takes time and memory for the permitted arcs; others are never scored.

    Parameters
    ----------
    columns : Columns
    score : {"bic", "aic", "bdeu", "k2"}
    ess : float
        Equivalent sample size of BDeu; above 0.
    max_parents : int
        The greatest number of parents of a variable; at least 1.
    permitted : bool array, shape (p, p)
        ``[x, y]``: x -> y may be there. The diagonal is not read.
    required : bool array, shape (p, p)
        ``[x, y]``: x -> y is there. Acyclic. What is required is permitted.
    starts : iterable of bool arrays, shape (p, p)
        The first search starts from the required arcs, and one more from each of these DAGs, which have
        all required arcs, permitted ones only, and at most `max_parents` parents.

    Returns
    -------
    bool array, shape (p, p)
        ``[x, y]``: x -> y. Of all searches' graphs the one with the greatest score, the earliest among
        equals.

    Raises
    ------
    Declined
        If more arcs into a variable are required than it may have parents.

    Examples
    --------
    >>> codes = np.array([[0, 0, 1], [1, 1, 1]] * 50, dtype=np.uint8)
    >>> columns = prepare(Dataset(tuple("abc"), (("0", "1"),) * 3, codes))
    >>> permitted, required = np.ones((3, 3), dtype=bool), np.zeros((3, 3), dtype=bool)
    >>> permitted[0, 1] = False
    >>> np.argwhere(
    ...     climb(columns, score="bic", ess=1.0, max_parents=2, permitted=permitted, required=required)
    ... ).tolist()
    [[1, 0]]
    """
    p, n = columns.codes.shape
    most = int(np.bincount(np.flatnonzero(required) % p, minlength=1).max())
    if most > max_parents:
        raise Declined(f"{most} parents of one variable are known; at most {max_parents} are allowed")
    rule, space = scoring(columns, score, ess), workspace(columns)
    width = tie_width(n)
    state = _search(permitted, required, max(1, min(max_parents, p - 1)))
    best, best_score = required, -np.inf
    for start in itertools.chain([required], starts):
        found = np.array(start, order="C")
        reached = _climb(columns, rule, score in SCORE_EQUIVALENT, width, state, space, found)
        if reached > best_score + width:
            best, best_score = found, reached
    return best


def tie_width(n: int) -> float:
    """Return the difference of gains, in nats, up to which two moves count as equally good.

    Scores are sums of numbers of the size of n log n, so their rounding errors grow with n: about 1e-9
    at 1e5 rows. The width is 1e-7 up to there and grows in proportion beyond.
    """
    return 1e-7 * max(1.0, n / 1e5)


class Search(NamedTuple):
    """The state of one search. An arc has one *place* in the arrays that have one value per permitted arc.

    Parameters
    ----------
    first : int64 array, shape (p + 1,)
        The permitted arcs into y have the places ``first[y]`` to ``first[y + 1] - 1``.
    sources : uint32 array, shape (permitted arcs,)
        Where each arc comes from; ascending for each y.
    required : bool array, shape (p, p)
        ``[x, y]``: the arc x -> y stays.
    alone : float64 array, shape (permitted arcs,)
        The gain of adding each arc while its target has no parents; NaN where not yet computed.
    gains : float64 array, shape (permitted arcs,)
        The gain of adding each arc, legal or not; minus infinity where it is there already and where its
        target has no room.
    parents : int64 array, shape (p, max_parents)
        The first ``n_parents[y]`` of row y are the parents of y, ascending.
    n_parents : int64 array, shape (p,)
    reverse : int64 array, shape (p, max_parents)
        The places of the arcs from y to its parents; -1 where the arc is not permitted.
    losses : float64 array, shape (p, max_parents)
        The gain of deleting each parent of y; minus infinity where its arc is required.
    scores : float64 array, shape (p,)
        Of each family.
    best_addition : float64 array, shape (p,)
        The gain of the best addition to y's parents that was legal when it was found; minus infinity if
        none was.
    best_source : int64 array, shape (p,)
        The variable that it adds.
    best_change : float64 array, shape (p,)
        The gain of the best deletion or reversal of an arc into y, legal or not.
    reaches : uint64 array, shape (p, ceil(p / 64))
        Bit x of row y: a directed path leads from y to x.
    """

    first: NDArray[np.int64]
    sources: NDArray[np.uint32]
    required: Arrow
    alone: NDArray[np.float64]
    gains: NDArray[np.float64]
    parents: NDArray[np.int64]
    n_parents: NDArray[np.int64]
    reverse: NDArray[np.int64]
    losses: NDArray[np.float64]
    scores: NDArray[np.float64]
    best_addition: NDArray[np.float64]
    best_source: NDArray[np.int64]
    best_change: NDArray[np.float64]
    reaches: NDArray[np.uint64]


def _search(permitted: Arrow, required: Arrow, max_parents: int) -> Search:
    p = len(permitted)
    allowed = permitted | required
    allowed.flat[:: p + 1] = False
    arcs = np.flatnonzero(allowed)
    first, sources = np.zeros(p + 1, dtype=np.int64), np.empty(len(arcs), dtype=np.uint32)
    _sort_by_target(arcs, first, sources)
    return Search(
        first,
        sources,
        np.array(required, order="C"),
        np.full(len(sources), np.nan),
        np.empty(len(sources)),
        np.empty((p, max_parents), dtype=np.int64),
        np.empty(p, dtype=np.int64),
        np.empty((p, max_parents), dtype=np.int64),
        np.empty((p, max_parents)),
        np.empty(p),
        np.empty(p),
        np.empty(p, dtype=np.int64),
        np.empty(p),
        np.empty((p, -(-p // WORD_ROWS)), dtype=np.uint64),
    )


@kernel
def _sort_by_target(arcs: NDArray[np.int64], first: NDArray[np.int64], sources: NDArray[np.uint32]) -> None:
    # Of arcs p x + y, ascending: fills `sources` target by target, and `first`, which comes zeroed, with
    # where each target's begin. (A counting sort; transposing a large matrix takes longer.)
    p = first.shape[0] - 1
    for fills in (False, True):
        x, end = 0, p
        for a in range(arcs.shape[0]):
            while arcs[a] >= end:
                x += 1
                end += p
            y = arcs[a] - (end - p)
            if fills:
                sources[first[y]] = x
                first[y] += 1
            else:
                first[y + 1] += 1
        if not fills:
            for y in range(p):
                first[y + 1] += first[y]
    for y in range(p, 0, -1):  # each has moved on to the next one's beginning
        first[y] = first[y - 1]
    first[0] = 0


@kernel
def _climb(
    columns: Columns,
    rule: Scoring,
    is_equivalent: bool,
    width: float,
    state: Search,
    space: Workspace,
    arrow: Arrow,
) -> float:
    # One search from the DAG `arrow`, [x, y] for x -> y, which is overwritten by the one that it ends in.
    # Returns that one's score.
    p = arrow.shape[0]
    changed = np.empty(p, dtype=np.int64)
    before = np.empty((p, state.reaches.shape[1]), dtype=np.uint64)
    for v in range(p):
        changed[v] = v
        state.n_parents[v] = 0
        for a in range(state.first[v], state.first[v + 1]):
            u = np.int64(state.sources[a])
            if arrow[u, v]:
                _insert_parent(state, u, v)
                arrow[u, v] = False
    _trace_paths(state, before)
    n_changed = p
    while True:
        for i in range(n_changed):
            _score_changes(columns, rule, is_equivalent, changed[i], state, space)
            _find_best_addition(state, changed[i])
        for i in range(n_changed):
            _find_best_changes(state, changed[i])
        move, x, y = _choose_move(width, state)
        if move == NONE:
            break
        changed[0], changed[1] = y, x
        n_changed = 2 if move == REVERSE else 1
        if move == ADD:
            _insert_parent(state, x, y)
            _extend_paths(state, x, y)
            continue
        _remove_parent(state, x, y)
        if move == REVERSE:
            _insert_parent(state, y, x)
        _trace_paths(state, before)
        for v in range(p):
            differs = False
            for w in range(before.shape[1]):
                differs |= before[v, w] != state.reaches[v, w]
            if differs:
                _find_best_addition(state, v)
    total = 0.0
    for v in range(p):
        total += state.scores[v]
        for j in range(state.n_parents[v]):
            arrow[state.parents[v, j], v] = True
    return total


@inlined
def _choose_move(width: float, state: Search) -> tuple[int, Int, Int]:
    # The move, and the arc x -> y that it adds, deletes or reverses.
    gains, n_parents, reverse, losses = state.gains, state.n_parents, state.reverse, state.losses
    best_addition, best_change = state.best_addition, state.best_change
    p = n_parents.shape[0]
    greatest = -np.inf
    for y in range(p):
        if best_change[y] > greatest:
            for j in range(n_parents[y]):
                greatest = max(greatest, losses[y, j])
                if reverse[y, j] >= 0:
                    gain = losses[y, j] + gains[reverse[y, j]]
                    if gain > greatest and _may_reverse(state, y, j):
                        greatest = gain
    for y in range(p):
        if best_addition[y] >= greatest - width:
            if _has_bit(state.reaches[y], state.best_source[y]):
                _find_best_addition(state, y)
            greatest = max(greatest, best_addition[y])
    if not greatest > width:
        return NONE, -1, -1

    enough = max(greatest - width, width)
    move, first_x, first_y = NONE, p, p
    for y in range(p):
        if best_change[y] >= enough:
            for j in range(n_parents[y]):
                x = state.parents[y, j]
                if x < first_x:  # y ascends, so that an earlier y stays
                    if losses[y, j] >= enough:
                        move, first_x, first_y = DELETE, x, y
                    elif reverse[y, j] >= 0:
                        gain = losses[y, j] + gains[reverse[y, j]]
                        if gain >= enough and _may_reverse(state, y, j):
                            move, first_x, first_y = REVERSE, x, y
        if best_addition[y] >= enough:
            for a in range(state.first[y], state.first[y + 1]):
                x = np.int64(state.sources[a])
                if x >= first_x:
                    break
                if gains[a] >= enough and not _has_bit(state.reaches[y], x):
                    move, first_x, first_y = ADD, x, y
                    break
    return move, first_x, first_y


@inlined
def _find_best_addition(state: Search, y: int) -> None:
    start = state.first[y]
    sources, gains = state.sources[start : state.first[y + 1]], state.gains[start : state.first[y + 1]]
    best, source = -np.inf, np.int64(0)
    reached = state.reaches[y]
    for a in range(gains.shape[0]):
        if gains[a] > best and not _has_bit(reached, sources[a]):
            best, source = gains[a], np.int64(sources[a])
    state.best_addition[y] = best
    state.best_source[y] = source


@inlined
def _find_best_changes(state: Search, y: int) -> None:
    # After y's gains changed: for y, and for its children that could become its parents.
    sources, gains, n_parents = state.sources, state.gains, state.n_parents
    reverse, losses, best_change = state.reverse, state.losses, state.best_change
    first, end = state.first[y], state.first[y + 1]
    for a in range(first - 1, end):
        v = y if a < first else np.int64(sources[a])
        best = -np.inf
        for j in range(n_parents[v]):
            best = max(best, losses[v, j])
            if reverse[v, j] >= 0:
                best = max(best, losses[v, j] + gains[reverse[v, j]])
        best_change[v] = best


@inlined
def _has_bit(bits: NDArray[np.uint64], v: Int) -> bool:
    return bool((bits[v // WORD_ROWS] >> np.uint64(v % WORD_ROWS)) & np.uint64(1))


@inlined
def _may_reverse(state: Search, y: int, j: int) -> bool:
    # Reversing x -> y closes a cycle where another path leads from x to y, through another parent of y.
    # (Where x has no room for a parent, no addition to its parents gains anything.)
    reached = state.reaches[state.parents[y, j]]
    closes = False
    for i in range(state.n_parents[y]):
        closes |= i != j and _has_bit(reached, state.parents[y, i])
    return not closes


@inlined
def _place(first: NDArray[np.int64], sources: NDArray[np.uint32], x: Int, y: Int) -> Int:
    # Of the arc x -> y; -1 if it is not permitted.
    low, high = first[y], first[y + 1]
    end = high
    while low < high:
        middle = (low + high) // 2
        if sources[middle] < x:
            low = middle + 1
        else:
            high = middle
    return low if low < end and sources[low] == x else np.int64(-1)


@inlined
def _insert_parent(state: Search, x: Int, y: Int) -> None:
    parents, reverse = state.parents[y], state.reverse[y]
    j = state.n_parents[y]
    while j > 0 and parents[j - 1] > x:
        parents[j] = parents[j - 1]
        reverse[j] = reverse[j - 1]
        j -= 1
    parents[j] = x
    reverse[j] = _place(state.first, state.sources, y, x)
    state.n_parents[y] += 1


@inlined
def _remove_parent(state: Search, x: Int, y: Int) -> None:
    parents, reverse = state.parents[y], state.reverse[y]
    state.n_parents[y] -= 1
    j = 0
    while parents[j] != x:
        j += 1
    for k in range(j, state.n_parents[y]):
        parents[k] = parents[k + 1]
        reverse[k] = reverse[k + 1]


@inlined
def _add_reach(own: NDArray[np.uint64], others: NDArray[np.uint64], y: Int) -> None:
    # Who reaches y reaches all that y does.
    for w in range(own.shape[0]):
        own[w] |= others[w]
    own[y // WORD_ROWS] |= np.uint64(1) << np.uint64(y % WORD_ROWS)


@inlined
def _extend_paths(state: Search, x: Int, y: Int) -> None:
    # After x -> y was added: from x upwards, past nothing that reached y before, for neither do the paths
    # beyond it.
    if _has_bit(state.reaches[x], y):
        return
    stack = np.empty(state.scores.shape[0], dtype=np.int64)
    stack[0] = x
    size = 1
    _add_reach(state.reaches[x], state.reaches[y], y)
    while size > 0:
        size -= 1
        v = stack[size]
        for u in state.parents[v, : state.n_parents[v]]:
            if not _has_bit(state.reaches[u], y):
                _add_reach(state.reaches[u], state.reaches[y], y)
                stack[size] = u
                size += 1


@inlined
def _trace_paths(state: Search, before: NDArray[np.uint64]) -> None:
    # From the sinks upwards: a variable's turn comes when all its children have had theirs. What was known
    # of the paths goes to `before`.
    p = state.scores.shape[0]
    n_children = np.zeros(p, dtype=np.int64)
    for y in range(p):
        for x in state.parents[y, : state.n_parents[y]]:
            n_children[x] += 1
        for w in range(before.shape[1]):
            before[y, w] = state.reaches[y, w]
            state.reaches[y, w] = 0
    order = np.empty(p, dtype=np.int64)
    n_ready = 0
    for v in range(p):
        if n_children[v] == 0:
            order[n_ready] = v
            n_ready += 1
    for k in range(p):
        y = order[k]
        for x in state.parents[y, : state.n_parents[y]]:
            _add_reach(state.reaches[x], state.reaches[y], y)
            n_children[x] -= 1
            if n_children[x] == 0:
                order[n_ready] = x
                n_ready += 1


@inlined
def _score_changes(
    columns: Columns, rule: Scoring, is_equivalent: bool, y: int, state: Search, space: Workspace
) -> None:
    # Scores y's family and the gain of every change to it. (One function, for each level of calls above
    # the counting kernels adds seconds to the compilation.)
    first, sources, alone, gains = state.first, state.sources, state.alone, state.gains
    start, end, k = first[y], first[y + 1], state.n_parents[y]
    parents = state.parents[y, :k]
    has_room = k < state.parents.shape[1]
    for a in range(start, end):  # what stays NaN is scored
        gains[a] = alone[a] if k == 0 else np.nan if has_room else -np.inf
    for j in range(k):
        gains[_place(first, sources, parents[j], y)] = -np.inf

    r = columns.cardinalities[y]
    n_planes = split_planes(columns, parents, y, space) * r
    if n_planes > 0:
        q = joint_states(columns, parents)
        own = score_table(space.base_sizes, n_planes // r, r, np.int64(1), q, rule)
        _score_on_planes(
            columns, rule, parents, y, sources[start:end], gains[start:end], n_planes, own, space
        )
    else:
        own = score_family(columns, parents, y, rule, space)
    _score_by_index(columns, rule, parents, y, sources[start:end], gains[start:end], own, space)
    state.scores[y] = own

    if k == 0:
        for a in range(start, end):
            if np.isnan(alone[a]):
                alone[a] = gains[a]
                # Score-equivalent scores gain the same from x -> y as from y -> x.
                place = _place(first, sources, y, np.int64(sources[a])) if is_equivalent else np.int64(-1)
                if place >= 0:
                    alone[place] = gains[a]
    for j in range(k):
        if state.required[parents[j], y]:
            state.losses[y, j] = -np.inf
        else:
            others = np.empty(k - 1, dtype=np.int64)
            for i in range(k - 1):
                others[i] = parents[i if i < j else i + 1]
            state.losses[y, j] = score_family(columns, others, y, rule, space) - own


@inlined
def _score_on_planes(
    columns: Columns,
    rule: Scoring,
    parents: NDArray[np.int64],
    y: int,
    sources: NDArray[np.uint32],
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
    for a in range(sources.shape[0]):
        at = offsets[sources[a]]
        r_added = offsets[sources[a] + 1] - at
        if r_added == 0 or n_planes * (r_added - 1) > MAX_OVERLAPS or not np.isnan(gains[a]):
            continue
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
            of_cell, of_margin = ess / (q_added * r), ess / q_added
            score = sum_rises(table, n_parts, r, r_added, of_cells, of_cell, of_margins, of_margin)
        else:
            score = sum_terms(table, n_parts, r, r_added, terms, shift) - penalty * q_added
        gains[a] = score - own


@inlined
def _score_by_index(
    columns: Columns,
    rule: Scoring,
    parents: NDArray[np.int64],
    y: int,
    sources: NDArray[np.uint32],
    gains: NDArray[np.float64],
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
    for a in range(sources.shape[0]):
        if not np.isnan(gains[a]):
            continue
        family[1] = sources[a]
        r_added = columns.cardinalities[family[1]]
        q_added = min(q * r_added, MAX_JOINT_STATES)
        if not is_indexed and n_numbers * r_added <= room:
            n_numbers = index_rows(columns, parents, space) * r
            if n_numbers <= room:
                append_column(columns, y, space)
                is_indexed = True
        if is_indexed and tabulate_index(columns, family[1], n_numbers, space):
            score = score_table(space.table, n_numbers // r, r, r_added, q_added, rule)
        else:
            score = score_occurring(columns, family, q_added, rule, space)
            is_indexed = False
        gains[a] = score - own


@warm_up
def _compile() -> None:
    columns = prepare(Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((2, 2), dtype=np.uint8)))
    no_arcs = np.zeros((2, 2), dtype=np.bool_)
    climb(columns, score="bic", ess=1.0, max_parents=1, permitted=~no_arcs, required=no_arcs)
