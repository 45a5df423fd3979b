"""Decomposable scores against published examples, closed forms and enumeration."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator, Sequence
from fractions import Fraction
from itertools import combinations, permutations, product
from math import factorial

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.special import gammaln
from scipy.stats import chi2_contingency

from generators.compiled import kernel
from generators.dataset import Dataset, code_dtype
from generators.errors import InputError
from generators.graph import Graph
from harness import family_scores
from harness.counts import Columns, Workspace, prepare, workspace
from harness.family_scores import Score, Scoring, family_score, network_score, scoring

SCORES: tuple[Score, ...] = ("bic", "aic", "bdeu", "k2")
NAMES = ("x1", "x2", "x3")
Arcs = tuple[tuple[str, str], ...]

# Cooper and Herskovits (1992), Machine Learning 9, Table 1: ten cases, 0 absent, 1 present. The cells are
# from memory; they give exactly the factorials that the paper prints in the example of its equation (5).
TEN_CASES = Dataset(
    NAMES,
    (("0", "1"),) * 3,
    np.array(
        [[1, 1, 0, 1, 0, 0, 1, 0, 1, 0], [0, 1, 0, 1, 0, 1, 1, 0, 1, 0], [0, 1, 1, 1, 0, 1, 1, 0, 1, 0]],
        dtype=np.uint8,
    ).T,
)

# Berkeley graduate admissions 1973, six largest departments (Freedman, Pisani and Purves 1978; after
# Bickel, Hammel and O'Connell 1975): [department][man, woman][admitted, rejected].
BERKELEY = np.array(
    [
        [[512, 313], [89, 19]],
        [[353, 207], [17, 8]],
        [[120, 205], [202, 391]],
        [[138, 279], [131, 244]],
        [[53, 138], [94, 299]],
        [[22, 351], [24, 317]],
    ]
)


def from_table(table: NDArray[np.int64], names: Sequence[str]) -> Dataset:
    """Return rows with these counts, one axis per variable."""
    codes = np.repeat(np.argwhere(np.ones_like(table)), table.ravel(), axis=0).astype(np.uint8)
    return Dataset(tuple(names), tuple(tuple(map(str, range(r))) for r in table.shape), codes)


def draw_data(cardinalities: Sequence[int], n: int, rng: np.random.Generator) -> Dataset:
    """Draw rows whose variables depend on the first, so that no family is degenerate."""
    dtype = code_dtype(max(cardinalities))
    first = rng.random(n)
    codes = np.empty((n, len(cardinalities)), dtype=dtype)
    for j, r in enumerate(cardinalities):
        codes[:, j] = np.where(rng.random(n) < 0.4, first * r, rng.integers(0, r, n))
    states = tuple(tuple(map(str, range(r))) for r in cardinalities)
    return Dataset(tuple(f"v{j}" for j in range(len(cardinalities))), states, codes)


def all_dags(names: Sequence[str]) -> Iterator[Graph]:
    """Enumerate the DAGs on these variables."""
    pairs = list(combinations(range(len(names)), 2))
    for marks in product((0, 1, 2), repeat=len(pairs)):
        arrow = np.zeros((len(names), len(names)), dtype=np.bool_)
        for (i, j), mark in zip(pairs, marks, strict=True):
            arrow[i, j], arrow[j, i] = mark == 1, mark == 2
        graph = Graph(tuple(names), arrow)
        if graph.is_dag:
            yield graph


def equivalence_key(graph: Graph) -> tuple[bytes, frozenset[tuple[int, int, int]]]:
    """Skeleton and unshielded colliders: equal exactly for equivalent DAGs (Verma and Pearl 1990)."""
    arrow, skeleton = graph.arrow, graph.skeleton
    colliders = {
        (a, c, b)
        for c in range(len(graph.names))
        for a, b in combinations(np.flatnonzero(arrow[:, c]).tolist(), 2)
        if not skeleton[a, b]
    }
    return skeleton.tobytes(), frozenset(colliders)


# Published examples -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("variable", "parents", "denominator"),
    [
        ("x1", "", 2772),
        ("x2", "", 2772),
        ("x3", "", 2310),
        ("x2", "x1", 900),
        ("x3", "x1", 1800),
        ("x3", "x2", 180),
        ("x3", "x1 x2", 400),
        ("x2", "x3", 210),
        ("x1", "x3", 2100),
        ("x1", "x2", 900),
        ("x2", "x1 x3", 240),
        ("x1", "x2 x3", 1200),
    ],
)
def test_k2_gives_the_factors_of_cooper_and_herskovits(variable: str, parents: str, denominator: int) -> None:
    """Each family of the ten cases has the published factor g, recomputed as an exact fraction."""
    table = TEN_CASES.table([*parents.split(), variable]).reshape(-1, 2)
    exact = Fraction(1)
    for zeros, ones in table.tolist():
        exact *= Fraction(factorial(zeros) * factorial(ones), factorial(zeros + ones + 1))

    score = family_score(TEN_CASES, variable, parents.split(), score="k2")

    assert exact == Fraction(1, denominator)
    assert score == pytest.approx(-math.log(denominator), abs=1e-12)


def test_k2_gives_the_marginal_likelihoods_of_cooper_and_herskovits() -> None:
    """The two structures of their example have 2.23e-9 and 2.23e-10, in the ratio of exactly 10."""
    first = network_score(TEN_CASES, Graph.from_edges(NAMES, [("x1", "x2"), ("x2", "x3")]), score="k2")
    second = network_score(TEN_CASES, Graph.from_edges(NAMES, [("x1", "x2"), ("x1", "x3")]), score="k2")

    assert first == pytest.approx(-math.log(449_064_000), abs=1e-12)
    assert f"{math.exp(first):.2e}" == "2.23e-09"  # as printed
    assert f"{math.exp(second):.2e}" == "2.23e-10"  # as printed
    assert first - second == pytest.approx(math.log(10), abs=1e-12)


def test_k2_posterior_over_all_structures_of_the_ten_cases() -> None:
    """Over the 25 DAGs with equal prior the total is 2.05180e-8; x3 -> x2 -> x1 is best, with .111632."""
    scores = {
        graph.edges(): math.exp(network_score(TEN_CASES, graph, score="k2")) for graph in all_dags(NAMES)
    }

    best = max(scores, key=lambda edges: scores[edges])

    assert len(scores) == 25
    assert sum(scores.values()) == pytest.approx(2.0518049068e-8, rel=1e-10)
    assert best == (("x2", "x1", "directed"), ("x3", "x2", "directed"))
    assert scores[best] / sum(scores.values()) == pytest.approx(0.111632, abs=5e-7)


def test_k2_gives_the_posteriors_of_the_second_example_of_cooper_and_herskovits() -> None:
    """Their equation (20) example prints .33, .40 and .27 for x1 -> x2, x2 -> x1 and no arc."""
    # The paper's data table was not at hand: this is the only 2 x 2 table of at most 12 cases that gives
    # the printed posteriors and predictions.
    data = from_table(np.array([[1, 1], [0, 3]]), ("x1", "x2"))
    structures: tuple[Arcs, ...] = ((("x1", "x2"),), (("x2", "x1"),), ())

    weights = np.array(
        [math.exp(network_score(data, Graph.from_edges(data.names, arcs), score="k2")) for arcs in structures]
    )

    assert weights.tolist() == pytest.approx([1 / 1440, 1 / 1200, 1 / 1800], rel=1e-12)
    assert [f"{w:.2f}" for w in weights / weights.sum()] == ["0.33", "0.40", "0.27"]


# Recomputed for this project with an independent program from the formulas: log-likelihood is the
# sum that BIC and AIC share. Columns: K2, BIC, AIC, log-likelihood, BDeu with ess 1, 2, 4, 10.
SCORE_TABLE = """
none     -23.599652 -24.046938 -23.593060 -20.593060 -24.799873 -23.599652 -22.651555 -21.766168
12,23    -19.922676 -20.193971 -19.437508 -14.437508 -21.281537 -20.127169 -19.597254 -19.653413
21,23    -19.922676 -20.193971 -19.437508 -14.437508 -21.281537 -20.127169 -19.597254 -19.653413
21,32    -19.894505 -20.193971 -19.437508 -14.437508 -21.281537 -20.127169 -19.597254 -19.653413
12,13    -22.225261 -23.559029 -22.802566 -17.802566 -25.070262 -23.171691 -21.899839 -21.060909
12,32    -21.152966 -21.955638 -21.047883 -15.047883 -21.905791 -20.886147 -20.282075 -20.070206
12,13,23 -20.721184 -22.243884 -21.184837 -14.184837 -22.619076 -21.186977 -20.329866 -19.996250
32,31,21 -20.182187 -22.243884 -21.184837 -14.184837 -22.619076 -21.186977 -20.329866 -19.996250
"""


@pytest.mark.parametrize("line", SCORE_TABLE.split("\n")[1:-1], ids=lambda line: line.split()[0])
def test_all_scores_of_the_ten_cases(line: str) -> None:
    """K2, BIC, AIC and BDeu of eight structures on the ten cases, to six decimals."""
    arcs, *numbers = line.split()
    expected = list(map(float, numbers))
    graph = Graph.from_edges(
        NAMES, [(f"x{arc[0]}", f"x{arc[1]}") for arc in arcs.split(",") if arc != "none"]
    )
    n_free = sum(2 ** len(graph.parents(name)) for name in NAMES)

    aic = network_score(TEN_CASES, graph, score="aic")
    found = [
        network_score(TEN_CASES, graph, score="k2"),
        network_score(TEN_CASES, graph, score="bic"),
        aic,
        aic + n_free,
        *(network_score(TEN_CASES, graph, score="bdeu", ess=ess) for ess in (1, 2, 4, 10)),
    ]

    assert found == pytest.approx(expected, abs=6e-7)


def test_bdeu_changes_its_mind_with_the_equivalent_sample_size() -> None:
    """In Neapolitan's example the edge has posterior .51678 with ess 4; with ess 1 the sign is reversed."""
    # Neapolitan (2004), Learning Bayesian Networks, section 8.1: eight records; from memory, where the
    # recomputation gives every printed digit (7.2150e-6, 6.7465e-6, .51678).
    data = from_table(np.array([[4, 1], [1, 2]]), ("x1", "x2"))
    edge, none = Graph.from_edges(data.names, [("x1", "x2")]), Graph.from_edges(data.names)

    with_edge, without = (network_score(data, graph, score="bdeu", ess=4) for graph in (edge, none))

    assert [with_edge, without] == pytest.approx([-11.8393473657, -11.9064866686], abs=1e-10)
    assert [math.exp(with_edge), math.exp(without)] == pytest.approx([7.2150e-6, 6.7465e-6], abs=5e-11)
    assert 1 / (1 + math.exp(without - with_edge)) == pytest.approx(0.51678, abs=5e-6)
    assert network_score(data, edge, score="bdeu", ess=1) == pytest.approx(-13.7139080320, abs=1e-10)
    assert network_score(data, none, score="bdeu", ess=1) == pytest.approx(-13.1810904373, abs=1e-10)


