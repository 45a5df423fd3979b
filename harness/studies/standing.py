"""How far a study is: what it has, what it lacks, how its runs ended."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from harness.studies.reading import Study


@dataclass(frozen=True, slots=True)
class Standing:
    """A study's counts.

    Parameters
    ----------
    ledger : Path
    title : str
    n_planned, n_settled, n_other : int
        Runs of the newest plan, those of them that are in the ledger, and runs of other plans in it.
    statuses : mapping of label to status to count
    sessions : tuple of mapping
    """

    ledger: Path
    title: str
    n_planned: int
    n_settled: int
    n_other: int
    statuses: dict[str, dict[str, int]]
    sessions: tuple[Any, ...]

    def document(self) -> dict[str, Any]:
        """Return what a program reads."""
        return {
            "ledger": str(self.ledger),
            "title": self.title,
            "planned": self.n_planned,
            "settled": self.n_settled,
            "missing": self.n_planned - self.n_settled,
            "other_plans": self.n_other,
            "learners": self.statuses,
            "sessions": [dict(session) for session in self.sessions],
        }

    def lines(self) -> list[str]:
        """Return what a person reads."""
        lacking = self.n_planned - self.n_settled
        lines = [
            self.title,
            f"{self.n_settled:,} of {self.n_planned:,} runs are in {self.ledger}"
            + (f"; {lacking:,} are missing." if lacking else "; none is missing."),
        ]
        if self.n_other:
            lines.append(f"{self.n_other:,} runs of other plans are kept there too.")
        wide = max((len(label) for label in self.statuses), default=0)
        for label, counts in self.statuses.items():
            lines.append(f"  {label:{wide}}  " + ", ".join(f"{n:,} {status}" for status, n in counts.items()))
        unended = [session for session in self.sessions if session["ended"] is None]
        if unended:
            lines.append(
                f"{len(unended)} of {len(self.sessions)} sessions did not end by themselves, or go on now."
            )
        return lines


def standing_of(study: Study) -> Standing:
    """Count what a study has."""
    frame = study.runs.frame
    statuses = {
        label: dict(sorted(Counter(frame.loc[frame["label"] == label, "status"]).items()))
        for label in study.facts.labels
    }
    facts = study.facts
    return Standing(
        study.ledger,
        facts.title,
        facts.n_expected_runs,
        facts.n_done_runs,
        facts.n_other_runs,
        statuses,
        facts.sessions,
    )
