"""Exact inference: published posteriors, and enumeration of all joint states."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise, product
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators import inference
from generators.catalogue import published_network
from generators.cpts import generate_network
from generators.errors import InputError
from generators.files import read_network
from generators.graph import Graph
from generators.inference import joint, marginals, probability
from generators.network import Cpt, Network
from generators.topologies import generate_graph

# Burglary: Pearl 1988, Probabilistic Reasoning in Intelligent Systems; Russell and Norvig, Artificial
# Intelligence: A Modern Approach, which prints <0.284, 0.716> for P(B | j, m).
B, E, A, J, M = "burglary", "earthquake", "alarm", "john_calls", "mary_calls"
# Sprinkler: Russell and Norvig; the version with .6471, .2781 / .6471 and .4581 / .6471.
CLOUDY, SPRINKLER, RAIN, WET = "cloudy", "sprinkler", "rain", "wet_grass"
# Metastatic cancer: Cooper 1984; Pearl 1988.
CANCER, CALCIUM, TUMOUR, COMA, HEADACHE = (
    "metastatic_cancer",
    "raised_calcium",
    "brain_tumour",
    "coma",
    "headache",
)

# network, event, given, published value, digits that are published
PUBLISHED = [
    ("burglary", {B: "yes"}, {J: "yes", M: "yes"}, 0.2841718354, 10),
    ("burglary", {J: "yes", M: "yes", A: "yes", B: "no", E: "no"}, {}, 0.000628111, 9),
    ("burglary", {B: "yes", J: "yes", M: "yes"}, {}, 0.00059224, 8),
    ("burglary", {B: "no", J: "yes", M: "yes"}, {}, 0.0014919, 7),
    ("burglary", {A: "yes"}, {}, 0.002516442, 9),
    ("burglary", {J: "yes"}, {}, 0.0521389757, 10),
    ("burglary", {M: "yes"}, {}, 0.011736345, 9),
    ("burglary", {B: "yes"}, {A: "yes"}, 0.3735512, 7),
    ("burglary", {B: "yes"}, {A: "yes", E: "yes"}, 0.0032684, 7),
    ("burglary", {J: "yes"}, {B: "yes"}, 0.849017, 6),
    ("burglary", {M: "yes"}, {B: "yes"}, 0.6586138, 7),
    ("burglary", {A: "yes"}, {B: "yes"}, 0.94002, 5),
    ("burglary", {B: "yes"}, {J: "yes"}, 0.0162837, 7),
    ("burglary", {A: "yes"}, {J: "yes", M: "yes"}, 0.760692, 6),
    ("burglary", {E: "yes"}, {J: "yes", M: "yes"}, 0.176067, 6),
    ("burglary", {A: "yes"}, {J: "yes", E: "no"}, 0.0337882, 7),
    ("sprinkler", {WET: "yes"}, {}, 0.6471, 4),
    ("sprinkler", {SPRINKLER: "yes"}, {WET: "yes"}, 0.2781 / 0.6471, 12),
    ("sprinkler", {RAIN: "yes"}, {WET: "yes"}, 0.4581 / 0.6471, 12),
    ("sprinkler", {SPRINKLER: "yes"}, {WET: "yes", RAIN: "yes"}, 0.1945, 4),
    ("sprinkler", {SPRINKLER: "yes"}, {}, 0.3, 12),
    ("sprinkler", {RAIN: "yes"}, {}, 0.5, 12),
    ("sprinkler", {RAIN: "yes"}, {SPRINKLER: "yes"}, 0.3, 12),
    # A textbook variant with three variables (tables from memory).
    ("lawn", {RAIN: "yes"}, {WET: "yes"}, 0.16038 / 0.44838, 12),
    # Student: Koller and Friedman 2009, Probabilistic Graphical Models, chapter 3 (tables from memory).
    ("student", {"letter": "strong"}, {}, 0.502336, 6),
    ("student", {"letter": "strong"}, {"intelligence": "low"}, 0.3886, 4),
    ("student", {"letter": "strong"}, {"intelligence": "low", "difficulty": "easy"}, 0.513, 3),
    ("student", {"intelligence": "high"}, {"grade": "C"}, 0.078947, 6),
    ("student", {"difficulty": "hard"}, {"grade": "C"}, 0.629291, 6),
    ("student", {"intelligence": "high"}, {"letter": "weak"}, 0.140022, 6),
    ("student", {"intelligence": "high"}, {"grade": "C", "test": "high"}, 0.578313, 6),
    ("student", {"difficulty": "hard"}, {"grade": "C", "test": "high"}, 0.759560, 6),
    ("student", {"intelligence": "high"}, {"grade": "C", "difficulty": "hard"}, 0.109091, 6),
    ("student", {"intelligence": "high"}, {"grade": "B"}, 0.174757, 6),
    ("student", {"intelligence": "high"}, {"grade": "B", "difficulty": "hard"}, 0.339623, 6),
    (
        "student",
        {"intelligence": "high", "difficulty": "easy", "grade": "B", "test": "high", "letter": "weak"},
        {},
        0.004608,
        6,
    ),
    # Metastatic cancer (tables from memory; .097 is printed).
    ("metastatic-cancer", {CALCIUM: "yes"}, {}, 0.32, 12),
    ("metastatic-cancer", {TUMOUR: "yes"}, {}, 0.08, 12),
    ("metastatic-cancer", {COMA: "yes"}, {}, 0.32, 12),
    ("metastatic-cancer", {HEADACHE: "yes"}, {}, 0.616, 12),
    ("metastatic-cancer", {CANCER: "yes"}, {COMA: "no", HEADACHE: "yes"}, 0.097276, 6),
]

CLINIC = {
    "a": "visit_to_asia",
    "t": "tuberculosis",
    "s": "smoking",
    "l": "lung_cancer",
    "b": "bronchitis",
    "e": "either",
    "x": "positive_xray",
    "d": "dyspnoea",
}
# Lauritzen and Spiegelhalter 1988, JRSS B 50(2), 157-224: their network; the posteriors by enumeration
# of its 256 joint states. Evidence -> marginals of "yes"; a capital letter says no.
CHEST_CLINIC = {
    "": {
        "a": 0.01,
        "t": 0.0104,
        "s": 0.5,
        "l": 0.055,
        "b": 0.45,
        "e": 0.064828,
        "x": 0.110290,
        "d": 0.435971,
    },
    "d": {"a": 0.0103, "t": 0.0188, "s": 0.6340, "l": 0.1028, "b": 0.8340, "e": 0.1205, "x": 0.1621},
    "ad": {"t": 0.0878, "s": 0.6259, "l": 0.0995, "b": 0.8114, "e": 0.1823, "x": 0.2195},
    "asd": {"t": 0.0728, "l": 0.1455, "b": 0.8673, "e": 0.2110, "x": 0.2462},
    "aSd": {"t": 0.1128, "l": 0.0226, "b": 0.7179, "e": 0.1343, "x": 0.1749},
    "adX": {"t": 0.0022, "s": 0.6045, "l": 0.0026, "b": 0.8628, "e": 0.0047},
    "x": {"a": 0.0132, "t": 0.0924, "s": 0.6878, "l": 0.4887, "b": 0.5063, "e": 0.5760, "d": 0.6408},
    "xd": {"a": 0.0140, "t": 0.1139, "s": 0.7856, "l": 0.6213, "b": 0.6819, "e": 0.7287},
}


@pytest.mark.parametrize(("name", "event", "evidence", "expected", "digits"), PUBLISHED)
def test_published_probabilities(
    name: str, event: dict[str, str], evidence: dict[str, str], expected: float, digits: int
) -> None:
    """All three functions give the published value to the digits that are published."""
    network = published_network(name)
    names = list(event)
    cell = tuple(network.states[network.names.index(each)].index(event[each]) for each in names)
    half_a_digit = 0.5000001 * 10.0**-digits

    assert abs(joint(network, names, evidence)[cell] - expected) < half_a_digit
    ratio = probability(network, {**event, **evidence}) / probability(network, evidence)
    assert abs(ratio - expected) < half_a_digit
    if len(names) == 1:
        assert abs(marginals(network, evidence)[names[0]][cell] - expected) < half_a_digit


@pytest.mark.parametrize("letters", CHEST_CLINIC)
def test_chest_clinic(letters: str) -> None:
    """Every marginal of the chest clinic, before and after evidence, is the enumerated one."""
    network = published_network("chest-clinic")
    evidence = {CLINIC[each.lower()]: "yes" if each.islower() else "no" for each in letters}

    found = marginals(network, evidence)

    for letter, expected in CHEST_CLINIC[letters].items():
        digits = 6 if letters == "" else 4
        assert found[CLINIC[letter]][1] == pytest.approx(expected, abs=0.5000001 * 10.0**-digits)
        assert joint(network, [CLINIC[letter]], evidence)[1] == pytest.approx(
            found[CLINIC[letter]][1], abs=1e-14
        )


def test_chest_clinic_event() -> None:
    """A visit to Asia with dyspnoea has probability .004501375, dyspnoea .4359706, both exact."""
    network = published_network("chest-clinic")

    assert probability(network, {"visit_to_asia": "yes", "dyspnoea": "yes"}) == pytest.approx(
        0.004501375, abs=1e-15
    )
    assert probability(network, {"dyspnoea": "yes"}) == pytest.approx(0.4359706, abs=1e-14)


def enumerated(network: Network) -> np.ndarray:
    """Return the joint distribution of all variables, one product of plain numbers per joint state."""
    sides = network.cardinalities.tolist()
    position = {name: j for j, name in enumerate(network.names)}
    table = np.empty(sides)
    for cell in product(*map(range, sides)):
        weight = 1.0
        for name, cpt in network.cpts.items():
            row = tuple(cell[position[parent]] for parent in cpt.parents)
            weight *= float(cpt.p[(*row, cell[position[name]])])
        table[cell] = weight
    return table


@st.composite
def questions(draw: st.DrawFn) -> tuple[Network, list[str], dict[str, str]]:
    """Draw a network of up to six variables with zeros in its tables, variables to ask for, and evidence."""
    p = draw(st.integers(1, 6))
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    graph = generate_graph("uniform", variables=p, rng=rng)
    network = generate_network(graph, states="2-3", concentration=draw(st.sampled_from([0.02, 1.0])), rng=rng)
    names = draw(st.lists(st.sampled_from(network.names), unique=True))
    given_names = draw(st.lists(st.sampled_from(network.names), unique=True, max_size=3))
    states = dict(zip(network.names, network.states))
    return network, names, {name: draw(st.sampled_from(states[name])) for name in given_names}


@given(questions())
def test_inference_agrees_with_enumeration(question: tuple[Network, list[str], dict[str, str]]) -> None:
    """Joint, marginals and probability are sums over all joint states of the network."""
    network, names, evidence = question
    table = enumerated(network)
    position = {name: j for j, name in enumerate(network.names)}
    mask = np.zeros_like(table)
    states = dict(zip(network.names, network.states))
    mask[tuple(states[n].index(evidence[n]) if n in evidence else slice(None) for n in network.names)] = 1
    table = table * mask
    total = table.sum()

    assert probability(network, evidence) == pytest.approx(total, rel=1e-12, abs=1e-300)
    if total < 1e-250:  # near the end of the range of doubles the enumeration itself is inexact
        return
    axes = [position[name] for name in names]
    summed = table.sum(axis=tuple(j for j in range(table.ndim) if j not in axes)) / total
    expected = summed.transpose([sorted(axes).index(axis) for axis in axes])
    np.testing.assert_allclose(joint(network, names, evidence), expected, atol=1e-12)
    found = marginals(network, evidence)
    assert list(found) == list(network.names)
    for name, j in position.items():
        alone = table.sum(axis=tuple(k for k in range(table.ndim) if k != j)) / total
        np.testing.assert_allclose(found[name], alone, atol=1e-12)


@pytest.mark.parametrize("length", [2, 60, 400])
def test_a_long_chain_has_its_closed_form(length: int) -> None:
    """In a chain of symmetric switches P(last = first) = (1 + (1 - 2 e)^(n - 1)) / 2."""
    error = 0.01
    names = [f"v{i}" for i in range(length)]
    switch = np.array([[1 - error, error], [error, 1 - error]])
    cpts = {names[0]: Cpt(names[0], (), np.array([0.25, 0.75]))}
    cpts.update({b: Cpt(b, (a,), switch) for a, b in pairwise(names)})
    graph = Graph.from_edges(names, list(pairwise(names)))
    network = Network(graph, (("0", "1"),) * length, cpts)

    expected = (1 + (1 - 2 * error) ** (length - 1)) / 2

    assert joint(network, [names[-1]], {names[0]: "1"})[1] == pytest.approx(expected, abs=1e-12)
    assert marginals(network, {names[0]: "0"})[names[-1]][0] == pytest.approx(expected, abs=1e-12)


def test_many_children_are_no_large_table() -> None:
    """A cause with 200 effects is exact: posterior odds are the product of the likelihood ratios."""
    names = ["cause", *[f"effect{i}" for i in range(200)]]
    cpts = {"cause": Cpt("cause", (), np.array([0.5, 0.5]))}
    cpts.update({name: Cpt(name, ("cause",), np.array([[0.51, 0.49], [0.49, 0.51]])) for name in names[1:]})
    network = Network(
        Graph.from_edges(names, [("cause", name) for name in names[1:]]), (("0", "1"),) * 201, cpts
    )
    evidence = dict.fromkeys(names[1:121], "1")

    odds = (0.51 / 0.49) ** 120

    assert joint(network, ["cause"], evidence)[1] == pytest.approx(odds / (1 + odds), rel=1e-12)
    assert marginals(network, evidence)["cause"][1] == pytest.approx(odds / (1 + odds), rel=1e-12)


def test_given_variables_have_their_whole_mass_at_their_state() -> None:
    """A variable that is both asked for and given is certain, on its own axis."""
    network = published_network("sprinkler")

    table = joint(network, [WET, RAIN], {RAIN: "yes"})

    assert table.shape == (2, 2)
    assert table[:, 0].tolist() == [0, 0]
    assert table[1, 1] == pytest.approx(probability(network, {WET: "yes", RAIN: "yes"}) / 0.5, abs=1e-15)
    assert marginals(network, {RAIN: "yes"})[RAIN].tolist() == [0, 1]


def test_asking_for_nothing_gives_one() -> None:
    """The joint distribution of no variable, and the probability of no event, are 1."""
    network = published_network("sprinkler")

    assert joint(network, []).tolist() == 1
    assert probability(network, {}) == 1


@pytest.mark.parametrize(
    ("names", "evidence", "message"),
    [
        (["rian"], {}, "'rian' is not a variable of this network. Did you mean 'rain'?"),
        (["rain"], {"wet_gras": "yes"}, "'wet_gras' is not a variable .* Did you mean 'wet_grass'?"),
        (["rain"], {"wet_grass": "yess"}, "no state 'yess'; accepted: no, yes. Did you mean 'yes'?"),
        (["rain", "rain"], {}, "different variables"),
        (
            ["cloudy"],
            {"wet_grass": "yes", "rain": "no", "sprinkler": "no"},
            "what is given has probability 0: wet_grass = yes, rain = no, sprinkler = no",
        ),
    ],
)
def test_impossible_questions_are_refused(names: list[str], evidence: dict[str, str], message: str) -> None:
    """Unknown names and states, repeated names and impossible evidence are said to be wrong."""
    network = published_network("sprinkler")

    with pytest.raises(InputError, match=message):
        joint(network, names, evidence)


def test_impossible_evidence_has_probability_zero_and_no_marginals() -> None:
    """What cannot happen has probability 0, and nothing is said about a world where it did."""
    network = published_network("sprinkler")
    evidence = {WET: "yes", RAIN: "no", SPRINKLER: "no"}

    assert probability(network, evidence) == 0
    with pytest.raises(InputError, match="has probability 0"):
        marginals(network, evidence)


def dense(p: int) -> Network:
    """Return a network of p causes, every two of which share an effect."""
    causes = [f"c{i}" for i in range(p)]
    cpts = {name: Cpt(name, (), np.array([0.5, 0.5])) for name in causes}
    for i in range(p):
        for j in range(i):
            cpts[f"e{i}-{j}"] = Cpt(f"e{i}-{j}", (causes[j], causes[i]), np.full((2, 2, 2), 0.5))
    arcs = [(parent, name) for name, cpt in cpts.items() for parent in cpt.parents]
    return Network(Graph.from_edges(list(cpts), arcs), (("0", "1"),) * len(cpts), cpts)


def test_products_too_large_are_refused_before_they_are_made(monkeypatch: pytest.MonkeyPatch) -> None:
    """A network whose smallest product has 2^30 cells is refused without any table being multiplied."""
    network = dense(30)
    evidence = {name: "1" for name in network.names if name.startswith("e")}
    monkeypatch.setattr(inference, "_eliminate", None)  # calling it would be a TypeError

    for ask in (
        lambda: joint(network, ["c0"], evidence),
        lambda: marginals(network, evidence),
        lambda: probability(network, evidence),
        lambda: joint(network, [f"c{i}" for i in range(27)]),
    ):
        with pytest.raises(InputError, match=r"would need a table of [0-9]+ cells; at most 67108864"):
            ask()


@given(st.integers(2, 12), st.integers(0, 2**32))
def test_the_foretold_sizes_are_the_real_ones(p: int, seed: int) -> None:
    """The cells by which a question is refused are those of the products that are then made."""
    rng = np.random.default_rng(seed)
    graph = generate_graph("random-order", variables=p, mean_parents=min(1.5, (p - 1) / 2), rng=rng)
    network = generate_network(graph, states="2-3", rng=rng)
    factors = inference._factors(network, range(p), {})

    order, cells = inference._elimination_order(factors, network.cardinalities.tolist(), keep=[0])

    steps, end = inference._eliminate(factors, order)
    assert cells == [step.clique.table.size for step in steps]
    assert sorted([0, *order]) == list(range(p))
    assert end.scope == (0,)


def test_what_is_not_asked_about_is_left_out() -> None:
    """The same network is easy as long as no effect is known: causes are then independent."""
    network = dense(30)

    assert joint(network, ["c3", "e5-3"]).tolist() == [[0.25, 0.25], [0.25, 0.25]]
    assert probability(network, {"c3": "1", "c4": "0"}) == 0.25


@pytest.mark.parametrize(
    ("name", "n_variables", "n_arcs", "n_free"),
    [
        ("alarm.bif", 37, 46, 509),  # Beinlich, Suermondt, Chavez and Cooper 1989
        ("hailfinder.bif", 56, 66, 2656),  # Abramson, Brown, Edwards, Murphy and Winkler 1996
    ],
)
def test_published_networks_of_real_size(
    name: str, n_variables: int, n_arcs: int, n_free: int, known_network_file: Callable[[str], Path]
) -> None:
    """Marginals and joint distributions agree with each other under evidence on networks of real size.

    The law of total probability ties them: P(x) is the mean of P(x | y) over y.
    """
    network = read_network(known_network_file(name))
    last = network.names[-1]
    prior = marginals(network)

    assert (len(network.names), network.graph.n_edges, network.n_free) == (n_variables, n_arcs, n_free)
    mixed = {each: np.zeros_like(p) for each, p in prior.items()}
    for state, weight in zip(network.states[-1], prior[last]):
        if weight > 0:
            posterior = marginals(network, {last: state})
            for each in network.names:
                mixed[each] += weight * posterior[each]
            np.testing.assert_allclose(
                joint(network, [network.names[0]], {last: state}), posterior[network.names[0]], atol=1e-12
            )
    for each in network.names:
        np.testing.assert_allclose(mixed[each], prior[each], atol=1e-12)
