"""What a plan tells learners of the truth: shares of its arcs, drawn per dataset, or what a file says.

What `[data] knowledge` says is one mapping, in which defaults are left out:

- `arcs`: the share of the true arcs that is told as being there;
- `excluded`: the share of the ordered pairs (x, y), x != y, without an arc x -> y that is told as such;
- `stages`: true for the generations of the true DAG (a variable's stage is the length of the longest
  directed path that ends in it), or a number K of waves, as equal in size as possible (the first ones one
  larger), cut from a topological order: of the variables whose parents stand in it already, the one with
  the smallest of uniformly drawn priorities comes next. Of fewer than K variables each is a wave;
- `wrong`: the share of each of these that is told wrong;
- `statements`: what a file says, word for word, instead of all the others.

A share of m things is its exact product with m, rounded half up. Arcs and pairs are told in a random order,
so that a higher share contains a lower one. Nothing told contradicts anything else told. Wrong statements
come in one by one, arcs first, then exclusions, then stages, each as follows; where none is possible, fewer
are wrong.

- A wrong arc takes the place of the last true one told. It is drawn uniformly from the pairs without an arc
  that contradict nothing told so far.
- A wrong exclusion takes the place of the last true one told. It is of a true arc that is not told as being
  there: those that would be told last come first, so that each is equally likely.
- Variables are gone through in random order. One is moved to a stage drawn uniformly from the others that
  contradict no arc told, if there is any, until the share of variables stands in wrong stages.

So the true arcs and exclusions told at a higher `wrong` are among those told at a lower one.
"""

from __future__ import annotations

import heapq
from collections.abc import Iterable, Mapping
from decimal import ROUND_HALF_UP, Decimal
from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.graph import Graph
from generators.streams import stream
from harness.knowledge import Knowledge

KNOWLEDGE = "knowledge"
NOTHING = "nothing"

Pairs = NDArray[np.int64]  # shape (m, 2), in the order in which they are told
Marks = NDArray[np.bool_]
Stage = NDArray[np.float64]


def told(graph: Graph, data: Mapping[str, Any], dataset: bytes) -> Knowledge | None:
    """Draw what learners are told of a network with one dataset.

    Parameters
    ----------
    graph : Graph
        The true DAG.
    data : mapping
        The effective [data] keys of a condition.
    dataset : bytes
        The dataset's key.

    Returns
    -------
    Knowledge or None
        Over the graph's names in their order; None where the plan tells nothing.

    Examples
    --------
    >>> from generators.streams import digest
    >>> chain = Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")])
    >>> known = told(chain, {"knowledge": {"stages": True}}, digest("dataset", 1))
    >>> known.excluded.astype(int).tolist()
    [[1, 0, 0], [1, 1, 0], [1, 1, 1]]
    """
    level = data.get(KNOWLEDGE)
    if level is None:
        return None
    if "statements" in level:
        return Knowledge.of(graph.names, **level["statements"])
    truth, wrong = graph.arrow, level.get("wrong", 0.0)
    in_order = _stream("arcs", dataset).permutation(np.argwhere(truth))
    arcs = in_order[: rounded(level.get("arcs", 0.0), len(in_order))]
    excluded = _exclusions(truth, level.get("excluded", 0.0), _stream("excluded", dataset))
    stage = _stages(graph, level.get("stages", False), _stream("stages", dataset))
    if wrong:
        added = _wrong_arcs(graph, arcs, excluded, stage, wrong, _stream("wrong arcs", dataset))
        n_true = len(arcs) - len(added)
        arcs = np.vstack([arcs[:n_true], added])
        not_there = in_order[n_true:][::-1][: rounded(wrong, len(excluded))]
        excluded = np.vstack([excluded[: len(excluded) - len(not_there)], not_there])
        if "stages" in level:
            stage = _with_wrong_stages(graph, arcs, stage, wrong, _stream("wrong stages", dataset))
    return Knowledge.completed(graph.names, _marks(arcs, graph), _marks(excluded, graph), stage)


def _stream(what: str, dataset: bytes) -> np.random.Generator:
    return stream(f"knowledge/{what}", dataset)


def rounded(share: float, count: int) -> int:
    """Return the whole number nearest to a share of a count, the larger of two.

    The share counts as it is written: 0.29 of 50 is 14.5, so 15.

    Examples
    --------
    >>> rounded(0.29, 50), rounded(0.5, 3), rounded(0.1, 4)
    (15, 2, 0)
    """
    return int((Decimal(repr(share)) * count).quantize(Decimal(1), rounding=ROUND_HALF_UP))


def _exclusions(truth: Marks, share: float, rng: np.random.Generator) -> Pairs:
    if not share:  # the pairs of a large network are many
        return np.empty((0, 2), dtype=np.int64)
    pairs = np.argwhere(~(truth | np.eye(len(truth), dtype=np.bool_)))
    return rng.permutation(pairs)[: rounded(share, len(pairs))]


def _marks(pairs: Pairs, graph: Graph) -> Marks:
    marks = np.zeros(graph.arrow.shape, dtype=np.bool_)
    marks[pairs[:, 0], pairs[:, 1]] = True
    return marks


