"""Knowledge from the plan to the report, in real runs: through the masked view and back."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from generators.catalogue import published_network
from generators.graph import Graph
from harness.learners.builtin import BUILT_IN, built_in
from harness.plan.recipes import dataset_key, draw_network, network_key
from harness.plan.schema import read_plan
from harness.plan.telling import rounded, told
from harness.report.answers import build_answers
from harness.report.text import render_text
from harness.studies.applying import differences
from harness.studies.reading import Study, read_study, runs_table
from harness.studies.rerunning import do_again
from harness.studies.running import run_plan

pytestmark = pytest.mark.slow  # the runs that most tests read take some seconds

LEARNERS = '''
from generators.graph import Graph
from harness.learners.specification import learner


@learner("repeats", returns="dag", directions="causal")
def repeats(data, *, knowledge):
    """Answer with the arcs that were told."""
    if knowledge is None:
        return Graph.from_edges(data.names)
    assert knowledge.names == data.names == tuple(f"x{k + 1}" for k in range(len(data.names)))
    return Graph(data.names, knowledge.arcs)


def allows(data, *, knowledge):
    """Answer with every edge that was not excluded, undirected where it may run either way."""
    return Graph(data.names, ~knowledge.excluded)


@learner("deaf", returns="dag", directions="causal")
def deaf(data):
    """Answer with nothing, whatever is known."""
    return Graph.from_edges(data.names)
'''
PLAN = """
title = "What is known"
seed = 9
[networks]
variables = [6, 9]
replicates = 2
[data]
rows = [20, 30]
datasets = 2
knowledge = [
    {arcs = 1.0, excluded = 1.0},
    {arcs = 1.0, wrong = 0.4},
    {arcs = 0.5, excluded = 0.3, stages = 3, wrong = 0.2},
]
[[learner]]
source = "learners.py:repeats"
label = "repeats"
[[learner]]
source = "learners.py:allows"
label = "allows"
[[learner]]
source = "learners.py:deaf"
label = "deaf"
"""
ALL, WRONG, MIXED = (
    "arcs 1.0, excluded 1.0",
    "arcs 1.0, wrong 0.4",
    "arcs 0.5, excluded 0.3, stages 3, wrong 0.2",
)
UNEQUAL = ["wall_seconds", "cpu_seconds", "peak_rss_mb", "session"]  # what no two starts share


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a folder with a plan, its learners and its ledger."""
    folder = tmp_path_factory.mktemp("told")
    (folder / "learners.py").write_text(LEARNERS)
    (folder / "plan.toml").write_text(PLAN)
    run_plan(folder / "plan.toml", n_workers=2)
    return folder


@pytest.fixture
def study(folder: Path) -> Study:
    return read_study(folder / "plan.ledger")


def comparable(ledger: Path) -> pd.DataFrame:
    return runs_table(read_study(ledger)).drop(columns=UNEQUAL)


def test_what_is_told_is_the_truth_under_other_names(study: Study) -> None:
    """With all arcs told, to repeat them is to be right about everything, directions too."""
    runs = runs_table(study)
    own = runs[(runs["knowledge"] == ALL) & (runs["label"] == "repeats")]

    assert len(own) == 2 * 2 * 2 * 2
    assert set(own["status"]) == {"done"}
    for measure in ("skeleton_precision", "skeleton_recall", "perfect_map"):
        assert set(own[measure]) == {1.0}
    assert set(own["dag_shd"]) == set(own["class_shd"]) == {0.0}


def test_exclusions_are_the_truth_too(study: Study) -> None:
    """With all exclusions told, what is left are the true arcs."""
    runs = runs_table(study)
    right = runs[(runs["knowledge"] == ALL) & (runs["label"] == "repeats")]["graph"].tolist()
    left = runs[(runs["knowledge"] == ALL) & (runs["label"] == "allows")]["graph"].tolist()

    assert right == left


