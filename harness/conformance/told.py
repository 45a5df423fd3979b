"""The check that what is told of a graph is heeded."""

from __future__ import annotations

import itertools
from collections.abc import Iterator

import numpy as np

from generators.dataset import Dataset
from generators.graph import Graph
from harness.conformance.inputs import COLLIDER, ordinary, with_counts
from harness.conformance.results import Failed, Skipped
from harness.conformance.subject import Subject, learn
from harness.knowledge import Knowledge
from harness.records import Declined


def check_told_knowledge(subject: Subject) -> None:
    """Arcs that are told are in the answer, and arcs that are excluded are not."""
    if not getattr(subject.specification, "takes_knowledge", False):
        raise Skipped("it takes no knowledge")
    for data, knowledge in _told():
        asked = subject.asked(data, knowledge)
        try:
            fault = contradiction(learn(subject, data, knowledge).graph, knowledge)
        except Declined as refusal:
            raise Failed(f"it declined what it was told: {refusal}", asked) from refusal
        if fault:
            raise Failed(fault, asked)


def _told() -> Iterator[tuple[Dataset, Knowledge]]:
    """Yield data and what is told of them, with the data and against them, the fewest columns first."""
    data = with_counts(COLLIDER, (0, 1, 2))
    x, y, z = data.names
    yield data, Knowledge.of(data.names)
    yield data, Knowledge.of(data.names, arcs=[(x, z)])
    yield data, Knowledge.of(data.names, arcs=[(z, x)])
    yield data, Knowledge.of(data.names, arcs=[(y, x)])  # which the data say are independent
    yield data, Knowledge.of(data.names, excluded=[(x, z)])
    yield data, Knowledge.of(data.names, excluded=[(x, z), (z, x)])
    yield data, Knowledge.of(data.names, stages=[[z], [x, y]])
    yield data, Knowledge.of(data.names, excluded=list(itertools.permutations(data.names, 2)))
    for data in ordinary():
        names = data.names
        half = len(names) // 2
        yield data, Knowledge.of(names, stages=[names[:half], names[half:]])
        yield data, Knowledge.of(names, stages=[names[half:], names[:half]])
        yield data, Knowledge.of(names, arcs=[(names[-1], names[0])], excluded=[(names[0], names[1])])


def contradiction(graph: Graph, knowledge: Knowledge) -> str | None:
    """Say which statement an answer contradicts, or return None.

    An undirected edge contradicts neither an arc that was told nor the exclusion of one direction.

    Examples
    --------
    >>> knowledge = Knowledge.of("abc", arcs=[("a", "b")], excluded=[("a", "c")])
    >>> contradiction(Graph.from_edges("abc", directed=[("a", "b"), ("c", "a")]), knowledge)
    >>> contradiction(Graph.from_edges("abc", undirected=[("a", "b"), ("a", "c")]), knowledge)
    >>> contradiction(Graph.from_edges("abc", directed=[("b", "a")]), knowledge)
    'an arc that was told has the other direction: a -> b'
    """
    directed, skeleton = graph.directed, graph.skeleton
    arcs, excluded = knowledge.arcs, knowledge.excluded
    faults = {
        "an arc that was told is not in the answer": arcs & ~skeleton,
        "an arc that was told has the other direction": arcs & directed.T,
        "an arc that was excluded is in the answer": excluded & (directed | (skeleton & excluded.T)),
    }
    for sentence, where in faults.items():
        if where.any():
            i, j = np.argwhere(where)[0].tolist()
            return f"{sentence}: {graph.names[i]} -> {graph.names[j]}"
    return None
