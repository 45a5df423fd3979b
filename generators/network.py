"""Networks: a DAG, the states of every variable, and a conditional probability table for each."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from generators.dataset import MAX_STATES, Dataset
from generators.errors import InputError
from generators.graph import Graph
from generators.streams import KEY_BYTES, digest

SUM_TOLERANCE = 1e-9  # rows are renormalised where they were read or drawn, so only rounding is left here
MAX_CPT_CELLS = 1 << 26


@dataclass(frozen=True, slots=True, eq=False)
class Cpt:
    """The distribution of a variable for each joint state of its parents.

    Parameters
    ----------
    variable : str
    parents : tuple of str
    p : float64 array, shape (r1, ..., rk, r)
        One axis per parent, in the order of `parents`, then the variable's own states. Rows along the
        last axis are probabilities that sum to 1.

    Raises
    ------
    InputError
        If the axes do not fit the parents, or a row is no distribution.

    Examples
    --------
    >>> Cpt("wet", ("rain",), np.array([[0.9, 0.1], [0.2, 0.8]])).n_free
    2
    """

    variable: str
    parents: tuple[str, ...]
    p: NDArray[np.float64]

    def __post_init__(self) -> None:
        p = np.array(self.p, dtype=np.float64, order="C")
        if p.ndim != len(self.parents) + 1:
            raise InputError(
                f"the table of {self.variable!r} has {p.ndim} axes; {len(self.parents)} parents need "
                f"{len(self.parents) + 1}"
            )
        if len(set(self.parents)) != len(self.parents) or self.variable in self.parents:
            raise InputError(f"the parents of {self.variable!r} must be different other variables")
        if p.size and not 0 <= p.min() <= p.max() < np.inf:  # NaN compares as False
            raise InputError(f"the table of {self.variable!r} holds a negative or infinite probability")
        off = np.abs(p.sum(axis=-1) - 1)
        if off.size and off.max() > SUM_TOLERANCE:
            row = tuple(int(i) for i in np.unravel_index(int(off.argmax()), off.shape))
            raise InputError(
                f"the table of {self.variable!r} has a row (parents' states {row}) that sums to "
                f"{float(p[row].sum()):.12g}, not 1"
            )
        p.flags.writeable = False
        object.__setattr__(self, "parents", tuple(self.parents))
        object.__setattr__(self, "p", p)

    @property
    def n_free(self) -> int:
        """The number of free parameters: joint parent states times (states - 1)."""
        return self.p.size - math.prod(self.p.shape[:-1])

    def rows(self) -> NDArray[np.float64]:
        """Return the table as one row per joint parent state, first parent slowest: shape (q, r)."""
        return self.p.reshape(-1, self.p.shape[-1])


@dataclass(frozen=True, slots=True, eq=False)
class Network:
    """A known truth: a DAG over named variables with finitely many states, and a CPT per variable.

    Parameters
    ----------
    graph : Graph
        Directed and acyclic.
    states : tuple of tuple of str
        The states of each variable, in the graph's order.
    cpts : mapping of str to Cpt
        One per variable, with the parents that the graph says (in any order of axes).

    Raises
    ------
    InputError
        With one line per fault.

    Examples
    --------
    >>> graph = Graph.from_edges(["rain", "wet"], directed=[("rain", "wet")])
    >>> cpts = {"rain": Cpt("rain", (), np.array([0.7, 0.3])),
    ...         "wet": Cpt("wet", ("rain",), np.array([[0.9, 0.1], [0.2, 0.8]]))}
    >>> network = Network(graph, (("no", "yes"), ("no", "yes")), cpts)
    >>> network.marginal("wet").round(2).tolist()
    [0.69, 0.31]
    >>> network.sample(3, rng=np.random.default_rng(1)).n_rows
    3
    """

    graph: Graph
    states: tuple[tuple[str, ...], ...]
    cpts: Mapping[str, Cpt]

    def __post_init__(self) -> None:
        states = tuple(tuple(own) for own in self.states)
        faults = _network_faults(self.graph, states, self.cpts)
        if faults:
            raise InputError(*faults)
        object.__setattr__(self, "states", states)
        ordered = {name: self.cpts[name] for name in self.graph.names}
        object.__setattr__(self, "cpts", MappingProxyType(ordered))

    @property
    def names(self) -> tuple[str, ...]:
        """The variables, in the graph's order."""
        return self.graph.names

    @property
    def cardinalities(self) -> NDArray[np.int64]:
        """The number of states of each variable: int64 array, shape (p,)."""
        return np.array([len(own) for own in self.states], dtype=np.int64)

    @property
    def n_free(self) -> int:
        """The number of free parameters of all tables."""
        return sum(cpt.n_free for cpt in self.cpts.values())

    def key(self) -> bytes:
        """Return the digest of the network's content: names, states, parents and probabilities."""
        fields = [
            [name, list(own), list(self.cpts[name].parents), self.cpts[name].p.ravel().tolist()]
            for name, own in zip(self.names, self.states, strict=True)
        ]
        return digest("network content", fields)

    def sample(self, n: int, *, rng: np.random.Generator) -> Dataset:
        """Draw `n` independent rows.

        Parameters
        ----------
        n : int
        rng : numpy.random.Generator
            Gives the key of the dataset; the cells are a function of that key alone.
        """
        from generators.sampling import sample

        return sample(self, n, rng.bytes(KEY_BYTES))

    def marginal(self, name: str, given: Mapping[str, str] | None = None) -> NDArray[np.float64]:
        """Return the exact distribution of one variable, given states of others.

        Returns
        -------
        float64 array, shape (r,)

        Raises
        ------
        InputError
            If a name or state is unknown, or the evidence has probability 0.
        """
        from generators.inference import joint

        return joint(self, [name], given or {})


