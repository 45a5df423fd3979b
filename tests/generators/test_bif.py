"""The BIF reader and writer (Cozman 1996), against tables written by hand and published networks."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from generators.errors import InputError
from generators.files import read_graph, read_network, read_network_with_notes
from generators.files.bif import bif_text, parse_bif
from generators.graph import Graph
from generators.network import Cpt, Network

HEAD = """network weather {
}
variable season { type discrete [ 3 ] { dry, mid, wet }; }
variable wind { type discrete [ 2 ] { low, high }; }
variable rain { type discrete [ 2 ] { no, yes }; }
probability ( season ) { table 0.2, 0.3, 0.5; }
probability ( wind ) { table 0.6, 0.4; }
"""
ROWS = """probability ( rain | season, wind ) {
  (dry, low) 0.9, 0.1;
  (dry, high) 0.8, 0.2;
  (mid, low) 0.7, 0.3;
  (mid, high) 0.6, 0.4;
  (wet, low) 0.5, 0.5;
  (wet, high) 0.4, 0.6;
}
"""
# P(rain = yes | season, wind): axes season (3), wind (2)
P_RAIN = np.array([[0.1, 0.2], [0.3, 0.4], [0.5, 0.6]])


def rain_of(text: str) -> np.ndarray:
    network, notes = parse_bif(text, "w.bif")
    assert notes == ()
    assert network.cpts["rain"].parents == ("season", "wind")
    return network.cpts["rain"].p


class TestTables:
    def test_rows_by_states(self) -> None:
        """Rows named by the parents' states fill the axes season, wind, rain."""
        assert rain_of(HEAD + ROWS).tolist() == np.stack([1 - P_RAIN, P_RAIN], axis=-1).round(12).tolist()

    def test_table_lists_the_child_slowest(self) -> None:
        """`table` runs through the child's states slowest and the last parent's fastest."""
        table = "table 0.9, 0.8, 0.7, 0.6, 0.5, 0.4, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6;"

        p = rain_of(HEAD + f"probability ( rain | season, wind ) {{ {table} }}")

        assert p[..., 1].tolist() == P_RAIN.tolist()
        assert p.shape == (3, 2, 2)

    def test_table_of_a_child_with_more_states_than_its_parent(self) -> None:
        """The order holds where child and parent differ in their number of states."""
        text = """network n { }
            variable a { type discrete [ 2 ] { x, y }; }
            variable b { type discrete [ 3 ] { k, l, m }; }
            probability ( a ) { table 0.5, 0.5; }
            probability ( b | a ) { table 0.1, 0.4, 0.2, 0.5, 0.7, 0.1; }"""

        network, _ = parse_bif(text, "n.bif")

        assert network.cpts["b"].p.tolist() == [[0.1, 0.2, 0.7], [0.4, 0.5, 0.1]]

    def test_default_fills_the_rows_left_out(self) -> None:
        """`default` stands for every row that is not given, wherever it stands in the block."""
        block = "probability ( rain | season, wind ) { (mid, high) 0.6, 0.4; default 0.25, 0.75; "

        p = rain_of(HEAD + block + "(dry, low) 1, 0; }")

        assert p[..., 0].tolist() == [[1.0, 0.25], [0.25, 0.6], [0.25, 0.25]]

    @pytest.mark.parametrize(
        "separators", ["| season, wind", ", season, wind", "season wind", "| season wind", "|season,wind"]
    )
    def test_the_bar_is_only_a_separator(self, separators: str) -> None:
        """Older files have a comma or white space where newer ones have the bar."""
        assert rain_of(HEAD + ROWS.replace("| season, wind", separators))[..., 1].tolist() == P_RAIN.tolist()

    def test_rows_within_a_hundredth_are_renormalised(self) -> None:
        """Rows that sum to 1 within 0.01 are scaled to 1, and a note says where."""
        text = """network n { }
variable a { type discrete [ 3 ] { x, y, z }; }
variable b { type discrete [ 2 ] { x, y }; }
probability ( a ) { table 0.33, 0.33, 0.33; }
probability ( b | a ) { (x) 0.5, 0.5; (y) 0.5, 0.509; (z) 0.495, 0.5; }
"""

        network, notes = parse_bif(text, "n.bif")

        assert network.cpts["a"].p.tolist() == pytest.approx([1 / 3] * 3, rel=1e-15)
        assert network.cpts["b"].p[1].tolist() == pytest.approx([0.5 / 1.009, 0.509 / 1.009], rel=1e-15)
        assert network.cpts["b"].p[0].tolist() == [0.5, 0.5]
        assert notes == (
            "n.bif:4:15: 1 row was renormalised in the table of 'a'; "
            "the probabilities for 'a' summed to 0.99.",
            "n.bif:5:15: 2 rows were renormalised in the table of 'b'; "
            "the probabilities for (y) summed to 1.009.",
        )


