"""Sampling: the words bit by bit, and the rows against exact inference."""

from __future__ import annotations

from itertools import accumulate, product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import chisquare

from generators import sampling
from generators.catalogue import published_network
from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.errors import InputError
from generators.graph import Graph
from generators.inference import joint, marginals
from generators.network import Cpt, Network
from generators.philox import draw_words
from generators.sampling import cell_words, sample
from generators.topologies import generate_graph

KEYS = st.binary(min_size=16, max_size=16)
WORD = (1 << 64) - 1


def philox(counter: list[int], key: list[int]) -> list[int]:
    """Mix a counter by Philox4x64-10 in plain whole numbers.

    Salmon, Moraes, Dror and Shaw, "Parallel random numbers: as easy as 1, 2, 3", SC 2011.
    """
    c0, c1, c2, c3 = counter
    k0, k1 = key
    for _ in range(10):
        first, second = 0xD2E7470EE14C6C93 * c0, 0xCA5A826395121157 * c2
        c0, c1, c2, c3 = (second >> 64) ^ c1 ^ k0, second & WORD, (first >> 64) ^ c3 ^ k1, first & WORD
        k0, k1 = (k0 + 0x9E3779B97F4A7C15) & WORD, (k1 + 0xBB67AE8584CAA73B) & WORD
    return [c0, c1, c2, c3]


