"""Datasets as CSV, against Python's own csv module and tables written by hand."""

from __future__ import annotations

import csv
import gzip
import io
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from generators.dataset import Dataset
from generators.errors import InputError
from generators.files import read_data, read_data_with_notes, write_data
from generators.files.data_files import data_text, parse_data

ODD_CELLS = [
    "yes",
    "no",
    "",
    "NA",
    "nan",
    "1",
    "01",
    "1.0",
    " yes",
    'say "x"',
    "a,b",
    "a\nb",
    "\r\n",
    "\r",
    "é",
]
# Cells are compared eight bytes at a time, so some share their first eight or sixteen.
LONG_CELLS = [
    "12345678",
    "123456789",
    "1234567890123456",
    "1234567890123457",
    "12345678901234567",
    "123456781234567é",
]
CELLS = st.sampled_from(ODD_CELLS + LONG_CELLS)
QUOTING = (csv.QUOTE_MINIMAL, csv.QUOTE_ALL)
NAMES = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), min_size=1, max_size=4)
WITHIN = (
    "d.csv:2: found a double quote within a field; put the field in double quotes and double those in it."
)


def cells_of(data: Dataset) -> list[list[str]]:
    """Give the rows as text, missing cells empty."""
    return [
        ["" if code == data.missing_code else own[code] for code, own in zip(row, data.states, strict=True)]
        for row in data.codes.tolist()
    ]


@st.composite
def tables(draw: st.DrawFn) -> list[list[str]]:
    """Give a header of odd names and rows of odd cells, no column wholly empty."""
    names = draw(st.lists(NAMES, min_size=1, max_size=4, unique=True))
    row = st.lists(CELLS, min_size=len(names), max_size=len(names))
    return [names, *draw(st.lists(row, max_size=8)), ["yes"] * len(names)]


