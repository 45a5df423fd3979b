"""Which measures there are: what each is, in which unit, and whether more of it is better."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType


@dataclass(frozen=True, slots=True)
class Measure:
    """A number about one run.

    Parameters
    ----------
    name : str
    unit : str
    better : str
        "lower" or "higher".
    needs : str
        What it is computed from: "graph", the true and the learned graph, or "run", the learner's call.
    reference : str
        Author and year; "common practice" where it has no source of its own.
    summary : str
        One line.
    """

    name: str
    unit: str
    better: str
    needs: str
    reference: str
    summary: str


_IN_ORDER = (
    Measure(
        "class_shd",
        "node pairs",
        "lower",
        "graph",
        "Tsamardinos, Brown and Aliferis 2006",
        "Structural Hamming distance of the equivalence classes: node pairs whose edge mark differs.",
    ),
    Measure(
        "shd_per_arc",
        "node pairs per arc",
        "lower",
        "graph",
        "Tsamardinos, Brown and Aliferis 2006",
        "class_shd divided by the number of arcs of the truth.",
    ),
    Measure(
        "dag_shd",
        "node pairs",
        "lower",
        "graph",
        "Tsamardinos, Brown and Aliferis 2006",
        "Structural Hamming distance of the DAGs, a reversal counted once; for claimed causal directions.",
    ),
    Measure(
        "skeleton_precision",
        "share",
        "higher",
        "graph",
        "common practice",
        "Share of the learned adjacencies that are true.",
    ),
    Measure(
        "skeleton_recall",
        "share",
        "higher",
        "graph",
        "common practice",
        "Share of the true adjacencies that were learned.",
    ),
    Measure(
        "skeleton_f1",
        "share",
        "higher",
        "graph",
        "van Rijsbergen 1979",
        "Harmonic mean of the skeleton's precision and recall, 2 TP / (2 TP + FP + FN).",
    ),
    Measure(
        "direction_precision",
        "share",
        "higher",
        "graph",
        "common practice",
        "Share of the directed edges of the learned class that the true class has.",
    ),
    Measure(
        "direction_recall",
        "share",
        "higher",
        "graph",
        "common practice",
        "Share of the directed edges of the true class that the learned class has.",
    ),
    Measure(
        "collider_precision",
        "share",
        "higher",
        "graph",
        "Verma and Pearl 1990",
        "Share of the learned unshielded colliders that are true.",
    ),
    Measure(
        "collider_recall",
        "share",
        "higher",
        "graph",
        "Verma and Pearl 1990",
        "Share of the true unshielded colliders that were learned.",
    ),
    Measure(
        "imap",
        "0 or 1",
        "higher",
        "graph",
        "Pearl 1988",
        "Whether the learned graph states only independencies that hold in the true DAG.",
    ),
    Measure(
        "minimal_imap",
        "0 or 1",
        "higher",
        "graph",
        "Pearl 1988",
        "Whether the learned DAG is an I-map and would be none without any one of its arcs.",
    ),
    Measure(
        "perfect_map",
        "0 or 1",
        "higher",
        "graph",
        "Pearl 1988",
        "Whether the learned graph is Markov equivalent to the true DAG.",
    ),
    Measure("wall_seconds", "s", "lower", "run", "common practice", "Wall time of the learner's own call."),
    Measure(
        "cpu_seconds", "s", "lower", "run", "common practice", "Processor time of the learner's own call."
    ),
    Measure(
        "peak_rss_mb",
        "MiB",
        "lower",
        "run",
        "common practice",
        "Peak resident memory during the learner's own call.",
    ),
)

MEASURES: Mapping[str, Measure] = MappingProxyType({measure.name: measure for measure in _IN_ORDER})
GRAPH_MEASURES = tuple(measure.name for measure in _IN_ORDER if measure.needs == "graph")
