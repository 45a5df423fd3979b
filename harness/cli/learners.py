"""Commands on learners: learn, score."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from generators.errors import InputError
from harness.cli.output import examples, print_json, say, seed_or_drawn, shared_options


@click.command(
    epilog=examples(
        "arcassay learn survey.csv --method pc --set alpha=0.05 -o graph.csv",
        'arcassay learn survey.csv --from plan.toml --label "PC, 1 %" -o graph.csv',
        "arcassay learn survey.csv --method pc --knowledge known.toml -o graph.csv",
    )
)
@click.argument("data", type=click.Path(path_type=Path))
@click.option("--method", help="A built-in method, or FILE.py:NAME, or package.module:NAME.")
@click.option(
    "--set", "settings", multiple=True, metavar="KEY=VALUE", help="A setting of the method; may be repeated."
)
@click.option(
    "--from", "study", type=click.Path(path_type=Path), help="A study whose learner is to be applied."
)
@click.option("--label", help="Which learner of the study.")
@click.option(
    "--knowledge",
    type=click.Path(path_type=Path),
    help="A TOML file of what is known: arcs, excluded, stages.",
)
@click.option(
    "--seed", type=click.IntRange(0), help="Of the learner's randomness; drawn and printed if absent."
)
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), help="The graph to write: .csv, .graphml or .dot."
)
@shared_options
def learn(
    data: Path,
    method: str | None,
    settings: tuple[str, ...],
    study: Path | None,
    label: str | None,
    knowledge: Path | None,
    seed: int | None,
    output: Path | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Apply a learner to a real data file (CSV with a header; every column a variable).

    With --from, also say how the file differs from what the study rehearsed. A knowledge file says
    arcs = [["age", "income"]], excluded = [["income", "age"]], stages = [["age"], ["income"]], each as far
    as it is known. The graph holds what the
    method found in these rows; an edge is not a cause, and where health or safety is at stake it is no
    ground for a decision without a statistician and the rules of that field.
    """
    import numpy as np

    from generators.files import read_data_with_notes, write_graph
    from harness.knowledge import read_knowledge
    from harness.learners.specification import InvalidAnswer, call
    from harness.records import Declined
    from harness.studies.applying import (
        differences,
        find_specification,
        parse_settings,
        refuse_knowledge_not_taken,
        rehearsed_learner,
    )

    if (method is None) == (study is None):
        raise InputError("learn: needs either --method NAME or --from STUDY")
    rows, notes = read_data_with_notes(data)
    if study is not None:
        from harness.studies.reading import find_ledger, read_study

        if settings:
            raise InputError("learn: --set goes with --method; a study's learner has its own settings")
        facts = read_study(find_ledger(study)).facts
        learner, specification = rehearsed_learner(facts, label)
        parsed = dict(learner.settings)
        notes = (*notes, *differences(facts, rows, has_knowledge=knowledge is not None))
    else:
        assert method is not None
        if label is not None:
            raise InputError("learn: --label goes with --from")
        specification = find_specification(method)
        parsed = parse_settings(specification, parse_assignments(settings))
    known = None
    if knowledge is not None:
        refuse_knowledge_not_taken(specification)
        known = read_knowledge(knowledge, rows.names)
    seed = seed_or_drawn(seed, quiet=quiet or not specification.takes_rng)
    try:
        graph = call(specification, rows, parsed, np.random.default_rng(seed), known).graph
    except Declined as error:
        raise InputError(f"{data}: {specification.name} declined: {error}") from None
    except InvalidAnswer as error:
        raise InputError(f"{specification.name}: {error}") from None
    for note in notes:
        say(note, quiet=quiet)
    if output is not None:
        write_graph(graph, output)
    if as_json:
        edges = [list(edge) for edge in graph.edges()]
        print_json(
            {
                "method": specification.name,
                "seed": seed,
                "rows": rows.n_rows,
                "edges": edges,
                "notes": list(notes),
            }
        )
    elif output is None:
        for source, target, kind in graph.edges():
            click.echo(f"{source} {'->' if kind == 'directed' else '-'} {target}")
    else:
        say(f"Wrote {graph.n_edges} edges over {graph.n_variables} variables to {output}.", quiet=quiet)
    return 0


@click.command(
    epilog=examples("arcassay score truth.bif graph.csv", "arcassay score truth.csv graph.csv --json")
)
@click.argument("truth", type=click.Path(path_type=Path))
@click.argument("learned", type=click.Path(path_type=Path))
@shared_options
def score(truth: Path, learned: Path, as_json: bool, quiet: bool) -> None:
    """Compute all measures between a true graph or network and a learned graph.

    Both files may be graphs (.csv, .graphml, .dot) or networks (.bif, .json).
    """
    from generators.files import read_graph
    from harness.scorers.structure import score_answer
    from harness.scorers.truth import Truth

    # Two files make no claim that a learner could have declared away: a DAG's arcs are taken at their word.
    scores = score_answer(Truth.of(read_graph(truth)), read_graph(learned), directions="causal")
    if as_json:
        print_json({**scores.as_mapping(), "undefined": scores.undefined})
        return
    wide = max(len(name) for name in (*scores.values, *scores.undefined))
    for name, value in scores.values.items():
        click.echo(f"{name:{wide}}  {value:g}")
    for name, reason in scores.undefined.items():
        click.echo(f"{name:{wide}}  -  ({reason})")


def parse_assignments(texts: tuple[str, ...]) -> dict[str, Any]:
    """Read KEY=VALUE as in a plan: numbers, true, false, or text with or without quotes."""
    import tomllib

    settings: dict[str, Any] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        name = name.strip()
        if not equals or not name:
            raise InputError(f"--set: must be KEY=VALUE, got {text!r}")
        if name in settings:
            raise InputError(f"--set: {name!r} is given twice")
        try:
            settings[name] = tomllib.loads(f"value = {value}")["value"]
        except tomllib.TOMLDecodeError:
            settings[name] = value.strip()
    return settings
