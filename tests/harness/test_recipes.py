"""Keys and what is drawn from them: pinned, and unmoved by whatever is no part of a recipe."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from generators.catalogue import published_network
from generators.cpts import CPT_FAMILIES
from generators.streams import canonical_json
from generators.topologies import TOPOLOGIES, generate_graph
from harness.plan.recipes import (
    dataset_key,
    draw_graph,
    draw_network,
    draw_view,
    learner_key,
    learner_rng,
    network_key,
)
from harness.plan.schema import Plan, parse_plan

NETWORKS = {
    "variables": 12,
    "topology": "random-order",
    "states": "2-3",
    "cpts": "dirichlet",
    "mean_parents": 1.2,
    "max_parents": 3,
    "concentration": 1.0,
}

PINNED = {
    "network": "6a33841f6fa2c77d5a9cb967aa5138fc",
    "dataset": "b58e86a9045c9aeb1e14b3cf7ba11f40",
    "learner": "d49eef17b08272f72522e50a4fa91253",
    "stream": "0xc72138a1a683ae47",
}

PLAN = """
title = "One"
seed = 7
[networks]
variables = [4, 6]
replicates = 3
[data]
rows = [100, 200]
[[learner]]
method = "no-arcs"
[[learner]]
method = "pc"
alpha = 0.02
[limits]
seconds = 10
"""

TWO_VARIABLES = """
network two { }
variable a { type discrete [ 2 ] { no, yes }; }
variable b { type discrete [ 2 ] { no, yes }; }
probability ( a ) { table 0.25, 0.75; }
probability ( b | a ) { (no) 0.9, 0.1; (yes) 0.2, 0.8; }
"""


def key_of(kind: str, fields: Any) -> str:
    """Compute a key from its definition: 16 bytes of SHA-256 over sorted JSON without white space."""
    text = json.dumps([kind, fields], sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()[:32]


def network_keys(plan: Plan) -> set[bytes]:
    return {
        network_key(plan.seed, condition.networks, replicate)
        for condition in plan.conditions
        for replicate in range(condition.replicates)
    }


def learner_keys(plan: Plan) -> set[bytes]:
    return {learner.key for learner in plan.learners}


def test_a_network_key_holds_seed_effective_keys_revisions_and_replicate() -> None:
    """Settings with their declared default are left out; the generators' revisions are put in."""
    revision = {"topology": TOPOLOGIES["random-order"].revision, "cpts": CPT_FAMILIES["dirichlet"].revision}
    base = {"variables": 12, "topology": "random-order", "states": "2-3", "cpts": "dirichlet"}
    recipe = {**base, "mean_parents": 1.2, "revision": revision}

    expected = key_of("network", {"seed": 20261201, "networks": recipe, "replicate": 4})

    assert expected == network_key(20261201, NETWORKS, 4).hex()


def test_the_other_keys_hold_what_their_definitions_say() -> None:
    """A dataset: network and index. A learner: method, settings, and revision or code."""
    network = network_key(1, NETWORKS, 0)

    assert key_of("dataset", {"network": network.hex(), "index": 2}) == dataset_key(network, 2).hex()
    assert (
        key_of("learner", {"method": "pc", "settings": {"alpha": 0.01}, "revision": 3})
        == learner_key("pc", {"alpha": 0.01}, revision=3, origin_digest="").hex()
    )
    assert (
        key_of("learner", {"method": "own.py:learn", "settings": {}, "code": "ab12"})
        == learner_key("own.py:learn", {}, revision=3, origin_digest="ab12").hex()
    )


def test_keys_are_pinned() -> None:
    """A change of any of these words orphans every ledger: it must be meant.

    The first word of a learner's stream is pinned raw, so that it does not rest on numpy's methods.
    """
    network = network_key(20261201, NETWORKS, 0)
    dataset = dataset_key(network, 0)

    pinned = {
        "network": network.hex(),
        "dataset": dataset.hex(),
        "learner": learner_key("pc", {"alpha": 0.01}, revision=1, origin_digest="").hex(),
        "stream": hex(int(learner_rng(dataset, 250).bit_generator.random_raw())),
    }

    assert pinned == PINNED


