"""The command line, as a user meets it."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from harness.cli.main import SECTIONS, cli, run_command

PLAN = """
title = "Small"
seed = 5
[networks]
variables = [4, 6]
replicates = 3
[data]
rows = [60, 120]
[[learner]]
method = "no-arcs"
[[learner]]
method = "hill-climbing"
[[learner]]
method = "pc"
label = "pc"
alpha = 0.05
[requirement]
bounds = ["skeleton_recall >= 0.5"]
"""
COMMANDS = [name for section in SECTIONS.values() for name in section]
NETWORK_COMMANDS = ["generate", "show", "convert", "sample"]


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a plan that has been run."""
    plan = tmp_path_factory.mktemp("study") / "plan.toml"
    plan.write_text(PLAN)
    assert run_command(["run", str(plan), "--quiet", "--workers", "2"]) == 0
    return plan


def json_of(capsys: pytest.CaptureFixture[str], *arguments: str) -> object:
    """Run a command with --json and return its document: standard output holds nothing else."""
    capsys.readouterr()
    assert run_command([*arguments, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


@pytest.mark.parametrize(
    "command", [[name] for name in COMMANDS if name != "network"] + [["network", n] for n in NETWORK_COMMANDS]
)
def test_every_command_has_help_with_two_examples(
    command: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    """`--help` of each command ends with at least two examples that begin with the command itself."""
    assert run_command([*command, "--help"]) == 0

    out = capsys.readouterr().out
    examples = out.partition("Examples:")[2].strip().splitlines()
    assert len([line for line in examples if line.strip().startswith("arcassay " + " ".join(command))]) >= 2
    assert "--json" in out
    assert "--quiet" in out


def test_an_unknown_command_is_answered_with_the_nearest(capsys: pytest.CaptureFixture[str]) -> None:
    """A misspelt command is exit code 2 and one guess."""
    code = run_command(["reprot"])

    assert code == 2
    assert "Did you mean 'report'?" in capsys.readouterr().err


def test_a_wrong_plan_is_exit_code_2_with_every_fault(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """All faults of a plan are printed, a line each, and nothing is made."""
    plan = tmp_path / "plan.toml"
    plan.write_text('[networks]\nvariables = 5\nreplicats = 3\n[[learner]]\nmethod = "pc"\nalpha = -3\n')

    code = run_command(["run", str(plan)])

    err = capsys.readouterr().err.splitlines()
    assert code == 2
    assert len(err) == 2
    assert any("replicats: unknown key. Did you mean 'replicates'?" in line for line in err)
    assert any("alpha: must be a number strictly between 0 and 1, got -3" in line for line in err)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["plan.toml"]


def test_a_run_ends_with_its_first_screen(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Running again does nothing twice and prints the first screen."""
    code = run_command(["run", str(study)])

    captured = capsys.readouterr()
    assert code == 0
    assert "0 runs to do; 36 are in the ledger already." in captured.err
    assert captured.out.startswith("Small\n")
    assert max(map(len, captured.out.splitlines())) <= 80


def test_the_page_is_written_whole(study: Path, tmp_path: Path) -> None:
    """`report -o` writes one HTML page and leaves nothing beside it."""
    page = tmp_path / "page.html"

    assert run_command(["report", str(study), "-o", str(page), "--quiet"]) == 0

    assert page.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")
    assert [path.name for path in tmp_path.iterdir()] == ["page.html"]


def test_status_counts_what_is_there(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`status --json` counts planned, settled and missing runs."""
    document = json_of(capsys, "status", str(study))

    assert isinstance(document, dict)
    assert (document["planned"], document["settled"], document["missing"]) == (36, 36, 0)
    assert document["learners"]["pc"] == {"done": 12}


def test_exported_runs_have_the_promised_columns(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The table of runs begins with run, factors, rows, network, replicate, dataset, label."""
    capsys.readouterr()

    assert run_command(["export", str(study)]) == 0

    lines = capsys.readouterr().out.splitlines()
    header = lines[0].split(",")
    assert header[:7] == ["run", "variables", "rows", "network", "replicate", "dataset", "label"]
    assert {"method", "settings", "status", "cause", "class_shd", "undefined", "session", "graph"} <= set(
        header
    )
    assert len(lines) == 37


def test_exports_go_to_csv_and_parquet(study: Path, tmp_path: Path) -> None:
    """The file's ending chooses the format; both hold the same table."""
    pd = pytest.importorskip("pandas")
    pytest.importorskip("pyarrow")

    assert run_command(["export", str(study), "-o", str(tmp_path / "a.csv"), "--quiet"]) == 0
    assert run_command(["export", str(study), "-o", str(tmp_path / "a.parquet"), "--quiet"]) == 0

    csv, parquet = pd.read_csv(tmp_path / "a.csv"), pd.read_parquet(tmp_path / "a.parquet")
    assert csv["class_shd"].tolist() == parquet["class_shd"].tolist()
    assert csv["run"].tolist() == parquet["run"].tolist()


def test_a_run_done_again_is_the_same(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`rerun` rebuilds a run from its keys and gets the stored graph."""
    capsys.readouterr()
    run_command(["export", str(study)])
    name = capsys.readouterr().out.splitlines()[-1].split(",")[0]

    document = json_of(capsys, "rerun", str(study), name)

    assert isinstance(document, dict)
    assert document["run"] == name
    assert document["same"] is True


def test_an_unknown_run_is_exit_code_2(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A run that is not there is one line."""
    assert run_command(["rerun", str(study), "zzzzzzzzzzzz"]) == 2
    assert "there is no such run" in capsys.readouterr().err


def test_check_says_how_many_and_how_long(study: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`check` counts the runs and times a probe."""
    document = json_of(capsys, "check", str(study), "--workers", "1")

    assert isinstance(document, dict)
    assert document["runs"] == 36
    assert document["probed"] == document["combinations"] == 12
    assert document["seconds"] > 0


def test_a_draft_passes_the_check_and_is_never_overwritten(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """`draft` writes a valid plan; a file that is there is left alone."""
    from harness.plan.schema import read_plan

    plan = tmp_path / "plan.toml"

    assert run_command(["draft", "--variables", "9", "-o", str(plan), "--quiet"]) == 0
    text = plan.read_text()
    assert read_plan(plan).conditions[0].networks["variables"] == 9
    assert run_command(["draft", "--variables", "12", "-o", str(plan)]) == 2

    assert plan.read_text() == text
    assert "exists already" in capsys.readouterr().err


def test_a_learner_is_applied_to_a_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`network sample` and `learn` go from a published network to a graph file, the same for one seed."""
    rows, first, second = tmp_path / "rows.csv", tmp_path / "one.csv", tmp_path / "two.csv"
    assert (
        run_command(["network", "sample", "sprinkler", "--rows", "4000", "--seed", "3", "-o", str(rows)]) == 0
    )

    for graph in (first, second):
        options = ["--method", "hill-climbing", "--set", "restarts=2", "--seed", "1", "-o", str(graph)]
        assert run_command(["learn", str(rows), *options]) == 0

    assert first.read_text() == second.read_text()
    assert first.read_text().startswith("source,target,kind\n")


REPEATS = """
from generators.graph import Graph

def learn(data, *, knowledge=None):
    "Answer with the arcs that were told."
    return Graph(data.names, knowledge.arcs)
"""


def test_a_learner_is_told_what_a_file_says(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`learn --knowledge` reads arcs, excluded and stages by the names of the data file."""
    rows, known = tmp_path / "rows.csv", tmp_path / "known.toml"
    (tmp_path / "own.py").write_text(REPEATS)
    run_command(["network", "sample", "sprinkler", "--rows", "20", "--seed", "3", "-o", str(rows), "--quiet"])
    known.write_text('arcs = [["rain", "wet_grass"]]\nstages = [["cloudy"], ["rain", "sprinkler"]]\n')
    method = f"{tmp_path / 'own.py'}:learn"

    document = json_of(capsys, "learn", str(rows), "--method", method, "--knowledge", str(known))

    assert isinstance(document, dict)
    assert document["edges"] == [["rain", "wet_grass", "directed"]]


@pytest.mark.parametrize(
    ("method", "text", "expected"),
    [
        ("no-arcs", "arcs = []", "no-arcs: takes no knowledge"),
        ("own", 'arcs = [["rain", "wet_gras"]]', "'wet_gras' is not a variable. Did you mean 'wet_grass'?"),
        ("own", 'arc = [["rain", "wet_grass"]]', "arc: unknown key. Did you mean 'arcs'?"),
        ("own", "arcs = [", "known.toml:1:9: Invalid value"),
        (
            "own",
            'arcs = [["rain", "cloudy"]]\nstages = [["cloudy"], ["rain"]]',
            "arcs lead from 'rain', which stands in stages[2], to 'cloudy', which stands in stages[1].",
        ),
    ],
)
def test_wrong_knowledge_is_one_line_and_exit_code_2(
    method: str, text: str, expected: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """What is wrong is said with the file, or the method's name, and nothing is learned."""
    rows, known = tmp_path / "rows.csv", tmp_path / "known.toml"
    (tmp_path / "own.py").write_text(REPEATS)
    run_command(["network", "sample", "sprinkler", "--rows", "20", "--seed", "3", "-o", str(rows), "--quiet"])
    known.write_text(text)
    method = f"{tmp_path / 'own.py'}:learn" if method == "own" else method
    capsys.readouterr()

    assert run_command(["learn", str(rows), "--method", method, "--knowledge", str(known)]) == 2

    captured = capsys.readouterr()
    assert expected in captured.err
    assert len(captured.err.splitlines()) == 1
    assert captured.out == ""


def test_a_listed_learner_says_whether_it_takes_knowledge(capsys: pytest.CaptureFixture[str]) -> None:
    """`list learners NAME` has it among the facts."""
    document = json_of(capsys, "list", "learners", "no-arcs")

    assert isinstance(document, dict)
    assert document["takes_knowledge"] is False
    run_command(["list", "learners", "no-arcs"])
    assert "takes_knowledge: False" in capsys.readouterr().out


def test_a_study_says_how_the_real_file_differs(
    study: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """`learn --from` names rows and variables that were not rehearsed."""
    rows = tmp_path / "rows.csv"
    run_command(
        ["network", "sample", "chest-clinic", "--rows", "500", "--seed", "3", "-o", str(rows), "--quiet"]
    )

    document = json_of(capsys, "learn", str(rows), "--from", str(study), "--label", "pc", "--seed", "1")

    assert isinstance(document, dict)
    assert "The file has 500 rows; 60 to 120 were rehearsed." in document["notes"]
    assert "The file has 8 variables; 4 and 6 were rehearsed." in document["notes"]


def test_two_graph_files_are_scored(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`score --json` has one key per measure, and the reasons of those that are undefined."""
    (tmp_path / "truth.csv").write_text("source,target,kind\na,b,directed\nb,c,directed\n")
    (tmp_path / "learned.csv").write_text("source,target,kind\na,b,directed\nc,b,directed\n")

    document = json_of(capsys, "score", str(tmp_path / "truth.csv"), str(tmp_path / "learned.csv"))

    # Chain against collider: DAG distance 1, class distance 2 (check by hand, Tsamardinos et al. 2006).
    assert isinstance(document, dict)
    assert (document["dag_shd"], document["class_shd"]) == (1.0, 2.0)
    assert document["direction_recall"] is None
    assert document["undefined"]["direction_recall"].startswith("truth: ")


def test_networks_are_generated_converted_and_shown(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A network goes through BIF and JSON unchanged, to the bit."""
    bif, text = tmp_path / "n.bif", tmp_path / "n.json"

    made = json_of(capsys, "network", "generate", "--variables", "7", "--seed", "4", "-o", str(bif))
    converted = json_of(capsys, "network", "convert", str(bif), str(text))
    shown = json_of(capsys, "network", "show", str(text))

    assert isinstance(made, dict)
    assert isinstance(converted, dict)
    assert isinstance(shown, dict)
    assert made["key"] == converted["key"] == shown["key"]
    assert len(shown["variables"]) == 7


@pytest.mark.parametrize("category", ["learners", "topologies", "cpts", "measures", "networks"])
def test_everything_registered_is_listed_with_its_source(
    category: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Each listed thing has a name, a summary and a reference."""
    records = json_of(capsys, "list", category)

    assert isinstance(records, list)
    assert records
    for record in records:
        assert record["name"]
        assert record["summary"]
        assert record["reference"]


def test_a_missing_ledger_is_one_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A command on a study that was never run says which ledger is missing."""
    assert run_command(["report", str(tmp_path / "nothing.toml")]) == 2
    assert "nothing.ledger: there is no such ledger" in capsys.readouterr().err


def test_the_overview_lists_every_command() -> None:
    """What the overview lists can be imported."""
    import click

    context = click.Context(cli)

    assert [name for name in COMMANDS if cli.get_command(context, name) is None] == []
