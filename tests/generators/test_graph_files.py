"""Graph files: CSV, GraphML and DOT, and the choice of the format by the ending."""

from __future__ import annotations

import csv
import io
import re
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators.errors import InputError
from generators.files import GRAPH_FORMATS, read_graph, write_graph
from generators.files.dot import dot_text, parse_dot
from generators.files.graph_csv import graph_csv_text, parse_graph_csv
from generators.files.graphml import graphml_text, parse_graphml
from generators.graph import Graph

FORMATS = (".csv", ".graphml", ".dot")
ODD_NAMES = [
    'say "x"',
    "a,b",
    "a\nb",
    "\r",
    "\\",
    'a\\"',
    "<5",
    "&amp;",
    "node",
    "é",
    " ",
    "\u2028",
    "0",
    "dir=none",
]
JUNK = [*'"{}[]<>/,;a9\\\n', "->", "kind", "directed", "<!ENTITY"]


@st.composite
def graphs(draw: st.DrawFn) -> Graph:
    """Give graphs of one to five variables with odd names and any mix of edges."""
    text = st.text(st.characters(exclude_categories=("Cs", "Cc", "Cn", "Co")), min_size=1, max_size=5)
    names = draw(st.lists(st.sampled_from(ODD_NAMES) | text, min_size=1, max_size=5, unique=True))
    arrow = np.zeros((len(names), len(names)), dtype=bool)
    for i in range(len(names)):
        for j in range(i):
            arrow[i, j], arrow[j, i] = draw(st.tuples(st.booleans(), st.booleans()))
    return Graph(tuple(names), arrow)


@pytest.fixture
def mixed() -> Graph:
    """Give a graph with a directed and an undirected edge and a variable without any."""
    return Graph.from_edges(["wind", "wet", "a,b", "rain"], [("rain", "wet")], [("wet", "a,b")])


@pytest.mark.parametrize("ending", FORMATS)
class TestEveryFormat:
    @given(graph=graphs())
    def test_round_trip(self, ending: str, graph: Graph) -> None:
        """A graph that was written and read is the same; CSV may give its variables in another order."""
        parse, text = GRAPH_FORMATS[ending]

        back = parse(text(graph), "file")

        assert (back.reordered(graph.names) if ending == ".csv" else back) == graph

    @given(data=st.data())
    def test_damaged(self, ending: str, data: st.DataObject) -> None:
        """A file that is cut off, or has pieces replaced, is read or refused in one line."""
        parse, text = GRAPH_FORMATS[ending]
        damaged = text(Graph.from_edges(["a", "b", "c c"], [("a", "b")], [("b", "c c")]))
        for _ in range(data.draw(st.integers(1, 3))):
            start = data.draw(st.integers(0, len(damaged)))
            end = min(len(damaged), start + data.draw(st.integers(0, 12)))
            junk = st.sampled_from([damaged[start:end] * 2, *JUNK]) | st.text(max_size=3)
            damaged = damaged[:start] + data.draw(junk) + damaged[end:]

        try:
            said = f"file: {parse(damaged, 'file')!r}".replace("\n", " ")
        except InputError as error:
            said = str(error)

        assert re.fullmatch(r"file:[^\n]+", said)

    def test_truncated_anywhere(self, ending: str, mixed: Graph) -> None:
        """A file cut off at any position is read or refused in one line."""
        parse, text = GRAPH_FORMATS[ending]
        whole = text(mixed)

        refused = 0
        for end in range(len(whole)):
            try:
                parse(whole[:end], "file")
            except InputError as error:
                refused += 1
                assert re.fullmatch(r"file:[^\n]+", str(error))  # noqa: PT017

        assert refused > len(whole) // 2

    @given(content=st.text(max_size=60))
    def test_any_text(self, ending: str, content: str) -> None:
        """Text that is no graph at all is refused in one line."""
        parse, _ = GRAPH_FORMATS[ending]

        with pytest.raises(InputError, match=r"\Afile:[^\n]+\Z"):
            parse(content, "file")

    def test_through_a_file(self, ending: str, mixed: Graph, tmp_path: Path) -> None:
        """Writing and reading by path choose the format by the ending."""
        path = tmp_path / f"graph{ending}"

        write_graph(mixed, path)

        assert read_graph(str(path)).reordered(mixed.names) == mixed
        assert [path] == list(tmp_path.iterdir())

    def test_no_variables(self, ending: str) -> None:
        """A file without any variable is refused."""
        parse, text = GRAPH_FORMATS[ending]

        with pytest.raises(InputError, match=r"expected at least one (variable|node)"):
            parse(text(Graph.from_edges([])), "file")


def test_unknown_ending(mixed: Graph, tmp_path: Path) -> None:
    """An ending of no format is refused with those that do; a network's is one for reading only."""
    with pytest.raises(
        InputError, match=r"g\.txt: a graph file must end in one of \.csv, \.graphml, \.dot, \.bif"
    ):
        read_graph(tmp_path / "g.txt")
    with pytest.raises(InputError, match=r"g\.bif: a graph file must end in one of \.csv, \.graphml, \.dot"):
        write_graph(mixed, tmp_path / "g.bif")

    assert list(tmp_path.iterdir()) == []


