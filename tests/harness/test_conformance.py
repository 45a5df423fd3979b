"""Conformance: the built-in learners pass, and for every check there is a learner that it catches.

What is checked against is the bad learner itself, whose fault is known, and scipy for what the data hold.
"""

from __future__ import annotations

import hashlib
import itertools
import os
import random
import signal
import subprocess
import sys
import tempfile
import threading
import time
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from scipy.stats import binom, binomtest, chi2, chi2_contingency

from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from harness.conformance import inputs
from harness.conformance.checks import CHECKS, fact_of, run_check, run_checks
from harness.conformance.finding import MOST_FALSE_EDGES
from harness.conformance.results import CheckRecord, Failed, Result, Skipped
from harness.conformance.shrinking import MAX_TRIALS, holds_on
from harness.conformance.subject import Subject, answer_to
from harness.learners.builtin import BUILT_IN, built_in
from harness.learners.marginal import pairwise
from harness.learners.specification import Specification, learner, specification_of
from harness.records import Answer, Declined


def found(check: str, function: Callable[..., Any], **settings: Any) -> CheckRecord:
    """Run one check of a function, declared a learner or not."""
    return run_check(check, specification_of(function), settings)


def size(record: CheckRecord) -> tuple[int, int]:
    """Return rows and variables of what a failure is shown on."""
    data = record.calls[0].data
    return data.n_rows, data.n_variables


class TestBuiltIn:
    """Every learner that comes with the package."""

    @pytest.mark.parametrize("check", CHECKS)
    @pytest.mark.parametrize("method", BUILT_IN)
    def test_conforms(self, method: str, check: str) -> None:
        """It passes, or the check says why it says nothing, or the learner why it need not pass."""
        record = run_check(check, built_in(method))

        assert record.result is not Result.FAILED, record.reason
        assert (record.reason == "") == (record.result is Result.PASSED)
        assert (record.result is Result.EXPECTED) <= (check in built_in(method).exempt)

    @pytest.mark.parametrize("method", ["pairwise", "chow-liu", "pc", "hill-climbing"])
    def test_little_is_skipped(self, method: str) -> None:
        """What is skipped does not apply to what is declared; nothing is declined."""
        records = [run_check(name, built_in(method)) for name in CHECKS]

        skipped = {record.check for record in records if record.result is Result.SKIPPED}
        assert skipped <= {"acyclic", "v-structure", "missing-cells", "told-knowledge"}

    @pytest.mark.parametrize("check", ["independent-columns", "strong-pair", "v-structure"])
    @pytest.mark.parametrize(
        ("method", "settings"),
        [
            ("pairwise", {"alpha": 0.05, "test": "pearson"}),
            ("pc", {"alpha": 0.05}),
            ("pc", {"alpha": 1e-6}),
            ("hill-climbing", {"score": "bdeu"}),
            ("hill-climbing", {"score": "k2", "restarts": 2}),
        ],
    )
    def test_other_settings(self, method: str, settings: dict[str, Any], check: str) -> None:
        """What is found is also found, and no more, with other settings that are sound."""
        record = run_check(check, built_in(method), settings)

        assert record.result in (Result.PASSED, Result.SKIPPED), record.reason

    def test_settings_count(self) -> None:
        """A test at level 20 % joins too many independent columns."""
        record = run_check("independent-columns", built_in("pairwise"), {"alpha": 0.2})

        assert record.result is Result.FAILED
        assert {"alpha": 0.2} == record.calls[0].settings


# Bad learners -------------------------------------------------------------------------------------------


def joined(data: Dataset, directed: Any = (), undirected: Any = ()) -> Graph:
    """Join positions of columns."""
    names = data.names
    return Graph.from_edges(
        names, [(names[i], names[j]) for i, j in directed], [(names[i], names[j]) for i, j in undirected]
    )


def empty(data: Dataset) -> Graph:
    return Graph.from_edges(data.names)


def all_pairs(data: Dataset) -> list[tuple[int, int]]:
    return list(itertools.combinations(range(data.n_variables), 2))


def other_names(data: Dataset) -> Graph:
    return Graph.from_edges(["rain", "wet"])


def one_node_too_many(data: Dataset) -> nx.DiGraph[str]:
    return nx.DiGraph([(data.names[0], "intercept")])


def unknown_name_from_five_on(data: Dataset) -> pd.DataFrame:
    target = "intercept" if data.n_variables >= 5 else data.names[0]
    return pd.DataFrame({"source": [data.names[-1]], "target": [target]})


def a_number(data: Dataset) -> int:
    return 42


@learner("half directed", returns="dag")
def half_directed(data: Dataset) -> Graph:
    return joined(data, undirected=all_pairs(data)[:1])


@learner("directed skeleton", returns="skeleton")
def directed_skeleton(data: Dataset) -> Graph:
    return joined(data, directed=all_pairs(data)[:1])