def words_by_hand(key: bytes, variable: int, rows: list[int]) -> list[int]:
    """Return the words of some rows: row i is word i % 4 of the counter (i // 4 + 1, variable, 0, 0)."""
    halves = [int.from_bytes(key[:8], "little"), int.from_bytes(key[8:], "little")]
    return [philox([row // 4 + 1, variable, 0, 0], halves)[row % 4] for row in rows]


def sample_by_hand(network: Network, n: int, key: bytes) -> list[list[int]]:
    """Draw rows cell by cell in plain Python from numpy's words, as the definition says."""
    position = {name: j for j, name in enumerate(network.names)}
    raw = [
        np.random.Philox(key=np.frombuffer(key, "<u8"), counter=[0, j, 0, 0]).random_raw(n).tolist()
        for j in range(len(network.names))
    ]
    rows = []
    for i in range(n):
        row = [0] * len(network.names)
        for j in network.graph.order():
            cpt = network.cpts[network.names[j]]
            p = cpt.p[tuple(row[position[parent]] for parent in cpt.parents)].tolist()
            u = (raw[j][i] >> 11) / 2**53
            sums = list(accumulate(p))
            row[j] = sum(u >= (sums[k] if any(p[k + 1 :]) else 1.0) for k in range(len(p) - 1))
        rows.append(row)
    return rows


def random_network(p: int, rng: np.random.Generator, **settings: object) -> Network:
    """Draw a network of medium density."""
    graph = generate_graph("random-order", variables=p, mean_parents=min(1.5, (p - 1) / 2), rng=rng)
    return generate_network(graph, rng=rng, **settings)  # type: ignore[arg-type]


# --- words ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("counter", "key", "expected"),
    [
        # The known-answer vectors published with the paper's code for philox4x64 with 10 rounds, from
        # memory; numpy's generator gives them too.
        (
            [0, 0, 0, 0],
            [0, 0],
            [0x16554D9ECA36314C, 0xDB20FE9D672D0FDC, 0xD7E772CEE186176B, 0x7E68B68AEC7BA23B],
        ),
        (
            [WORD] * 4,
            [WORD] * 2,
            [0x87B092C3013FE90B, 0x438C3C67BE8D0224, 0x9CC7D7C69CD777B6, 0xA09CAEBF594F0BA0],
        ),
        (
            [0x243F6A8885A308D3, 0x13198A2E03707344, 0xA4093822299F31D0, 0x082EFA98EC4E6C89],
            [0x452821E638D01377, 0xBE5466CF34E90C6C],
            [0xA528F45403E61D95, 0x38C72DBD566E9788, 0xA5A1610E72FD18B5, 0x57BD43B5E52B7FE6],
        ),
    ],
)
def test_the_oracle_gives_the_known_answers(counter: list[int], key: list[int], expected: list[int]) -> None:
    """The plain generator of these tests, and numpy's, agree with the published vectors."""
    before = sum(word << (64 * i) for i, word in enumerate(counter)) - 1
    numpy_words = np.random.Philox(
        key=np.array(key, dtype=np.uint64),
        counter=np.array([before >> (64 * i) & WORD for i in range(4)], dtype=np.uint64),
    ).random_raw(4)

    assert expected == philox(counter, key)
    assert expected == numpy_words.tolist()


@given(KEYS, st.integers(0, 2**32), st.lists(st.integers(0, 300), min_size=1))
def test_cell_words_are_philox_at_the_cells_counter(key: bytes, variable: int, rows: list[int]) -> None:
    """Every word equals the one computed in plain whole numbers from key, row and variable."""
    words = cell_words(key, variable, 301)

    assert words_by_hand(key, variable, rows) == words[rows].tolist()


@given(
    st.tuples(st.integers(0, WORD), st.integers(0, WORD)),
    st.integers(0, 2**40),
    st.integers(0, 2**40),
    st.integers(1, 33),
)
def test_compiled_words_are_philox(key: tuple[int, int], stream: int, first: int, n: int) -> None:
    """The compiled generator fills exactly n columns, each with the words of its counter."""
    words = np.zeros((4, n + 1), dtype=np.uint64)

    draw_words(np.array(key, dtype=np.uint64), stream, first, n, words)

    expected = [philox([first + i, stream, 0, 0], list(key)) for i in range(n)]
    assert expected == words[:, :n].T.tolist()
    assert not words[:, n].any()


def test_far_away_words_are_numpys() -> None:
    """A million rows on, the words are still those of numpy's raw stream."""
    key = bytes(range(16))
    raw = np.random.Philox(key=np.frombuffer(key, "<u8"), counter=[0, 7, 0, 0]).random_raw(1_000_003)

    assert raw[-5:].tolist() == words_by_hand(key, 7, list(range(999_998, 1_000_003)))
    assert raw.tolist() == cell_words(key, 7, 1_000_003).tolist()


def test_u_is_the_upper_53_bits_of_the_word() -> None:
    """Generator.random over Philox gives (word >> 11) / 2^53, the u of the definition."""
    key = bytes(range(16))
    generator = np.random.Generator(np.random.Philox(key=np.frombuffer(key, "<u8"), counter=[0, 2, 0, 0]))

    assert generator.random(1000).tolist() == [
        (word >> 11) / 2**53 for word in cell_words(key, 2, 1000).tolist()
    ]


# --- rows -----------------------------------------------------------------------------------------


@given(st.integers(1, 8), st.integers(0, 2**32), KEYS, st.integers(0, 40))
def test_rows_are_those_of_the_definition(p: int, seed: int, key: bytes, n: int) -> None:
    """Every cell is the one that plain Python draws from numpy's words; the dataset is valid."""
    rng = np.random.default_rng(seed)
    network = random_network(p, rng, states="2-5", concentration=float(rng.choice([0.05, 1.0])))

    data = sample(network, n, key)

    assert sample_by_hand(network, n, key) == data.codes.tolist()
    assert data == Dataset(network.names, network.states, data.codes)
    assert data.codes.flags.f_contiguous


@pytest.mark.parametrize("block", [1, 3, 512])
def test_block_size_does_not_matter(block: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """The rows are the same in blocks of 4, 12 or 2,048, run as plain Python from the same source."""
    rng = np.random.default_rng(2)
    network, key = random_network(4, rng), rng.bytes(16)
    expected = sample(network, 61, key)
    for name in (
        "_ancestral_order",
        "_thresholds",
        "_interleave",
        "_find_rows",
        "_draw_states",
        "_draw_states_by_row",
    ):
        monkeypatch.setattr(sampling, name, getattr(sampling, name).py_func)
    monkeypatch.setattr(sampling, "BLOCK_COUNTERS", block)
    monkeypatch.setattr(sampling, "_fill", sampling._fill.py_func)  # type: ignore[attr-defined]

    assert expected == sample(network, 61, key)


@pytest.mark.parametrize("n", [0, 1, 3, 4, 2047, 2048, 2049, 5000])
def test_a_smaller_dataset_is_the_first_rows_of_a_larger(n: int) -> None:
    """Rows do not depend on how many are drawn, on either side of a block's end."""
    rng = np.random.default_rng(3)
    network, key = random_network(10, rng), rng.bytes(16)

    assert sample(network, 6000, key).first(n) == sample(network, n, key)


def test_no_rows_and_no_variables_are_datasets() -> None:
    """Zero rows give an empty dataset with the network's states, and so does a network without variables."""
    network = published_network("sprinkler")
    nothing = Network(Graph((), np.zeros((0, 0))), (), {})

    assert sample(network, 0, bytes(16)).codes.shape == (0, 4)
    assert sample(network, 0, bytes(16)).states == network.states
    assert sample(nothing, 5, bytes(16)).codes.shape == (5, 0)


def test_a_negative_number_of_rows_is_refused() -> None:
    """Fewer rows than none cannot be drawn."""
    with pytest.raises(InputError, match="at least 0, got -1"):
        sample(published_network("sprinkler"), -1, bytes(16))


def test_another_key_gives_other_rows() -> None:
    """Datasets with different keys share nothing but the network."""
    network = published_network("sprinkler")

    assert sample(network, 200, bytes(16)) != sample(network, 200, bytes([1, *bytes(15)]))


# --- distribution ---------------------------------------------------------------------------------


def test_marginals_are_those_of_exact_inference(rng: np.random.Generator) -> None:
    """Each state is as frequent as exact inference says: 12 variables, 50,000 rows.

    About 30 binomial counts, each within 6 standard deviations: chance failure below 1e-7 together.
    """
    n = 50_000
    network = random_network(12, rng)

    data = sample(network, n, rng.bytes(16))

    for name, exact in marginals(network).items():
        spread = np.sqrt(n * exact * (1 - exact)) + 1e-9
        assert (np.abs(data.table([name]) - n * exact) < 6 * spread + 0.5).all()


@pytest.mark.parametrize("states", [2, 3])
def test_joint_states_are_those_of_exact_inference(states: int, rng: np.random.Generator) -> None:
    """On three variables, all joined, all joint states are as frequent as they should be.

    40,000 rows, chi-square over 8 or 27 cells (concentration 5 keeps them filled); chance failure 1e-6.
    """
    graph = Graph.from_edges("abc", directed=[("c", "a"), ("c", "b"), ("a", "b")])
    network = generate_network(graph, states=states, concentration=5.0, rng=rng)

    data = sample(network, 40_000, rng.bytes(16))

    expected = 40_000 * joint(network, "abc")
    assert expected.min() > 5
    assert chisquare(data.table("abc").ravel(), expected.ravel()).pvalue > 1e-6


def test_rows_are_independent(rng: np.random.Generator) -> None:
    """The state of a row says nothing about the next: pairs of rows fill the product of the marginals.

    40,001 rows of one variable, chi-square over 9 cells with the exact margins; chance failure 1e-6.
    """
    p = np.array([0.2, 0.3, 0.5])
    network = Network(Graph.from_edges("a"), (("x", "y", "z"),), {"a": Cpt("a", (), p)})

    column = sample(network, 40_000, rng.bytes(16)).codes[:, 0].astype(int)

    pairs = np.bincount(3 * column[::2] + column[1::2], minlength=9)
    assert chisquare(pairs, 20_000 * np.outer(p, p).ravel()).pvalue > 1e-6


def test_variables_without_arcs_are_independent(rng: np.random.Generator) -> None:
    """The words of different variables have nothing in common: 20 fair coins, 20,000 rows.

    190 correlations, each normal with standard deviation 1/sqrt(20000): beyond 6 with probability 4e-7.
    """
    graph = generate_graph("random-order", variables=20, mean_parents=0, rng=rng)
    coins = {name: Cpt(name, (), np.array([0.5, 0.5])) for name in graph.names}
    network = Network(graph, (("0", "1"),) * 20, coins)

    codes = sample(network, 20_000, rng.bytes(16)).codes.astype(float)

    correlations = np.corrcoef(codes.T)[np.triu_indices(20, 1)]
    assert np.abs(correlations).max() * np.sqrt(20_000) < 6


# --- edges of the number line ---------------------------------------------------------------------


@pytest.mark.parametrize("position", [0, 1, 2, 3])
def test_a_certain_state_is_always_drawn(position: int) -> None:
    """A row with a 1 among zeros gives that state and no other."""
    p = np.zeros(4)
    p[position] = 1.0
    network = Network(Graph.from_edges("a"), (tuple("wxyz"),), {"a": Cpt("a", (), p)})

    assert set(sample(network, 5000, bytes(16)).codes[:, 0].tolist()) == {position}


def test_chest_clinic_never_breaks_its_or() -> None:
    """The deterministic OR of the chest clinic holds in every row (Lauritzen and Spiegelhalter 1988)."""
    data = sample(published_network("chest-clinic"), 20_000, bytes(16))

    table = data.table(["tuberculosis", "lung_cancer", "either"])
    impossible = [(t, c, e) for t, c, e in product((0, 1), repeat=3) if e != (t or c)]
    assert [int(table[cell]) for cell in impossible] == [0, 0, 0, 0]
    assert table.sum() == 20_000


@given(st.integers(0, 2**32), KEYS)
def test_impossible_states_are_never_drawn(seed: int, key: bytes) -> None:
    """Zeros anywhere in a row, even where the other probabilities add up to a little less than 1."""
    rng = np.random.default_rng(seed)
    p = rng.dirichlet(np.ones(6)) * (rng.random(6) < 0.5)
    p[rng.integers(6)] += 1e-3
    p = p / p.sum() * (1 - 5e-10)  # within what a table accepts
    network = Network(Graph.from_edges("a"), (tuple("uvwxyz"),), {"a": Cpt("a", (), p)})

    drawn = sample(network, 300, key).codes[:, 0]

    assert (p[drawn] > 0).all()


def test_a_sum_below_one_leaves_nothing_to_an_impossible_last_state() -> None:
    """The largest u that there is still gives the last possible state, although .7 + .2 + .1 < 1."""
    p = np.array([0.7, 0.2, 0.1, 0.0])
    assert p.cumsum()[2] < 1

    thresholds = sampling._thresholds.py_func(p, 4)  # type: ignore[attr-defined]

    largest = 2**53 - 1
    assert thresholds[:, 0].tolist()[2] > largest
    assert sum(largest >= each for each in thresholds[:, 0].tolist()) == 2


@given(st.lists(st.integers(0, 20), min_size=2, max_size=5), st.integers(0, 2**53 - 1))
def test_whole_number_thresholds_compare_like_fractions(weights: list[int], u: int) -> None:
    """Whole numbers u and ceil(c 2^53) compare like the doubles u / 2^53 and c."""
    weights[0] += 1
    p = np.array(weights) / sum(weights)

    thresholds = sampling._thresholds.py_func(p, len(p))[:, 0].tolist()  # type: ignore[attr-defined]

    total = 0.0
    for k, threshold in enumerate(thresholds):
        total += float(p[k])
        limit = total if p[k + 1 :].any() else 1.0
        for near in (u, threshold - 1, threshold):
            if 0 <= near < 2**53:
                assert (near / 2**53 >= limit) == (near >= threshold)


@pytest.mark.parametrize(("n_states", "dtype"), [(255, np.uint8), (256, np.uint16), (300, np.uint16)])
def test_many_states_take_two_bytes(n_states: int, dtype: type) -> None:
    """From 256 states on codes have two bytes; a child that copies its parent shows that none is cut."""
    states = tuple(map(str, range(n_states)))
    graph = Graph.from_edges("ab", directed=[("a", "b")])
    cpts = {
        "a": Cpt("a", (), np.full(n_states, 1 / n_states)),
        "b": Cpt("b", ("a",), np.eye(n_states)),
    }

    data = sample(Network(graph, (states, states), cpts), 4000, bytes(16))

    assert data.codes.dtype == dtype
    assert np.array_equal(data.codes[:, 0], data.codes[:, 1])
    assert data.codes.max() == n_states - 1
    assert not data.has_missing


def test_a_single_state_is_no_choice() -> None:
    """A variable with one state always has it, and its children do not mind."""
    graph = Graph.from_edges("ab", directed=[("a", "b")])
    cpts = {"a": Cpt("a", (), np.ones(1)), "b": Cpt("b", ("a",), np.array([[0.5, 0.5]]))}
    network = Network(graph, (("only",), ("no", "yes")), cpts)

    data = sample(network, 100, bytes(16))

    assert set(data.codes[:, 0].tolist()) == {0}
    assert set(data.codes[:, 1].tolist()) == {0, 1}


def test_warm_up_compiles_the_sampler() -> None:
    """The registered warm-up runs with the real types: codes of one byte leave nothing to compile."""
    sampling._warm_up()
    compiled = len(sampling._fill.signatures)  # type: ignore[attr-defined]
    cpts = {"a": Cpt("a", (), np.array([0.5, 0.5]))}

    sample(Network(Graph.from_edges("a"), (("no", "yes"),), cpts), 5, bytes(16))

    assert compiled == len(sampling._fill.signatures)  # type: ignore[attr-defined]
