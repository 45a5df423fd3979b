"""Datasets as CSV: a header of names, then one row of categorical cells per line.

Every cell is text, numbers too; an empty cell is missing, and nothing else is (``NA`` is a state).
Fields are separated by commas and quoted as RFC 4180 says. Blank lines at the end of a file are no rows.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.dataset import MAX_STATES, Dataset, code_dtype
from generators.errors import InputError
from generators.files.text import NUMBER, csv_field, csv_rows, decode, listed, shown
from generators.network import check_states
from generators.settings import nearest

# More different decimal numbers than a coarse rating scale has: a measured quantity (own choice).
MANY_DECIMALS = 20
_LISTED_STATES = 10
_ROWS_PER_PIECE = 1 << 16
# Longer cells are free text, not states; so many bytes still take about a second.
MAX_CELL_BYTES = 1 << 16
_FIRST_BYTES = np.array([(1 << 8 * n) - 1 for n in range(9)], dtype=np.uint64)
_COMMA, _QUOTE, _LINE_FEED, _RETURN = b',"\n\r'


def parse_data(
    content: bytes, where: str, states: Mapping[str, Sequence[str]] | None = None
) -> tuple[Dataset, tuple[str, ...]]:
    r"""Read a dataset from the bytes of a CSV file.

    Parameters
    ----------
    content : bytes
        UTF-8, with or without a byte-order mark; lines end in LF or CR LF.
    where : str
        The file's name, for messages.
    states : mapping of str to sequence of str, optional
        The declared states of some or all columns. Other columns have the states that they show, in
        numeric order if all are numbers, else in the order of their text.

    Returns
    -------
    data : Dataset
    notes : tuple of str
        Columns that look like an identifier or a measured quantity, and other causes for doubt.

    Raises
    ------
    InputError
        ``FILE:LINE: ...`` for a row of another length, a cell that is no declared state, a quote out of
        place; ``FILE: ...`` for a name that is empty or stands twice, no rows, too many states.

    Examples
    --------
    >>> data, notes = parse_data(b"rain,wet\nno,2\nyes,10\n,2\nyes,2\n", "d.csv")
    >>> data.states, data.codes.tolist()
    ((('no', 'yes'), ('2', '10')), [[0, 0], [1, 1], [255, 0], [1, 0]])
    """
    text = decode(content, where)
    if not text.strip():
        raise InputError(f"{where}: expected a header of names, found an empty file.")
    content = content.removeprefix(b"\xef\xbb\xbf")
    rows = _rows_of(content, where)
    names = _header(content[: rows.ends[0]].decode(), where)
    _check_rows(rows, len(names))
    declared = _declared(states or {}, names, where)
    columns = [
        _column(name, *cells, declared.get(name), rows)
        for name, cells in zip(names, _cells(rows, names), strict=True)
    ]
    dtype: Any = code_dtype(max(len(column.states) for column in columns))
    codes = np.empty((rows.n_rows, len(names)), dtype=dtype, order="F")
    for j, column in enumerate(columns):
        lookup = np.where(column.lookup < 0, np.iinfo(dtype).max, column.lookup).astype(dtype)
        np.take(lookup, column.seen, out=codes[:, j])
    codes.flags.writeable = False
    data = Dataset(names, tuple(column.states for column in columns), codes)
    doubts = [doubt for column in columns for doubt in _doubts(column, rows.n_rows, column.name in declared)]
    if len(names) == 1 and any(mark in names[0] for mark in ";\t"):
        doubts.append(f"the only column is {shown(names[0])}; fields must be separated by commas.")
    return data, tuple(f"{where}: {doubt}" for doubt in doubts)


@dataclass(frozen=True, slots=True)
class _Rows:
    """Where the records of a file are, the header's first: int64 arrays of offsets."""

    content: bytes
    where: str
    starts: NDArray[np.int64]
    ends: NDArray[np.int64]  # of each record's last field
    commas: NDArray[np.int64]
    n_fields: NDArray[np.int64]

    @property
    def n_rows(self) -> int:
        return len(self.ends) - 1

    def place(self, record: int) -> str:
        return _place(self.content, self.where, int(self.starts[record]))


def _place(content: bytes, where: str, offset: int) -> str:
    line = content.count(b"\n", 0, offset) + 1
    return f"{where}:{line}"


