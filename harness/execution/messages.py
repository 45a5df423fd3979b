"""What the main process and its supervisors say to each other."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from harness.ledger.store import DrawnDataset, DrawnNetwork, edge_positions, graph_of
from harness.records import Outcome, Status


@dataclass(frozen=True, slots=True)
class Request:
    """One run of a dataset: which learner (its position in the plan), on how many of the first rows."""

    learner: int
    rows: int
    settings: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Work:
    """Runs on one dataset, in the order in which they are to be done."""

    number: int
    condition: int
    networks: Mapping[str, Any]
    data: Mapping[str, Any]
    network_key: bytes
    replicate: int
    dataset_key: bytes
    index: int
    requests: tuple[Request, ...]

    @property
    def max_rows(self) -> int:
        """The rows that have to be drawn."""
        return max(request.rows for request in self.requests)


@dataclass(frozen=True, slots=True)
class Drawn:
    """The network and dataset of some work have been drawn."""

    work: Work
    network: DrawnNetwork
    dataset: DrawnDataset


@dataclass(frozen=True, slots=True)
class Ended:
    """A run has ended."""

    work: Work
    request: Request
    outcome: Outcome
    started: str  # UTC, ISO 8601
    overhead_seconds: float  # wall time since the run before, less the learner's own


Event = Drawn | Ended

_PLAIN = (
    "status",
    "cause",
    "extendable",
    "measures",
    "undefined",
    "wall_seconds",
    "cpu_seconds",
    "peak_rss_mb",
    "load",
)


def outcome_fields(outcome: Outcome) -> dict[str, Any]:
    """Return what JSON can hold of an outcome."""
    fields = {name: getattr(outcome, name) for name in _PLAIN}
    return {**fields, "edges": None if outcome.graph is None else edge_positions(outcome.graph)}


def outcome_from(fields: Mapping[str, Any], names: tuple[str, ...]) -> Outcome:
    """Rebuild an outcome from its JSON form, over the variables `names`."""
    plain = {name: fields[name] for name in _PLAIN}
    graph = None if fields["edges"] is None else graph_of(fields["edges"], names)
    return Outcome(**{**plain, "status": Status(fields["status"]), "graph": graph})


def drawn_from(work: Work, fields: Mapping[str, Any]) -> tuple[DrawnNetwork, DrawnDataset]:
    """Rebuild what a runner says that it has drawn."""
    network = DrawnNetwork(
        work.network_key,
        work.networks,
        work.replicate,
        graph_of(fields["edges"], tuple(fields["names"])),
        bytes.fromhex(fields["cpts_digest"]),
    )
    view_digest = bytes.fromhex(fields["view_digest"])
    return network, DrawnDataset(work.dataset_key, work.index, fields["distortions"], view_digest)
