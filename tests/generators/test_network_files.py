"""What holds for every format of network files, and the choice of the format by the ending."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators.errors import InputError
from generators.files import NETWORK_FORMATS, read_graph, read_network, read_network_with_notes, write_network
from generators.graph import Graph
from generators.network import Cpt, Network

FORMATS = sorted({".bif", ".json"})
ODD_NAMES = [
    *("<5", "5-12", "12+", ">=7.5", "Asy/Patch", "a//b", "/*", "table", "property", "network"),
    *("a b", ",", "{", "|", "é", "1e5", " ", "\u00a0", "\u2028"),
]
JUNK = [*'"{}[],;a9\\', "-1", "1e999", "/*", "nan"]
# Every format of today holds these characters; what only one of them refuses is tested beside it.
NAMES = st.one_of(
    st.sampled_from(ODD_NAMES),
    st.text(st.characters(exclude_categories=("Cs", "Cc"), exclude_characters='"'), min_size=1, max_size=6),
)


@st.composite
def networks(draw: st.DrawFn) -> Network:
    """Give networks of one to four variables with odd names and probabilities of full length."""
    names = draw(st.lists(NAMES, min_size=1, max_size=4, unique=True))
    states = [tuple(draw(st.lists(NAMES, min_size=1, max_size=3, unique=True))) for _ in names]
    n_states = dict(zip(names, map(len, states), strict=True))
    order = draw(st.permutations(names))
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    cpts = {}
    for k, name in enumerate(order):
        parents = tuple(draw(st.lists(st.sampled_from(order[:k]), unique=True))) if k else ()
        shape = [n_states[parent] for parent in parents]
        cpts[name] = Cpt(name, parents, rng.dirichlet(np.ones(n_states[name]), size=shape or None))
    arcs = [(parent, name) for name, cpt in cpts.items() for parent in cpt.parents]
    return Network(Graph.from_edges(names, arcs), tuple(states), cpts)


@pytest.fixture
def small() -> Network:
    """Give a network of two variables whose names need quotes somewhere."""
    wet = Cpt("wet", ("rain, snow",), np.array([[0.9, 0.1, 0.0], [0.25, 0.25, 0.5]]))
    cpts = {"rain, snow": Cpt("rain, snow", (), np.array([1 / 3, 2 / 3])), "wet": wet}
    graph = Graph.from_edges(["wet", "rain, snow"], [("rain, snow", "wet")])
    return Network(graph, (("no", "a bit", "yes"), ("no", "yes")), cpts)


@pytest.mark.parametrize("ending", FORMATS)
class TestEveryFormat:
    @given(network=networks())
    def test_round_trip(self, ending: str, network: Network) -> None:
        """A network that was written and read is the same to the bit, and nothing was put right."""
        parse, text = NETWORK_FORMATS[ending]

        back, notes = parse(text(network), "file")

        assert back.key() == network.key()
        assert notes == ()

    def test_truncated_anywhere(self, ending: str, small: Network) -> None:
        """A file cut off anywhere before its last white space is refused in one line."""
        parse, text = NETWORK_FORMATS[ending]
        whole = text(small)

        for end in range(len(whole.rstrip())):
            with pytest.raises(InputError, match=r"\Afile:[^\n]+\Z"):
                parse(whole[:end], "file")

        assert parse(whole.rstrip(), "file")[0].key() == small.key()

    @given(data=st.data())
    def test_damaged(self, ending: str, data: st.DataObject) -> None:
        """A file with pieces cut out, doubled or replaced is read or refused in one line."""
        parse, text = NETWORK_FORMATS[ending]
        cpts = {
            "a": Cpt("a", (), np.array([0.5, 0.5])),
            "b": Cpt("b", ("a",), np.array([[0.25, 0.75], [1.0, 0.0]])),
        }
        damaged = text(Network(Graph.from_edges("ab", [("a", "b")]), (("n", "y"), ("n", "y")), cpts))
        for _ in range(data.draw(st.integers(1, 3))):
            start = data.draw(st.integers(0, len(damaged)))
            end = min(len(damaged), start + data.draw(st.integers(0, 12)))
            junk = st.sampled_from([damaged[start:end] * 2, *JUNK]) | st.text(max_size=3)
            damaged = damaged[:start] + data.draw(junk) + damaged[end:]

        try:
            network, _ = parse(damaged, "file")
        except InputError as error:
            said = str(error)
        else:
            said = f"file: {len(network.names)} variables"

        assert re.fullmatch(r"file:[^\n]+", said)

    @given(content=st.text(max_size=60))
    def test_any_text(self, ending: str, content: str) -> None:
        """Text that is no network at all is refused in one line."""
        parse, _ = NETWORK_FORMATS[ending]

        with pytest.raises(InputError, match=r"\Afile:[^\n]+\Z"):
            parse(content, "file")

    def test_through_a_file(self, ending: str, small: Network, tmp_path: Path) -> None:
        """Writing and reading by path choose the format by the ending, whatever its case."""
        path = tmp_path / f"net{ending.upper()}"

        write_network(small, path)

        assert read_network(path).key() == small.key()
        assert read_network_with_notes(str(path))[1] == ()
        assert read_graph(path) == small.graph
        assert [path] == list(tmp_path.iterdir())

    def test_byte_order_mark_and_line_ends(self, ending: str, small: Network, tmp_path: Path) -> None:
        """A byte-order mark and CR LF line ends make no difference."""
        path = tmp_path / f"net{ending}"
        text = NETWORK_FORMATS[ending][1](small).replace("\n", "\r\n")

        path.write_bytes(b"\xef\xbb\xbf" + text.encode())

        assert read_network(path).key() == small.key()


def test_unknown_ending(small: Network, tmp_path: Path) -> None:
    """An ending that stands for no format is refused with those that do, for reading and for writing."""
    message = r"net\.txt: a network file must end in one of \.bif, \.json"

    with pytest.raises(InputError, match=message):
        read_network(tmp_path / "net.txt")
    with pytest.raises(InputError, match=message):
        write_network(small, tmp_path / "net.txt")

    assert list(tmp_path.iterdir()) == []


def test_not_a_readable_file(tmp_path: Path) -> None:
    """A missing file, a folder, other encodings and binary junk are refused in one line with the path."""
    (tmp_path / "folder.bif").mkdir()
    (tmp_path / "latin.bif").write_bytes("network caf\xe9 {\n}".encode("latin-1"))
    (tmp_path / "junk.bif").write_bytes(b"network x {\n\0\0\0")

    for name, message in {
        "none.bif": "none.bif: no such file.",
        "folder.bif": "folder.bif: is a folder, expected a file.",
        "latin.bif": "latin.bif:1: not UTF-8 text (found the byte 0xe9).",
        "junk.bif": "junk.bif:2: not a text file (found a NUL byte).",
        "nu\0l.bif": "cannot be read: embedded null byte.",
    }.items():
        with pytest.raises(InputError) as caught:
            read_network(tmp_path / name)
        assert str(caught.value).endswith(message)
        assert str(caught.value).replace("'", "").startswith(str(tmp_path))
