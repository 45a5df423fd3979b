"""Graphs in the DOT language of Graphviz: written with quotes, read back in the subset that is written.

    digraph {
      "rain";
      "wet";
      "wind";
      "rain" -> "wet";
      "wet" -> "wind" [dir=none];
    }

The attribute ``dir=none`` marks an undirected edge. A reader with a full grammar of DOT is not meant:
whatever else the language has is refused by name.
"""

from __future__ import annotations

import re

from generators.files.scanner import END, QUOTED, WORD, Scanner, Token, token_pattern
from generators.files.text import shown
from generators.graph import DIRECTED, UNDIRECTED, Graph

_TOKENS = token_pattern(
    word=r"[A-Za-z_\x80-\U0010ffff][0-9A-Za-z_\x80-\U0010ffff]*+|-?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)",
    quoted=r'"(?s:[^"\\]|\\.)*+"',
    symbol=r"->|--|[{}\[\]=;,:]",
)
_ESCAPE = re.compile(r"\\(.)", re.DOTALL)
_KEYWORDS = frozenset({"node", "edge", "graph", "digraph", "subgraph", "strict"})


def parse_dot(text: str, where: str) -> Graph:
    """Read a graph from the text of a DOT file.

    Raises
    ------
    InputError
        ``FILE:LINE:COLUMN: what was expected, what was found``.

    Examples
    --------
    >>> parse_dot('digraph { wind; rain -> wet; wet -> "wind chill" [dir=none]; }', "g.dot")
    Graph(4 variables: rain -> wet, wet - wind chill)
    """
    scanner = _DotScanner(text, where, _TOKENS)
    scanner.require("digraph")
    if not scanner.at("{"):
        scanner.name()
    scanner.require("{")
    names: dict[str, None] = {}
    pairs: set[frozenset[str]] = set()
    edges: dict[str, list[tuple[str, str]]] = {DIRECTED: [], UNDIRECTED: []}
    while not scanner.take("}"):
        here = scanner.token
        source = scanner.name()
        names[source] = None
        if scanner.take("->"):
            target = scanner.name()
            names[target] = None
            pair = frozenset((source, target))
            if len(pair) < 2:
                raise scanner.fault(
                    f"an edge must join two different variables, found {shown(source)} twice.", here.offset
                )
            if pair in pairs:
                raise scanner.fault(
                    f"a second edge between {shown(source)} and {shown(target)}.", here.offset
                )
            pairs.add(pair)
            edges[scanner.kind()].append((source, target))
        scanner.require(";")
    if scanner.token.kind != END:
        raise scanner.expected("the end of the file")
    if not names:
        raise scanner.fault("expected at least one variable, found none.", 0)
    return Graph.from_edges(list(names), edges[DIRECTED], edges[UNDIRECTED])


class _DotScanner(Scanner):
    def name(self) -> str:
        token = self.token
        plain = token.kind == WORD and token.text.lower() not in _KEYWORDS
        if not plain and (token.kind != QUOTED or not token.text):
            raise self.expected("a variable's name")
        self.advance()
        return self._unescaped(token) if token.kind == QUOTED else token.text

    def kind(self) -> str:
        if not self.take("["):
            return DIRECTED
        for part in ("dir", "=", "none", "]"):
            if not self.take(part):
                raise self.fault(
                    f"expected [dir=none] for an undirected edge, found {self.token}.", self.token.offset
                )
        return UNDIRECTED

    def _unescaped(self, token: Token) -> str:
        for escape in _ESCAPE.finditer(token.text):
            if escape[1] not in ('"', "\\"):
                raise self.fault(
                    f'expected \\" or \\\\ behind a backslash, found {shown(escape[1])}.',
                    token.offset + 1 + escape.start(),
                )
        return _ESCAPE.sub(r"\1", token.text)


def dot_text(graph: Graph) -> str:
    """Return the text of a DOT file, variables in the graph's order.

    Examples
    --------
    >>> print(dot_text(Graph.from_edges(["a", "b"], undirected=[("a", "b")])), end="")
    digraph {
      "a";
      "b";
      "a" -> "b" [dir=none];
    }
    """
    quoted = {name: '"' + name.replace("\\", "\\\\").replace('"', '\\"') + '"' for name in graph.names}
    lines = [f"  {name};" for name in quoted.values()]
    for source, target, kind in graph.edges():
        mark = " [dir=none]" if kind == UNDIRECTED else ""
        lines.append(f"  {quoted[source]} -> {quoted[target]}{mark};")
    return "\n".join(["digraph {", *lines, "}"]) + "\n"
