"""Networks: what makes one, and what is said when something does not."""

from __future__ import annotations

import numpy as np
import pytest

from generators.catalogue import published_network
from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from generators.network import Cpt, Network

NO_YES = ("no", "yes")
RAIN = Cpt("rain", (), np.array([0.75, 0.25]))
WET = Cpt("wet", ("rain",), np.array([[0.9, 0.1], [0.2, 0.8]]))
GRAPH = Graph.from_edges(["rain", "wet"], directed=[("rain", "wet")])


def rain_network(**changes: Cpt) -> Network:
    """Return the network of rain and wet grass, with some tables replaced."""
    return Network(GRAPH, (NO_YES, NO_YES), {"rain": RAIN, "wet": WET, **changes})


@pytest.mark.parametrize(
    ("parents", "p", "message"),
    [
        ((), [[0.5, 0.5]], "2 axes; 0 parents need 1"),
        (("b",), [0.5, 0.5], "1 axes; 1 parents need 2"),
        (("b", "b"), np.full((2, 2, 2), 0.5), "different other variables"),
        (("a",), np.full((2, 2), 0.5), "different other variables"),
        ((), [1.5, -0.5], "negative or infinite"),
        ((), [np.nan, 1.0], "negative or infinite"),
        ((), [np.inf, 0.0], "negative or infinite"),
        ((), [0.5, 0.4], "sums to 0.9, not 1"),
        (("b",), [[0.5, 0.5], [0.3, 0.3]], r"parents' states \(1,\)\) that sums to 0.6"),
    ],
)
def test_what_is_no_table_is_refused(parents: tuple[str, ...], p: object, message: str) -> None:
    """Axes that do not fit the parents and rows that are no distributions are said to be wrong."""
    with pytest.raises(InputError, match=message):
        Cpt("a", parents, np.array(p))


def test_a_table_lists_its_rows_first_parent_slowest() -> None:
    """Rows run through the last parent's states first; free parameters leave the last state out."""
    p = np.arange(1.0, 13).reshape(2, 3, 2)
    p /= p.sum(axis=-1, keepdims=True)
    cpt = Cpt("a", ("b", "c"), p)

    assert cpt.rows().shape == (6, 2)
    assert cpt.rows()[4].tolist() == p[1, 1].tolist()
    assert cpt.n_free == 6


def test_a_table_cannot_be_changed_from_outside() -> None:
    """A table copies what it is given and lets nobody write to it."""
    p = np.array([0.5, 0.5])
    cpt = Cpt("a", (), p)
    p[0] = 1

    assert cpt.p.tolist() == [0.5, 0.5]
    with pytest.raises(ValueError, match="read-only"):
        cpt.p[0] = 1


def test_a_network_reports_its_parts() -> None:
    """Names and states are in the graph's order, whatever the order of the mapping of tables."""
    network = Network(GRAPH, (NO_YES, NO_YES), {"wet": WET, "rain": RAIN})

    assert network.names == ("rain", "wet")
    assert list(network.cpts) == ["rain", "wet"]
    assert network.cardinalities.tolist() == [2, 2]
    assert network.n_free == 3
    with pytest.raises(TypeError):
        network.cpts["rain"] = WET  # type: ignore[index]


@pytest.mark.parametrize(
    ("name", "n_arcs", "n_free"),
    [
        ("chest-clinic", 8, 18),  # Lauritzen and Spiegelhalter 1988
        ("burglary", 4, 10),  # Pearl 1988: 1 + 1 + 4 + 2 + 2 (counted from the tables)
        ("student", 4, 15),  # Koller and Friedman 2009: 1 + 1 + 8 + 2 + 3 (counted from the tables)
    ],
)
def test_free_parameters_of_published_networks(name: str, n_arcs: int, n_free: int) -> None:
    """Arcs and free parameters are those of the publication."""
    network = published_network(name)

    assert network.graph.n_edges == n_arcs
    assert network.n_free == n_free