def _stages(graph: Graph, stages: bool | int, rng: np.random.Generator) -> Stage:
    """Return the stage of each variable, counted from 1, or NaN for each where no stages are told."""
    stage = np.full(graph.n_variables, np.nan)
    if stages is True:
        stage[:] = 1
        for x in graph.order():
            children = graph.arrow[x]
            stage[children] = np.maximum(stage[children], stage[x] + 1)
    elif stages:
        order = _drawn_order(graph, rng)
        for number, wave in enumerate(np.array_split(order, min(stages, len(order))), start=1):
            stage[wave] = number
    return stage


def _drawn_order(graph: Graph, rng: np.random.Generator) -> NDArray[np.int64]:
    priority = rng.random(graph.n_variables).tolist()
    n_parents = graph.arrow.sum(axis=0).tolist()
    ready = [(priority[x], x) for x, count in enumerate(n_parents) if count == 0]
    heapq.heapify(ready)
    order = []
    while ready:
        _, x = heapq.heappop(ready)
        order.append(x)
        for y in np.flatnonzero(graph.arrow[x]).tolist():
            n_parents[y] -= 1
            if n_parents[y] == 0:
                heapq.heappush(ready, (priority[y], y))
    return np.array(order, dtype=np.int64)


def _wrong_arcs(
    graph: Graph, arcs: Pairs, excluded: Pairs, stage: Stage, wrong: float, rng: np.random.Generator
) -> Pairs:
    gone, priority = _marks(excluded, graph), rng.random(graph.arrow.shape)
    added = np.empty((0, 2), dtype=np.int64)
    for n_wrong in range(1, rounded(wrong, len(arcs)) + 1):
        there = _marks(np.vstack([arcs[: len(arcs) - n_wrong], added]), graph)
        contradicts = Knowledge.completed(graph.names, there, gone, stage).excluded
        is_possible = ~(graph.arrow | there | contradicts)
        if not is_possible.any():
            break
        best = np.argmin(np.where(is_possible, priority, np.inf))
        added = np.vstack([added, np.divmod(best, graph.n_variables)])
    return added


def _with_wrong_stages(
    graph: Graph, arcs: Pairs, stage: Stage, wrong: float, rng: np.random.Generator
) -> Stage:
    moved, n_left = stage.copy(), rounded(wrong, graph.n_variables)
    nowhere = np.full(graph.n_variables, np.nan)
    nothing = np.zeros(graph.arrow.shape, dtype=np.bool_)
    # Without exclusions of its own, knowledge excludes the arcs against its paths, and no others.
    is_after = Knowledge.completed(graph.names, _marks(arcs, graph), nothing, nowhere).excluded.T
    order, place = rng.permutation(graph.n_variables), rng.random(graph.n_variables)
    for x in order.tolist():
        others = np.arange(graph.n_variables) != x
        low = moved[others & is_after[:, x]].max(initial=1)
        high = moved[others & is_after[x]].min(initial=stage.max())
        possible = [s for s in range(int(low), int(high) + 1) if s != stage[x]]
        if n_left and possible:
            moved[x] = possible[int(place[x] * len(possible))]
            n_left -= 1
    return moved


# --- in words ---------------------------------------------------------------------------------------------


def short_text(level: Mapping[str, Any]) -> str:
    """Return what is told as tables show it.

    Examples
    --------
    >>> short_text({"arcs": 0.2, "stages": True}), short_text({"stages": 3, "wrong": 0.05}), short_text({})
    ('arcs 0.2, stages', 'stages 3, wrong 0.05', 'none')
    """
    parts = [key if value is True else f"{key} {value}" for key, value in level.items()]
    return ", ".join(parts) or "none"


def sentence(conditions_data: Iterable[Mapping[str, Any]]) -> str | None:
    """Say what learners are told in the conditions of a plan, or None where nothing is told.

    Parameters
    ----------
    conditions_data : iterable of mapping
        The effective [data] keys of each condition.

    Examples
    --------
    >>> sentence([{}, {"knowledge": {"arcs": 0.2, "stages": True, "wrong": 0.05}}])
    'Told to learners beforehand: nothing; or 20 % of the true arcs, stages by generation, 5 % of each wrong.'
    """
    levels = list(dict.fromkeys(_in_words(data.get(KNOWLEDGE, {})) for data in conditions_data))
    if levels in ([], [NOTHING]):
        return None
    return f"Told to learners beforehand: {'; or '.join(levels)}."


def _in_words(level: Mapping[str, Any]) -> str:
    parts = []
    for kind, said in level.get("statements", {}).items():
        parts.append(f"{kind} from a file ({len(said)})")
    if "arcs" in level:
        parts.append(f"{_percent(level['arcs'])} of the true arcs")
    if "excluded" in level:
        parts.append(f"{_percent(level['excluded'])} of the arcs that are not there, as excluded")
    if "stages" in level:
        how = "by generation" if level["stages"] is True else f"in {level['stages']} waves"
        parts.append(f"stages {how}")
    if "wrong" in level:
        parts.append(f"{_percent(level['wrong'])} of each wrong")
    return ", ".join(parts) or NOTHING


def _percent(share: float) -> str:
    return f"{100 * share:.10g} %"
