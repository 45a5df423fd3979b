"""Ancestors, d-separation and Markov blankets.

Sets x and y of a DAG are d-separated by z when every path between them is blocked: by a variable of z
that is no collider on the path, or by a collider that is not in z and has no descendant in z (Pearl
1988). The search goes along active paths only, so its cost is at most proportional to the number of arcs
(Shachter 1998).
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Nodes, Offsets, neighbour_lists
from generators.classes import dag_class_lists
from generators.compiled import kernel, warm_up
from generators.errors import InputError
from generators.graph import Graph

Names = str | Iterable[str]
PARENTS = 0  # which run of a variable's neighbour lists is followed
CHILDREN = 2


def ancestors(graph: Graph, names: Names) -> tuple[str, ...]:
    """Return the variables from which a directed path of one arc or more leads to one of `names`.

    Parameters
    ----------
    graph : Graph
        Undirected edges are not followed.
    names : str or iterable of str
        One variable or several.

    Returns
    -------
    tuple of str
        In the graph's order.

    Raises
    ------
    InputError
        If a name is unknown.

    Examples
    --------
    >>> ancestors(Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")]), "c")
    ('a', 'b')
    """
    return _relatives(graph, names, PARENTS)


def descendants(graph: Graph, names: Names) -> tuple[str, ...]:
    """Return the variables to which a directed path of one arc or more leads from one of `names`.

    Parameters and errors are those of `ancestors`.

    Examples
    --------
    >>> descendants(Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")]), "a")
    ('b', 'c')
    """
    return _relatives(graph, names, CHILDREN)


def is_separated(graph: Graph, x: Names, y: Names, given: Names = ()) -> bool:
    """Say whether `given` d-separates `x` from `y` in a DAG.

    Parameters
    ----------
    graph : Graph
        A DAG.
    x, y, given : str or iterable of str
        One variable or several each; no variable in two of them. An empty `x` or `y` is separated from
        everything.

    Raises
    ------
    InputError
        If the graph is not a DAG, a name is unknown, or a name stands in two of the sets.

    Examples
    --------
    >>> graph = Graph.from_edges("abc", directed=[("a", "c"), ("b", "c")])
    >>> is_separated(graph, "a", "b"), is_separated(graph, "a", "b", given="c")
    (True, False)
    """
    sources, targets, conditions = (_positions(graph, names) for names in (x, y, given))
    n_in_sets = np.bincount(np.concatenate([sources, targets, conditions]), minlength=1)
    if n_in_sets.max() > 1:
        name = graph.names[int(n_in_sets.argmax())]
        raise InputError(f"x, y and given must have no variable in common; {name!r} stands in two of them")
    lists = dag_class_lists(graph)
    is_target = np.zeros(graph.n_variables, np.bool_)
    is_target[targets] = True
    return not is_connected(lists.dag_at, lists.dag_nodes, sources, is_target, conditions)


def markov_blanket(graph: Graph, name: str) -> tuple[str, ...]:
    """Return the parents, the children and the children's other parents of a variable of a DAG.

    Given these, the variable is independent of all others (Pearl 1988).

    Returns
    -------
    tuple of str
        In the graph's order.

    Raises
    ------
    InputError
        If the graph is not a DAG or the name is unknown.

    Examples
    --------
    >>> markov_blanket(Graph.from_edges("abcd", directed=[("a", "c"), ("b", "c"), ("c", "d")]), "a")
    ('b', 'c')
    """
    dag_class_lists(graph)
    (v,) = _positions(graph, [name]).tolist()
    is_child = graph.arrow[v]
    is_in = graph.arrow[:, v] | is_child | graph.arrow[:, is_child].any(axis=1)
    is_in[v] = False
    return _names(graph, is_in)


@kernel
def is_connected(
    at: Offsets, nodes: Nodes, sources: Nodes, is_target: NDArray[np.bool_], given: Nodes
) -> bool:
    """Say whether, given some variables of a DAG, an active path joins a source with a target.

    Shachter (1998). A variable is visited at most twice. Arrived at from a child (or as a source), the
    search goes on to parents and children unless the variable is given. Arrived at from a parent, it goes
    on to children, or, if the variable is given, back up to all its parents: that is also how it passes
    a collider with a given descendant, down to that descendant and up again.

    Parameters
    ----------
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array, shape (2 arcs,)
        The DAG's neighbour lists.
    sources : uint32 array
        Positions; none of them given.
    is_target : bool array, shape (p,)
        Targets that are given do not count.
    given : uint32 array
        Positions.
    """
    p = is_target.size
    is_given = np.zeros(p, np.bool_)
    for v in given:
        is_given[v] = True
    is_visited = np.zeros(2 * p, np.bool_)  # at 2 v: from a child, at 2 v + 1: from a parent
    stack = np.empty(2 * p, np.uint32)
    n = 0
    for v in sources:
        is_visited[2 * v] = True
        stack[n] = 2 * v
        n += 1
    while n > 0:
        n -= 1
        v = stack[n] >> 1
        is_from_parent = stack[n] & 1 == 1
        if not is_given[v]:
            if is_target[v]:
                return True
            for child in nodes[at[3 * v + 2] : at[3 * v + 3]]:
                if not is_visited[2 * child + 1]:
                    is_visited[2 * child + 1] = True
                    stack[n] = 2 * child + 1
                    n += 1
        if is_given[v] == is_from_parent:
            for parent in nodes[at[3 * v] : at[3 * v + 1]]:
                if not is_visited[2 * parent]:
                    is_visited[2 * parent] = True
                    stack[n] = 2 * parent
                    n += 1
    return False


@kernel
def reach(at: Offsets, nodes: Nodes, start: Nodes, side: int) -> NDArray[np.bool_]:
    """Mark the variables of `start` and all that directed paths lead to from there.

    Parameters
    ----------
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array
        Neighbour lists.
    start : uint32 array
    side : int
        `PARENTS` to walk against the arrows, `CHILDREN` to walk along them.

    Returns
    -------
    bool array, shape (p,)
    """
    p = at.size // 3
    is_reached = np.zeros(p, np.bool_)
    stack = np.empty(p, np.uint32)
    n = 0
    for v in start:
        if not is_reached[v]:
            is_reached[v] = True
            stack[n] = v
            n += 1
    while n > 0:
        n -= 1
        v = stack[n]
        for u in nodes[at[3 * v + side] : at[3 * v + side + 1]]:
            if not is_reached[u]:
                is_reached[u] = True
                stack[n] = u
                n += 1
    return is_reached


def _relatives(graph: Graph, names: Names, side: int) -> tuple[str, ...]:
    at, nodes = neighbour_lists(graph.arrow)
    runs = [nodes[at[3 * v + side] : at[3 * v + side + 1]] for v in _positions(graph, names).tolist()]
    next_to_them = np.concatenate([np.empty(0, np.uint32), *runs])
    return _names(graph, reach(at, nodes, next_to_them, side))


def _positions(graph: Graph, names: Names) -> Nodes:
    """Return the positions of the named variables, each once."""
    chosen = [names] if isinstance(names, str) else list(dict.fromkeys(names))
    for name in chosen:
        if name not in graph.names:
            raise InputError(f"{name!r} is not a variable of the graph")
    return np.array([graph.names.index(name) for name in chosen], dtype=np.uint32)


def _names(graph: Graph, is_in: NDArray[np.bool_]) -> tuple[str, ...]:
    return tuple(graph.names[i] for i in np.flatnonzero(is_in).tolist())


@warm_up
def _compile() -> None:
    graph = Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")])
    is_separated(graph, "a", "c", "b")
    ancestors(graph, "c")
