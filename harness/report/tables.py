"""Tables as values: what text, HTML, JSON and CSV show alike, and how numbers read."""

from __future__ import annotations

import csv
import io
import math
import unicodedata
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from typing import Any

from harness.analysis.means import Durations
from harness.analysis.resampling import MeanEstimate
from harness.records import Interval

Value = str | int | float | None | MeanEstimate | Interval | Durations

NOTHING = "-"
MAX_DECIMALS = 4


@dataclass(frozen=True, slots=True)
class Column:
    """A column of a table.

    Parameters
    ----------
    key : str
        Its name in JSON and CSV.
    title : str
    is_number : bool
        Whether its values are aligned to the right.
    decimals : int
        Of its means, intervals and floats.
    """

    key: str
    title: str
    is_number: bool = True
    decimals: int = 2


@dataclass(frozen=True, slots=True)
class Table:
    """Values under headings.

    Parameters
    ----------
    key : str
        Unique within a report.
    title : str
    columns : tuple of Column
    rows : tuple of tuple of Value
        Values as they are, not yet texts: means with their errors, intervals, durations.
    notes : tuple of str
        How to read it.
    """

    key: str
    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Value, ...], ...]
    notes: tuple[str, ...] = ()

    def texts(self) -> list[list[str]]:
        """Return the body as texts, row by row."""
        return [
            [value_text(value, column.decimals) for value, column in zip(row, self.columns, strict=True)]
            for row in self.rows
        ]


def value_text(value: Value, decimals: int = 2) -> str:
    """Return a value as a person reads it; never "nan" or "inf".

    Examples
    --------
    >>> value_text(16000), value_text(0.8512), value_text(math.nan)
    ('16,000', '0.85', '-')
    >>> value_text(MeanEstimate(8.04, 0.21, 100, 100), 1)
    '8.0 (0.2)'
    >>> value_text(Interval(0.85, 0.77, 0.91, 0.95, "Wilson", 100))
    '0.85 [0.77, 0.91]'
    """
    if value is None:
        return NOTHING
    if isinstance(value, str):
        return value
    if isinstance(value, int):
        return f"{value:,}"
    if isinstance(value, MeanEstimate):
        return (
            f"{fixed(value.value, decimals)} ({_error(value.mcse, decimals)})" if value.n_values else NOTHING
        )
    if isinstance(value, Interval):
        low, high = fixed(value.low, decimals), fixed(value.high, decimals)
        return f"{fixed(value.value, decimals)} [{low}, {high}]"
    if isinstance(value, Durations):
        return seconds_text(value)
    return fixed(value, decimals)


def _error(error: float, decimals: int) -> str:
    if math.isnan(error):
        return NOTHING
    # An error that rounds to nothing is still an error: say below what it lies.
    least = 10.0**-decimals
    return f"<{fixed(least, decimals)}" if 0 < error < least / 2 else fixed(error, decimals)


def fixed(value: float, decimals: int) -> str:
    """Return a number with so many decimals, without a negative zero; "-" for NaN and infinities."""
    return f"{value:z,.{decimals}f}" if math.isfinite(value) else NOTHING


def seconds_text(times: Durations) -> str:
    """Return median seconds to two significant digits, or that it lies over the limit."""
    if math.isinf(times.median):
        return f"over {short(times.longest_seen)}" if math.isfinite(times.longest_seen) else "over the limit"
    return short(times.median)


def short(value: float) -> str:
    """Return a positive number to two significant digits, without an exponent where it is readable.

    Examples
    --------
    >>> short(0.01234), short(3.456), short(1234.5), short(0.0)
    ('0.012', '3.5', '1,234', '0')
    """
    if not math.isfinite(value):
        return NOTHING
    if value == 0:
        return "0"
    decimals = 1 - math.floor(math.log10(abs(value)))
    return f"{value:.1e}" if decimals > 6 else f"{value:,.{max(0, decimals)}f}"


