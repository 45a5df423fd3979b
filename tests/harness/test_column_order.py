"""What the order of the columns does to learners.

Kitson and Constantinou (Data Mining and Knowledge Discovery 2024, arXiv 2206.08952) put the columns in
topological order, in its reverse, and alphabetically, and compared the learned classes with the true one.
From reverse to topological order F1 rose by .412 on average for hill climbing, from 1,000 rows on, and by
.036 for PC with neighbours fixed per level.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.files import read_network
from generators.network import Network
from generators.topologies import generate_graph
from harness.learners.constraint import pc
from harness.learners.greedy_dag import hill_climbing
from harness.scorers.structure import score


def in_order(data: Dataset, names: list[str]) -> Dataset:
    """Put the columns in another order."""
    columns = [data.names.index(name) for name in names]
    states = tuple(data.states[v] for v in columns)
    return Dataset(tuple(names), states, np.asfortranarray(data.codes[:, columns]))


def direction_f1(network: Network, learned: object) -> float:
    """Compute F1 of the directed edges of the two classes."""
    found = score(network, learned)
    precision, recall = found["direction_precision"] or 0.0, found["direction_recall"] or 0.0
    return 2 * precision * recall / (precision + recall) if precision + recall else 0.0


def order_effects(network: Network, n: int, seed: int) -> tuple[float, float]:
    """Return how much F1 rises from reverse to topological order, for hill climbing and for PC."""
    data = network.sample(n, rng=np.random.default_rng(seed))
    names = [network.graph.names[v] for v in network.graph.order()]
    best, worst = in_order(data, names), in_order(data, names[::-1])
    rng = np.random.default_rng(seed)
    return (
        direction_f1(network, hill_climbing(best, rng=rng))
        - direction_f1(network, hill_climbing(worst, rng=rng)),
        direction_f1(network, pc(best)) - direction_f1(network, pc(worst)),
    )


@pytest.mark.parametrize("name", ["alarm.bif", "child.bif", "hailfinder.bif"])
def test_published_networks(name: str, known_network_file: Callable[[str], Path]) -> None:
    """At 10,000 rows the effect is above .2 for hill climbing on every one of these, below .02 for PC."""
    network = read_network(known_network_file(name))

    effects = np.mean([order_effects(network, 10_000, seed) for seed in range(5)], axis=0)

    assert effects[0] > 0.2
    assert abs(effects[1]) < 0.02


def test_random_networks() -> None:
    """On 60 random networks hill climbing gains clearly by a topological order, and PC next to nothing."""
    effects = []
    for seed in range(60):
        rng = np.random.default_rng(seed)
        graph = generate_graph("random-order", variables=15, mean_parents=1.2, rng=rng)
        effects.append(order_effects(generate_network(graph, states="2-3", rng=rng), 4000, seed))

    means = np.mean(effects, axis=0)
    errors = np.std(effects, axis=0, ddof=1) / np.sqrt(len(effects))
    assert means[0] - 5 * errors[0] > 0.05
    assert abs(means[1]) < 0.01