def test_bic_adds_an_edge_where_g2_beats_the_penalty() -> None:
    """BIC(edge) - BIC(no edge) is (G2 - df ln n) / 2, with G2 and df from scipy, for the Berkeley margins."""
    table = BERKELEY.sum(axis=0)
    data = from_table(table, ("sex", "admission"))
    g2, _, df, _ = chi2_contingency(table, correction=False, lambda_="log-likelihood")

    gain = family_score(data, "admission", ["sex"]) - family_score(data, "admission", [])

    assert g2 == pytest.approx(93.4494, abs=5e-5)  # as published
    assert gain == pytest.approx((g2 - df * math.log(4526)) / 2, abs=1e-9)
    assert gain > 0


def test_bic_and_g2_disagree_about_berkeley_given_the_department() -> None:
    """Given the department G2 is 21.7355 on 6 df: beyond the 1 % point, but BIC leaves the edge out."""
    data = from_table(BERKELEY, ("department", "sex", "admission"))
    g2 = sum(chi2_contingency(table, correction=False, lambda_="log-likelihood")[0] for table in BERKELEY)

    gain = family_score(data, "admission", ["department", "sex"]) - family_score(
        data, "admission", ["department"]
    )

    assert g2 == pytest.approx(21.7355, abs=5e-5)  # a test on 6 df rejects beyond 16.81 at 1 %
    assert gain == pytest.approx((g2 - 6 * math.log(4526)) / 2, abs=1e-9)
    assert gain < 0


