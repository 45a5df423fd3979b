# ruff: noqa: T201 - some learners here print
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
import psutil
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
from harness.conformance.told import contradiction
from harness.conformance.traces import TIGHT
from harness.knowledge import Knowledge
from harness.learners.builtin import BUILT_IN, built_in
from harness.learners.marginal import pairwise
from harness.learners.specification import learner, specification_of
from harness.records import Answer, Declined, Limits


def found(check: str, function: Callable[..., Any], **settings: Any) -> CheckRecord:
    """Run one check of a function, declared a learner or not."""
    return run_check(check, specification_of(function), settings)


def size(record: CheckRecord) -> tuple[int, int]:
    """Return rows and variables of what a failure is shown on."""
    data = record.calls[0].data
    return data.n_rows, data.n_variables


NOT_FOR_ALL = ("acyclic", "v-structure", "missing-cells", "told-knowledge")


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
        if record.result is Result.SKIPPED:
            is_declined = check == "many-variables" and record.reason.startswith("It declined: ")
            assert is_declined or check in NOT_FOR_ALL

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
        assert record.calls[0].settings == {"alpha": 0.2}


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
    block = bytes(150 << 20)
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
    (
        "strong-pair",
        only_with_the_first,
        "It did not join the strongly dependent columns x7 and x3",
        (330, 8),
    ),
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
    check: str,
    function: Callable[..., Any],
    reason: str,
    largest: tuple[int, int],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """The check fails, says what is wrong, and keeps a small input."""
    monkeypatch.setattr("harness.conformance.shrinking.MAX_SECONDS", 1.5)

    record = found(check, function)

    assert (record.result, record.reason[: len(reason)]) == (Result.FAILED, reason)
    assert size(record) <= largest
    assert size(record)[1] <= largest[1]


# Processes ----------------------------------------------------------------------------------------------


def goes_on_for_ever(data: Dataset) -> Graph:
    while True:
        time.sleep(0.01)


def does_not_hear(data: Dataset) -> Graph:
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    return goes_on_for_ever(data)


def starts_what_does_not_end(data: Dataset) -> Graph:
    subprocess.Popen(["sleep", "60"], start_new_session=True)
    return goes_on_for_ever(data)


TOKEN = "ARCASSAY_TEST_TOKEN"  # in the environment of every program that a learner here starts


