"""One stored run again, in this process: for looking into what a learner did."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

from generators.errors import InputError
from generators.settings import nearest
from harness.execution.messages import Request, Work
from harness.execution.one_run import MaterialSource, failed, scored, timed_call
from harness.learners.sources import folder_of, load, own_folder
from harness.plan.expansion import settings_for
from harness.plan.recipes import dataset_key, network_key
from harness.records import Outcome
from harness.studies.reading import SHORT_KEY, Study


@dataclass(frozen=True, slots=True)
class Again:
    """A run done again, beside what the ledger holds of it.

    Parameters
    ----------
    name, label : str
    rows : int
    stored_status : str
    outcome : Outcome
    stored_edges, edges : list of [source, target, kind]
    """

    name: str
    label: str
    rows: int
    stored_status: str
    outcome: Outcome
    stored_edges: list[list[str]]
    edges: list[list[str]]

    @property
    def is_same(self) -> bool:
        """Whether the run ended as before, with the same graph."""
        return self.stored_status == str(self.outcome.status) and self.stored_edges == self.edges

    def document(self) -> dict[str, Any]:
        """Return what a program reads."""
        return {
            "run": self.name,
            "label": self.label,
            "rows": self.rows,
            "stored_status": self.stored_status,
            "status": str(self.outcome.status),
            "cause": self.outcome.cause,
            "same": self.is_same,
            "stored_graph": self.stored_edges,
            "graph": self.edges,
            "measures": dict(self.outcome.measures),
            "undefined": dict(self.outcome.undefined),
            "wall_seconds": self.outcome.wall_seconds,
        }

    def lines(self) -> list[str]:
        """Return what a person reads."""
        lines = [f"Run {self.name}: {self.label} on {self.rows:,} rows."]
        lines.append(f"Then: {self.stored_status}. Now: {self.outcome.status}.")
        if self.outcome.cause:
            lines.append(self.outcome.cause)
        if self.outcome.graph is not None:
            lines.append("The graph is the same." if self.is_same else "The graph differs.")
            lines += [f"  {name}: {value:g}" for name, value in self.outcome.measures.items()]
        return lines


def do_again(study: Study, name: str) -> Again:
    """Rebuild a run's input from its keys, and run it here without limits.

    Parameters
    ----------
    study : Study
    name : str
        As in the first column of the exported runs; a unique beginning will do.

    Raises
    ------
    InputError
        If no run, or more than one, begins so.
    """
    frame = study.runs.frame
    found = frame[frame["run"].str.startswith(name)]
    if len(found) != 1 or not name:
        many = (
            f"{len(found)} runs begin so"
            if len(found)
            else f"there is no such run.{nearest(name, frame['run'])}"
        )
        raise InputError(f"{study.ledger}: run {name!r}: {many}")
    stored = found.iloc[0]
    condition = study.facts.conditions[int(stored["condition"])]
    learner = next(each for each in study.facts.learners if each.label == stored["label"])
    key = network_key(study.facts.seed, condition.networks, int(stored["replicate"]))
    names = [dataset_key(key, i).hex()[:SHORT_KEY] for i in range(condition.datasets)]
    if stored["dataset"] not in names:
        raise InputError(f"{study.ledger}: run {name!r}: its network file has changed since")
    index = names.index(stored["dataset"])
    request = Request(0, int(stored["rows"]), settings_for(learner, condition))
    work = Work(
        0,
        int(stored["condition"]),
        condition.networks,
        condition.data,
        key,
        int(stored["replicate"]),
        dataset_key(key, index),
        index,
        (request,),
    )
    material = MaterialSource().draw(work)
    try:
        with own_folder(folder_of(learner)):
            outcome = scored(material, learner, timed_call(load(learner), material, request))
    except InputError:
        raise
    except (Exception, SystemExit) as error:
        outcome = failed(error)
    edges = [] if outcome.graph is None else [list(edge) for edge in outcome.graph.edges()]
    return Again(
        str(stored["run"]),
        learner.label,
        request.rows,
        str(stored["status"]),
        outcome,
        json.loads(stored["graph"] or "[]"),
        edges,
    )
