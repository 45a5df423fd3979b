"""Statements about a graph: what follows from them, what contradicts what, and how they are read."""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pytest

from generators.catalogue import published_network
from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from harness.knowledge import Knowledge, canonical, read_knowledge, read_statements
from harness.learners.builtin import BUILT_IN, built_in
from harness.learners.specification import call
from harness.studies.applying import learn

NAMES = ("age", "sex", "dose", "cure")


def pairs(names: tuple[str, ...], matrix: np.ndarray) -> set[tuple[str, str]]:
    return {(names[x], names[y]) for x, y in np.argwhere(matrix).tolist()}


def faults(**said: Any) -> list[str]:
    with pytest.raises(InputError) as caught:
        Knowledge.of(NAMES, **said)
    return list(caught.value.faults)


# What follows


def test_nothing_said_excludes_only_arcs_from_a_variable_to_itself() -> None:
    """Without statements every arc is possible and none is there."""
    known = Knowledge.of(NAMES)

    assert not known.arcs.any()
    assert np.array_equal(np.eye(4, dtype=bool), known.excluded)
    assert not known.directions.any()


def test_an_arc_excludes_its_reversal_and_every_arc_that_closes_a_cycle() -> None:
    """With age -> dose -> cure, none of the three arcs back is possible; cure -> sex is."""
    known = Knowledge.of(NAMES, arcs=[("age", "dose"), ("dose", "cure")])

    assert pairs(NAMES, known.excluded & ~np.eye(4, dtype=bool)) == {
        ("dose", "age"),
        ("cure", "dose"),
        ("cure", "age"),
    }
    assert pairs(NAMES, known.directions) == {("age", "dose"), ("dose", "cure"), ("age", "cure")}


def test_stages_exclude_arcs_back_in_time_and_say_nothing_of_others() -> None:
    """Within a stage everything is possible, and so it is for a variable that stands in none."""
    known = Knowledge.of(NAMES, stages=[["age"], ["dose", "cure"]])

    assert pairs(NAMES, known.excluded & ~np.eye(4, dtype=bool)) == {("dose", "age"), ("cure", "age")}


def test_time_runs_through_variables_without_a_stage() -> None:
    """With dose -> sex, sex cannot lead back to age: a path would run from the second stage to the first.

    To cure, which is later, it can lead, and cure to it.
    """
    known = Knowledge.of(NAMES, arcs=[("dose", "sex")], stages=[["age"], ["dose"], ["cure"]])

    assert pairs(NAMES, known.excluded & ~np.eye(4, dtype=bool)) == {
        *[("dose", "age"), ("cure", "age"), ("cure", "dose")],
        *[("sex", "dose"), ("sex", "age")],
    }


def test_two_exclusions_of_a_pair_leave_it_without_direction() -> None:
    """What cannot be an edge has no direction an edge could have."""
    known = Knowledge.of("ab", excluded=[("a", "b"), ("b", "a")])

    assert known.excluded.all()
    assert not known.directions.any()


def test_completion_excludes_exactly_what_no_dag_with_the_arcs_has(rng: np.random.Generator) -> None:
    """By networkx: an arc is excluded if it is said to be, or if adding it to the arcs makes a cycle."""
    for _ in range(200):
        order = rng.permutation(5)
        arrow = np.triu(rng.random((5, 5)) < 0.4, 1)[np.ix_(order, order)]
        gone = (rng.random((5, 5)) < 0.2) & ~arrow & ~np.eye(5, dtype=bool)
        names = tuple("abcde")

        known = Knowledge.of(names, arcs=pairs(names, arrow), excluded=pairs(names, gone))

        for x, y in itertools.permutations(range(5), 2):
            graph = nx.DiGraph(np.argwhere(arrow).tolist())
            graph.add_edge(x, y)
            assert known.excluded[x, y] == (gone[x, y] or not nx.is_directed_acyclic_graph(graph))


def test_arrays_are_read_only() -> None:
    """A learner cannot change what the next one is told."""
    known = Knowledge.of(NAMES, arcs=[("age", "dose")])

    for array in (known.arcs, known.excluded, known.directions):
        assert not array.flags.writeable


# What contradicts what


