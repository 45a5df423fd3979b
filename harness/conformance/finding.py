"""Checks that what is plain in the data is found, and what is not there is not.

A sound learner fails none of them but with a probability below 1e-6. Where that can be had by construction,
the counts of the data are exact: what is independent is so to the last row, and there is no chance in it.
The data are as small as that allows, so nothing is shrunk; and nobody may decline them.
"""

from __future__ import annotations

from collections.abc import Sequence

from generators.dataset import Dataset
from generators.graph import Graph
from harness.conformance.inputs import (
    COLLIDER,
    FORK,
    THREE_ORDERS,
    independent_columns,
    strong_pairs,
    with_counts,
)
from harness.conformance.results import Failed, Skipped
from harness.conformance.subject import Subject, compared, learn
from harness.records import Declined

# Twelve datasets have 540 pairs of columns. A test at 5 % joins each with that probability, and any two
# pairs are independent, so the number of edges has the binomial's mean, 27, and standard deviation, 5.06.
# Binomial(540, .05) exceeds 58 with probability 2.5e-8, and Binomial(540, .053) with 1.8e-7. The distance
# from there to 1e-6 is for what three or more pairs share, and G2 is a little above its nominal level.
MOST_FALSE_EDGES = 58


def check_independent_columns(subject: Subject) -> None:
    """Independent columns give nearly nothing: no more edges than tests at level 5 % would."""
    inputs = list(independent_columns())
    n_edges = [_graph(subject, data).n_edges for data in inputs]
    if sum(n_edges) > MOST_FALSE_EDGES:
        n_pairs = sum(data.n_variables * (data.n_variables - 1) // 2 for data in inputs)
        raise Failed(
            f"it joined {sum(n_edges)} of {n_pairs} pairs of independent columns; tests at level 5 % join "
            f"{n_pairs / 20:.0f}, and at most {MOST_FALSE_EDGES}",
            subject.asked(inputs[n_edges.index(max(n_edges))]),
        )


def check_strong_pair(subject: Subject) -> None:
    """Two strongly dependent columns are joined, alone and among independent ones."""
    for data, pair in strong_pairs():
        if not _graph(subject, data).skeleton[pair]:
            x, y = (data.names[j] for j in pair)
            raise Failed(f"it did not join the strongly dependent columns {x} and {y}", subject.asked(data))


def check_v_structure(subject: Subject) -> None:
    """A strong v-structure x -> z <- y is directed, and a fork x <- z -> y is not taken for one."""
    if subject.specification.returns == "skeleton":
        raise Skipped("it declares a skeleton, which has no directions")
    # A greedy search whose ties are decided by the order of the columns may begin with an arc out of z, from
    # where no single step leads on: weak, but sound. So one of three orders is enough; and the fork, in all
    # three, is what a learner fails on that directs everything into the same column.
    colliders = [with_counts(COLLIDER, order) for order in THREE_ORDERS]
    if not any(_has_collider(subject, *each) for each in zip(colliders, THREE_ORDERS, strict=True)):
        raise Failed("it did not direct a strong v-structure", subject.asked(colliders[0]))
    for order in THREE_ORDERS:
        fork = with_counts(FORK, order)
        if _has_collider(subject, fork, order):
            raise Failed("it took a fork for a v-structure", subject.asked(fork))


def _graph(subject: Subject, data: Dataset) -> Graph:
    try:
        return learn(subject, data).graph
    except Declined as refusal:
        raise Failed(f"it declined: {refusal}", subject.asked(data)) from refusal


def _has_collider(subject: Subject, data: Dataset, order: Sequence[int]) -> bool:
    graph = compared(subject, _graph(subject, data))
    x, y, z = (list(order).index(axis) for axis in range(3))
    directed = graph.directed
    return bool(directed[x, z] and directed[y, z] and not graph.skeleton[x, y])
