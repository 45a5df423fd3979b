"""Value types that more than one layer speaks of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.graph import Graph


class Status(StrEnum):
    """How a run ended."""

    DONE = "done"
    DECLINED = "declined"  # the learner said that it cannot: memory needed, missing cells, too large
    TIMEOUT = "timeout"
    OUT_OF_MEMORY = "out-of-memory"
    CRASHED = "crashed"  # the process died: a signal, an exit of its own
    ERROR = "error"  # the learner raised an exception
    INVALID = "invalid"  # the learner returned something that is no answer
    INTERRUPTED = "interrupted"  # stopped from outside; run again on resume


class Declined(Exception):
    """Raise inside a learner to say that it cannot take this dataset, and why.

    The run ends `declined` with the message as its cause.
    """


class MachineStop(Exception):
    """The machine stopped the work: disk full, file gone, ledger in use.

    The message is one line. The command line ends with exit code 3; the ledger can be resumed.
    """


@dataclass(frozen=True, slots=True)
class Answer:
    """What a learner returned, brought into one form.

    Parameters
    ----------
    graph : Graph
        Over the dataset's variables, in the dataset's order.
    p_edge : float64 array, shape (p, p), optional
        Probability or frequency of each adjacency (symmetric), for learners that average.
    """

    graph: Graph
    p_edge: NDArray[np.float64] | None = None


@dataclass(frozen=True, slots=True)
class Interval:
    """An estimate with its interval.

    Parameters
    ----------
    value, low, high : float
    confidence : float
        Between 0 and 1.
    method : str
        How the interval was made, in words.
    n : float
        The number of independent units behind it.
    """

    value: float
    low: float
    high: float
    confidence: float
    method: str
    n: float


@dataclass(frozen=True, slots=True)
class Limits:
    """What one run may take.

    Parameters
    ----------
    seconds : float
        Wall time of the learner's own call.
    memory_mb : int
        Resident memory of the run's process group, in units of 2^20 bytes.
    threads : int
    """

    seconds: float = 60.0
    memory_mb: int = 2048
    threads: int = 1


@dataclass(frozen=True, slots=True)
class Learner:
    """A method with its settings and a label, as a plan names it.

    Parameters
    ----------
    label : str
        Unique within a plan; never identity.
    method : str
        The registered name, or the source.
    source : str or None
        "FILE.py:NAME" (an absolute path) or "package.module:NAME"; None for built-in methods.
    settings : mapping of str to value
        Only those that differ from the defaults.
    returns : str
        "dag", "cpdag", "pdag" or "skeleton".
    directions : str
        "class" or "causal": whether directed edges claim causal direction.
    revision : int
        Of a built-in method.
    origin_digest : str
        Digest of the source's code, empty for built-in methods.
    limits : Limits
    key : bytes
        Digest of method, settings and code.
    baseline : bool
        Whether it is a trivial method that `choose` never picks.
    """

    label: str
    method: str
    source: str | None
    settings: Mapping[str, Any]
    returns: str
    directions: str
    revision: int
    origin_digest: str
    limits: Limits
    key: bytes
    baseline: bool = False


@dataclass(frozen=True, slots=True)
class Bound:
    """One bound on a measure, as in "skeleton_recall >= 0.7".

    Parameters
    ----------
    measure : str
    relation : str
        ">=" or "<=" (also ">" or "<").
    value : float
    """

    measure: str
    relation: str
    value: float

    def is_met(self, value: float) -> bool:
        """Whether a defined value of the measure meets the bound."""
        if self.relation == ">=":
            return value >= self.value
        if self.relation == "<=":
            return value <= self.value
        if self.relation == ">":
            return value > self.value
        return value < self.value

    def __str__(self) -> str:
        return f"{self.measure} {self.relation} {self.value:g}"


@dataclass(frozen=True, slots=True)
class Requirement:
    """Bounds that one run must all meet, and how surely.

    Parameters
    ----------
    bounds : tuple of Bound
    assurance : float
        The wanted probability, over networks, datasets, column orders and the learner's randomness,
        that a run meets all bounds (O'Hagan, Stevens and Campbell 2005, from memory).
    confidence : float
        Of every interval in the answers.
    precision, max_rows, max_runs, max_failed
        Of the search for the row count and of comparisons.
    """

    bounds: tuple[Bound, ...]
    assurance: float = 0.8
    confidence: float = 0.95
    precision: float = 0.1
    max_rows: int = 100_000
    max_runs: int = 20_000
    max_failed: float = 0.05


@dataclass(frozen=True, slots=True)
class Condition:
    """One combination of all factors but the rows.

    Parameters
    ----------
    networks : mapping
        Effective [networks] keys in their declared types: either those of a generator (`variables`,
        `topology`, `states`, `cpts` and the settings of that topology and CPT family), or `file`, or
        `published`.
    data : mapping
        Effective [data] keys other than `rows` and `datasets`: `knowledge` (see `harness.plan.telling`),
        where anything is told.
    factors : mapping of str to str, int or float
        The keys that vary over the plan, with this condition's levels: what tables show.
    replicates : int
        Networks to draw (1 for a given network).
    datasets : int
        Datasets per network.
    """

    networks: Mapping[str, Any]
    data: Mapping[str, Any] = field(default_factory=dict)
    factors: Mapping[str, Any] = field(default_factory=dict)
    replicates: int = 1
    datasets: int = 1

    @property
    def is_given(self) -> bool:
        """Whether the network is given, not drawn."""
        return "file" in self.networks or "published" in self.networks


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one run: the supervisor's last word on it.

    Parameters
    ----------
    status : Status
    cause : str
        Why, for every status but `done`; one line first, details after.
    graph : Graph or None
        In network order and names; None unless `done`.
    extendable : bool or None
        Whether the graph has a consistent extension.
    measures : mapping of str to float
        Defined measures only.
    undefined : mapping of str to str
        Measure -> reason; the reason starts with "truth: ", "answer: " or "learner: ", which is what
        made it undefined.
    wall_seconds, cpu_seconds, peak_rss_mb : float or None
        Of the learner's own call.
    load : float or None
        The host's load average when the call began.
    """

    status: Status
    cause: str = ""
    graph: Graph | None = None
    extendable: bool | None = None
    measures: Mapping[str, float] = field(default_factory=dict)
    undefined: Mapping[str, str] = field(default_factory=dict)
    wall_seconds: float | None = None
    cpu_seconds: float | None = None
    peak_rss_mb: float | None = None
    load: float | None = None
