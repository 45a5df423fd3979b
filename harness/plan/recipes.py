"""From a plan to keys, and from keys to networks, views and streams.

A key says all that a thing depends on and nothing else. A network's key holds the plan's seed, the
effective [networks] keys and the replicate; never rows, learners or the title. A dataset's key holds its
network's and an index; never rows, since a smaller dataset is the first rows of a larger one. A learner's
key holds its method, its settings and its code; never its label or limits. So adding rows, a learner, a
label, a replicate or a limit to a plan changes no other run.
"""

from __future__ import annotations

import functools
import os
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from generators.catalogue import published_network
from generators.cpts import CPT_FAMILIES, generate_network
from generators.dataset import View
from generators.errors import InputError
from generators.files import read_network_with_notes
from generators.graph import Graph
from generators.network import Network
from generators.settings import Registered
from generators.streams import digest, stream
from generators.topologies import TOPOLOGIES, generate_graph

BASE_KEYS = ("variables", "topology", "states", "cpts")


def network_key(seed: int, networks: Mapping[str, Any], replicate: int) -> bytes:
    """Return the key of a network.

    Parameters
    ----------
    seed : int
        The plan's.
    networks : mapping
        The effective [networks] keys of a condition. Settings of the topology and the CPT family that
        have their declared default are left out of the key, and the `revision` of both is put in. For a
        given network its content counts instead, so a renamed file is the same network.
    replicate : int
        Of a given network there is one; the replicate is left out.

    Returns
    -------
    bytes
        16 bytes.
    """
    if is_given(networks):
        return digest("network", {"seed": seed, "content": _content(given_network(networks))})
    return digest("network", {"seed": seed, "networks": _recipe(networks), "replicate": replicate})


def dataset_key(network: bytes, index: int) -> bytes:
    """Return the key of the dataset with this index (from 0) of the network with this key."""
    return digest("dataset", {"network": network, "index": index})


def learner_key(method: str, settings: Mapping[str, Any], *, revision: int, origin_digest: str) -> bytes:
    """Return the key of a learner.

    Parameters
    ----------
    method : str
        The built-in name, or what `harness.learners.sources` calls the learner.
    settings : mapping
        In their declared types, defaults left out.
    revision : int
        Of a built-in method; the key of any other holds the digest of its code instead.
    origin_digest : str
        Empty for a built-in method.
    """
    version = {"code": origin_digest} if origin_digest else {"revision": revision}
    return digest("learner", {"method": method, "settings": settings, **version})


def draw_network(networks: Mapping[str, Any], key: bytes) -> Network:
    """Draw the network with this key, or read the given one.

    Parameters
    ----------
    networks : mapping
        The effective [networks] keys of a condition.
    key : bytes
        From `network_key`. The graph and the tables have a stream each, so that a change of the CPT
        family leaves the way the graph is drawn alone.
    """
    if is_given(networks):
        return given_network(networks)
    return generate_network(
        draw_graph(networks, key),
        cpts=networks["cpts"],
        states=networks["states"],
        rng=stream("cpts", key),
        **_own(CPT_FAMILIES[networks["cpts"]], networks),
    )


def draw_graph(networks: Mapping[str, Any], key: bytes) -> Graph:
    """Draw only the graph of the network with this key; the networks are not given ones."""
    return generate_graph(
        networks["topology"],
        variables=networks["variables"],
        rng=stream("graph", key),
        **_own(TOPOLOGIES[networks["topology"]], networks),
    )


def draw_view(dataset: bytes, cardinalities: Sequence[int]) -> View:
    """Draw what learners see of a dataset, the same for all of them and at all row counts.

    Parameters
    ----------
    dataset : bytes
        The dataset's key.
    cardinalities : sequence of int
        The number of states of each variable, in network order.
    """
    return View.draw(cardinalities, stream("view", dataset))


def learner_rng(dataset: bytes, rows: int) -> np.random.Generator:
    """Return the stream of a learner on one dataset at one row count, the same for every learner.

    Nothing of the learner is in it: a relabelled learner draws the same numbers, and compared ones share
    them (common random numbers).
    """
    return stream("learner", digest("learner draw", {"dataset": dataset, "rows": rows}))


def is_given(networks: Mapping[str, Any]) -> bool:
    """Whether the network is given (a file, a published one), not drawn."""
    return "file" in networks or "published" in networks


def given_network(networks: Mapping[str, Any]) -> Network:
    """Return the given network of a condition: read from its file, or a published one.

    Raises
    ------
    InputError
        If the file cannot be read or is no network.
    """
    if "published" in networks:
        return _published(networks["published"])
    return _read_file(networks["file"])[0]


def given_notes(networks: Mapping[str, Any]) -> tuple[str, ...]:
    """Return what was noted when the file of a given network was read (rows that were renormalised)."""
    return _read_file(networks["file"])[1] if "file" in networks else ()


def _read_file(path: str) -> tuple[Network, tuple[str, ...]]:
    try:
        facts = os.stat(path)
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}.") from None
    return _read(path, facts.st_mtime_ns, facts.st_size)


@functools.lru_cache(maxsize=16)
def _read(path: str, changed: int, size: int) -> tuple[Network, tuple[str, ...]]:
    return read_network_with_notes(path)


@functools.lru_cache(maxsize=16)
def _content(network: Network) -> bytes:
    return network.key()


@functools.lru_cache(maxsize=16)
def _published(name: str) -> Network:
    return published_network(name)


def _recipe(networks: Mapping[str, Any]) -> dict[str, Any]:
    topology, family = TOPOLOGIES[networks["topology"]], CPT_FAMILIES[networks["cpts"]]
    fields = {key: networks[key] for key in BASE_KEYS}
    for registered in (topology, family):
        for name, value in _own(registered, networks).items():
            if value != registered.settings[name].default:
                fields[name] = value
    return {**fields, "revision": {"topology": topology.revision, "cpts": family.revision}}


def _own(registered: Registered, networks: Mapping[str, Any]) -> dict[str, Any]:
    return {name: networks[name] for name in registered.settings if name in networks}
