"""One run: draw the network and dataset, call the learner on its view, score what comes back."""

from __future__ import annotations

import contextlib
import os
import resource
import statistics
import time
import traceback
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from generators.dataset import Dataset, View
from generators.graph import Graph
from generators.network import Network
from generators.sampling import sample
from generators.streams import canonical_json, digest
from harness.execution import memory
from harness.execution.messages import Request, Work
from harness.knowledge import Knowledge
from harness.learners.specification import InvalidAnswer, Specification, call
from harness.ledger.store import DrawnDataset, DrawnNetwork, edge_positions, graph_of
from harness.plan.recipes import draw_network, draw_view, learner_rng
from harness.plan.telling import told
from harness.records import Answer, Declined, Learner, Outcome, Status
from harness.scorers.structure import score_answer
from harness.scorers.truth import Truth

REPEAT_BELOW_SECONDS = 1e-3
CALLS_WHEN_SHORT = 3
MAX_CAUSE_CHARACTERS = 4000


@dataclass(frozen=True, slots=True)
class Material:
    """What all runs on one dataset share."""

    work: Work
    network: Network
    truth: Truth
    view: View
    masked: Dataset
    knowledge: Knowledge | None  # what learners are told, over the masked variables

    @property
    def drawn_network(self) -> DrawnNetwork:
        """The network as the ledger stores it."""
        work = self.work
        return DrawnNetwork(
            work.network_key, work.networks, work.replicate, self.network.graph, self.network.key()
        )

    @property
    def drawn_dataset(self) -> DrawnDataset:
        """The dataset as the ledger stores it."""
        words: list[Any] = list(self.view.words())
        if self.knowledge is not None:
            words += [np.packbits(own).tobytes() for own in (self.knowledge.arcs, self.knowledge.excluded)]
        view_digest = digest("view", words)
        return DrawnDataset(
            self.work.dataset_key, self.work.index, canonical_json(self.work.data), view_digest
        )


@dataclass(frozen=True, slots=True)
class Timed:
    """A learner's graph in network order, and what its call took."""

    graph: Graph
    wall_seconds: float
    cpu_seconds: float
    peak_rss_mb: float
    load: float


_CLOCKED = ("wall_seconds", "cpu_seconds", "peak_rss_mb", "load")


def timed_fields(timed: Timed) -> dict[str, Any]:
    """Return what JSON can hold of a timed answer."""
    fields = {name: getattr(timed, name) for name in _CLOCKED}
    return {**fields, "edges": edge_positions(timed.graph)}


def timed_from(fields: Mapping[str, Any], names: tuple[str, ...]) -> Timed:
    """Rebuild a timed answer from its JSON form."""
    return Timed(graph_of(fields["edges"], names), **{name: fields[name] for name in _CLOCKED})


class MaterialSource:
    """Draws the material of work, keeping the last network, which the next dataset may share."""

    def __init__(self) -> None:
        self._key: bytes | None = None
        self._network: Network | None = None
        self._truth: Truth | None = None

    def draw(self, work: Work) -> Material:
        """Draw network, dataset, view and knowledge of some work."""
        if self._network is None or self._truth is None or self._key != work.network_key:
            self._network = draw_network(work.networks, work.network_key)
            self._truth = Truth.of(self._network)
            self._key = work.network_key
        data = sample(self._network, work.max_rows, work.dataset_key)
        view = draw_view(work.dataset_key, self._network.cardinalities.tolist())
        masked, truth = view.mask(data), self._truth
        knowledge = told(self._network.graph, work.data, work.dataset_key)
        if knowledge is not None:
            truth = Truth.of(self._network, knowledge)
            knowledge = knowledge.reordered(view.columns, masked.names)
        return Material(work, self._network, truth, view, masked, knowledge)