@pytest.mark.parametrize(
    ("said", "expected"),
    [
        (
            {"arcs": [("age", "dose")], "excluded": [("age", "dose")]},
            ["the arc 'age' -> 'dose' is said to be there and to be excluded."],
        ),
        (
            {"arcs": [("age", "dose"), ("dose", "age")]},
            ["arcs are said to be there both ways between 'age' and 'dose'."],
        ),
        (
            {"arcs": [("age", "dose"), ("dose", "cure"), ("cure", "age")]},
            [
                "arcs that are said to be there: the graph has a directed cycle: age -> dose -> cure -> age.",
            ],
        ),
        (
            {"arcs": [("cure", "age")], "stages": [["age"], ["cure"]]},
            ["arcs lead from 'cure', which stands in stages[2], to 'age', which stands in stages[1]."],
        ),
        (
            {"arcs": [("cure", "sex"), ("sex", "age")], "stages": [["age"], [], ["cure"]]},
            ["arcs lead from 'cure', which stands in stages[3], to 'age', which stands in stages[1]."],
        ),
        (
            {"arcs": [("age", "does"), ("dose", "dose")], "excluded": [("x", "y")], "stages": [["agee"]]},
            [
                "arcs[1]: 'does' is not a variable. Did you mean 'dose'?",
                "arcs[2]: an arc joins two different variables, got 'dose' -> 'dose'.",
                "excluded[1]: 'x' is not a variable.",
                "excluded[1]: 'y' is not a variable.",
                "stages[1]: 'agee' is not a variable. Did you mean 'age'?",
            ],
        ),
        (
            {"stages": [["age", "sex"], ["dose", "age"]]},
            ["stages[2]: 'age' stands in stages[1] already."],
        ),
    ],
)
def test_every_contradiction_is_a_line(said: dict[str, Any], expected: list[str]) -> None:
    """What is unknown or contradicts something else is named with its place, all at once."""
    assert expected == faults(**said)


# Other orders and names


def test_reordering_moves_every_statement_with_its_variables(rng: np.random.Generator) -> None:
    """Variable ``positions[j]`` comes to place j, under its new name."""
    known = Knowledge.of(NAMES, arcs=[("age", "dose")], excluded=[("sex", "cure")], stages=[["sex"], ["age"]])
    positions = rng.permutation(4)
    new = tuple(f"x{j}" for j in range(4))
    old_of = {name: NAMES[positions[j]] for j, name in enumerate(new)}

    moved = known.reordered(positions, new)

    for before, after in ((known.arcs, moved.arcs), (known.excluded, moved.excluded)):
        assert {(old_of[x], old_of[y]) for x, y in pairs(new, after)} == pairs(NAMES, before)


def test_names_in_another_order_keep_what_is_said() -> None:
    """Knowledge can be laid over the same names in any order, and over no others."""
    known = Knowledge.of(NAMES, arcs=[("age", "dose")])
    other = ("cure", "dose", "sex", "age")

    over = known.over(other)

    assert over.names == other
    assert pairs(other, over.arcs) == {("age", "dose")}
    assert known.over(NAMES) is known
    with pytest.raises(InputError, match="'income' is on one side only"):
        known.over((*NAMES, "income"))


# Files

FILE = """
arcs = [["dose", "cure"], ["age", "dose"]]
excluded = [["sex", "dose"]]
stages = [["sex", "age"], ["dose"], ["cure"]]
"""


def test_a_file_says_what_its_statements_say(tmp_path: Path) -> None:
    """Read from TOML, knowledge is that which the same statements make."""
    (tmp_path / "known.toml").write_text(FILE)

    known = read_knowledge(tmp_path / "known.toml", NAMES)
    expected = Knowledge.of(
        NAMES,
        arcs=[("age", "dose"), ("dose", "cure")],
        excluded=[("sex", "dose")],
        stages=[["age", "sex"], ["dose"], ["cure"]],
    )

    assert np.array_equal(expected.arcs, known.arcs)
    assert np.array_equal(expected.excluded, known.excluded)