def decimals_for(means: Iterable[MeanEstimate], least: int) -> int:
    """Return the decimals of a column of means: the greatest error has one significant digit.

    Parameters
    ----------
    means : iterable of MeanEstimate
    least : int
        Never fewer than this.
    """
    errors = [mean.mcse for mean in means if mean.mcse > 0]
    wanted = -math.floor(math.log10(max(errors))) if errors else least
    return min(max(wanted, least), MAX_DECIMALS)


def count_of(part: int, whole: int) -> str:
    """Return "3 of 100"."""
    return f"{part:,} of {whole:,}"


def plural(n: int, noun: str) -> str:
    """Return "1 run" or "2 runs"."""
    return f"{n:,} {noun}" if n == 1 else f"{n:,} {noun}s"


def joined(texts: Iterable[str], last: str = "and") -> str:
    """Return "a, b and c"."""
    texts = list(texts)
    return f"{', '.join(texts[:-1])} {last} {texts[-1]}" if len(texts) > 1 else "".join(texts)


def printable(text: str) -> str:
    r"""Return a text without characters that act on a terminal, a page or the direction of reading.

    Labels, causes and plans come from outside: control characters, lone surrogates and direction
    overrides become U+FFFD; line breaks stay.

    Examples
    --------
    >>> printable("red: \x1b[31m")
    'red: �[31m'
    """
    return "".join(character if _is_harmless(character) else "\ufffd" for character in text)


def _is_harmless(character: str) -> bool:
    if character == "\n":
        return True
    return unicodedata.category(character) not in ("Cc", "Cs") and unicodedata.bidirectional(
        character
    ) not in ("LRE", "RLE", "LRO", "RLO", "PDF", "LRI", "RLI", "FSI", "PDI")


def on_one_line(text: str) -> str:
    """Return a text with every run of white space as one space, without dangerous characters."""
    return printable(" ".join(text.split()))


def plain(value: Any) -> Any:
    """Return a value as strict JSON takes it: null for NaN and infinities, objects for records."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Durations):
        return {**plain(asdict(value)), "over_limit": math.isinf(value.median)}
    if isinstance(value, MeanEstimate | Interval):
        return plain(asdict(value))
    if isinstance(value, dict):
        return {str(key): plain(each) for key, each in value.items()}
    if isinstance(value, list | tuple):
        return [plain(each) for each in value]
    return value


def table_json(table: Table) -> dict[str, Any]:
    """Return a table as a plain mapping: title, columns, rows as one object each, notes."""
    return {
        "key": table.key,
        "title": table.title,
        "columns": [{"key": column.key, "title": column.title} for column in table.columns],
        "rows": [
            {column.key: plain(value) for column, value in zip(table.columns, row, strict=True)}
            for row in table.rows
        ],
        "notes": list(table.notes),
    }


def table_csv(table: Table) -> str:
    """Return a table as CSV: one header line, each record of numbers spread over a column per number.

    Examples
    --------
    >>> columns = (Column("label", "learner"), Column("shd", "class SHD"))
    >>> table = Table("t", "", columns, (("a", MeanEstimate(2.0, 0.5, 9, 9)),))
    >>> print(table_csv(table), end="")
    label,shd.value,shd.mcse,shd.n_clusters,shd.n_values,shd.reason
    a,2.0,0.5,9,9,
    """
    spread = [
        {name: each for column, value in row.items() for name, each in _spread(column, value)}
        for row in table_json(table)["rows"]
    ]
    header = list(dict.fromkeys(name for row in spread for name in row))
    out = io.StringIO()
    writer = csv.DictWriter(out, header or [column.key for column in table.columns], lineterminator="\n")
    writer.writeheader()
    writer.writerows(spread)
    return out.getvalue()


def _spread(column: str, value: Any) -> Iterable[tuple[str, Any]]:
    if isinstance(value, dict):
        return [(f"{column}.{name}", each) for name, each in value.items()]
    return [(column, value)]
