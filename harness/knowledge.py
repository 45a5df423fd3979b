"""What is known of a graph before data are seen: arcs that are there, arcs that are not, stages in time."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.graph import Graph

Pair = tuple[str, str]


@dataclass(frozen=True, slots=True, eq=False)
class Knowledge:
    """Statements about single arcs of a DAG, complete: with all that follows from them.

    Parameters
    ----------
    names : tuple of str
    arcs : bool array, shape (p, p)
        ``[x, y]``: the arc x -> y is there. Acyclic.
    excluded : bool array, shape (p, p)
        ``[x, y]``: the arc x -> y is not there; y -> x may be. With every arc that would close a directed
        cycle with `arcs`; the diagonal is True. Disjoint from `arcs`.

    Notes
    -----
    Build it with `Knowledge.of`, which completes and checks. Two variables that exclude each other's arc
    both ways are not adjacent. Stages are exclusions: no arc leads from a later stage to an earlier one.
    """

    names: tuple[str, ...]
    arcs: NDArray[np.bool_]
    excluded: NDArray[np.bool_]

    @classmethod
    def of(
        cls,
        names: Iterable[str],
        *,
        arcs: Iterable[Pair] = (),
        excluded: Iterable[Pair] = (),
        stages: Sequence[Iterable[str]] = (),
    ) -> Knowledge:
        """Complete what is known, or say what contradicts what.

        Parameters
        ----------
        names : iterable of str
            All variables, in the data's order.
        arcs, excluded : iterable of (str, str)
            (x, y) for x -> y.
        stages : sequence of iterables of str
            The variables of each stage, in the order of time; a variable that stands in none may be
            anywhere.

        Raises
        ------
        InputError
            With one line per unknown name, variable in two stages, and contradiction.

        Examples
        --------
        >>> known = Knowledge.of("abc", arcs=[("a", "b")], stages=["ab", "c"])
        >>> known.excluded.astype(int).tolist()
        [[1, 0, 0], [1, 1, 0], [1, 1, 1]]
        """
        order = tuple(names)
        faults: list[str] = []
        there = _pairs(order, arcs, "arcs", faults)
        gone = _pairs(order, excluded, "excluded", faults)
        backward = _backward(order, stages, faults)
        if faults:
            raise InputError(*faults)
        for x, y in np.argwhere(there & gone).tolist():
            faults.append(f"the arc {order[x]!r} -> {order[y]!r} is said to be there and to be excluded.")
        for x, y in np.argwhere(np.triu(there & there.T)).tolist():
            faults.append(f"arcs are said to be there both ways between {order[x]!r} and {order[y]!r}.")
        if faults:
            raise InputError(*faults)
        try:
            paths = _paths(there, Graph(order, there).order())
        except InputError as error:
            raise InputError(f"arcs that are said to be there: {error}.") from None
        for x, y in np.argwhere(paths & backward).tolist():
            faults.append(f"arcs lead from {order[x]!r} to {order[y]!r}, which stands in an earlier stage.")
        if faults:
            raise InputError(*faults)
        return cls(order, there, gone | backward | paths.T | np.eye(len(order), dtype=np.bool_))

    def __post_init__(self) -> None:
        for array in (self.arcs, self.excluded):
            array.flags.writeable = False

    def reordered(self, positions: NDArray[np.int64], names: tuple[str, ...]) -> Knowledge:
        """Return the same knowledge with variable ``positions[j]`` in place j, under other names.

        Parameters
        ----------
        positions : int64 array, shape (p,)
        names : tuple of str
        """
        index = np.ix_(positions, positions)
        return Knowledge(names, self.arcs[index], self.excluded[index])


def _pairs(order: tuple[str, ...], pairs: Iterable[Pair], kind: str, faults: list[str]) -> NDArray[np.bool_]:
    position = {name: i for i, name in enumerate(order)}
    matrix = np.zeros((len(order), len(order)), dtype=np.bool_)
    for x, y in pairs:
        strange = [name for name in (x, y) if name not in position]
        if strange:
            faults.append(f"{kind}: {strange[0]!r} is not a variable of the data.")
        elif x == y:
            faults.append(f"{kind}: an arc joins two different variables, got {x!r} -> {y!r}.")
        else:
            matrix[position[x], position[y]] = True
    return matrix


def _backward(
    order: tuple[str, ...], stages: Sequence[Iterable[str]], faults: list[str]
) -> NDArray[np.bool_]:
    # [x, y]: x stands in a later stage than y. A variable that stands in none has no time (NaN).
    position = {name: i for i, name in enumerate(order)}
    time = np.full(len(order), np.nan)
    for number, members in enumerate(stages):
        for name in members:
            if name not in position:
                faults.append(f"stages: {name!r} is not a variable of the data.")
            elif not np.isnan(time[position[name]]):
                faults.append(f"stages: {name!r} stands in two places.")
            else:
                time[position[name]] = number
    later: NDArray[np.bool_] = np.greater.outer(time, time)
    return later


def _paths(arcs: NDArray[np.bool_], order: tuple[int, ...]) -> NDArray[np.bool_]:
    # [x, y]: a directed path leads from x to y.
    paths = arcs.copy()
    for x in reversed(order):
        paths[x] |= paths[arcs[x]].any(axis=0)
    return paths
