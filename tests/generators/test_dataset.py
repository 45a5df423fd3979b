"""Datasets and the masked view of one."""

from __future__ import annotations

from itertools import permutations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.stats import chisquare

from generators.dataset import Dataset, View, code_dtype
from generators.errors import InputError
from generators.graph import Graph

NO_YES = ("no", "yes")


def small(codes: list[list[int]], dtype: type = np.uint8) -> Dataset:
    """Return rows of a two-state `a` and a three-state `b`."""
    return Dataset(("a", "b"), (NO_YES, ("x", "y", "z")), np.array(codes, dtype=dtype).reshape(-1, 2))


@st.composite
def datasets(draw: st.DrawFn) -> Dataset:
    """Draw up to twelve rows of up to five variables, missing cells included."""
    sides = draw(st.lists(st.integers(1, 4), min_size=1, max_size=5))
    n = draw(st.integers(0, 12))
    columns = [draw(arrays(np.uint8, n, elements=st.sampled_from([*range(side), 255]))) for side in sides]
    codes = np.array(columns, dtype=np.uint8).reshape(len(sides), n).T
    names = tuple(f"v{j}" for j in range(len(sides)))
    return Dataset(names, tuple(tuple("abcd"[:side]) for side in sides), codes)


def test_shape_and_states_are_reported() -> None:
    """A dataset knows its rows, variables, declared states and missing cells."""
    data = small([[0, 2], [1, 255], [1, 0]])

    assert (data.n_rows, data.n_variables) == (3, 2)
    assert data.cardinalities.tolist() == [2, 3]
    assert data.missing_code == 255
    assert data.has_missing
    assert not data.first(1).has_missing
    assert repr(data) == "Dataset(3 rows of 2 variables)"


@pytest.mark.parametrize(
    ("names", "states", "codes", "message"),
    [
        (("a",), (NO_YES,), np.zeros((1, 1), np.int64), "uint8 or uint16, got int64"),
        (("a",), (NO_YES,), np.zeros(3, np.uint8), "do not fit"),
        (("a", "b"), (NO_YES, NO_YES), np.zeros((3, 1), np.uint8), "do not fit"),
        (("a",), (NO_YES, NO_YES), np.zeros((3, 1), np.uint8), "do not fit"),
        (("a", "a"), (NO_YES, NO_YES), np.zeros((3, 2), np.uint8), "must differ"),
        (("a",), ((),), np.zeros((0, 1), np.uint8), "different states, got 0"),
        (("a",), (("no", "no"),), np.zeros((3, 1), np.uint8), "different states"),
        (("a",), (tuple(map(str, range(256))),), np.zeros((3, 1), np.uint8), "1 to 255"),
        (("a",), (NO_YES,), np.array([[0], [2]], np.uint8), "a code beyond"),
        (("a",), (NO_YES,), np.array([[254], [255]], np.uint8), "a code beyond"),
    ],
)
def test_what_is_no_dataset_is_refused(
    names: tuple[str, ...], states: tuple[tuple[str, ...], ...], codes: np.ndarray, message: str
) -> None:
    """Wrong types and shapes, repeated names or states, and codes without a state are said to be wrong."""
    with pytest.raises(InputError, match=message):
        Dataset(names, states, codes)


@pytest.mark.parametrize(("n_states", "dtype"), [(1, np.uint8), (255, np.uint8), (256, np.uint16)])
def test_code_type_leaves_room_for_the_missing_mark(n_states: int, dtype: type) -> None:
    """The smallest type is taken that holds every state and, beyond them, the missing mark."""
    chosen = code_dtype(n_states)

    assert chosen is dtype
    assert n_states - 1 < np.iinfo(chosen).max


@pytest.mark.parametrize("order", ["C", "F"])
def test_codes_cannot_be_changed_from_outside(order: str) -> None:
    """A dataset keeps a column-contiguous, read-only copy of what it is given."""
    codes = np.array([[0, 1], [1, 2]], dtype=np.uint8, order=order)  # type: ignore[call-overload]
    data = Dataset(("a", "b"), (NO_YES, ("x", "y", "z")), codes)
    codes[0, 0] = 1

    assert data.codes.tolist() == [[0, 1], [1, 2]]
    assert data.codes.flags.f_contiguous
    with pytest.raises(ValueError, match="read-only"):
        data.codes[0, 0] = 1


def test_equality_means_content() -> None:
    """Datasets are equal if names, states, code type and codes are."""
    assert small([[0, 1]]) == small([[0, 1]])
    assert small([[0, 1]]) != small([[0, 2]])
    assert small([[0, 1]]) != small([[0, 1]], np.uint16)
    assert small([[0, 1]]) != "data"


@given(datasets(), st.data())
def test_table_counts_complete_rows(data: Dataset, choice: st.DataObject) -> None:
    """A table holds what numpy's histogram counts in the rows where none of its variables is missing."""
    names = choice.draw(st.lists(st.sampled_from(data.names), min_size=1, max_size=3, unique=True))
    columns = [data.names.index(name) for name in names]
    chosen = data.codes[:, columns].astype(np.int64)
    complete = chosen[(chosen != data.missing_code).all(axis=1)]
    sides = [len(data.states[j]) for j in columns]
    edges = [np.arange(side + 1) - 0.5 for side in sides]
    expected = np.histogramdd(complete, bins=edges)[0] if len(complete) else np.zeros(sides)

    table = data.table(names)

    assert table.shape == tuple(sides)
    assert expected.tolist() == table.tolist()


