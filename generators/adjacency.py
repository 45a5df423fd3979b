"""Neighbour lists: the form in which compiled kernels walk over sparse graphs.

All lists of a graph stand in one array `nodes`; variable v owns three runs of it, one after another:

- its parents, ``nodes[at[3 * v] : at[3 * v + 1]]``,
- the variables joined to it by undirected edges, ``nodes[at[3 * v + 1] : at[3 * v + 2]]``,
- its children, ``nodes[at[3 * v + 2] : at[3 * v + 3]]``,

so ``nodes[at[3 * v] : at[3 * v + 3]]`` is everything adjacent to it. `at` is int64 with shape
(3 p + 1,), `nodes` is uint32 (unsigned, so that indexing needs no check for negative positions).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up

Arrow = NDArray[np.bool_]
Offsets = NDArray[np.int64]
Nodes = NDArray[np.uint32]

BLOCK_WORDS = 1024  # of 8 cells each; the positions found in a block stay in the first-level cache


@kernel
def neighbour_lists(arrow: Arrow) -> tuple[Offsets, Nodes]:
    """Build the neighbour lists of a graph; each run is in ascending order.

    Parameters
    ----------
    arrow : bool array, shape (p, p), C-contiguous
        As in `Graph`: [i, j] for i -> j, both directions for an undirected edge.

    Returns
    -------
    at : int64 array, shape (3 p + 1,)
    nodes : uint32 array, shape (2 edges,)

    Examples
    --------
    >>> at, nodes = neighbour_lists(np.array([[0, 1, 0], [0, 0, 1], [0, 1, 0]], dtype=bool))  # 0 -> 1 - 2
    >>> at.tolist(), nodes.tolist()
    ([0, 0, 0, 1, 2, 3, 3, 3, 4, 4], [1, 0, 2, 1])
    """
    cells = _set_cells(arrow)
    p = arrow.shape[0]
    source = np.empty(cells.size, np.uint32)
    target = np.empty(cells.size, np.uint32)
    is_undirected = np.empty(cells.size, np.bool_)
    n = 0
    i = 0
    row_end = p
    for cell in cells:
        while cell >= row_end:
            i += 1
            row_end += p
        j = cell - row_end + p
        if not arrow[j, i] or i < j:
            source[n] = i
            target[n] = j
            is_undirected[n] = arrow[j, i]
            n += 1
    return lists_from_edges(p, source[:n], target[:n], is_undirected[:n])


@kernel
def lists_from_edges(p: int, source: Nodes, target: Nodes, is_undirected: Arrow) -> tuple[Offsets, Nodes]:
    """Build neighbour lists from edges, each given once; runs keep the order of the edges.

    Parameters
    ----------
    p : int
        The number of variables.
    source, target : uint32 array, shape (edges,)
    is_undirected : bool array, shape (edges,)

    Returns
    -------
    at : int64 array, shape (3 p + 1,)
    nodes : uint32 array, shape (2 edges,)
    """
    n = np.zeros(3 * p, np.int64)
    for e in range(source.size):
        s, t = 3 * source[e], 3 * target[e]
        n[s + 1 if is_undirected[e] else s + 2] += 1
        n[t + 1 if is_undirected[e] else t] += 1
    at = np.zeros(3 * p + 1, np.int64)
    for run in range(3 * p):
        at[run + 1] = at[run] + n[run]
        n[run] = at[run]
    nodes = np.empty(2 * source.size, np.uint32)
    for e in range(source.size):
        s, t = 3 * source[e], 3 * target[e]
        own, other = (s + 1, t + 1) if is_undirected[e] else (s + 2, t)
        nodes[n[own]] = target[e]
        n[own] += 1
        nodes[n[other]] = source[e]
        n[other] += 1
    return at, nodes


@kernel
def arrow_from_lists(at: Offsets, nodes: Nodes) -> Arrow:
    """Write neighbour lists back into a square array."""
    p = at.size // 3
    arrow = np.zeros((p, p), np.bool_)
    for i in range(p):
        for j in nodes[at[3 * i + 1] : at[3 * i + 3]]:
            arrow[i, j] = True
    return arrow


@inlined
def _set_cells(arrow: Arrow) -> NDArray[np.int64]:
    """List the flat positions of the True cells, looking at eight cells at a time.

    Positions are written unconditionally and the counter moves on only past a True cell: in a sparse
    array a branch here would be mispredicted at every edge.
    """
    flat = arrow.reshape(arrow.size)
    n_words = flat.size // 8
    words = flat[: 8 * n_words].view(np.uint64)
    occupied = np.empty(BLOCK_WORDS + 1, np.int64)
    cells = np.empty(4 * arrow.shape[0] + 8, np.int64)
    n = 0
    for start in range(0, n_words, BLOCK_WORDS):
        block = words[start : start + BLOCK_WORDS]
        n_occupied = 0
        for k in range(block.size):
            occupied[n_occupied] = start + k
            n_occupied += block[k] != 0
        for word in occupied[:n_occupied]:
            if n + 8 > cells.size:
                cells = _doubled(cells)
            eight = flat[8 * word : 8 * word + 8]
            for k in range(8):
                cells[n] = 8 * word + k
                n += eight[k]
    if n + 8 > cells.size:
        cells = _doubled(cells)
    for k in range(8 * n_words, flat.size):
        cells[n] = k
        n += flat[k]
    return cells[:n]


@inlined
def _doubled(cells: NDArray[np.int64]) -> NDArray[np.int64]:
    larger = np.empty(2 * cells.size, np.int64)
    for k in range(cells.size):
        larger[k] = cells[k]
    return larger


@warm_up
def _compile() -> None:
    arrow = np.zeros((3, 3), np.bool_)
    arrow[0, 1] = arrow[1, 2] = arrow[2, 1] = True
    neighbour_lists(arrow)
    arrow.flags.writeable = False
    arrow_from_lists(*neighbour_lists(arrow))
