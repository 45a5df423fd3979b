"""Random tables: their distributions, against the closed forms of the Dirichlet law."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import digamma, xlogy
from scipy.stats import kstest

from generators.cpts import CPT_FAMILIES, generate_network, parse_states
from generators.errors import InputError
from generators.graph import Graph
from generators.network import Network
from generators.topologies import generate_graph


def fan(n_parents: int) -> Graph:
    """Return one child with so many parents: a single table of many independent rows."""
    names = [f"v{i}" for i in range(n_parents + 1)]
    return Graph.from_edges(names, directed=[(parent, names[-1]) for parent in names[:-1]])


def many_rows(states: int, n_parents: int, concentration: float, rng: np.random.Generator) -> np.ndarray:
    """Return states ** n_parents rows of one table."""
    graph = fan(n_parents)
    network = generate_network(graph, states=states, concentration=concentration, rng=rng)
    return network.cpts[graph.names[-1]].rows()


# --- any family -----------------------------------------------------------------------------------


@given(st.sampled_from(sorted(CPT_FAMILIES)), st.integers(1, 12), st.integers(0, 2**32))
def test_every_family_fills_a_network(family: str, p: int, seed: int) -> None:
    """Whatever is drawn is a network on the given graph, parents in the graph's order, and repeatable."""
    rng = np.random.default_rng(seed)
    graph = generate_graph("random-order", variables=p, mean_parents=min(1.5, (p - 1) / 2), rng=rng)

    network = generate_network(graph, cpts=family, states="2-4", rng=np.random.default_rng(seed))

    assert isinstance(network, Network)
    assert network.graph == graph
    assert all(network.cpts[name].parents == graph.parents(name) for name in graph.names)
    assert all(own == tuple(f"s{k + 1}" for k in range(len(own))) for own in network.states)
    assert (
        network.key()
        == generate_network(graph, cpts=family, states="2-4", rng=np.random.default_rng(seed)).key()
    )


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        ("2-3", (2, 3)),
        (3, (3, 3)),
        ("3", (3, 3)),
        ("4-4", (4, 4)),
        (65535, (65535, 65535)),
        (np.int64(2), (2, 2)),
    ],
)
def test_states_are_a_number_or_a_range(value: object, expected: tuple[int, int]) -> None:
    """A number stands for itself, a range for its two ends."""
    assert expected == parse_states(value)


@pytest.mark.parametrize(
    "value",
    [1, "1-2", "3-2", 0, -2, "2-", "-3", "2–3", "a", "", "2-3-4", 2.0, True, None, 65536, "2 - 3", "²", [2]],
)
def test_other_states_are_refused(value: object) -> None:
    """Anything else is answered with what was found."""
    with pytest.raises(ValueError, match=r"^must be a whole number from 2 to 65535 or a range") as caught:
        parse_states(value)

    assert str(caught.value).endswith(f"got {value!r}")


def test_each_variable_draws_its_number_of_states() -> None:
    """From a range of three, each number is as frequent as the others.

    1,200 variables: the count of one number is binomial; 5.5 standard deviations fail by chance at 4e-8.
    """
    rng = np.random.default_rng(20261201)
    graph = generate_graph("random-order", variables=1200, mean_parents=0, rng=rng)

    sides = generate_network(graph, states="2-4", rng=rng).cardinalities

    assert set(sides.tolist()) == {2, 3, 4}
    for side in (2, 3, 4):
        assert abs((sides == side).sum() - 400) < 5.5 * np.sqrt(1200 * (1 / 3) * (2 / 3))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"cpts": "dirichlett"}, "unknown CPT family 'dirichlett'; accepted: .* Did you mean 'dirichlet'?"),
        ({"states": "3-2"}, "states: must be a whole number from 2 to 65535 or a range .*, got '3-2'"),
        ({"concentration": 0}, "concentration: must be a number above 0, got 0"),
        ({"concentration": float("nan")}, "concentration: must be a number above 0, got nan"),
        ({"concentrations": 1}, "unknown setting 'concentrations'; .* Did you mean 'concentration'?"),
    ],
)
def test_what_cannot_be_drawn_is_refused(
    arguments: dict[str, object], message: str, rng: np.random.Generator
) -> None:
    """Each wrong argument is answered with what was found and what is accepted."""
    with pytest.raises(InputError, match=message):
        generate_network(fan(1), rng=rng, **arguments)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("graph", "message"),
    [
        (Graph.from_edges("ab", undirected=[("a", "b")]), "fully directed"),
        (Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")]), "directed cycle"),
    ],
)
def test_only_a_dag_gets_tables(graph: Graph, message: str, rng: np.random.Generator) -> None:
    """A graph that is no DAG is refused."""
    with pytest.raises(InputError, match=message):
        generate_network(graph, rng=rng)