def check_states(name: str, own: Sequence[str]) -> str | None:
    """Say what is wrong with a variable's list of states, or None."""
    if not own:
        return f"variable {name!r} has no state"
    if len(own) > MAX_STATES:
        return f"variable {name!r} has {len(own)} states; at most {MAX_STATES} are accepted"
    if len(set(own)) != len(own):
        twice = next(state for state in own if list(own).count(state) > 1)
        return f"variable {name!r} lists the state {twice!r} twice"
    if not all(isinstance(state, str) and state for state in own):
        return f"variable {name!r} has a state without a name"
    return None


def _network_faults(graph: Graph, states: Sequence[Sequence[str]], cpts: Mapping[str, Cpt]) -> list[str]:
    if len(states) != graph.n_variables:
        return [f"{graph.n_variables} variables need as many lists of states, got {len(states)}"]
    if not graph.is_directed:
        return ["a network's graph must be fully directed"]
    faults = []
    try:
        graph.order()
    except InputError as error:
        faults.append(str(error))
    n_states = dict(zip(graph.names, map(len, states), strict=True))
    for name, own in zip(graph.names, states, strict=True):
        fault = check_states(name, own)
        if fault:
            faults.append(fault)
        cpt = cpts.get(name)
        if cpt is None:
            faults.append(f"variable {name!r} has no table")
        elif cpt.variable != name:
            faults.append(f"the table under {name!r} is that of {cpt.variable!r}")
        elif sorted(cpt.parents) != sorted(graph.parents(name)):
            faults.append(
                f"the table of {name!r} has the parents {list(cpt.parents)}, "
                f"the graph {list(graph.parents(name))}"
            )
        elif cpt.p.shape != (*(n_states[parent] for parent in cpt.parents), n_states[name]):
            faults.append(
                f"the table of {name!r} has the shape {cpt.p.shape}, which is not that of the states"
            )
    strange = [name for name in cpts if name not in n_states]
    faults += [f"there is a table for {name!r}, which is not a variable" for name in strange]
    return faults
