"""Contingency tables: every way of counting gives what numpy's bincount gives."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from generators.compiled import kernel
from generators.dataset import MAX_TABLE_CELLS, Codes, Dataset, code_dtype
from generators.errors import InputError
from harness import counts
from harness.counts import Columns, Workspace, count, count_plain, prepare, workspace


def make_data(cardinalities: Sequence[int], n: int, seed: int, *, skew: float = 0.0) -> Dataset:
    """Draw rows; with `skew`, each cell is in the first state with that probability."""
    rng = np.random.default_rng(seed)
    codes = np.zeros((n, len(cardinalities)), dtype=code_dtype(max(cardinalities, default=1)))
    for j, r in enumerate(cardinalities):
        codes[:, j] = np.where(rng.random(n) < skew, 0, rng.integers(0, r, n))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(tuple(f"v{j}" for j in range(len(cardinalities))), states, codes)


def bincount(data: Dataset, variables: Sequence[int]) -> NDArray[np.int64]:
    """Count with numpy alone, from the dataset itself."""
    shape = tuple(len(data.states[j]) for j in variables)
    index = np.zeros(data.n_rows, dtype=np.int64)
    if variables:
        index = np.ravel_multi_index(tuple(data.codes[:, j].astype(np.int64) for j in variables), shape)
    return np.bincount(index, minlength=math.prod(shape)).reshape(shape)


@kernel
def base_table(
    columns: Columns, parents: NDArray[np.int64], y: int, x: int, on_planes: bool, space: Workspace
) -> tuple[int, bool]:
    """Count x within the base (parents, y) in one of the two ways, as a learner does."""
    r = columns.cardinalities[y]
    if on_planes:
        n_parts = counts.split_planes(columns, parents, y, space)
        if n_parts < 0:
            return n_parts, False
        return n_parts, counts.tabulate_planes(columns, x, n_parts * r, space)
    n_parts = counts.index_rows(columns, parents, space)
    if n_parts * r > space.table.shape[0]:
        return n_parts, False
    counts.append_column(columns, y, space)
    return n_parts, counts.tabulate_index(columns, x, n_parts * r, space)


@kernel
def occurring(columns: Columns, variables: NDArray[np.int64], space: Workspace) -> int:
    """Count the joint states that occur, as a learner does."""
    return counts.tabulate_occurring(columns, variables, space)


cases = st.tuples(
    st.lists(st.integers(1, 20), min_size=1, max_size=6),
    st.integers(0, 300),
    st.integers(0, 2**32),
    st.sampled_from([0.0, 0.9]),
)


@given(cases)
def test_a_table_equals_bincount(case: tuple[list[int], int, int, float]) -> None:
    """`count` and `count_plain` equal numpy's bincount for every number of variables, states and rows."""
    cardinalities, n, seed, skew = case
    while math.prod(cardinalities) > 100_000:
        cardinalities = cardinalities[:-1]
    data = make_data(cardinalities, n, seed, skew=skew)
    variables = np.random.default_rng(seed).permutation(len(cardinalities)).tolist()

    expected = bincount(data, variables)

    columns = prepare(data)
    assert expected.tolist() == count(columns, variables).tolist()
    assert expected.tolist() == count_plain(columns, variables).tolist()


@pytest.mark.parametrize("n", [63, 64, 65, 128 * 64, 128 * 64 + 1, 20_000])
@pytest.mark.parametrize(
    "cardinalities",
    [
        (2,),
        (3, 4),
        (2, 2, 2),
        (4, 2, 3, 2),
        (16, 3),
        (17, 3),
        (5, 4, 8),
        (6, 6, 5),
        (10, 10, 10, 5),
        (300, 2),
    ],
)
def test_block_borders_do_not_show(cardinalities: tuple[int, ...], n: int) -> None:
    """On planes, in four copies and by plain index, tables are right around the sizes of words and blocks."""
    data = make_data(cardinalities, n, seed=n)
    variables = list(range(len(cardinalities)))

    table = count(prepare(data), variables)

    assert np.array_equal(bincount(data, variables), table)
    assert table.dtype == np.int64


def test_no_variables_count_the_rows() -> None:
    """The table over no variables is the number of rows."""
    columns = prepare(make_data((2, 3), 17, seed=1))

    for counter in (count, count_plain):
        assert counter(columns, []).shape == ()
        assert int(counter(columns, [])) == 17


def test_a_dataset_keeps_its_own_codes() -> None:
    """Laying a dataset out for counting copies no codes and leaves everything read-only."""
    data = make_data((2, 3, 40), 100, seed=2)

    columns = prepare(data)

    assert np.shares_memory(columns.codes, data.codes)
    assert not any(array.flags.writeable for array in columns)


def test_codes_are_narrow_where_states_are_few() -> None:
    """A dataset with 16-bit codes but few states is counted with 8-bit codes; one with 256 states is not."""
    wide = make_data((2, 3), 50, seed=3)
    wide = Dataset(wide.names, wide.states, wide.codes.astype(np.uint16))
    wider = make_data((2, 256), 50, seed=3)

    assert prepare(wide).codes.dtype == np.uint8
    assert prepare(wider).codes.dtype == np.uint16
    assert np.array_equal(bincount(wide, [0, 1]), count(prepare(wide), [0, 1]))
    assert np.array_equal(bincount(wider, [1, 0]), count(prepare(wider), [1, 0]))


