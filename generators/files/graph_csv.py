"""Graphs as an edge list in CSV: the header ``source,target,kind``, then one row per edge.

The kind is ``directed`` or ``undirected``. A row with an empty target and kind names a variable, which
is how one without edges gets into the file. Variables come in the order of their first appearance.
"""

from __future__ import annotations

from generators.errors import InputError
from generators.files.text import csv_field, csv_rows, shown
from generators.graph import DIRECTED, UNDIRECTED, Graph

HEADER = ["source", "target", "kind"]


def parse_graph_csv(text: str, where: str) -> Graph:
    r"""Read a graph from the text of a CSV file.

    Raises
    ------
    InputError
        ``FILE:LINE: what was found, what is accepted``.

    Examples
    --------
    >>> parse_graph_csv("source,target,kind\nrain,wet,directed\nwind,,\n", "g.csv")
    Graph(3 variables: rain -> wet)
    """
    rows = csv_rows(text, where)
    line, header = next(rows, (1, []))
    if header != HEADER:
        found = shown(",".join(header)) if header else "nothing"
        raise InputError(f"{where}:{line}: expected the header {','.join(HEADER)!r}, found {found}.")
    names: dict[str, None] = {}
    lines: dict[frozenset[str], int] = {}
    alone: set[str] = set()
    edges: dict[str, list[tuple[str, str]]] = {DIRECTED: [], UNDIRECTED: []}
    for line, row in rows:
        source, target, kind = _checked(row, f"{where}:{line}")
        names[source] = None
        if not target:
            if source in alone:
                raise InputError(f"{where}:{line}: the variable {shown(source)} stands alone a second time.")
            alone.add(source)
            continue
        names[target] = None
        first = lines.setdefault(frozenset((source, target)), line)
        if first != line:
            raise InputError(
                f"{where}:{line}: a second edge between {shown(source)} and {shown(target)}; "
                f"one stands on line {first}."
            )
        edges[kind].append((source, target))
    if not names:
        raise InputError(f"{where}: expected at least one variable behind the header, found none.")
    return Graph.from_edges(list(names), edges[DIRECTED], edges[UNDIRECTED])


def _checked(row: list[str], place: str) -> list[str]:
    if len(row) != len(HEADER):
        raise InputError(f"{place}: expected {len(HEADER)} fields, found {len(row)}.")
    source, target, kind = row
    if not source:
        raise InputError(f"{place}: expected a variable's name as source, found an empty field.")
    if target and kind not in (DIRECTED, UNDIRECTED):
        raise InputError(f"{place}: expected the kind {DIRECTED!r} or {UNDIRECTED!r}, found {shown(kind)}.")
    if kind and not target:
        raise InputError(f"{place}: expected a target for the {shown(kind)} edge, found an empty field.")
    if source == target:
        raise InputError(f"{place}: an edge must join two different variables, found {shown(source)} twice.")
    return row


def graph_csv_text(graph: Graph) -> str:
    """Return the text of a CSV file, sources in the graph's order.

    Examples
    --------
    >>> print(graph_csv_text(Graph.from_edges(["wind", "rain", "wet"], [("rain", "wet")])), end="")
    source,target,kind
    wind,,
    rain,wet,directed
    """
    rows: dict[str, list[list[str]]] = {name: [] for name in graph.names}
    for source, target, kind in graph.edges():
        rows[source].append([source, target, kind])
    joined = {end for source, target, _ in graph.edges() for end in (source, target)}
    lines = [HEADER]
    for name in graph.names:
        lines += rows[name] if name in joined else [[name, "", ""]]
    return "".join(",".join(map(csv_field, line)) + "\n" for line in lines)
