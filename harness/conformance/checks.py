"""All checks by name, and their running: one record after another.

>>> from harness.learners.builtin import built_in
>>> record = run_check("strong-pair", built_in("no-arcs"))
>>> record.result, record.reason
(<Result.EXPECTED: 'expected'>, 'A baseline that says of all variables that they are unrelated.')
>>> run_check("strong-pair", built_in("pairwise")).result
<Result.PASSED: 'passed'>
"""

from __future__ import annotations

import inspect
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from types import MappingProxyType
from typing import Any

from generators.errors import InputError
from generators.settings import nearest
from harness.conformance import answers, finding, hard_inputs, symmetry, told, traces
from harness.conformance.results import CheckRecord, Failed, LearnerCall, Result, Skipped
from harness.conformance.subject import Subject
from harness.learners.specification import Specification

Check = Callable[[Subject], None]  # raises Failed or Skipped, or the fact holds


def _named(*checks: Check) -> Mapping[str, Check]:
    names = (check.__name__.removeprefix("check_").replace("_", "-") for check in checks)
    return MappingProxyType(dict(zip(names, checks, strict=True)))


CHECKS = _named(
    answers.check_own_variables,
    answers.check_declared_sort,
    answers.check_acyclic,
    answers.check_input_unchanged,
    answers.check_same_stream,
    symmetry.check_permuted_columns,
    symmetry.check_relabelled_states,
    finding.check_independent_columns,
    finding.check_strong_pair,
    finding.check_v_structure,
    hard_inputs.check_one_variable,
    hard_inputs.check_two_variables,
    hard_inputs.check_constant_columns,
    hard_inputs.check_identical_columns,
    hard_inputs.check_unseen_states,
    hard_inputs.check_ten_rows,
    hard_inputs.check_missing_cells,
    told.check_told_knowledge,
    hard_inputs.check_many_variables,
    traces.check_time_limit,
    traces.check_declared_threads,
    traces.check_nothing_left,
)


def fact_of(name: str) -> str:
    """Return what a check checks, in one sentence.

    Examples
    --------
    >>> fact_of("same-stream")
    'The same data and the same stream give the same answer, whatever was learned in between.'
    """
    return (inspect.getdoc(CHECKS[name]) or "").partition("\n")[0]


def run_checks(
    specification: Specification, settings: Mapping[str, Any] | None = None, *, only: Iterable[str] = ()
) -> Iterator[CheckRecord]:
    """Run checks of a learner, and yield each record as soon as it is there.

    Parameters
    ----------
    specification : Specification
    settings : mapping of str to value, optional
        In their declared types; the others keep their defaults.
    only : iterable of str
        The names of the checks to be run; by default all, in their fixed order.

    Raises
    ------
    InputError
        At once, if `only` or the learner's exemptions name a check that does not exist.

    Notes
    -----
    Most checks call the learner in this process, without limits: a learner that never returns keeps this
    function waiting. Those of processes, and the one of 200 variables, fork.
    """
    names = list(only) or list(CHECKS)
    _refuse_unknown(names)
    _refuse_unknown(specification.exempt, f"learner {specification.name!r}: exempt: ")
    return (run_check(name, specification, settings) for name in names)


def run_check(
    name: str, specification: Specification, settings: Mapping[str, Any] | None = None
) -> CheckRecord:
    """Run one check of a learner.

    Parameters
    ----------
    name : str
        A key of `CHECKS`.
    specification, settings
        As in `run_checks`.

    Raises
    ------
    InputError
        If the name, or one in the learner's exemptions, is not that of a check.
    """
    _refuse_unknown([name])
    _refuse_unknown(specification.exempt, f"learner {specification.name!r}: exempt: ")
    began = time.perf_counter()
    result, reason = Result.PASSED, ""
    calls: tuple[LearnerCall, ...] = ()
    try:
        CHECKS[name](Subject(specification, dict(settings or {})))
    except Skipped as skip:
        result, reason = Result.SKIPPED, str(skip)
    except Failed as failure:
        result, reason, calls = Result.FAILED, str(failure), failure.calls
        if name in specification.exempt:
            result, reason = Result.EXPECTED, specification.exempt[name]
    return CheckRecord(name, fact_of(name), result, _sentence(reason), calls, time.perf_counter() - began)


def _refuse_unknown(names: Iterable[str], place: str = "") -> None:
    for name in names:
        if name not in CHECKS:
            accepted = ", ".join(sorted(CHECKS))
            raise InputError(f"{place}unknown check {name!r}; accepted: {accepted}.{nearest(name, CHECKS)}")


def _sentence(text: str) -> str:
    text = text.strip()
    end = "" if not text or text.endswith((".", "!", "?")) else "."
    return text[:1].upper() + text[1:] + end
