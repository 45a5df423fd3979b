"""PC: against a plain Python version, exact power, published data and known networks."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np
import pytest
from scipy.special import gammaln
from scipy.stats import binomtest, chi2

from generators.classes import cpdag, meek_rules
from generators.dataset import Dataset, View
from generators.graph import Graph
from generators.network import Cpt, Network
from harness.counts import count_plain, prepare
from harness.independence.evidence import data_tests
from harness.independence.tables import independence_test
from harness.knowledge import Knowledge
from harness.learners.constraint import pc
from harness.learners.orientation import find_colliders
from harness.learners.skeleton import find_skeleton


def dataset_of(codes: np.ndarray, cardinalities: list[int]) -> Dataset:
    """Wrap codes, variables named v0, v1, ..."""
    dtype = np.uint8 if max(cardinalities, default=1) < 256 else np.uint16
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(codes, dtype=dtype).reshape(-1, len(cardinalities)))


def random_network(p: int, rng: np.random.Generator, *, mean_parents: float, concentration: float) -> Network:
    """Draw a DAG over a random order, up to three parents each, with 2 or 3 states and Dirichlet rows."""
    names = tuple(f"v{j}" for j in range(p))
    order = rng.permutation(p)
    sizes = rng.integers(2, 4, p)
    parents: list[list[int]] = [[] for _ in range(p)]
    for place, v in enumerate(order):
        n_parents = min(place, 3, rng.poisson(mean_parents))
        parents[v] = sorted(rng.choice(order[:place], n_parents, replace=False).tolist()) if n_parents else []
    arcs = [(names[u], names[v]) for v in range(p) for u in parents[v]]
    cpts = {}
    for v in range(p):
        rows = rng.dirichlet(np.full(sizes[v], concentration), int(np.prod(sizes[parents[v]])))
        shape = (*sizes[parents[v]], sizes[v])
        cpts[names[v]] = Cpt(names[v], tuple(names[u] for u in parents[v]), rows.reshape(shape))
    states = tuple(tuple(str(s) for s in range(r)) for r in sizes)
    return Network(Graph.from_edges(names, arcs), states, cpts)


@dataclass
class Plain:
    """What the plain version finds; it follows the rules as they are stated, one pair after another."""

    adjacent: np.ndarray
    separators: dict[tuple[int, int], tuple[int, ...]]
    colliders: set[tuple[int, int, int]]
    ambiguous: set[tuple[int, int, int]]
    arrow: np.ndarray


class PlainPc:
    """PC in plain Python, with numpy tables and scipy quantiles."""

    def __init__(
        self,
        data: Dataset,
        *,
        alpha: float,
        test: str = "g2",
        min_per_cell: float = 0,
        max_conditioning: int | None = None,
        updates: str = "after-level",
        colliders: str = "plain",
        knowledge: Knowledge | None = None,
    ) -> None:
        self.data, self.columns, self.sizes = data, prepare(data), data.cardinalities.tolist()
        self.alpha, self.test, self.min_per_cell, self.rule = alpha, test, min_per_cell, colliders
        p = data.n_variables
        self.most = p if max_conditioning is None else max_conditioning
        known = knowledge or Knowledge.of(data.names)
        self.told = known.arcs | known.arcs.T
        self.excluded = known.excluded & ~np.eye(p, dtype=bool)
        self.strength = np.zeros((p, p))
        for x, y in combinations(range(p), 2):
            self.strength[x, y] = self.strength[y, x] = self.statistic_of(x, y, ())[0]
        self.adjacent = np.zeros((p, p), dtype=bool)
        for x, y in combinations(range(p), 2):
            self.join(x, y, self.told[x, y] or not self.separates(x, y, ()))
        self.separators: dict[tuple[int, int], tuple[int, ...]] = {}
        (self.level_by_level if updates == "after-level" else self.one_by_one)()
        absent = [pair for pair in combinations(range(p), 2) if self.excluded[pair] & self.excluded.T[pair]]
        inseparable = [pair for pair in absent if self.adjacent[pair]]
        for x, y in inseparable:
            self.join(x, y, False)
        for x, y in inseparable:
            self.separators[x, y] = tuple(np.flatnonzero(self.adjacent[x] & self.adjacent[y]).tolist())

    def join(self, x: int, y: int, is_adjacent: bool) -> None:
        self.adjacent[x, y] = self.adjacent[y, x] = is_adjacent

    def statistic_of(self, x: int, y: int, given: tuple[int, ...]) -> tuple[float, int]:
        table = count_plain(self.columns, [*given, x, y])
        result = independence_test(table.reshape(-1, *table.shape[-2:]), test=self.test)
        return round(result.statistic, 6), result.df

    def separates(self, x: int, y: int, given: tuple[int, ...]) -> bool:
        statistic, df = self.statistic_of(x, y, given)
        cells = np.prod([float(self.sizes[v]) for v in (*given, x, y)])
        if df > 0 and self.data.n_rows < self.min_per_cell * cells:
            return False
        return df == 0 or statistic <= chi2.isf(self.alpha, df)

    def candidates(self, x: int) -> list[int]:
        """Return what may stand in the sets of x now, in the order of the columns."""
        return [w for w in np.flatnonzero(self.adjacent[x]).tolist() if not self.excluded[w, x]]

    def level_by_level(self) -> None:
        p = self.data.n_variables
        turn = sorted(range(p), key=lambda x: (round(self.strength[x].sum(), 6), x))
        k = 1
        while k <= self.most and self.adjacent.sum(axis=0).max(initial=0) > k:
            near = [sorted(self.candidates(x), key=lambda y: (-self.strength[x, y], y)) for x in range(p)]
            found = {}
            for a, b in combinations(range(p), 2):
                if self.adjacent[a, b] and not self.told[a, b]:
                    first, second = sorted((a, b), key=turn.index)
                    sets = [s for s in combinations(near[first], k) if second not in s]
                    sets += [s for s in combinations(near[second], k) if first not in s]
                    explanation = next((s for s in sets if self.separates(a, b, s)), None)
                    if explanation is not None:
                        found[a, b] = explanation
            self.separators |= found
            for a, b in found:
                self.join(a, b, False)
            k += 1

    def one_by_one(self) -> None:
        p = self.data.n_variables
        for k in range(1, min(self.most, p) + 1):
            for x in range(p):
                beginning, sets = np.flatnonzero(self.adjacent[x]).tolist(), self.candidates(x)
                for given in combinations(sets, k):
                    for y in [v for v in sets if v in beginning] + [v for v in beginning if v not in sets]:
                        is_open = self.adjacent[x, y] and not self.told[x, y] and y not in given
                        if is_open and self.adjacent[x, list(given)].all() and self.separates(x, y, given):
                            self.separators[min(x, y), max(x, y)] = given
                            self.join(x, y, False)

    def verdict(self, x: int, z: int, y: int) -> str:
        """Say whether z is a collider between x and y."""
        if self.rule == "plain":
            return "none" if z in self.separators.get((x, y), ()) else "collider"
        sets = {
            frozenset(s)
            for v in (x, y)
            for k in range(self.most + 1)
            for s in combinations(self.candidates(v), k)
        }
        separating = [s for s in sets if self.separates(x, y, tuple(s))]
        n_with = sum(z in s for s in separating)
        if self.rule == "conservative":
            unanimous = {0: "collider", len(separating): "none"} if separating else {}
            return unanimous.get(n_with, "ambiguous")
        return ["ambiguous", "none", "collider"][int(np.sign(2 * n_with - len(separating)))]

    def run(self) -> Plain:
        """Direct the skeleton."""
        p = self.data.n_variables
        verdicts = {
            (x, z, y): self.verdict(x, z, y)
            for z in range(p)
            for x, y in combinations(np.flatnonzero(self.adjacent[z]).tolist(), 2)
            if not self.adjacent[x, y]
        }
        colliders = [triple for triple, verdict in verdicts.items() if verdict == "collider"]
        ambiguous = {triple for triple, verdict in verdicts.items() if verdict == "ambiguous"}
        arrows = {arrow for x, z, y in colliders for arrow in ((x, z), (y, z))}

        def priority(collider: tuple[int, int, int]) -> tuple[float, ...]:
            x, z, y = collider
            if (z, x) not in arrows and (z, y) not in arrows:
                return (-1.0,)
            statistic, df = self.statistic_of(x, y, (*self.separators.get((x, y), ()), z))
            return (chi2.sf(statistic, df), -statistic)

        arrow = self.adjacent & ~self.excluded
        for x, z, y in sorted(colliders, key=priority):
            if arrow[x, z] and arrow[y, z]:
                arrow[z, x] = arrow[z, y] = False
        meek_rules(arrow, np.sort([(x * p + z) * p + y for x, z, y in ambiguous]).astype(np.int64))
        return Plain(self.adjacent, self.separators, set(colliders), ambiguous, arrow)


def random_dataset(seed: int) -> Dataset:
    """Draw a dataset of 5 to 8 variables: from networks sparse and dense, or with copies and constants."""
    rng = np.random.default_rng(seed)
    n = int(rng.choice([10, 60, 200, 1000, 4000]))
    network = random_network(int(rng.integers(5, 9)), rng, mean_parents=rng.choice([1, 2]), concentration=1)
    data = network.sample(n, rng=rng)
    if seed % 4 == 0:
        codes = np.array(data.codes)
        codes[:, 0] = 0
        codes[:, 1] = np.minimum(codes[:, 2], len(data.states[1]) - 1)
        data = Dataset(data.names, data.states, codes)
    return data


def true_knowledge(data: Dataset, seed: int) -> Knowledge:
    """Tell some arcs along the order of the columns, exclude others, and put columns into two stages."""
    rng = np.random.default_rng(seed)
    pairs = list(combinations(data.names, 2))
    told = [pairs[i] for i in rng.choice(len(pairs), 2, replace=False)]
    gone = [pair for pair in pairs if pair not in told and rng.random() < 0.2]
    back = [(y, x) for x, y in pairs if rng.random() < 0.2]
    half = data.n_variables // 2
    return Knowledge.of(
        data.names, arcs=told, excluded=gone + back, stages=[data.names[:half], data.names[half:]]
    )


class TestAgainstPlain:
    """The compiled learner does what the stated rules say."""

    @pytest.mark.parametrize(
        "settings",
        [
            {"alpha": 0.01, "test": "g2"},
            {"alpha": 0.05, "test": "pearson"},
            {"alpha": 0.3, "test": "g2"},
            {"alpha": 0.05, "test": "g2", "min_per_cell": 5.0},
            {"alpha": 0.05, "test": "g2", "max_conditioning": 1},
            {"alpha": 0.1, "updates": "at-once"},
            {"alpha": 0.1, "colliders": "conservative"},
            {"alpha": 0.1, "colliders": "majority"},
            {"alpha": 0.2, "colliders": "majority", "updates": "at-once", "max_conditioning": 2},
        ],
        ids=str,
    )
    @pytest.mark.parametrize("is_told", [False, True], ids=["nothing told", "told"])
    def test_same_at_every_step(self, settings: dict[str, float | str | int], is_told: bool) -> None:
        """Skeleton, separating sets, colliders and directions are the plain version's."""
        n_separated = n_colliders = n_deep = n_ambiguous = 0
        for seed in range(40):
            data = random_dataset(seed)
            knowledge = true_knowledge(data, seed) if is_told else None
            expected = PlainPc(data, **settings, knowledge=knowledge).run()
            evidence = data_tests(data, alpha=settings["alpha"], test=settings.get("test", "g2"))
            rest = {"knowledge": knowledge, "max_conditioning": settings.get("max_conditioning")}
            n_per_cell = settings.get("min_per_cell", 0)

            found = find_skeleton(
                evidence,
                max_cells=data.n_rows / n_per_cell if n_per_cell else np.inf,
                at_once=settings.get("updates") == "at-once",
                **rest,
            )
            colliders, ambiguous = find_colliders(
                evidence, found, rule=settings.get("colliders", "plain"), **rest
            )
            graph = pc(data, **settings, knowledge=knowledge)

            p = data.n_variables
            apart = {
                (x, y): found.separator(x, y)
                for x, y in combinations(range(p), 2)
                if not found.adjacent[x, y]
            }
            assert np.array_equal(expected.adjacent, found.adjacent)
            assert {pair: given for pair, given in expected.separators.items() if given} == {
                pair: given for pair, given in apart.items() if given
            }
            assert expected.colliders == {tuple(row) for row in colliders.tolist()}
            assert expected.ambiguous == {tuple(row) for row in ambiguous.tolist()}
            assert np.array_equal(expected.arrow, graph.arrow)
            n_separated += len(expected.separators)
            n_deep += sum(len(given) > 1 for given in expected.separators.values())
            n_colliders += len(colliders)
            n_ambiguous += len(ambiguous)
        assert n_separated > 40
        assert n_colliders > 10
        assert n_deep > 0 or settings.get("max_conditioning") == 1
        assert (n_ambiguous > 10) == (settings.get("colliders", "plain") != "plain")


