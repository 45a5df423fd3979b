"""What the ledger lacks of a plan, in the order in which it is done.

Replicate by replicate through all conditions (of a given network: dataset by dataset), so that work
that is stopped leaves a balanced ledger; within a dataset from few rows to many, and there in the plan's
order of learners.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from generators.streams import canonical_json
from harness.execution.messages import Request, Work
from harness.ledger.store import KnownRun, RunKey
from harness.plan.expansion import settings_for
from harness.plan.recipes import dataset_key
from harness.plan.schema import Plan
from harness.records import Condition, Learner, Status

# Of one piece of work: what is handed out must fit into a socket's buffer, or the main process could wait
# for a supervisor that waits for the main process.
MAX_REQUESTS = 500


@dataclass(frozen=True, slots=True)
class DatasetSlot:
    """A place of the plan for one dataset: condition, replicate and index, with its keys."""

    condition: int
    replicate: int
    index: int
    network_key: bytes
    dataset_key: bytes


def slots(plan: Plan, network_keys: Mapping[int, list[bytes]]) -> Iterator[DatasetSlot]:
    """Go through all datasets of a plan, unit by unit.

    The unit is the network with all its datasets, or of a given network, where there is one, the dataset.

    Parameters
    ----------
    plan : Plan
    network_keys : mapping of int to list of bytes
        For each condition, the keys of its replicates.
    """
    units = [_units(condition) for condition in plan.conditions]
    for number in range(max(map(len, units), default=0)):
        for position, own in enumerate(units):
            for replicate, index in own[number] if number < len(own) else ():
                key = network_keys[position][replicate]
                yield DatasetSlot(position, replicate, index, key, dataset_key(key, index))


def _units(condition: Condition) -> list[list[tuple[int, int]]]:
    """Return the datasets of each unit of a condition, as (replicate, index)."""
    if condition.is_given:
        return [[(0, index)] for index in range(condition.datasets)]
    return [
        [(replicate, index) for index in range(condition.datasets)]
        for replicate in range(condition.replicates)
    ]


def missing_work(
    plan: Plan, network_keys: Mapping[int, list[bytes]], known: Mapping[RunKey, KnownRun]
) -> Iterator[Work]:
    """Yield what is to be run: a piece of work per dataset that lacks any run, more if it lacks many."""
    numbers = itertools.count()
    distortions = [canonical_json(condition.data) for condition in plan.conditions]
    settings = [
        [settings_for(learner, condition) for learner in plan.learners] for condition in plan.conditions
    ]
    for slot in slots(plan, network_keys):
        condition = plan.conditions[slot.condition]
        lacking = (
            Request(position, rows, settings[slot.condition][position])
            for rows in plan.rows
            for position, learner in enumerate(plan.learners)
            if is_missing(
                known.get(RunKey(slot.dataset_key, distortions[slot.condition], rows, learner.key)), learner
            )
        )
        while requests := tuple(itertools.islice(lacking, MAX_REQUESTS)):
            yield Work(
                next(numbers),
                slot.condition,
                dict(condition.networks),
                dict(condition.data),
                slot.network_key,
                slot.replicate,
                slot.dataset_key,
                slot.index,
                requests,
            )


def is_missing(known: KnownRun | None, learner: Learner) -> bool:
    """Whether a run is to be done, given what the ledger knows of it.

    Limits are not identity: a run that hit a limit is asked again when today's is higher, and one that
    finished is asked again when it took longer than today's.
    """
    if known is None or known.status == Status.INTERRUPTED:
        return True
    limits = learner.limits
    if known.status == Status.TIMEOUT:
        return known.limits.seconds < limits.seconds
    if known.status == Status.OUT_OF_MEMORY:
        return known.limits.memory_mb < limits.memory_mb
    return known.status == Status.DONE and (known.wall_seconds or 0.0) > limits.seconds