@pytest.mark.parametrize(
    ("graph", "states", "cpts", "message"),
    [
        (GRAPH, (NO_YES,), {}, "2 variables need as many lists of states, got 1"),
        (Graph.from_edges(["rain", "wet"], (), [("rain", "wet")]), (NO_YES, NO_YES), {}, "fully directed"),
        (GRAPH, (NO_YES, NO_YES), {"rain": RAIN}, "'wet' has no table"),
        (
            GRAPH,
            (NO_YES, NO_YES),
            {"rain": RAIN, "wet": Cpt("wet", (), np.array([0.5, 0.5]))},
            "has the parents",
        ),
        (GRAPH, (("a", "b", "c"), NO_YES), {"rain": RAIN, "wet": WET}, "has the shape"),
        (GRAPH, (("a", "a"), NO_YES), {"rain": RAIN, "wet": WET}, "lists the state 'a' twice"),
        (GRAPH, (("a", ""), NO_YES), {"rain": RAIN, "wet": WET}, "a state without a name"),
        (GRAPH, ((), NO_YES), {"rain": RAIN, "wet": WET}, "'rain' has no state"),
        (GRAPH, (NO_YES, NO_YES), {"rain": RAIN, "wet": WET, "sun": RAIN}, "'sun', which is not a variable"),
        (
            GRAPH,
            (NO_YES, NO_YES),
            {"rain": Cpt("sun", (), np.array([0.5, 0.5])), "wet": WET},
            "is that of 'sun'",
        ),
    ],
)
def test_what_is_no_network_is_refused(
    graph: Graph, states: tuple[tuple[str, ...], ...], cpts: dict[str, Cpt], message: str
) -> None:
    """Graph, states and tables must fit each other, and what does not fit is named."""
    with pytest.raises(InputError, match=message):
        Network(graph, states, cpts)


def test_all_faults_are_told_at_once() -> None:
    """A network with several faults gets one line for each."""
    graph = Graph.from_edges("ab", [("a", "b")])

    with pytest.raises(InputError) as caught:
        Network(graph, (("x", "x"), NO_YES), {"a": Cpt("a", (), np.array([0.5, 0.5]))})

    assert len(caught.value.faults) == 2
    assert str(caught.value).splitlines() == list(caught.value.faults)


def test_a_directed_cycle_is_named() -> None:
    """A cyclic graph is no network; the message shows the cycle."""
    graph = Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")])
    cpts = {name: Cpt(name, graph.parents(name), np.full((2, 2), 0.5)) for name in graph.names}

    with pytest.raises(InputError, match="directed cycle"):
        Network(graph, (NO_YES,) * 3, cpts)


def test_parents_may_stand_in_any_order_of_axes() -> None:
    """A table whose axes are in another order than the graph's variables means the same network."""
    graph = Graph.from_edges("abc", [("a", "c"), ("b", "c")])
    p = np.array([[[0.1, 0.9], [0.2, 0.8]], [[0.3, 0.7], [0.4, 0.6]], [[0.5, 0.5], [0.6, 0.4]]])
    roots = {"a": Cpt("a", (), np.array([0.2, 0.3, 0.5])), "b": Cpt("b", (), np.array([0.4, 0.6]))}
    states = (("x", "y", "z"), NO_YES, NO_YES)
    one = Network(graph, states, {**roots, "c": Cpt("c", ("a", "b"), p)})
    other = Network(graph, states, {**roots, "c": Cpt("c", ("b", "a"), p.transpose(1, 0, 2))})

    # By hand: sum over a and b of P(a) P(b) P(c = no | a, b).
    expected = 0.2 * (0.4 * 0.1 + 0.6 * 0.2) + 0.3 * (0.4 * 0.3 + 0.6 * 0.4) + 0.5 * (0.4 * 0.5 + 0.6 * 0.6)

    assert one.marginal("c")[0] == pytest.approx(expected, abs=1e-15)
    assert other.marginal("c")[0] == pytest.approx(expected, abs=1e-15)
    assert one.sample(500, rng=np.random.default_rng(1)) == other.sample(500, rng=np.random.default_rng(1))


def test_the_key_is_the_content() -> None:
    """Networks with the same content have the same key; another probability, state or name has another."""
    key = rain_network().key()
    renamed = Network(GRAPH, (NO_YES, ("dry", "wet")), {"rain": RAIN, "wet": WET})

    assert key == rain_network().key()
    assert len(key) == 16
    assert key != rain_network(rain=Cpt("rain", (), np.array([0.75 + 1e-16, 0.25 - 1e-16]))).key()
    assert key != renamed.key()


def test_sampling_takes_its_key_from_the_generator() -> None:
    """The same generator state gives the same rows, and the next draw gives others."""
    rng = np.random.default_rng(1)
    data = rain_network().sample(200, rng=rng)

    assert isinstance(data, Dataset)
    assert data == rain_network().sample(200, rng=np.random.default_rng(1))
    assert data != rain_network().sample(200, rng=rng)


def test_marginals_are_exact() -> None:
    """P(wet) = .25 * .8 + .75 * .1 = .275 and P(rain | wet) = .2 / .275, by hand."""
    assert rain_network().marginal("wet")[1] == pytest.approx(0.275, abs=1e-15)
    assert rain_network().marginal("rain", {"wet": "yes"})[1] == pytest.approx(0.2 / 0.275, abs=1e-15)
