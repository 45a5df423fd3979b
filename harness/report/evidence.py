"""The tables and figures of a report, made from what the analysis found."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from harness.analysis.assurance import MetShare
from harness.analysis.curves import Curve, measure_curves, runtime_curves, share_curves
from harness.analysis.means import Summary
from harness.records import Status
from harness.report import sentences
from harness.report.tables import Column, Table, Value, count_of, decimals_for, joined, on_one_line
from harness.scorers.registry import MEASURES
from harness.studies.facts import StudyFacts

if TYPE_CHECKING:
    import pandas as pd

HEADLINE = ("class_shd", "skeleton_recall", "skeleton_precision")
DRAWN = ("skeleton_recall", "skeleton_precision", "class_shd")
TITLES = {
    "class_shd": "class SHD",
    "dag_shd": "DAG SHD",
    "shd_per_arc": "SHD per arc",
    "imap": "I-map",
    "minimal_imap": "minimal I-map",
    "skeleton_f1": "skeleton F1",
}
TIME_LINES = (
    "One line per learner against the number of {x}, both axes logarithmic; the bars reach from the lower to "
    "the upper quartile. An open triangle stands for a median over the limit."
)
MAX_SERIES = 8
MAX_DRAWN = 8  # conditions with figures of their own; a page has to stay readable and below 2 MB
MAX_FAILURE_LINES = 40
MAX_CAUSE = 160


@dataclass(frozen=True, slots=True)
class FigureFacts:
    """What a figure shows; drawing it is another matter.

    Parameters
    ----------
    key : str
        Unique within a report.
    kind : {"measure", "share", "time"}
    title, description : str
    x_title, y_title : str
    curves : tuple of Curve
        At most eight, with points or without.
    target : float or None
        Where to draw the line that the curves are to reach.
    is_proportion : bool
        Whether the values lie between 0 and 1.
    table : Table
        The same values, to be shown after it.
    """

    key: str
    kind: str
    title: str
    description: str
    x_title: str
    y_title: str
    curves: tuple[Curve, ...]
    target: float | None
    is_proportion: bool
    table: Table


def is_count(measure: str) -> bool:
    """Whether a measure counts node pairs: one decimal will do, and it has no upper end."""
    return MEASURES[measure].unit == "node pairs"


def measure_title(measure: str) -> str:
    """Return a measure's name as headings print it."""
    return TITLES.get(measure, measure.replace("_", " "))


# --- tables -----------------------------------------------------------------------------------------------


def learners_table(
    key: str,
    title: str,
    summaries: Sequence[Summary],
    shares: Mapping[tuple[int, str], MetShare],
    *,
    confidence: float,
    by_rows: bool,
) -> Table:
    """Return the plain table of learners: requirement, headline measures, failures, time.

    Parameters
    ----------
    key, title : str
    summaries : sequence of Summary
        Of one condition, in the order of the lines.
    shares : mapping of (rows, label) to MetShare
        Empty without a requirement.
    confidence : float
        Of the shares' intervals.
    by_rows : bool
        Whether lines of several row counts stand in the table, so that it needs a column of them.
    """
    measures = headline_measures(summaries)
    silent = "skeleton_precision" in measures and any(
        summary.measures["skeleton_precision"].share_undefined > 0 for summary in summaries
    )
    columns = [Column("rows", "rows")] if by_rows else []
    columns.append(Column("label", "learner", is_number=False))
    if shares:
        columns.append(
            Column("met", f"share meeting the requirement [{sentences.percent(confidence)} interval]")
        )
    for measure in measures:
        columns.append(headline_column(measure))
        if measure == "skeleton_precision" and silent:
            columns.append(Column("without_edge", "no edge"))
    columns += [Column("failed", "failed"), Column("seconds", "median s")]

    rows: list[tuple[Value, ...]] = []
    for summary in summaries:
        row: list[Value] = [summary.cell.rows] if by_rows else []
        row.append(summary.cell.label)
        if shares:
            row.append(shares[summary.cell.rows, summary.cell.label].interval)
        for measure in measures:
            row.append(summary.measures[measure].mean)
            if measure == "skeleton_precision" and silent:
                row.append(summary.measures[measure].share_undefined)
        rows.append((*row, count_of(summary.n_failed, summary.n_runs), summary.durations))

    notes = [sentences.IN_BRACKETS]
    if silent:
        notes.append(
            "A mean precision leaves out the finished runs that claimed no edge; their share stands under "
            '"no edge".'
        )
    if any(summary.durations.n_timeouts for summary in summaries):
        notes.append("Median times count a timed-out run as longer than its limit (Kaplan and Meier 1958).")
    return Table(key, title, tuple(columns), tuple(rows), tuple(notes))