def test_no_topology_shares_the_name_of_a_setting_with_a_family() -> None:
    """A condition has one flat table of keys: a name in it must mean one thing."""
    sets = [
        {name for entry in registry.values() for name in entry.settings}
        for registry in (TOPOLOGIES, CPT_FAMILIES)
    ]

    assert set() == sets[0] & sets[1]


def test_a_network_is_the_same_whenever_it_is_drawn() -> None:
    """Drawing has no memory: the same key gives the same network, another key another."""
    key, other = network_key(1, NETWORKS, 0), network_key(1, NETWORKS, 1)

    drawn = draw_network(NETWORKS, key)

    assert drawn.key() == draw_network(NETWORKS, key).key()
    assert drawn.key() != draw_network(NETWORKS, other).key()


def test_the_tables_do_not_change_the_graph() -> None:
    """Graph and tables have a stream each: other states and tables leave the arcs of a key alone."""
    key = network_key(1, NETWORKS, 0)

    first = draw_network(NETWORKS, key)
    second = draw_network({**NETWORKS, "states": 4, "concentration": 0.5}, key)

    assert first.graph == second.graph == draw_graph(NETWORKS, key)
    assert first.states != second.states


def test_the_settings_reach_the_generators() -> None:
    """A drawn network has the variables, states and density that its keys say."""
    networks = {**NETWORKS, "variables": 9, "states": 5, "mean_parents": 0.0}

    network = draw_network(networks, network_key(1, networks, 0))

    assert network.cardinalities.tolist() == [5] * 9
    assert network.graph.n_edges == 0


def test_the_graph_uses_the_stream_named_graph() -> None:
    """What is drawn can be had from the key by hand."""
    key = network_key(1, NETWORKS, 0)
    words = [int.from_bytes(key[i : i + 4], "little") for i in range(0, 16, 4)]
    purpose = hashlib.sha256(b"graph").digest()
    words += [int.from_bytes(purpose[i : i + 4], "little") for i in range(0, 16, 4)]
    rng = np.random.Generator(np.random.PCG64(np.random.SeedSequence(words)))

    by_hand = generate_graph("random-order", variables=12, mean_parents=1.2, max_parents=3, rng=rng)

    assert by_hand == draw_network(NETWORKS, key).graph


def test_the_learners_stream_depends_on_dataset_and_rows_only() -> None:
    """Each dataset and row count has a stream of its own."""
    dataset = dataset_key(network_key(1, NETWORKS, 0), 0)
    other = dataset_key(network_key(1, NETWORKS, 0), 1)

    words = [
        int(learner_rng(key, rows).bit_generator.random_raw())
        for key, rows in [(dataset, 100), (dataset, 100), (dataset, 200), (other, 100)]
    ]

    assert words[0] == words[1]
    assert len(set(words)) == 3


def test_the_view_is_that_of_the_dataset() -> None:
    """One column order and relabelling per dataset, each a permutation."""
    dataset = dataset_key(network_key(1, NETWORKS, 0), 0)

    view = draw_view(dataset, [2, 3, 4])

    assert draw_view(dataset, [2, 3, 4]).words() == view.words()
    assert sorted(view.columns.tolist()) == [0, 1, 2]
    assert [[2, 3, 4][j] for j in view.columns] == [len(own) for own in view.relabel]


def test_what_is_told_is_part_of_neither_key() -> None:
    """Networks and datasets are the same whatever is told; a plan that tells nothing has no such data."""
    with_it = PLAN.replace("rows = [100, 200]", "rows = [100, 200]\nknowledge = {stages = true}")
    plan, telling = parse_plan(PLAN), parse_plan(with_it)

    assert network_keys(plan) == network_keys(telling)
    assert learner_keys(plan) == learner_keys(telling)
    assert {canonical_json(condition.data) for condition in plan.conditions} == {"{}"}
    assert {canonical_json(condition.data) for condition in telling.conditions} == {
        '{"knowledge":{"stages":true}}'
    }


