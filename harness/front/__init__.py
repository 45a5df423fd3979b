"""Rehearse a Bayesian-network structure-learning study on synthetic data before real data is touched.

>>> import numpy as np
>>> from arcassay import generate_graph, generate_network, learn, score
>>> rng = np.random.default_rng(1)
>>> graph = generate_graph("random-order", variables=8, mean_parents=1.5, max_parents=3, rng=rng)
>>> network = generate_network(graph, cpts="dirichlet", states="2-3", concentration=1.0, rng=rng)
>>> data = network.sample(1000, rng=rng)
>>> answer = learn("pc", data, alpha=0.05, rng=rng)
>>> 0.0 <= score(network, answer)["skeleton_recall"] <= 1.0
True
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ._own import bind_packages

if TYPE_CHECKING:
    from generators.cpts import generate_network as generate_network
    from generators.dataset import Dataset as Dataset
    from generators.errors import InputError as InputError
    from generators.files import read_data as read_data
    from generators.files import read_graph as read_graph
    from generators.files import read_network as read_network
    from generators.files import write_graph as write_graph
    from generators.files import write_network as write_network
    from generators.graph import Graph as Graph
    from generators.network import Cpt as Cpt
    from generators.network import Network as Network
    from generators.topologies import generate_graph as generate_graph
    from harness.knowledge import Knowledge as Knowledge
    from harness.knowledge import read_knowledge as read_knowledge
    from harness.learners.specification import learner as learner
    from harness.ledger.store import Ledger as Ledger
    from harness.plan.schema import Plan as Plan
    from harness.plan.schema import read_plan as read_plan
    from harness.records import Answer as Answer
    from harness.records import Declined as Declined
    from harness.scorers.structure import score as score
    from harness.studies.applying import learn as learn
    from harness.studies.running import run_plan as run  # noqa: F401

_PUBLIC = {
    "Answer": "harness.records:Answer",
    "Cpt": "generators.network:Cpt",
    "Dataset": "generators.dataset:Dataset",
    "Declined": "harness.records:Declined",
    "Graph": "generators.graph:Graph",
    "InputError": "generators.errors:InputError",
    "Knowledge": "harness.knowledge:Knowledge",
    "Ledger": "harness.ledger.store:Ledger",
    "Network": "generators.network:Network",
    "Plan": "harness.plan.schema:Plan",
    "generate_graph": "generators.topologies:generate_graph",
    "generate_network": "generators.cpts:generate_network",
    "learn": "harness.studies.applying:learn",
    "learner": "harness.learners.specification:learner",
    "read_data": "generators.files:read_data",
    "read_graph": "generators.files:read_graph",
    "read_knowledge": "harness.knowledge:read_knowledge",
    "read_network": "generators.files:read_network",
    "read_plan": "harness.plan.schema:read_plan",
    "run": "harness.studies.running:run_plan",
    "score": "harness.scorers.structure:score",
    "write_graph": "generators.files:write_graph",
    "write_network": "generators.files:write_network",
}
__all__ = list(_PUBLIC)


def __getattr__(name: str) -> Any:
    """Import a public name when it is first used."""
    if name not in _PUBLIC:
        raise AttributeError(f"module 'arcassay' has no attribute {name!r}")
    import importlib

    foreign = bind_packages()
    if foreign is not None:
        raise ImportError(foreign)
    module, _, attribute = _PUBLIC[name].partition(":")
    value = getattr(importlib.import_module(module), attribute)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return sorted([*globals(), *_PUBLIC])