def test_built_in_learners_are_told_too(tmp_path: Path) -> None:
    """Told every arc and every pair without one, built-in learners that listen have the truth."""
    takers = [name for name in BUILT_IN if built_in(name).takes_knowledge]
    head = "[networks]\nvariables = [6, 9]\nreplicates = 3\n[data]\nrows = 30\n"
    learners = "".join(f"[[learner]]\nmethod = '{name}'\n" for name in takers)
    plan = tmp_path / "plan.toml"
    plan.write_text(head + "knowledge = {arcs = 1.0, excluded = 1.0}\n" + learners)

    run_plan(plan, n_workers=2)

    runs = runs_table(read_study(tmp_path / "plan.ledger"))
    assert len(runs) == 6 * len(takers) >= 36
    assert set(runs["status"]) == {"done"}
    assert set(runs["class_shd"]) == {0.0}
    assert set(runs["perfect_map"]) == {1.0}


def test_wrong_statements_cost_what_they_must(study: Study) -> None:
    """Of m arcs told, 0.4 m are no arcs: that many of the answer's arcs are not in the truth."""
    runs = runs_table(study)
    own = runs[(runs["knowledge"] == WRONG) & (runs["label"] == "repeats")]
    plan = read_plan(study.ledger.with_suffix(".toml"))

    for _, run in own.iterrows():
        condition = next(each for each in plan.conditions if each.factors["variables"] == run["variables"])
        key = network_key(plan.seed, condition.networks, run["replicate"])
        true_arcs = {edge[:2] for edge in draw_network(condition.networks, key).graph.edges()}
        answer = {(source, target) for source, target, _ in json.loads(run["graph"])}

        assert len(answer) == len(true_arcs)
        assert len(answer - true_arcs) == rounded(0.4, len(true_arcs)) > 0


def test_each_dataset_is_told_something_else_and_all_row_counts_the_same(study: Study) -> None:
    """What is told belongs to the dataset, not to its rows."""
    runs = runs_table(study)
    own = runs[(runs["knowledge"] == MIXED) & (runs["label"] == "repeats")]

    assert own.groupby("dataset")["graph"].nunique().eq(1).all()
    assert own.groupby("network")["graph"].nunique().eq(2).mean() > 0.5


def test_answers_hold_what_was_told(study: Study) -> None:
    """The drawing, done again from the keys, is what the learner answered with, in network order."""
    plan = read_plan(study.ledger.with_suffix(".toml"))
    runs = runs_table(study)
    own = runs[(runs["knowledge"] == MIXED) & (runs["label"] == "repeats") & (runs["rows"] == 20)]
    found = {run["dataset"]: sorted(map(tuple, json.loads(run["graph"]))) for _, run in own.iterrows()}

    expected = {}
    for condition in plan.conditions:
        if condition.factors["knowledge"] == MIXED:
            for replicate in range(2):
                key = network_key(plan.seed, condition.networks, replicate)
                network = draw_network(condition.networks, key)
                for index in range(2):
                    dataset = dataset_key(key, index)
                    known = told(network.graph, condition.data, dataset)
                    assert known is not None
                    expected[dataset.hex()[:12]] = sorted(Graph(known.names, known.arcs).edges())

    assert expected == found


def test_a_learner_that_takes_none_is_scored_after_the_same_knowledge(study: Study) -> None:
    """Its answer is the same under all levels; only what it is compared with differs."""
    runs = runs_table(study)
    own = runs[runs["label"] == "deaf"]

    assert set(own["graph"]) == {"[]"}
    assert set(own["skeleton_recall"]) == {0.0}
    undefined = [json.loads(text)["direction_recall"] for text in own[own["knowledge"] == ALL]["undefined"]]
    assert set(undefined) == {"truth: no compelled arc beyond what was told"}


def test_one_worker_and_two_give_the_same_runs(folder: Path, tmp_path: Path) -> None:
    """What is told depends on nothing but the keys."""
    one = run_plan(folder / "plan.toml", tmp_path / "one.ledger", n_workers=1)

    pd.testing.assert_frame_equal(comparable(folder / "plan.ledger"), comparable(one.ledger))


