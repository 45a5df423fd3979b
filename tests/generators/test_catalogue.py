"""The published networks, by adding up the joint distribution over all states, against printed values."""

from __future__ import annotations

from itertools import product
from typing import Any

import pytest

from generators.catalogue import CATALOGUE, published_network
from generators.errors import InputError
from generators.network import Network


def joint_of(network: Network) -> dict[tuple[str, ...], float]:
    """Give the probability of every joint state, as the product of the tables' entries."""
    joint = {}
    for row in product(*network.states):
        state = dict(zip(network.names, row, strict=True))
        probability = 1.0
        for name, cpt in network.cpts.items():
            own = [
                network.states[network.names.index(each)].index(state[each]) for each in (*cpt.parents, name)
            ]
            probability *= float(cpt.p[tuple(own)])
        joint[row] = probability
    return joint


def probability(name: str, event: dict[str, str], given: dict[str, str] | None = None) -> float:
    """Add up P(event | given) over all joint states."""
    network = published_network(name)

    def mass(wanted: dict[str, str]) -> float:
        at = {network.names.index(each): state for each, state in wanted.items()}
        return sum(
            p for row, p in joint_of(network).items() if all(row[i] == state for i, state in at.items())
        )

    return mass({**event, **(given or {})}) / mass(given or {})


def yes(*names: str, no: tuple[str, ...] = ()) -> dict[str, str]:
    return dict.fromkeys(names, "yes") | dict.fromkeys(no, "no")


def printed(value: str) -> Any:
    """Match numbers that are printed so: half a unit of the last place off, and a rounding more."""
    return pytest.approx(float(value), abs=0.5000001 * 10.0 ** -len(value.partition(".")[2]))


@pytest.mark.parametrize("name", CATALOGUE)
class TestEveryEntry:
    def test_is_a_distribution(self, name: str) -> None:
        """All joint states together have probability 1."""
        assert sum(joint_of(published_network(name)).values()) == pytest.approx(1, abs=1e-12)

    def test_is_described(self, name: str) -> None:
        """An entry has its own name, its source, a note, and gives the same network each time."""
        entry = CATALOGUE[name]

        assert entry.name == name
        assert entry.source
        assert entry.note
        assert entry.network().key() == published_network(name).key()


@pytest.mark.parametrize("name", ["chest-clinic", "metastatic-cancer"])
def test_networks_about_illness_carry_a_caution(name: str) -> None:
    """Whoever looks up a network about illness reads that it is no guidance."""
    assert "never to be used for a decision about health" in CATALOGUE[name].note


def test_values_from_memory_are_marked() -> None:
    """Networks whose probabilities were not compared with their source say so."""
    assert {name for name, entry in CATALOGUE.items() if entry.from_memory} == {
        "lawn",
        "metastatic-cancer",
        "student",
    }


def test_unknown_name() -> None:
    """An unknown name is refused with all known ones and the nearest."""
    with pytest.raises(InputError) as caught:
        published_network("chest-klinik")

    assert str(caught.value) == (
        "unknown published network 'chest-klinik'; accepted: burglary, chest-clinic, lawn, "
        "metastatic-cancer, sprinkler, student. Did you mean 'chest-clinic'?"
    )


@pytest.mark.parametrize(
    ("name", "n_variables", "n_arcs", "n_free"),
    [
        ("burglary", 5, 4, 10),
        ("sprinkler", 4, 4, 9),
        ("lawn", 3, 3, 7),
        ("student", 5, 4, 15),
        ("metastatic-cancer", 5, 5, 11),
        ("chest-clinic", 8, 8, 18),  # Lauritzen and Spiegelhalter 1988
    ],
)
def test_sizes(name: str, n_variables: int, n_arcs: int, n_free: int) -> None:
    """Each network has the numbers of variables, arcs and free parameters that its figure shows."""
    network = published_network(name)

    assert (n_variables, n_arcs, n_free) == (len(network.names), network.graph.n_edges, network.n_free)


@pytest.mark.parametrize(
    ("event", "given", "expected"),
    [
        # Russell and Norvig, Artificial Intelligence: A Modern Approach, 3rd edition, p. 523: <0.284, 0.716>
        (yes("burglary"), yes("john_calls", "mary_calls"), "0.284"),
        # the same book: P(j, m, a, not b, not e) = 0.000628
        (yes("john_calls", "mary_calls", "alarm", no=("burglary", "earthquake")), {}, "0.000628"),
        # Further values recomputed from the same tables
        (yes("burglary"), yes("john_calls", "mary_calls"), "0.2841718354"),
        (yes("alarm"), {}, "0.002516442"),
        (yes("john_calls"), {}, "0.0521389757"),
        (yes("mary_calls"), {}, "0.011736345"),
        (yes("burglary"), yes("alarm"), "0.3735512"),
        (yes("burglary"), yes("alarm", "earthquake"), "0.0032684"),
        (yes("john_calls"), yes("burglary"), "0.849017"),
        (yes("mary_calls"), yes("burglary"), "0.6586138"),
        (yes("earthquake"), yes("john_calls", "mary_calls"), "0.176067"),
        (yes("alarm"), yes("john_calls", no=("earthquake",)), "0.0337882"),
    ],
)
def test_burglary(event: dict[str, str], given: dict[str, str], expected: str) -> None:
    """The burglary network gives the printed probabilities."""
    assert probability("burglary", event, given) == printed(expected)