@pytest.fixture
def scratch(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """Give the folder for temporary files, and look in the end that no file and no process is left."""
    token = f"{os.getpid()}-{time.monotonic_ns()}"
    monkeypatch.setenv(TOKEN, token)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    before = set(psutil.Process().children(recursive=True))
    yield tmp_path
    assert list(tmp_path.iterdir()) == []
    assert set(psutil.Process().children(recursive=True)) == before
    assert marked(token) == []


def marked(token: str) -> list[psutil.Process]:
    """Return the living processes that were started with a token in their environment."""
    found_ones = []
    for process in psutil.process_iter():
        try:
            if process.environ().get(TOKEN) == token and process.status() != psutil.STATUS_ZOMBIE:
                found_ones.append(process)
        except psutil.Error:
            continue
    return found_ones


class TestTimeLimit:
    """`time-limit`."""

    def test_being_stopped_is_no_fault(self, scratch: Path) -> None:
        """A learner that would never end, but ends when asked to, keeps to its limit."""
        assert found("time-limit", goes_on_for_ever).result is Result.PASSED

    @pytest.mark.parametrize(
        ("function", "reason"),
        [
            (does_not_hear, "It went on for 1 s after it had been asked to end."),
            (starts_what_does_not_end, "What it had started went on after its end: sleep."),
        ],
    )
    def test_caught(self, function: Callable[..., Any], reason: str, scratch: Path) -> None:
        """Who does not hear the request to end, or leaves somebody working, fails; all are ended."""
        record = found("time-limit", function)

        assert (record.result, record.reason, size(record)) == (Result.FAILED, reason, (200, 4))

    def test_memory_counts(self, scratch: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        """A learner that takes more memory than its limit is ended, and fails."""
        monkeypatch.setattr("harness.conformance.traces.TIGHT", Limits(seconds=60, memory_mb=100))

        def hogs(data: Dataset) -> Graph:
            block = np.ones(150 << 20, dtype=np.uint8)
            time.sleep(60)
            return joined(data, undirected=all_pairs(data)[: len(block)])

        record = found("time-limit", hogs)

        assert (record.result, record.reason) == (Result.FAILED, "It took more than 100 MB of memory.")


def leaves_a_file(data: Dataset) -> Graph:
    Path("notes.txt").write_text("left")
    return empty(data)


def leaves_a_temporary_folder(data: Dataset) -> Graph:
    tempfile.mkdtemp(prefix="left-")
    return empty(data)


def leaves_a_process(data: Dataset) -> Graph:
    subprocess.Popen(["sleep", "60"])
    return empty(data)


def leaves_a_daemon(data: Dataset) -> Graph:
    if not os.fork():  # fork, own session, fork again: Stevens (1992), from memory
        os.setsid()
        if not os.fork():
            os.execvp("sleep", ["sleep", "60"])
        os._exit(0)
    os.wait()
    return empty(data)


def returns_twice(data: Dataset) -> Graph:
    os.fork()
    return empty(data)


def prints(data: Dataset) -> Graph:
    print("scoring families ...")
    return empty(data)


def writes_below_python(data: Dataset) -> Graph:
    os.write(2, b"some C library says hello\n")
    return empty(data)


def warns(data: Dataset) -> Graph:
    warnings.warn("the tables are sparse", stacklevel=1)
    return empty(data)


def changes_the_folder(data: Dataset) -> Graph:
    os.chdir("/")
    return empty(data)


def sets_a_variable(data: Dataset) -> Graph:
    os.environ["LEARNER_CACHE"] = "on"
    return empty(data)


def draws_globally(data: Dataset) -> Graph:
    np.random.rand()  # noqa: NPY002
    return empty(data)


def seeds_globally(data: Dataset) -> Graph:
    np.random.seed(1)  # noqa: NPY002
    random.seed(1)
    return empty(data)


def silences_warnings(data: Dataset) -> Graph:
    warnings.simplefilter("ignore")
    return empty(data)


def silences_numpy(data: Dataset) -> Graph:
    np.seterr(all="ignore")
    return empty(data)


def ends_the_process(data: Dataset) -> Graph:
    sys.exit(3)


LEFT = [
    (leaves_a_file, "It left files: notes.txt."),
    (leaves_a_temporary_folder, "It left files: left-"),
    (leaves_a_process, "It left processes: sleep"),
    (leaves_a_daemon, "It left processes: sleep"),
    (returns_twice, "It left processes: "),
    (prints, "It wrote to standard output or error: scoring families ..."),
    (writes_below_python, "It wrote to standard output or error: some C library says hello."),
    (warns, f"It wrote to standard output or error: {__file__}:"),
    (changes_the_folder, "It changed what is not its own: the working folder."),
    (sets_a_variable, "It changed what is not its own: the environment."),
    (draws_globally, "It changed what is not its own: numpy's global random state."),
    (
        seeds_globally,
        "It changed what is not its own: numpy's global random state, Python's global random state.",
    ),
    (silences_warnings, "It changed what is not its own: the warnings filters."),
    (silences_numpy, "It changed what is not its own: numpy's way with floating-point errors."),
    (ends_the_process, "The learner ended the process (exit code 3)."),
]


class TestNothingLeft:
    """`nothing-left`."""

    @pytest.mark.parametrize(("function", "reason"), LEFT, ids=[function.__name__ for function, _ in LEFT])
    def test_caught(self, function: Callable[..., Any], reason: str, scratch: Path) -> None:
        """What is left or changed is named, and taken away."""
        record = found("nothing-left", function)

        assert (record.result, record.reason[: len(reason)]) == (Result.FAILED, reason)
        assert size(record) == (200, 4)

    def test_tidy_learners_pass(self, scratch: Path) -> None:
        """Files that are removed, processes that are waited for and first imports are nobody's fault."""

        def tidy(data: Dataset) -> Graph:
            with tempfile.TemporaryDirectory() as folder:
                Path(folder, "rows.csv").write_text("x1,x2\n")
                subprocess.run(["true"], check=True, cwd=folder)
            with warnings.catch_warnings(), np.errstate(all="ignore"):
                warnings.simplefilter("ignore")
                warnings.warn("of no consequence", stacklevel=1)
            if not hasattr(tidy, "is_imported"):  # as some packages do when they are imported
                print("welcome")
                warnings.simplefilter("always", FutureWarning)
                tidy.is_imported = True  # type: ignore[attr-defined]
            return empty(data)

        assert found("nothing-left", tidy).result is Result.PASSED


def shares_with_declared_threads(data: Dataset) -> Graph:
    return two_threads_too_many(data)


class TestDeclaredThreads:
    """`declared-threads`."""

    def test_declared_threads_may_work(self) -> None:
        """Three threads at work are right where four are declared: three and the one that waits."""
        function = learner("shares", threads=4)(shares_with_declared_threads)

        assert found("declared-threads", function).result is Result.PASSED

    def test_waiting_is_not_working(self) -> None:
        """A learner that waits for one external program, or for threads that sleep, uses one at a time."""

        def waits(data: Dataset) -> Graph:
            sleeping = [threading.Thread(target=time.sleep, args=(0.2,)) for _ in range(5)]
            for thread in sleeping:
                thread.start()
            subprocess.run([sys.executable, "-S", "-c", "sum(range(10**6))"], check=True)
            for thread in sleeping:
                thread.join()
            return empty(data)

        assert found("declared-threads", waits).result is Result.PASSED

    def test_linear_algebra_is_not_counted(self) -> None:
        """The threads of numpy's own pool are held down by the harness, not by the learner."""

        def multiplies(data: Dataset) -> Graph:
            square = np.ones((600, 600))
            for _ in range(20):
                square = square @ square / 600
            return empty(data)

        assert found("declared-threads", multiplies).result is Result.PASSED


@pytest.mark.slow
def test_nothing_survives_the_caller(tmp_path: Path) -> None:
    """When the process that checks is killed, so is the learner's."""
    script = """
import os, time
from pathlib import Path
from harness.conformance.isolation import observe
from harness.records import Limits

def job():
    Path(os.environ["TOLD"]).write_text(str(os.getpid()))
    time.sleep(600)

observe(job, limits=Limits())
"""
    told = tmp_path / "pid"
    environment = {**os.environ, "TOLD": str(told), "TMPDIR": str(tmp_path)}
    caller = subprocess.Popen([sys.executable, "-c", script], env=environment)
    wait_until(lambda: told.exists() and told.read_text())
    pid = int(told.read_text())
    assert psutil.pid_exists(pid)

    caller.kill()
    caller.wait()

    wait_until(lambda: not psutil.pid_exists(pid))


def wait_until(claim: Callable[[], object]) -> None:
    end = time.monotonic() + 60
    while not claim():
        assert time.monotonic() < end
        time.sleep(0.02)


# Knowledge ----------------------------------------------------------------------------------------------


class TestContradiction:
    """What an answer may make of what was told: a -> b is there, a -> c is not, b and d are not adjacent."""

    KNOWLEDGE = Knowledge.of("abcd", arcs=[("a", "b")], excluded=[("a", "c"), ("b", "d"), ("d", "b")])

    @pytest.mark.parametrize(
        ("directed", "undirected"),
        [("ab", ""), ("ab ca", ""), ("", "ab ac"), ("ab cb ad", "cd")],
    )
    def test_heeded(self, directed: str, undirected: str) -> None:
        """The arc in its direction or undirected, and what is not excluded both ways."""
        graph = Graph.from_edges("abcd", map(tuple, directed.split()), map(tuple, undirected.split()))  # type: ignore[arg-type]

        assert contradiction(graph, self.KNOWLEDGE) is None

    @pytest.mark.parametrize(
        ("directed", "undirected", "fault"),
        [
            ("", "", "an arc that was told is not in the answer: a -> b"),
            ("ba", "", "an arc that was told has the other direction: a -> b"),
            ("ab ac", "", "an arc that was excluded is in the answer: a -> c"),
            ("ab bd", "", "an arc that was excluded is in the answer: b -> d"),
            ("ab", "bd", "an arc that was excluded is in the answer: b -> d"),
        ],
    )
    def test_not_heeded(self, directed: str, undirected: str, fault: str) -> None:
        """The arc missing or turned, an excluded arc, an edge between what is not adjacent."""
        graph = Graph.from_edges("abcd", map(tuple, directed.split()), map(tuple, undirected.split()))  # type: ignore[arg-type]

        assert contradiction(graph, self.KNOWLEDGE) == fault


def heeds(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
    arrow = pairwise(data).arrow.copy()
    if knowledge is not None:
        arrow |= knowledge.arcs | knowledge.arcs.T
        arrow &= ~knowledge.excluded
    return Graph(data.names, arrow)


def does_not_look(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
    return pairwise(data)


def turns_arcs(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
    return Graph(data.names, empty(data).arrow if knowledge is None else knowledge.arcs.T)


def leaves_arcs_out(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
    return empty(data)


def cannot_be_told(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
    if knowledge is not None and knowledge.arcs.any():
        raise Declined("arcs cannot be told")
    return pairwise(data)


class TestToldKnowledge:
    """`told-knowledge`."""

    def test_passed(self) -> None:
        """Who puts in what is told and leaves out what is excluded passes."""
        assert found("told-knowledge", heeds).result is Result.PASSED

    @pytest.mark.parametrize(
        ("function", "reason"),
        [
            (does_not_look, "An arc that was told is not in the answer: x2 -> x1."),
            (turns_arcs, "An arc that was told has the other direction: x1 -> x3."),
            (leaves_arcs_out, "An arc that was told is not in the answer: x1 -> x3."),
            (cannot_be_told, "It declined what it was told: arcs cannot be told."),
        ],
    )
    def test_caught(self, function: Callable[..., Any], reason: str) -> None:
        """Who does not fails, and what was told is kept with the data."""
        record = found("told-knowledge", function)

        assert (record.result, record.reason) == (Result.FAILED, reason)
        assert size(record) == (5000, 3)
        assert record.calls[0].knowledge is not None


# Records, exemptions, names -----------------------------------------------------------------------------


class TestRecords:
    """What a check says."""

    def test_facts(self) -> None:
        """Every check has a name without spaces and says its fact in one sentence."""
        for name in CHECKS:
            assert name == name.lower().replace("_", "-").strip()
            assert fact_of(name).endswith(".")
            assert len(fact_of(name)) < 110

    def test_failure_can_be_shown_again(self) -> None:
        """Making the kept call again shows the failure, with the same stream and settings."""

        def fails_on_three_states(data: Dataset, *, least: int = 2) -> Graph:
            if data.cardinalities.max() > least:
                raise ValueError("too many states")
            return empty(data)

        subject = Subject(specification_of(fails_on_three_states), {"least": 2})
        record = run_check("same-stream", subject.specification, subject.settings)

        assert (record.result, size(record)) == (Result.FAILED, (1, 1))
        with pytest.raises(ValueError, match="too many states"):
            answer_to(subject, record.calls[0])

    def test_both_datasets_of_a_comparison_are_kept(self) -> None:
        """Where two answers differ, both calls are there, and their answers differ."""
        subject = Subject(specification_of(first_two_columns))
        record = run_check("permuted-columns", subject.specification)

        first, second = record.calls
        assert sorted(first.data.codes.T.tolist()) == sorted(second.data.codes.T.tolist())
        assert first.data.codes.tolist() != second.data.codes.tolist()

    def test_one_at_a_time(self) -> None:
        """A record is there before the next check begins."""
        n_calls = 0

        def counts(data: Dataset) -> Graph:
            nonlocal n_calls
            n_calls += 1
            return empty(data)

        records = run_checks(specification_of(counts))
        assert n_calls == 0
        first = next(records)

        assert (first.check, first.result) == ("own-variables", Result.PASSED)
        before, second = n_calls, next(records)
        assert n_calls > before
        assert (second.check, second.seconds > 0) == ("declared-sort", True)

    def test_only_some(self) -> None:
        """Only the named checks are run, in the order of their names' mention."""
        records = run_checks(built_in("no-arcs"), only=["ten-rows", "acyclic"])

        assert [record.check for record in records] == ["ten-rows", "acyclic"]

    def test_output_does_not_show(self, capfd: pytest.CaptureFixture[str]) -> None:
        """What a learner prints and warns of does not get between the records."""

        def talks(data: Dataset) -> Graph:
            print("progress")
            return warns(data)

        record = found("ten-rows", talks)

        assert record.result is Result.PASSED
        assert capfd.readouterr() == ("", "")


class TestExemptions:
    """What a learner declares about itself."""

    def test_expected(self) -> None:
        """A check that fails is expected to, with the declared reason; what shows it is kept."""
        function = learner("silent", exempt={"strong-pair": "it says nothing, on principle"})(empty)

        record = found("strong-pair", function)

        assert (record.result, record.reason) == (Result.EXPECTED, "It says nothing, on principle.")
        assert size(record) == (200, 2)

    def test_passing_is_passing(self) -> None:
        """A check that passes in spite of an exemption has passed."""
        function = learner("tidy", exempt={"nothing-left": "it writes files"})(lambda data: empty(data))

        record = found("nothing-left", function)

        assert (record.result, record.reason) == (Result.PASSED, "")

    def test_only_that_check(self) -> None:
        """An exemption from one check is none from another."""
        function = learner("silent", exempt={"strong-pair": "on principle"})(lambda data: empty(data))

        assert found("v-structure", function).result is Result.FAILED

    def test_unknown_exemption(self) -> None:
        """An exemption from a check that does not exist is an error in one line, before anything is run."""
        specification = specification_of(learner("mine", exempt={"strong-pairs": "why not"})(a_number))

        with pytest.raises(InputError, match="Did you mean 'strong-pair'") as caught:
            run_checks(specification)

        (line,) = caught.value.faults
        assert line.startswith("learner 'mine': exempt: unknown check 'strong-pairs'; accepted: acyclic, ")
        with pytest.raises(InputError, match="unknown check"):
            run_check("ten-rows", specification)

    def test_unknown_check(self) -> None:
        """A check that does not exist is an error in one line that names the nearest."""
        with pytest.raises(InputError, match=r"unknown check 'v-structures'; .* Did you mean 'v-structure'"):
            run_checks(built_in("pc"), only=["ten-rows", "v-structures"])


class TestSkipping:
    """What cannot be applied."""

    @pytest.mark.parametrize(
        ("check", "method", "reason"),
        [
            ("acyclic", "pairwise", "It declares a skeleton, which has no directions."),
            ("acyclic", "pc", "It declares a PDAG, which on finite data may contradict itself."),
            ("v-structure", "pairwise", "It declares a skeleton, which has no directions."),
            ("missing-cells", "pc", "It does not declare that it takes missing cells."),
            ("told-knowledge", "no-arcs", "It takes no knowledge."),
        ],
    )
    def test_declared(self, check: str, method: str, reason: str) -> None:
        """What a learner does not declare is not asked of it."""
        record = run_check(check, built_in(method))

        assert (record.result, record.reason) == (Result.SKIPPED, reason)

    @pytest.mark.parametrize(
        "check", [name for name in CHECKS if name not in ("missing-cells", "told-knowledge")]
    )
    def test_who_declines_everything_does_not_look_good(self, check: str) -> None:
        """Nothing is passed by declining, and what nobody may decline is failed."""
        record = run_check(check, specification_of(learner("lazy", returns="dag")(declines)))

        must = ("independent-columns", "strong-pair", "v-structure")
        assert record.result is (Result.FAILED if check in must else Result.SKIPPED)
        assert record.reason == "It declined: there is no licence for this machine."

    def test_declining_some_inputs_is_fine(self) -> None:
        """What is not declined is judged."""

        def declines_odd_data(data: Dataset) -> Graph:
            if data.n_rows < 100 or data.n_variables > 12:
                raise Declined("too few rows or too many variables")
            return pairwise(data)

        results = {
            name: found(name, declines_odd_data).result
            for name in ("own-variables", "same-stream", "ten-rows")
        }

        assert list(results.values()) == [Result.PASSED, Result.PASSED, Result.SKIPPED]

    @pytest.mark.slow
    def test_slow_is_not_unsound(self, monkeypatch: pytest.MonkeyPatch) -> None:
        """A learner that has no answer within the limit on 200 variables has neither passed nor failed."""
        monkeypatch.setattr("harness.conformance.hard_inputs.Limits", lambda: TIGHT)

        record = found("many-variables", goes_on_for_ever)

        assert (record.result, record.reason) == (Result.SKIPPED, "No answer within 0.5 s.")


# Shrinking ----------------------------------------------------------------------------------------------


class TestShrinking:
    """From a failing input to a small one."""

    def test_columns_that_matter_are_left(self) -> None:
        """Of 40 columns the two are left that a failure needs, and of 800 rows one."""
        data = inputs.dataset(np.zeros((800, 40)), [2] * 40)

        def fact(data: Dataset) -> None:
            if {"x7", "x31"} <= set(data.names):
                raise Failed(
                    f"it failed: on {data.n_rows} rows", Subject(specification_of(empty)).asked(data)
                )

        with pytest.raises(Failed) as caught:
            holds_on([data], fact)

        (asked,) = caught.value.calls
        assert (asked.data.names, asked.data.n_rows) == (("x7", "x31"), 1)
        assert str(caught.value) == "it failed: on 1 rows"

    def test_another_failure_does_not_count(self) -> None:
        """Shrinking does not slide from one fault into another."""

        def fact(data: Dataset) -> None:
            if data.n_rows < 100:
                raise Failed("too few rows", Subject(specification_of(empty)).asked(data))
            raise Failed("it failed", Subject(specification_of(empty)).asked(data))

        with pytest.raises(Failed, match="it failed") as caught:
            holds_on([inputs.dataset(np.zeros((800, 3)), [2] * 3)], fact)

        assert (caught.value.calls[0].data.n_rows, caught.value.calls[0].data.n_variables) == (100, 1)

    def test_bounded(self) -> None:
        """A fault that hangs on every column is looked into a bounded number of times."""
        n_trials = 0

        def fact(data: Dataset) -> None:
            nonlocal n_trials
            n_trials += 1
            if data.n_variables == 200:
                raise Failed("it failed", Subject(specification_of(empty)).asked(data))

        with pytest.raises(Failed):
            holds_on([inputs.dataset(np.zeros((2, 200)), [2] * 200)], fact)

        assert n_trials <= MAX_TRIALS + 1

    def test_smallest_first(self) -> None:
        """Inputs are tried in their order, and none after one that failed."""
        seen = []

        def fact(data: Dataset) -> None:
            seen.append(data.n_variables)
            if data.n_variables > 1:
                raise Failed("it failed", Subject(specification_of(empty)).asked(data))

        with pytest.raises(Failed):
            holds_on((inputs.dataset(np.zeros((1, p)), [2] * p) for p in (1, 2, 3)), fact)

        assert (seen[:2], max(seen)) == ([1, 2], 2)

    def test_all_declined(self) -> None:
        """A learner that declines every input is not judged, for its own reason."""

        def fact(data: Dataset) -> None:
            raise Declined("not today")

        with pytest.raises(Skipped, match="it declined: not today"):
            holds_on(inputs.ten_rows(), fact)


# What the data hold -------------------------------------------------------------------------------------


def g2(data: Dataset, i: int, j: int, given: int | None = None) -> tuple[float, float]:
    """Return statistic and p-value of scipy's G2 test, added up over the states of a third column."""
    statistic = df = 0.0
    for state in [None] if given is None else range(int(data.cardinalities[given])):
        kept = data.codes if state is None else data.codes[data.codes[:, given] == state]
        table = np.zeros(data.cardinalities[[i, j]])
        np.add.at(table, (kept[:, i], kept[:, j]), 1)
        part = chi2_contingency(table, lambda_="log-likelihood", correction=False)
        statistic, df = statistic + part.statistic, df + part.dof
    return statistic, float(chi2.sf(statistic, df))


class TestData:
    """The invented data hold what the checks rely on."""

    def test_strong_pairs(self) -> None:
        """Every strong pair has a p-value below 1e-30: no level anybody uses misses it."""
        for data, (i, j) in inputs.strong_pairs():
            assert g2(data, i, j)[1] < 1e-30

    @pytest.mark.parametrize("order", inputs.THREE_ORDERS)
    def test_collider(self, order: tuple[int, ...]) -> None:
        """The ends are exactly independent, everything else depends at a p-value below 1e-30."""
        data = inputs.with_counts(inputs.COLLIDER, order)
        x, y, z = (order.index(axis) for axis in range(3))

        assert data.n_rows == 5000
        assert g2(data, x, y)[0] == pytest.approx(0, abs=1e-9)
        assert max(g2(data, x, z)[1], g2(data, y, z)[1], g2(data, x, y, given=z)[1]) < 1e-30

    @pytest.mark.parametrize("order", inputs.THREE_ORDERS)
    def test_fork(self, order: tuple[int, ...]) -> None:
        """The ends are exactly independent given the centre, and strongly dependent without it."""
        data = inputs.with_counts(inputs.FORK, order)
        x, y, z = (order.index(axis) for axis in range(3))

        assert data.n_rows == 5000
        assert g2(data, x, y, given=z)[0] == pytest.approx(0, abs=1e-9)
        assert max(g2(data, x, z)[1], g2(data, y, z)[1], g2(data, x, y)[1]) < 1e-30

    def test_bound_on_false_edges(self) -> None:
        """Of 540 pairs, tests at 5 % join more than the bound with a probability below 1e-7."""
        data = list(inputs.independent_columns())
        n_pairs = sum(each.n_variables * (each.n_variables - 1) // 2 for each in data)

        assert (n_pairs, {each.n_rows for each in data}) == (540, {1000})
        assert binom.sf(MOST_FALSE_EDGES, n_pairs, 0.05) < 1e-7
        assert binom.sf(MOST_FALSE_EDGES, n_pairs, 0.053) < 1e-6

    def test_false_edges_are_binomial(self) -> None:
        """Tests at 5 % on 50 such twelve datasets: level at most .053, variance not above the binomial's.

        False-alarm rate 1e-6 each.
        """
        cardinalities = np.array([2, 3] * 5)
        rng = np.random.default_rng(29)
        totals = np.array(
            [
                sum(
                    pairwise(
                        inputs.dataset(rng.integers(0, cardinalities, (1000, 10)), cardinalities.tolist()),
                        alpha=0.05,
                    ).n_edges
                    for _ in range(12)
                )
                for _ in range(50)
            ]
        )

        assert binomtest(int(totals.sum()), 50 * 540, 0.053, alternative="greater").pvalue > 1e-6
        spread = ((totals - totals.mean()) ** 2).sum() / (540 * 0.05 * 0.95)
        assert chi2.sf(spread, 49) > 1e-6
        assert totals.max() <= MOST_FALSE_EDGES

    def test_same_every_time(self) -> None:
        """The data are the same whenever they are asked for."""
        for make in (inputs.every_kind, inputs.for_symmetry, inputs.independent_columns):
            assert list(make()) == list(make())

    def test_views_change_something(self) -> None:
        """Every permutation moves a column, and every relabelling every state of some column."""
        for data in inputs.for_symmetry():
            assert all(
                view.columns.tolist() != list(range(data.n_variables)) for view in inputs.reordered(data)
            )
            for view in inputs.relabelled(data):
                assert (view.mask(data).codes != data.codes).any(axis=0).all()
