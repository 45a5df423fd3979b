"""The invented datasets on which learners are checked, each a function of nothing.

Variables have the neutral names under which learners see them, x1 to xp.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from generators.cpts import generate_network
from generators.dataset import Dataset, View
from generators.topologies import generate_graph

MANY_VARIABLES = 200
N_INDEPENDENT = 10  # variables
N_INDEPENDENT_DATASETS = 12


def dataset(columns: ArrayLike, cardinalities: Sequence[int]) -> Dataset:
    """Wrap codes of at most 254 states under neutral names.

    Parameters
    ----------
    columns : int array-like, shape (n, p)
    cardinalities : sequence of int
        The number of declared states of each variable.
    """
    names = tuple(f"x{j + 1}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(columns, dtype=np.uint8))


def from_network(p: int, n: int, seed: int, *, states: str = "2-3") -> Dataset:
    """Draw rows of a random network of `p` variables with at most two parents each."""
    rng = np.random.default_rng(seed)
    graph = generate_graph(
        "random-order", variables=p, mean_parents=min(1.2, (p - 1) / 2), max_parents=2, rng=rng
    )
    data = generate_network(graph, states=states, rng=rng).sample(n, rng=rng)
    return dataset(data.codes, data.cardinalities.tolist())


def with_counts(table: ArrayLike, columns: Sequence[int]) -> Dataset:
    """Return rows whose joint counts are exactly those of a table, in a drawn order.

    What is independent in such a table is exactly so in the rows: no test and no score can err by chance.

    Parameters
    ----------
    table : int array-like, shape (r1, ..., rk)
    columns : sequence of int
        ``columns[j]`` is the axis of the table that column j holds.
    """
    counts = np.asarray(table)
    cells = np.argwhere(counts >= 0)
    rows = np.repeat(cells, counts.ravel(), axis=0)
    rows = rows[np.random.default_rng(0).permutation(len(rows))]
    return dataset(rows[:, list(columns)], [counts.shape[axis] for axis in columns])


# Of every kind ----------------------------------------------------------------------------------------


def every_kind() -> Iterator[Dataset]:
    """Yield ordinary and odd data, small ones first; 200 variables are looked at on their own."""
    yield from one_variable()
    yield from two_variables()
    yield from identical_columns()
    yield from unseen_states()
    yield from constant_columns()
    yield from ten_rows()
    yield from ordinary()


def ordinary() -> Iterator[Dataset]:
    """Yield rows of random networks, small ones first."""
    for p, n in ((3, 100), (4, 200), (5, 500), (6, 1000), (8, 1000)):
        yield from_network(p, n, seed=p)


# Odd --------------------------------------------------------------------------------------------------


def one_variable() -> Iterator[Dataset]:
    """Yield data of a single variable of one, two and three states."""
    for r in (1, 2, 3):
        yield dataset(_draw(100, [r], seed=r), [r])


def two_variables() -> Iterator[Dataset]:
    """Yield two independent and two dependent variables."""
    codes = _draw(100, [2, 3], seed=1)
    yield dataset(codes, [2, 3])
    yield from_network(2, 200, seed=2)


def constant_columns() -> Iterator[Dataset]:
    """Yield data in which columns hold one state: the only one declared, or one of several."""
    yield dataset(np.zeros((50, 2)), [2, 2])
    codes = np.zeros((200, 5), dtype=np.int64)
    codes[:, 1] = 1
    codes[:, 3:] = from_network(2, 200, seed=3, states="2").codes
    yield dataset(codes, [1, 3, 2, 2, 2])


def identical_columns() -> Iterator[Dataset]:
    """Yield data in which two and three columns are copies of each other."""
    column = _draw(100, [2, 2], seed=1)
    yield dataset(column[:, [0, 0]], [2, 2])
    yield dataset(column[:, [0, 0, 1, 0]], [2] * 4)


def unseen_states() -> Iterator[Dataset]:
    """Yield data with declared states that no row has: the first, one in the middle, the last, most."""
    seen = from_network(4, 200, seed=5, states="2").codes.astype(np.int64)
    yield dataset(seen[:, :2], [3, 2])
    yield dataset(seen * 2 + [0, 0, 1, 5], [4, 3, 4, 20])


def ten_rows() -> Iterator[Dataset]:
    """Yield ten rows of 5 and of 12 variables."""
    yield from_network(5, 10, seed=6)
    yield from_network(12, 10, seed=7, states="2-4")


def missing_cells() -> Iterator[Dataset]:
    """Yield data in which a tenth of the cells is missing, and data with a column of nothing else."""
    for p, n in ((2, 50), (5, 300)):
        data = from_network(p, n, seed=p)
        codes = np.where(np.random.default_rng(p).random((n, p)) < 0.1, data.missing_code, data.codes)
        yield dataset(codes, data.cardinalities.tolist())
    codes[:, 0] = data.missing_code
    yield dataset(codes, data.cardinalities.tolist())


def many_variables(n: int) -> Dataset:
    """Return `n` rows of 200 variables of a random network."""
    return from_network(MANY_VARIABLES, n, seed=MANY_VARIABLES)


# Of which the answer is known -------------------------------------------------------------------------


def strong_pairs() -> Iterator[tuple[Dataset, tuple[int, int]]]:
    """Yield data and the positions of two columns that depend strongly: G2 147 on 1 df, 277 on 4 df.

    The pair is independent of all other columns, so nothing can explain it away.
    """
    yield with_counts([[90, 10], [10, 90]], [0, 1]), (0, 1)
    three = with_counts(80 * np.eye(3, dtype=np.int64) + 10, [0, 1])
    yield three, (0, 1)
    for seed, pair in enumerate([(0, 5), (6, 2), (3, 4), (7, 1)]):
        codes = _draw(three.n_rows, [2, 3] * 4, seed)
        codes[:, list(pair)] = three.codes
        cardinalities = np.array([2, 3] * 4)
        cardinalities[list(pair)] = 3
        yield dataset(codes, cardinalities.tolist()), pair


# x -> z <- y: 5,000 rows, x and y exactly independent, each strongly dependent on z, and so on each other
# given z. Axes x, y, z: P(z = 1) is .1, .5, .6, .9 for (x, y) = (0, 0), (0, 1), (1, 0), (1, 1).
COLLIDER = np.array([[[1350, 150], [500, 500]], [[600, 900], [100, 900]]])
# x <- z -> y: 5,000 rows, x and y exactly independent given z; x is z in 8 of 10 rows, y in 9 of 10.
FORK = np.array([[[1800, 50], [200, 450]], [[450, 200], [50, 1800]]])
# The column orders of x, y, z in which both are shown; z is the last, the middle and the first column.
THREE_ORDERS = ((0, 1, 2), (0, 2, 1), (2, 0, 1))


def independent_columns() -> Iterator[Dataset]:
    """Yield 12 datasets of 1,000 rows of ten independent variables of two and three states."""
    cardinalities = [2, 3] * (N_INDEPENDENT // 2)
    for seed in range(N_INDEPENDENT_DATASETS):
        yield dataset(_draw(1000, cardinalities, seed), cardinalities)


def for_symmetry() -> Iterator[Dataset]:
    """Yield eight datasets of 1,000 rows of random networks of 4 to 7 variables.

    Enough rows that statistics hardly ever agree exactly: where they do, order may rightly decide.
    """
    for seed in range(8):
        yield from_network(4 + seed // 2, 1000, seed=100 + seed)


def reordered(data: Dataset) -> Iterator[View]:
    """Yield views of data that only permute the columns: reversed, and in a drawn order."""
    p = data.n_variables
    for columns in (np.arange(p)[::-1].copy(), np.random.default_rng(p).permutation(p)):
        yield View(columns, tuple(_same(r) for r in data.cardinalities[columns]))


def relabelled(data: Dataset) -> Iterator[View]:
    """Yield views of data that only relabel the states: reversed, and each called as its neighbour."""
    columns = np.arange(data.n_variables)
    yield View(columns, tuple(_same(r)[::-1].copy() for r in data.cardinalities))
    yield View(columns, tuple(np.roll(_same(r), 1) for r in data.cardinalities))


def _same(r: int) -> NDArray[np.uint16]:
    return np.arange(r, dtype=np.uint16)


def _draw(n: int, cardinalities: Sequence[int], seed: int) -> NDArray[np.int64]:
    # From uniform numbers, which no version of numpy draws otherwise.
    rng = np.random.default_rng([seed, len(cardinalities)])
    return (rng.random((n, len(cardinalities))) * cardinalities).astype(np.int64)
