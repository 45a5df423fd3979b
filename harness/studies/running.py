"""Run what a ledger lacks of a plan, and store every run as it ends."""

from __future__ import annotations

import os
import platform
import socket
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from importlib import metadata
from pathlib import Path
from typing import Any

from generators import compiled
from generators.errors import InputError
from generators.streams import canonical_json
from harness.execution.interruption import Interruption
from harness.execution.local import LocalEngine
from harness.execution.messages import Drawn, Event, Work
from harness.execution.order import missing_work
from harness.execution.progress import Progress
from harness.ledger.store import Ledger
from harness.plan.recipes import network_key
from harness.plan.schema import Plan, expected_runs, read_plan

VERSIONED = ("arcassay", "numpy", "numba", "scipy", "pandas", "networkx")
LEDGER_ENDING = ".ledger"


@dataclass(frozen=True, slots=True)
class RunSummary:
    """What one start of a plan did.

    Parameters
    ----------
    ledger : Path
    n_asked : int
        Runs that the ledger lacked.
    n_done : int
        Runs that ended in this start, in whatever status.
    n_failed : int
        Of those, the ones that ended other than `done`.
    was_stopped : bool
        Whether it was asked to stop before the end.
    seconds : float
    """

    ledger: Path
    n_asked: int
    n_done: int
    n_failed: int
    was_stopped: bool
    seconds: float


class Watcher:
    """What `run_plan` tells whoever watches; every method may be overridden."""

    def compiling(self) -> None:
        """Hear that kernels are about to be compiled, once for this version and machine."""

    def started(self, progress: Progress, n_kept: int) -> None:
        """Hear that the work has begun; `n_kept` runs of the plan are in the ledger already."""

    def advanced(self, progress: Progress) -> None:
        """Hear that some runs may have ended."""

    def stopping(self) -> None:
        """Hear that a first wish to stop was noted: what runs now is finished."""


def ledger_path(plan: Path) -> Path:
    """Return where a plan's ledger is unless something else is said: beside it, NAME.ledger."""
    return plan.with_suffix(LEDGER_ENDING)


def default_workers(threads: int = 1) -> int:
    """Return how many runs at a time suit this machine."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return max(1, cores // threads)


def run_plan(
    plan: Plan | Path | str,
    ledger: Path | str | None = None,
    *,
    n_workers: int | None = None,
    watcher: Watcher | None = None,
) -> RunSummary:
    """Run what the ledger lacks of a plan.

    The same plan gives the same runs to the bit with any number of workers and after any interruption,
    times and memory apart.

    Parameters
    ----------
    plan : Plan or path
    ledger : path, optional
        Made where there is none; NAME.ledger beside NAME.toml by default.
    n_workers : int, optional
        Runs at a time; by default one per core.
    watcher : Watcher, optional

    Raises
    ------
    InputError
        If the plan is wrong, the ledger is not one that this version reads, or a network is drawn
        differently today than when the ledger was begun.
    MachineStop
        If the disk is full, the ledger is in use, or workers cannot be kept alive.
    """
    if not isinstance(plan, Plan):
        plan = read_plan(plan)
    if ledger is None:
        if plan.path is None:
            raise InputError("a plan that is not a file needs the path of a ledger")
        ledger = ledger_path(plan.path)
    watcher = watcher or Watcher()
    keys = network_keys(plan)
    with Ledger.open_to_write(ledger) as store:
        store.store_plan(plan.text, bytes.fromhex(plan.digest), expansion(plan, keys), plan.learners)
        works = list(missing_work(plan, keys, store.known_runs()))
        n_threads = max(learner.limits.threads for learner in plan.learners)
        workers = min(n_workers or default_workers(n_threads), max(1, len(works)))
        progress = Progress.of(works, workers)
        watcher.started(progress, expected_runs(plan) - progress.total)
        n_asked = progress.total
        stopped = False
        if works:
            session = store.begin_session(
                host=socket.gethostname(), cpu=_processor(), versions=versions(), workers=workers
            )
            stopped = _work_off(plan, works, workers, store, session, progress, watcher)
            store.end_session(session, "stopped" if stopped else "finished")
    return RunSummary(
        Path(ledger), n_asked, progress.done, progress.n_failed, stopped, progress.elapsed_seconds
    )


def _work_off(
    plan: Plan,
    works: Sequence[Work],
    n_workers: int,
    store: Ledger,
    session: int,
    progress: Progress,
    watcher: Watcher,
) -> bool:
    was_stopped = False
    for threads, own in _by_threads(plan, works).items():
        if not compiled.is_warm():
            watcher.compiling()
        with LocalEngine(plan.learners, n_workers=n_workers, threads=threads) as engine:

            def first_wish(engine: LocalEngine = engine) -> None:
                engine.stop()
                watcher.stopping()

            with Interruption(first_wish) as interruption:
                for batch in engine.batches(iter(own)):
                    for event in batch:
                        _store(event, plan, store, session)
                        if not isinstance(event, Drawn):
                            progress.note(event)
                    if batch:
                        store.commit()
                    watcher.advanced(progress)
                was_stopped = interruption.was_asked
        if was_stopped:
            break
    return was_stopped


def _store(event: Event, plan: Plan, store: Ledger, session: int) -> None:
    if isinstance(event, Drawn):
        store.store_material(event.network, event.dataset)
        return
    dataset = store.dataset_id(event.work.dataset_key, canonical_json(event.work.data))
    learner = plan.learners[event.request.learner]
    store.store_run(
        dataset,
        event.request.rows,
        learner,
        event.outcome,
        session=session,
        asked_by="run",
        started=event.started,
    )


def _by_threads(plan: Plan, works: Sequence[Work]) -> dict[int, list[Work]]:
    """Part the work by the threads its learners may use, which are set before a process starts."""
    groups: dict[int, list[Work]] = {}
    for work in works:
        for threads in sorted({plan.learners[request.learner].limits.threads for request in work.requests}):
            own = tuple(r for r in work.requests if plan.learners[r.learner].limits.threads == threads)
            groups.setdefault(threads, []).append(replace(work, requests=own))
    return groups


def network_keys(plan: Plan) -> dict[int, list[bytes]]:
    """Return, for each condition, the keys of its networks, replicate by replicate."""
    return {
        position: [network_key(plan.seed, condition.networks, r) for r in range(condition.replicates)]
        for position, condition in enumerate(plan.conditions)
    }


def expansion(plan: Plan, keys: Mapping[int, list[bytes]]) -> dict[str, Any]:
    """Return what a plan expands to, as the ledger keeps it: enough to read every run without the plan."""
    return {
        "title": plan.title,
        "seed": plan.seed,
        "rows": list(plan.rows),
        "requirement": asdict(plan.requirement),
        # In the plan's order, which the keys of JSON objects do not keep.
        "factors": list(dict.fromkeys(name for condition in plan.conditions for name in condition.factors)),
        "learners": [{**asdict(learner), "settings": dict(learner.settings)} for learner in plan.learners],
        "conditions": [
            {**asdict(condition), "network_keys": keys[position]}
            for position, condition in enumerate(plan.conditions)
        ],
        "notes": list(plan.notes),
    }


def versions() -> dict[str, str]:
    """Return the versions that a session records."""
    found = {"python": platform.python_version()}
    for name in VERSIONED:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "not installed"
    return found


def _processor() -> str:
    try:
        with open("/proc/cpuinfo") as file:
            for line in file:
                if line.startswith("model name"):
                    return line.partition(":")[2].strip()
    except OSError:
        pass
    return platform.processor() or platform.machine()