def test_bic_of_eight_records() -> None:
    """For the table 4, 1, 1, 2 the difference of BIC is -0.1587694882, from G2 = 1.7619025654."""
    table = np.array([[4, 1], [1, 2]])
    data = from_table(table, ("x", "y"))
    g2 = chi2_contingency(table, correction=False, lambda_="log-likelihood")[0]

    gain = family_score(data, "y", ["x"]) - family_score(data, "y", [])

    assert g2 == pytest.approx(1.7619025654, abs=1e-10)
    assert gain == pytest.approx(-0.1587694882, abs=1e-10)


# Properties -------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def mixed_data() -> Dataset:
    """Sixty rows of four variables with 3, 3, 3 and 2 states."""
    return draw_data((3, 3, 3, 2), 60, np.random.default_rng(7))


@pytest.mark.parametrize("score", SCORES)
def test_equivalent_dags_score_alike_except_by_k2(score: Score, mixed_data: Dataset) -> None:
    """Over all 543 DAGs on four variables in 185 classes, BIC, AIC and BDeu are constant within a class."""
    families = {
        (child, parents): family_score(mixed_data, child, parents, score=score, ess=2.0)
        for child in mixed_data.names
        for k in range(4)
        for parents in combinations([name for name in mixed_data.names if name != child], k)
    }
    classes = defaultdict(list)
    for graph in all_dags(mixed_data.names):
        total = sum(families[name, graph.parents(name)] for name in graph.names)
        classes[equivalence_key(graph)].append(total)

    spread = max(max(scores) - min(scores) for scores in classes.values())

    # Robinson (1973) and Gillispie and Perlman (2002) count the DAGs and the classes.
    assert (sum(map(len, classes.values())), len(classes)) == (543, 185)
    assert spread < 1e-10 if score != "k2" else spread > 0.1