def headline_column(measure: str) -> Column:
    """Return the column of a measure in the table of learners: few decimals, narrow."""
    return Column(measure, measure_title(measure), decimals=1 if is_count(measure) else 2)


def headline_measures(summaries: Sequence[Summary]) -> list[str]:
    """Return the measures that the table of learners shows, as far as the runs have them."""
    return [measure for measure in HEADLINE if summaries and measure in summaries[0].measures]


def measure_column(measure: str, summaries: Sequence[Summary]) -> Column:
    """Return the column of a measure's means, with as many decimals as their errors deserve."""
    least = 1 if is_count(measure) else 2
    means = [summary.measures[measure].mean for summary in summaries]
    return Column(measure, measure_title(measure), decimals=decimals_for(means, least))


def measures_table(key: str, title: str, summaries: Sequence[Summary]) -> Table:
    """Return the means of every measure that some run has, learner by learner and row count."""
    measures = [
        measure
        for measure in (summaries[0].measures if summaries else ())
        if any(summary.measures[measure].mean.n_values for summary in summaries)
    ]
    columns = [Column("rows", "rows"), Column("label", "learner", is_number=False)]
    columns += [measure_column(measure, summaries) for measure in measures]
    rows: list[tuple[Value, ...]] = [
        (summary.cell.rows, summary.cell.label, *(summary.measures[each].mean for each in measures))
        for summary in summaries
    ]
    return Table(key, title, tuple(columns), tuple(rows), (sentences.IN_BRACKETS,))


def undefined_table(key: str, title: str, summaries: Sequence[Summary]) -> Table | None:
    """Return where finished runs had no value, and because of what; None where all had one."""
    rows: list[tuple[Value, ...]] = [
        (
            summary.cell.rows,
            summary.cell.label,
            measure_title(measure),
            own.undefined_by_truth,
            own.undefined_by_answer,
            own.undefined_by_learner,
        )
        for summary in summaries
        for measure, own in summary.measures.items()
        if own.share_undefined > 0
    ]
    if not rows:
        return None
    columns = (
        Column("rows", "rows"),
        Column("label", "learner", is_number=False),
        Column("measure", "measure", is_number=False),
        Column("by_truth", "because of the truth"),
        Column("by_answer", "because of the answer"),
        Column("by_learner", "the learner has none"),
    )
    return Table(key, title, columns, tuple(rows), ("Shares of the finished runs.",))


