"""What is done with a ledger: reading, exporting, counting, running one run again, foretelling the time."""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from generators.errors import InputError
from harness.ledger.store import MEASURE_COLUMNS, Ledger
from harness.plan.schema import parse_plan, read_plan
from harness.studies import checking
from harness.studies.checking import check_plan
from harness.studies.exporting import export_table, table_frame, table_text
from harness.studies.reading import Study, find_ledger, read_study, runs_table
from harness.studies.rerunning import do_again
from harness.studies.running import run_plan
from harness.studies.standing import standing_of

LEARNERS = '''
import sys

import numpy as np

from generators.graph import Graph


def drawn(data, *, rng):
    """Make arcs of the stream, so that another stream gives another graph."""
    p = len(data.names)
    return Graph(data.names, np.triu(rng.integers(0, 2, size=(p, p)) == 1, 1))


def raises(data):
    raise ValueError("no")


def exits(data):
    sys.exit(3)
'''
PLAN = """
title = "A small study"
seed = 3
[networks]
variables = [3, 4]
topology = ["random-order", "uniform"]
mean_parents = [0.5, 0.7]
replicates = 2
[data]
rows = [50, 20]
datasets = 2
[[learner]]
source = "learners.py:drawn"
label = "drawn"
[[learner]]
source = "learners.py:raises"
label = "raises"
[[learner]]
source = "learners.py:exits"
label = "exits"
"""
N_CONDITIONS = 2 * 2 + 2  # mean_parents is a setting of random-order alone
N_RUNS = N_CONDITIONS * 2 * 2 * 2 * 3


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a folder with a plan, its learners and its finished ledger."""
    folder = tmp_path_factory.mktemp("study")
    (folder / "learners.py").write_text(LEARNERS)
    (folder / "plan.toml").write_text(PLAN)
    run_plan(folder / "plan.toml", n_workers=2)
    return folder


@pytest.fixture
def study(folder: Path) -> Study:
    return read_study(folder / "plan.ledger")


pytestmark = pytest.mark.slow  # the runs that all tests read take some seconds


# Reading ------------------------------------------------------------------------------------------------


def test_every_run_of_the_plan_is_read(study: Study) -> None:
    """A finished ledger has all runs that the plan asks for, and no other."""
    facts = study.facts

    assert (facts.title, facts.seed, facts.rows) == ("A small study", 3, (20, 50))
    assert (facts.n_expected_runs, facts.n_done_runs, facts.n_other_runs) == (N_RUNS, N_RUNS, 0)
    assert len(study.runs.frame) == study.runs.frame["run"].nunique() == N_RUNS


def test_exported_runs_are_sorted_and_complete(study: Study) -> None:
    """Columns in their fixed order; rows by condition, row count, replicate, dataset and learner."""
    table = runs_table(study)

    assert list(table.columns) == [
        *("run", "variables", "topology", "mean_parents", "rows", "network", "replicate", "dataset"),
        *("label", "method", "settings", "status", "cause", "extendable"),
        *MEASURE_COLUMNS,
        *("wall_seconds", "cpu_seconds", "peak_rss_mb", "undefined", "session", "graph"),
    ]
    place = {"drawn": 0, "raises": 1, "exits": 2}
    order = [
        (condition, *own[:3], place[own[3]])
        for condition, own in zip(
            study.runs.frame["condition"],
            table[["rows", "replicate", "dataset", "label"]].itertuples(index=False, name=None),
            strict=True,
        )
    ]
    assert order == sorted(order)
    assert table["run"].str.fullmatch("[0-9a-f]{12}").all()


def test_factors_that_a_condition_does_not_use_are_empty(study: Study) -> None:
    """A setting of one topology alone has no level in the conditions of another."""
    table = runs_table(study)

    has_none = table["mean_parents"].isna()

    assert set(table.loc[has_none, "topology"]) == {"uniform"}
    assert set(table.loc[~has_none, "mean_parents"]) == {0.5, 0.7}


def test_whole_numbers_stay_whole_beside_missing_levels(tmp_path: Path, folder: Path) -> None:
    """A count that some conditions lack is written as it is, not with a decimal point."""
    shutil.copy(folder / "learners.py", tmp_path)
    text = PLAN.replace("mean_parents = [0.5, 0.7]", "max_parents = [1, 2]\nmean_parents = 0.5")
    text = text.replace("variables = [3, 4]", "variables = 3").replace("datasets = 2", "datasets = 1")
    (tmp_path / "plan.toml").write_text(text)
    study = read_study(run_plan(tmp_path / "plan.toml", n_workers=2).ledger)

    runs = list(csv.DictReader(table_text(study, "runs").splitlines()))
    conditions = list(csv.DictReader(table_text(study, "conditions").splitlines()))

    assert {row["max_parents"] for row in runs} == {"1", "2", ""}
    assert {row["max_parents"] for row in conditions} == {"1", "2", ""}


def test_runs_of_another_plan_are_kept_and_counted(tmp_path: Path, folder: Path) -> None:
    """A smaller plan in the same ledger sees its own runs only, under its own labels."""
    for name in ("learners.py", "plan.ledger"):
        shutil.copy(folder / name, tmp_path)
    text = (
        PLAN.replace("[3, 4]", "3").replace("[50, 20]", "20").replace('label = "drawn"', 'label = "renamed"')
    )
    (tmp_path / "plan.toml").write_text(text)

    summary = run_plan(tmp_path / "plan.toml")
    facts = read_study(summary.ledger).facts

    assert summary.n_asked == 0
    assert facts.n_done_runs == facts.n_expected_runs == N_RUNS / 4
    assert facts.n_other_runs == N_RUNS * 3 / 4
    assert facts.labels == ("renamed", "raises", "exits")


def test_a_study_is_found_by_its_plan_or_its_ledger(folder: Path) -> None:
    """Either names the same ledger; one that is not there is an error that says how to make it."""
    ledger = folder / "plan.ledger"

    assert (
        find_ledger(folder / "plan.toml")
        == find_ledger(ledger)
        == find_ledger("elsewhere.toml", ledger)
        == ledger
    )
    with pytest.raises(
        InputError, match=r"other\.ledger: there is no such ledger; 'arcassay run .*' makes it"
    ):
        find_ledger(folder / "other.toml")


def test_a_ledger_without_a_plan_is_refused(tmp_path: Path) -> None:
    """A ledger in which nothing was ever started has nothing to read."""
    Ledger.open_to_write(tmp_path / "a.ledger").close()

    with pytest.raises(InputError, match="no plan has been started"):
        read_study(tmp_path / "a.ledger")


# Exporting ----------------------------------------------------------------------------------------------


def test_exported_csv_holds_the_runs(study: Study, tmp_path: Path) -> None:
    """Numbers come back bit for bit (written by repr), graphs and reasons as JSON."""
    path = tmp_path / "runs.csv"

    n_rows = export_table(study, "runs", path)

    back = pd.read_csv(path, keep_default_na=False, na_values={"wall_seconds": [""], "class_shd": [""]})
    table = runs_table(study)
    assert n_rows == len(back) == N_RUNS
    for name in ("wall_seconds", "class_shd"):
        pd.testing.assert_series_equal(back[name], table[name], check_exact=True)
    done = back[back["status"] == "done"]
    assert all(len(edge) == 3 for text in done["graph"] for edge in json.loads(text))
    assert all(isinstance(json.loads(text), dict) for text in back["undefined"])


def test_exported_conditions_have_a_row_per_cell(study: Study) -> None:
    """One row per condition, row count and learner, with means that pandas gives for the runs too."""
    table = table_frame(study, "conditions")
    runs = runs_table(study)
    first = table.iloc[0]

    assert len(table) == N_CONDITIONS * 2 * 3
    own = runs[
        (runs["variables"] == first["variables"])
        & (runs["topology"] == first["topology"])
        & (runs["mean_parents"] == first["mean_parents"])
        & (runs["rows"] == first["rows"])
        & (runs["label"] == first["label"])
    ]
    assert first["n_runs"] == len(own) == 4
    assert first["class_shd"] == pytest.approx(own["class_shd"].mean())
    assert list(table["failed_share"]) == [0.0, 1.0, 1.0] * (N_CONDITIONS * 2)


def test_other_endings_are_refused(study: Study, tmp_path: Path) -> None:
    """The file's ending says the format; another one is an error that names the accepted ones."""
    with pytest.raises(InputError, match=r"a table is written as \.csv or \.parquet, got '\.xlsx'"):
        export_table(study, "runs", tmp_path / "runs.xlsx")


