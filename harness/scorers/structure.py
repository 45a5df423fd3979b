"""Compare a learned graph with the truth: structural Hamming distances, skeletons, directions, colliders.

The learned graph L stands for its Markov equivalence class C(L): the CPDAG of a consistent extension (a
DAG is its own). An L without one is compared as it stands. Where knowledge was told, C(L) is narrowed by
it, whether or not the learner takes knowledge: the analyst has it in any case. Arrowheads that follow
from the knowledge alone count in no measure of directions. Undefined is undefined, with its reason:

- "truth: ..." if the truth alone leaves the measure undefined, whatever was answered; this comes before
  the other two, so that a truth leaves a measure's population for every learner alike;
- "learner: ..." if the learner declares not to claim what is measured;
- "answer: ..." if this answer claims nothing that could be measured.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Arrow, Nodes, Offsets
from generators.classes import class_lists, narrowed_lists
from generators.compiled import kernel, warm_up
from generators.errors import InputError
from generators.graph import Graph
from generators.network import Network
from harness.knowledge import Knowledge
from harness.scorers.maps import NOT_A_DAG, map_measures
from harness.scorers.registry import GRAPH_MEASURES
from harness.scorers.truth import Truth

SKELETON_MEASURES = ("skeleton_precision", "skeleton_recall", "skeleton_f1")
OF_TRUTH = "truth: "
SKELETON_ONLY = "learner: claims a skeleton only"
NOT_CAUSAL = "learner: claims no causal directions"


@dataclass(frozen=True, slots=True)
class Scores:
    """The measures of one answer.

    Parameters
    ----------
    values : dict of str to float
        The defined measures.
    undefined : dict of str to str
        The others, each with its reason, which starts with "truth: ", "learner: " or "answer: ".
    extendable : bool or None
        Whether the learned graph has a consistent extension; None if only a skeleton is claimed.
    """

    values: dict[str, float]
    undefined: dict[str, str]
    extendable: bool | None

    def as_mapping(self) -> dict[str, float | None]:
        """Return every graph measure in the order of the registry, None where it is undefined."""
        return {name: self.values.get(name) for name in GRAPH_MEASURES}


class Counts(NamedTuple):
    """What C(L) has, and how much of it C(T) has too."""

    edges: int
    directed: int  # without those that are settled by knowledge
    colliders: int
    shared_edges: int
    shared_marks: int  # edges with the same mark in both: ->, <- or undirected
    shared_directed: int  # without those that are settled by knowledge
    shared_colliders: int


def score(
    truth: Network | Graph, learned: Graph | Network, *, knowledge: Knowledge | None = None
) -> dict[str, float | None]:
    """Return all graph measures of a learned graph against the truth.

    Parameters
    ----------
    truth : Network or Graph
        A graph must be a DAG.
    learned : Graph or Network
        Over the same names, in any order. If it is a DAG, `dag_shd` takes its arcs as causal claims.
    knowledge : Knowledge, optional
        What was known beforehand, over the same names: both classes are narrowed by it, and directions
        that follow from it alone are not counted.

    Returns
    -------
    dict of str to float or None
        Measure -> value, None where it is undefined.

    Raises
    ------
    InputError
        If the truth is not a DAG, or a name is on one side only.

    Examples
    --------
    >>> chain = Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")])
    >>> collider = Graph.from_edges("abc", directed=[("a", "b"), ("c", "b")])
    >>> measures = score(chain, collider)
    >>> measures["dag_shd"], measures["class_shd"], measures["skeleton_f1"], measures["direction_recall"]
    (1.0, 2.0, 1.0, None)
    """
    target, graph = (each.graph if isinstance(each, Network) else each for each in (truth, learned))
    known = None if knowledge is None else knowledge.over(target.names)
    return score_answer(Truth.of(target, known), graph, directions="causal").as_mapping()


def score_answer(truth: Truth, learned: Graph, *, returns: str = "pdag", directions: str = "class") -> Scores:
    """Compute the graph measures of a learner's answer.

    Parameters
    ----------
    truth : Truth
    learned : Graph
        Over the truth's names, in any order.
    returns : {"pdag", "dag", "cpdag", "skeleton"}
        What the learner declares to return; "skeleton" has skeleton measures only.
    directions : {"class", "causal"}
        Whether directed edges are causal claims; else `dag_shd` is undefined.

    Raises
    ------
    InputError
        If a name is on one side only.

    Examples
    --------
    >>> truth = Truth.of(Graph.from_edges("abc", directed=[("a", "c"), ("b", "c")]))
    >>> scores = score_answer(truth, Graph.from_edges("abc"))
    >>> scores.values["class_shd"], scores.undefined["skeleton_precision"], scores.extendable
    (2.0, 'answer: no edge', True)
    """
    if learned.names != truth.graph.names:
        learned = _reordered(learned, truth.graph.names)
    lists = class_lists(learned.arrow)
    at, nodes = lists.at, lists.nodes
    if truth.known is not None and lists.is_extendable:
        at, nodes = narrowed_lists(at, nodes, truth.known)
    counts = Counts(*_count(truth.narrowed.arrow, truth.is_settled, learned.arrow, at, nodes).tolist())
    outcomes = _structure_measures(truth, counts)
    outcomes |= map_measures(truth, lists, is_equivalent=_is_equivalent(truth, counts))
    outcomes["dag_shd"] = NOT_CAUSAL
    if directions == "causal":
        outcomes["dag_shd"] = _dag_shd(truth, learned, counts) if lists.is_dag else NOT_A_DAG
    if returns == "skeleton":
        _withdraw_all_but_skeleton(outcomes)
    values: dict[str, float] = {}
    undefined: dict[str, str] = {}
    for name in GRAPH_MEASURES:
        outcome = outcomes[name]
        if isinstance(outcome, str):
            undefined[name] = outcome
        else:
            values[name] = outcome
    return Scores(values, undefined, None if returns == "skeleton" else lists.is_extendable)


def _reordered(learned: Graph, names: tuple[str, ...]) -> Graph:
    strange = sorted(set(learned.names) ^ set(names))
    if strange:
        raise InputError(
            f"the learned graph is not over the truth's variables; {strange[0]!r} is on one side only"
        )
    return learned.reordered(names)


def _structure_measures(truth: Truth, counts: Counts) -> dict[str, float | str]:
    shd = truth.n_edges + counts.edges - counts.shared_edges - counts.shared_marks
    beyond = "" if truth.known is None else " beyond what was told"
    return {
        "class_shd": float(shd),
        "shd_per_arc": _ratio(shd, truth.n_edges, "truth: no arc"),
        "skeleton_precision": _ratio(counts.shared_edges, counts.edges, "answer: no edge"),
        "skeleton_recall": _ratio(counts.shared_edges, truth.n_edges, "truth: no arc"),
        # Undefined only together: another answer to the same truth has an F1 of 0, so this is no reason
        # for the truth to leave the population.
        "skeleton_f1": _ratio(
            2 * counts.shared_edges, truth.n_edges + counts.edges, "answer: no edge, and the truth has none"
        ),
        "direction_precision": _ratio(
            counts.shared_directed, counts.directed, f"answer: no directed edge{beyond}"
        ),
        "direction_recall": _ratio(
            counts.shared_directed, truth.n_compelled, f"truth: no compelled arc{beyond}"
        ),
        "collider_precision": _ratio(
            counts.shared_colliders, counts.colliders, "answer: no unshielded collider"
        ),
        "collider_recall": _ratio(
            counts.shared_colliders, truth.n_colliders, "truth: no unshielded collider"
        ),
    }


def _is_equivalent(truth: Truth, counts: Counts) -> bool:
    """Whether skeleton and unshielded colliders are the same (Verma and Pearl 1990).

    Knowledge that is wrong narrows truth and answer differently, so that their distance does not say; but
    it adds no unshielded collider to a class (Meek 1995).
    """
    has_same_edges = truth.n_edges == counts.edges == counts.shared_edges
    return has_same_edges and truth.n_colliders == counts.colliders == counts.shared_colliders


def _ratio(part: int, whole: int, reason: str) -> float | str:
    return part / whole if whole else reason


def _dag_shd(truth: Truth, learned: Graph, counts: Counts) -> float:
    same_arcs = int(np.count_nonzero(truth.graph.arrow & learned.arrow))
    return float(truth.n_edges + counts.edges - counts.shared_edges - same_arcs)


def _withdraw_all_but_skeleton(outcomes: dict[str, float | str]) -> None:
    for name, outcome in outcomes.items():
        is_of_truth = isinstance(outcome, str) and outcome.startswith(OF_TRUTH)
        if name not in SKELETON_MEASURES and not is_of_truth:
            outcomes[name] = SKELETON_ONLY


@kernel
def _count(
    true_class: Arrow, is_settled: Arrow, learned: Arrow, at: Offsets, nodes: Nodes
) -> NDArray[np.int64]:
    """Count what `Counts` holds, in its order.

    Parameters
    ----------
    true_class : bool array, shape (p, p)
        C(T).
    is_settled : bool array, shape (p, p)
        Which arrowheads follow from knowledge alone.
    learned : bool array, shape (p, p)
        L, which has the skeleton of C(L).
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array
        C(L).
    """
    edges = directed = colliders = shared_edges = shared_marks = shared_directed = shared_colliders = 0
    for c in range(learned.shape[0]):
        parents = nodes[at[3 * c] : at[3 * c + 1]]
        for k in range(parents.size):
            a = parents[k]
            edges += 1
            shared_edges += true_class[a, c] or true_class[c, a]
            a_is_true = true_class[a, c] and not true_class[c, a]
            shared_marks += a_is_true
            if not is_settled[a, c]:
                directed += 1
                shared_directed += a_is_true
            for b in parents[k + 1 :]:
                if not learned[a, b] and not learned[b, a]:
                    colliders += 1
                    if a_is_true and true_class[b, c] and not true_class[c, b]:
                        shared_colliders += not true_class[a, b] and not true_class[b, a]
        for a in nodes[at[3 * c + 1] : at[3 * c + 2]]:
            if a < c:
                edges += 1
                shared_edges += true_class[a, c] or true_class[c, a]
                shared_marks += true_class[a, c] and true_class[c, a]
    return np.array(
        [edges, directed, colliders, shared_edges, shared_marks, shared_directed, shared_colliders]
    )


@warm_up
def _compile() -> None:
    collider = Graph.from_edges("abc", directed=[("a", "b"), ("c", "b")])
    score(collider, collider)