class TestOrder:
    """What does not depend on the order of the columns."""

    def test_skeleton_and_colliders(self) -> None:
        """Permuting columns and relabelling states leaves skeleton and colliders as they are."""
        rng = np.random.default_rng(7)
        for seed in range(50):
            network = random_network(12, np.random.default_rng(seed), mean_parents=1.5, concentration=1)
            data = network.sample(500, rng=rng)
            view = View.draw(data.cardinalities.tolist(), rng)
            masked = view.mask(data)

            evidence, masked_evidence = data_tests(data, alpha=0.05), data_tests(masked, alpha=0.05)
            plain = find_skeleton(evidence)
            other = find_skeleton(masked_evidence)

            assert np.array_equal(plain.adjacent[np.ix_(view.columns, view.columns)], other.adjacent)
            triples = [
                {(z, frozenset((x, y))) for x, z, y in rows}
                for rows in (
                    find_colliders(evidence, plain)[0].tolist(),
                    view.columns[find_colliders(masked_evidence, other)[0]].tolist(),
                )
            ]
            assert triples[0] == triples[1]

    def test_rows(self, rng: np.random.Generator) -> None:
        """The order of the rows does not matter."""
        data = random_network(10, rng, mean_parents=1.5, concentration=1).sample(700, rng=rng)
        shuffled = Dataset(data.names, data.states, data.codes[rng.permutation(700)])

        assert pc(data) == pc(shuffled)