def test_planes_hold_one_bit_per_row_and_state() -> None:
    """The planes are the indicator matrix of the states, padded with zeros; their sizes are its sums."""
    data = make_data((3, 17, 2), 130, seed=4)

    columns = prepare(data)

    bits = np.unpackbits(columns.planes.astype("<u8").view(np.uint8), axis=1, bitorder="little")
    expected = np.concatenate(
        [data.codes[:, 0] == s for s in range(3)] + [data.codes[:, 2] == s for s in range(2)]
    ).reshape(5, 130)
    assert columns.offsets.tolist() == [0, 3, 3, 5]  # the variable with 17 states has no planes
    assert np.array_equal(expected, bits[:, :130])
    assert not bits[:, 130:].any()
    assert expected.sum(axis=1).tolist() == columns.plane_sizes.tolist()


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16])
def test_missing_cells_are_refused(dtype: type[np.uint8] | type[np.uint16]) -> None:
    """A dataset with a missing cell cannot be laid out for counting; the message names the variable."""
    codes = np.zeros((5, 2), dtype=dtype)
    codes[3, 1] = np.iinfo(dtype).max

    with pytest.raises(InputError, match="'b' has missing cells"):
        prepare(Dataset(("a", "b"), (("0", "1"),) * 2, codes))


def test_a_table_beyond_the_limit_is_refused_before_memory_is_taken() -> None:
    """A table of more than 2^26 cells is an input error, in both ways of counting."""
    columns = prepare(make_data((255,) * 4, 10, seed=5))

    for counter in (count, count_plain):
        with pytest.raises(InputError, match=f"{255**4} cells; at most {MAX_TABLE_CELLS}"):
            counter(columns, [0, 1, 2, 3])


@given(cases)
def test_a_base_holds_the_joint_states_that_occur(case: tuple[list[int], int, int, float]) -> None:
    """On planes and by index, a base has the tables of the parents' joint states that occur, no others."""
    cardinalities, n, seed, skew = case
    data = make_data([2, 3, *cardinalities], n, seed, skew=skew)
    columns = prepare(data)
    space = workspace(columns)
    parents = np.arange(2, len(cardinalities) + 2)
    rows = [tuple(row) for row in data.codes[:, 2:].tolist()]
    expected = (
        Counter(
            tuple(
                tuple(
                    sum(
                        rows[i] == joint and data.codes[i, 0] == y and data.codes[i, 1] == x for i in range(n)
                    )
                    for x in range(3)
                )
                for y in range(2)
            )
            for joint in set(rows)
        )
        if n
        else Counter()
    )

    for on_planes in (True, False):
        n_parts, is_counted = base_table(columns, parents, 0, 1, on_planes, space)

        assert is_counted or on_planes
        if is_counted:
            tables = space.table[: n_parts * 6].reshape(n_parts, 2, 3)
            found = Counter(tuple(map(tuple, table.tolist())) for table in tables if table.any())
            assert expected == found
            assert 1 <= n_parts <= max(n, counts.FEW_STATES)


@pytest.mark.parametrize("states", [10, 200, 40_000])
def test_huge_products_of_states_cost_no_more_than_the_rows(states: int) -> None:
    """With ten variables of very many states, joint states are still numbered exactly, in linear memory."""
    rng = np.random.default_rng(6)
    patterns = rng.integers(0, states, (40, 10))
    patterns[1::2, :9] = patterns[::2, :9]  # pairs that differ in the last variable only, or not at all
    codes: Codes = patterns[rng.integers(0, 40, 500)].astype(code_dtype(states))
    names = tuple(f"v{j}" for j in range(10))
    data = Dataset(names, (tuple(map(str, range(states))),) * 10, codes)
    columns = prepare(data)
    space = workspace(columns)

    n_parts = occurring(columns, np.arange(10), space)

    expected = Counter(map(tuple, codes.tolist()))
    table = space.table[:n_parts]
    assert sorted(expected.values()) == sorted(table[table > 0].tolist())
    per_row = space.table[space.index]
    assert [expected[tuple(row)] for row in codes.tolist()] == per_row.tolist()
    assert sum(array.nbytes for array in space) < 1_000_000


@given(st.integers(0, 2**32), st.integers(0, 60))
def test_joint_states_are_numbered_alike_however_they_are_found(seed: int, n: int) -> None:
    """Ranking by table and by sorting give a number per joint state: same number exactly if same states."""
    rng = np.random.default_rng(seed)
    cardinalities = rng.choice([1, 2, 3, 300, 5000, 60_000], 5).tolist()
    data = make_data(cardinalities, n, seed, skew=0.5)
    columns = prepare(data)
    space = workspace(columns)

    n_parts = occurring(columns, np.arange(5), space)

    _, expected = np.unique(data.codes, axis=0, return_inverse=True) if n else (None, np.zeros(0, int))
    pairs = set(zip(expected.tolist(), space.index.tolist(), strict=True))
    assert len(pairs) == len(set(expected.tolist())) == len(set(space.index.tolist()))
    assert n_parts <= max(n, counts.FEW_STATES)