def test_the_same_statements_are_the_same_whatever_their_order(tmp_path: Path) -> None:
    """Order and repetition of pairs, and the order within a stage, say nothing; that of stages does."""
    (tmp_path / "a.toml").write_text('arcs = [["b", "c"], ["a", "b"]]\nstages = [["b", "a"], ["c"]]')
    (tmp_path / "b.toml").write_text(
        'stages = [["a", "b"], ["c"]]\nexcluded = []\narcs = [["a", "b"], ["b", "c"], ["a", "b"]]'
    )
    (tmp_path / "c.toml").write_text('arcs = [["b", "c"], ["a", "b"]]\nstages = [["c"], ["b", "a"]]')

    a, b, c = (read_statements(tmp_path / f"{name}.toml") for name in "abc")

    assert a == b == {"arcs": [["a", "b"], ["b", "c"]], "stages": [["a", "b"], ["c"]]}
    assert a != c
    assert canonical(a) == a


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("arcs = [", ["{file}:1:9: Invalid value."]),
        (
            'arc = [["age", "dose"]]\nseed = 3',
            [
                "{file}: arc: unknown key. Did you mean 'arcs'?",
                "{file}: seed: unknown key; accepted: arcs, excluded, stages.",
            ],
        ),
        ("arcs = 3", ["{file}: arcs: must be a list, got '3'."]),
        (
            'arcs = ["age", ["age"], ["age", 3]]\nstages = ["age", ["sex"]]',
            [
                '{file}: arcs[1]: must be two names, as in ["x", "y"] for x -> y, got \'age\'.',
                '{file}: arcs[2]: must be two names, as in ["x", "y"] for x -> y, got "[\'age\']".',
                '{file}: arcs[3]: must be two names, as in ["x", "y"] for x -> y, got "[\'age\', 3]".',
                "{file}: stages[1]: must be a list of names, got 'age'.",
            ],
        ),
        ('arcs = [["age", "dsoe"]]', ["{file}: arcs[1]: 'dsoe' is not a variable. Did you mean 'dose'?"]),
        (
            'arcs = [["age", "dose"]]\nexcluded = [["age", "dose"]]',
            ["{file}: the arc 'age' -> 'dose' is said to be there and to be excluded."],
        ),
    ],
)
def test_every_fault_of_a_file_is_a_line_with_the_file(
    text: str, expected: list[str], tmp_path: Path
) -> None:
    """File, place, what was found and what is accepted; all at once."""
    path = tmp_path / "known.toml"
    path.write_text(text)

    with pytest.raises(InputError) as caught:
        read_knowledge(path, NAMES)

    assert [line.format(file=path) for line in expected] == list(caught.value.faults)


def test_a_file_that_is_not_there_is_named(tmp_path: Path) -> None:
    """A path without a file is one line."""
    with pytest.raises(InputError, match=r"known\.toml: no such file"):
        read_knowledge(tmp_path / "known.toml", NAMES)


# Real data


def test_knowledge_is_given_to_a_method_from_python() -> None:
    """In any order of names; other names, and methods that take none, are refused."""
    data = Dataset(tuple("abc"), (("0", "1"),) * 3, np.zeros((4, 3), dtype=np.uint8))

    def repeats(data: Dataset, *, knowledge: Knowledge | None = None) -> Graph:
        assert knowledge is not None
        return Graph(data.names, knowledge.arcs)

    known = Knowledge.of("cab", arcs=[("a", "c")])

    assert learn(repeats, data, knowledge=known).edges() == (("a", "c", "directed"),)
    with pytest.raises(InputError, match="'z' is on one side only"):
        learn(repeats, data, knowledge=Knowledge.of("abcz"))
    with pytest.raises(InputError, match="no-arcs: takes no knowledge"):
        learn("no-arcs", data, knowledge=known)


TAKERS = [name for name in BUILT_IN if built_in(name).takes_knowledge]


@pytest.mark.parametrize("method", TAKERS)
def test_learners_find_the_names(method: str) -> None:
    """To learners the order of the knowledge's variables is of no account; other names are refused."""
    network = published_network("chest-clinic")
    data = network.sample(800, rng=np.random.default_rng(1))
    arcs = [(data.names[4], data.names[1]), (data.names[2], data.names[6])]
    specification = built_in(method)

    answers = [
        call(specification, data, {}, np.random.default_rng(1), Knowledge.of(names, arcs=arcs)).graph
        for names in (data.names, data.names[::-1])
    ]

    assert answers[0] == answers[1]
    assert all(arc in {edge[:2] for edge in answers[0].edges()} for arc in arcs)
    with pytest.raises(InputError, match="not over the data's variables"):
        call(specification, data, {}, np.random.default_rng(1), Knowledge.of("abc"))