@learner("no class", returns="cpdag")
def no_class(data: Dataset) -> Graph:
    return joined(data, directed=all_pairs(data)[:1])  # a lone arc is compelled in no class


def lopsided_probabilities(data: Dataset) -> Answer:
    return Answer(empty(data), np.triu(np.full((data.n_variables,) * 2, 0.5), 1))


@learner("cyclic", returns="dag")
def cyclic(data: Dataset) -> Graph:
    return joined(data, directed=[(0, 1), (1, 2), (2, 0)] if data.n_variables > 2 else [])


@learner("cyclic class", returns="cpdag")
def cyclic_class(data: Dataset) -> Graph:
    return cyclic(data)


def sorts_in_place(data: Dataset) -> Graph:
    data.codes.sort(axis=0)
    return empty(data)


def makes_writeable(data: Dataset) -> Graph:
    data.codes.flags.writeable = True
    data.codes[0, -1] ^= 1
    return empty(data)


def draws_afresh(data: Dataset) -> Graph:
    is_edge = np.random.default_rng().random(len(all_pairs(data))) < 0.5
    return joined(data, undirected=itertools.compress(all_pairs(data), is_edge))


N_CALLS = itertools.count()


def alternates(data: Dataset) -> Graph:
    return joined(data, undirected=all_pairs(data)[: next(N_CALLS) % 2])


LAST_ROWS = [0]


def remembers(data: Dataset) -> Graph:
    before, LAST_ROWS[0] = LAST_ROWS[0], data.n_rows
    return joined(data, undirected=all_pairs(data)[: before > 0 and before < data.n_rows])


def first_two_columns(data: Dataset) -> Graph:
    return joined(data, undirected=all_pairs(data)[:1])


def codes_as_numbers(data: Dataset) -> Graph:
    means = data.codes.mean(axis=0)
    return joined(data, undirected=[(i, j) for i, j in all_pairs(data) if means[i] > 0.5 < means[j]])


def random_arcs(data: Dataset, *, rng: np.random.Generator) -> Graph:
    is_edge = rng.random(len(all_pairs(data))) < 0.15
    return joined(data, directed=itertools.compress(all_pairs(data), is_edge))


def everything(data: Dataset) -> Graph:
    return joined(data, undirected=all_pairs(data))


def declines(data: Dataset) -> Graph:
    raise Declined("there is no licence for this machine")


def only_with_the_first(data: Dataset) -> Graph:
    return joined(data, undirected=[(i, j) for i, j in all_pairs(data) if i == 0])


def undirected(data: Dataset) -> Graph:
    return pairwise(data)


def all_into_the_last(data: Dataset) -> Graph:
    skeleton = pairwise(data, alpha=1e-6).skeleton
    last = data.n_variables - 1
    return joined(data, directed=[(i, last) for i in range(last) if skeleton[i, last]])


def all_out_of_the_centre(data: Dataset) -> Graph:
    skeleton = pairwise(data, alpha=1e-6).skeleton
    centre = int(skeleton.sum(axis=0).argmax())
    return joined(data, directed=[(centre, j) for j in np.flatnonzero(skeleton[centre]).tolist()])


def needs_a_second_column(data: Dataset) -> Graph:
    assert data.names[1]
    return empty(data)


def needs_a_third_column(data: Dataset) -> Graph:
    if data.n_variables == 2:
        raise IndexError("there is no third column")
    return empty(data)


def divides_by_the_variance(data: Dataset) -> Graph:
    if (data.codes.var(axis=0) == 0).any():
        raise ZeroDivisionError("a column has no variance")
    return empty(data)


def inverts_the_covariance(data: Dataset) -> Graph:
    codes = data.codes.astype(float)
    if data.n_variables > 1 and codes.var(axis=0).all():
        np.linalg.inv(np.round(np.cov(codes.T, bias=True), 12))
    return empty(data)


def takes_seen_for_declared(data: Dataset) -> Graph:
    for j in range(data.n_variables):
        counts = np.unique(data.codes[:, j], return_counts=True)[1]
        counts + np.zeros(data.cardinalities[j])
    return empty(data)


def needs_fifty_rows(data: Dataset) -> Graph:
    if data.n_rows < 50:
        raise ValueError(f"{data.n_rows} rows are too few")
    return empty(data)


@learner("missing as a state", missing=True)
def missing_as_a_state(data: Dataset) -> Graph:
    for j, r in enumerate(data.cardinalities.tolist()):
        np.zeros(r)[data.codes[:, j]]
    return empty(data)


def counts_to_a_hundred(data: Dataset) -> Graph:
    np.zeros(100)[data.n_variables - 1] = 1
    return empty(data)


def kills_its_process_when_large(data: Dataset) -> Graph:
    if data.n_variables > 12:
        os.kill(os.getpid(), signal.SIGSEGV)
    return empty(data)


def exits_when_large(data: Dataset) -> Graph:
    if data.n_variables > 12:
        os._exit(3)
    return empty(data)


