"""The share of runs that meet a requirement, and what that says at the plan's row counts."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from itertools import groupby
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from harness.analysis.intervals import clustered_wilson
from harness.analysis.runs import TRUTH, Cell, Runs, undefined_by
from harness.records import Interval, Requirement, Status

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class MetShare:
    """How often the runs of a cell meet the requirement.

    Parameters
    ----------
    cell : Cell
    interval : Interval or None
        The share of runs that end done and meet all bounds; None when every network is left out.
    n_runs, n_units : int
        Runs counted, failed ones included, and the independent units behind them.
    n_met, n_failed, n_undefined : int
        Runs that meet all bounds; that did not end done; that ended done without a value for a bounded
        measure. The last two do not meet the requirement.
    n_left_out, n_networks : int
        Networks of the condition that are left out, for every learner alike, because their truth leaves
        a bounded measure undefined; and all networks of the condition.
    """

    cell: Cell
    interval: Interval | None
    n_runs: int
    n_units: int
    n_met: int
    n_failed: int
    n_undefined: int
    n_left_out: int
    n_networks: int

    @property
    def share_left_out(self) -> float:
        """The share of the condition's networks that are left out."""
        return self.n_left_out / self.n_networks


@dataclass(frozen=True, slots=True)
class GridAnswer:
    """What the shares at the plan's row counts say about one learner in one condition.

    A reading at grid points, each interval for itself: no search between them.

    Parameters
    ----------
    condition : int
    label : str
    sufficient : MetShare or None
        At the smallest row count whose whole interval is at or above the assurance.
    best : MetShare or None
        At the smallest row count whose share is at or above the assurance.
    falls_below : tuple of MetShare
        Larger row counts than `best`'s where the share is below the assurance again.
    largest : MetShare or None
        Where the share is greatest, at the smallest such row count; None without any share.
    checked_to : int
        The largest row count with runs.
    is_at_smallest : bool
        Whether `best` is at the smallest row count with runs, so that fewer rows may do.
    """

    condition: int
    label: str
    sufficient: MetShare | None
    best: MetShare | None
    falls_below: tuple[MetShare, ...]
    largest: MetShare | None
    checked_to: int
    is_at_smallest: bool


def met_shares(runs: Runs, requirement: Requirement) -> tuple[MetShare, ...]:
    """Count in every cell the runs that meet the requirement.

    A run that failed, or whose answer leaves a bounded measure undefined, does not meet it. A network
    whose truth leaves one undefined is no part of the question: it is left out for every learner and row
    count of its condition, whichever run showed it.

    Parameters
    ----------
    runs : Runs
    requirement : Requirement

    Returns
    -------
    tuple of MetShare
        By condition, rows and label.
    """
    settled = runs.settled()
    units = settled.units()
    n_networks = settled.n_networks()
    left_out = _networks_left_out(settled.frame, requirement)
    return tuple(
        _met_share(
            cell,
            frame,
            requirement,
            units[cell.condition],
            left_out.get(cell.condition, frozenset()),
            n_networks[cell.condition],
        )
        for cell, frame in settled.cells()
    )


def _networks_left_out(frame: pd.DataFrame, requirement: Requirement) -> dict[int, frozenset[str]]:
    shows = np.zeros(len(frame), dtype=bool)
    for bound in requirement.bounds:
        shows |= undefined_by(frame, bound.measure) == TRUTH
    left_out: dict[int, set[str]] = {}
    for condition, network in zip(frame["condition"][shows], frame["network"][shows], strict=True):
        left_out.setdefault(int(condition), set()).add(network)
    return {condition: frozenset(networks) for condition, networks in left_out.items()}


def _met_share(
    cell: Cell,
    frame: pd.DataFrame,
    requirement: Requirement,
    unit: str,
    left_out: frozenset[str],
    n_networks: int,
) -> MetShare:
    asked = frame[~frame["network"].isin(left_out)]
    done = asked["status"].to_numpy(dtype=object) == Status.DONE.value
    meets, defined = _meets(asked, requirement)
    meets &= done
    clusters = asked[unit].to_numpy(dtype=object)
    return MetShare(
        cell,
        clustered_wilson(meets, clusters, requirement.confidence) if len(asked) else None,
        len(asked),
        len(set(clusters)),
        int(meets.sum()),
        int((~done).sum()),
        int((done & ~defined).sum()),
        len(left_out),
        n_networks,
    )


def _meets(frame: pd.DataFrame, requirement: Requirement) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return which runs meet all bounds, and which have a value for every bounded measure."""
    meets, defined = np.ones(len(frame), dtype=bool), np.ones(len(frame), dtype=bool)
    for bound in requirement.bounds:
        values = frame[bound.measure].to_numpy(dtype=np.float64)
        has_value = ~np.isnan(values)
        defined &= has_value
        meets &= has_value & np.array([bound.is_met(value) for value in values], dtype=bool)
    return meets, defined


def grid_answers(shares: Iterable[MetShare], assurance: float) -> tuple[GridAnswer, ...]:
    """Read from the shares at the row counts of the plan which of them reach the assurance.

    Parameters
    ----------
    shares : iterable of MetShare
    assurance : float

    Returns
    -------
    tuple of GridAnswer
        One per condition and label, in the order in which labels first appear in a condition.
    """
    shares = tuple(shares)
    order = {label: place for place, label in enumerate(dict.fromkeys(share.cell.label for share in shares))}

    def curve(share: MetShare) -> tuple[int, int]:
        return share.cell.condition, order[share.cell.label]

    answers = []
    for (condition, _), own in groupby(sorted(shares, key=curve), key=curve):
        points = sorted(own, key=lambda share: share.cell.rows)
        answers.append(_grid_answer(condition, points, assurance))
    return tuple(answers)


def _grid_answer(condition: int, points: list[MetShare], assurance: float) -> GridAnswer:
    known = [(share, share.interval) for share in points if share.interval is not None]
    sufficient = next((share for share, interval in known if interval.low >= assurance), None)
    best = next((share for share, interval in known if interval.value >= assurance), None)
    return GridAnswer(
        condition,
        points[0].cell.label,
        sufficient,
        best,
        ()
        if best is None
        else tuple(
            share
            for share, interval in known
            if share.cell.rows > best.cell.rows and interval.value < assurance
        ),
        max(known, key=lambda pair: pair[1].value)[0] if known else None,
        points[-1].cell.rows,
        best is not None and best is points[0],
    )
