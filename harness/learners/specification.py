"""What a learner is: a function, and what it declares about itself.

A learner is called as ``function(data, rng=rng, knowledge=knowledge, **settings)`` with a `Dataset` under
neutral names; `rng` and `knowledge` (a `Knowledge` over the same names, or None) are left out where its
signature has no such argument. It returns a `Graph`, a networkx directed graph (arcs in both directions
make an undirected edge), an edge list as a pandas frame with the columns source, target and optionally
kind, or an `Answer`. It must not change its input, print, or leave anything behind. It raises `Declined`
for data that it cannot take.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np

from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import DIRECTED, UNDIRECTED, Graph
from generators.settings import Setting, settings_of
from harness.knowledge import Knowledge
from harness.records import Answer, Declined

RETURNS = ("dag", "cpdag", "pdag", "skeleton")
DIRECTIONS = ("class", "causal")
NOT_SETTINGS = frozenset(
    {
        "method",
        "label",
        "source",
        "command",
        "vary",
        "base",
        "threads",
        "seconds",
        "memory_mb",
        "data",
        "rng",
        "knowledge",
    }
)
ATTRIBUTE = "__arcassay_learner__"

Function = TypeVar("Function", bound=Callable[..., Any])


class InvalidAnswer(Exception):
    """A learner returned something that is not the answer it declared."""


@dataclass(frozen=True, slots=True)
class Specification:
    """A learner's function with its declarations.

    Parameters
    ----------
    name : str
    function : callable
    settings : mapping of str to Setting
        The keyword-only arguments of the function, reserved names left out.
    returns : str
        "dag", "cpdag", "pdag" or "skeleton".
    directions : str
        "class": directions within an equivalence class are arbitrary. "causal": they are claims.
    reference : str
    missing : bool
        Whether missing cells are taken.
    threads : int
        How many the learner uses.
    revision : int
        Goes up whenever the same data and stream give another answer.
    exempt : mapping of str to str
        Conformance check -> why the learner need not pass it.
    baseline : bool
        Whether it is a trivial method that is never picked.
    takes_rng, takes_knowledge : bool
        Whether the function has such an argument.
    """

    name: str
    function: Callable[..., Any]
    settings: Mapping[str, Setting]
    returns: str = "pdag"
    directions: str = "class"
    reference: str = ""
    missing: bool = False
    threads: int = 1
    revision: int = 1
    exempt: Mapping[str, str] = field(default_factory=dict)
    baseline: bool = False
    takes_rng: bool = True
    takes_knowledge: bool = False

    @property
    def summary(self) -> str:
        """The first line of the function's docstring."""
        return (inspect.getdoc(self.function) or "").partition("\n")[0]


def learner(
    name: str,
    *,
    returns: str = "pdag",
    directions: str = "class",
    reference: str = "",
    missing: bool = False,
    threads: int = 1,
    revision: int = 1,
    exempt: Mapping[str, str] | None = None,
    baseline: bool = False,
) -> Callable[[Function], Function]:
    """Attach a specification to a function; nothing is registered by importing it.

    Parameters
    ----------
    name : str
        What plans and tables call the method.
    returns : {"pdag", "dag", "cpdag", "skeleton"}
        What sort of graph comes back.
    directions : {"class", "causal"}
        Whether directed edges stand for an equivalence class or are causal claims.
    reference : str
        Author and year.
    missing : bool
        Whether missing cells are taken.
    threads, revision, exempt, baseline
        See `Specification`.

    Raises
    ------
    InputError
        If a declaration is not one of the accepted words.

    Examples
    --------
    >>> @learner("empty", returns="dag", reference="none")
    ... def empty(data, *, alpha: float = 0.05, rng):
    ...     '''Return no arcs.'''
    ...     return Graph.from_edges(data.names)
    >>> specification_of(empty).settings["alpha"].default
    0.05
    """
    if returns not in RETURNS:
        raise InputError(f"learner {name!r}: returns must be one of {', '.join(RETURNS)}, got {returns!r}")
    if directions not in DIRECTIONS:
        raise InputError(
            f"learner {name!r}: directions must be one of {', '.join(DIRECTIONS)}, got {directions!r}"
        )

    def attach(function: Function) -> Function:
        specification = Specification(
            name,
            function,
            _settings(name, function),
            returns,
            directions,
            reference,
            missing,
            threads,
            revision,
            dict(exempt or {}),
            baseline,
            *_takes(function),
        )
        setattr(function, ATTRIBUTE, specification)
        return function

    return attach