def _rows_of(content: bytes, where: str) -> _Rows:
    data = np.frombuffer(content, dtype=np.uint8)
    quotes = np.flatnonzero(data == _QUOTE)
    _check_quotes(content, where, quotes)

    def outside(character: int) -> NDArray[np.int64]:
        found = np.flatnonzero(data == character)
        return found[np.searchsorted(quotes, found) % 2 == 0] if len(quotes) else found

    returns = outside(_RETURN)
    alone = returns[data[np.minimum(returns + 1, len(data) - 1)] != _LINE_FEED]
    if len(alone):
        place = _place(content, where, int(alone[0]))
        raise InputError(f"{place}: found a carriage return without a line feed.")
    ends = outside(_LINE_FEED)
    if not content.endswith(b"\n"):
        ends = np.append(ends, len(content))
    starts = np.append(0, ends[:-1] + 1)
    n_records = int(np.searchsorted(starts, len(content.rstrip(b"\r\n"))))  # no blank lines at the end
    starts, ends = starts[:n_records], ends[:n_records]
    commas = outside(_COMMA)
    n_fields = np.diff(np.searchsorted(commas, ends), prepend=0) + 1
    return _Rows(content, where, starts, ends - np.isin(ends - 1, returns), commas, n_fields)


def _check_quotes(content: bytes, where: str, quotes: NDArray[np.int64]) -> None:
    """Refuse quotes that are not around a whole field or doubled inside one (RFC 4180)."""
    if not len(quotes):
        return
    if len(quotes) % 2:
        raise InputError(
            f"{_place(content, where, int(quotes[-1]))}: found a double quote that is not closed."
        )
    opening, closing = quotes[::2], quotes[1::2]
    doubled = opening[1:] == closing[:-1] + 1
    padded = np.frombuffer(b"\n" + content + b"\n", dtype=np.uint8)
    starts_field = np.isin(padded[opening], (_COMMA, _LINE_FEED))
    ends_field = np.isin(padded[closing + 2], (_COMMA, _LINE_FEED, _RETURN))
    starts_field[1:] |= doubled
    ends_field[:-1] |= doubled
    stray = np.concatenate([opening[~starts_field], closing[~ends_field]])
    if len(stray):
        raise InputError(
            f"{_place(content, where, int(stray.min()))}: found a double quote within a field; "
            "put the field in double quotes and double those in it."
        )


def _header(line: str, where: str) -> tuple[str, ...]:
    _, names = next(csv_rows(line, where), (1, [""]))
    seen: set[str] = set()
    for k, name in enumerate(names):
        if not name:
            raise InputError(f"{where}:1: column {k + 1} has no name.")
        if name in seen:
            raise InputError(f"{where}:1: two columns have the name {shown(name)}.")
        seen.add(name)
    return tuple(names)


def _check_rows(rows: _Rows, n_names: int) -> None:
    if rows.n_rows == 0:
        raise InputError(f"{rows.where}: expected rows behind the header, found none.")
    ragged = rows.n_fields != n_names
    if ragged.any():
        record = int(ragged.argmax())
        raise InputError(
            f"{rows.place(record)}: expected {n_names} fields, found {int(rows.n_fields[record])}."
        )


def _declared(
    states: Mapping[str, Sequence[str]], names: Sequence[str], where: str
) -> dict[str, tuple[str, ...]]:
    for name, own in states.items():
        if name not in names:
            raise InputError(
                f"{where}: states are declared for {shown(name)}, which is no column.{nearest(name, names)}"
            )
        fault = check_states(name, own)
        if fault:
            raise InputError(f"{where}: {fault}.")
    return {name: tuple(own) for name, own in states.items()}


def _cells(rows: _Rows, names: Sequence[str]) -> Iterator[tuple[NDArray[np.int64], list[str]]]:
    """Give each column as positions in a list of the different texts it holds.

    Far quicker than making a Python text of every cell, which is what reading by pandas comes to.
    """
    commas = rows.commas.reshape(rows.n_rows + 1, len(names) - 1)[1:]
    # One 8-byte word from each offset on; the file is padded so that the last ones stay inside.
    words = np.ndarray(len(rows.content) + 1, dtype="<u8", buffer=rows.content + bytes(8), strides=(1,))
    for j, name in enumerate(names):
        starts = rows.starts[1:] if j == 0 else commas[:, j - 1] + 1
        ends = rows.ends[1:] if j == len(names) - 1 else commas[:, j]
        longest = int(np.argmax(ends - starts))
        n_bytes = int(ends[longest] - starts[longest])
        if n_bytes > MAX_CELL_BYTES:
            raise InputError(
                f"{rows.place(longest + 1)}: column {shown(name)} has a cell of {n_bytes} bytes; "
                f"at most {MAX_CELL_BYTES} are accepted."
            )
        seen, first = _numbered(words, starts, ends)
        raw = [rows.content[start:end] for start, end in zip(starts[first].tolist(), ends[first].tolist())]
        yield seen, [_unquoted(cell) for cell in raw]