class TestReading:
    @given(table=tables(), quoting=st.sampled_from(QUOTING), ends=st.sampled_from(["\n", "\r\n"]))
    @example(table=[["a"], [""], [""], ["x"]], quoting=csv.QUOTE_ALL, ends="\n")
    @example(table=[["\ufeffa", "b"], ["x", "y"]], quoting=csv.QUOTE_ALL, ends="\n")
    def test_cells_come_as_they_were_written(self, table: list[list[str]], quoting: int, ends: str) -> None:
        """Cells that Python's csv module wrote are read as the same text, empty ones as missing."""
        file = io.StringIO(newline="")
        # This version of csv quotes line ends only if they are among the line terminator's characters.
        if ends == "\n" and any("\r" in cell for row in table for cell in row):
            quoting = csv.QUOTE_ALL
        csv.writer(file, quoting=quoting, lineterminator=ends).writerows(table)  # type: ignore[arg-type]
        content = file.getvalue().encode()
        if content.startswith(b"\xef\xbb\xbf"):
            content = b"\xef\xbb\xbf" + content  # the first mark is the file's own

        data, _ = parse_data(content, "d.csv")

        assert data.names == tuple(table[0])
        assert cells_of(data) == table[1:]

    def test_quotes_do_not_count(self) -> None:
        """A cell is the same with quotes and without, and an empty one in quotes is missing."""
        data, _ = parse_data(b'a,b\nyes,1\n"yes",1\n"",1\n', "d.csv")

        assert cells_of(data) == [["yes", "1"], ["yes", "1"], ["", "1"]]
        assert data.states == (("yes",), ("1",))

    def test_codes(self) -> None:
        """Codes are positions among the states; columns are contiguous; 255 marks a missing cell."""
        data, notes = parse_data(b"a,b\nyes,10\n,9\nno,10\nno,\n", "d.csv")

        assert data.states == (("no", "yes"), ("9", "10"))
        assert data.codes.tolist() == [[1, 1], [255, 0], [0, 1], [0, 255]]
        assert data.codes.dtype == np.uint8
        assert data.codes.flags.f_contiguous
        assert notes == ()

    @pytest.mark.parametrize(
        ("seen", "order"),
        [
            (["10", "9", "-1"], ("-1", "9", "10")),
            (["1e1", "9.5", ".5", "01", "1"], (".5", "01", "1", "9.5", "1e1")),
            (["10", "9", "x"], ("10", "9", "x")),
            (["10", "9", "nan"], ("10", "9", "nan")),
            (["b", "B", "a", "NA"], ("B", "NA", "a", "b")),
        ],
    )
    def test_order_of_states(self, seen: list[str], order: tuple[str, ...]) -> None:
        """States that are all numbers come in numeric order, others in the order of their text."""
        data, _ = parse_data("\n".join(["x", *seen]).encode(), "d.csv")

        assert data.states == (order,)

    def test_declared_states(self) -> None:
        """Declared states keep their order, seen or not; columns without any have those they show."""
        data, notes = parse_data(
            b"a,b,c\n2,x,\n1,y,\n1,x,\n", "d.csv", {"a": ["3", "2", "1"], "c": ["u", "v"]}
        )

        assert data.states == (("3", "2", "1"), ("x", "y"), ("u", "v"))
        assert data.codes.tolist() == [[1, 0, 255], [2, 1, 255], [2, 0, 255]]
        assert notes == ()

    def test_many_states(self) -> None:
        """More than 255 states take two bytes a cell, up to 65,535 of them."""
        own = [str(k) for k in range(65_535)]

        data, _ = parse_data("\n".join(["x", *own, "7"]).encode(), "d.csv")

        assert data.codes.dtype == np.uint16
        assert data.codes[:, 0].tolist() == [*range(65_535), 7]
        with pytest.raises(InputError) as caught:
            parse_data("\n".join(["x", *own, "more"]).encode(), "d.csv")
        assert str(caught.value) == "d.csv: column 'x' has 65536 states; at most 65535 are accepted."

    def test_byte_order_mark_and_blank_end(self) -> None:
        """A byte-order mark, CR LF, a missing last line end and blank lines at the end make no difference."""
        plain, _ = parse_data(b"a,b\nx,y\nx,z\n", "d.csv")

        for content in (b"\xef\xbb\xbfa,b\r\nx,y\r\nx,z\r\n", b"a,b\nx,y\nx,z", b"a,b\nx,y\nx,z\n\n\r\n\n"):
            assert parse_data(content, "d.csv")[0] == plain

    @pytest.mark.parametrize(
        ("content", "message"),
        [
            (b"", "d.csv: expected a header of names, found an empty file."),
            (b" \n\n", "d.csv: expected a header of names, found an empty file."),
            (b"a,b\n", "d.csv: expected rows behind the header, found none."),
            (b"a,b\n\n\n", "d.csv: expected rows behind the header, found none."),
            (b"a,,c\n1,2,3\n", "d.csv:1: column 2 has no name."),
            (b"\na\n1\n", "d.csv:1: column 1 has no name."),
            (b"a,b,a\n1,2,3\n", "d.csv:1: two columns have the name 'a'."),
            (b"a,b\n1,2\n1\n", "d.csv:3: expected 2 fields, found 1."),
            (b"a,b\n1,2\n1,2,3\n", "d.csv:3: expected 2 fields, found 3."),
            (b"a,b\n1,2,3\n1,2,3\n", "d.csv:2: expected 2 fields, found 3."),
            (b"a,b\n1,2\n\n1,2\n", "d.csv:3: expected 2 fields, found 1."),
            (b'a,b\n"1\n\n",2\n1,2,3\n', "d.csv:5: expected 2 fields, found 3."),
            (b"a,b\n,2\n,3\n", "d.csv: column 'a' has no value in any row, and no declared states."),
            (b'a,b\n1,"2\n3,4\n', "d.csv:2: found a double quote that is not closed."),
            (b'a,b\n1,2"\n"3,4\n', WITHIN),
            (b'a,b\n"1"x,2\n', WITHIN),
            (b"a,b\n1,2\r3,4\n", "d.csv:2: found a carriage return without a line feed."),
            (b"a,b\n1,2\r", "d.csv:2: found a carriage return without a line feed."),
            (b"a,b\n1,\xff\n", "d.csv:2: not UTF-8 text (found the byte 0xff)."),
            (b"a,b\n1,2\0\n", "d.csv:2: not a text file (found a NUL byte)."),
        ],
    )  # fmt: skip
    def test_faults(self, content: bytes, message: str) -> None:
        """Every fault is one line with the file, and the line on which its row starts."""
        with pytest.raises(InputError) as caught:
            parse_data(content, "d.csv")

        assert str(caught.value) == message

    def test_longest_cell(self) -> None:
        """A cell may have 65,536 bytes; a longer one is free text and refused with its line."""
        cell = b"x" * 65_536

        data, _ = parse_data(b"a,b\n1," + cell + b"\n1," + cell[1:] + b"\n", "d.csv")

        assert [len(state) for state in data.states[1]] == [65_535, 65_536]
        with pytest.raises(InputError) as caught:
            parse_data(b"a,b\n1,2\n1," + cell + b"x\n", "d.csv")
        assert str(caught.value) == (
            "d.csv:3: column 'b' has a cell of 65537 bytes; at most 65536 are accepted."
        )

    @pytest.mark.parametrize(
        ("states", "message"),
        [
            (
                {"a": ["low", "high"]},
                "d.csv:5: column 'a' holds 'hgh', which is none of its declared states (low, high). "
                "Did you mean 'high'?",
            ),
            ({"rain": ["x"]}, "d.csv: states are declared for 'rain', which is no column."),
            ({"a": []}, "d.csv: variable 'a' has no state."),
            ({"a": ["x", "x"]}, "d.csv: variable 'a' lists the state 'x' twice."),
        ],
    )
    def test_faults_of_declared_states(self, states: dict[str, list[str]], message: str) -> None:
        """A cell that is no declared state is refused with the line of its first row."""
        with pytest.raises(InputError) as caught:
            parse_data(b'a,b\nlow,"1\n2"\nlow,1\nhgh,1\nhgh,1\n', "d.csv", states)

        assert str(caught.value) == message

    @given(
        content=st.binary(max_size=40)
        | st.text(st.sampled_from('ab,"\n\r\x0b 1'), max_size=30).map(str.encode)
    )
    def test_any_bytes(self, content: bytes) -> None:
        """Whatever a file holds, it is read or refused in one line."""
        try:
            said = f"d.csv: {parse_data(content, 'd.csv')[0].n_rows} rows"
        except InputError as error:
            said = str(error)

        assert re.fullmatch(r"d\.csv:[^\n]+", said)

    def test_truncated_anywhere(self) -> None:
        """A file cut off anywhere is read or refused in one line; within quotes it is refused."""
        content = 'a,"b ""c""",d\n1,"x,\ny",é\n2,"z",\n'.encode()

        outcomes = []
        for end in range(len(content)):
            try:
                outcomes.append(str(parse_data(content[:end], "d.csv")[0].n_rows))
            except InputError as error:
                outcomes.append(str(error))

        assert all(re.fullmatch(r"\d|d\.csv:[^\n]+", outcome) for outcome in outcomes)
        assert outcomes[20] == "d.csv:2: found a double quote that is not closed."


