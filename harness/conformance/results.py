"""What a conformance check finds, and the calls of the learner that show it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any

from generators.dataset import Dataset
from harness.knowledge import Knowledge


class Result(StrEnum):
    """What became of a check."""

    PASSED = "passed"
    FAILED = "failed"
    SKIPPED = "skipped"  # it says nothing about this learner, for the reason given
    EXPECTED = "expected"  # it failed, and the learner declares that it need not pass, for the reason given


@dataclass(frozen=True, slots=True, eq=False)
class LearnerCall:
    """One call of a learner, with all that is needed to make it again.

    Parameters
    ----------
    data : Dataset
    settings : mapping of str to value
    seed : int
        The learner's stream is ``numpy.random.default_rng(seed)``.
    knowledge : Knowledge, optional
    """

    data: Dataset
    settings: Mapping[str, Any] = field(default_factory=dict)
    seed: int = 0
    knowledge: Knowledge | None = None


@dataclass(frozen=True, slots=True, eq=False)
class CheckRecord:
    """What one check found.

    Parameters
    ----------
    check : str
        Its name.
    fact : str
        What it checks, in one sentence.
    result : Result
    reason : str
        Why, in one sentence, unless it passed: what is wrong, why it says nothing, or why the learner
        need not pass.
    calls : tuple of LearnerCall
        Those that show a failure, on the smallest input that was found to do so; two where an answer is
        compared with another.
    seconds : float
        What the check took.
    """

    check: str
    fact: str
    result: Result
    reason: str = ""
    calls: tuple[LearnerCall, ...] = ()
    seconds: float = 0.0


class Failed(Exception):
    """Raise inside a check to say that its fact does not hold.

    Parameters
    ----------
    reason : str
        One sentence. What stands before a colon or semicolon stays the same from input to input; what
        comes after may differ.
    *calls : LearnerCall
        Those that show it.
    """

    def __init__(self, reason: str, *calls: LearnerCall) -> None:
        super().__init__(reason)
        self.calls = calls


class Skipped(Exception):
    """Raise inside a check to say that it cannot be applied to this learner, and why."""