def faults_of(cases: dict[str, tuple[str, str]]) -> pytest.MarkDecorator:
    return pytest.mark.parametrize(("text", "message"), cases.values(), ids=cases.keys())


class TestCsv:
    def test_text(self, mixed: Graph) -> None:
        """The file is an edge list; a variable without edges has a row of its own."""
        assert list(csv.reader(io.StringIO(graph_csv_text(mixed)))) == [
            ["source", "target", "kind"],
            ["wind", "", ""],
            ["wet", "a,b", "undirected"],
            ["rain", "wet", "directed"],
        ]

    def test_order_of_first_appearance(self) -> None:
        """Variables come in the order of their first appearance, so rows that only name them fix it."""
        text = "source,target,kind\r\nc,,\r\nb,,\r\n\r\na,b,directed\r\n"

        graph = parse_graph_csv(text, "g.csv")

        assert graph == Graph.from_edges("cba", [("a", "b")])

    @faults_of(
        {
            "empty": ("", "1: expected the header 'source,target,kind', found nothing."),
            "header": ("from,to\n", "1: expected the header 'source,target,kind', found 'from,to'."),
            "fields": ("source,target,kind\na,b\n", "2: expected 3 fields, found 2."),
            "source": (
                "source,target,kind\n,b,directed\n",
                "2: expected a variable's name as source, found an empty field.",
            ),
            "target": (
                "source,target,kind\na,,directed\n",
                "2: expected a target for the 'directed' edge, found an empty field.",
            ),
            "kind": (
                "source,target,kind\na,b,\n",
                "2: expected the kind 'directed' or 'undirected', found ''.",
            ),
            "loop": (
                "source,target,kind\na,a,directed\n",
                "2: an edge must join two different variables, found 'a' twice.",
            ),
            "pair": (
                'source,target,kind\n"a\nx",b,directed\nb,"a\nx",undirected\n',
                "4: a second edge between 'b' and 'a\\nx'; one stands on line 2.",
            ),
            "alone twice": (
                "source,target,kind\na,,\na,,\n",
                "3: the variable 'a' stands alone a second time.",
            ),
            "quote": (
                'source,target,kind\n\n"a"x,b,directed\n',
                "3: not a CSV row (',' expected after '\"').",
            ),
            "open quote": ('source,target,kind\n"a,b\n', "2: not a CSV row (unexpected end of data)."),
        }
    )
    def test_faults(self, text: str, message: str) -> None:
        """Every fault is one line with the line on which its row starts."""
        with pytest.raises(InputError) as caught:
            parse_graph_csv(text, "g.csv")

        assert str(caught.value) == f"g.csv:{message}"


class TestGraphml:
    def test_any_reader_sees_the_arcs(self, mixed: Graph) -> None:
        """Any reader of GraphML gets the same arcs, an undirected edge as one in each direction."""
        read = nx.parse_graphml(graphml_text(mixed))

        assert list(read.nodes) == list(mixed.names)
        assert set(read.edges) == {("rain", "wet"), ("wet", "a,b"), ("a,b", "wet")}

    def test_kinds_as_attributes(self) -> None:
        """An edge attribute `kind` says which edges are undirected."""
        drawn: nx.DiGraph[int] = nx.DiGraph()
        drawn.add_edge(1, 2, kind="directed")
        drawn.add_edge(2, 3, kind="undirected")
        drawn.add_edge(3, 4)

        graph = parse_graphml("\n".join(nx.generate_graphml(drawn)), "g.graphml")

        assert graph == Graph.from_edges("1234", [("1", "2"), ("3", "4")], [("2", "3")])

    def test_default_kind(self) -> None:
        """The default that a file declares for `kind` holds for edges without one."""
        text = """<graphml xmlns="http://graphml.graphdrawing.org/xmlns">
            <key id="k" for="edge" attr.name="kind" attr.type="string"><default>undirected</default></key>
            <graph edgedefault="directed"><node id="a"/><node id="b"/><edge source="a" target="b"/></graph>
            </graphml>"""

        assert parse_graphml(text, "g.graphml") == Graph.from_edges("ab", undirected=[("a", "b")])

    def test_undirected_file(self) -> None:
        """All edges of an undirected graph are undirected."""
        text = "\n".join(nx.generate_graphml(nx.path_graph(3)))

        assert parse_graphml(text, "g") == Graph.from_edges("012", undirected=[("0", "1"), ("1", "2")])

    def test_entities_are_refused_before_parsing(self) -> None:
        """A document type or entity declaration is refused with its line, whatever it would expand to."""
        text = '<?xml version="1.0"?>\n<!DOCTYPE g [<!ENTITY a "aaaa">]>\n<graphml>&a;</graphml>'

        with pytest.raises(InputError) as caught:
            parse_graphml(text, "g.graphml")

        assert str(caught.value) == ("g.graphml:2: a document type or entity declaration is not accepted.")

    @faults_of(
        {
            "empty": ("", ": expected GraphML, found an empty file."),
            "not XML": ("<graphml>\n<graph></graphml>", ":2:10: not XML (mismatched tag)."),
            "other XML": (
                "<html/>",
                ": not GraphML of a plain graph ('file not successfully read as graphml').",
            ),
            "no id": (
                graphml_text(Graph.from_edges("a")).replace(' id="a"', ""),
                ': not GraphML of a plain graph ("a node or an edge\'s end without an id").',
            ),
            "unknown kind": (
                "\n".join(nx.generate_graphml(nx.DiGraph([("a", "b", {"kind": "causes"})]))),
                ": the edge 'a' - 'b' has the kind 'causes'; accepted: directed, undirected.",
            ),
            "direction without directions": (
                "\n".join(nx.generate_graphml(nx.Graph([("a", "b", {"kind": "directed"})]))),
                ": the edge 'a' - 'b' is directed in an undirected graph.",
            ),
            "two edges": (
                "\n".join(nx.generate_graphml(nx.MultiDiGraph([("a", "b"), ("a", "b")]))),
                ": the pair 'a', 'b' has more than one edge.",
            ),
            "two kinds": (
                "\n".join(
                    nx.generate_graphml(
                        nx.DiGraph([("a", "b", {"kind": "directed"}), ("b", "a", {"kind": "undirected"})])
                    )
                ),
                ": the pair 'b', 'a' has more than one edge.",
            ),
            "loop": (
                "\n".join(nx.generate_graphml(nx.DiGraph([("a", "a")]))),
                ": an edge must join two different variables, got 'a' -> 'a'.",
            ),
        }
    )
    def test_faults(self, text: str, message: str) -> None:
        """Every fault is one line."""
        with pytest.raises(InputError) as caught:
            parse_graphml(text, "g.graphml")

        assert str(caught.value) == f"g.graphml{message}"

    def test_unwritable_names(self) -> None:
        """A control character, which XML has no way to hold, is refused by the writer."""
        with pytest.raises(InputError, match=r"GraphML cannot hold the name 'bell\\x07'"):
            graphml_text(Graph.from_edges(["bell\a"]))


