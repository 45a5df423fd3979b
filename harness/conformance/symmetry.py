"""Checks that nothing hangs on the order of columns or on what states are called."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from generators.dataset import Dataset, View
from generators.graph import Graph
from harness.conformance.inputs import for_symmetry, relabelled, reordered
from harness.conformance.results import Failed
from harness.conformance.shrinking import holds_on
from harness.conformance.subject import Subject, compared, learn

LEAST_ROWS = 100  # fewer have more exact ties, in which order may rightly decide


def check_permuted_columns(subject: Subject) -> None:
    """Permuted columns give the same answer, permuted."""
    _is_unmoved_by(subject, reordered, "permuted columns give another answer")


def check_relabelled_states(subject: Subject) -> None:
    """Relabelled states give the same answer."""
    _is_unmoved_by(subject, relabelled, "relabelled states give another answer")


def _is_unmoved_by(subject: Subject, views: Callable[[Dataset], Iterator[View]], reason: str) -> None:
    def fact(data: Dataset) -> None:
        plain = compared(subject, learn(subject, data).graph)
        for view in views(data):
            masked = view.mask(data)
            answer = view.unmask(learn(subject, masked).graph, data.names)
            other = compared(subject, answer)
            if plain != other:
                where = _first_difference(plain, other)
                raise Failed(f"{reason}: {where}", subject.asked(data), subject.asked(masked))

    holds_on(for_symmetry(), fact, least_rows=LEAST_ROWS)


def _first_difference(plain: Graph, other: Graph) -> str:
    differs = plain.arrow != other.arrow
    i, j = np.argwhere(np.triu(differs | differs.T))[0].tolist()
    first, second = (_mark(graph, i, j) for graph in (plain, other))
    return f"{first} became {second}"


def _mark(graph: Graph, i: int, j: int) -> str:
    x, y = graph.names[i], graph.names[j]
    marks = {(False, False): "no edge", (True, False): "->", (False, True): "<-", (True, True): "-"}
    mark = marks[bool(graph.arrow[i, j]), bool(graph.arrow[j, i])]
    return f"{mark} between {x} and {y}" if mark == "no edge" else f"{x} {mark} {y}"
