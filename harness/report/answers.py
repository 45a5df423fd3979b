"""A report's content, whole: what text, HTML and JSON render, and none of them adds to."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from harness.analysis.assurance import GridAnswer, MetShare, grid_answers, met_shares
from harness.analysis.means import Summary, summarise
from harness.analysis.runs import Runs
from harness.records import Condition
from harness.report import sentences
from harness.report.evidence import (
    MAX_DRAWN,
    FigureFacts,
    condition_figures,
    failures_table,
    growth_figures,
    headline_column,
    headline_measures,
    learners_table,
    measures_glossary,
    measures_table,
    undefined_table,
)
from harness.report.tables import Column, Table, plain, table_json
from harness.studies.facts import StudyFacts


@dataclass(frozen=True, slots=True)
class ConditionAnswers:
    """What a report says about one condition.

    Parameters
    ----------
    index : int
        Its place in the plan.
    heading : str
        Its factors and their levels; empty where nothing varies.
    factors : mapping
    population : str
        "networks", or "one-network".
    about : str
        The population in words.
    lines : tuple of str
        The answers, a sentence or two per learner.
    learners : Table
        The learners at the largest row count.
    details : tuple of Table
        Every row count, every measure.
    figures : tuple of FigureFacts
    shares : tuple of MetShare
    grid : tuple of GridAnswer
        Both empty without a requirement.
    """

    index: int
    heading: str
    factors: Mapping[str, Any]
    population: str
    about: str
    lines: tuple[str, ...]
    learners: Table
    details: tuple[Table, ...]
    figures: tuple[FigureFacts, ...]
    shares: tuple[MetShare, ...]
    grid: tuple[GridAnswer, ...]


@dataclass(frozen=True, slots=True)
class Answers:
    """What a report says.

    Parameters
    ----------
    title, question : str
    notices : tuple of str
        What a reader must know before the answer: unfinished, too few networks, a requirement too weak.
    conditions : tuple of ConditionAnswers
        Those with runs.
    reading : tuple of str
        How to read the answers.
    assumptions, cautions, not_run : tuple of str
    figures : tuple of FigureFacts
        Across conditions.
    failures : Table
    trust : tuple of Table
        Learners, conditions, measures, sessions.
    plan_text : str
    """

    title: str
    question: str
    notices: tuple[str, ...]
    conditions: tuple[ConditionAnswers, ...]
    reading: tuple[str, ...]
    assumptions: tuple[str, ...]
    cautions: tuple[str, ...]
    not_run: tuple[str, ...]
    figures: tuple[FigureFacts, ...]
    failures: Table
    trust: tuple[Table, ...]
    plan_text: str


def build_answers(runs: Runs, facts: StudyFacts) -> Answers:
    """Work out everything that a report says.

    Parameters
    ----------
    runs : Runs
        Of the plan's conditions and labels; their `condition` is a place in `facts.conditions`.
    facts : StudyFacts
    """
    settled = runs.settled()
    order = {label: place for place, label in enumerate(facts.labels)}
    summaries = sorted(summarise(settled), key=lambda each: (each.cell.condition, order[each.cell.label]))
    shares: Sequence[MetShare] = ()
    if facts.requirement is not None:
        shares = sorted(
            met_shares(settled, facts.requirement),
            key=lambda each: (each.cell.condition, order[each.cell.label], each.cell.rows),
        )
    conditions = tuple(
        _condition(index, condition, summaries, shares, facts)
        for index, condition in enumerate(facts.conditions)
        if any(summary.cell.condition == index for summary in summaries)
    )
    headings = {index: _heading(condition) for index, condition in enumerate(facts.conditions)}
    where = {index: f" ({heading})" if heading else "" for index, heading in headings.items()}
    grid = [answer for condition in conditions for answer in condition.grid]
    left_out = [
        line
        for condition in conditions
        if (line := sentences.left_out(condition.shares, condition.heading)) is not None
    ]
    return Answers(
        facts.title,
        sentences.question(facts),
        _notices(facts, conditions, where),
        conditions,
        _reading(facts),
        sentences.truth(facts.conditions),
        sentences.cautions(facts, grid, left_out, where),
        _not_run(facts, runs, summaries, headings),
        growth_figures(summaries, facts, runs.factors),
        failures_table(settled.frame, headings),
        _trust(facts, settled.measures),
        facts.plan_text,
    )


def _heading(condition: Condition) -> str:
    return ", ".join(f"{key} = {value}" for key, value in condition.factors.items())


def _condition(
    index: int,
    condition: Condition,
    all_summaries: Sequence[Summary],
    all_shares: Sequence[MetShare],
    facts: StudyFacts,
) -> ConditionAnswers:
    summaries = [summary for summary in all_summaries if summary.cell.condition == index]
    shares = [share for share in all_shares if share.cell.condition == index]
    by_rows = sorted(summaries, key=lambda summary: summary.cell.rows)  # labels stay in the plan's order
    most = by_rows[-1].cell.rows
    last = [summary for summary in summaries if summary.cell.rows == most]
    by_cell = {(share.cell.rows, share.cell.label): share for share in shares}
    heading, prefix = _heading(condition), f"condition-{index}"
    place = f", {heading}" if heading else ""
    undefined = undefined_table(f"{prefix}-undefined", f"Measures without a value{place}", by_rows)
    grid: tuple[GridAnswer, ...] = ()
    if facts.requirement is not None:
        grid = grid_answers(shares, facts.requirement.assurance)
        lines = _grid_lines(grid, facts)
    else:
        columns = [headline_column(measure) for measure in headline_measures(last)]
        lines = tuple(sentences.performance(summary, columns) for summary in last)
    unit, n_units = summaries[0].unit, max(summary.n_units for summary in summaries)
    return ConditionAnswers(
        index,
        heading,
        dict(condition.factors),
        "networks" if unit == "network" else "one-network",
        sentences.population(unit, n_units),
        lines,
        learners_table(
            f"{prefix}-learners",
            f"Learners at {most:,} rows{place}",
            last,
            by_cell,
            confidence=facts.confidence,
            by_rows=False,
        ),
        (
            learners_table(
                f"{prefix}-rows",
                f"Learners at every row count{place}",
                by_rows,
                by_cell,
                confidence=facts.confidence,
                by_rows=True,
            ),
            measures_table(f"{prefix}-measures", f"Every measure{place}", by_rows),
            *([undefined] if undefined is not None else []),
        ),
        condition_figures(prefix, heading, summaries, shares, facts) if index < MAX_DRAWN else (),
        tuple(shares),
        grid,
    )


def _grid_lines(grid: Sequence[GridAnswer], facts: StudyFacts) -> tuple[str, ...]:
    """Return a line per learner; baselines that fall short, as they should, share one."""
    assert facts.requirement is not None
    idle = [
        answer
        for answer in grid
        if answer.label in facts.baselines and answer.best is None and answer.largest is not None
    ]
    lines = [sentences.grid_answer(answer, facts.requirement) for answer in grid if answer not in idle]
    return (*lines, *([sentences.baselines(idle, facts.requirement)] if idle else []))


def _notices(
    facts: StudyFacts, conditions: Sequence[ConditionAnswers], where: Mapping[int, str]
) -> tuple[str, ...]:
    said = [sentences.unfinished(facts)]
    if facts.requirement is not None:
        for condition in conditions:
            n_units = max(share.n_units for share in condition.shares)
            unit = "network" if condition.population == "networks" else "dataset"
            line = sentences.too_few(n_units, unit, facts.requirement)
            said.append(sentences.in_condition(condition.heading, line) if line else None)
            said += [
                sentences.baseline_meets(answer, where[condition.index])
                for answer in condition.grid
                if answer.label in facts.baselines and answer.best is not None
            ]
    if len({str(plain(session["versions"])) for session in facts.sessions}) > 1:
        said.append(sentences.mixed_versions())
    if facts.n_other_runs:
        said.append(sentences.other_runs(facts.n_other_runs))
    return tuple(line for line in said if line is not None)


def _reading(facts: StudyFacts) -> tuple[str, ...]:
    said = (
        [sentences.IN_BRACKETS]
        if facts.requirement is None
        else [sentences.NO_SEARCH, sentences.requirement_counts()]
    )
    if len(facts.conditions) > MAX_DRAWN:
        said.append(sentences.some_drawn(MAX_DRAWN, len(facts.conditions)))
    return tuple(said)


def _not_run(
    facts: StudyFacts, runs: Runs, summaries: Sequence[Summary], headings: Mapping[int, str]
) -> tuple[str, ...]:
    said = list(sentences.not_run(facts, (summary.cell.label for summary in summaries), runs.n_interrupted))
    for index, heading in headings.items():
        own = [summary for summary in summaries if summary.cell.condition == index]
        counts = [summary.n_units for summary in own]
        if counts and min(counts) < max(counts):
            said.append(sentences.uneven(heading, min(counts), max(counts), own[0].unit))
    return tuple(said)


def _trust(facts: StudyFacts, measures: Sequence[str]) -> tuple[Table, ...]:
    learners = Table(
        "learners",
        "Learners of the plan",
        (
            Column("label", "learner", is_number=False),
            Column("method", "method", is_number=False),
            Column("settings", "settings", is_number=False),
            Column("limits", "limits per run", is_number=False),
            Column("baseline", "baseline", is_number=False),
        ),
        tuple(
            (
                learner.label,
                learner.source or learner.method,
                sentences.settings_text(learner.settings),
                sentences.limits_text(learner),
                "yes" if learner.baseline else "no",
            )
            for learner in facts.learners
        ),
    )
    conditions = Table(
        "conditions",
        "Conditions of the plan",
        (
            Column("condition", "condition", is_number=False),
            Column("networks", "networks", is_number=False),
            Column("replicates", "networks drawn"),
            Column("datasets", "datasets per network"),
        ),
        tuple(
            (
                _heading(condition) or "all",
                sentences.settings_text(condition.networks),
                "given" if condition.is_given else condition.replicates,
                condition.datasets,
            )
            for condition in facts.conditions
        ),
    )
    sessions = Table(
        "sessions",
        "Sessions",
        tuple(
            Column(key, key, is_number=key == "workers")
            for key in ("started", "ended", "host", "cpu", "workers", "versions")
        ),
        tuple(_session(session) for session in facts.sessions),
        (f"Seed {facts.seed}. Every network, dataset and random learner follows from it and the plan.",),
    )
    return (learners, conditions, measures_glossary(measures), sessions)


def _session(session: Mapping[str, Any]) -> tuple[str, ...]:
    versions = session["versions"]
    if isinstance(versions, Mapping):
        versions = ", ".join(f"{name} {version}" for name, version in versions.items())
    keys = ("started", "ended", "host", "cpu", "workers")
    texts = ["not recorded" if session.get(key) is None else str(session[key]) for key in keys]
    return (*texts, str(versions))


# --- as JSON ----------------------------------------------------------------------------------------------


def answers_json(answers: Answers) -> dict[str, Any]:
    """Return a report's content as a mapping that strict JSON takes.

    Returns
    -------
    dict
        The keys title, question, notices, answers (one entry per condition and learner), conditions (lines
        and tables), reading, assumptions, cautions, failures, not_run, figures, trust and plan.
    """
    return {
        "title": answers.title,
        "question": answers.question,
        "notices": list(answers.notices),
        "answers": [
            _grid_json(condition, answer) for condition in answers.conditions for answer in condition.grid
        ],
        "conditions": [_condition_json(condition) for condition in answers.conditions],
        "reading": list(answers.reading),
        "assumptions": list(answers.assumptions),
        "cautions": list(answers.cautions),
        "failures": table_json(answers.failures),
        "not_run": list(answers.not_run),
        "figures": [_figure_json(figure) for figure in answers.figures],
        "trust": [table_json(table) for table in answers.trust],
        "plan": answers.plan_text,
    }


def _condition_json(condition: ConditionAnswers) -> dict[str, Any]:
    return {
        "heading": condition.heading,
        "factors": plain(dict(condition.factors)),
        "population": condition.population,
        "about": condition.about,
        "lines": list(condition.lines),
        "tables": [table_json(table) for table in (condition.learners, *condition.details)],
        "figures": [_figure_json(figure) for figure in condition.figures],
    }


def _figure_json(figure: FigureFacts) -> dict[str, Any]:
    return {"description": figure.description, **table_json(figure.table)}


def _grid_json(condition: ConditionAnswers, answer: GridAnswer) -> dict[str, Any]:
    shares = [share for share in condition.shares if share.cell.label == answer.label]
    return {
        "label": answer.label,
        "factors": plain(dict(condition.factors)),
        "population": condition.population,
        "sufficient_rows": None if answer.sufficient is None else answer.sufficient.cell.rows,
        "best_rows": None if answer.best is None else answer.best.cell.rows,
        "is_at_smallest": answer.is_at_smallest,
        "falls_below_at": [share.cell.rows for share in answer.falls_below],
        "checked_to": answer.checked_to,
        "shares": [
            {
                "rows": share.cell.rows,
                "share": plain(share.interval),
                "n_runs": share.n_runs,
                "n_met": share.n_met,
                "n_failed": share.n_failed,
                "n_undefined": share.n_undefined,
                "networks_left_out": share.n_left_out,
            }
            for share in shares
        ],
    }
