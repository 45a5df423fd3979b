"""Contingency tables, the hot loop of every learner: bit planes for few cells, blocked indices for many.

A dataset is laid out twice (`Columns`). As *codes*, each variable contiguous, for tables with many
cells: one pass numbers the rows by their cell, another counts the numbers. As *bit planes*, one bit per
row and state, for tables with few: a cell is the population count of an AND of planes.

The lower half of this file holds the kernels that learners compile into their own loops. They count all
tables that share a *base*, the joint states of some variables, at the cost of one pass each:

- `split_planes` makes the planes of a base, and `tabulate_planes` counts one more variable within it;
- `index_rows` and `append_column` number the rows by a base, and `tabulate_index` counts within it;
- `tabulate_pair` counts two variables, `tabulate_occurring` any number of them, however many states.

Joint states that no row shows are left out of a base, so that it never has more parts than rows, however
large the product of the numbers of states is; nothing of the size of that product is ever allocated.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple, cast

import numpy as np
from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import MAX_TABLE_CELLS, Codes, Dataset, code_dtype
from generators.errors import InputError

WORD_ROWS = 64
MAX_PLANE_STATES = 16  # a plane per state costs r / 8 bytes a row; above this many, indices count faster
BLOCK_WORDS = 128  # planes are combined in blocks that stay in the first-level cache
BLOCK_ROWS = 4096
MAX_PLANE_CELLS = 160  # `count` uses planes for tables of at most this many cells
MAX_BASE_PLANES = 128  # of a base that learners share between tables
MAX_PRIVATE_CELLS = 4096  # tables of at most this many cells are counted in four copies
MANY_CELLS = 1 << 20  # larger tables are allocated only where there are as many rows
FEW_STATES = 16  # up to this many joint states, leaving out those that do not occur does not pay


class Columns(NamedTuple):
    """A dataset without missing cells, laid out for counting; kernels take it as it is.

    All arrays are C-contiguous and read-only.

    Parameters
    ----------
    codes : uint8 or uint16 array, shape (p, n)
        uint16 when a variable has more than 255 states.
    cardinalities : int64 array, shape (p,)
        Declared states of each variable.
    planes : uint64 array, shape (offsets[p], ceil(n / 64))
        ``planes[offsets[v] + s]`` has bit ``i % 64`` of word ``i // 64`` set where row i of variable v is
        in state s. Bits past the last row are 0.
    offsets : int64 array, shape (p + 1,)
        Variable v has the planes ``offsets[v]`` to ``offsets[v + 1] - 1``: one per state, or none when it
        has more than `MAX_PLANE_STATES` states.
    plane_sizes : uint32 array, shape (offsets[p],)
        Rows in each plane.
    """

    codes: Codes
    cardinalities: NDArray[np.int64]
    planes: NDArray[np.uint64]
    offsets: NDArray[np.int64]
    plane_sizes: NDArray[np.uint32]


def prepare(data: Dataset) -> Columns:
    """Lay a dataset out for counting.

    Beside the codes, which are shared with the dataset where their type allows, this takes r / 8 bytes
    per row for each variable of r <= 16 states, and none for others.

    Parameters
    ----------
    data : Dataset

    Returns
    -------
    Columns

    Raises
    ------
    InputError
        If a cell is missing.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 1], [1, 1]], dtype=np.uint8))
    >>> prepare(data).planes.ravel().tolist()  # a = 0, a = 1, b = 0, b = 1
    [1, 2, 0, 3]
    """
    cardinalities = data.cardinalities
    dtype = code_dtype(int(cardinalities.max(initial=1)))
    # A missing cell has the largest code of the wider type; of the narrower one, after conversion, too.
    codes: Codes = np.ascontiguousarray(data.codes.T, dtype=dtype)
    n_planes = np.where(cardinalities <= MAX_PLANE_STATES, cardinalities, 0)
    offsets = np.concatenate([[0], np.cumsum(n_planes)]).astype(np.int64)
    planes = np.empty((int(offsets[-1]), -(-data.n_rows // WORD_ROWS)), dtype=np.uint64)
    plane_sizes = np.empty(int(offsets[-1]), dtype=np.uint32)
    columns = Columns(codes, cardinalities, planes, offsets, plane_sizes)
    codes.flags.writeable = False
    incomplete = _fill_planes(*columns)
    if incomplete >= 0:
        raise InputError(
            f"variable {data.names[incomplete]!r} has missing cells; only complete rows are counted"
        )
    for array in columns:
        array.flags.writeable = False
    return columns


def count(columns: Columns, variables: Sequence[int]) -> NDArray[np.int64]:
    """Count the joint states of some variables.

    Parameters
    ----------
    columns : Columns
    variables : sequence of int
        Positions of variables; none gives the number of rows.

    Returns
    -------
    int64 array, shape (r1, ..., rk)
        An axis per variable, in the given order, over its declared states.

    Raises
    ------
    InputError
        If the table would have more than 2^26 cells.

    Examples
    --------
    >>> data = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 1], [1, 1]], dtype=np.uint8))
    >>> count(prepare(data), [0, 1]).tolist()
    [[0, 1], [0, 1]]
    """
    chosen = np.array(variables, dtype=np.int64)
    shape, cells = _shape(columns, chosen)
    table = np.zeros(cells, dtype=np.int64)
    _count(*columns, chosen, table)
    return table.reshape(shape)


def count_plain(columns: Columns, variables: Sequence[int]) -> NDArray[np.int64]:
    """Count the joint states of some variables with numpy alone: what `count` must equal.

    Parameters, result and errors are those of `count`.
    """
    shape, cells = _shape(columns, np.array(variables, dtype=np.int64))
    index = np.zeros(columns.codes.shape[1], dtype=np.int64)
    for v, r in zip(variables, shape, strict=True):
        index = index * r + columns.codes[v]
    return np.bincount(index, minlength=cells).reshape(shape)


def _shape(columns: Columns, chosen: NDArray[np.int64]) -> tuple[list[int], int]:
    shape: list[int] = columns.cardinalities[chosen].tolist()
    cells = math.prod(shape)
    if cells > MAX_TABLE_CELLS:
        raise InputError(
            f"a table over {len(shape)} variables would have {cells} cells; at most {MAX_TABLE_CELLS}"
        )
    return shape, cells


# What learners compile into their loops ---------------------------------------------------------------


class Workspace(NamedTuple):
    """Scratch arrays of the kernels below; their contents mean nothing between calls, except as stated.

    Parameters
    ----------
    base : uint64 array, shape (MAX_BASE_PLANES, ceil(n / 64))
        Planes of a base, from `split_planes`.
    base_sizes : uint32 array, shape (MAX_BASE_PLANES,)
        Rows in each of them.
    index : uint32 array, shape (n,)
        A number for each row, from `index_rows`.
    ranks : uint32 array
        For `index_rows`.
    table : uint32 array, shape (about 8 n, or n from a million rows on,)
        The last table counted. A table that does not fit has far fewer rows than cells: it is not counted
        but the joint states that occur are, with `tabulate_occurring`.
    private : uint32 array, shape (4, MAX_PRIVATE_CELLS)
    block : uint16 array, shape (BLOCK_ROWS,)
    """

    base: NDArray[np.uint64]
    base_sizes: NDArray[np.uint32]
    index: NDArray[np.uint32]  # type: ignore[assignment]  # hides tuple.index, which nothing here uses
    ranks: NDArray[np.uint32]
    table: NDArray[np.uint32]
    private: NDArray[np.uint32]
    block: NDArray[np.uint16]


def workspace(columns: Columns) -> Workspace:
    """Allocate the scratch arrays for one dataset: at most 70 bytes a row, and 0.1 MB."""
    n = columns.codes.shape[1]
    max_states = int(columns.cardinalities.max(initial=1))
    return Workspace(
        base=np.empty((MAX_BASE_PLANES, columns.planes.shape[1]), dtype=np.uint64),
        base_sizes=np.empty(MAX_BASE_PLANES, dtype=np.uint32),
        index=np.empty(n, dtype=np.uint32),
        ranks=np.empty(2 * n + min(2 * n, MANY_CELLS) + 2 * max_states + BLOCK_ROWS, dtype=np.uint32),
        table=np.empty(max(n, min(8 * n, MANY_CELLS)) + BLOCK_ROWS, dtype=np.uint32),
        private=np.empty((4, MAX_PRIVATE_CELLS), dtype=np.uint32),
        block=np.empty(BLOCK_ROWS, dtype=np.uint16),
    )


def _popcount(typing_context: Any, word: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        function = builder.module.declare_intrinsic("llvm.ctpop", [ir.IntType(64)])
        return builder.call(function, arguments)

    return types.uint64(types.uint64), generate


# Counts the bits of a word, as one machine instruction that vectorises where the processor can.
popcount = cast("Callable[[np.uint64], np.uint64]", intrinsic(_popcount))


@inlined
def plane_size(plane: NDArray[np.uint64]) -> np.uint64:
    """Count the rows in a plane."""
    rows = np.uint64(0)
    for w in range(plane.shape[0]):
        rows += popcount(plane[w])
    return rows


@inlined
def split_planes(columns: Columns, parents: NDArray[np.int64], child: int, space: Workspace) -> int:
    """Make the planes of a base: the joint states of `parents`, each split by the states of `child`.

    Fills ``space.base``: plane ``c * r + s`` holds the rows in the c-th joint state that occurs (in order
    of the parents' states, the last parent's changing fastest) with the child, of r states, in state s;
    and ``space.base_sizes``, the rows in each: the table of the family.

    Parameters
    ----------
    columns : Columns
    parents : int64 array, shape (k,)
    child : int
    space : Workspace

    Returns
    -------
    int
        How many joint states of the parents occur (1 without parents, and where there are no rows); -1
        if there would be too many planes or a variable has none: then use `index_rows`.
    """
    planes, offsets, base, sizes = columns.planes, columns.offsets, space.base, space.base_sizes
    k = parents.shape[0]
    n_parts = 1
    for j in range(k + 1):
        v = parents[j] if j < k else child
        first = offsets[v]
        r = offsets[v + 1] - first
        if r == 0 or n_parts * r > base.shape[0]:
            return -1
        if j == 0:
            for s in range(r):
                _copy(planes[first + s], base[s])
                sizes[s] = columns.plane_sizes[first + s]
        else:
            _split_parts(base, n_parts, planes, first, r, np.int64(0), planes.shape[1])
            for c in range(n_parts * r):
                sizes[c] = plane_size(base[c])
        if j < k:
            n_split, n_parts = n_parts * r, 0
            for c in range(n_split):
                if sizes[c] > 0:
                    if n_parts < c:
                        _copy(base[c], base[n_parts])
                        sizes[n_parts] = sizes[c]
                    n_parts += 1
            if n_parts == 0:  # there are no rows: one empty part stands for them
                n_parts = 1
    return n_parts


@inlined
def _copy(plane: NDArray[np.uint64], part: NDArray[np.uint64]) -> None:
    # Assigning a slice would do, but it takes numba seconds to compile the message of its shape check.
    for w in range(plane.shape[0]):
        part[w] = plane[w]


@inlined
def _split_parts(
    base: NDArray[np.uint64],
    n_parts: int,
    planes: NDArray[np.uint64],
    first: int,
    r: int,
    start: int | np.int64,
    end: int,
) -> None:
    # Splits each part by the states of one more variable, planes `first` to `first + r - 1`, in place:
    # from the last part to the first, so that each is read before its place is taken.
    for c in range(n_parts - 1, -1, -1):
        whole = base[c]
        for s in range(r - 1, -1, -1):
            plane, part = planes[first + s, start:end], base[c * r + s]
            for w in range(plane.shape[0]):
                part[w] = whole[w] & plane[w]


@inlined
def tabulate_planes(columns: Columns, variable: int, n_planes: int, space: Workspace) -> bool:
    """Count a variable within each plane of a base.

    Fills ``space.table``: cell ``c * r + s`` is the number of rows in plane c of the base with the
    variable, of r states, in state s.

    Parameters
    ----------
    columns : Columns
    variable : int
    n_planes : int
        How many planes `split_planes` made: joint states of the parents times states of the child.
    space : Workspace

    Returns
    -------
    bool
        False, and nothing is counted, if the variable has no planes: then use `tabulate_index`.
    """
    first = columns.offsets[variable]
    r = columns.offsets[variable + 1] - first
    if r == 0:
        return False
    _clear(space.table, n_planes * r)
    count_within(
        columns.planes,
        first,
        r,
        0,
        columns.planes.shape[1],
        space.base,
        space.base_sizes,
        n_planes,
        space.table,
    )
    return True


@inlined
def count_within(
    planes: NDArray[np.uint64],
    first: int,
    r: int,
    start: int,
    end: int,
    base: NDArray[np.uint64],
    sizes: NDArray[np.uint32],
    n_parts: int,
    table: NDArray[Any],
) -> None:
    """Add the rows of a variable within each plane of a base to a table: for the innermost loops.

    It takes no tuples of arrays and calls nothing: in other compiled functions the references to every
    array are counted, which takes as long as counting some hundred rows.

    Parameters
    ----------
    planes : uint64 array, shape (any, ceil(n / 64))
        Rows `first` to ``first + r - 1`` belong to the variable to count.
    first, r : int
    start, end : int
        Which words of the planes the base is about.
    base : uint64 array, shape (at least n_parts, at least end - start)
    sizes : uint32 array, shape (at least n_parts,)
        Rows in each plane of the base.
    n_parts : int
    table : uint32 or int64 array, shape (at least n_parts * r,)
        To cell ``c * r + s`` the rows in part c and state s are added.
    """
    for c in range(n_parts):
        table[c * r + r - 1] += sizes[c]
    fours = n_parts // 4 * 4
    for s in range(r - 1):
        plane = planes[first + s, start:end]
        for c in range(0, fours, 4):  # four parts at a time use each word of the plane four times
            p0, p1, p2, p3 = base[c], base[c + 1], base[c + 2], base[c + 3]
            n0, n1, n2, n3 = np.uint64(0), np.uint64(0), np.uint64(0), np.uint64(0)
            for w in range(plane.shape[0]):
                word = plane[w]
                n0 += popcount(p0[w] & word)
                n1 += popcount(p1[w] & word)
                n2 += popcount(p2[w] & word)
                n3 += popcount(p3[w] & word)
            cells = table[c * r : (c + 4) * r]
            cells[s] += n0
            cells[r - 1] -= n0
            cells[r + s] += n1
            cells[r + r - 1] -= n1
            cells[2 * r + s] += n2
            cells[2 * r + r - 1] -= n2
            cells[3 * r + s] += n3
            cells[3 * r + r - 1] -= n3
        for c in range(fours, n_parts):
            part = base[c]
            rows = np.uint64(0)
            for w in range(plane.shape[0]):
                rows += popcount(part[w] & plane[w])
            table[c * r + s] += rows
            table[c * r + r - 1] -= rows


@inlined
def tabulate_pair(columns: Columns, first: int, second: int, table: NDArray[Any]) -> None:
    """Count two variables that both have planes.

    Only the cells without either's last state are counted; the others follow from the margins.

    Parameters
    ----------
    columns : Columns
    first, second : int
    table : uint32 or int64 array, shape (at least r1 * r2,)
        Filled: cell ``s1 * r2 + s2``.
    """
    planes, offsets, sizes = columns.planes, columns.offsets, columns.plane_sizes
    a, b = offsets[first], offsets[second]
    r1, r2 = offsets[first + 1] - a, offsets[second + 1] - b
    last = (r1 - 1) * r2
    for t in range(r2):
        table[last + t] = sizes[b + t]
    for s in range(r1 - 1):
        one = planes[a + s]
        rest = np.uint64(sizes[a + s])
        for t in range(r2 - 1):
            other = planes[b + t]
            rows = np.uint64(0)
            for w in range(one.shape[0]):
                rows += popcount(one[w] & other[w])
            table[s * r2 + t] = rows
            table[last + t] -= rows
            rest -= rows
        table[s * r2 + r2 - 1] = rest
        table[last + r2 - 1] -= rest


@inlined
def index_rows(columns: Columns, variables: NDArray[np.int64], space: Workspace) -> int:
    """Give each row a number by the joint state of some variables, in ``space.index``.

    Rows have the same number exactly if they agree in all variables. Joint states that do not occur get
    no number, except that up to `FEW_STATES` joint states are numbered as they are. Works for any
    product of the numbers of states.

    Parameters
    ----------
    columns : Columns
    variables : int64 array, shape (k,)
    space : Workspace

    Returns
    -------
    int
        All numbers are below this; it is at least 1 and at most max(n, `FEW_STATES`).
    """
    index, room = space.index, space.ranks.shape[0]
    for i in range(index.shape[0]):
        index[i] = 0
    n_numbers = 1
    is_ranked = True
    for j in range(variables.shape[0]):
        v = variables[j]
        r = columns.cardinalities[v]
        if not is_ranked and n_numbers * r > room:
            n_numbers = _rank_by_table(index, n_numbers, space.ranks)
            is_ranked = True
        if n_numbers * r > room:
            n_numbers = _rank_by_sorting(index, n_numbers, columns.codes[v], r, space.ranks)
        else:
            append_column(columns, v, space)
            n_numbers *= r
            is_ranked = n_numbers <= FEW_STATES
    if not is_ranked:
        n_numbers = _rank_by_table(index, n_numbers, space.ranks)
    return max(n_numbers, 1)


@inlined
def append_column(columns: Columns, variable: int, space: Workspace) -> None:
    """Give each row a number by its number so far and the state of one more variable.

    The new number is the old one times the variable's states, plus the state; it must stay below 2^32.
    """
    index, column = space.index, columns.codes[variable]
    r = np.uint32(columns.cardinalities[variable])
    for i in range(index.shape[0]):
        index[i] = index[i] * r + np.uint32(column[i])


@inlined
def _rank_by_table(index: NDArray[np.uint32], n_numbers: int, ranks: NDArray[np.uint32]) -> int:
    rank = ranks[:n_numbers]
    for c in range(n_numbers):
        rank[c] = 0
    for i in range(index.shape[0]):
        rank[index[i]] = 1
    n_ranks = 0
    for c in range(n_numbers):
        occurs = rank[c]
        rank[c] = n_ranks
        n_ranks += occurs
    for i in range(index.shape[0]):
        index[i] = rank[index[i]]
    return n_ranks


@inlined
def _rank_by_sorting(
    index: NDArray[np.uint32], n_numbers: int, column: Codes, r: int, ranks: NDArray[np.uint32]
) -> int:
    # The rows are sorted by their number; then the states of `column` are numbered within each number,
    # with a mark per state that says in which number it was last seen. Linear in n + n_numbers + r.
    n = index.shape[0]
    ends = ranks[:n_numbers]
    order = ranks[n_numbers : n_numbers + n]
    marks = ranks[n_numbers + n : n_numbers + n + r]
    given = ranks[n_numbers + n + r : n_numbers + n + 2 * r]
    for c in range(n_numbers):
        ends[c] = 0
    for i in range(n):
        ends[index[i]] += np.uint32(1)
    total = np.uint32(0)
    for c in range(n_numbers):
        rows = ends[c]
        ends[c] = total
        total += rows
    for i in range(n):
        order[ends[index[i]]] = i
        ends[index[i]] += np.uint32(1)
    for s in range(r):
        marks[s] = 0
    n_ranks = 0
    start = 0
    for c in range(n_numbers):
        for k in range(start, ends[c]):
            i = order[k]
            s = column[i]
            if marks[s] != c + 1:
                marks[s] = c + 1
                given[s] = n_ranks
                n_ranks += 1
            index[i] = given[s]
        start = ends[c]
    return n_ranks


@inlined
def tabulate_index(columns: Columns, variable: int, n_numbers: int, space: Workspace) -> bool:
    """Count a variable within each number of the rows.

    Fills ``space.table``: cell ``c * r + s`` is the number of rows with the number c in ``space.index``
    and the variable, of r states, in state s.

    Parameters
    ----------
    columns : Columns
    variable : int
    n_numbers : int
        All numbers are below this.
    space : Workspace

    Returns
    -------
    bool
        False, and nothing is counted, if the table does not fit: then use `tabulate_occurring`.
    """
    index, column, table = space.index, columns.codes[variable], space.table
    n = index.shape[0]
    r = columns.cardinalities[variable]
    size = n_numbers * r
    if size > table.shape[0]:
        return False
    if size > MAX_PRIVATE_CELLS:
        _clear(table, size)
        factor = np.uint32(r)
        for i in range(n):
            table[index[i] * factor + np.uint32(column[i])] += np.uint32(1)
        return True
    for t in range(4):
        _clear(space.private[t], size)
    for start in range(0, n, BLOCK_ROWS):
        m = min(BLOCK_ROWS, n - start)
        # Slices first: an index with an offset keeps the check for negative ones and is not vectorised.
        numbers, states, cells = index[start : start + m], column[start : start + m], space.block[:m]
        for i in range(m):
            cells[i] = np.uint16(np.uint16(numbers[i]) * np.uint16(r) + np.uint16(states[i]))
        _add_cells(cells, space.private)
    t0, t1, t2, t3 = space.private[0], space.private[1], space.private[2], space.private[3]
    for c in range(size):
        table[c] = t0[c] + t1[c] + t2[c] + t3[c]
    return True


@inlined
def tabulate_occurring(columns: Columns, variables: NDArray[np.int64], space: Workspace) -> int:
    """Count the joint states that occur, of any number of variables with any number of states.

    Fills the first cells of ``space.table`` with the number of rows in each joint state that occurs, in
    an order of no meaning, among them at most `FEW_STATES` zeros; overwrites ``space.index``.

    Parameters
    ----------
    columns : Columns
    variables : int64 array, shape (k,)
    space : Workspace

    Returns
    -------
    int
        How many cells were filled; at least 1 and at most max(n, `FEW_STATES`).
    """
    index, table = space.index, space.table
    n_numbers = index_rows(columns, variables, space)
    _clear(table, n_numbers)
    for i in range(index.shape[0]):
        table[index[i]] += np.uint32(1)
    return n_numbers


@inlined
def _clear(table: NDArray[np.uint32], size: int) -> None:
    for c in range(size):
        table[c] = 0


@inlined
def _add_cells(cells: NDArray[np.uint16], private: NDArray[np.uint32]) -> None:
    # Four tables take turns, so that a store need not wait for the last one to the same cell. The cells
    # are loaded four at a time; which of the four goes to which table is of no account.
    one, low = np.uint32(1), np.uint64(0xFFFF)
    t0, t1, t2, t3 = private[0], private[1], private[2], private[3]
    fours = cells.shape[0] // 4 * 4
    packed = cells[:fours].view(np.uint64)
    for w in range(packed.shape[0]):
        word = packed[w]
        t0[word & low] += one
        t1[(word >> np.uint64(16)) & low] += one
        t2[(word >> np.uint64(32)) & low] += one
        t3[word >> np.uint64(48)] += one
    for i in range(fours, cells.shape[0]):
        t0[cells[i]] += one


# The kernels behind the functions above ---------------------------------------------------------------


@kernel
def _fill_planes(
    codes: Codes,
    cardinalities: NDArray[np.int64],
    planes: NDArray[np.uint64],
    offsets: NDArray[np.int64],
    plane_sizes: NDArray[np.uint32],
) -> int:
    # Returns the first variable with a code beyond its states, or -1.
    n = codes.shape[1]
    for v in range(codes.shape[0]):
        column = codes[v]
        highest = column.dtype.type(0)
        for i in range(n):
            highest = max(highest, column[i])
        if highest >= cardinalities[v]:
            return v
        first = offsets[v]
        for s in range(offsets[v + 1] - first):
            plane = planes[first + s]
            state = column.dtype.type(s)
            for w in range(plane.shape[0]):
                rows = column[w * WORD_ROWS : min(n, (w + 1) * WORD_ROWS)]
                word = np.uint64(0)
                for b in range(rows.shape[0]):
                    word |= np.uint64(rows[b] == state) << np.uint64(b)
                plane[w] = word
            plane_sizes[first + s] = plane_size(plane)
    return -1


@kernel
def _count(
    codes: Codes,
    cardinalities: NDArray[np.int64],
    planes: NDArray[np.uint64],
    offsets: NDArray[np.int64],
    plane_sizes: NDArray[np.uint32],
    variables: NDArray[np.int64],
    table: NDArray[np.int64],
) -> None:
    # The table comes zeroed. (Arrays one by one: numba takes longer to unpack a named tuple than all else
    # here takes for a few thousand rows.)
    columns = Columns(codes, cardinalities, planes, offsets, plane_sizes)
    k = variables.shape[0]
    if k == 0:
        table[0] = codes.shape[1]
        return
    has_planes = True
    for j in range(k):
        has_planes &= offsets[variables[j] + 1] > offsets[variables[j]]
    if not has_planes or table.shape[0] > MAX_PLANE_CELLS:
        _count_blocks(columns, variables, table)
    elif k == 1:
        for s in range(table.shape[0]):
            table[s] = plane_sizes[offsets[variables[0]] + s]
    elif k == 2:
        tabulate_pair(columns, variables[0], variables[1], table)
    else:
        _count_planes(columns, variables, table)


@inlined
def _count_planes(columns: Columns, variables: NDArray[np.int64], table: NDArray[np.int64]) -> None:
    # As `split_planes` and `tabulate_planes`, but block by block and with all joint states. The base is
    # made of all variables but the one with most states, which is cheapest to count within it.
    k, n_words = variables.shape[0], columns.planes.shape[1]
    most = 0
    for j in range(k):
        if columns.cardinalities[variables[j]] > columns.cardinalities[variables[most]]:
            most = j
    r_most = columns.cardinalities[variables[most]]
    first_most = columns.offsets[variables[most]]
    n_base = table.shape[0] // r_most
    base = np.empty((n_base, min(n_words, BLOCK_WORDS)), dtype=np.uint64)
    sizes = np.empty(n_base, dtype=np.uint32)
    found = np.zeros(table.shape[0], dtype=np.int64)
    for start in range(0, n_words, BLOCK_WORDS):
        end = min(n_words, start + BLOCK_WORDS)
        n_parts = 1
        for j in range(k):
            if j != most:
                first = columns.offsets[variables[j]]
                r = columns.cardinalities[variables[j]]
                if n_parts == 1:
                    for s in range(r):
                        _copy(columns.planes[first + s, start:end], base[s])
                else:
                    _split_parts(base, n_parts, columns.planes, first, r, start, end)
                n_parts *= r
        for c in range(n_parts):
            sizes[c] = plane_size(base[c, : end - start])
        count_within(columns.planes, first_most, r_most, start, end, base, sizes, n_parts, found)
    # Back to the order of the axes: the base runs over those before and those after the one with most.
    n_after = 1
    for j in range(most + 1, k):
        n_after *= columns.cardinalities[variables[j]]
    for c in range(n_base):
        before, after = c // n_after, c % n_after
        for s in range(r_most):
            table[(before * r_most + s) * n_after + after] = found[c * r_most + s]


@inlined
def _count_blocks(columns: Columns, variables: NDArray[np.int64], table: NDArray[np.int64]) -> None:
    n = columns.codes.shape[1]
    size = table.shape[0]
    if size <= MAX_PRIVATE_CELLS:
        private = np.zeros((4, size), dtype=np.uint32)
        few = np.empty(min(n, BLOCK_ROWS), dtype=np.uint16)
        for start in range(0, n, BLOCK_ROWS):
            cells = few[: min(BLOCK_ROWS, n - start)]
            _index_block(columns, variables, start, cells)
            _add_cells(cells, private)
        for c in range(size):
            table[c] = np.int64(private[0, c]) + private[1, c] + private[2, c] + private[3, c]
    else:
        many = np.empty(min(n, BLOCK_ROWS), dtype=np.uint32)
        for start in range(0, n, BLOCK_ROWS):
            numbers = many[: min(BLOCK_ROWS, n - start)]
            _index_block(columns, variables, start, numbers)
            for i in range(numbers.shape[0]):
                table[numbers[i]] += 1


@inlined
def _index_block(
    columns: Columns, variables: NDArray[np.int64], start: int, cells: NDArray[np.uint16] | NDArray[np.uint32]
) -> None:
    m = cells.shape[0]
    number = cells.dtype.type
    for j in range(variables.shape[0]):
        states = columns.codes[variables[j], start : start + m]
        r = number(columns.cardinalities[variables[j]])
        if j == 0:
            for i in range(m):
                cells[i] = number(states[i])
        else:
            for i in range(m):
                cells[i] = number(number(cells[i] * r) + number(states[i]))


@warm_up
def _compile() -> None:
    columns = prepare(Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((2, 2), dtype=np.uint8)))
    count(columns, [0, 1])