class TestNotes:
    def notes(self, *columns: list[str]) -> tuple[str, ...]:
        names = [chr(97 + k) for k in range(len(columns))]
        lines = [",".join(row) for row in [names, *zip(*columns, strict=True)]]
        return parse_data("\n".join(lines).encode(), "d.csv")[1]

    def test_identifier(self) -> None:
        """A column with as many states as rows is said to be an identifier."""
        notes = self.notes([f"id{k}" for k in range(9)], ["x", "y", "z"] * 3)

        assert notes == ("d.csv: column 'a' has as many states as rows (9); it is probably an identifier.",)

    def test_measured_quantity(self) -> None:
        """Many different decimal numbers are said to be a measured quantity; few, or whole ones, are not."""
        decimals = [str(k % 21 + 0.5) for k in range(99)]

        notes = self.notes(decimals, [str(k % 20 + 0.5) for k in range(99)], [str(k % 40) for k in range(99)])

        assert notes == (
            "d.csv: column 'a' holds 21 different decimal numbers; it is probably a measured quantity to be "
            "grouped into a few states first.",
        )

    def test_declared_states_are_not_doubted(self) -> None:
        """Whoever declares the states knows what they are."""
        assert parse_data(b"a\n1\n2\n3\n", "d.csv", {"a": ["1", "2", "3"]})[1] == ()

    def test_white_space(self) -> None:
        """States that differ only in white space are pointed out."""
        notes = self.notes(["yes", "yes ", "no", "no"])

        assert notes == ("d.csv: column 'a' has states that differ only in white space: 'yes', 'yes '.",)

    def test_other_separators(self) -> None:
        """A file whose fields seem to be separated by something else is pointed out."""
        notes = parse_data(b"a;b\n1;2\n1;2\n", "d.csv")[1]

        assert notes == ("d.csv: the only column is 'a;b'; fields must be separated by commas.",)


