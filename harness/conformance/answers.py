"""Checks of what every answer is, whatever the data."""

from __future__ import annotations

import numpy as np

from generators.classes import class_of
from generators.dataset import Dataset
from harness.conformance.inputs import every_kind, ordinary
from harness.conformance.results import Failed, Skipped
from harness.conformance.shrinking import holds_on
from harness.conformance.subject import Subject, learn
from harness.records import Answer


def check_own_variables(subject: Subject) -> None:
    """An answer is a graph over the data's variables."""
    # As if any sort of graph were declared, so that nothing else is found fault with.
    loose = subject.returning("pdag")
    holds_on(every_kind(), lambda data: _learn(loose, data))


def check_declared_sort(subject: Subject) -> None:
    """An answer is a graph of the sort that the learner declares."""
    loose = subject.returning("pdag")

    def fact(data: Dataset) -> None:
        answer = learn(loose, data)
        fault = _fault_of_sort(subject.specification.returns, answer)
        if fault:
            raise Failed(fault, subject.asked(data))

    holds_on(every_kind(), fact)


def check_acyclic(subject: Subject) -> None:
    """An answer that is declared a DAG or a CPDAG has no directed cycle."""
    returns = subject.specification.returns
    if returns == "skeleton":
        raise Skipped("it declares a skeleton, which has no directions")
    if returns == "pdag":
        raise Skipped("it declares a PDAG, which on finite data may contradict itself")
    loose = subject.returning("pdag")

    def fact(data: Dataset) -> None:
        if not learn(loose, data).graph.is_acyclic:
            raise Failed("the answer has a directed cycle", subject.asked(data))

    holds_on(every_kind(), fact)


def check_input_unchanged(subject: Subject) -> None:
    """The data are as they were after the learner has seen them, also where they could be written to."""

    def fact(data: Dataset) -> None:
        codes = data.codes.copy(order="F")
        handed = Dataset.trusted(data.names, data.states, codes)
        codes.flags.writeable = True
        learn(subject, handed)
        if not np.array_equal(data.codes, codes):
            raise Failed("it changed the data that it was given", subject.asked(data))

    holds_on(ordinary(), fact)


def check_same_stream(subject: Subject) -> None:
    """The same data and the same stream give the same answer, whatever was learned in between."""

    def fact(data: Dataset) -> None:
        first, second = learn(subject, data), learn(subject, data)
        learn(subject, data.first(data.n_rows // 2))
        if not (_is_same(first, second) and _is_same(first, learn(subject, data))):
            raise Failed("another call with the same stream gave another answer", subject.asked(data))

    holds_on(ordinary(), fact)


def _learn(subject: Subject, data: Dataset) -> None:
    learn(subject, data)


def _fault_of_sort(returns: str, answer: Answer) -> str | None:
    graph = answer.graph
    if returns == "dag" and not graph.is_directed:
        return "it declares a DAG but returned an undirected edge"
    if returns == "skeleton" and graph.directed.any():
        return "it declares a skeleton but returned a directed edge"
    # A directed cycle is the business of another check.
    if returns == "cpdag" and graph.is_acyclic and class_of(graph) != (graph, True):
        return "it declares a CPDAG, but what it returned is the CPDAG of no DAG"
    return _fault_of_probabilities(answer)


def _fault_of_probabilities(answer: Answer) -> str | None:
    if answer.p_edge is None:
        return None
    p = answer.graph.n_variables
    probability = np.asarray(answer.p_edge)
    is_sound = (
        probability.shape == (p, p)
        and bool((probability >= 0).all() and (probability <= 1).all())
        and np.array_equal(probability, probability.T)
    )
    return None if is_sound else "its edge probabilities are no symmetric matrix of numbers from 0 to 1"


def _is_same(first: Answer, second: Answer) -> bool:
    if first.graph != second.graph or (first.p_edge is None) != (second.p_edge is None):
        return False
    return first.p_edge is None or np.array_equal(first.p_edge, np.asarray(second.p_edge))