class TestText:
    def test_names(self) -> None:
        """Names may be quoted, start with digits, hold <, -, dots and slashes, or be words of the format."""
        text = """network "two words" { }
            variable 2nd { type discrete [ 4 ] { <5, 5-12, Transp., Asy/Patch }; }
            variable table { type discrete[2] { "a b" property } ; }
            variable property { type discrete [ 1 ] { "//" }; }
            probability ( 2nd ) { table 0.25 0.25 0.25 0.25; }
            probability ( table ) { table .5, 5e-1; }
            probability ( property ) { table 1.; }"""

        network, _ = parse_bif(text, "n.bif")

        assert network.names == ("2nd", "table", "property")
        assert network.states == (("<5", "5-12", "Transp.", "Asy/Patch"), ("a b", "property"), ("//",))

    def test_comments_and_properties(self) -> None:
        """Comments may stand between any two words; a property is free text up to its semicolon."""
        text = """// a file
            network n { property url = http://x.org; property "a ; b"; property; }
            variable /* of two */ a { property position = (73, 165) ; type discrete [ 2 ] { x, // first
              y/* second */ }; }
            probability ( a ) { property it's { free }; table 0.5 /* , 0.1 */, 0.5; } // end"""

        network, _ = parse_bif(text, "n.bif")

        assert network.states == (("x", "y"),)
        assert network.cpts["a"].p.tolist() == [0.5, 0.5]

    def test_blocks_in_any_order(self) -> None:
        """A probability block may stand before its variable; variables keep the order of declaration."""
        lines = HEAD.splitlines(keepends=True)
        text = "".join([*lines[:2], *lines[5:], ROWS, *lines[2:5]])

        network, _ = parse_bif(text, "n.bif")

        assert network.names == ("season", "wind", "rain")
        assert network.key() == parse_bif(HEAD + ROWS, "n.bif")[0].key()

    def test_writer(self) -> None:
        """The writer names each row, quotes names that need it and writes numbers in full."""
        b = Cpt("b", ("a c",), np.array([[0.1 + 0.2, 1 - (0.1 + 0.2)], [1.0, 0.0]]))
        cpts = {"a c": Cpt("a c", (), np.array([1e-17, 1.0])), "b": b}
        network = Network(
            Graph.from_edges(["a c", "b"], [("a c", "b")]), (("<5", "table"), ("é", "x//y")), cpts
        )

        assert bif_text(network).splitlines() == [
            "network unnamed {",
            "}",
            'variable "a c" {',
            '  type discrete [ 2 ] { <5, "table" };',
            "}",
            "variable b {",
            '  type discrete [ 2 ] { é, "x//y" };',
            "}",
            'probability ( "a c" ) {',
            "  table 1e-17, 1.0;",
            "}",
            'probability ( b | "a c" ) {',
            "  (<5) 0.30000000000000004, 0.7;",
            '  ("table") 1.0, 0.0;',
            "}",
        ]

    @pytest.mark.parametrize("name", ['say "x"', "two\nlines", "bell\a", "carriage\r"])
    def test_unwritable_names(self, name: str) -> None:
        """A name with a double quote or a control character is refused by the writer."""
        cpts = {name: Cpt(name, (), np.array([1.0]))}

        with pytest.raises(InputError, match="BIF cannot hold the name"):
            bif_text(Network(Graph.from_edges([name]), (("x",),), cpts))


