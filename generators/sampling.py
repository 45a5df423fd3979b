"""Ancestral sampling from counter-based words: every cell is a function of (dataset, row, variable).

The word of row i and variable v (in network order) is the (i + 1)-th output of Philox4x64-10 with the
dataset's key and a counter whose second word is v (Salmon, Moraes, Dror and Shaw, SC 2011): numpy's own
``Philox(key=key, counter=[0, v, 0, 0]).random_raw()``. So a smaller dataset is the first rows of a
larger one, and neither block sizes nor workers can change a cell.

A cell's state is the number of cumulative probabilities of its CPT row, the last left out, that are at
or below u = (word >> 11) / 2^53.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from generators.dataset import Codes, Dataset, code_dtype
from generators.errors import InputError
from generators.network import Network

BLOCK_ROWS = 1 << 14


def cell_words(key: bytes, variable: int, n: int) -> NDArray[np.uint64]:
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
    return _philox(key, variable).random_raw(n)


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
    cardinalities = network.cardinalities
    codes = np.empty((n, len(network.names)), dtype=code_dtype(int(cardinalities.max(initial=1))), order="F")
    position = {name: j for j, name in enumerate(network.names)}
    for j in network.graph.order():
        cpt = network.cpts[network.names[j]]
        parents = [position[parent] for parent in cpt.parents]
        thresholds = np.cumsum(cpt.rows(), axis=1)[:, :-1]
        generator = np.random.Generator(_philox(key, j))
        for start in range(0, n, BLOCK_ROWS):
            rows = slice(start, min(n, start + BLOCK_ROWS))
            # Generator.random is (word >> 11) / 2^53; a test holds numpy to it.
            u = generator.random(rows.stop - rows.start)
            codes[rows, j] = _states(u, _configuration(codes[rows], parents, cardinalities), thresholds)
    return Dataset.trusted(network.names, network.states, codes)


def _philox(key: bytes, variable: int) -> np.random.Philox:
    return np.random.Philox(key=np.frombuffer(key, dtype="<u8"), counter=[0, variable, 0, 0])


def _configuration(codes: Codes, parents: list[int], cardinalities: NDArray[np.int64]) -> NDArray[np.intp] | None:
    if not parents:
        return None
    index = codes[:, parents[0]].astype(np.intp)
    for parent in parents[1:]:
        index *= cardinalities[parent]
        index += codes[:, parent]
    return index


def _states(
    u: NDArray[np.float64], configuration: NDArray[np.intp] | None, thresholds: NDArray[np.float64]
) -> NDArray[np.int64]:
    state = np.zeros(len(u), dtype=np.int64)
    for column in np.ascontiguousarray(thresholds.T):
        state += u >= (column[0] if configuration is None else column[configuration])
    return state