# Counting -----------------------------------------------------------------------------------------------


def test_standing_counts_every_ending(study: Study) -> None:
    """Statuses per learner in the plan's order, what is missing, and the sessions."""
    standing = standing_of(study)

    each = N_RUNS // 3
    assert standing.document()["learners"] == {
        "drawn": {"done": each},
        "raises": {"error": each},
        "exits": {"crashed": each},
    }
    assert standing.document()["missing"] == 0
    assert f"{N_RUNS} of {N_RUNS} runs" in standing.lines()[1]
    assert [session["ending"] for session in standing.sessions] == ["finished"]


# One run again ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("label", ["drawn", "raises", "exits"])
def test_a_run_done_again_ends_as_before(study: Study, label: str) -> None:
    """From its keys alone, in this process: the same network, dataset and stream, so the same ending."""
    frame = study.runs.frame
    stored = frame[(frame["label"] == label) & (frame["replicate"] == 1)].iloc[-1]

    again = do_again(study, stored["run"][:10])

    assert again.is_same
    assert (again.name, again.rows, again.stored_status) == (stored["run"], stored["rows"], stored["status"])
    assert json.dumps(again.document())
    assert any("same" in line for line in again.lines()) == (label == "drawn")


def test_runs_that_are_not_there_are_refused(study: Study) -> None:
    """No run, or more than one, is an error that says which."""
    with pytest.raises(InputError, match="run 'xyz': there is no such run"):
        do_again(study, "xyz")
    with pytest.raises(InputError, match=f"{N_RUNS} runs begin so"):
        do_again(study, "")


