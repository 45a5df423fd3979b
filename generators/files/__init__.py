"""Networks, graphs and datasets as files; the format is chosen by the file's ending.

A format is one file here with a function that parses a text and one that gives a text. It comes into
use by one line in the tables below.
"""

from __future__ import annotations

import gzip
import os
import zlib
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import TypeVar

from generators.dataset import Dataset
from generators.errors import InputError
from generators.files.atomic import atomic_write
from generators.files.bif import bif_text, parse_bif
from generators.files.data_files import data_text, parse_data
from generators.files.dot import dot_text, parse_dot
from generators.files.graph_csv import graph_csv_text, parse_graph_csv
from generators.files.graphml import graphml_text, parse_graphml
from generators.files.network_json import network_json_text, parse_network_json
from generators.files.text import read_bytes, read_text
from generators.graph import Graph
from generators.network import Network

__all__ = [
    "read_data",
    "read_data_with_notes",
    "read_graph",
    "read_network",
    "read_network_with_notes",
    "write_data",
    "write_graph",
    "write_network",
]

FilePath = str | os.PathLike[str]
Notes = tuple[str, ...]
NetworkFormat = tuple[Callable[[str, str], tuple[Network, Notes]], Callable[[Network], str]]
GraphFormat = tuple[Callable[[str, str], Graph], Callable[[Graph], str]]
Packing = tuple[Callable[[bytes], bytes], Callable[[bytes], bytes]]

NETWORK_FORMATS: dict[str, NetworkFormat] = {
    ".bif": (parse_bif, bif_text),
    ".json": (parse_network_json, network_json_text),
}
GRAPH_FORMATS: dict[str, GraphFormat] = {
    ".csv": (parse_graph_csv, graph_csv_text),
    ".graphml": (parse_graphml, graphml_text),
    ".dot": (parse_dot, dot_text),
}
DATA_FORMATS: dict[str, Packing] = {
    ".csv": (bytes, bytes),
    # Level 6 is gzip's own default; no time stamp, so equal data make equal files.
    ".csv.gz": (gzip.decompress, lambda content: gzip.compress(content, compresslevel=6, mtime=0)),
}

Value = TypeVar("Value")


def _ending(path: FilePath, accepted: Iterable[str], what: str) -> str:
    name = os.path.basename(os.fspath(path)).lower()
    for ending in sorted(accepted, key=len, reverse=True):
        if name.endswith(ending):
            return ending
    raise InputError(f"{os.fspath(path)}: {what} must end in one of {', '.join(accepted)}.")


def _text(path: FilePath, give: Callable[[Value], str], value: Value) -> str:
    try:
        return give(value)
    except InputError as error:
        raise InputError(*(f"{os.fspath(path)}: {fault}" for fault in error.faults)) from None


def read_network(path: FilePath) -> Network:
    """Read a network from a BIF or JSON file, by its ending (``.bif``, ``.json``).

    Raises
    ------
    InputError
        If the file cannot be read, with its line and column or the place in its JSON.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> from generators.catalogue import published_network
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder, "sprinkler.bif")
    ...     write_network(published_network("sprinkler"), path)
    ...     read_network(path).names
    ('cloudy', 'sprinkler', 'rain', 'wet_grass')
    """
    return read_network_with_notes(path)[0]


def read_network_with_notes(path: FilePath) -> tuple[Network, Notes]:
    """Read a network, and what was put right in it: tables whose rows were renormalised.

    Raises
    ------
    InputError
        As `read_network`.
    """
    parse, _ = NETWORK_FORMATS[_ending(path, NETWORK_FORMATS, "a network file")]
    return parse(read_text(path), os.fspath(path))


def write_network(network: Network, path: FilePath) -> None:
    """Write a network as BIF or JSON, by the path's ending; reading it gives the same to the bit.

    Raises
    ------
    InputError
        If the ending is unknown, the path cannot be written, or the format cannot hold a name.
    """
    _, give = NETWORK_FORMATS[_ending(path, NETWORK_FORMATS, "a network file")]
    atomic_write(path, _text(path, give, network))


def read_graph(path: FilePath) -> Graph:
    """Read a graph from a CSV, GraphML or DOT file, or the graph of a network file, by its ending.

    In a CSV file the variables come in the order of their first appearance; the other formats keep
    the order that was written.

    Raises
    ------
    InputError
        If the file cannot be read, with its line where there is one.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder, "learned.dot")
    ...     write_graph(Graph.from_edges("abc", [("a", "b")], [("b", "c")]), path)
    ...     read_graph(path)
    Graph(3 variables: a -> b, b - c)
    """
    ending = _ending(path, [*GRAPH_FORMATS, *NETWORK_FORMATS], "a graph file")
    if ending in NETWORK_FORMATS:
        return read_network(path).graph
    parse, _ = GRAPH_FORMATS[ending]
    return parse(read_text(path), os.fspath(path))


def write_graph(graph: Graph, path: FilePath) -> None:
    """Write a graph as CSV, GraphML or DOT, by the path's ending.

    Raises
    ------
    InputError
        If the ending is unknown, the path cannot be written, or the format cannot hold a name.
    """
    _, give = GRAPH_FORMATS[_ending(path, GRAPH_FORMATS, "a graph file")]
    atomic_write(path, _text(path, give, graph))


def read_data(path: FilePath, states: Mapping[str, Sequence[str]] | None = None) -> Dataset:
    r"""Read a dataset from a CSV file, plain or packed (``.csv``, ``.csv.gz``).

    Parameters
    ----------
    path : str or path
    states : mapping of str to sequence of str, optional
        The declared states of some or all columns. Other columns have the states that they show, in
        numeric order if all are numbers, else in the order of their text.

    Raises
    ------
    InputError
        If the file cannot be read, with its line where there is one.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder, "days.csv")
    ...     _ = path.write_text("rain,wet\nno,no\nyes,\n")
    ...     read_data(path, {"wet": ["no", "yes"]})
    Dataset(2 rows of 2 variables)
    """
    return read_data_with_notes(path, states)[0]


def read_data_with_notes(
    path: FilePath, states: Mapping[str, Sequence[str]] | None = None
) -> tuple[Dataset, Notes]:
    """Read a dataset, and what in it looks doubtful: identifiers, measured quantities, stray spaces.

    Raises
    ------
    InputError
        As `read_data`.
    """
    unpack, _ = DATA_FORMATS[_ending(path, DATA_FORMATS, "a data file")]
    try:
        content = unpack(read_bytes(path))
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        raise InputError(f"{os.fspath(path)}: not a whole gzip file ({error}).") from None
    return parse_data(content, os.fspath(path), states)


def write_data(dataset: Dataset, path: FilePath) -> None:
    """Write a dataset as CSV, plain or packed by the path's ending; missing cells are empty.

    Raises
    ------
    InputError
        If the ending is unknown, the path cannot be written, or a name or state is empty.
    """
    _, pack = DATA_FORMATS[_ending(path, DATA_FORMATS, "a data file")]
    text = _text(path, data_text, dataset)
    try:
        content = text.encode()
    except UnicodeEncodeError as error:
        raise InputError(
            f"{os.fspath(path)}: UTF-8 cannot hold the character {text[error.start]!r}."
        ) from None
    atomic_write(path, pack(content))
