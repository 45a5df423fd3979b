"""Datasets of categorical rows, and the masked view of one that a learner sees."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.graph import Graph

if TYPE_CHECKING:
    import pandas as pd

Codes = NDArray[np.uint8 | np.uint16]
MAX_STATES = 65_535
MAX_TABLE_CELLS = 1 << 26  # a contingency table of half a gigabyte: refused before memory is taken


def code_dtype(max_states: int) -> type[np.uint8] | type[np.uint16]:
    """Return the smallest unsigned type that holds the codes of a variable and its missing mark."""
    return np.uint8 if max_states < 256 else np.uint16


@dataclass(frozen=True, slots=True, eq=False)
class Dataset:
    """Rows over named categorical variables.

    Parameters
    ----------
    names : tuple of str
        The variables.
    states : tuple of tuple of str
        The declared states of each variable, seen in the rows or not; at least one each.
    codes : uint8 or uint16 array, shape (n, p)
        ``codes[row, variable]`` is the position of the state; the dtype's largest value marks a missing
        cell. Kept column-contiguous (Fortran order) and read-only.

    Raises
    ------
    InputError
        If shapes do not fit, names or states repeat, or a code has no state.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("no", "yes"), ("no", "yes")), np.array([[0, 1], [1, 1]], dtype=np.uint8))
    >>> data.n_rows, data.cardinalities.tolist()
    (2, [2, 2])
    >>> data.table(["a", "b"]).tolist()
    [[0, 1], [0, 1]]
    """

    names: tuple[str, ...]
    states: tuple[tuple[str, ...], ...]
    codes: Codes

    def __post_init__(self) -> None:
        names = tuple(self.names)
        states = tuple(tuple(each) for each in self.states)
        codes = np.asfortranarray(self.codes)
        if codes.dtype not in (np.uint8, np.uint16):
            raise InputError(f"codes must be uint8 or uint16, got {codes.dtype}")
        if codes.ndim != 2 or codes.shape[1] != len(names) or len(states) != len(names):
            raise InputError(
                f"{len(names)} names, {len(states)} lists of states and codes of shape {codes.shape} "
                "do not fit"
            )
        if len(set(names)) != len(names):
            raise InputError("variable names must differ")
        missing = np.iinfo(codes.dtype).max
        for j, (name, own) in enumerate(zip(names, states, strict=True)):
            if not own or len(set(own)) != len(own) or len(own) > missing:
                raise InputError(f"variable {name!r} needs 1 to {missing} different states, got {len(own)}")
            seen = codes[:, j]
            if len(seen) and int(np.max(np.where(seen == missing, 0, seen))) >= len(own):
                raise InputError(f"variable {name!r} has {len(own)} states but a code beyond them")
        if codes.flags.writeable:
            codes = codes.copy(order="F") if codes is self.codes else codes
            codes.flags.writeable = False
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "states", states)
        object.__setattr__(self, "codes", codes)

    @classmethod
    def trusted(cls, names: tuple[str, ...], states: tuple[tuple[str, ...], ...], codes: Codes) -> Dataset:
        """Wrap codes that are known to be valid, without checking or copying them.

        For this package's own samplers and cuts, where the check would cost more than the drawing.
        """
        self = object.__new__(cls)
        codes.flags.writeable = False
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "states", states)
        object.__setattr__(self, "codes", codes)
        return self

    @property
    def n_rows(self) -> int:
        """The number of rows n."""
        return int(self.codes.shape[0])

    @property
    def n_variables(self) -> int:
        """The number of variables p."""
        return len(self.names)

    @property
    def cardinalities(self) -> NDArray[np.int64]:
        """The number of declared states of each variable: int64 array, shape (p,)."""
        return np.array([len(own) for own in self.states], dtype=np.int64)

    @property
    def missing_code(self) -> int:
        """The code that marks a missing cell."""
        return int(np.iinfo(self.codes.dtype).max)

    @property
    def has_missing(self) -> bool:
        """Whether any cell is missing."""
        return bool((self.codes == self.missing_code).any())

    def first(self, n: int) -> Dataset:
        """Return the dataset of the first `n` rows.

        Raises
        ------
        InputError
            If there are fewer rows.
        """
        if not 0 <= n <= self.n_rows:
            raise InputError(f"asked for {n} rows of a dataset that has {self.n_rows}")
        return Dataset.trusted(self.names, self.states, np.asfortranarray(self.codes[:n]))

    def table(self, names: Sequence[str]) -> NDArray[np.int64]:
        """Count the joint states of some variables.

        Parameters
        ----------
        names : sequence of str
            The variables, each an axis of the result in this order.

        Returns
        -------
        int64 array, shape (r1, ..., rk)
            Rows in which any of the variables is missing are left out.

        Raises
        ------
        InputError
            If the table would have more than 2^26 cells, or a name is unknown.
        """
        columns = [self._position(name) for name in names]
        shape = tuple(len(self.states[j]) for j in columns)
        cells = 1
        for side in shape:
            cells *= side
        if cells > MAX_TABLE_CELLS:
            raise InputError(
                f"a table over {', '.join(names)} would have {cells} cells; at most {MAX_TABLE_CELLS}"
            )
        index = np.zeros(self.n_rows, dtype=np.int64)
        keep = np.ones(self.n_rows, dtype=np.bool_)
        for j, side in zip(columns, shape, strict=True):
            column = self.codes[:, j]
            keep &= column != self.missing_code
            index = index * side + column
        return np.bincount(index[keep], minlength=cells).reshape(shape)

    def frame(self) -> pd.DataFrame:
        """Return the rows as a pandas frame of categorical columns, states as categories, missing as NaN."""
        import pandas as pd

        columns = {}
        for j, (name, own) in enumerate(zip(self.names, self.states, strict=True)):
            codes = self.codes[:, j].astype(np.int32)
            codes[codes == self.missing_code] = -1
            columns[name] = pd.Categorical.from_codes(codes, categories=pd.Index(own))
        return pd.DataFrame(columns)

    def _position(self, name: str) -> int:
        try:
            return self.names.index(name)
        except ValueError:
            raise InputError(f"{name!r} is not a variable of this dataset") from None

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Dataset):
            return NotImplemented
        return (
            self.names == other.names
            and self.states == other.states
            and self.codes.dtype == other.codes.dtype
            and bool(np.array_equal(self.codes, other.codes))
        )

    __hash__ = None  # type: ignore[assignment]

    def __repr__(self) -> str:
        return f"Dataset({self.n_rows} rows of {self.n_variables} variables)"


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """What a learner sees of a dataset: neutral names, columns in a drawn order, states relabelled.

    A learner that gained from a column's name or place, or from the order of states, would gain
    nothing on data it does not know; so all three are drawn afresh for each dataset.

    Parameters
    ----------
    columns : int array, shape (p,)
        ``columns[k]`` is the network position of the k-th column that the learner sees.
    relabel : tuple of int arrays
        ``relabel[k][code]`` is the code that the learner sees in column k for the network's `code`.

    Examples
    --------
    >>> from generators.streams import digest, stream
    >>> view = View.draw([2, 3], stream("view", digest("dataset", 1)))
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1", "2")), np.array([[0, 2]], dtype=np.uint8))
    >>> view.mask(data).names
    ('x1', 'x2')
    """

    columns: NDArray[np.int64]
    relabel: tuple[NDArray[np.uint16], ...]

    @classmethod
    def draw(cls, cardinalities: Sequence[int], rng: np.random.Generator) -> View:
        """Draw a column order and one relabelling per variable, all permutations equally likely."""
        columns = rng.permutation(len(cardinalities))
        relabel = tuple(rng.permutation(int(cardinalities[j])).astype(np.uint16) for j in columns)
        return cls(columns, relabel)

    def mask(self, data: Dataset) -> Dataset:
        """Return the dataset as the learner sees it."""
        n, p = data.codes.shape
        codes = np.empty((n, p), dtype=data.codes.dtype, order="F")
        for k, j in enumerate(self.columns.tolist()):
            lookup = np.full(data.missing_code + 1, data.missing_code, dtype=data.codes.dtype)
            lookup[: len(self.relabel[k])] = self.relabel[k]
            np.take(lookup, data.codes[:, j], out=codes[:, k])
        names = tuple(f"x{k + 1}" for k in range(p))
        states = tuple(tuple(str(s) for s in range(len(own))) for own in self.relabel)
        return Dataset.trusted(names, states, codes)

    def unmask(self, graph: Graph, names: Sequence[str]) -> Graph:
        """Bring a graph over the masked columns back to the network's names and order."""
        back = np.empty_like(self.columns)
        back[self.columns] = np.arange(len(self.columns))
        return Graph(tuple(names), graph.arrow[np.ix_(back, back)])

    def words(self) -> list[list[int]]:
        """Return the view as plain numbers, for its digest in the ledger."""
        return [self.columns.tolist(), *[own.tolist() for own in self.relabel]]
