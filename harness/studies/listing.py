"""What is registered, as records that the command line prints."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any

from generators.catalogue import CATALOGUE
from generators.cpts import CPT_FAMILIES
from generators.errors import InputError
from generators.settings import Registry, Setting, nearest
from generators.topologies import TOPOLOGIES
from harness.learners.builtin import BUILT_IN, built_in
from harness.scorers.registry import MEASURES

Record = dict[str, Any]


def listed(category: str) -> list[Record]:
    """Return the records of one category, each with at least `name`, `summary` and `reference`.

    Raises
    ------
    InputError
        If there is no such category.
    """
    if category not in CATEGORIES:
        hint = nearest(category, CATEGORIES)
        raise InputError(f"list: there is no category {category!r}; accepted: {', '.join(CATEGORIES)}.{hint}")
    return CATEGORIES[category]()


def find_record(category: str, name: str) -> Record:
    """Return one record by its name."""
    records = {record["name"]: record for record in listed(category)}
    if name not in records:
        raise InputError(f"list: there is no {name!r} among the {category}.{nearest(name, records)}")
    return records[name]


def _learners() -> list[Record]:
    records = []
    for name in BUILT_IN:
        specification = built_in(name)
        records.append(
            {
                "name": name,
                "summary": specification.summary,
                "reference": specification.reference,
                "returns": specification.returns,
                "directions": specification.directions,
                "takes_knowledge": specification.takes_knowledge,
                "baseline": specification.baseline,
                "revision": specification.revision,
                "settings": _settings(specification.settings),
                "text": _text(specification.function),
            }
        )
    return records


def _registered(registry: Registry) -> list[Record]:
    return [
        {
            "name": entry.name,
            "summary": entry.summary,
            "reference": entry.reference,
            "revision": entry.revision,
            "settings": _settings(entry.settings),
            "text": _text(entry.function),
        }
        for entry in registry.values()
    ]


def _measures() -> list[Record]:
    return [asdict(measure) for measure in MEASURES.values()]


def _networks() -> list[Record]:
    records = []
    for name, entry in CATALOGUE.items():
        network = entry.network()
        records.append(
            {
                "name": name,
                "summary": f"{len(network.names)} variables, {network.graph.n_edges} arcs, "
                f"{network.n_free} free parameters",
                "reference": entry.source,
                "from_memory": entry.from_memory,
                "note": entry.note,
            }
        )
    return records


def _text(function: Callable[..., Any]) -> str:
    """Return a function's docstring without its examples, which are for readers of the code."""
    return (inspect.getdoc(function) or "").partition("\nExamples\n")[0].rstrip()


def _settings(settings: Mapping[str, Setting]) -> list[Record]:
    return [
        {
            "name": setting.name,
            "accepted": setting.accepted,
            "default": None if setting.default is inspect.Parameter.empty else setting.default,
            "required": setting.default is inspect.Parameter.empty,
        }
        for setting in settings.values()
    ]


CATEGORIES: Mapping[str, Callable[[], list[Record]]] = {
    "learners": _learners,
    "topologies": lambda: _registered(TOPOLOGIES),
    "cpts": lambda: _registered(CPT_FAMILIES),
    "measures": _measures,
    "networks": _networks,
}