def exact_power(n: int, w: float, alpha: float) -> float:
    """Add up the multinomial probabilities of all 2 x 2 tables of n rows that G2 rejects."""
    a, b, c = np.meshgrid(*[np.arange(n + 1)] * 3, indexing="ij")
    d = n - a - b - c
    a, b, c, d = (cell[d >= 0].astype(float) for cell in (a, b, c, d))

    def f(m: np.ndarray) -> np.ndarray:
        return m * np.log(np.maximum(m, 1))

    g2 = 2 * (f(a) + f(b) + f(c) + f(d) - f(a + b) - f(c + d) - f(a + c) - f(b + d) + n * np.log(n))
    agree, differ = np.log((1 + w) / 4), np.log((1 - w) / 4)
    log_p = gammaln(n + 1) - gammaln(a + 1) - gammaln(b + 1) - gammaln(c + 1) - gammaln(d + 1)
    log_p += (a + d) * agree + (b + c) * differ
    return float(np.exp(log_p[g2 > chi2.isf(alpha, 1)]).sum())


class TestExactPower:
    """Two binary variables with uniform margins that agree with probability (1 + w) / 2."""

    @pytest.mark.parametrize(
        ("n", "w", "alpha", "n_datasets"),
        [
            (38, 0.5, 0.05, 1000),
            (60, 0.0, 0.05, 1000),
            pytest.param(55, 0.5, 0.01, 5000, marks=pytest.mark.slow),
            pytest.param(113, 0.3, 0.05, 5000, marks=pytest.mark.slow),
            pytest.param(161, 0.3, 0.01, 5000, marks=pytest.mark.slow),
            pytest.param(60, 0.0, 0.01, 5000, marks=pytest.mark.slow),
        ],
    )
    def test_share_of_edges(self, n: int, w: float, alpha: float, n_datasets: int) -> None:
        """The share of datasets with an edge agrees with the exact power; false-alarm rate 1e-6 a case."""
        rng = np.random.default_rng(n)
        power = exact_power(n, w, alpha)
        cells = np.array([[0, 0], [0, 1], [1, 0], [1, 1]], dtype=np.uint8)
        tables = rng.multinomial(n, np.array([1 + w, 1 - w, 1 - w, 1 + w]) / 4, n_datasets)

        n_edges = sum(
            pc(dataset_of(np.repeat(cells, table, axis=0), [2, 2]), alpha=alpha).n_edges for table in tables
        )

        assert binomtest(n_edges, n_datasets, power).pvalue > 1e-6

    @pytest.mark.parametrize(("n", "w", "alpha"), [(38, 0.5, 0.05), (55, 0.5, 0.01), (113, 0.3, 0.05)])
    def test_first_to_reach(self, n: int, w: float, alpha: float) -> None:
        """These are the first row counts whose exact power is at least .9, so the oracle above is right.

        Full multinomial enumeration by two programs; the closed form n w^2 = 10.507 gives 43, 60 and 117.
        """
        assert exact_power(n, w, alpha) >= 0.9 > exact_power(n - 1, w, alpha)