def failures_table(frame: pd.DataFrame, where: Mapping[int, str]) -> Table:
    """Return what failed and why: runs by condition, learner, status and cause.

    Parameters
    ----------
    frame : pandas.DataFrame
        Settled runs.
    where : mapping of int to str
        Condition -> its heading; with a single one the table names none.
    """
    columns = (
        *([Column("condition", "condition", is_number=False)] if len(where) > 1 else []),
        Column("label", "learner", is_number=False),
        Column("status", "status", is_number=False),
        Column("cause", "cause", is_number=False),
        Column("runs", "runs"),
        Column("at_rows", "at rows", is_number=False),
    )
    failed = frame[frame["status"] != Status.DONE.value]
    causes = [on_one_line(str(cause).partition("\n")[0])[:MAX_CAUSE] for cause in failed["cause"]]
    groups: dict[tuple[int, str, str, str], list[int]] = {}
    keys = zip(failed["condition"], failed["label"], failed["status"], causes, strict=True)
    for key, at_rows in zip(keys, failed["rows"], strict=True):
        groups.setdefault(key, []).append(int(at_rows))
    counted = sorted(groups.items(), key=lambda group: (-len(group[1]), group[0]))
    lines: list[tuple[Value, ...]] = [
        (
            *([where[condition]] if len(where) > 1 else []),
            label,
            status,
            cause or "no cause given",
            len(rows),
            _range(rows),
        )
        for (condition, label, status, cause), rows in counted[:MAX_FAILURE_LINES]
    ]
    rest = counted[MAX_FAILURE_LINES:]
    n_rest = sum(len(rows) for _, rows in rest)
    notes = (f"And {n_rest:,} failed runs with {len(rest):,} further causes.",) if rest else ()
    title = "What failed, and why" if lines else "No run failed"
    return Table("failures", title, columns, tuple(lines), notes)


def _range(rows: Sequence[int]) -> str:
    least, most = min(rows), max(rows)
    return f"{least:,}" if least == most else f"{least:,} to {most:,}"


def measures_glossary(measures: Sequence[str]) -> Table:
    """Return what each measure is, in which unit, and whether more of it is better."""
    columns = tuple(
        Column(key, title, is_number=False)
        for key, title in (
            ("label", "measure"),
            ("name", "name in plans"),
            ("summary", "what it is"),
            ("unit", "unit"),
            ("better", "better"),
            ("reference", "reference"),
        )
    )
    rows = tuple(
        (measure_title(own.name), own.name, own.summary, own.unit, own.better, own.reference)
        for own in (MEASURES[measure] for measure in measures)
    )
    return Table("measures", "Measures", columns, rows)


# --- figures ----------------------------------------------------------------------------------------------


def condition_figures(
    prefix: str,
    heading: str,
    summaries: Sequence[Summary],
    shares: Sequence[MetShare],
    facts: StudyFacts,
) -> tuple[FigureFacts, ...]:
    """Return the figures of one condition: the share that meets the requirement, measures, times."""
    figures: list[FigureFacts] = []
    place = f", {heading}" if heading else ""
    level = sentences.percent(facts.confidence)
    if facts.requirement is not None:
        figures += _figures(
            f"{prefix}-met",
            "share",
            f"Share of runs that meet the requirement{place}",
            f"One line per learner against the number of rows, with {level} intervals; the level dashed line "
            f"is the assurance asked for, {facts.requirement.assurance:g}.",
            "share of runs",
            share_curves(shares),
            _share_table(shares, level),
            target=facts.requirement.assurance,
            is_proportion=True,
        )
    for measure in DRAWN:
        if not summaries or measure not in summaries[0].measures:
            continue
        figures += _figures(
            f"{prefix}-{measure}",
            "measure",
            f"Mean {measure_title(measure)} by rows{place}",
            f"One line per learner against the number of rows; the bands are {level} intervals (Monte Carlo "
            "error only).",
            f"mean {measure_title(measure)}",
            measure_curves(summaries, measure, facts.confidence),
            _mean_table(measure, summaries),
            is_proportion=not is_count(measure),
        )
    figures += _figures(
        f"{prefix}-seconds",
        "time",
        f"Median time by rows{place}",
        TIME_LINES.format(x="rows"),
        "median seconds",
        runtime_curves(summaries),
        _time_table(summaries, "rows", lambda summary: summary.cell.rows),
    )
    return tuple(figures)


