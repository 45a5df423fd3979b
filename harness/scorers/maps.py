"""I-maps: whether the learned graph states only independencies that hold in the true DAG.

A DAG H states that each variable is independent of the variables before it in a topological order of H,
given its parents in H; all its other statements follow from these by the rules that d-separation obeys
(Verma and Pearl 1988). So H is an I-map of T if and only if these p statements are d-separations in T,
and an arc u -> v of an I-map can be dropped if and only if T separates u from v by the other parents of
v. This is about d-separation in T: in a network that is not faithful to T, more independencies may hold.
"""

from __future__ import annotations

import numpy as np

from generators.adjacency import Nodes, Offsets, neighbour_lists
from generators.classes import ClassLists, class_lists
from generators.compiled import kernel, warm_up
from generators.separation import is_connected
from harness.scorers.truth import Truth

NO_EXTENSION = "answer: no consistent extension"
NOT_A_DAG = "answer: not a DAG"


def map_measures(truth: Truth, learned: ClassLists, is_equivalent: bool) -> dict[str, float | str]:
    """Return `imap`, `minimal_imap` and `perfect_map`, or the reason why one is undefined.

    Parameters
    ----------
    truth : Truth
    learned : ClassLists
        Of the learned graph; any consistent extension states the same independencies, but which arcs can
        be dropped differs within a class, so that `minimal_imap` is for DAGs as returned.
    is_equivalent : bool
        Whether the learned class is the true one.
    """
    if not learned.is_extendable:
        return {"imap": NO_EXTENSION, "minimal_imap": NOT_A_DAG, "perfect_map": NO_EXTENSION}
    dag = (learned.dag_at, learned.dag_nodes)
    imap = _is_imap(truth.at, truth.nodes, learned.order, *dag)
    minimal: float | str = NOT_A_DAG
    if learned.is_dag:
        minimal = float(imap and not _has_spare_arc(truth.at, truth.nodes, *dag))
    return {"imap": float(imap), "minimal_imap": minimal, "perfect_map": float(is_equivalent)}


@kernel
def _is_imap(true_at: Offsets, true_nodes: Nodes, order: Nodes, at: Offsets, nodes: Nodes) -> bool:
    is_before = np.zeros(order.size, np.bool_)
    for k in range(order.size):
        v = order[k]
        parents = nodes[at[3 * v] : at[3 * v + 1]]
        if is_connected(true_at, true_nodes, order[k : k + 1], is_before, parents):
            return False
        is_before[v] = True
    return True


@kernel
def _has_spare_arc(true_at: Offsets, true_nodes: Nodes, at: Offsets, nodes: Nodes) -> bool:
    p = at.size // 3
    is_source = np.zeros(p, np.bool_)
    child = np.empty(1, np.uint32)
    for v in range(p):
        child[0] = v
        parents = nodes[at[3 * v] : at[3 * v + 1]]
        for u in parents:
            is_source[u] = True
            is_joined = is_connected(true_at, true_nodes, child, is_source, parents[parents != u])
            is_source[u] = False
            if not is_joined:
                return True
    return False


@warm_up
def _compile() -> None:
    arrow = np.zeros((3, 3), np.bool_)
    arrow[0, 1] = arrow[1, 2] = True
    arrow.flags.writeable = False
    at, nodes = neighbour_lists(arrow)
    for array in (at, nodes):
        array.flags.writeable = False
    lists = class_lists(arrow)
    _is_imap(at, nodes, lists.order, lists.dag_at, lists.dag_nodes)
    _has_spare_arc(at, nodes, lists.dag_at, lists.dag_nodes)