@learner("two threads too many")
def two_threads_too_many(data: Dataset) -> Graph:
    block = bytes(100 << 20)
    threads = [threading.Thread(target=hashlib.sha256, args=(block,)) for _ in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return empty(data)


CAUGHT: list[tuple[str, Callable[..., Any], str, tuple[int, int]]] = [
    # Check, learner, what the reason begins with, rows and variables of what is kept at most.
    ("own-variables", other_names, "The graph is not over the data's variables", (1, 1)),
    ("own-variables", one_node_too_many, "The graph has the node 'intercept'", (1, 1)),
    ("own-variables", unknown_name_from_five_on, "The edge 'x", (1, 5)),
    ("own-variables", a_number, "A learner must return a Graph", (1, 1)),
    ("declared-sort", a_number, "A learner must return a Graph", (1, 1)),
    ("declared-sort", half_directed, "It declares a DAG but returned an undirected edge.", (1, 2)),
    ("declared-sort", directed_skeleton, "It declares a skeleton but returned a directed edge.", (1, 2)),
    ("declared-sort", no_class, "It declares a CPDAG, but what it returned is the CPDAG of no DAG.", (1, 2)),
    ("declared-sort", lopsided_probabilities, "Its edge probabilities are no symmetric matrix", (1, 2)),
    ("acyclic", cyclic, "The answer has a directed cycle.", (1, 3)),
    ("acyclic", cyclic_class, "The answer has a directed cycle.", (1, 3)),
    ("input-unchanged", sorts_in_place, "It changed the data that it was given.", (3, 1)),
    ("input-unchanged", makes_writeable, "It changed the data that it was given.", (1, 1)),
    ("same-stream", draws_afresh, "Another call with the same stream gave another answer.", (1, 4)),
    ("same-stream", alternates, "Another call with the same stream gave another answer.", (1, 8)),
    ("same-stream", remembers, "Another call with the same stream gave another answer.", (100, 2)),
    ("permuted-columns", first_two_columns, "Permuted columns give another answer: ", (200, 3)),
    ("relabelled-states", codes_as_numbers, "Relabelled states give another answer:", (200, 2)),
    ("independent-columns", random_arcs, "It joined ", (1000, 10)),
    ("independent-columns", everything, "It joined 540 of 540 pairs of independent columns;", (1000, 10)),
    ("independent-columns", declines, "It declined: there is no licence", (1000, 10)),
    ("strong-pair", empty, "It did not join the strongly dependent columns x1 and x2.", (200, 2)),
    ("strong-pair", only_with_the_first, "It did not join the strongly dependent columns x7 and x3", (330, 8)),
    ("strong-pair", random_arcs, "It did not join the strongly dependent columns", (330, 8)),
    ("strong-pair", declines, "It declined: there is no licence", (200, 2)),
    ("v-structure", empty, "It did not direct a strong v-structure.", (5000, 3)),
    ("v-structure", undirected, "It did not direct a strong v-structure.", (5000, 3)),
    ("v-structure", all_out_of_the_centre, "It did not direct a strong v-structure.", (5000, 3)),
    ("v-structure", all_into_the_last, "It took a fork for a v-structure.", (5000, 3)),
    ("v-structure", declines, "It declined: there is no licence", (5000, 3)),
    ("one-variable", needs_a_second_column, "It raised IndexError: tuple index out of range.", (1, 1)),
    ("two-variables", needs_a_third_column, "It raised IndexError: there is no third column.", (1, 2)),
    ("constant-columns", divides_by_the_variance, "It raised ZeroDivisionError: a column has no", (1, 1)),
    ("identical-columns", inverts_the_covariance, "It raised LinAlgError: Singular matrix.", (2, 2)),
    ("unseen-states", takes_seen_for_declared, "It raised ValueError: operands could not be broad", (3, 1)),
    ("ten-rows", needs_fifty_rows, "It raised ValueError: 1 rows are too few.", (1, 1)),
    ("missing-cells", missing_as_a_state, "It raised IndexError: index 255 is out of bounds", (1, 1)),
    ("many-variables", counts_to_a_hundred, "It raised IndexError: index 1", (500, 150)),
    ("many-variables", kills_its_process_when_large, "Its process ended with signal 11.", (500, 50)),
    ("time-limit", exits_when_large, "Its process ended with exit code 3.", (2000, 200)),
    ("declared-threads", two_threads_too_many, "It declares threads = 1, but ", (200, 4)),
]


@pytest.mark.parametrize(
    ("check", "function", "reason", "largest"), CAUGHT, ids=[f"{c}-{f.__name__}" for c, f, *_ in CAUGHT]
)
def test_bad_learner_is_caught(
    check: str, function: Callable[..., Any], reason: str, largest: tuple[int, int]
) -> None:
    """The check fails, says what is wrong, and keeps a small input."""
    record = found(check, function)

    assert (record.result, record.reason[: len(reason)]) == (Result.FAILED, reason)
    assert size(record) <= largest
    assert size(record)[1] <= largest[1]