@pytest.mark.parametrize(
    ("event", "given", "expected"),
    [
        # Murphy's version of Russell and Norvig's example: .6471, .2781/.6471, .4581/.6471, .1945
        (yes("wet_grass"), {}, "0.647100000"),
        (yes("sprinkler"), yes("wet_grass"), "0.4298"),
        (yes("rain"), yes("wet_grass"), "0.7079"),
        (yes("sprinkler"), yes("wet_grass", "rain"), "0.1945"),
        (yes("sprinkler"), {}, "0.300000000"),
        (yes("rain"), {}, "0.500000000"),
        (yes("rain"), yes("sprinkler"), "0.300000000"),
    ],
)
def test_sprinkler(event: dict[str, str], given: dict[str, str], expected: str) -> None:
    """The sprinkler network gives the printed probabilities, explaining away among them."""
    assert probability("sprinkler", event, given) == printed(expected)


def test_lawn() -> None:
    """Rain given wet grass, by hand: 0.16038 / 0.44838 (tables from memory)."""
    assert probability("lawn", yes("rain"), yes("wet_grass")) == pytest.approx(0.16038 / 0.44838, rel=1e-12)


LOW, HIGH = {"intelligence": "low"}, {"intelligence": "high"}
EASY, HARD = {"difficulty": "easy"}, {"difficulty": "hard"}
STRONG, WEAK = {"letter": "strong"}, {"letter": "weak"}
B, C = {"grade": "B"}, {"grade": "C"}
GOOD_TEST = {"test": "high"}


@pytest.mark.parametrize(
    ("event", "given", "expected"),
    [
        # Koller and Friedman 2009, chapter 3, prints (from memory, as are the tables): .502 .389 .513 .079
        # .629 .14 .578 .76 .11 .175 .34 .004608; more digits recomputed from the tables
        (STRONG, {}, "0.502336000"),
        (STRONG, LOW, "0.388600000"),
        (STRONG, LOW | EASY, "0.513000000"),
        (HIGH, C, "0.078947"),
        (HARD, C, "0.629291"),
        (HIGH, WEAK, "0.140022"),
        (HIGH, C | GOOD_TEST, "0.578313"),
        (HARD, C | GOOD_TEST, "0.759560"),
        (HIGH, C | HARD, "0.109091"),
        (HIGH, B, "0.174757"),
        (HIGH, B | HARD, "0.339623"),
        (HIGH | EASY | B | GOOD_TEST | WEAK, {}, "0.004608000"),
    ],
)
def test_student(event: dict[str, str], given: dict[str, str], expected: str) -> None:
    """The student network gives the printed probabilities."""
    assert probability("student", event, given) == printed(expected)


@pytest.mark.parametrize(
    ("event", "given", "expected"),
    [
        # Cooper 1984; Pearl 1988 prints .097 (from memory, as are the tables); the others recomputed
        (yes("metastatic_cancer"), yes("headache", no=("coma",)), "0.097276"),
        (yes("raised_calcium"), {}, "0.320000000"),
        (yes("brain_tumour"), {}, "0.080000000"),
        (yes("coma"), {}, "0.320000000"),
        (yes("headache"), {}, "0.616000000"),
    ],
)
def test_metastatic_cancer(event: dict[str, str], given: dict[str, str], expected: str) -> None:
    """The metastatic cancer network gives the printed probabilities."""
    assert probability("metastatic-cancer", event, given) == printed(expected)


CLINIC = (
    *("visit_to_asia", "tuberculosis", "smoking", "lung_cancer"),
    *("bronchitis", "either", "positive_xray", "dyspnoea"),
)


@pytest.mark.parametrize(
    ("given", "expected"),
    [
        # Lauritzen and Spiegelhalter 1988: tables as cited in secondary texts, probabilities recomputed from
        # them (the paper's own were not at hand), in the order of CLINIC; None: evidence, or not computed
        ({}, [0.01, 0.0104, 0.5, 0.055, 0.45, 0.064828, 0.110290, 0.435971]),
        (yes("dyspnoea"), [0.0103, 0.0188, 0.6340, 0.1028, 0.8340, 0.1205, 0.1621, None]),
        (
            yes("visit_to_asia", "dyspnoea"),
            [None, 0.0878, 0.6259, 0.0995, 0.8114, 0.1823, 0.2195, None],
        ),
        (
            yes("visit_to_asia", "smoking", "dyspnoea"),
            [None, 0.0728, None, 0.1455, 0.8673, 0.2110, 0.2462, None],
        ),
        (
            yes("visit_to_asia", "dyspnoea", no=("smoking",)),
            [None, 0.1128, None, 0.0226, 0.7179, 0.1343, 0.1749, None],
        ),
        (
            yes("visit_to_asia", "dyspnoea", no=("positive_xray",)),
            [None, 0.0022, 0.6045, 0.0026, 0.8628, 0.0047, None, None],
        ),
        (yes("positive_xray"), [0.0132, 0.0924, 0.6878, 0.4887, 0.5063, 0.5760, None, 0.6408]),
        (yes("positive_xray", "dyspnoea"), [0.0140, 0.1139, 0.7856, 0.6213, 0.6819, 0.7287, None, None]),
    ],
)
def test_chest_clinic(given: dict[str, str], expected: list[float | None]) -> None:
    """The chest clinic gives the marginals and posteriors that follow from its tables."""
    digits = 6 if not given else 4

    found = [
        None if value is None else probability("chest-clinic", yes(name), given)
        for name, value in zip(CLINIC, expected, strict=True)
    ]

    assert found == pytest.approx(expected, abs=0.5000001 * 10.0**-digits)
    assert probability("chest-clinic", yes("visit_to_asia", "dyspnoea")) == pytest.approx(0.004501375)