# Berkeley admissions 1973: men admitted, men rejected, women admitted, women rejected, by department (Bickel,
# Hammel and O'Connell, Science 187, 1975, 398-404; counts as listed in a University of Toronto handout).
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


class TestBerkeley:
    """Sex and admission given department: G2 21.7355, X2 19.9384 on 6 df."""

    @pytest.mark.parametrize(
        ("alpha", "test", "is_kept"),
        [
            (0.05, "g2", True),  # critical value 12.59
            (0.01, "g2", True),  # 16.81
            (0.001, "g2", False),  # 22.46
            (0.01, "pearson", True),
            (0.002, "pearson", False),  # 20.79
        ],
    )
    def test_sex_and_admission(self, alpha: float, test: str, is_kept: bool) -> None:
        """The edge between sex and admission stays as long as the test given department rejects."""
        codes = np.repeat(np.argwhere(BERKELEY >= 0), BERKELEY.ravel(), axis=0).astype(np.uint8)
        states = (tuple("ABCDEF"), ("man", "woman"), ("admitted", "rejected"))
        data = Dataset(("department", "sex", "admission"), states, codes)

        graph = pc(data, alpha=alpha, test=test)

        edges = {frozenset(edge[:2]) for edge in graph.edges()}
        assert is_kept == (frozenset(("sex", "admission")) in edges)
        assert frozenset(("department", "sex")) in edges
        assert frozenset(("department", "admission")) in edges
        assert not graph.directed.any()


