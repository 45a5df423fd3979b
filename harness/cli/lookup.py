"""Commands to look things up: list, and network generate, show, convert, sample."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from generators.errors import InputError
from harness.cli.output import examples, print_json, say, seed_or_drawn, shared_options, width

if TYPE_CHECKING:
    from generators.network import Network

SEED = click.option("--seed", type=click.IntRange(0), help="Drawn and printed if absent.")


@click.command("list", epilog=examples("arcassay list", "arcassay list learners pc"))
@click.argument("category", required=False)
@click.argument("name", required=False)
@shared_options
def list_(category: str | None, name: str | None, as_json: bool, quiet: bool) -> None:
    """Show what is registered: learners, topologies, cpts, measures or networks.

    With a NAME, everything about one of them: settings, accepted values, defaults, reference.
    """
    from harness.studies.listing import CATEGORIES, find_record, listed

    if name is not None and category is not None:
        record = find_record(category, name)
        print_json(record) if as_json else click.echo(_record_text(record))
        return
    found = {own: listed(own) for own in ([category] if category else CATEGORIES)}
    if as_json:
        print_json(found[category] if category else found)
        return
    for title, records in found.items():
        click.echo(f"{title}:")
        wide = max(len(record["name"]) for record in records)
        for record in records:
            click.echo(_folded(f"  {record['name']:{wide}}  ", record["summary"]))


@click.group()
def network() -> None:
    """Generate, show, convert and sample networks."""


@network.command(
    "generate",
    epilog=examples(
        "arcassay network generate --variables 20 --seed 7 -o random.bif",
        "arcassay network generate --variables 8 --topology uniform --set concentration=0.5 -o small.json",
    ),
)
@click.option("--variables", type=click.IntRange(1, 5000), required=True)
@click.option("--topology", default="random-order", show_default=True)
@click.option("--cpts", default="dirichlet", show_default=True)
@click.option("--states", default="2-3", show_default=True, help="Per variable: a number or a range.")
@click.option(
    "--set", "settings", multiple=True, metavar="KEY=VALUE", help="A setting of the topology or the CPTs."
)
@SEED
@click.option("-o", "--output", type=click.Path(path_type=Path), required=True, help="FILE.bif or FILE.json.")
@shared_options
def generate(
    variables: int,
    topology: str,
    cpts: str,
    states: str,
    settings: tuple[str, ...],
    seed: int | None,
    output: Path,
    as_json: bool,
    quiet: bool,
) -> None:
    """Draw a random network and write it."""
    import numpy as np

    from generators.cpts import CPT_FAMILIES, generate_network
    from generators.files import write_network
    from generators.topologies import TOPOLOGIES, generate_graph
    from harness.cli.learners import parse_assignments

    seed = seed_or_drawn(seed, quiet=quiet)
    given = parse_assignments(settings)
    own = set(CPT_FAMILIES[cpts].settings) if cpts in CPT_FAMILIES else set()
    of_topology = set(TOPOLOGIES[topology].settings) if topology in TOPOLOGIES else set()
    rng = np.random.default_rng(seed)
    graph = generate_graph(
        topology,
        variables=variables,
        rng=rng,
        **{k: v for k, v in given.items() if k in of_topology or k not in own},
    )
    drawn = generate_network(
        graph, cpts=cpts, states=states, rng=rng, **{k: v for k, v in given.items() if k in own}
    )
    write_network(drawn, output)
    if as_json:
        print_json({"written": str(output), "seed": seed, **_facts(drawn)})
    say(f"Wrote {output}: {_facts_line(drawn)}.", quiet=quiet or as_json)


@network.command(
    "show", epilog=examples("arcassay network show alarm.bif", "arcassay network show chest-clinic --json")
)
@click.argument("file")
@shared_options
def show(file: str, as_json: bool, quiet: bool) -> None:
    """Describe a network: a file, or the name of a published one (see `arcassay list networks`)."""
    found = _network(file)
    if as_json:
        variables = [
            {"name": name, "states": list(own), "parents": list(found.cpts[name].parents)}
            for name, own in zip(found.names, found.states, strict=True)
        ]
        print_json({**_facts(found), "variables": variables})
        return
    click.echo(f"{_facts_line(found)}.")
    wide = max(len(name) for name in found.names)
    for name, own in zip(found.names, found.states, strict=True):
        parents = found.cpts[name].parents
        click.echo(
            _folded(
                f"  {name:{wide}}  ", " | ".join(own) + (f"  from {', '.join(parents)}" if parents else "")
            )
        )


@network.command(
    "convert",
    epilog=examples(
        "arcassay network convert alarm.bif alarm.json", "arcassay network convert chest-clinic clinic.bif"
    ),
)
@click.argument("source")
@click.argument("target", type=click.Path(path_type=Path))
@shared_options
def convert(source: str, target: Path, as_json: bool, quiet: bool) -> None:
    """Write a network in another format, or its graph alone (.csv, .graphml, .dot)."""
    from generators.files import GRAPH_FORMATS, write_graph, write_network

    found = _network(source, quiet)
    if any(target.name.lower().endswith(ending) for ending in GRAPH_FORMATS):
        write_graph(found.graph, target)
    else:
        write_network(found, target)
    if as_json:
        print_json({"written": str(target), **_facts(found)})
    say(f"Wrote {target}: {_facts_line(found)}.", quiet=quiet or as_json)


@network.command(
    "sample",
    epilog=examples(
        "arcassay network sample alarm.bif --rows 1000 --seed 3 -o rows.csv",
        "arcassay network sample burglary --rows 50 -o rows.csv",
    ),
)
@click.argument("file")
@click.option("--rows", type=click.IntRange(0, 10**9), required=True)
@SEED
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), required=True, help="FILE.csv or FILE.csv.gz."
)
@shared_options
def sample(file: str, rows: int, seed: int | None, output: Path, as_json: bool, quiet: bool) -> None:
    """Draw independent rows from a network and write them."""
    import numpy as np

    from generators.files import write_data

    found = _network(file, quiet)
    seed = seed_or_drawn(seed, quiet=quiet)
    write_data(found.sample(rows, rng=np.random.default_rng(seed)), output)
    if as_json:
        print_json({"written": str(output), "seed": seed, "rows": rows})
    say(f"Wrote {rows:,} rows of {len(found.names)} variables to {output}.", quiet=quiet or as_json)


def _network(file: str, quiet: bool = True) -> Network:
    from generators.catalogue import CATALOGUE, published_network
    from generators.files import NETWORK_FORMATS, read_network_with_notes
    from generators.settings import nearest

    if any(file.lower().endswith(ending) for ending in NETWORK_FORMATS):
        found, notes = read_network_with_notes(file)
        for note in notes:
            say(note, quiet=quiet)
        return found
    if file in CATALOGUE:
        return published_network(file)
    hint = nearest(file, CATALOGUE)
    raise InputError(
        f"{file}: is neither a network file ({', '.join(NETWORK_FORMATS)}) nor a published network "
        f"({', '.join(CATALOGUE)}).{hint}"
    )


def _facts(found: Network) -> dict[str, Any]:
    return {
        "n_variables": len(found.names),
        "n_arcs": found.graph.n_edges,
        "n_free_parameters": found.n_free,
        "key": found.key().hex(),
    }


def _facts_line(found: Network) -> str:
    return f"{len(found.names)} variables, {found.graph.n_edges} arcs, {found.n_free} free parameters"


def _folded(start: str, text: str) -> str:
    indent = " " * min(len(start), 24)
    return (
        textwrap.fill(text, width(), initial_indent=start, subsequent_indent=indent)
        if text
        else start.rstrip()
    )


def _record_text(record: dict[str, Any]) -> str:
    lines = [record["name"], ""]
    lines.append(str(record.get("text") or record.get("summary") or ""))
    for key, value in record.items():
        if key not in ("name", "text", "summary", "settings") and value not in ("", None):
            lines.append(_folded(f"{key}: ", str(value)))
    if record.get("settings"):
        lines += ["", "Settings:"]
        for setting in record["settings"]:
            default = "required" if setting["required"] else f"default {setting['default']}"
            lines.append(_folded(f"  {setting['name']}  ", f"{setting['accepted']}; {default}"))
    return "\n".join(lines)