def specification_of(function: Callable[..., Any]) -> Specification:
    """Return the specification attached to a function, or one made for a plain function."""
    attached = getattr(function, ATTRIBUTE, None)
    if isinstance(attached, Specification):
        return attached
    if not callable(function):
        raise InputError(f"a learner must be a function, got {type(function).__name__}")
    name = getattr(function, "__name__", type(function).__name__)
    takes_rng, takes_knowledge = _takes(function)
    return Specification(
        name,
        function,
        _settings(name, function),
        takes_rng=takes_rng,
        takes_knowledge=takes_knowledge,
    )


def _takes(function: Callable[..., Any]) -> tuple[bool, bool]:
    parameters = inspect.signature(function).parameters
    return "rng" in parameters, "knowledge" in parameters


def _settings(name: str, function: Callable[..., Any]) -> dict[str, Setting]:
    try:
        return settings_of(function, NOT_SETTINGS)
    except (TypeError, ValueError) as error:
        raise InputError(f"learner {name!r}: {error}") from None


def call(
    specification: Specification,
    data: Dataset,
    settings: Mapping[str, Any],
    rng: np.random.Generator,
    knowledge: Knowledge | None = None,
) -> Answer:
    """Call a learner and bring its answer into one form.

    Parameters
    ----------
    specification : Specification
    data : Dataset
    settings : mapping
        Already in their declared types; the others keep their defaults.
    rng : numpy.random.Generator
    knowledge : Knowledge, optional
        Over the data's variables; a learner that takes none never sees it.

    Raises
    ------
    InvalidAnswer
        If what came back is no graph over the data's variables, or not of the declared sort.
    Declined
        If the learner cannot take the data.
    """
    if data.has_missing and not specification.missing:
        raise Declined(f"{specification.name} takes no missing cells")
    extra: dict[str, Any] = {"rng": rng} if specification.takes_rng else {}
    if specification.takes_knowledge:
        extra["knowledge"] = knowledge
    return to_answer(specification, specification.function(data, **settings, **extra), data.names)


def to_answer(specification: Specification, returned: Any, names: tuple[str, ...]) -> Answer:
    """Bring what a learner returned into an `Answer` over `names`, or say why it is none."""
    answer = returned if isinstance(returned, Answer) else Answer(_to_graph(returned, names))
    graph = answer.graph
    if sorted(graph.names) != sorted(names):
        strange = sorted(set(graph.names) ^ set(names))
        raise InvalidAnswer(f"the graph is not over the data's variables; {strange[0]!r} is on one side only")
    if graph.names != names:
        if answer.p_edge is not None:
            raise InvalidAnswer("an answer with edge probabilities must keep the data's order of variables")
        answer = Answer(graph.reordered(names))
    if specification.returns == "dag" and not answer.graph.is_directed:
        raise InvalidAnswer("the learner declares a DAG but returned an undirected edge")
    if specification.returns == "dag" and not answer.graph.is_acyclic:
        raise InvalidAnswer("the learner declares a DAG but returned a directed cycle")
    if specification.returns == "skeleton" and answer.graph.directed.any():
        raise InvalidAnswer("the learner declares a skeleton but returned a directed edge")
    return answer


def _to_graph(returned: Any, names: tuple[str, ...]) -> Graph:
    if isinstance(returned, Graph):
        return returned
    import networkx as nx
    import pandas as pd

    try:
        if isinstance(returned, nx.DiGraph):
            return Graph.from_networkx(returned, names)
        if isinstance(returned, pd.DataFrame):
            return _from_frame(returned, names)
    except InputError as error:
        raise InvalidAnswer(str(error)) from None
    raise InvalidAnswer(
        "a learner must return a Graph, a networkx.DiGraph or an edge-list frame, "
        f"got {type(returned).__name__}"
    )


def _from_frame(frame: Any, names: tuple[str, ...]) -> Graph:
    lacking = {"source", "target"} - set(frame.columns)
    if lacking:
        raise InvalidAnswer(f"an edge list needs the columns source and target; {min(lacking)!r} is missing")
    kinds = frame["kind"] if "kind" in frame.columns else [DIRECTED] * len(frame)
    edges: dict[str, list[tuple[str, str]]] = {DIRECTED: [], UNDIRECTED: []}
    for source, target, kind in zip(frame["source"], frame["target"], kinds, strict=True):
        if kind not in edges:
            raise InvalidAnswer(f"an edge is {DIRECTED!r} or {UNDIRECTED!r}, got {kind!r}")
        edges[kind].append((str(source), str(target)))
    return Graph.from_edges(names, edges[DIRECTED], edges[UNDIRECTED])
