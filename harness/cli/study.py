"""Commands on studies: demo, draft, check, run, report, export, status, rerun."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from generators.errors import InputError
from harness.cli.output import complain, examples, print_json, say, shared_options, use_colour, width

if TYPE_CHECKING:
    from harness.report.answers import Answers
    from harness.studies.running import RunSummary

STUDY = click.argument("study", type=click.Path(path_type=Path))
LEDGER = click.option(
    "--ledger",
    type=click.Path(path_type=Path),
    help="The ledger, where it is not NAME.ledger beside NAME.toml.",
)
WORKERS = click.option(
    "--workers", type=click.IntRange(1, 1024), help="Runs at a time; one per core if not given."
)


@click.command(epilog=examples("arcassay demo", "arcassay demo --folder my-demo --workers 1"))
@click.option(
    "--folder",
    type=click.Path(path_type=Path, file_okay=False),
    default=Path("arcassay-demo"),
    show_default=True,
    help="Where the plan, the ledger and the report go.",
)
@WORKERS
@shared_options
def demo(folder: Path, workers: int | None, as_json: bool, quiet: bool) -> int:
    """Run the packaged demonstration, and write its report.

    An apiary's winter-loss survey, invented for this purpose: a dozen variables, seven learners, a
    hundred networks of their kind. About a minute on two cores; the first time also one to two of compiling.
    """
    from harness.studies.demonstration import write_demo_plan

    plan = write_demo_plan(folder)
    say(f"The demonstration is in {folder}: an invented survey of an apiary's winter losses.", quiet=quiet)
    return _run_and_report(plan, None, workers, folder / "report.html", as_json, quiet)


@click.command(
    epilog=examples("arcassay draft --variables 12 -o plan.toml", "arcassay draft --variables 40 > plan.toml")
)
@click.option(
    "--variables", type=click.IntRange(2, 5000), required=True, help="How many variables the study has."
)
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), help="The plan to write; standard output if absent."
)
@shared_options
def draft(variables: int, output: Path | None, as_json: bool, quiet: bool) -> None:
    """Write a commented plan that passes `check`, to be adapted."""
    from generators.files.atomic import atomic_write
    from harness.plan.draft import draft_plan

    text = draft_plan(variables)
    if output is None:
        print_json({"plan": text}) if as_json else click.echo(text, nl=False)
        return
    if output.exists():
        raise InputError(f"{output}: exists already; it was left as it is")
    atomic_write(output, text)
    if as_json:
        print_json({"written": str(output)})
    say(f"Wrote {output}. Next: arcassay check {output}", quiet=quiet or as_json)


@click.command(epilog=examples("arcassay check plan.toml", "arcassay check plan.toml --json"))
@click.argument("plan", type=click.Path(path_type=Path))
@WORKERS
@shared_options
def check(plan: Path, workers: int | None, as_json: bool, quiet: bool) -> None:
    """Validate a plan; say what it expands to, and how long it takes after a probe of at most 10 s."""
    from harness.plan.schema import read_plan
    from harness.studies.checking import check_plan

    found = check_plan(read_plan(plan), n_workers=workers)
    if as_json:
        print_json(found.document())
        return
    for line in found.lines():
        click.echo(line)


@click.command(epilog=examples("arcassay run plan.toml", "arcassay run plan.toml --workers 4 --quiet"))
@click.argument("plan", type=click.Path(path_type=Path))
@LEDGER
@WORKERS
@shared_options
def run(plan: Path, ledger: Path | None, workers: int | None, as_json: bool, quiet: bool) -> int:
    """Run what the ledger lacks of a plan, and end with the first screen of the report.

    Run it again to resume: nothing that is in the ledger is done twice. Ctrl-C once finishes what is
    running, twice stops at once; both leave a ledger that resumes.
    """
    return _run_and_report(plan, ledger, workers, None, as_json, quiet)


@click.command(
    epilog=examples(
        "arcassay report plan.toml", "arcassay report plan.ledger -o winter.html --figures figures"
    )
)
@STUDY
@LEDGER
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), help="The page to write; NAME.html if absent."
)
@click.option("--figures", type=click.Path(path_type=Path), help="A folder for each figure as an SVG file.")
@shared_options
def report(
    study: Path, ledger: Path | None, output: Path | None, figures: Path | None, as_json: bool, quiet: bool
) -> None:
    """Write the self-contained report of a study, and print its first screen."""
    from harness.studies.reading import find_ledger

    found = find_ledger(study, ledger)
    _report(found, output or found.with_suffix(".html"), as_json, quiet, figures)


@click.command(
    epilog=examples("arcassay export plan.toml -o runs.csv", "arcassay export plan.toml --table conditions")
)
@STUDY
@LEDGER
@click.option("--table", type=click.Choice(["runs", "conditions"]), default="runs", show_default=True)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    help="FILE.csv or FILE.parquet; CSV on standard output if absent.",
)
@shared_options
def export(
    study: Path, ledger: Path | None, table: str, output: Path | None, as_json: bool, quiet: bool
) -> None:
    """Write a table of a study: every run, or every condition with its learners."""
    from harness.studies.exporting import export_table, table_text
    from harness.studies.reading import find_ledger, read_study

    found = read_study(find_ledger(study, ledger))
    if output is None:
        if as_json:
            raise InputError(
                "export: --json needs -o FILE; without it the table itself goes to standard output"
            )
        click.echo(table_text(found, table), nl=False)
        return
    n_rows = export_table(found, table, output)
    if as_json:
        print_json({"written": str(output), "rows": n_rows})
    say(f"Wrote {n_rows:,} rows to {output}.", quiet=quiet or as_json)


@click.command(epilog=examples("arcassay status plan.toml", "arcassay status plan.ledger --json"))
@STUDY
@LEDGER
@shared_options
def status(study: Path, ledger: Path | None, as_json: bool, quiet: bool) -> None:
    """Say what a study has, what it lacks, and how its runs ended."""
    from harness.studies.reading import find_ledger, read_study
    from harness.studies.standing import standing_of

    standing = standing_of(read_study(find_ledger(study, ledger)))
    if as_json:
        print_json(standing.document())
        return
    for line in standing.lines():
        click.echo(line)


@click.command(
    epilog=examples("arcassay rerun plan.toml 3fa29c01d7be", "arcassay rerun plan.toml 3fa29c01d7be --json")
)
@click.argument("study", type=click.Path(path_type=Path))
@click.argument("run_name", metavar="RUN")
@LEDGER
@shared_options
def rerun(study: Path, run_name: str, ledger: Path | None, as_json: bool, quiet: bool) -> int:
    """Do one stored run again in this process, without limits, and compare.

    RUN is the name in the first column of `export --table runs`. Exit code 1 if the graph differs.
    """
    from harness.studies.reading import find_ledger, read_study
    from harness.studies.rerunning import do_again

    again = do_again(read_study(find_ledger(study, ledger)), run_name)
    if as_json:
        print_json(again.document())
    else:
        for line in again.lines():
            click.echo(line)
    return 0 if again.is_same else 1


def _run_and_report(
    plan: Path, ledger: Path | None, workers: int | None, page: Path | None, as_json: bool, quiet: bool
) -> int:
    from harness.cli.live import LiveWatcher
    from harness.plan.schema import read_plan
    from harness.studies.running import ledger_path, run_plan

    read = read_plan(plan)
    place = ledger or ledger_path(plan)
    for note in read.notes:
        say(f"Note: {note}", quiet=quiet)
    summary = run_plan(read, place, n_workers=workers, watcher=LiveWatcher(quiet))
    _say_ending(summary, plan, quiet)
    if summary.was_stopped:
        if as_json:
            print_json(
                {"stopped": True, "done": summary.n_done, "asked": summary.n_asked, "ledger": str(place)}
            )
        return 130
    _report(place, page, as_json, quiet)
    return 0


def _say_ending(summary: RunSummary, plan: Path, quiet: bool) -> None:
    from harness.execution.progress import time_span

    if summary.was_stopped:
        complain(
            f"stopped with {summary.n_done:,} of {summary.n_asked:,} runs done. "
            f"To resume: arcassay run {plan}"
        )
    elif summary.n_asked:
        say(
            f"{summary.n_done:,} runs in {time_span(summary.seconds)}, kept in {summary.ledger}.", quiet=quiet
        )


def _report(ledger: Path, page: Path | None, as_json: bool, quiet: bool, figures: Path | None = None) -> None:
    from generators.files.atomic import atomic_write
    from harness.report.answers import answers_json, build_answers
    from harness.report.page import render_page
    from harness.report.text import render_text
    from harness.studies.reading import read_study

    study = read_study(ledger)
    answers = build_answers(study.runs, study.facts)
    if page is not None:
        atomic_write(page, render_page(answers))
    if figures is not None:
        _write_figures(answers, figures, quiet)
    if as_json:
        document: dict[str, Any] = answers_json(answers)
        print_json(document if page is None else {**document, "page": str(page)})
        return
    click.echo(render_text(answers, width=width(), color=use_colour()), nl=False)
    if page is None:
        say(f"\nThe whole report: arcassay report {ledger}", quiet=quiet)
    else:
        say(f"\nThe report: {page}", quiet=quiet)


def _write_figures(answers: Answers, folder: Path, quiet: bool) -> None:
    from generators.files.atomic import atomic_write
    from harness.report.figures import figure_file

    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: the folder cannot be made ({error.strerror})") from None
    drawn = [figure for condition in answers.conditions for figure in condition.figures] + list(
        answers.figures
    )
    for figure in drawn:
        atomic_write(folder / f"{figure.key}.svg", figure_file(figure))
    say(f"Wrote {len(drawn)} figures to {folder}.", quiet=quiet)