def test_k2_scores_the_two_directions_of_one_arc_differently() -> None:
    """For the counts 5, 3, 1, 1 K2 gives exactly 1 / 1496880 and 1 / 1940400; BDeu and BIC give one value."""
    data = from_table(np.array([[5, 3], [1, 1]]), ("x", "y"))
    forth, back = Graph.from_edges("xy", [("x", "y")]), Graph.from_edges("xy", [("y", "x")])

    assert network_score(data, forth, score="k2") == pytest.approx(-math.log(1_496_880), abs=1e-12)
    assert network_score(data, back, score="k2") == pytest.approx(-math.log(1_940_400), abs=1e-12)
    for graph in (forth, back):
        assert network_score(data, graph, score="bdeu", ess=1) == pytest.approx(-15.9558685032, abs=1e-10)
        assert network_score(data, graph, score="bic") == pytest.approx(-15.1367021413, abs=1e-10)


def test_states_that_no_row_shows_count_as_parameters_only() -> None:
    """An unseen state of a parent adds nothing to the likelihood but counts in the penalty and the prior."""
    codes = np.array([[0, 0], [0, 1], [1, 1], [1, 1]], dtype=np.uint8)
    seen = Dataset(("a", "b"), (("0", "1"), ("0", "1")), codes)
    unseen = Dataset(("a", "b"), (("0", "1", "2"), ("0", "1")), codes)

    aic = [family_score(data, "b", ["a"], score="aic") for data in (seen, unseen)]
    bic = [family_score(data, "b", ["a"], score="bic") for data in (seen, unseen)]
    k2 = [family_score(data, "b", ["a"], score="k2") for data in (seen, unseen)]
    bdeu = family_score(unseen, "b", ["a"], score="bdeu", ess=3.0)

    assert aic[0] - aic[1] == pytest.approx(1.0)
    assert bic[0] - bic[1] == pytest.approx(math.log(4) / 2)
    assert k2[0] == k2[1]
    # By hand: priors 3 / 3 = 1 for a state of a and 1 / 2 for a cell; a = 0 has counts 1, 1, a = 1 has 0, 2.
    by_hand = 2 * (gammaln(1) - gammaln(3)) + 2 * (gammaln(1.5) - gammaln(0.5)) + gammaln(2.5) - gammaln(0.5)
    assert bdeu == pytest.approx(float(by_hand), abs=1e-12)