def growth_figures(
    summaries: Sequence[Summary], facts: StudyFacts, factors: Sequence[str]
) -> tuple[FigureFacts, ...]:
    """Return figures of time against the number of variables, where a plan varies it.

    One per combination of the other factors, at the largest row count.
    """
    if "variables" not in factors or not summaries:
        return ()
    most = max(summary.cell.rows for summary in summaries)
    groups: dict[tuple[str, ...], list[Summary]] = {}
    for summary in summaries:
        if summary.cell.rows != most:
            continue
        levels = facts.conditions[summary.cell.condition].factors
        others = tuple(f"{key} = {levels[key]}" for key in factors if key != "variables" and key in levels)
        groups.setdefault(others, []).append(summary)

    def size(summary: Summary) -> int:
        return int(facts.conditions[summary.cell.condition].factors["variables"])

    figures: list[FigureFacts] = []
    for place, (others, own) in enumerate(groups.items()):
        if len({size(summary) for summary in own}) < 2:
            continue
        heading = "".join(f", {other}" for other in others)
        figures += _figures(
            f"variables-{place}-seconds",
            "time",
            f"Median time by variables at {most:,} rows{heading}",
            TIME_LINES.format(x="variables"),
            "median seconds",
            runtime_curves(own, {summary.cell.condition: size(summary) for summary in own}),
            _time_table(own, "variables", size),
            x_title="variables",
        )
    return tuple(figures)


def _figures(
    key: str,
    kind: str,
    title: str,
    description: str,
    y_title: str,
    curves: Sequence[Curve],
    table: Table,
    *,
    target: float | None = None,
    is_proportion: bool = False,
    x_title: str = "rows",
) -> list[FigureFacts]:
    """Return one figure, or several where there are more learners than a figure can tell apart.

    A learner without points keeps its place, so that each looks alike in all figures of a condition.
    """
    parts = [curves[start : start + MAX_SERIES] for start in range(0, len(curves), MAX_SERIES)]
    parts = [part for part in parts if any(curve.points for curve in part)]
    figures = []
    for place, part in enumerate(parts):
        labels = {curve.label for curve in part}
        split = "" if len(parts) == 1 else f" ({place + 1} of {len(parts)})"
        own_key = key if len(parts) == 1 else f"{key}-{place + 1}"
        own_table = Table(
            own_key,
            title + split,
            table.columns,
            tuple(row for row in table.rows if row[0] in labels),
            table.notes,
        )
        figures.append(
            FigureFacts(
                own_key,
                kind,
                title + split,
                description,
                x_title,
                y_title,
                tuple(part),
                target,
                is_proportion,
                own_table,
            )
        )
    return figures


def _share_table(shares: Sequence[MetShare], level: str) -> Table:
    values: dict[str, dict[int, Value]] = {}
    for share in shares:
        values.setdefault(share.cell.label, {})[share.cell.rows] = share.interval
    methods = joined(sorted({share.interval.method for share in shares if share.interval is not None}), "or")
    return _wide("", values, "rows", 2, (f"In square brackets: the {level} interval ({methods}).",))


def _mean_table(measure: str, summaries: Sequence[Summary]) -> Table:
    values: dict[str, dict[int, Value]] = {}
    for summary in summaries:
        values.setdefault(summary.cell.label, {})[summary.cell.rows] = summary.measures[measure].mean
    return _wide("", values, "rows", measure_column(measure, summaries).decimals, (sentences.IN_BRACKETS,))


def _time_table(summaries: Sequence[Summary], x_title: str, place: Callable[[Summary], int]) -> Table:
    values: dict[str, dict[int, Value]] = {}
    n_timeouts = 0
    for summary in summaries:
        values.setdefault(summary.cell.label, {})[place(summary)] = summary.durations
        n_timeouts += summary.durations.n_timeouts
    note = f"Seconds. {n_timeouts:,} runs were cut off by their limit." if n_timeouts else "Seconds."
    return _wide("", values, x_title, 2, (note,))


def _wide(
    key: str, values: Mapping[str, Mapping[int, Value]], x_title: str, decimals: int, notes: tuple[str, ...]
) -> Table:
    places = sorted({place for own in values.values() for place in own})
    columns = (
        Column("label", f"learner, by {x_title}", is_number=False),
        *(Column(f"{x_title}_{place}", f"{place:,}", decimals=decimals) for place in places),
    )
    rows = tuple((label, *(own.get(place) for place in places)) for label, own in values.items())
    return Table(key, "", columns, rows, notes)