def test_tables_too_large_are_refused_before_they_are_made(rng: np.random.Generator) -> None:
    """Fifty binary parents would need a petabyte: the message says who has them and how many cells."""
    with pytest.raises(InputError, match="'v50' alone has 50 parents") as caught:
        generate_network(fan(50), states=2, rng=rng)

    assert f"would hold 2.252e+15 probabilities, at most {2**26}" in str(caught.value)


# --- Dirichlet ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("states", "concentration", "published"),
    [
        # Mean entropy of a symmetric Dirichlet row, psi(k a + 1) - psi(a + 1) nats (Wolpert and Wolf
        # 1995, from memory); the numbers computed from it independently.
        (2, 0.5, 0.38629),
        (2, 1.0, 0.5),
        (2, 2.0, 0.58333),
        (2, 5.0, 0.64563),
        (2, 10.0, 0.66877),
        (3, 0.5, 0.66667),
        (3, 1.0, 0.83333),
        (3, 2.0, 0.95),
        (3, 5.0, 1.0349),
        (3, 10.0, 1.06602),
    ],
)
def test_mean_entropy_of_rows(states: int, concentration: float, published: float) -> None:
    """The mean entropy over some thousand rows is the exact one within 5.5 standard errors.

    Chance failure about 4e-8 for each.
    """
    rng = np.random.default_rng(20261201)

    rows = many_rows(states, {2: 12, 3: 8}[states], concentration, rng)

    entropy = -xlogy(rows, rows).sum(axis=1)
    exact = digamma(states * concentration + 1) - digamma(concentration + 1)
    assert exact == pytest.approx(published, abs=6e-6 if published < 1 else 6e-5)
    assert abs(entropy.mean() - exact) < 5.5 * entropy.std() / np.sqrt(len(rows))


@pytest.mark.parametrize(
    ("concentration", "published"), [(0.5, 0.25), (1.0, 0.16667), (2.0, 0.1), (5.0, 0.04545), (10.0, 0.02381)]
)
def test_distance_of_two_rows(concentration: float, published: float) -> None:
    """Two rows of two states differ by E (p - q)^2 = 1 / (2 (2 a + 1)): rows are independent and beta.

    2,048 pairs within 5.5 standard errors; chance failure about 4e-8 for each.
    """
    rng = np.random.default_rng(20261201)

    p = many_rows(2, 12, concentration, rng)[:, 0]

    squares = (p[::2] - p[1::2]) ** 2
    exact = 1 / (2 * (2 * concentration + 1))
    assert exact == pytest.approx(published, abs=6e-6)
    assert abs(squares.mean() - exact) < 5.5 * squares.std() / np.sqrt(len(squares))


def test_flat_rows_are_uniform() -> None:
    """At concentration 1 a probability of two states is uniform, and E|p - q| = 1/3.

    4,096 rows: Kolmogorov and Smirnov at 1e-6, the mean distance within 5.5 standard errors.
    """
    rng = np.random.default_rng(20261201)

    p = many_rows(2, 12, 1.0, rng)[:, 0]

    distance = np.abs(p[::2] - p[1::2])
    assert kstest(p, "uniform").pvalue > 1e-6
    assert abs(distance.mean() - 1 / 3) < 5.5 * distance.std() / np.sqrt(len(distance))


@pytest.mark.parametrize("concentration", [1e-300, 1e-3, 0.02, 0.0999, 0.1, 1e6])
def test_extreme_concentrations_give_distributions(concentration: float) -> None:
    """Rows stay distributions where gamma variates would underflow, and have the exact second moment.

    E sum p^2 = (a + 1) / (k a + 1) for k states; 6,561 rows within 5.5 standard errors (4e-8), and every
    state has a third of the mass.
    """
    rng = np.random.default_rng(20261201)

    rows = many_rows(3, 8, concentration, rng)

    squares = (rows**2).sum(axis=1)
    exact = (concentration + 1) / (3 * concentration + 1)
    assert np.abs(rows.sum(axis=1) - 1).max() < 1e-12
    assert (rows >= 0).all()
    assert abs(squares.mean() - exact) <= 5.5 * squares.std() / np.sqrt(len(rows)) + 1e-12
    assert np.abs(rows.mean(axis=0) - 1 / 3).max() < 5.5 * np.sqrt((1 / 3) * (2 / 3) / len(rows))