def test_a_run_on_a_network_that_has_changed_is_refused(tmp_path: Path, folder: Path) -> None:
    """When a given network is another one today, the run cannot be done again."""
    from generators.catalogue import published_network
    from generators.files import write_network

    shutil.copy(folder / "learners.py", tmp_path)
    write_network(published_network("sprinkler"), tmp_path / "given.bif")
    (tmp_path / "plan.toml").write_text("""
[networks]
file = "given.bif"
[data]
rows = 20
datasets = 1
[[learner]]
source = "learners.py:raises"
""")
    study = read_study(run_plan(tmp_path / "plan.toml").ledger)
    write_network(published_network("burglary"), tmp_path / "given.bif")

    with pytest.raises(InputError, match="its network file has changed since"):
        do_again(study, study.runs.frame["run"].iloc[0])


# Foretelling --------------------------------------------------------------------------------------------


def test_a_check_counts_runs_and_stores_nothing(folder: Path, tmp_path: Path) -> None:
    """The probe reaches every combination of a small plan; its time is that of all; no ledger is made."""
    for name in ("learners.py", "plan.toml"):
        shutil.copy(folder / name, tmp_path)

    check = check_plan(read_plan(tmp_path / "plan.toml"), n_workers=2)

    assert (check.n_runs, check.n_workers) == (N_RUNS, 2)
    assert (check.n_probed, check.n_cells) == (N_CONDITIONS * 2 * 3,) * 2
    assert check.seconds is not None
    assert check.seconds > 0
    assert json.loads(json.dumps(check.document()))["runs"] == N_RUNS
    assert f"{N_RUNS} runs: 6 conditions, 24 datasets in all, 2 row counts, 3 learners." in check.lines()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["learners.py", "plan.toml"]


def test_a_check_ends_in_time_with_slow_learners(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When no run ends within the probe, that is said, and nothing waits for the runs."""
    (tmp_path / "learners.py").write_text("import time\n\n\ndef slow(data):\n    time.sleep(600)\n")
    monkeypatch.setattr(checking, "PROBE_SECONDS", 0.5)
    text = '[networks]\nvariables = 3\n[[learner]]\nsource = "learners.py:slow"\n[limits]\nseconds = 900\n'

    check = check_plan(parse_plan(text, tmp_path / "plan.toml"), n_workers=1)

    assert (check.seconds, check.n_probed) == (None, 0)
    assert any("No run ended within" in line for line in check.lines())


def test_every_combination_is_probed_once_few_rows_first() -> None:
    """Over all conditions: first the smallest row count, then the next; numbers differ."""
    from harness.execution.order import missing_work
    from harness.studies.checking import _first_of_each
    from harness.studies.running import network_keys

    plan = parse_plan("""
[networks]
variables = [3, 4]
replicates = 3
[data]
rows = [2000000, 20]
[[learner]]
method = "no-arcs"
""")
    works = list(missing_work(plan, network_keys(plan), {}))

    probes: list[Any] = list(_first_of_each(works))

    cells = [(request.rows, work.condition) for work in probes for request in work.requests]
    assert cells == [(20, 0), (20, 1), (2_000_000, 0), (2_000_000, 1)]
    assert {work.replicate for work in probes} == {0}
    assert len({work.number for work in probes}) == len(probes)