class TestKnownNetworks:
    """With many rows and strong arcs the true class comes back."""

    def test_collider_and_what_follows(self, rng: np.random.Generator) -> None:
        """In a -> c <- b, c -> d all arcs are directed, the last one by Meek's first rule."""
        a, b = rng.integers(0, 2, (2, 5000))
        c = np.where(rng.random(5000) < 0.1, 1 - (a | b), a | b)
        d = np.where(rng.random(5000) < 0.2, 1 - c, c)

        graph = pc(dataset_of(np.stack([a, b, c, d], axis=1), [2] * 4))

        assert graph.edges() == (("v0", "v2", "directed"), ("v1", "v2", "directed"), ("v2", "v3", "directed"))

    def test_chain(self, rng: np.random.Generator) -> None:
        """A chain comes back undirected."""
        a = rng.integers(0, 3, 5000)
        b = np.where(rng.random(5000) < 0.3, rng.integers(0, 3, 5000), a)
        c = np.where(rng.random(5000) < 0.3, rng.integers(0, 3, 5000), b)

        graph = pc(dataset_of(np.stack([a, b, c], axis=1), [3] * 3))

        assert graph.edges() == (("v0", "v1", "undirected"), ("v1", "v2", "undirected"))

    def test_random_networks(self) -> None:
        """For these 30 networks of 6 binary variables, 100,000 rows give back the CPDAG.

        Level 1e-5, so that the few dozen tests of a true independence in each hardly ever reject.
        """
        for seed in range(30):
            rng = np.random.default_rng(seed)
            network = logit_network(6, rng)
            data = network.sample(100_000, rng=rng)

            graph = pc(data, alpha=1e-5)

            assert cpdag(network.graph) == graph


def logit_network(p: int, rng: np.random.Generator) -> Network:
    """Draw a DAG in which each parent shifts the log odds of its child by 1.2 to 2.4, up or down."""
    names = tuple(f"v{j}" for j in range(p))
    order = rng.permutation(p)
    arcs, cpts = [], {}
    for place, v in enumerate(order):
        parents = rng.choice(order[:place], min(place, int(rng.integers(0, 3))), replace=False)
        arcs += [(names[u], names[v]) for u in parents]
        log_odds = np.full((2,) * len(parents), rng.uniform(-1, 1))
        for axis in range(len(parents)):
            shift = rng.choice([-1, 1]) * rng.uniform(0.6, 1.2) * np.array([-1.0, 1.0])
            log_odds = log_odds + shift.reshape([2 if i == axis else 1 for i in range(len(parents))])
        one = 1 / (1 + np.exp(-log_odds))
        cpts[names[v]] = Cpt(names[v], tuple(names[u] for u in parents), np.stack([1 - one, one], axis=-1))
    return Network(Graph.from_edges(names, arcs), (("0", "1"),) * p, cpts)


