"""Markov equivalence classes: CPDAGs, Meek's rules, consistent extensions, unshielded colliders.

DAGs that state the same independencies form a class: they have the same skeleton and the same
unshielded colliders (Verma and Pearl 1990). The class is drawn as a CPDAG: an edge is directed where all
members agree on its direction, else undirected.

Everything works on neighbour lists (see `generators.adjacency`), at a cost that grows with the edges and
the degrees, not with the square of the number of variables.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Arrow, Nodes, Offsets, arrow_from_lists, lists_from_edges, neighbour_lists
from generators.compiled import inlined, kernel, warm_up
from generators.errors import InputError
from generators.graph import Graph

NO_TRIPLES = np.empty(0, dtype=np.int64)


class ClassLists(NamedTuple):
    """A graph, a consistent extension of it, and the CPDAG of that extension, as neighbour lists.

    Parameters
    ----------
    is_dag : bool
        Whether the graph itself is a DAG (and so its own extension).
    is_extendable : bool
        Whether there is an extension; without one, the lists below are those of the graph itself.
    order : uint32 array, shape (p,)
        A topological order of the extension.
    dag_at, dag_nodes : int64 array, shape (3 p + 1,), and uint32 array, shape (2 edges,)
        The extension.
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array, shape (2 edges,)
        The CPDAG.
    """

    is_dag: bool
    is_extendable: bool
    order: Nodes
    dag_at: Offsets
    dag_nodes: Nodes
    at: Offsets
    nodes: Nodes


def cpdag(graph: Graph) -> Graph:
    """Return the completed partially directed graph (CPDAG) of a DAG's Markov equivalence class.

    Parameters
    ----------
    graph : Graph
        A DAG.

    Returns
    -------
    Graph
        Same names; an edge is directed if and only if it has that direction in every DAG of the class
        (edge labelling of Chickering 1995).

    Raises
    ------
    InputError
        If the graph is not a DAG.

    Examples
    --------
    >>> cpdag(Graph.from_edges("abcd", directed=[("a", "b"), ("b", "d"), ("c", "d")]))
    Graph(4 variables: a - b, b -> d, c -> d)
    """
    lists = dag_class_lists(graph)
    return Graph(graph.names, arrow_from_lists(lists.at, lists.nodes))


def consistent_extension(graph: Graph) -> Graph | None:
    """Return a DAG with the same skeleton, directed edges and unshielded colliders, or None.

    The method is that of Dor and Tarsi (1992): remove one variable after another that can be the last of
    a topological order. Where several can, the last by position goes first, so that edges left free
    point from earlier to later variables as far as that is possible.

    Parameters
    ----------
    graph : Graph
        Any; a DAG is its own extension.

    Returns
    -------
    Graph or None
        None if there is no such DAG, also for directed edges that form a cycle.

    Examples
    --------
    >>> consistent_extension(Graph.from_edges("abc", directed=[("c", "b")], undirected=[("a", "b")]))
    Graph(3 variables: b -> a, c -> b)
    """
    lists = class_lists(graph.arrow)
    if not lists.is_extendable:
        return None
    return Graph(graph.names, arrow_from_lists(lists.dag_at, lists.dag_nodes))


def class_of(graph: Graph) -> tuple[Graph, bool]:
    """Return the CPDAG of a consistent extension and True, or the graph itself and False without one.

    All consistent extensions are Markov equivalent, so the choice among them does not matter.

    Examples
    --------
    >>> class_of(Graph.from_edges("abc", directed=[("a", "b")], undirected=[("b", "c")]))
    (Graph(3 variables: a - b, b - c), True)
    """
    lists = class_lists(graph.arrow)
    if not lists.is_extendable:
        return graph, False
    return Graph(graph.names, arrow_from_lists(lists.at, lists.nodes)), True


def is_equivalent(a: Graph, b: Graph) -> bool:
    """Say whether two DAGs over the same names state the same independencies.

    Raises
    ------
    InputError
        If one is not a DAG, or their names differ (their order may).

    Examples
    --------
    >>> chain = Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")])
    >>> fork = Graph.from_edges("abc", directed=[("b", "a"), ("b", "c")])
    >>> collider = Graph.from_edges("abc", directed=[("a", "b"), ("c", "b")])
    >>> is_equivalent(chain, fork), is_equivalent(chain, collider)
    (True, False)
    """
    return cpdag(a) == cpdag(b if a.names == b.names else b.reordered(a.names))


def maximally_oriented(graph: Graph, known: NDArray[np.bool_] | None = None) -> Graph:
    """Return the graph with every undirected edge directed that Meek's rules and knowledge direct.

    Parameters
    ----------
    graph : Graph
        Usually a skeleton with its unshielded colliders directed (then the result is the CPDAG), or the
        CPDAG of a class whose members are narrowed down by `known`.
    known : bool array, shape (p, p), optional
        ``known[x, y]``: an edge between x and y can only be x -> y, if there is one.

    Notes
    -----
    See `meek_rules` and `known_directions` for the rules, and for what decides where the input
    contradicts itself. An edge of a CPDAG comes out directed if and only if all DAGs of the class that
    accord with the knowledge agree on its direction (Meek 1995), where there is any such DAG.

    Examples
    --------
    >>> maximally_oriented(Graph.from_edges("abcd", [("a", "c"), ("b", "c")], undirected=[("c", "d")]))
    Graph(4 variables: a -> c, b -> c, c -> d)
    >>> chain = Graph.from_edges("abc", undirected=[("a", "b"), ("b", "c")])
    >>> maximally_oriented(chain, np.array([[0, 1, 0], [0, 0, 0], [0, 0, 0]], dtype=bool))
    Graph(3 variables: a -> b, b -> c)
    """
    arrow = np.array(graph.arrow)
    if known is None:
        meek_rules(arrow, NO_TRIPLES)
    else:
        known = np.array(known, dtype=np.bool_, order="C")
        known.flags.writeable = False
        known_directions(arrow, known)
    return Graph(graph.names, arrow)


def unshielded_colliders(graph: Graph) -> NDArray[np.int64]:
    """List the unshielded colliders a -> c <- b: both edges directed, a and b not adjacent.

    Returns
    -------
    int64 array, shape (m, 3)
        Positions (a, c, b) with a < b, sorted by c, then a, then b.

    Examples
    --------
    >>> unshielded_colliders(Graph.from_edges("abc", directed=[("a", "c"), ("b", "c")])).tolist()
    [[0, 2, 1]]
    """
    return collider_triples(graph.arrow, *neighbour_lists(graph.arrow))


def dag_class_lists(graph: Graph) -> ClassLists:
    """Return the lists of a DAG, which is its own extension, and of its CPDAG.

    Raises
    ------
    InputError
        If the graph is not a DAG; the message names an undirected edge or a directed cycle.
    """
    lists = class_lists(graph.arrow)
    if not lists.is_dag:
        undirected = np.argwhere(graph.undirected)
        if undirected.size:
            i, j = undirected[0]
            raise InputError(
                f"a DAG is needed; the edge {graph.names[i]!r} - {graph.names[j]!r} is undirected"
            )
        graph.order()  # names the cycle
    return lists


@kernel
def class_lists(arrow: Arrow) -> ClassLists:
    """Find a consistent extension of a graph and its CPDAG.

    Parameters
    ----------
    arrow : bool array, shape (p, p), C-contiguous

    Returns
    -------
    ClassLists
    """
    at, nodes = neighbour_lists(arrow)
    order, n_ordered = _extension_order(arrow, at, nodes)
    p = arrow.shape[0]
    if n_ordered < p:
        return ClassLists(False, False, order, at, nodes, at, nodes)
    is_directed = True
    for v in range(p):
        is_directed &= at[3 * v + 1] == at[3 * v + 2]
    dag_at, dag_nodes = (at, nodes) if is_directed else _directed_along(order, at, nodes)
    class_at, class_nodes = _class_of_dag(order, dag_at, dag_nodes)
    return ClassLists(is_directed, True, order, dag_at, dag_nodes, class_at, class_nodes)


@kernel
def collider_triples(arrow: Arrow, at: Offsets, nodes: Nodes) -> NDArray[np.int64]:
    """List the unshielded colliders of a graph given both ways; see `unshielded_colliders`."""
    p = arrow.shape[0]
    triples = np.empty((max(p, 1), 3), np.int64)
    n = 0
    for c in range(p):
        parents = nodes[at[3 * c] : at[3 * c + 1]]
        for k in range(parents.size):
            for other in range(k + 1, parents.size):
                a, b = parents[k], parents[other]
                if arrow[a, b] or arrow[b, a]:
                    continue
                if n == triples.shape[0]:
                    triples = np.concatenate((triples, np.empty_like(triples)))
                triples[n, 0], triples[n, 1], triples[n, 2] = a, c, b
                n += 1
    return triples[:n].copy()


@kernel
def meek_rules(arrow: Arrow, ambiguous: NDArray[np.int64]) -> None:
    """Direct undirected edges by Meek's four rules until none applies, in place.

    An undirected edge a - b becomes a -> b where, for some c and d (Meek 1995),

    1. c -> a, and c and b are not adjacent;
    2. a -> c -> b;
    3. a - c -> b and a - d -> b, and c and d are not adjacent;
    4. a - c -> d -> b, a and d are adjacent, and c and b are not.

    Rules 1, 3 and 4 rest on a variable between two that are not adjacent being no collider: a between c
    and b in rules 1 and 4, between c and d in rule 3. Where that is not known they are not applied (Colombo
    and Maathuis 2014).

    Rule 4 never applies to a skeleton with just its unshielded colliders directed; it is needed only
    where background knowledge has directed more.

    Where the input contradicts itself, two rules may ask for opposite directions, and the first to be
    applied wins. Directed edges are worked off first come, first served, beginning with those of the
    input by (source, target); for each, the rules that have it among their premises are tried on the
    variables adjacent to its target, then on those adjacent to its source, parents first, then
    undirected neighbours, then children (as of the input), by position.

    Parameters
    ----------
    arrow : bool array, shape (p, p), C-contiguous
        [i, j] for i -> j, both directions for an undirected edge.
    ambiguous : int64 array, ascending
        (x p + z) p + y, x < y, for each variable z of which it is not known whether it is a collider
        between x and y; `NO_TRIPLES` where there is none.
    """
    at, nodes = neighbour_lists(arrow)
    source, target, n = _directed_edges(at, nodes)
    _close(arrow, at, nodes, ambiguous, source, target, 0, n)


@kernel
def known_directions(arrow: Arrow, known: Arrow) -> None:
    """Direct undirected edges by Meek's rules and by knowledge until nothing applies, in place.

    Edge by edge, by (x, y): a still undirected x - y with ``known[x, y]`` becomes x -> y, and what follows
    from it by `meek_rules` is directed before the next one is looked at. So knowledge that contradicts
    what stands there already, or what follows from earlier knowledge, is passed over: of a CPDAG's class
    at least one DAG always accords with what comes out (Meek 1995).

    Parameters
    ----------
    arrow : bool array, shape (p, p), C-contiguous
        As for `meek_rules`.
    known : bool array, shape (p, p), C-contiguous
        [x, y]: an edge between x and y can only be x -> y.
    """
    at, nodes = neighbour_lists(arrow)
    source, target, n = _directed_edges(at, nodes)
    nothing = np.empty(0, np.int64)
    n = _close(arrow, at, nodes, nothing, source, target, 0, n)
    for x in range(arrow.shape[0]):
        for y in nodes[at[3 * x + 1] : at[3 * x + 2]]:
            if known[x, y] and arrow[x, y] and arrow[y, x]:
                more = _direct(arrow, x, y, source, target, n)
                n = _close(arrow, at, nodes, nothing, source, target, n, more)


@kernel
def narrowed_lists(at: Offsets, nodes: Nodes, known: Arrow) -> tuple[Offsets, Nodes]:
    """Direct what knowledge directs in a class given as neighbour lists; see `known_directions`."""
    arrow = arrow_from_lists(at, nodes)
    known_directions(arrow, known)
    return neighbour_lists(arrow)


@inlined
def _directed_edges(at: Offsets, nodes: Nodes) -> tuple[Nodes, Nodes, int]:
    """List the directed edges by (source, target), with room for all edges."""
    source = np.empty(nodes.size // 2, np.uint32)
    target = np.empty(nodes.size // 2, np.uint32)
    n = 0
    for i in range(at.size // 3):
        for j in nodes[at[3 * i + 2] : at[3 * i + 3]]:
            source[n] = i
            target[n] = j
            n += 1
    return source, target, n


@inlined
def _close(
    arrow: Arrow,
    at: Offsets,
    nodes: Nodes,
    ambiguous: NDArray[np.int64],
    source: Nodes,
    target: Nodes,
    done: int,
    n: int,
) -> int:
    """Work off the directed edges from `done` on, with those that are added, and return their number."""
    p = arrow.shape[0]
    while done < n:
        x, y = source[done], target[done]
        done += 1
        for b in nodes[at[3 * y] : at[3 * y + 3]]:
            if arrow[y, b] and arrow[b, y]:
                if b != x and not arrow[x, b] and not arrow[b, x] and _is_clear(ambiguous, p, x, y, b):
                    n = _direct(arrow, y, b, source, target, n)  # rule 1: x -> y - b
            elif arrow[y, b]:
                if arrow[x, b] and arrow[b, x]:
                    n = _direct(arrow, x, b, source, target, n)  # rule 2: x -> y -> b
                elif not arrow[x, b] and not arrow[b, x]:
                    around_x = nodes[at[3 * x] : at[3 * x + 3]]
                    n = _rule_4(arrow, x, y, b, around_x, ambiguous, source, target, n)
        for a in nodes[at[3 * x] : at[3 * x + 3]]:
            is_free = arrow[a, y] and arrow[y, a]
            if arrow[a, x] and not arrow[x, a]:
                if is_free:
                    n = _direct(arrow, a, y, source, target, n)  # rule 2: a -> x -> y
                elif not arrow[a, y] and not arrow[y, a]:
                    around_a = nodes[at[3 * a] : at[3 * a + 3]]
                    n = _rule_4(arrow, a, x, y, around_a, ambiguous, source, target, n)
            elif arrow[a, x] and is_free:
                around_a = nodes[at[3 * a] : at[3 * a + 3]]
                if _rule_3(arrow, a, x, y, around_a, ambiguous):
                    n = _direct(arrow, a, y, source, target, n)
    return n


@inlined
def _direct(arrow: Arrow, a: int, b: int, source: Nodes, target: Nodes, n: int) -> int:
    arrow[b, a] = False
    source[n] = a
    target[n] = b
    return n + 1


@inlined
def _is_clear(ambiguous: NDArray[np.int64], p: int, x: int, z: int, y: int) -> bool:
    if ambiguous.shape[0] == 0:
        return True
    triple = (np.int64(min(x, y)) * p + np.int64(z)) * p + np.int64(max(x, y))
    low, high = 0, ambiguous.shape[0]
    while low < high:
        middle = (low + high) // 2
        if ambiguous[middle] < triple:
            low = middle + 1
        else:
            high = middle
    return bool(low == ambiguous.shape[0] or ambiguous[low] != triple)


@inlined
def _rule_3(arrow: Arrow, a: int, c: int, b: int, around_a: Nodes, ambiguous: NDArray[np.int64]) -> bool:
    """Whether there is a d with a - d -> b, not adjacent to c; a - c -> b and a - b are known."""
    for d in around_a:
        is_between = arrow[a, d] and arrow[d, a] and arrow[d, b] and not arrow[b, d]
        is_unshielded = d != c and not arrow[c, d] and not arrow[d, c]
        if is_between and is_unshielded and _is_clear(ambiguous, arrow.shape[0], c, a, d):
            return True
    return False


@inlined
def _rule_4(
    arrow: Arrow,
    c: int,
    d: int,
    b: int,
    around_c: Nodes,
    ambiguous: NDArray[np.int64],
    source: Nodes,
    target: Nodes,
    n: int,
) -> int:
    """Direct every a -> b with a - c, a - b, and a and d adjacent; c -> d -> b, not adjacent, is known."""
    for a in around_c:
        is_free = arrow[a, c] and arrow[c, a] and arrow[a, b] and arrow[b, a]
        is_shielded = arrow[a, d] or arrow[d, a]
        if is_free and is_shielded and _is_clear(ambiguous, arrow.shape[0], c, a, b):
            n = _direct(arrow, a, b, source, target, n)
    return n


@inlined
def _extension_order(arrow: Arrow, at: Offsets, nodes: Nodes) -> tuple[Nodes, int]:
    """Order the variables so that directing all edges along the order is a consistent extension.

    Dor and Tarsi (1992). A variable that can be removed stays so while others are, and only a variable
    adjacent to a removed one can become removable: so nothing else is looked at again.

    Returns
    -------
    order : uint32 array, shape (p,)
    n_ordered : int
        Below p if there is no extension; then only the last `n_ordered` places are filled.
    """
    p = arrow.shape[0]
    order = np.zeros(p, np.uint32)
    n_children = np.empty(p, np.int64)
    is_removed = np.zeros(p, np.bool_)
    is_ready = np.zeros(8 * (p // 8 + 1), np.bool_)
    ready_words = is_ready.view(np.uint64)  # eight at a time, for the search of the last
    for v in range(p):
        n_children[v] = at[3 * v + 3] - at[3 * v + 2]
        is_ready[v] = n_children[v] == 0 and _closes(arrow, v, at, nodes, is_removed)
    n_left = p
    word = ready_words.size - 1
    while word >= 0:
        if ready_words[word] == 0:
            word -= 1
            continue
        x = 8 * word + 7
        while not is_ready[x]:
            x -= 1
        is_ready[x] = False
        is_removed[x] = True
        n_left -= 1
        order[n_left] = x
        for v in nodes[at[3 * x] : at[3 * x + 1]]:
            n_children[v] -= 1
        for v in nodes[at[3 * x] : at[3 * x + 3]]:
            if is_removed[v] or is_ready[v] or n_children[v] > 0:
                continue
            if _closes(arrow, v, at, nodes, is_removed):
                is_ready[v] = True
                word = max(word, int(v) // 8)
    return order, p - n_left


@inlined
def _closes(arrow: Arrow, x: int, at: Offsets, nodes: Nodes, is_removed: Arrow) -> bool:
    """Whether directing all undirected edges of x into x makes no new unshielded collider."""
    adjacent = nodes[at[3 * x] : at[3 * x + 3]]
    for u in nodes[at[3 * x + 1] : at[3 * x + 2]]:
        if is_removed[u]:
            continue
        for w in adjacent:
            if w != u and not is_removed[w] and not arrow[u, w] and not arrow[w, u]:
                return False
    return True


@inlined
def _directed_along(order: Nodes, at: Offsets, nodes: Nodes) -> tuple[Offsets, Nodes]:
    """Direct every edge from the earlier to the later variable of an order."""
    p = order.size
    rank = np.empty(p, np.int64)
    for k in range(p):
        rank[order[k]] = k
    source = np.empty(nodes.size // 2, np.uint32)
    target = np.empty(nodes.size // 2, np.uint32)
    n = 0
    for v in range(p):
        for u in nodes[at[3 * v] : at[3 * v + 3]]:
            if rank[u] < rank[v]:
                source[n] = u
                target[n] = v
                n += 1
    return lists_from_edges(p, source, target, np.zeros(n, np.bool_))


@inlined
def _class_of_dag(order: Nodes, at: Offsets, nodes: Nodes) -> tuple[Offsets, Nodes]:
    """Label the edges of a DAG compelled or reversible, and return the lists of its CPDAG.

    Chickering (1995). The edges into y are labelled together, once those into its earlier variables are.
    Let x be the last parent of y in the order. All edges into y are compelled if a compelled w -> x comes
    from no parent of y, or a parent of y other than x is no parent of x. Otherwise x -> y is reversible,
    every other parent w of y is one of x, and w -> y is compelled if w -> x is.
    """
    p = order.size
    rank = np.empty(p, np.int64)
    for k in range(p):
        rank[order[k]] = k
    is_compelled = np.zeros(nodes.size, np.bool_)  # parallel to `nodes`, used in the runs of parents
    place = np.full(p, -1, np.int64)  # of a parent of x among the parents of x
    is_parent_of_y = np.zeros(p, np.bool_)
    for y in order:
        first, end = at[3 * y], at[3 * y + 1]
        if first == end:
            continue
        x = nodes[first]
        for k in range(first, end):
            is_parent_of_y[nodes[k]] = True
            if rank[nodes[k]] > rank[x]:
                x = nodes[k]
        all_compelled = False
        for k in range(at[3 * x], at[3 * x + 1]):
            place[nodes[k]] = k
            all_compelled |= is_compelled[k] and not is_parent_of_y[nodes[k]]
        for k in range(first, end):
            all_compelled |= nodes[k] != x and place[nodes[k]] < 0
        for k in range(first, end):
            w = nodes[k]
            is_compelled[k] = all_compelled or (w != x and is_compelled[place[w]])
            is_parent_of_y[w] = False
        for k in range(at[3 * x], at[3 * x + 1]):
            place[nodes[k]] = -1
    source = np.empty(nodes.size // 2, np.uint32)
    target = np.empty(nodes.size // 2, np.uint32)
    is_reversible = np.empty(nodes.size // 2, np.bool_)
    n = 0
    for v in range(p):
        for k in range(at[3 * v], at[3 * v + 1]):
            source[n] = nodes[k]
            target[n] = v
            is_reversible[n] = not is_compelled[k]
            n += 1
    return lists_from_edges(p, source, target, is_reversible)


@warm_up
def _compile() -> None:
    graph = Graph.from_edges("abcd", directed=[("a", "c"), ("b", "c")], undirected=[("c", "d")])
    class_of(graph)
    maximally_oriented(graph)
    maximally_oriented(graph, graph.arrow)
    unshielded_colliders(graph)
    lists = class_lists(graph.arrow)
    narrowed_lists(lists.at, lists.nodes, graph.arrow)