@pytest.mark.parametrize("score", SCORES)
def test_no_rows_score_nothing(score: Score) -> None:
    """Without rows likelihoods are 1: K2, BDeu and BIC are 0, and AIC is minus the number of parameters."""
    data = Dataset(("a", "b"), (("0", "1"), ("0", "1", "2")), np.empty((0, 2), dtype=np.uint8))

    assert family_score(data, "b", ["a"], score=score) == pytest.approx(-4.0 if score == "aic" else 0.0)


# Input ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"score": "bics"}, "score must be one of bic, aic, bdeu, k2, got 'bics'"),
        ({"ess": 0.0}, "ess must be a number above 0, got 0.0"),
        ({"ess": math.nan}, "ess must be a number above 0, got nan"),
        ({"variable": "x9"}, "'x9' is not a variable"),
        ({"parents": ["x2", "x2"]}, "names each variable once"),
        ({"parents": ["x1"]}, "names each variable once"),
    ],
)
def test_bad_families_are_refused(arguments: dict[str, object], message: str) -> None:
    """What cannot be scored is an input error of one line."""
    call: dict[str, object] = {"variable": "x1", "parents": ["x2"], **arguments}

    with pytest.raises(InputError, match=message):
        family_score(TEN_CASES, **call)  # type: ignore[arg-type]  # deliberately wrong


def test_missing_cells_are_refused() -> None:
    """A family with missing cells is not scored; others of the same dataset are."""
    codes = np.array([[0, 0], [1, 255]], dtype=np.uint8)
    data = Dataset(("a", "b"), (("0", "1"),) * 2, codes)

    with pytest.raises(InputError, match="'b' has missing cells"):
        family_score(data, "b", [])
    assert family_score(data, "a", []) < 0


def test_only_dags_over_the_data_have_a_score() -> None:
    """An undirected edge, a directed cycle or other variables are refused; another order is not."""
    cycle = Graph.from_edges(NAMES, [("x1", "x2"), ("x2", "x3"), ("x3", "x1")])
    undirected = Graph.from_edges(NAMES, undirected=[("x1", "x2")])
    chain = Graph.from_edges(NAMES, [("x1", "x2"), ("x2", "x3")])

    for graph in (cycle, undirected):
        with pytest.raises(InputError, match="only a DAG has a score"):
            network_score(TEN_CASES, graph)
    with pytest.raises(InputError, match="over the dataset's variables"):
        network_score(TEN_CASES, chain.renamed(("a", "b", "c")))
    for order in permutations(NAMES):
        assert network_score(TEN_CASES, chain.reordered(order)) == network_score(TEN_CASES, chain)