def test_a_published_network_is_the_same_for_every_seed_and_replicate() -> None:
    """Its key holds its content and the plan's seed, which the datasets depend on."""
    networks = {"published": "chest-clinic"}

    network = draw_network(networks, network_key(1, networks, 0))
    expected = key_of("network", {"seed": 1, "content": network.key().hex()})

    assert expected == network_key(1, networks, 0).hex() == network_key(1, networks, 5).hex()
    assert network.key() == published_network("chest-clinic").key()
    assert network_key(1, networks, 0) != network_key(2, networks, 0)


def test_a_file_counts_by_its_content(tmp_path: Path) -> None:
    """A renamed file is the same network; a changed one is another, also in the same process."""
    (tmp_path / "one.bif").write_text(TWO_VARIABLES)
    (tmp_path / "two.bif").write_text(TWO_VARIABLES)
    networks = [{"file": str(tmp_path / name)} for name in ("one.bif", "two.bif")]
    keys = [network_key(1, own, 0) for own in networks]

    (tmp_path / "two.bif").write_text(TWO_VARIABLES.replace("0.25, 0.75", "0.375, 0.625"))

    assert keys[0] == keys[1] == network_key(1, networks[0], 0)
    assert keys[1] != network_key(1, networks[1], 0)
    assert draw_network(networks[1], keys[1]).cpts["a"].p.tolist() == [0.375, 0.625]


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('title = "One"', 'title = "Two"'),
        ("rows = [100, 200]", "rows = [50, 100, 200, 400]"),
        ("rows = [100, 200]", "rows = [100, 200]\ndatasets = 5"),
        ("rows = [100, 200]", "rows = [100, 200]\nknowledge = [{}, {arcs = 0.2, wrong = 0.1}]"),
        ("replicates = 3", "replicates = 4"),
        ("variables = [4, 6]", "variables = [6, 8, 4]"),
        ("variables = [4, 6]", 'variables = [4, 6]\ntopology = ["uniform", "random-order"]'),
        ('method = "pc"', 'method = "pc"\nlabel = "Another label"'),
        ('method = "pc"', 'method = "pc"\nseconds = 5\nthreads = 2'),
        ('method = "no-arcs"', 'method = "no-arcs"\n[[learner]]\nmethod = "chow-liu"'),
        ("alpha = 0.02", "vary = {alpha = [0.001, 0.02]}"),
        ("seconds = 10", "seconds = 20\nmemory_mb = 4096"),
        ("seconds = 10", "seconds = 10\n[requirement]\nassurance = 0.9\nbounds = ['class_shd <= 3']"),
    ],
)
def test_an_addition_to_a_plan_leaves_every_key_as_it_was(old: str, new: str) -> None:
    """More rows, learners, replicates, levels, labels or limits move no network and no learner."""
    before = parse_plan(PLAN)
    assert old in PLAN

    after = parse_plan(PLAN.replace(old, new))

    assert network_keys(before) <= network_keys(after)
    assert learner_keys(before) <= learner_keys(after)


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("seed = 7", "seed = 8"),
        ("variables = [4, 6]", "variables = [4, 6]\nmean_parents = 0.7"),
        ("variables = [4, 6]", 'variables = [4, 6]\nstates = "2-4"'),
        ("variables = [4, 6]", "variables = [4, 6]\nconcentration = 0.5"),
    ],
)
def test_another_truth_has_another_key(old: str, new: str) -> None:
    """Whatever changes what is drawn changes the key of every network."""
    before, after = parse_plan(PLAN), parse_plan(PLAN.replace(old, new))

    assert set() == network_keys(before) & network_keys(after)


def test_a_default_that_is_written_out_changes_no_key() -> None:
    """A plan that spells the defaults out is the plan that leaves them out."""
    spelt = PLAN.replace(
        "replicates = 3", 'replicates = 3\nconcentration = 1\nmax_parents = 3\nstates = "2-3"'
    )

    plan = parse_plan(spelt.replace('topology = "random-order"', ""))

    assert network_keys(parse_plan(PLAN)) == network_keys(plan)
