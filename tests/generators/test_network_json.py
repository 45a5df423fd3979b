"""The JSON format of networks: what it looks like, and what it refuses."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

from generators.errors import InputError
from generators.files.network_json import network_json_text, parse_network_json
from generators.graph import Graph
from generators.network import Cpt, Network


def rain(**changes: Any) -> dict[str, Any]:
    return {"name": "rain", "states": ["no", "yes"], "parents": [], "rows": [[0.8, 0.2]]} | changes


def wet(**changes: Any) -> dict[str, Any]:
    rows = [[0.5, 0.25, 0.25], [0.0, 0.0, 1.0]]
    return {"name": "wet", "states": ["no", "bit", "yes"], "parents": ["rain"], "rows": rows} | changes


def text_of(*variables: Any, **changes: Any) -> str:
    return json.dumps({"format": "arcassay network", "version": 1, "variables": list(variables)} | changes)


def test_axis_order() -> None:
    """Rows run through the first parent's states slowest; a row runs through the variable's own states."""
    wind = {"name": "wind", "states": ["a", "b", "c"], "parents": [], "rows": [[0.2, 0.3, 0.5]]}
    own = [[k / 8, 1 - k / 8] for k in range(6)]
    slip = {"name": "slip", "states": ["n", "y"], "parents": ["rain", "wind"], "rows": own}

    network, notes = parse_network_json(text_of(rain(), wind, slip), "n.json")

    # rows: (no, a), (no, b), (no, c), (yes, a), (yes, b), (yes, c)
    assert network.cpts["slip"].p[..., 0].tolist() == [[0.0, 1 / 8, 2 / 8], [3 / 8, 4 / 8, 5 / 8]]
    assert network.names == ("rain", "wind", "slip")
    assert notes == ()


def test_the_text_is_json() -> None:
    """Any JSON reader gets names, states, parents and rows, numbers to the bit."""
    p = np.array([[0.1 + 0.2, 0.7], [1 / 3, 2 / 3]])
    cpts = {"a\n": Cpt("a\n", (), np.array([0.25, 0.75])), "b": Cpt("b", ("a\n",), p)}
    network = Network(Graph.from_edges(["a\n", "b"], [("a\n", "b")]), (('"', "\t"), ("é", "y")), cpts)

    read = json.loads(network_json_text(network))

    assert (read["format"], read["version"]) == ("arcassay network", 1)
    assert read["variables"] == [
        {"name": "a\n", "states": ['"', "\t"], "parents": [], "rows": [[0.25, 0.75]]},
        {"name": "b", "states": ["é", "y"], "parents": ["a\n"], "rows": p.tolist()},
    ]
    assert parse_network_json(network_json_text(network), "n.json")[0].key() == network.key()


def test_rows_within_a_hundredth_are_renormalised() -> None:
    """Rows that sum to 1 within 0.01 are scaled to 1, and a note says where."""
    rows = [[0.33, 0.33, 0.33], [0.0, 0.0, 1]]

    network, notes = parse_network_json(text_of(rain(), wet(rows=rows)), "n.json")

    assert network.cpts["wet"].p[0].tolist() == pytest.approx([1 / 3] * 3, rel=1e-15)
    assert notes == (
        "n.json: variables[1].rows: 1 row was renormalised in the table of 'wet'; "
        "the probabilities for (no) summed to 0.99.",
    )


# What the file holds, and the message behind its name.
FAULTS = {
    "no object": ("[]", " expected an object with the keys format, version, variables, found a list of 0."),
    "format": (text_of(rain(), format="x"), " format: expected 'arcassay network', found 'x'."),
    "version": (
        text_of(rain(), version=2),
        " version: expected 1, found 2; another version may have written this.",
    ),
    "true is no version": (
        text_of(rain(), version=True),
        " version: expected 1, found true; another version may have written this.",
    ),
    "unknown key": (
        text_of(rain(), varables=[]),
        " unknown key 'varables'; accepted: format, version, variables. Did you mean 'variables'?",
    ),
    "key missing": ('{"format": "arcassay network", "version": 1}', " the key 'variables' is missing."),
    "key twice": ('{"format": "arcassay network", "format": 1}', " the key 'format' stands twice."),
    "inner key twice": (
        text_of("?").replace('"?"', '{"name": "a", "name": "b"}'),
        " variables[0]: the key 'name' stands twice.",
    ),
    "no list": (text_of(variables={}), " variables: expected a list, found an object."),
    "no variables": (text_of(), " variables: expected at least one variable, found none."),
    "no variable": (
        text_of(rain(), None),
        " variables[1]: expected an object with the keys name, states, parents, rows, found null.",
    ),
    "name": (text_of(rain(name="")), " variables[0].name: expected non-empty text, found ''."),
    "half a character": (
        text_of(rain(name="\ud800")),
        " variables[0].name: holds half of a surrogate pair, which is no character.",
    ),
    "name twice": (text_of(rain(), rain()), " variables[1].name: variable 'rain' stands twice."),
    "state": (text_of(rain(states=["no", 1])), " variables[0].states[1]: expected non-empty text, found 1."),
    "no states": (text_of(rain(states=[])), " variables[0].states: variable 'rain' has no state."),
    "state twice": (
        text_of(rain(states=["no", "no"])),
        " variables[0].states: variable 'rain' lists the state 'no' twice.",
    ),
    "unknown parent": (
        text_of(rain(), wet(parents=["ran"])),
        " variables[1].parents[0]: unknown variable 'ran'. Did you mean 'rain'?",
    ),
    "own parent": (
        text_of(rain(), wet(parents=["wet"])),
        " variables[1].parents[0]: 'wet' must be another, different variable.",
    ),
    "parent twice": (
        text_of(rain(), wet(parents=["rain", "rain"])),
        " variables[1].parents[1]: 'rain' must be another, different variable.",
    ),
    "rows": (text_of(rain(), wet(rows=[[1, 0, 0]])), " variables[1].rows: expected 2 rows, found 1."),
    "too few": (
        text_of(rain(), wet(rows=[[1, 0, 0], [1, 0]])),
        " variables[1].rows[1]: expected 3 probabilities for (yes), found 2.",
    ),
    "negative": (
        text_of(rain(rows=[[1.0, -0.5]])),
        " variables[0].rows[0][1]: expected a probability, found -0.5.",
    ),
    "true": (
        text_of(rain(rows=[[True, 0]])),
        " variables[0].rows[0][0]: expected a probability, found true.",
    ),
    "text": (text_of(rain(rows=[["1", 0]])), " variables[0].rows[0][0]: expected a probability, found '1'."),
    "infinite": (
        text_of(rain(rows=[[7, 0]])).replace("7", "1e999"),
        " variables[0].rows[0][0]: expected a probability, found Infinity.",
    ),
    "sum": (
        text_of(rain(), wet(rows=[[1, 0, 0], [0.5, 0.5, 0.25]])),
        " variables[1].rows[1]: the probabilities for (yes) sum to 1.25, not 1.",
    ),
    "cycle": (
        text_of(rain(parents=["wet"], rows=[[1, 0]] * 3), wet()),
        " variables[1].parents: the parents of 'wet' close a directed cycle: 'wet' -> 'rain' -> 'wet'.",
    ),
    "syntax": ('{"format": "arcassay network",\n "version" 1}', "2:12: not JSON: Expecting ':' delimiter."),
    "empty": ("", "1:1: not JSON: Expecting value."),
    "behind": (text_of(rain()) + "\n{}", "2:1: not JSON: Extra data."),
    "nan": ('{"version": NaN}', " not JSON: NaN is not a JSON number."),
    "long number": (
        '{"version": ' + "9" * 5000 + "}",
        " not JSON: Exceeds the limit (4300 digits) for integer string conversion: value has 5000 digits.",
    ),
    "deep": ("[" * 100_000, " not a network: lists within lists, too deep to read."),
}


@pytest.mark.parametrize(("text", "message"), FAULTS.values(), ids=FAULTS.keys())
def test_faults(text: str, message: str) -> None:
    """Every fault is one line with the file and the place: line and column, or the path inside."""
    with pytest.raises(InputError) as caught:
        parse_network_json(text, "n.json")

    assert str(caught.value) == f"n.json:{message}"


def test_tables_too_large() -> None:
    """A table that would take too much memory is refused before any is taken."""
    names = [f"v{i}" for i in range(27)]
    variables = [rain(name=name) for name in names[1:]] + [rain(name="v0", parents=names[1:])]

    # 26 tables of 2 cells and one of 2^27
    with pytest.raises(InputError, match=r"variables\[26\].parents: .* 134217780 cells; at most 67108864"):
        parse_network_json(text_of(*variables), "n.json")
