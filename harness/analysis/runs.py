"""What the analysis reads: one row per run, and how rows fall into cells."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple, cast

import numpy as np
from numpy.typing import NDArray

from harness.records import Status
from harness.scorers.registry import MEASURES

if TYPE_CHECKING:
    import pandas as pd

COLUMNS = (
    "run",
    "condition",
    "rows",
    "network",
    "replicate",
    "dataset",
    "label",
    "method",
    "settings",
    "baseline",
    "status",
    "cause",
    "undefined",
    "session",
)
RESOURCES = ("wall_seconds", "cpu_seconds", "peak_rss_mb")

TRUTH, ANSWER, LEARNER = "truth", "answer", "learner"  # what made a measure undefined


class Cell(NamedTuple):
    """The runs of one learner at one row count of one condition share a cell."""

    condition: int
    rows: int
    label: str


@dataclass(frozen=True, slots=True, eq=False)
class Runs:
    """The runs of a study.

    Parameters
    ----------
    frame : pandas.DataFrame
        One row per run with the columns `COLUMNS`, one column per factor, and one float column per
        measure (NaN where it has no value). `status` holds the texts of `harness.records.Status`;
        `undefined` holds a mapping from measure to a reason that starts with "truth: ", "answer: " or
        "learner: ".
    factors : tuple of str
        The columns that vary over the plan, rows apart.

    Raises
    ------
    ValueError
        If a column is missing.
    """

    frame: pd.DataFrame
    factors: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        lacking = [name for name in (*COLUMNS, *RESOURCES, *self.factors) if name not in self.frame.columns]
        if lacking:
            raise ValueError(f"a frame of runs needs the column {lacking[0]!r}")

    @property
    def measures(self) -> tuple[str, ...]:
        """The registered measures that the frame holds, times and memory apart."""
        return tuple(name for name in MEASURES if name in self.frame.columns and name not in RESOURCES)

    @property
    def n_interrupted(self) -> int:
        """The number of runs that were stopped from outside: no results, they are run again."""
        return int((self.frame["status"] == Status.INTERRUPTED.value).sum())

    def settled(self) -> Runs:
        """Return the runs that ended by themselves: interrupted ones say nothing about a learner."""
        if not self.n_interrupted:
            return self
        return Runs(self.frame[self.frame["status"] != Status.INTERRUPTED.value], self.factors)

    def cells(self) -> Iterator[tuple[Cell, pd.DataFrame]]:
        """Yield each cell with its runs: by condition, row count, then labels as they first appear."""
        order = {label: place for place, label in enumerate(dict.fromkeys(self.frame["label"]))}
        indices = self.frame.groupby(["condition", "rows", "label"], sort=False).indices
        positions = {Cell(*key): place for key, place in cast("dict[Any, Any]", indices).items()}
        for cell in sorted(positions, key=lambda cell: (cell.condition, cell.rows, order[cell.label])):
            yield cell, self.frame.iloc[positions[cell]]

    def n_networks(self) -> dict[int, int]:
        """Return how many networks each condition has."""
        counts = cast("dict[Any, int]", self.frame.groupby("condition")["network"].nunique().to_dict())
        return {int(condition): int(count) for condition, count in counts.items()}

    def units(self) -> dict[int, str]:
        """Return for each condition which column names its independent units.

        The network, as all runs on one network share its luck; where a condition has a single network,
        the dataset, and what is said holds for that network only.
        """
        n_networks = self.n_networks()
        return {condition: "network" if n > 1 else "dataset" for condition, n in n_networks.items()}


def undefined_by(runs: pd.DataFrame, measure: str) -> NDArray[np.object_]:
    """Return what left a measure without a value, run by run.

    Parameters
    ----------
    runs : pandas.DataFrame, n rows
    measure : str

    Returns
    -------
    object array, shape (n,)
        "truth", "answer" or "learner", or "" where no reason is recorded.
    """
    return np.array(
        [reasons.get(measure, "").partition(":")[0] for reasons in runs["undefined"]], dtype=object
    )