# What stands in the file after HEAD (seven lines), and the whole message.
FAULTS = {
    "too few": (
        "probability ( rain | season, wind ) {\n  (dry, low) 0.9;\n}",
        "9:14: expected 2 probabilities for (dry, low), found 1.",
    ),
    "too many": (
        "probability ( rain | season, wind ) {\n  (dry, low) 0.9, 0.1, 0;\n}",
        "9:14: expected 2 probabilities for (dry, low), found 3.",
    ),
    "none": (
        "probability ( rain | wind ) {\n  (low) ;\n}",
        "9:9: expected 2 probabilities for (low), found 0.",
    ),
    "table too short": (
        "probability ( rain | wind ) {\n  table 0.5, 0.5;\n}",
        "9:9: expected 4 probabilities for the table of 'rain', found 2.",
    ),
    "short default": (
        "probability ( rain | wind ) {\n  default 1;\n}",
        "9:11: expected 2 probabilities for 'default', found 1.",
    ),
    "sum": (
        "probability ( rain | wind ) {\n  (low) 0.5, 0.5;\n  (high) 0.5, 0.48;\n}",
        "10:10: the probabilities for (high) sum to 0.98, not 1.",
    ),
    "sum of a root": (
        "probability ( rain ) { table 0.5, 0.4; }",
        "8:30: the probabilities for 'rain' sum to 0.9, not 1.",
    ),
    "sum in a table": (
        "probability ( rain | wind ) {\n  table 0.5, 0.9, 0.5, 0.2;\n}",
        "9:9: the probabilities for (high) sum to 1.1, not 1.",
    ),
    "negative": ("probability ( rain ) { table 1.1, -0.1; }", "8:30: expected a probability, found '1.1'."),
    "minus": ("probability ( rain ) { table 0.9, -0.1; }", "8:35: expected a probability, found '-0.1'."),
    "not a number": ("probability ( rain ) { table nan, 1; }", "8:30: expected a probability, found 'nan'."),
    "infinite": ("probability ( rain ) { table 1e999, 1; }", "8:30: expected a probability, found '1e999'."),
    "word": (
        "probability ( rain ) { table 0.5 half; }",
        "8:34: expected a probability or ';', found 'half'.",
    ),
    "two commas": ("probability ( rain ) { table 0.5,, 0.5; }", "8:34: expected a probability, found ','."),
    "comma at the end": (
        "probability ( rain ) { table 0.5, 0.5,; }",
        "8:39: expected a probability, found ';'.",
    ),
    "unknown variable": (
        "probability ( ran ) { table 0.5, 0.5; }",
        "5:10: variable 'rain' has no probability block.",
    ),
    "unknown parent": (
        "probability ( rain | seson ) { default 0.5, 0.5; }",
        "8:22: unknown variable 'seson'. Did you mean 'season'?",
    ),
    "unknown state": (
        "probability ( rain | season ) {\n (drj) 0.5, 0.5;\n}",
        "9:3: 'drj' is not a state of 'season'. Did you mean 'dry'?",
    ),
    "states of parents": (
        "probability ( rain | season, wind ) {\n  (dry) 0.5, 0.5;\n}",
        "9:3: expected 2 states of the parents, found 1.",
    ),
    "row twice": (
        "probability ( rain | wind ) {\n (low) 0.5, 0.5;\n (high) 1, 0;\n (low) 0.5, 0.5; }",
        "11:2: a second row for (low).",
    ),
    "row missing": (
        "probability ( rain | season, wind ) {\n (dry, low) 0.5, 0.5; }",
        "8:15: the block of 'rain' has no row for (dry, high) and no default.",
    ),
    "empty block": (
        "probability ( rain ) { }",
        "8:15: the block of 'rain' has no row for 'rain' and no default.",
    ),
    "two tables": (
        "probability ( rain ) { table 0.5, 0.5;\n table 0.5, 0.5; }",
        "9:2: 'table' gives all rows and must stand alone.",
    ),
    "row and table": (
        "probability ( rain | wind ) { (low) 0.5, 0.5;\n table 1, 1, 0, 0; }",
        "9:2: 'table' gives all rows and must stand alone.",
    ),
    "table and row": (
        "probability ( rain | wind ) { table 1, 1, 0, 0;\n (low) 1, 0; }",
        "9:2: expected 'property' or '}' behind 'table', found '('.",
    ),
    "two defaults": (
        "probability ( rain | wind ) { default 1, 0;\n default 1, 0; }",
        "9:2: a second 'default'.",
    ),
    "parent twice": (
        "probability ( rain | wind, wind ) { default 1, 0; }",
        "8:28: variable 'wind' stands twice in one block.",
    ),
    "own parent": (
        "probability ( rain | rain ) { default 1, 0; }",
        "8:22: variable 'rain' stands twice in one block.",
    ),
    "two bars": (
        "probability ( rain | wind | season ) { default 1, 0; }",
        "8:27: expected a parent's name or ')', found '|'.",
    ),
    "second block": ("probability ( wind ) { table 1, 0; }", "8:15: a second probability block for 'wind'."),
    "no block": ("", "5:10: variable 'rain' has no probability block."),
    "strange word": ("belief ( rain ) { }", "8:1: expected 'variable' or 'probability', found 'belief'."),
    "second variable": (
        "variable wind { type discrete [ 1 ] { x }; }",
        "8:10: variable 'wind' is declared a second time.",
    ),
    "declared count": ("variable z { type discrete [ 3 ] { x, y }; }", "8:30: expected 3 states, found 2."),
    "no count": (
        "variable z { type discrete [ x ] { x, y }; }",
        "8:30: expected the number of states, found 'x'.",
    ),
    "huge count": (
        "variable z { type discrete [ 9999999999999999999999 ] { x }; }",
        "8:30: expected the number of states, found '9999999999999999999999'.",
    ),
    "no states": ("variable z { type discrete [ 0 ] { }; }", "8:10: variable 'z' has no state."),
    "state twice": (
        "variable z { type discrete [ 2 ] { x, x }; }",
        "8:10: variable 'z' lists the state 'x' twice.",
    ),
    "no type": ("variable z { }", "8:10: variable 'z' has no 'type discrete'."),
    "two types": (
        "variable z { type discrete [ 1 ] { x }; type discrete [ 1 ] { x }; }",
        "8:41: expected 'property' or '}', found 'type'.",
    ),
    "continuous": ("variable z { type continuous; }", "8:19: expected 'discrete', found 'continuous'."),
    "empty name": (
        'variable "" { type discrete [ 1 ] { x }; }',
        "8:10: expected a variable's name, found ''.",
    ),
    "open quote": (
        'variable "z { type discrete [ 1 ] { x }; }',
        "8:10: the quoted name that starts here has no end.",
    ),
    "open comment": ("variable /* z { type", "8:10: the comment that starts here has no end."),
    "open property": ("variable z { property x", "8:14: the property that starts here has no ';'."),
    "open block": (
        "probability ( rain ) {\n table 0.5, 0.5;",
        "9:17: expected 'property' or '}' behind 'table', found the end of the file.",
    ),
    "open rows": (
        "probability ( rain | wind ) {\n (low) 0.5, 0.5;",
        "9:17: expected 'table', 'default', 'property', '(' or '}', found the end of the file.",
    ),
    "control character": ("variable z\x01 { }", "8:11: found '\\x01', which stands for nothing here."),
    "cycle of two": (
        "variable z { type discrete [ 1 ] { x }; }\nprobability ( z | rain ) { default 1; }\n"
        "probability ( rain | z ) { default 1, 0; }",
        "10:15: the parents of 'rain' close a directed cycle: 'rain' -> 'z' -> 'rain'.",
    ),
}


