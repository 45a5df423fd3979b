"""Ancestral sampling from counter-based words: every cell is a function of (dataset, row, variable).

The word of row i and variable v (in network order) is the (i + 1)-th output of Philox4x64-10 with the
dataset's key and a counter whose second word is v (Salmon, Moraes, Dror and Shaw, SC 2011): numpy's own
``Philox(key=key, counter=[0, v, 0, 0]).random_raw()``. So a smaller dataset is the first rows of a
larger one, and neither block sizes nor workers can change a cell.

A cell's state is the number of cumulative probabilities of its CPT row, the last left out, that are at
or below u = (word >> 11) / 2^53; from the last possible state on, a cumulative probability counts as 1.
The comparison is made in whole numbers, u and the probability times 2^53, and is exact.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset, code_dtype
from generators.errors import InputError
from generators.network import Network
from generators.philox import Words, draw_words

BLOCK_COUNTERS = 512  # of 4 rows each: the words of a block stay in the first-level cache
ONE = 1 << 53
_UNUSED_BITS = np.uint64(11)

CodeBlock = NDArray[Any]  # uint8 or uint16: kernels are compiled for both
Integers = NDArray[np.int64]
Positions = NDArray[np.uint32]
Probabilities = NDArray[np.float64]


def cell_words(key: bytes, variable: int, n: int) -> Words:
    """Return the words of one variable's first `n` rows.

    Parameters
    ----------
    key : bytes
        The dataset's 16-byte key.
    variable : int
        The variable's position in the network.
    n : int

    Returns
    -------
    uint64 array, shape (n,)

    Examples
    --------
    >>> bool((cell_words(bytes(16), 3, 10)[:4] == cell_words(bytes(16), 3, 4)).all())
    True
    """
    return np.random.Philox(key=_key_words(key), counter=[0, variable, 0, 0]).random_raw(n)


def sample(network: Network, n: int, key: bytes) -> Dataset:
    """Draw the first `n` rows of the dataset with this key.

    Parameters
    ----------
    network : Network
    n : int
        At least 0.
    key : bytes
        16 bytes.

    Returns
    -------
    Dataset
        In network order, every declared state present in `states`.

    Raises
    ------
    InputError
        If `n` is negative.
    """
    if n < 0:
        raise InputError(f"the number of rows must be at least 0, got {n}")
    sides = network.cardinalities
    codes = np.empty((n, len(network.names)), dtype=code_dtype(int(sides.max(initial=1))), order="F")
    _fill(codes.T, sides, *_flattened(network), _key_words(key))
    return Dataset.trusted(network.names, network.states, codes)


def _key_words(key: bytes) -> Words:
    return np.frombuffer(key, dtype="<u8").astype(np.uint64)


def _flattened(network: Network) -> tuple[Integers, Positions, Integers, Probabilities]:
    """Return parents and tables of all variables one after another, each with the places where they begin."""
    position = {name: j for j, name in enumerate(network.names)}
    cpts = network.cpts.values()
    parents = [position[parent] for cpt in cpts for parent in cpt.parents]
    tables = np.concatenate([cpt.p.ravel() for cpt in cpts]) if position else np.empty(0)
    return (
        np.cumsum([0, *(len(cpt.parents) for cpt in cpts)], dtype=np.int64),
        np.array(parents, dtype=np.uint32),
        np.cumsum([0, *(cpt.p.size for cpt in cpts)], dtype=np.int64),
        tables,
    )


@kernel
def _fill(
    codes: CodeBlock,
    sides: Integers,
    parents_at: Integers,
    parents: Positions,
    tables_at: Integers,
    tables: Probabilities,
    key: Words,
) -> None:
    """Fill codes[variable, row]; variable j owns parents[parents_at[j]:parents_at[j + 1]], tables alike."""
    n = codes.shape[1]
    words = np.empty((4, BLOCK_COUNTERS), np.uint64)
    u = np.empty(4 * BLOCK_COUNTERS, np.int64)
    row_of = np.empty(4 * BLOCK_COUNTERS, np.uint32)
    for j in _ancestral_order(parents_at, parents):
        own_parents = parents[parents_at[j] : parents_at[j + 1]]
        thresholds = _thresholds(tables[tables_at[j] : tables_at[j + 1]], sides[j])
        for start in range(0, n, 4 * BLOCK_COUNTERS):
            m = min(4 * BLOCK_COUNTERS, n - start)
            # numpy steps its counter before it draws: row 0 has the counter 1.
            n_counters = (m + 3) // 4
            draw_words(key, j, start // 4 + 1, n_counters, words)
            _interleave(words, n_counters, u)
            cells = codes[j, start : start + m]
            if own_parents.size == 0:
                _draw_states(u, thresholds, cells)
            else:
                _find_rows(codes, own_parents, sides, start, row_of[:m])
                _draw_states_by_row(u, row_of, thresholds, cells)


@inlined
def _ancestral_order(parents_at: Integers, parents: Positions) -> Positions:
    """Return the variables, parents first; which such order makes no difference to the cells."""
    p = parents_at.size - 1
    n_children = np.zeros(p, np.int64)
    for parent in parents:
        n_children[parent] += 1
    order = np.empty(p, np.uint32)
    left = p
    for j in range(p):
        if n_children[j] == 0:
            left -= 1
            order[left] = j
    # Backwards from the childless: a variable is placed when all its children are.
    k = p
    while k > left:
        k -= 1
        j = order[k]
        for parent in parents[parents_at[j] : parents_at[j + 1]]:
            n_children[parent] -= 1
            if n_children[parent] == 0:
                left -= 1
                order[left] = parent
    return order


@inlined
def _thresholds(table: Probabilities, r: int) -> Integers:
    """Return the cumulative probabilities in units of 2^-53, rounded up: shape (r - 1, rows)."""
    n_rows = table.size // r
    thresholds = np.empty((r - 1, n_rows), np.int64)
    for row in range(n_rows):
        p = table[row * r : (row + 1) * r]
        last = r - 1
        while p[last] == 0:
            last -= 1
        total = 0.0
        for k in range(r - 1):
            total += p[k]
            # Rounding may leave a sum below 1; what is impossible must not be drawn for that.
            thresholds[k, row] = ONE if k >= last or total >= 1 else int(np.ceil(total * ONE))
    return thresholds


@inlined
def _interleave(words: Words, n: int, u: Integers) -> None:
    c0, c1, c2, c3 = words[0], words[1], words[2], words[3]
    for i in range(n):
        u[4 * i] = c0[i] >> _UNUSED_BITS
        u[4 * i + 1] = c1[i] >> _UNUSED_BITS
        u[4 * i + 2] = c2[i] >> _UNUSED_BITS
        u[4 * i + 3] = c3[i] >> _UNUSED_BITS


@inlined
def _find_rows(codes: CodeBlock, parents: Positions, sides: Integers, start: int, row_of: Positions) -> None:
    """Find each cell's row of the CPT, the first parent slowest."""
    m = row_of.size
    states = codes[parents[0], start : start + m]
    for i in range(m):
        row_of[i] = states[i]
    for parent in parents[1:]:
        states = codes[parent, start : start + m]
        side = np.uint32(sides[parent])
        for i in range(m):
            row_of[i] = row_of[i] * side + states[i]


@inlined
def _draw_states(u: Integers, thresholds: Integers, cells: CodeBlock) -> None:
    for i in range(cells.size):
        cells[i] = 0
    for k in range(thresholds.shape[0]):
        threshold = thresholds[k, 0]
        for i in range(cells.size):
            cells[i] += u[i] >= threshold


@inlined
def _draw_states_by_row(u: Integers, row_of: Positions, thresholds: Integers, cells: CodeBlock) -> None:
    for i in range(cells.size):
        cells[i] = 0
    for k in range(thresholds.shape[0]):
        threshold = thresholds[k]
        for i in range(cells.size):
            cells[i] += u[i] >= threshold[row_of[i]]


@warm_up
def _warm_up() -> None:
    _fill(
        np.empty((2, 1), dtype=np.uint8),
        np.array([2, 2]),
        np.array([0, 0, 1]),
        np.zeros(1, dtype=np.uint32),
        np.array([0, 2, 6]),
        np.full(6, 0.5),
        np.zeros(2, dtype=np.uint64),
    )
