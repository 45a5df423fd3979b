"""Exact probabilities of a network by variable elimination.

Eliminating a variable multiplies the tables that mention it and sums it out. The order decides how large
the products become; it is chosen greedily, the variable with the smallest product first and the earlier
variable among equals (the minimum-weight order; Koller and Friedman 2009, chapter 9). The order is found
from the scopes alone, so that a product that would not fit is refused before memory is taken.

`marginals` runs the elimination once and then sends what it learned back (Dechter 1999, bucket
elimination; the division is that of Jensen, Lauritzen and Olesen 1990).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.network import Network
from generators.settings import nearest

MAX_CELLS = 1 << 26  # half a gigabyte

Evidence = dict[int, int]


@dataclass(frozen=True, slots=True)
class _Factor:
    """A table over variables by position: `scope` ascending, one axis each."""

    scope: tuple[int, ...]
    table: NDArray[np.float64]


def joint(
    network: Network, names: Sequence[str], given: Mapping[str, str] | None = None
) -> NDArray[np.float64]:
    """Return the exact joint distribution of some variables, given states of others.

    Parameters
    ----------
    network : Network
    names : sequence of str
        Different variables, each an axis of the result in this order. One that is also given has its
        whole probability at its state.
    given : mapping of str to str, optional
        Variable -> state.

    Returns
    -------
    float64 array, shape (r1, ..., rk)
        Sums to 1.

    Raises
    ------
    InputError
        If a name or state is unknown, a name stands twice, what is given has probability 0 (or one
        below the range of doubles), or a table of more than 2^26 cells would be needed.

    Examples
    --------
    >>> from generators.graph import Graph
    >>> from generators.network import Cpt
    >>> cpts = {"rain": Cpt("rain", (), np.array([0.75, 0.25])),
    ...         "wet": Cpt("wet", ("rain",), np.array([[0.9, 0.1], [0.2, 0.8]]))}
    >>> graph = Graph.from_edges(["rain", "wet"], directed=[("rain", "wet")])
    >>> network = Network(graph, (("no", "yes"), ("no", "yes")), cpts)
    >>> joint(network, ["wet"], {"rain": "yes"}).tolist()
    [0.2, 0.8]
    >>> joint(network, ["wet", "rain"]).round(3).tolist()
    [[0.675, 0.05], [0.075, 0.2]]
    """
    evidence = _evidence(network, given or {})
    query = [_position(network, name) for name in names]
    if len(set(query)) != len(query):
        raise InputError(f"a joint distribution needs different variables, got {', '.join(names)}")
    sides = network.cardinalities.tolist()
    _refuse_if_large(math.prod(sides[j] for j in query))
    free = [j for j in query if j not in evidence]
    factors = _factors(network, [*query, *evidence], evidence)
    order = _elimination_order(factors, sides, keep=free)[0]
    left = _eliminate(factors, order)[1]
    weights = np.zeros([sides[j] for j in query])
    weights[tuple(evidence.get(j, slice(None)) for j in query)] = left.table.transpose(
        [left.scope.index(j) for j in free]
    )
    return _normalised(weights, given)


def probability(network: Network, event: Mapping[str, str]) -> float:
    """Return the exact probability that some variables are in given states.

    Parameters
    ----------
    network : Network
    event : mapping of str to str
        Variable -> state.

    Raises
    ------
    InputError
        If a name or state is unknown, or a table of more than 2^26 cells would be needed.

    Examples
    --------
    >>> from generators.graph import Graph
    >>> from generators.network import Cpt
    >>> coin = Network(Graph.from_edges(["coin"]), (("heads", "tails"),),
    ...                {"coin": Cpt("coin", (), np.array([0.25, 0.75]))})
    >>> probability(coin, {"coin": "tails"}), probability(coin, {})
    (0.75, 1.0)
    """
    evidence = _evidence(network, event)
    factors = _factors(network, evidence, evidence)
    order = _elimination_order(factors, network.cardinalities.tolist(), keep=())[0]
    return float(_eliminate(factors, order)[1].table)


def marginals(network: Network, given: Mapping[str, str] | None = None) -> dict[str, NDArray[np.float64]]:
    """Return the exact distribution of every variable, given states of some.

    Parameters
    ----------
    network : Network
    given : mapping of str to str, optional
        Variable -> state.

    Returns
    -------
    dict of str to float64 array, shape (r,)
        In the network's order; a variable that is given has its whole probability at its state.

    Raises
    ------
    InputError
        If a name or state is unknown, what is given has probability 0, or the tables, which are all
        kept, would have more than 2^26 cells.

    Examples
    --------
    >>> from generators.graph import Graph
    >>> from generators.network import Cpt
    >>> cpts = {"rain": Cpt("rain", (), np.array([0.75, 0.25])),
    ...         "wet": Cpt("wet", ("rain",), np.array([[0.9, 0.1], [0.2, 0.8]]))}
    >>> graph = Graph.from_edges(["rain", "wet"], directed=[("rain", "wet")])
    >>> network = Network(graph, (("no", "yes"), ("no", "yes")), cpts)
    >>> marginals(network, {"wet": "yes"})["rain"].round(6).tolist()
    [0.272727, 0.727273]
    """
    evidence = _evidence(network, given or {})
    sides = network.cardinalities.tolist()
    factors = _factors(network, range(len(sides)), evidence)
    order, cells = _elimination_order(factors, sides, keep=())
    _refuse_if_large(sum(cells))
    steps, end = _eliminate(factors, order)
    if not end.table.any():
        raise _impossible(given)
    found = {j: np.eye(sides[j])[state] for j, state in evidence.items()}
    beliefs = {len(steps): end}
    for k in reversed(range(len(steps))):
        step = steps[k]
        # What the rest of the network says about the message's variables: its belief, less the message.
        outside = _summed_to(beliefs[step.target], step.message.scope)
        ratio = np.zeros_like(outside.table)
        np.divide(outside.table, step.message.table, out=ratio, where=step.message.table > 0)
        beliefs[k] = _product([step.clique, _Factor(outside.scope, ratio)])
        found[order[k]] = _normalised(_summed_to(beliefs[k], (order[k],)).table, given)
    return {name: found[j] for j, name in enumerate(network.names)}


def _position(network: Network, name: str) -> int:
    try:
        return network.names.index(name)
    except ValueError:
        hint = nearest(str(name), network.names)
        raise InputError(f"{name!r} is not a variable of this network.{hint}") from None


def _evidence(network: Network, given: Mapping[str, str]) -> Evidence:
    evidence = {}
    for name, state in given.items():
        j = _position(network, name)
        if state not in network.states[j]:
            hint = nearest(str(state), network.states[j])
            accepted = ", ".join(network.states[j])
            raise InputError(f"variable {name!r} has no state {state!r}; accepted: {accepted}.{hint}")
        evidence[j] = network.states[j].index(state)
    return evidence


def _factors(network: Network, about: Iterable[int], evidence: Evidence) -> list[_Factor]:
    """Return the tables that a question about some variables needs, cut to the evidence.

    Variables without a descendant in the question sum to 1 and are left out.
    """
    position = {name: j for j, name in enumerate(network.names)}
    needed: set[int] = set()
    waiting = list(about)
    factors = []
    while waiting:
        j = waiting.pop()
        if j in needed:
            continue
        needed.add(j)
        cpt = network.cpts[network.names[j]]
        axes = [*(position[parent] for parent in cpt.parents), j]
        waiting += axes[:-1]
        table = cpt.p[tuple(evidence.get(i, slice(None)) for i in axes)]
        free = [i for i in axes if i not in evidence]
        scope = tuple(sorted(free))
        factors.append(_Factor(scope, table.transpose([free.index(i) for i in scope])))
    return factors


def _elimination_order(
    factors: Sequence[_Factor], sides: Sequence[int], keep: Iterable[int]
) -> tuple[list[int], list[int]]:
    """Choose the order of elimination; return it with the cells of each product.

    Raises
    ------
    InputError
        If a product would be too large.
    """
    neighbours: dict[int, set[int]] = {}
    for factor in factors:
        for j in factor.scope:
            neighbours.setdefault(j, set()).update(factor.scope)

    def weight(j: int) -> int:
        return math.prod(sides[i] for i in neighbours[j])  # a variable is among its own neighbours

    kept = set(keep)
    weights = {j: weight(j) for j in neighbours if j not in kept}
    order, cells = [], []
    while weights:
        j = min(weights, key=lambda i: (weights[i], i))
        cells.append(weights.pop(j))
        _refuse_if_large(cells[-1])
        order.append(j)
        around = neighbours.pop(j) - {j}
        for i in around:
            neighbours[i] |= around
            neighbours[i].discard(j)
            if i in weights:
                weights[i] = weight(i)
    return order, cells


@dataclass(frozen=True, slots=True)
class _Step:
    """One elimination: the product, what is left when the variable is summed out, and where that goes."""

    clique: _Factor
    message: _Factor
    target: int


def _eliminate(factors: Iterable[_Factor], order: Sequence[int]) -> tuple[list[_Step], _Factor]:
    """Run the elimination; return its steps and the product over what is kept.

    A step's target is the step that takes its message up, or the number of steps if none does.
    """
    rank = {j: k for k, j in enumerate(order)}
    waiting: list[list[_Factor]] = [[] for _ in range(len(order) + 1)]

    def target(factor: _Factor) -> int:
        return min((rank[j] for j in factor.scope if j in rank), default=len(order))

    for factor in factors:
        waiting[target(factor)].append(factor)
    steps: list[_Step] = []
    for k, j in enumerate(order):
        clique = _product(waiting[k])
        message = _summed_to(clique, tuple(i for i in clique.scope if i != j))
        steps.append(_Step(clique, message, target(message)))
        waiting[steps[-1].target].append(message)
    return steps, _product(waiting[-1])


def _product(factors: Iterable[_Factor]) -> _Factor:
    result = _Factor((), np.ones(()))
    for factor in sorted(factors, key=lambda f: f.table.size):
        scope = tuple(sorted({*result.scope, *factor.scope}))
        result = _Factor(scope, _spread(result, scope) * _spread(factor, scope))
    return result


def _spread(factor: _Factor, scope: tuple[int, ...]) -> NDArray[np.float64]:
    lengths = iter(factor.table.shape)
    return factor.table.reshape([next(lengths) if j in factor.scope else 1 for j in scope])


def _summed_to(factor: _Factor, scope: tuple[int, ...]) -> _Factor:
    others = tuple(axis for axis, j in enumerate(factor.scope) if j not in scope)
    return _Factor(scope, np.asarray(factor.table.sum(axis=others)))


def _normalised(weights: NDArray[np.float64], given: Mapping[str, str] | None) -> NDArray[np.float64]:
    total = weights.sum()
    if not total > 0:
        raise _impossible(given)
    return np.asarray(weights / total)


def _impossible(given: Mapping[str, str] | None) -> InputError:
    states = ", ".join(f"{name} = {state}" for name, state in (given or {}).items())
    return InputError(f"what is given has probability 0: {states}")


def _refuse_if_large(cells: int) -> None:
    if cells > MAX_CELLS:
        raise InputError(
            f"exact inference would need a table of {cells} cells; at most {MAX_CELLS} are accepted: "
            "the network is too densely connected for it"
        )