def compile_for_wide_codes(specification: Specification, material: Material, request: Request) -> None:
    """Call a built-in learner on two rows, untimed, where codes take two bytes.

    Its kernels for one byte were compiled at the start; those for two are when they are first met, which
    must not count as the learner's time.
    """
    if material.masked.codes.dtype != np.uint8:
        rng = learner_rng(material.work.dataset_key, request.rows)
        with contextlib.suppress(Exception):  # what is wrong shows in the run itself
            data = material.masked.first(min(2, request.rows))
            call(specification, data, request.settings, rng, material.knowledge)


def timed_call(specification: Specification, material: Material, request: Request) -> Timed:
    """Call the learner on its view, and time nothing but that call.

    A call under a millisecond is made three times with the same stream, and the median time counts;
    the first answer is the answer, also of a learner that cannot be called again.
    """
    data = material.masked.first(request.rows)
    rng = learner_rng(material.work.dataset_key, request.rows)
    beginning = rng.bit_generator.state
    load = os.getloadavg()[0]
    memory.reset_peak()
    answer, wall, cpu = _clocked(specification, data, request.settings, rng, material.knowledge)
    peak = memory.peak_mb()
    walls, cpus = [wall], [cpu]
    if wall < REPEAT_BELOW_SECONDS:
        with contextlib.suppress(Exception):
            for _ in range(CALLS_WHEN_SHORT - 1):
                rng.bit_generator.state = beginning
                _, wall, cpu = _clocked(specification, data, request.settings, rng, material.knowledge)
                walls.append(wall)
                cpus.append(cpu)
    graph = material.view.unmask(answer.graph, material.network.names)
    return Timed(graph, statistics.median(walls), statistics.median(cpus), peak, load)


def scored(material: Material, learner: Learner, timed: Timed) -> Outcome:
    """Score a learner's graph against the truth."""
    scores = score_answer(material.truth, timed.graph, returns=learner.returns, directions=learner.directions)
    return Outcome(
        Status.DONE,
        graph=timed.graph,
        extendable=scores.extendable,
        measures=scores.values,
        undefined=scores.undefined,
        wall_seconds=timed.wall_seconds,
        cpu_seconds=timed.cpu_seconds,
        peak_rss_mb=timed.peak_rss_mb,
        load=timed.load,
    )


def failed(error: BaseException) -> Outcome:
    """Say what became of a run whose learner raised `error`."""
    text = _plain(_text_of(error)) or type(error).__name__
    if isinstance(error, Declined):
        return Outcome(Status.DECLINED, text)
    if isinstance(error, InvalidAnswer):
        return Outcome(Status.INVALID, text)
    if isinstance(error, MemoryError):
        return Outcome(Status.OUT_OF_MEMORY, text)
    if isinstance(error, SystemExit):
        return Outcome(Status.CRASHED, f"the learner ended the process (exit code {text})")
    trace = _plain("".join(traceback.format_exception(error))[-MAX_CAUSE_CHARACTERS:])
    return Outcome(Status.ERROR, f"{type(error).__name__}: {text.splitlines()[0]}\n{trace}")


def _text_of(error: BaseException) -> str:
    try:
        return str(error)
    except Exception:  # a stranger's class
        return ""


def _plain(text: str) -> str:
    """Shorten a stranger's text, and leave out what a file of UTF-8 text cannot hold."""
    return text[:MAX_CAUSE_CHARACTERS].encode("utf-8", "replace").decode().replace("\0", "?").strip()


def _clocked(
    specification: Specification,
    data: Dataset,
    settings: Mapping[str, Any],
    rng: np.random.Generator,
    knowledge: Knowledge | None,
) -> tuple[Answer, float, float]:
    cpu = _cpu_clock()
    wall = time.perf_counter()
    answer = call(specification, data, settings, rng, knowledge)
    return answer, time.perf_counter() - wall, _cpu_clock() - cpu


def _cpu_clock() -> float:
    # The learner's own children count once they have ended.
    children = resource.getrusage(resource.RUSAGE_CHILDREN)
    return time.process_time() + children.ru_utime + children.ru_stime
