"""Neighbour lists against the square array that they stand for."""

from __future__ import annotations

import numpy as np
import pytest

from generators.adjacency import arrow_from_lists, neighbour_lists


# Sizes around 8, the cells that are looked at together, and around 91, the side from which a square has
# more than one block of them (1024 words of 8 cells); from no edge to all.
@pytest.mark.parametrize("p", [0, 1, 2, 3, 7, 8, 9, 64, 90, 91, 200])
@pytest.mark.parametrize("density", [0.0, 0.02, 0.3, 1.0])
def test_lists_hold_parents_neighbours_and_children_in_order(
    rng: np.random.Generator, p: int, density: float
) -> None:
    """Each variable's three runs are the positions in its column and row, ascending."""
    arrow = rng.random((p, p)) < density
    np.fill_diagonal(arrow, False)

    at, nodes = neighbour_lists(arrow)

    for v in range(p):
        into, out = arrow[:, v], arrow[v]
        runs = [nodes[at[3 * v + k] : at[3 * v + k + 1]].tolist() for k in range(3)]
        assert [np.flatnonzero(cells).tolist() for cells in (into & ~out, into & out, out & ~into)] == runs
    assert (np.triu(arrow | arrow.T).sum() * 2,) == nodes.shape


@pytest.mark.parametrize("p", [0, 1, 9, 91])
def test_lists_can_be_written_back(rng: np.random.Generator, p: int) -> None:
    """The square array made from the lists is the one they were made from."""
    arrow = rng.random((p, p)) < 0.2
    np.fill_diagonal(arrow, False)

    assert np.array_equal(arrow, arrow_from_lists(*neighbour_lists(arrow)))
