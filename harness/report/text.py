"""The first screen: the answer in a terminal, without colour or boxes where there is no terminal."""

from __future__ import annotations

import io
from collections.abc import Iterable, Sequence

from rich.cells import cell_len
from rich.console import Console
from rich.padding import Padding
from rich.table import Table as RichTable
from rich.text import Text

from harness.report.answers import Answers
from harness.report.tables import Column, Table, on_one_line, plural

MAX_TABLES = 4  # more conditions than this are left to the report
MAX_FAILURES = 6
LEAST_LABEL = 12  # a narrower column of labels is not worth a table
GAP = 2


def render_text(answers: Answers, width: int = 80, color: bool = False, report: str | None = None) -> str:
    """Return the first screen of a report: question, answers, learners, cautions.

    Parameters
    ----------
    answers : Answers
    width : int
        Columns of the terminal; no line is longer. Tables that do not fit become lists.
    color : bool
        Whether to use the terminal's bold and colours.
    report : str, optional
        Where the whole report is, to be named at the end.

    Returns
    -------
    str
        Lines that end with a line break.
    """
    out = io.StringIO()
    console = Console(
        file=out,
        width=width,
        force_terminal=color,
        color_system="standard" if color else None,
        markup=False,
        emoji=False,
        highlight=False,
        soft_wrap=False,
        legacy_windows=False,
    )
    _first_lines(console, answers)
    shown = [condition.learners for condition in answers.conditions[:MAX_TABLES]]
    for table in shown:
        _table(console, table, width)
    for note in dict.fromkeys(note for table in shown for note in table.notes):
        console.print(_text(note))
    if len(answers.conditions) > MAX_TABLES:
        more = len(answers.conditions) - MAX_TABLES
        _paragraphs(console, [f"The tables of {plural(more, 'further condition')} are in the report."])
    _failures(console, answers.failures)
    _section(console, "Assumptions", answers.assumptions)
    _section(console, "Cautions", answers.cautions)
    _section(console, "Not run", answers.not_run)
    if report is not None:
        _paragraphs(console, [f"Report: {report}"])
    return "\n".join(line.rstrip() for line in out.getvalue().splitlines()) + "\n"


def _first_lines(console: Console, answers: Answers) -> None:
    console.print(_text(answers.title, "bold"))
    _paragraphs(console, [answers.question])
    _section(console, "Notice", answers.notices, "yellow")
    for condition in answers.conditions:
        _section(console, condition.heading or "Answer", condition.lines, "", condition.about)
    _paragraphs(console, answers.reading if answers.conditions else ())


def _section(
    console: Console, heading: str, lines: Sequence[str], style: str = "", about: str | None = None
) -> None:
    if not lines:
        return
    console.print()
    console.print(_text(heading, "bold"))
    if about is not None:
        console.print(_text(about))
    for line in lines:
        item = RichTable.grid(padding=0)
        item.add_column(width=2)
        item.add_column(overflow="fold")
        item.add_row(Text("-"), _text(line, style))
        console.print(item)


def _paragraphs(console: Console, lines: Iterable[str]) -> None:
    for line in lines:
        console.print()
        console.print(_text(line), overflow="fold")


def _failures(console: Console, table: Table) -> None:
    if not table.rows:
        return
    keys = [column.key for column in table.columns]
    lines = []
    for row in table.texts()[:MAX_FAILURES]:
        cell = dict(zip(keys, row, strict=True))
        place = f" ({cell['condition']})" if "condition" in cell else ""
        lines.append(f"{cell['label']}{place}: {cell['runs']} {cell['status']}, {cell['cause']}")
    rest = len(table.rows) - MAX_FAILURES
    if rest > 0:
        lines.append(f"And {plural(rest, 'further line')} in the report.")
    _section(console, table.title, lines)


# --- tables -----------------------------------------------------------------------------------------------


def _table(console: Console, table: Table, width: int) -> None:
    """Print a table of learners, or a list of them where the terminal is too narrow for one.

    The share that meets the requirement is in the answers above, and left out to fit 80 columns.
    """
    kept = [place for place, column in enumerate(table.columns) if column.key != "met"]
    columns = [table.columns[place] for place in kept]
    rows = [[on_one_line(row[place]) for place in kept] for row in table.texts()]
    console.print()
    console.print(_text(table.title, "bold"))
    taken = sum(
        _number_width(column, [row[place] for row in rows]) + GAP
        for place, column in enumerate(columns)
        if column.is_number
    )
    if width - taken >= LEAST_LABEL:
        console.print(_grid(columns, rows, width - taken))
    else:
        _list(console, columns, rows)


def _grid(columns: Sequence[Column], rows: Sequence[Sequence[str]], room: int) -> RichTable:
    """Return the table with numbers as wide as need be, headings broken, and labels in what is left."""
    grid = RichTable(box=None, padding=(0, GAP, 0, 0), pad_edge=False, show_edge=False, header_style="")
    for place, column in enumerate(columns):
        width = _number_width(column, [row[place] for row in rows]) if column.is_number else None
        grid.add_column(
            _text(column.title),
            justify="right" if column.is_number else "left",
            overflow="fold",
            vertical="bottom",
            width=width,
            max_width=room if width is None else None,
        )
    for row in rows:
        grid.add_row(*(_text(text) for text in row))
    return grid


def _number_width(column: Column, texts: Sequence[str]) -> int:
    return max(cell_len(text) for text in (*column.title.split(), *texts))


def _list(console: Console, columns: Sequence[Column], rows: Sequence[Sequence[str]]) -> None:
    for row in rows:
        for column, text in zip(columns, row, strict=True):
            line = f"{column.title}: {text}" if column.is_number else text
            console.print(Padding(_text(line), (0, 0, 0, 4 if column.is_number else 2)))


def _text(text: str, style: str = "") -> Text:
    return Text(on_one_line(text), style=style, overflow="fold")