@pytest.mark.parametrize(("text", "message"), FAULTS.values(), ids=FAULTS.keys())
def test_faults(text: str, message: str) -> None:
    """Every fault is one line with file, line, column, what was expected and what was found."""
    with pytest.raises(InputError) as caught:
        parse_bif(HEAD + text, "w.bif")

    assert str(caught.value) == f"w.bif:{message}"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "1:1: expected 'network' (a BIF file starts with 'network NAME {'), found the end of the file."),
        (
            "variable x { }",
            "1:1: expected 'network' (a BIF file starts with 'network NAME {'), found 'variable'.",
        ),
        ("network {", "1:9: expected the network's name, found '{'."),
        ("network n {\n", "2:1: expected 'property' or '}', found the end of the file."),
        ("network n { }", "1:14: expected at least one variable, found the end of the file."),
    ],
)
def test_faults_at_the_start(text: str, message: str) -> None:
    """A file that does not start as BIF does is refused where it goes wrong."""
    with pytest.raises(InputError) as caught:
        parse_bif(text, "w.bif")

    assert str(caught.value) == f"w.bif:{message}"


def test_cycle_over_several_blocks() -> None:
    """The block that closes a longer cycle is named, with the cycle."""
    block = "variable {0} {{ type discrete [ 1 ] {{ x }}; }}\nprobability ( {0} | {1} ) {{ default 1; }}\n"
    text = "network n { }\n" + "".join(block.format(*pair) for pair in ["ac", "ba", "cb", "da"])

    with pytest.raises(InputError) as caught:
        parse_bif(text, "n.bif")

    assert str(caught.value) == (
        "n.bif:7:15: the parents of 'c' close a directed cycle: 'c' -> 'a' -> 'b' -> 'c'."
    )


