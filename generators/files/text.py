"""Text in and out of files: reading with one-line faults, and the fields of CSV."""

from __future__ import annotations

import csv
import io
import os
import re
import tomllib
from collections.abc import Iterable, Iterator
from typing import Any

from generators.errors import InputError

# A decimal number, and none of the other texts that `float` takes (nan, 1_000).
NUMBER = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_TOML_POSITION = re.compile(r" \(at (?:line (\d+), column (\d+)|end of document)\)$")
# A leading byte-order mark is quoted too, or a reader would take it for the file's own.
_QUOTED_FIELD = re.compile(r'[,"\r\n]|\A\s|\s\Z|\A\ufeff')


def read_bytes(path: str | os.PathLike[str]) -> bytes:
    """Read a file as bytes.

    Raises
    ------
    InputError
        If there is no such file, it is a folder, or it cannot be read.
    """
    where = os.fspath(path)
    try:
        with open(where, "rb") as file:
            return file.read()
    except FileNotFoundError:
        raise InputError(f"{where}: no such file.") from None
    except IsADirectoryError:
        raise InputError(f"{where}: is a folder, expected a file.") from None
    except OSError as error:
        raise InputError(f"{where}: cannot be read: {error.strerror}.") from None
    except ValueError as error:  # a NUL in the path
        raise InputError(f"{where!r}: cannot be read: {error}.") from None


def decode(data: bytes, where: str) -> str:
    """Decode UTF-8 with or without a byte-order mark; line ends stay as they are.

    Raises
    ------
    InputError
        If the bytes are no UTF-8 text, or hold a NUL; the message names the line.
    """
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise InputError(
            f"{where}:{line}: not UTF-8 text (found the byte 0x{error.object[error.start]:02x})."
        ) from None
    if "\0" in text:
        line = text.count("\n", 0, text.index("\0")) + 1
        raise InputError(f"{where}:{line}: not a text file (found a NUL byte).")
    return text


def read_text(path: str | os.PathLike[str]) -> str:
    """Read a UTF-8 text file.

    Raises
    ------
    InputError
        As `read_bytes` and `decode`.
    """
    return decode(read_bytes(path), os.fspath(path))


def parse_toml(text: str, where: str) -> dict[str, Any]:
    """Read TOML.

    Raises
    ------
    InputError
        If it is none; the message names line and column.

    Examples
    --------
    >>> parse_toml("seed = 1", "plan.toml")
    {'seed': 1}
    >>> parse_toml("seed 1", "plan.toml")
    Traceback (most recent call last):
        ...
    generators.errors.InputError: plan.toml:1:6: Expected '=' after a key in a key/value pair.
    """
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        found = _TOML_POSITION.search(message)
        line, column = (found[1], found[2]) if found else (None, None)
        if line is None:
            lines = text.split("\n")
            line, column = len(lines), len(lines[-1]) + 1
        what = " ".join(_TOML_POSITION.sub("", message).split())
        raise InputError(f"{where}:{line}:{column}: {what}.") from None
    except ValueError as error:  # a number with more digits than Python converts
        raise InputError(f"{where}: {' '.join(str(error).split())}.") from None
    except RecursionError:
        raise InputError(f"{where}: is nested too deeply.") from None


def shown(text: str) -> str:
    r"""Return a short, one-line form of `text` for a message.

    Examples
    --------
    >>> shown("rain"), shown("two\nlines")
    ("'rain'", "'two\\nlines'")
    """
    limit = 40
    return repr(text if len(text) <= limit else text[: limit - 1] + "…")


def listed(texts: Iterable[str]) -> str:
    """Return texts with commas between them, on one line whatever they hold.

    Examples
    --------
    >>> listed(["low", "very high"])
    'low, very high'
    """
    return ", ".join(text if text.isprintable() else repr(text) for text in texts)


def csv_field(text: str) -> str:
    """Return `text` as a field of a CSV row, quoted where it must be (RFC 4180).

    Examples
    --------
    >>> csv_field("yes"), csv_field('a "b", c')
    ('yes', '"a ""b"", c"')
    """
    return '"' + text.replace('"', '""') + '"' if _QUOTED_FIELD.search(text) else text


def csv_rows(text: str, where: str) -> Iterator[tuple[int, list[str]]]:
    """Give the rows of a CSV text with the line on which each starts, blank lines left out.

    Raises
    ------
    InputError
        If a quoted field is not closed or goes on behind its closing quote.
    """
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    while True:
        line = reader.line_num + 1
        try:
            row = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            raise InputError(f"{where}:{line}: not a CSV row ({error}).") from None
        if row:
            yield line, row
