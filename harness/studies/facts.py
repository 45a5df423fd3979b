"""What a report knows of a study beside its runs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from harness.records import Condition, Learner, Requirement


@dataclass(frozen=True, slots=True)
class StudyFacts:
    """The plan and the sessions behind a study's runs.

    Parameters
    ----------
    title : str
    seed : int
    requirement : Requirement or None
    rows : tuple of int
        The plan's row counts.
    learners : tuple of Learner
        In the plan's order; runs refer to them by label.
    conditions : tuple of Condition
        Runs refer to them by their place here.
    sessions : tuple of mapping
        The keys host, cpu, versions (a mapping or a text), workers, started, ended.
    n_expected_runs, n_done_runs : int
        Runs that the plan asks for, and how many of them the ledger has settled.
    plan_text : str
    n_other_runs : int
        Runs in the ledger that are not of this plan, and are left out.
    """

    title: str
    seed: int
    requirement: Requirement | None
    rows: tuple[int, ...]
    learners: tuple[Learner, ...]
    conditions: tuple[Condition, ...]
    sessions: tuple[Mapping[str, Any], ...]
    n_expected_runs: int
    n_done_runs: int
    plan_text: str
    n_other_runs: int = 0

    @property
    def confidence(self) -> float:
        """The confidence of every interval of the report."""
        return 0.95 if self.requirement is None else self.requirement.confidence

    @property
    def labels(self) -> tuple[str, ...]:
        """The learners' labels in the plan's order."""
        return tuple(learner.label for learner in self.learners)

    @property
    def baselines(self) -> frozenset[str]:
        """The labels of trivial methods."""
        return frozenset(learner.label for learner in self.learners if learner.baseline)