# The compiled scores ----------------------------------------------------------------------------------


@kernel
def score_compiled(
    columns: Columns, parents: NDArray[np.int64], child: int, rule: Scoring, space: Workspace
) -> float:
    """Score a family as learners do."""
    return family_scores.score_family(columns, parents, child, rule, space)


@kernel
def score_sparsely(columns: Columns, family: NDArray[np.int64], rule: Scoring, space: Workspace) -> float:
    """Score a family as learners do where its table would be too large."""
    q = family_scores.joint_states(columns, family[1:])
    return family_scores.score_occurring(columns, family, q, rule, space)


@given(
    st.lists(st.integers(1, 20), min_size=2, max_size=6),
    st.integers(0, 300),
    st.integers(0, 2**32),
    st.sampled_from([1e-3, 1.0, 10.0, 1e4]),
)
def test_compiled_scores_equal_plain_ones(cardinalities: list[int], n: int, seed: int, ess: float) -> None:
    """The scores that learners compute equal those of `family_score`, from tables and from sparse counts."""
    data = draw_data(cardinalities, n, np.random.default_rng(seed))
    columns = prepare(data)
    space = workspace(columns)
    family = np.arange(len(cardinalities))

    for score in SCORES:
        rule = scoring(columns, score, ess)
        expected = family_score(data, data.names[0], data.names[1:], score=score, ess=ess)
        dense = score_compiled(columns, family[1:], 0, rule, space)
        sparse = score_sparsely(columns, family, rule, space)

        assert [dense, sparse] == pytest.approx([expected] * 2, rel=1e-11, abs=1e-8)


def test_bdeu_is_exact_beyond_its_memo() -> None:
    """With counts beyond the remembered terms and more divisors than rows of memory, BDeu keeps its value."""
    rng = np.random.default_rng(8)
    cardinalities = (2, *range(2, 17))
    data = draw_data(cardinalities, 3 * family_scores.MEMO_COUNTS, rng)
    columns = prepare(data)
    space, rule = workspace(columns), scoring(columns, "bdeu", 2.5)
    families = [(), *((j,) for j in range(1, 16)), *((i, j) for i in range(1, 12) for j in range(i + 1, 16))]

    for parents in families:
        expected = family_score(data, "v0", [data.names[j] for j in parents], score="bdeu", ess=2.5)
        found = score_compiled(columns, np.array(parents, dtype=np.int64), 0, rule, space)

        assert found == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("score", SCORES)
def test_astronomical_numbers_of_joint_states_are_scored(score: Score) -> None:
    """A family with 255^150 joint parent states has a finite likelihood, and an enormous penalty."""
    rng = np.random.default_rng(9)
    codes = rng.integers(0, 255, (60, 151)).astype(np.uint8)
    codes[30:] = codes[:30]
    names = tuple(f"v{j}" for j in range(151))
    data = Dataset(names, (tuple(map(str, range(255))),) * 151, codes)
    columns = prepare(data)

    plain = family_score(data, "v0", names[1:], score=score)
    found = score_compiled(columns, np.arange(1, 151), 0, scoring(columns, score), workspace(columns))

    assert found == pytest.approx(plain, rel=1e-12)
    if score in ("bic", "aic"):
        assert plain < -1e299
    else:
        # Each of 30 joint states is seen twice, with the same state of the child.
        prior = 1 / 1e300
        expected = {
            "k2": 30 * (math.lgamma(255) - math.lgamma(257) + math.log(2)),
            "bdeu": 30 * (math.lgamma(prior) - math.lgamma(prior + 2))
            - 30 * (math.lgamma(prior / 255) - math.lgamma(prior / 255 + 2)),
        }[score]
        assert found == pytest.approx(expected, rel=1e-12)