def _numbered(
    words: NDArray[np.uint64], starts: NDArray[np.int64], ends: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return a number per row, equal for equal cells, and the first row of each number."""
    import pandas as pd

    lengths = ends - starts
    seen, different = pd.factorize(words[starts] & _FIRST_BYTES[np.minimum(lengths, 8)])
    count, offset = len(different), 8
    longer = np.flatnonzero(lengths > offset)
    while len(longer):  # tell apart by the next eight bytes what is alike so far; no cell holds a NUL
        word = words[starts[longer] + offset] & _FIRST_BYTES[np.minimum(lengths[longer] - offset, 8)]
        next_bytes, different = pd.factorize(word)
        pairs, different = pd.factorize(seen[longer] * len(different) + next_bytes)
        seen[longer] = count + pairs
        count, offset = count + len(different), offset + 8
        longer = longer[lengths[longer] > offset]
    seen, different = pd.factorize(seen)
    first = np.empty(len(different), dtype=np.int64)
    first[seen[::-1]] = np.arange(len(seen))[::-1]
    return seen, first


def _unquoted(cell: bytes) -> str:
    return (cell[1:-1].replace(b'""', b'"') if cell.startswith(b'"') else cell).decode()


@dataclass(frozen=True, slots=True)
class _Column:
    name: str
    states: tuple[str, ...]
    seen: NDArray[np.int64]  # per row, the position of its text among the texts seen
    lookup: NDArray[np.int64]  # from that position to the state's; -1: missing


def _column(
    name: str, seen: NDArray[np.int64], texts: Sequence[str], declared: tuple[str, ...] | None, rows: _Rows
) -> _Column:
    own = declared or _ordered({text for text in texts if text})  # one text may stand with quotes and without
    if len(own) > MAX_STATES:
        raise InputError(
            f"{rows.where}: column {shown(name)} has {len(own)} states; at most {MAX_STATES} are accepted."
        )
    if not own:
        raise InputError(
            f"{rows.where}: column {shown(name)} has no value in any row, and no declared states."
        )
    position = {state: i for i, state in enumerate(own)} | {"": -1}
    for k, text in enumerate(texts):
        if text not in position:
            record = int((seen == k).argmax()) + 1
            accepted = listed(own[:_LISTED_STATES]) + (", ..." if len(own) > _LISTED_STATES else "")
            raise InputError(
                f"{rows.place(record)}: column {shown(name)} holds {shown(text)}, which is none of its "
                f"declared states ({accepted}).{nearest(text, own)}"
            )
    return _Column(name, own, seen, np.array([position[text] for text in texts], dtype=np.int64))


def _ordered(texts: Collection[str]) -> tuple[str, ...]:
    if all(NUMBER.fullmatch(text) for text in texts):
        return tuple(sorted(texts, key=lambda text: (float(text), text)))
    return tuple(sorted(texts))


def _doubts(column: _Column, n_rows: int, is_declared: bool) -> list[str]:
    name, doubts = shown(column.name), []
    if not is_declared and len(column.states) == n_rows > 2:
        doubts.append(f"column {name} has as many states as rows ({n_rows}); it is probably an identifier.")
    elif not is_declared and len(column.states) > MANY_DECIMALS and _are_decimals(column.states):
        doubts.append(
            f"column {name} holds {len(column.states)} different decimal numbers; "
            "it is probably a measured quantity to be grouped into a few states first."
        )
    bare: dict[str, str] = {}
    for state in column.states:
        other = bare.setdefault(state.strip(), state)
        if other != state:
            doubts.append(
                f"column {name} has states that differ only in white space: {shown(other)}, {shown(state)}."
            )
            break
    return doubts


def _are_decimals(texts: Sequence[str]) -> bool:
    return all(NUMBER.fullmatch(text) for text in texts) and any(
        not float(text).is_integer() for text in texts
    )


def data_text(data: Dataset) -> str:
    """Return the text of a CSV file: a header of names, states as text, missing cells empty.

    The states that no row shows are not in the file: hand them to `parse_data` to get them back.

    Raises
    ------
    InputError
        If a name or a state is empty, which the file could not tell from a missing cell.

    Examples
    --------
    >>> states = (("no", "yes"), ("mild", "mild, wet"))
    >>> data = Dataset(("rain", "day"), states, np.array([[0, 1], [255, 0]], dtype=np.uint8))
    >>> print(data_text(data), end="")
    rain,day
    no,"mild, wet"
    ,mild
    """
    for name, own in zip(data.names, data.states, strict=True):
        if not name or "" in own:
            raise InputError(f"CSV cannot hold an empty name or state (variable {shown(name)}).")
    empty = (
        '""' if data.n_variables == 1 else ""
    )  # a line without any character would be no row to most readers
    fields = [_fields(own, empty, data.missing_code) for own in data.states]
    pieces = [",".join(map(csv_field, data.names)), "\n"]
    for start in range(0, data.n_rows, _ROWS_PER_PIECE):
        codes = data.codes[start : start + _ROWS_PER_PIECE]
        columns = [own[codes[:, j]].tolist() for j, own in enumerate(fields)]
        pieces += ["\n".join(map(",".join, zip(*columns, strict=True))), "\n"]
    return "".join(pieces)


def _fields(states: Sequence[str], empty: str, missing_code: int) -> NDArray[np.object_]:
    fields = np.full(missing_code + 1, empty, dtype=object)
    fields[: len(states)] = [csv_field(state) for state in states]
    return fields
