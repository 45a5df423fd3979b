"""Apply a learner to data at hand, and say how a real file differs from what was rehearsed."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from generators.settings import nearest
from harness.knowledge import Knowledge
from harness.learners.builtin import BUILT_IN, built_in
from harness.learners.sources import load, resolve
from harness.learners.specification import Specification, call, specification_of
from harness.plan.expansion import n_variables
from harness.plan.recipes import given_network
from harness.plan.telling import KNOWLEDGE
from harness.records import Condition, Learner
from harness.studies.facts import StudyFacts

if TYPE_CHECKING:
    import pandas as pd


def learn(
    method: str | Callable[..., Any],
    data: Dataset | pd.DataFrame,
    *,
    rng: np.random.Generator | None = None,
    knowledge: Knowledge | None = None,
    **settings: Any,
) -> Graph:
    """Apply a learner to data.

    Parameters
    ----------
    method : str or callable
        A built-in method's name, a source ("FILE.py:NAME", "package.module:NAME"), or a function.
    data : Dataset or pandas.DataFrame
        Of a frame, every column is a variable and every distinct value a state; NaN is missing.
    rng : numpy.random.Generator, optional
        By default a fresh one: give one to make the answer repeatable.
    knowledge : Knowledge, optional
        What is known of these variables, in any order.
    **settings
        Of the learner.

    Returns
    -------
    Graph
        Over the data's variables, in their order.

    Raises
    ------
    InputError
        If there is no such method or setting, a value is not accepted, the method takes no knowledge, or
        the knowledge is about other variables.
    harness.records.Declined
        If the learner cannot take the data.
    harness.learners.specification.InvalidAnswer
        If it returned something that is no answer.

    Examples
    --------
    >>> codes = np.random.default_rng(1).integers(0, 2, size=(500, 1), dtype=np.uint8)
    >>> data = Dataset(("a", "b"), (("no", "yes"), ("no", "yes")), np.hstack([codes, codes]))
    >>> learn("hill-climbing", data, rng=np.random.default_rng(1)).n_edges
    1
    """
    specification = find_specification(method)
    parsed = parse_settings(specification, settings)
    rows = data if isinstance(data, Dataset) else dataset_of(data)
    if knowledge is not None:
        refuse_knowledge_not_taken(specification)
        knowledge = knowledge.over(rows.names)
    rng = rng if rng is not None else np.random.default_rng()
    return call(specification, rows, parsed, rng, knowledge).graph


def refuse_knowledge_not_taken(specification: Specification) -> None:
    """Raise an InputError if a method takes no knowledge: it would be given in vain."""
    if not specification.takes_knowledge:
        takers = [name for name in BUILT_IN if built_in(name).takes_knowledge]
        others = f"; built-in ones that do: {', '.join(takers)}" if takers else ""
        raise InputError(f"{specification.name}: takes no knowledge{others}.")


def find_specification(method: str | Callable[..., Any]) -> Specification:
    """Return the specification of a method given by name, source or function."""
    if not isinstance(method, str):
        return specification_of(method)
    if ":" in method:
        return resolve(None, method, Path()).specification
    return resolve(method, None, Path()).specification


def parse_settings(specification: Specification, settings: Mapping[str, Any]) -> dict[str, Any]:
    """Bring settings to their declared types, or say what is wrong with all of them at once."""
    parsed, faults = {}, []
    for name, value in settings.items():
        setting = specification.settings.get(name)
        if setting is None:
            hint = nearest(name, specification.settings)
            faults.append(f"{specification.name}: {name}: unknown setting.{hint}")
            continue
        try:
            parsed[name] = setting.parse(value)
        except ValueError as error:
            faults.append(f"{specification.name}: {name}: {error}.")
    for name, setting in specification.settings.items():
        if setting.default is inspect.Parameter.empty and name not in settings:
            faults.append(f"{specification.name}: {name}: is required: {setting.accepted}.")
    if faults:
        raise InputError(*faults)
    return parsed


def dataset_of(frame: pd.DataFrame) -> Dataset:
    """Read a pandas frame as categorical rows: distinct values, sorted, are the states.

    A categorical column keeps its categories as states, in their order.
    """
    from generators.dataset import code_dtype

    columns, states = [], []
    for name in frame.columns:
        categories = frame[name].astype("category").cat
        columns.append(categories.codes.to_numpy(dtype=np.int64))
        states.append(tuple(str(value) for value in categories.categories))
        if not states[-1]:
            raise InputError(f"column {str(name)!r} holds no value")
    dtype = code_dtype(max(map(len, states), default=1))
    codes = np.empty(frame.shape, dtype=dtype, order="F")
    for j, column in enumerate(columns):
        codes[:, j] = np.where(column < 0, np.iinfo(dtype).max, column)
    return Dataset(tuple(map(str, frame.columns)), tuple(states), codes)


def rehearsed_learner(facts: StudyFacts, label: str | None) -> tuple[Learner, Specification]:
    """Return a learner of a study, by its label, with its code as it was rehearsed.

    Raises
    ------
    InputError
        If the label is not in the study, is absent where there are several, or the code has changed.
    """
    learners = {learner.label: learner for learner in facts.learners}
    if label is None:
        own = [name for name, learner in learners.items() if not learner.baseline]
        if len(own) != 1:
            raise InputError(f"--label: say which learner: {', '.join(map(repr, own))}")
        label = own[0]
    if label not in learners:
        raise InputError(
            f"--label: {label!r} is not in the study; it has {', '.join(map(repr, learners))}."
            f"{nearest(label, learners)}"
        )
    return learners[label], load(learners[label])


def differences(facts: StudyFacts, data: Dataset, *, has_knowledge: bool = False) -> list[str]:
    """Say how a real study differs from the rehearsed one: rows, variables, states, gaps, knowledge.

    Parameters
    ----------
    facts : StudyFacts
    data : Dataset
    has_knowledge : bool
        Whether anything is told beside the data.

    Returns
    -------
    list of str
        A sentence each; empty where nothing of this differs.
    """
    found = []
    if not min(facts.rows) <= data.n_rows <= max(facts.rows):
        found.append(
            f"The file has {data.n_rows:,} rows; {min(facts.rows):,} to {max(facts.rows):,} were rehearsed."
        )
    sizes = sorted({n_variables(condition) for condition in facts.conditions})
    if data.n_variables not in sizes:
        found.append(f"The file has {data.n_variables} variables; {_listed(sizes)} were rehearsed.")
    found += _state_differences(facts.conditions, data)
    if data.has_missing:
        share = float((data.codes == data.missing_code).mean())
        found.append(f"{share:.1%} of the file's cells are missing; none was missing in the rehearsal.")
    was_told = {KNOWLEDGE in condition.data for condition in facts.conditions}
    if has_knowledge and was_told == {False}:
        found.append("Knowledge is given here; none was told in the rehearsal.")
    if not has_knowledge and was_told == {True}:
        found.append("No knowledge is given here; in the rehearsal some was always told.")
    return found


def _state_differences(conditions: tuple[Condition, ...], data: Dataset) -> list[str]:
    low, high = zip(*(_state_range(condition) for condition in conditions), strict=True)
    outside = [
        name
        for name, count in zip(data.names, data.cardinalities.tolist(), strict=True)
        if not min(low) <= count <= max(high)
    ]
    if not outside:
        return []
    shown = ", ".join(outside[:5]) + (" and others" if len(outside) > 5 else "")
    return [
        f"{len(outside)} of {data.n_variables} variables have fewer or more states than the {min(low)} to "
        f"{max(high)} rehearsed: {shown}."
    ]


def _state_range(condition: Condition) -> tuple[int, int]:
    from generators.cpts import parse_states

    if condition.is_given:
        counts = given_network(condition.networks).cardinalities
        return int(counts.min()), int(counts.max())
    return parse_states(condition.networks["states"])


def _listed(numbers: list[int]) -> str:
    words = [str(number) for number in numbers]
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"
