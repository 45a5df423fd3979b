"""What the main process and its supervisors say to each other."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from harness.ledger.store import DrawnDataset, DrawnNetwork
from harness.records import Outcome


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