def test_table_too_large_is_refused_before_it_is_made() -> None:
    """A table of more than 2^26 cells is refused with its size."""
    p = 27
    data = Dataset(
        tuple(f"v{j}" for j in range(p)), tuple(NO_YES for _ in range(p)), np.zeros((1, p), np.uint8)
    )

    with pytest.raises(InputError, match="134217728 cells"):
        data.table(data.names)


def test_unknown_names_are_refused() -> None:
    """A table over a variable that is not there names it."""
    with pytest.raises(InputError, match="'c' is not a variable"):
        small([[0, 0]]).table(["a", "c"])


def test_first_rows_are_a_dataset_of_their_own() -> None:
    """The first rows keep names and states, and more rows than there are cannot be had."""
    data = small([[0, 2], [1, 1], [1, 0]])

    assert data.first(2) == small([[0, 2], [1, 1]])
    assert data.first(0) == small([])
    assert data.first(2).codes.flags.f_contiguous
    for n in (-1, 4):
        with pytest.raises(InputError, match="that has 3"):
            data.first(n)


def test_frame_shows_states_as_categories() -> None:
    """The pandas frame has the declared states as categories, unseen ones too, and missing cells as NaN."""
    frame = small([[0, 2], [1, 255]]).frame()

    expected = pd.DataFrame(
        {
            "a": pd.Categorical(["no", "yes"], categories=["no", "yes"]),
            "b": pd.Categorical(["z", None], categories=["x", "y", "z"]),
        }
    )
    pd.testing.assert_frame_equal(expected, frame)


@given(datasets(), st.integers(0, 2**32))
def test_a_masked_dataset_can_be_unmasked_by_hand(data: Dataset, seed: int) -> None:
    """Column k of the view is column columns[k] with every state renumbered and missing cells kept."""
    view = View.draw(data.cardinalities.tolist(), np.random.default_rng(seed))

    masked = view.mask(data)

    assert sorted(view.columns.tolist()) == list(range(data.n_variables))
    for k, j in enumerate(view.columns.tolist()):
        for seen, true in zip(masked.codes[:, k].tolist(), data.codes[:, j].tolist(), strict=True):
            assert seen == (255 if true == 255 else view.relabel[k][true])
        assert sorted(view.relabel[k].tolist()) == list(range(len(data.states[j])))
    assert Dataset(masked.names, masked.states, masked.codes) == masked


@given(datasets(), st.integers(0, 2**32))
def test_masking_keeps_every_count(data: Dataset, seed: int) -> None:
    """A table of the view is the table of the dataset with its states in another order."""
    view = View.draw(data.cardinalities.tolist(), np.random.default_rng(seed))
    pair = [0, data.n_variables - 1] if data.n_variables > 1 else [0]

    masked = view.mask(data).table([f"x{k + 1}" for k in pair])
    true = data.table([data.names[view.columns[k]] for k in pair])

    assert true.tolist() == masked[np.ix_(*(view.relabel[k] for k in pair))].tolist()


@given(st.integers(1, 6), st.integers(0, 2**32))
def test_unmasking_brings_every_edge_home(p: int, seed: int) -> None:
    """An edge between two masked columns becomes the same edge between the variables behind them."""
    rng = np.random.default_rng(seed)
    view = View.draw([2] * p, rng)
    arrow = rng.random((p, p)) < 0.4
    np.fill_diagonal(arrow, False)
    learned = Graph(tuple(f"x{k + 1}" for k in range(p)), arrow)
    names = [f"v{j}" for j in range(p)]

    graph = view.unmask(learned, names)

    behind = {f"x{k + 1}": names[j] for k, j in enumerate(view.columns.tolist())}
    expected = {(behind[a], behind[b]) for a, b in learned.to_networkx().edges}
    assert expected == set(graph.to_networkx().edges)
    assert graph.names == tuple(names)


def test_a_view_leaks_no_name() -> None:
    """Names and states of the view say nothing but their number."""
    view = View.draw([2, 3], np.random.default_rng(3))

    masked = view.mask(small([[0, 2], [1, 1]]))

    assert masked.names == ("x1", "x2")
    assert set(masked.states) == {("0", "1"), ("0", "1", "2")}


def test_every_view_is_equally_likely() -> None:
    """All column orders and all relabellings of a column are equally likely.

    6,000 views of three columns with three states: chi-square over the 6 orders, and over the 6
    relabellings of the first column; the statement fails by chance with probability 1e-6 each.
    """
    rng = np.random.default_rng(20261201)
    views = [View.draw([3, 3, 3], rng) for _ in range(6000)]
    keys = list(permutations(range(3)))

    orders = [tuple(view.columns.tolist()) for view in views]
    labels = [tuple(view.relabel[0].tolist()) for view in views]

    assert chisquare([orders.count(key) for key in keys]).pvalue > 1e-6
    assert chisquare([labels.count(key) for key in keys]).pvalue > 1e-6


def test_a_view_of_many_states_keeps_the_wide_type() -> None:
    """Relabelling 300 states works on two-byte codes, missing cells included."""
    states = (tuple(map(str, range(300))),)
    data = Dataset(("a",), states, np.array([[299], [0], [65535]], dtype=np.uint16))
    view = View.draw([300], np.random.default_rng(1))

    masked = view.mask(data)

    assert masked.codes.dtype == np.uint16
    assert masked.codes[:, 0].tolist() == [view.relabel[0][299], view.relabel[0][0], 65535]


def test_words_tell_views_apart() -> None:
    """The plain numbers of a view hold its order and every relabelling."""
    view = View(np.array([1, 0]), (np.array([2, 0, 1], np.uint16), np.array([0, 1], np.uint16)))

    assert view.words() == [[1, 0], [2, 0, 1], [0, 1]]
