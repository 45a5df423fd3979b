"""The learner that is checked, and one call of it."""

from __future__ import annotations

import contextlib
import io
import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from generators.classes import class_of
from generators.dataset import Dataset
from generators.graph import Graph
from harness.conformance.results import Failed, LearnerCall
from harness.execution.one_run import failed
from harness.knowledge import Knowledge
from harness.learners.specification import Specification, call
from harness.records import Answer, Declined, Status


@dataclass(frozen=True, slots=True)
class Subject:
    """A learner with the settings with which it is checked.

    Parameters
    ----------
    specification : Specification
    settings : mapping of str to value
        In their declared types; the others keep their defaults.
    """

    specification: Specification
    settings: Mapping[str, Any] = field(default_factory=dict)

    def asked(self, data: Dataset, knowledge: Knowledge | None = None) -> LearnerCall:
        """Return the call of this learner on some data."""
        return LearnerCall(data, self.settings, knowledge=knowledge)

    def returning(self, returns: str) -> Subject:
        """Return the same learner as if it declared another sort of graph."""
        return replace(self, specification=replace(self.specification, returns=returns))


def learn(subject: Subject, data: Dataset, knowledge: Knowledge | None = None) -> Answer:
    """Call the learner in this process, quietly; what it prints and warns of is judged elsewhere.

    Raises
    ------
    Failed
        If it raises an exception, or returns what is no answer.
    Declined
        If it says that it cannot take the data.
    """
    asked = subject.asked(data, knowledge)
    quiet = io.StringIO()
    try:
        with contextlib.redirect_stdout(quiet), contextlib.redirect_stderr(quiet), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return answer_to(subject, asked)
    except Declined:
        raise
    except (Exception, SystemExit) as error:
        raise Failed(what_it_raised(error), asked) from error


def answer_to(subject: Subject, asked: LearnerCall) -> Answer:
    """Make a call and return the answer, whatever it raises."""
    told = {} if asked.knowledge is None else {"knowledge": asked.knowledge}
    rng = np.random.default_rng(asked.seed)
    return call(subject.specification, asked.data, asked.settings, rng, **told)


def what_it_raised(error: BaseException) -> str:
    """Say in one line what a learner's exception means."""
    outcome = failed(error)
    text = outcome.cause.partition("\n")[0]
    return f"it raised {text}" if outcome.status is Status.ERROR else text


def compared(subject: Subject, graph: Graph) -> Graph:
    """Return what of an answer is claimed: the CPDAG of a DAG whose directions stand for a class."""
    specification = subject.specification
    if specification.returns == "dag" and specification.directions == "class":
        return class_of(graph)[0]
    return graph