def test_tables_too_large() -> None:
    """Tables that would take too much memory are refused before any is taken."""
    names = [f"v{i}" for i in range(27)]
    text = "network n { }\n" + "".join(
        f"variable {name} {{ type discrete [ 2 ] {{ a, b }}; }}\n" for name in names
    )
    text += "".join(f"probability ( {name} ) {{ default 0.5, 0.5; }}\n" for name in names[1:])
    text += f"probability ( v0 | {', '.join(names[1:])} ) {{ default 0.5, 0.5; }}\n"

    # 26 tables of 2 cells and one of 2^27
    with pytest.raises(InputError, match="'v0' would have 134217780 cells; at most 67108864 are accepted"):
        parse_bif(text, "n.bif")


def test_more_parents_than_an_array_has_axes() -> None:
    """A table over more parents than numpy has axes is refused, though each has only one state."""
    names = [f"v{i}" for i in range(70)]
    text = "network n { }\n" + "".join(
        f"variable {name} {{ type discrete [ 1 ] {{ x }}; }}\n" for name in names
    )
    text += "".join(f"probability ( {name} ) {{ default 1; }}\n" for name in names[1:])
    text += f"probability ( v0 | {' '.join(names[1:])} ) {{ default 1; }}"

    with pytest.raises(InputError, match="'v0' has 69 parents; at most 63 are accepted"):
        parse_bif(text, "n.bif")


@pytest.mark.parametrize(
    ("name", "n_variables", "n_arcs", "n_free"),
    [
        ("alarm.bif", 37, 46, 509),  # Beinlich, Suermondt, Chavez and Cooper 1989
        ("child.bif", 20, 25, 230),  # Spiegelhalter and Cowell 1992
        ("hailfinder.bif", 56, 66, 2656),  # Abramson, Brown, Edwards, Murphy and Winkler 1996
    ],
)
def test_known_networks(
    known_network_file: Callable[[str], Path], name: str, n_variables: int, n_arcs: int, n_free: int
) -> None:
    """Published networks have the published numbers of variables, arcs and free parameters."""
    path = known_network_file(name)

    network, notes = read_network_with_notes(path)

    assert (n_variables, n_arcs, n_free) == (len(network.names), network.graph.n_edges, network.n_free)
    assert read_graph(path) == network.graph
    assert all(note.startswith(str(path)) for note in notes)
    assert parse_bif(bif_text(network), "again")[0].key() == network.key()


def test_known_rows(known_network_file: Callable[[str], Path]) -> None:
    """Rows stand where their parents' states say, though this file lists the first parent fastest."""
    network = read_network(known_network_file("child.bif"))

    cpt = network.cpts["HypDistrib"]

    # Spiegelhalter and Cowell 1992, read in the file: (Rt_to_Lt, None) 0.05, 0.95; (Rt_to_Lt, Mild) 0.5, 0.5
    assert cpt.parents == ("DuctFlow", "CardiacMixing")
    assert cpt.p[2, 0].tolist() == [0.05, 0.95]
    assert cpt.p[2, 1].tolist() == [0.5, 0.5]


def test_a_listing_is_not_a_network(known_network_file: Callable[[str], Path]) -> None:
    """A file that only has the ending is refused in one clear line."""
    path = known_network_file("sachs.bif")

    with pytest.raises(InputError) as caught:
        read_network(path)

    assert str(caught.value) == (
        f"{path}:1:1: expected 'network' (a BIF file starts with 'network NAME {{'), found 'tree'."
    )