def test_telling_more_leaves_the_runs_without_it_as_they_are(folder: Path, tmp_path: Path) -> None:
    """A plan that tells nothing keeps its runs when a level of knowledge is added to it."""
    shutil.copy(folder / "learners.py", tmp_path)
    first, rest = PLAN.split("knowledge = [")
    allows = '[[learner]]\nsource = "learners.py:allows"\nlabel = "allows"\n'
    plan = (first + rest.split("]\n", 1)[1]).replace(allows, "")
    (tmp_path / "plan.toml").write_text(plan)
    n_before = run_plan(tmp_path / "plan.toml", n_workers=2).n_done
    before = comparable(tmp_path / "plan.ledger")

    told = "datasets = 2\nknowledge = [{}, {stages = true}]"
    (tmp_path / "plan.toml").write_text(plan.replace("datasets = 2", told))
    n_added = run_plan(tmp_path / "plan.toml", n_workers=2).n_done
    after = comparable(tmp_path / "plan.ledger")

    assert n_before == n_added == 2 * 2 * 2 * 2 * 2
    without = after[after["knowledge"] == "none"].drop(columns="knowledge").reset_index(drop=True)
    pd.testing.assert_frame_equal(before, without)
    assert set(after["knowledge"]) == {"none", "stages"}


@pytest.mark.parametrize("label", ["repeats", "deaf"])
def test_a_run_done_again_is_told_the_same(study: Study, label: str) -> None:
    """`rerun` draws it from the keys once more."""
    frame = study.runs.frame
    stored = frame[(frame["knowledge"] == MIXED) & (frame["label"] == label)].iloc[-1]

    again = do_again(study, stored["run"])

    assert again.is_same
    assert again.outcome.measures["class_shd"] == stored["class_shd"]


def test_a_report_says_what_was_told(study: Study) -> None:
    """In a sentence of the assumptions and one of the cautions, on the first screen too."""
    answers = build_answers(study.runs, study.facts)

    assert answers.assumptions[-1] == (
        "Told to learners beforehand: 100 % of the true arcs, 100 % of the arcs that are not there, as "
        "excluded; or 100 % of the true arcs, 40 % of each wrong; or 50 % of the true arcs, 30 % of the arcs "
        "that are not there, as excluded, stages in 3 waves, 20 % of each wrong."
    )
    assert any("also to the answers of learners that take none" in line for line in answers.cautions)
    assert "Told to learners beforehand" in render_text(answers)
    assert answers.conditions[0].heading == f"variables = 6, knowledge = {ALL}"


def test_a_study_says_whether_the_real_one_knows_as_much(
    study: Study, make_study: Callable[..., Any]
) -> None:
    """Knowledge that was told and is absent, or the other way round, is a difference."""
    _, without = make_study()
    data = published_network("sprinkler").sample(25, rng=np.random.default_rng(1))
    new = "Knowledge is given here; none was told in the rehearsal."
    absent = "No knowledge is given here; in the rehearsal some was always told."

    assert absent in differences(study.facts, data)
    assert absent not in differences(study.facts, data, has_knowledge=True)
    assert new in differences(without, data, has_knowledge=True)
    assert new not in differences(without, data)


def test_statements_of_a_file_are_told_under_the_masked_names(folder: Path, tmp_path: Path) -> None:
    """The file names the network's variables; the ledger needs it no more once the plan has been read."""
    shutil.copy(folder / "learners.py", tmp_path)
    (tmp_path / "known.toml").write_text('arcs = [["cloudy", "rain"], ["rain", "wet_grass"]]')
    (tmp_path / "plan.toml").write_text("""
[networks]
published = "sprinkler"
[data]
rows = 20
datasets = 4
knowledge = {file = "known.toml"}
[[learner]]
source = "learners.py:repeats"
label = "repeats"
""")
    study = read_study(run_plan(tmp_path / "plan.toml", n_workers=1).ledger)
    (tmp_path / "known.toml").unlink()

    runs = runs_table(study)

    expected = [["cloudy", "rain", "directed"], ["rain", "wet_grass", "directed"]]
    assert [json.loads(graph) for graph in runs["graph"]] == 4 * [expected]
    assert do_again(study, runs["run"].iloc[0]).is_same
