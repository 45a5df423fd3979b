"""What is known of a graph before data are seen: arcs that are there, arcs that are not, stages in time."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.files.text import parse_toml, read_text, shown
from generators.graph import Graph
from generators.settings import nearest

Pair = tuple[str, str]
Statements = Mapping[str, list[list[str]]]
KINDS = ("arcs", "excluded", "stages")


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
    both ways are not adjacent. Stages are exclusions: no directed path leads from a later stage to an
    earlier one, so no arc does, nor one that would be part of such a path with `arcs`.
    """

    names: tuple[str, ...]
    arcs: NDArray[np.bool_]
    excluded: NDArray[np.bool_]

    @classmethod
    def of(
        cls,
        names: Iterable[str],
        *,
        arcs: Iterable[Sequence[str]] = (),
        excluded: Iterable[Sequence[str]] = (),
        stages: Iterable[Iterable[str]] = (),
    ) -> Knowledge:
        """Complete what is known, or say what contradicts what.

        Parameters
        ----------
        names : iterable of str
            All variables, in the data's order.
        arcs, excluded : iterable of (str, str)
            (x, y) for x -> y.
        stages : iterable of iterables of str
            The variables of each stage, in the order of time; a variable that stands in none may be
            anywhere.

        Raises
        ------
        InputError
            With one line per unknown name, variable in two stages, and contradiction. Statements and
            stages are counted from 1.

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
        stage = _stage_of_each(order, stages, faults)
        _stop(faults)
        return cls.completed(order, there, gone, stage)

    @classmethod
    def completed(
        cls,
        names: tuple[str, ...],
        arcs: NDArray[np.bool_],
        excluded: NDArray[np.bool_],
        stage: NDArray[np.float64],
    ) -> Knowledge:
        """Complete what is known, given as arrays, or say what contradicts what.

        Parameters
        ----------
        names : tuple of str
        arcs, excluded : bool array, shape (p, p)
            [x, y] for x -> y.
        stage : float64 array, shape (p,)
            The number of each variable's stage, NaN for one that may be anywhere.

        Raises
        ------
        InputError
            With one line per contradiction.
        """
        faults = [
            f"the arc {names[x]!r} -> {names[y]!r} is said to be there and to be excluded."
            for x, y in np.argwhere(arcs & excluded).tolist()
        ]
        faults += [
            f"arcs are said to be there both ways between {names[x]!r} and {names[y]!r}."
            for x, y in np.argwhere(np.triu(arcs & arcs.T)).tolist()
        ]
        _stop(faults)
        try:
            order = Graph(names, arcs).order()
        except InputError as error:
            raise InputError(f"arcs that are said to be there: {error}.") from None
        paths = _paths(arcs, order)
        _stop(list(_backward_arcs(names, arcs, paths, stage)))
        itself = np.eye(len(names), dtype=np.bool_)
        return cls(names, arcs.copy(), excluded | _backward(arcs, order, stage) | paths.T | itself)

    def __post_init__(self) -> None:
        for array in (self.arcs, self.excluded):
            array.flags.writeable = False

    @property
    def directions(self) -> NDArray[np.bool_]:
        """Which direction an edge can only have.

        Bool array, shape (p, p), read-only: ``[x, y]`` says that an edge between x and y can only be
        x -> y, because that arc is said to be there, or the other one alone to be excluded.
        """
        directions = np.ascontiguousarray(self.excluded.T & ~self.excluded)
        directions.flags.writeable = False
        return directions

    @property
    def joined(self) -> NDArray[np.bool_]:
        """Which pairs are known to be adjacent: symmetric bool array, shape (p, p)."""
        return self.arcs | self.arcs.T

    @property
    def apart(self) -> NDArray[np.bool_]:
        """Which pairs are known not to be adjacent: symmetric bool array, shape (p, p), the diagonal True."""
        return self.excluded & self.excluded.T

    def reordered(self, positions: NDArray[np.int64], names: tuple[str, ...]) -> Knowledge:
        """Return the same knowledge with variable ``positions[j]`` in place j, under other names.

        Parameters
        ----------
        positions : int64 array, shape (p,)
        names : tuple of str
        """
        index = np.ix_(positions, positions)
        return Knowledge(names, self.arcs[index], self.excluded[index])

    def over(self, names: tuple[str, ...]) -> Knowledge:
        """Return the same knowledge with its variables in another order.

        Raises
        ------
        InputError
            If `names` are not the knowledge's own names.
        """
        if names == self.names:
            return self
        strange = sorted(set(names) ^ set(self.names))
        if strange or len(names) != len(self.names):
            which = repr(strange[0]) if strange else "a name that stands twice"
            raise InputError(f"the knowledge is not over the data's variables; {which} is on one side only")
        position = {name: i for i, name in enumerate(self.names)}
        return self.reordered(np.array([position[name] for name in names], dtype=np.int64), names)


def read_knowledge(path: str | os.PathLike[str], names: Iterable[str]) -> Knowledge:
    """Read what is known of some variables from a TOML file.

    The file has the keys `arcs` and `excluded`, each a list of pairs ``["x", "y"]`` for x -> y, and
    `stages`, a list of lists of names in the order of time; each may be absent.

    Parameters
    ----------
    path : path
    names : iterable of str
        All variables, in the data's order.

    Raises
    ------
    InputError
        If the file cannot be read, or with one line per fault: file, place, what was found.
    """
    try:
        return Knowledge.of(names, **read_statements(path))
    except InputError as error:
        where = os.fspath(path)
        own = (fault if fault.startswith(where) else f"{where}: {fault}" for fault in error.faults)
        raise InputError(*own) from None


def read_statements(path: str | os.PathLike[str]) -> Statements:
    """Read the statements of a knowledge file, whatever the variables.

    Returns
    -------
    mapping of str to list of lists of str
        `arcs`, `excluded` and `stages`, as far as the file says something under each, in one order
        whatever the file's: the same statements are the same mapping.

    Raises
    ------
    InputError
        If the file cannot be read, or with one line per fault in its form.
    """
    where = os.fspath(path)
    content = parse_toml(read_text(path), where)
    faults = [f"{where}: {key}: unknown key{_instead(key, KINDS)}" for key in content if key not in KINDS]
    statements = {}
    for kind in (kind for kind in KINDS if kind in content):
        found = content[kind]
        if not isinstance(found, list):
            faults.append(f"{where}: {kind}: must be a list, got {shown(str(found))}.")
            continue
        faults += [f"{where}: {fault}" for fault in _faults_of_form(kind, found)]
        statements[kind] = found
    _stop(faults)
    return canonical(statements)


def canonical(statements: Statements) -> Statements:
    """Return the same statements in one order, without repetitions and kinds that say nothing.

    Examples
    --------
    >>> canonical({"arcs": [["b", "c"], ["a", "b"], ["b", "c"]], "excluded": [], "stages": [["b", "a"]]})
    {'arcs': [['a', 'b'], ['b', 'c']], 'stages': [['a', 'b']]}
    """
    ordered: dict[str, list[list[str]]] = {}
    for kind in KINDS:
        own = [list(each) for each in statements.get(kind, [])]
        # The order of stages says something, that of pairs and of names within a stage does not.
        ordered[kind] = [sorted(each) for each in own] if kind == "stages" else _each_once(own)
    return {kind: own for kind, own in ordered.items() if own}


def _each_once(pairs: list[list[str]]) -> list[list[str]]:
    return [list(pair) for pair in sorted({tuple(pair) for pair in pairs})]


def _faults_of_form(kind: str, found: list[Any]) -> Iterator[str]:
    for number, item in enumerate(found, start=1):
        is_names = isinstance(item, list) and all(isinstance(name, str) for name in item)
        if not is_names or (kind != "stages" and len(item) != 2):
            wanted = "a list of names" if kind == "stages" else 'two names, as in ["x", "y"] for x -> y'
            yield f"{kind}[{number}]: must be {wanted}, got {shown(str(item))}."


def _stop(faults: list[str]) -> None:
    if faults:
        raise InputError(*faults)


def _instead(word: str, known: Iterable[str]) -> str:
    known = list(known)
    return f".{hint}" if (hint := nearest(word, known)) else f"; accepted: {', '.join(known)}."


def _strange(name: str, names: Iterable[str]) -> str:
    return f"{name!r} is not a variable.{nearest(name, names)}"


def _pairs(
    order: tuple[str, ...], pairs: Iterable[Sequence[str]], kind: str, faults: list[str]
) -> NDArray[np.bool_]:
    position = {name: i for i, name in enumerate(order)}
    matrix = np.zeros((len(order), len(order)), dtype=np.bool_)
    for number, (x, y) in enumerate(pairs, start=1):
        strange = [name for name in (x, y) if name not in position]
        faults += [f"{kind}[{number}]: {_strange(name, order)}" for name in strange]
        if not strange and x == y:
            faults.append(f"{kind}[{number}]: an arc joins two different variables, got {x!r} -> {y!r}.")
        elif not strange:
            matrix[position[x], position[y]] = True
    return matrix


def _stage_of_each(
    order: tuple[str, ...], stages: Iterable[Iterable[str]], faults: list[str]
) -> NDArray[np.float64]:
    # Counted from 1; a variable that stands in no stage has no time (NaN).
    position = {name: i for i, name in enumerate(order)}
    stage = np.full(len(order), np.nan)
    for number, members in enumerate(stages, start=1):
        for name in members:
            if name not in position:
                faults.append(f"stages[{number}]: {_strange(name, order)}")
            elif not np.isnan(stage[position[name]]):
                earlier = int(stage[position[name]])
                faults.append(f"stages[{number}]: {name!r} stands in stages[{earlier}] already.")
            else:
                stage[position[name]] = number
    return stage


def _paths(arcs: NDArray[np.bool_], order: Sequence[int]) -> NDArray[np.bool_]:
    # [x, y]: a directed path leads from x to y.
    paths = arcs.copy()
    for x in reversed(order):
        paths[x] |= paths[arcs[x]].any(axis=0)
    return paths


def _backward_arcs(
    order: tuple[str, ...],
    arcs: NDArray[np.bool_],
    paths: NDArray[np.bool_],
    stage: NDArray[np.float64],
) -> Iterator[str]:
    # One line for each arc into a variable that something before it on a path is later than.
    own = np.where(np.isnan(stage), -np.inf, stage)
    for u, y in np.argwhere(arcs & ~np.isnan(stage)).tolist():
        before = np.append(np.flatnonzero(paths[:, u]), u)
        x = int(before[np.argmax(own[before])])
        if own[x] > stage[y]:
            yield (
                f"arcs lead from {order[x]!r}, which stands in stages[{int(own[x])}], to {order[y]!r}, "
                f"which stands in stages[{int(stage[y])}]."
            )


def _backward(arcs: NDArray[np.bool_], order: Sequence[int], stage: NDArray[np.float64]) -> NDArray[np.bool_]:
    # [x, y]: with x -> y, a path would lead from a later stage to an earlier one.
    latest_before = np.where(np.isnan(stage), -np.inf, stage)
    earliest_after = np.where(np.isnan(stage), np.inf, stage)
    for y in order:
        latest_before[y] = max(latest_before[y], latest_before[arcs[:, y]].max(initial=-np.inf))
    for x in reversed(order):
        earliest_after[x] = min(earliest_after[x], earliest_after[arcs[x]].min(initial=np.inf))
    later: NDArray[np.bool_] = np.greater.outer(latest_before, earliest_after)
    return later
