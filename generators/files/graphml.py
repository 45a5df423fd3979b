"""Graphs as GraphML (Brandes et al. 2002), by way of networkx.

An undirected edge is written as arcs in both directions, which any reader of directed graphs takes.
On reading, an edge attribute ``kind`` (``directed`` or ``undirected``) says it as well, and so does a
file whose edges are all undirected.
"""

from __future__ import annotations

import re
import warnings
from typing import TYPE_CHECKING
from xml.etree.ElementTree import ParseError

from generators.errors import InputError
from generators.files.text import shown
from generators.graph import DIRECTED, UNDIRECTED, Graph

if TYPE_CHECKING:
    import networkx as nx

# A document type may declare entities that swell to any size or fetch other files.
_DECLARATION = re.compile(r"<!(?:DOCTYPE|ENTITY)", re.IGNORECASE)
_NOT_XML = re.compile("[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")


def parse_graphml(text: str, where: str) -> Graph:
    """Read a graph from the text of a GraphML file.

    Raises
    ------
    InputError
        If the text is no GraphML, declares a document type or entities, has two edges for a pair, or a
        kind that is not known.

    Examples
    --------
    >>> parse_graphml(graphml_text(Graph.from_edges("ab", undirected=[("a", "b")])), "g.graphml")
    Graph(2 variables: a - b)
    """
    import networkx as nx

    declaration = _DECLARATION.search(text)
    if declaration:
        line = text.count("\n", 0, declaration.start()) + 1
        raise InputError(f"{where}:{line}: a document type or entity declaration is not accepted.")
    if not text.strip():
        raise InputError(f"{where}: expected GraphML, found an empty file.")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # on drawing details, which are none of a graph's edges
            parsed = nx.parse_graphml(text, node_type=_node)  # type: ignore[call-overload]  # any callable is taken
    except ParseError as error:
        line, column = error.position
        raise InputError(f"{where}:{line}:{column + 1}: not XML ({str(error).partition(':')[0]}).") from None
    except Exception as error:  # networkx answers a malformed file with whatever its parts raise
        raise InputError(
            f"{where}: not GraphML of a plain graph ({shown(str(error) or type(error).__name__)})."
        ) from None
    try:
        return Graph.from_networkx(_arcs(parsed))
    except InputError as error:
        raise InputError(*(f"{where}: {fault}." for fault in error.faults)) from None


def _node(identifier: str | None) -> str:
    if not identifier:
        raise ValueError("a node or an edge's end without an id")
    return identifier


def _arcs(parsed: nx.Graph[str]) -> nx.DiGraph[str]:
    import networkx as nx

    usual = parsed.graph.get("edge_default", {}).get("kind", DIRECTED if parsed.is_directed() else UNDIRECTED)
    arcs: nx.DiGraph[str] = nx.DiGraph()
    given: dict[tuple[str, str], str] = {}
    arcs.add_nodes_from(parsed.nodes)
    for source, target, attributes in parsed.edges(data=True):
        kind = attributes.get("kind", usual)
        if kind not in (DIRECTED, UNDIRECTED):
            raise InputError(
                f"the edge {shown(source)} - {shown(target)} has the kind {shown(str(kind))}; "
                f"accepted: {DIRECTED}, {UNDIRECTED}"
            )
        if kind == DIRECTED and not parsed.is_directed():
            raise InputError(f"the edge {shown(source)} - {shown(target)} is directed in an undirected graph")
        if (source, target) in given or given.get((target, source), kind) != kind:
            raise InputError(f"the pair {shown(source)}, {shown(target)} has more than one edge")
        given[source, target] = kind
        arcs.add_edge(source, target)
        if kind == UNDIRECTED:
            arcs.add_edge(target, source)
    if not arcs:
        raise InputError("expected at least one node, found none")
    return arcs


def graphml_text(graph: Graph) -> str:
    """Return the text of a GraphML file, nodes in the graph's order.

    Raises
    ------
    InputError
        If a name holds a character that XML cannot hold.

    Examples
    --------
    >>> graphml_text(Graph.from_edges(["rain"])).splitlines()[-3].strip()
    '<node id="rain" />'
    """
    import networkx as nx

    for name in graph.names:
        if _NOT_XML.search(name):
            raise InputError(f"GraphML cannot hold the name {shown(name)}: no control character.")
    return "\n".join(nx.generate_graphml(graph.to_networkx())) + "\n"