class TestDot:
    def test_text(self) -> None:
        """Names are quoted, with backslashes before quotes and backslashes."""
        graph = Graph.from_edges(['say "x"', "a\\", "b"], [("b", "a\\")], [('say "x"', "b")])

        assert dot_text(graph).splitlines() == [
            "digraph {",
            r'  "say \"x\"";',
            r'  "a\\";',
            '  "b";',
            r'  "say \"x\"" -> "b" [dir=none];',
            r'  "b" -> "a\\";',
            "}",
        ]

    def test_written_by_hand(self) -> None:
        """Plain names need no quotes, the graph may have a name, and comments may stand anywhere."""
        text = "/* a */ digraph g { // b\n a_1; -2.5 -> a_1; é->ü [ dir = none ]; }"

        assert parse_dot(text, "g.dot") == Graph.from_edges(
            ["a_1", "-2.5", "é", "ü"], [("-2.5", "a_1")], [("é", "ü")]
        )

    @faults_of(
        {
            "empty": ("", "1:1: expected 'digraph', found the end of the file."),
            "undirected graph": ("graph { }", "1:1: expected 'digraph', found 'graph'."),
            "semicolon": ("digraph {\n a\n b; }", "3:2: expected ';', found 'b'."),
            "chain": ("digraph { a -> b -> c; }", "1:18: expected ';', found '->'."),
            "undirected edge": ("digraph { a -- b; }", "1:13: expected ';', found '--'."),
            "keyword": ("digraph { node [shape=box]; }", "1:11: expected a variable's name, found 'node'."),
            "attribute": (
                "digraph { a -> b [color=red]; }",
                "1:19: expected [dir=none] for an undirected edge, found 'color'.",
            ),
            "direction": (
                "digraph { a -> b [dir=back]; }",
                "1:23: expected [dir=none] for an undirected edge, found 'back'.",
            ),
            "two attributes": (
                "digraph { a -> b [dir=none, dir=none]; }",
                "1:27: expected [dir=none] for an undirected edge, found ','.",
            ),
            "loop": (
                "digraph { a -> a; }",
                "1:11: an edge must join two different variables, found 'a' twice.",
            ),
            "pair": ("digraph { a -> b;\n b -> a; }", "2:2: a second edge between 'b' and 'a'."),
            "escape": (
                'digraph { "a\\n"; }',
                "1:13: expected \\\" or \\\\ behind a backslash, found 'n'.",
            ),
            "open quote": ('digraph { "a; }', "1:11: the quoted name that starts here has no end."),
            "markup": ("digraph { <b>; }", "1:11: found '<', which stands for nothing here."),
            "empty name": ('digraph { ""; }', "1:11: expected a variable's name, found ''."),
            "behind": ("digraph { a; }\n}", "2:1: expected the end of the file, found '}'."),
        }
    )
    def test_faults(self, text: str, message: str) -> None:
        """Every fault is one line with line and column."""
        with pytest.raises(InputError) as caught:
            parse_dot(text, "g.dot")

        assert str(caught.value) == f"g.dot:{message}"