class TestWriting:
    @given(table=tables())
    def test_round_trip(self, table: list[list[str]]) -> None:
        """A dataset that was written and read with its states is the same."""
        columns = list(zip(*table[1:], strict=True))
        states = tuple(tuple({cell: None for cell in ["never", *column] if cell}) for column in columns)
        codes = np.array(
            [[own.index(cell) if cell else 255 for cell in column] for own, column in zip(states, columns)],
            dtype=np.uint8,
        ).T
        data = Dataset(tuple(table[0]), states, codes)

        text = data_text(data)

        assert parse_data(text.encode(), "d.csv", dict(zip(data.names, states)))[0] == data
        assert list(csv.reader(io.StringIO(text, newline=""))) == table

    def test_more_rows_than_one_piece(self) -> None:
        """A file of many rows has them all, in order."""
        codes = (np.arange(150_000) % 1000).astype(np.uint16)[:, None]
        data = Dataset(("a",), (tuple(f"s{k}" for k in range(1000)),), codes)

        text = data_text(data)

        assert text.splitlines() == ["a", *(f"s{k % 1000}" for k in range(150_000))]

    def test_empty_states_are_refused(self) -> None:
        """An empty state could not be told from a missing cell, nor an empty name from none."""
        codes = np.zeros((1, 1), dtype=np.uint8)

        for data in (Dataset(("a",), (("",),), codes), Dataset(("",), (("x",),), codes)):
            with pytest.raises(InputError, match="CSV cannot hold an empty name or state"):
                data_text(data)


class TestPaths:
    @pytest.fixture
    def data(self) -> Dataset:
        codes = np.array([[0, 1], [255, 0]], dtype=np.uint8)
        return Dataset(("a", "b"), (("no", "yes"), ("1", "2")), codes)

    @pytest.mark.parametrize("name", ["d.csv", "d.CSV", "d.csv.gz"])
    def test_through_a_file(self, data: Dataset, tmp_path: Path, name: str) -> None:
        """Writing and reading by path choose the format by the ending."""
        states = dict(zip(data.names, data.states))

        write_data(data, tmp_path / name)

        assert read_data(tmp_path / name, states) == data
        assert read_data_with_notes(str(tmp_path / name), states) == (data, ())
        assert [path.name for path in tmp_path.iterdir()] == [name]

    def test_packed(self, data: Dataset, tmp_path: Path) -> None:
        """A packed file is plain gzip of the same text, and equal data make equal files."""
        write_data(data, tmp_path / "d.csv.gz")
        write_data(data, tmp_path / "e.csv.gz")

        assert gzip.decompress((tmp_path / "d.csv.gz").read_bytes()) == data_text(data).encode()
        assert (tmp_path / "d.csv.gz").read_bytes() == (tmp_path / "e.csv.gz").read_bytes()

    def test_faults(self, data: Dataset, tmp_path: Path) -> None:
        """Broken packed files, unknown endings and half a character are refused; nothing is written."""
        whole = gzip.compress(b"a,b\n1,2\n")
        message = r"must end in one of \.csv, \.csv\.gz\."
        broken = {
            "cut.csv.gz": whole[:-9],
            "none.csv.gz": b"a,b\n1,2\n",
            "off.csv.gz": whole[:12] + b"\xff" * 9,
        }
        for name, content in broken.items():
            (tmp_path / name).write_bytes(content)
            with pytest.raises(InputError, match=f"{name}: not a whole gzip file"):
                read_data(tmp_path / name)
            (tmp_path / name).unlink()

        with pytest.raises(InputError, match=message):
            read_data(tmp_path / "d.xlsx")
        with pytest.raises(InputError, match=message):
            write_data(data, tmp_path / "d.txt")
        with pytest.raises(InputError, match="UTF-8 cannot hold"):
            write_data(Dataset(("\ud800",), (("x",),), data.codes[:1, :1]), tmp_path / "d.csv")

        assert list(tmp_path.iterdir()) == []
