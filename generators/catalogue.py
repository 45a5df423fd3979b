"""Small published networks, ready to use, with the paper beside each.

They are textbook illustrations. Those about illness are no guidance for any patient: their numbers were
made up to explain a method, and decisions about health belong to licensed practice and its rules.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from generators.errors import InputError
from generators.graph import Graph
from generators.network import Cpt, Network
from generators.settings import nearest

_DIGITS = 12  # 1 - 0.94 is written as 0.06, not 0.06000000000000005
NO_YES = ("no", "yes")
_HEALTH = "An illustration with invented numbers, never to be used for a decision about health."


@dataclass(frozen=True, slots=True)
class Entry:
    """A published network.

    Parameters
    ----------
    name : str
    source : str
        The paper or book.
    from_memory : bool
        Whether its probabilities were written down from memory and not compared with the source.
    note : str
        What to know before using it.
    build : callable
        Makes the network.
    """

    name: str
    source: str
    from_memory: bool
    note: str
    build: Callable[[], Network]

    def network(self) -> Network:
        """Return the network."""
        return self.build()


def published_network(name: str) -> Network:
    """Return a network of the catalogue.

    Parameters
    ----------
    name : str
        One of the keys of `CATALOGUE`.

    Raises
    ------
    InputError
        If there is none of that name; the message says which there are.

    Examples
    --------
    >>> network = published_network("sprinkler")
    >>> network.graph
    Graph(4 variables: cloudy -> sprinkler, cloudy -> rain, sprinkler -> wet_grass, rain -> wet_grass)
    >>> network.n_free
    9
    """
    entry = CATALOGUE.get(name)
    if entry is None:
        hint = nearest(str(name), CATALOGUE)
        raise InputError(
            f"unknown published network {name!r}; accepted: {', '.join(sorted(CATALOGUE))}.{hint}"
        )
    return entry.network()


@dataclass(frozen=True, slots=True)
class _Node:
    """A variable, its parents, and one row per joint parent state, the first parent's state slowest."""

    name: str
    parents: tuple[str, ...]
    rows: Sequence[Sequence[float]]
    states: tuple[str, ...] = NO_YES


def _two(name: str, parents: str, *p: float, states: tuple[str, str] = NO_YES) -> _Node:
    """Return a variable of two states from the probabilities of the second."""
    return _Node(name, tuple(parents.split()), [(round(1 - each, _DIGITS), each) for each in p], states)


def _network(*nodes: _Node) -> Network:
    states = {node.name: node.states for node in nodes}
    arcs = [(parent, node.name) for node in nodes for parent in node.parents]
    cpts = {}
    for node in nodes:
        shape = (*(len(states[parent]) for parent in node.parents), len(node.states))
        cpts[node.name] = Cpt(node.name, node.parents, np.array(node.rows, dtype=np.float64).reshape(shape))
    return Network(Graph.from_edges(list(states), arcs), tuple(states.values()), cpts)


def _burglary() -> Network:
    return _network(
        _two("burglary", "", 0.001),
        _two("earthquake", "", 0.002),
        _two("alarm", "burglary earthquake", 0.001, 0.29, 0.94, 0.95),
        _two("john_calls", "alarm", 0.05, 0.90),
        _two("mary_calls", "alarm", 0.01, 0.70),
    )


def _sprinkler() -> Network:
    return _network(
        _two("cloudy", "", 0.5),
        _two("sprinkler", "cloudy", 0.5, 0.1),
        _two("rain", "cloudy", 0.2, 0.8),
        _two("wet_grass", "sprinkler rain", 0.0, 0.90, 0.90, 0.99),
    )


def _lawn() -> Network:
    return _network(
        _two("rain", "", 0.2),
        _two("sprinkler", "rain", 0.4, 0.01),
        _two("wet_grass", "sprinkler rain", 0.0, 0.8, 0.9, 0.99),
    )


def _student() -> Network:
    grades = [(0.3, 0.4, 0.3), (0.05, 0.25, 0.7), (0.9, 0.08, 0.02), (0.5, 0.3, 0.2)]
    return _network(
        _two("difficulty", "", 0.4, states=("easy", "hard")),
        _two("intelligence", "", 0.3, states=("low", "high")),
        _Node("grade", ("intelligence", "difficulty"), grades, ("A", "B", "C")),
        _two("test", "intelligence", 0.05, 0.8, states=("low", "high")),
        _two("letter", "grade", 0.9, 0.6, 0.01, states=("weak", "strong")),
    )


def _metastatic_cancer() -> Network:
    return _network(
        _two("metastatic_cancer", "", 0.2),
        _two("raised_calcium", "metastatic_cancer", 0.2, 0.8),
        _two("brain_tumour", "metastatic_cancer", 0.05, 0.2),
        _two("coma", "raised_calcium brain_tumour", 0.05, 0.8, 0.8, 0.8),
        _two("headache", "brain_tumour", 0.6, 0.8),
    )


def _chest_clinic() -> Network:
    return _network(
        _two("visit_to_asia", "", 0.01),
        _two("tuberculosis", "visit_to_asia", 0.01, 0.05),
        _two("smoking", "", 0.5),
        _two("lung_cancer", "smoking", 0.01, 0.10),
        _two("bronchitis", "smoking", 0.30, 0.60),
        _two("either", "tuberculosis lung_cancer", 0.0, 1.0, 1.0, 1.0),
        _two("positive_xray", "either", 0.05, 0.98),
        _two("dyspnoea", "either bronchitis", 0.10, 0.80, 0.70, 0.90),
    )


_ENTRIES = (
    Entry(
        "burglary",
        "Pearl 1988, Probabilistic Reasoning in Intelligent Systems; numbers of Russell and Norvig, "
        "Artificial Intelligence: A Modern Approach",
        False,
        "A burglary or an earthquake sets off an alarm; rare causes, so most rows show nothing.",
        _burglary,
    ),
    Entry(
        "sprinkler",
        "Russell and Norvig, Artificial Intelligence: A Modern Approach",
        False,
        "The usual example of explaining away; without rain or sprinkler the grass is never wet.",
        _sprinkler,
    ),
    Entry(
        "lawn",
        "A common textbook variant of the sprinkler network with three variables",
        True,
        "Rain keeps the sprinkler off; without rain or sprinkler the grass is never wet.",
        _lawn,
    ),
    Entry(
        "student",
        "Koller and Friedman 2009, Probabilistic Graphical Models, chapter 3",
        True,
        "One variable of three states among four of two.",
        _student,
    ),
    Entry(
        "metastatic-cancer",
        "Cooper 1984, NESTOR (thesis, Stanford); Pearl 1988, Probabilistic Reasoning in Intelligent Systems",
        True,
        f"Coma depends on either of two causes alike, whatever the other. {_HEALTH}",
        _metastatic_cancer,
    ),
    Entry(
        "chest-clinic",
        "Lauritzen and Spiegelhalter 1988, Journal of the Royal Statistical Society B 50(2), 157-224",
        False,
        f"'either' is a deterministic OR: the distribution is not faithful to the graph. {_HEALTH}",
        _chest_clinic,
    ),
)
CATALOGUE: Mapping[str, Entry] = MappingProxyType({entry.name: entry for entry in _ENTRIES})
"""The published networks by name."""