class TestEdgeCases:
    """Data of no help, or too large for any table."""

    @pytest.mark.parametrize("n", [0, 1, 10])
    @pytest.mark.parametrize("p", [1, 2, 5])
    def test_few_rows_and_columns(self, n: int, p: int, rng: np.random.Generator) -> None:
        """Independent columns of at most ten rows give no edge at 1e-6, which no such table reaches."""
        data = dataset_of(rng.integers(0, 2, (n, p)), [2] * p)

        assert pc(data, alpha=1e-6).n_edges == 0

    def test_two_copies(self) -> None:
        """Two identical columns are joined."""
        column = np.arange(100) % 3

        assert pc(dataset_of(np.stack([column, column], axis=1), [3, 3])).n_edges == 1

    def test_three_copies(self) -> None:
        """Of three copies each explains the other two: no edge is left."""
        column = np.arange(100) % 3

        assert pc(dataset_of(np.stack([column] * 3, axis=1), [3] * 3)).n_edges == 0

    @pytest.mark.parametrize("min_per_cell", [0.0, 1e9])
    def test_constants_have_no_edge(self, min_per_cell: float, rng: np.random.Generator) -> None:
        """A variable of one state has no edge, whether tests can be made or not."""
        codes = np.stack([np.zeros(50), rng.integers(0, 2, 50), np.zeros(50)], axis=1)

        assert pc(dataset_of(codes, [1, 2, 1]), min_per_cell=min_per_cell).n_edges == 0

    def test_untestable_pairs_keep_their_edge(self, rng: np.random.Generator) -> None:
        """39 rows are too few for the 4 cells of a pair at 10 rows a cell, 40 are enough."""
        codes = rng.integers(0, 2, (40, 6))

        complete = pc(dataset_of(codes[:39], [2] * 6), min_per_cell=10.0)
        tested = pc(dataset_of(codes, [2] * 6), min_per_cell=10.0, alpha=1e-9)

        assert (complete.n_edges, complete.directed.any()) == (15, False)
        assert tested.n_edges == 0

    def test_untestable_sets_are_not_searched(self, rng: np.random.Generator) -> None:
        """150 variables of which no test can be made end at once with the complete graph."""
        data = dataset_of(rng.integers(0, 3, (20, 150)), [3] * 150)

        assert pc(data, min_per_cell=100.0).n_edges == 150 * 149 // 2

    def test_max_conditioning(self) -> None:
        """0 conditions on nothing: the skeleton is that of the marginal tests."""
        data = random_network(9, np.random.default_rng(3), mean_parents=2, concentration=1).sample(
            2000, rng=np.random.default_rng(4)
        )

        graph = pc(data, max_conditioning=0)

        assert np.array_equal(
            PlainPc(data, alpha=0.01, max_conditioning=0).adjacent, graph.arrow | graph.arrow.T
        )
        assert graph.n_edges > pc(data).n_edges

    def test_many_unseen_states(self, rng: np.random.Generator) -> None:
        """255 declared states of which 2 are seen cost power, never an error."""
        hidden = rng.integers(0, 2, 3000)
        noisy = np.where(rng.random((3000, 6)) < 0.1, rng.integers(0, 2, (3000, 6)), hidden[:, np.newaxis])

        declared = pc(dataset_of(noisy, [255] * 6))
        seen = pc(dataset_of(noisy, [2] * 6))

        assert declared.n_edges == 0
        assert seen.n_edges > 0

    def test_states_without_number(self, rng: np.random.Generator) -> None:
        """Columns in which every row has a state of its own need no table."""
        codes = np.stack([rng.permutation(500) * 100 for _ in range(5)], axis=1)

        assert pc(dataset_of(codes, [60_000] * 5)).n_edges == 0

    def test_many_variables(self, rng: np.random.Generator) -> None:
        """200 variables, some of 255 states, constant, copied or with states never seen, get an answer."""
        codes = rng.integers(0, 2, (500, 200))
        codes[:, 1:10] = codes[:, :1]
        codes[:, 10:20] = 0
        sizes = [255 if j % 7 == 0 else 1 if 10 <= j < 15 else 2 + j % 3 for j in range(200)]
        codes[:, ::7] = rng.integers(0, 255, (500, 29))

        graph = pc(dataset_of(codes, sizes))

        assert graph.n_variables == 200
