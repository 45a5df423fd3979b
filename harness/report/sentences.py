"""Every sentence of a report, once: text, HTML and JSON repeat them word for word."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from harness.analysis.assurance import GridAnswer, MetShare
from harness.analysis.intervals import least_n_to_show
from harness.analysis.means import Summary
from harness.plan import telling
from harness.records import Condition, Learner, Requirement
from harness.report.tables import Column, count_of, fixed, joined, plural, seconds_text, value_text
from harness.studies.facts import StudyFacts

NO_SEARCH = (
    "These are readings at the plan's row counts, each interval for itself. What holds between two row "
    "counts, or beyond the largest, was not looked at."
)
IN_BRACKETS = (
    "In round brackets: the Monte Carlo standard error. Means are over finished runs; the failed ones "
    "stand beside them."
)


def percent(confidence: float) -> str:
    """Return "95 %"."""
    return f"{100 * confidence:.10g} %"


# --- question and answers ---------------------------------------------------------------------------------


def question(facts: StudyFacts) -> str:
    """Say what the study asks."""
    if facts.requirement is None:
        return (
            "How well does each learner recover the network at each row count, how often does it fail, and "
            "how long does it take?"
        )
    return (
        f"How many rows does each learner need so that one run meets {_bounds(facts.requirement)}"
        f"{_together(facts.requirement)} with a probability of at least {facts.requirement.assurance:g}?"
    )


def _bounds(requirement: Requirement) -> str:
    return joined(str(bound) for bound in requirement.bounds)


def _together(requirement: Requirement) -> str:
    return " together" if len(requirement.bounds) > 1 else ""


def grid_answer(answer: GridAnswer, requirement: Requirement) -> str:
    """Say which row counts of the plan reach the assurance for one learner."""
    if answer.largest is None:
        return (
            f"{answer.label}: no network is left to ask about; the truth leaves a bounded measure undefined."
        )
    if answer.best is None:
        greatest = "The greatest share was" if answer.largest.n_met else "No run met the requirement: share"
        return (
            f"{answer.label}: not reached on this grid up to {answer.checked_to:,} rows. {greatest} "
            f"{_share(answer.largest, requirement)} at {answer.largest.cell.rows:,} rows."
        )
    best = f"{answer.best.cell.rows:,} rows, share {_share(answer.best, requirement)}."
    if answer.sufficient is None:
        said = (
            f"no row count up to {answer.checked_to:,} is shown to suffice. Best estimate on the grid: {best}"
        )
    else:
        said = (
            f"{answer.sufficient.cell.rows:,} rows are shown to suffice, "
            f"share {_share(answer.sufficient, requirement)}. Best estimate on the grid: "
            f"{'the same.' if answer.sufficient is answer.best else best}"
        )
    if answer.is_at_smallest:
        said += " That is the smallest row count tried: fewer rows may do."
    return f"{answer.label}: {said}{_falls_below(answer.falls_below, requirement)}"


def _falls_below(shares: Sequence[MetShare], requirement: Requirement) -> str:
    said = ""
    for is_shown, how in ((True, "the whole interval lies below"), (False, "within the Monte Carlo error")):
        places = joined(
            f"{_share(share, requirement)} at {share.cell.rows:,} rows"
            for share in shares
            if share.interval is not None and (share.interval.high < requirement.assurance) == is_shown
        )
        if places:
            said += f" More rows fall below {requirement.assurance:g} again: {places}; {how}."
    return said


def _share(share: MetShare, requirement: Requirement) -> str:
    interval = share.interval
    assert interval is not None  # a grid answer names only row counts with a share
    value, low, high = (
        _near(each, requirement.assurance) for each in (interval.value, interval.low, interval.high)
    )
    met = count_of(share.n_met, share.n_runs)
    return f"{value} ({met} runs, {percent(interval.confidence)} interval {low} to {high})"


def _near(value: float, target: float) -> str:
    # Two decimals, unless they would hide on which side of the target a share lies.
    hides = value != target and round(value, 2) == round(target, 2)
    return fixed(value, 4 if hides else 2)


def baselines(answers: Sequence[GridAnswer], requirement: Requirement) -> str:
    """Say in one sentence that no baseline reaches the requirement."""
    shares = [answer.largest for answer in answers if answer.largest is not None]
    greatest = max(shares, key=lambda share: 0.0 if share.interval is None else share.interval.value)
    return (
        f"{'Baseline' if len(answers) == 1 else 'Baselines'} {joined(answer.label for answer in answers)}: "
        f"not reached on this grid up to {max(answer.checked_to for answer in answers):,} rows. The greatest "
        f"share was {_share(greatest, requirement)}."
    )


def performance(summary: Summary, columns: Sequence[Column]) -> str:
    """Say what a learner reached at one row count, where a plan requires nothing.

    Parameters
    ----------
    summary : Summary
    columns : sequence of Column
        Of the measures to name.
    """
    parts = [
        f"{column.title} {value_text(summary.measures[column.key].mean, column.decimals)}"
        for column in columns
    ]
    failed = count_of(summary.n_failed, summary.n_runs)
    return (
        f"{summary.cell.label}: at {summary.cell.rows:,} rows {', '.join(parts)}; {failed} runs failed; "
        f"median time {seconds_text(summary.durations)} s."
    )


def population(unit: str, n_units: int) -> str:
    """Say what a condition's figures are about."""
    if unit == "network":
        return f"Over {n_units:,} networks of this kind; all learners saw the same datasets."
    return f"For this network only: {plural(n_units, 'dataset')} drawn from it, the same for all learners."


def some_drawn(n_drawn: int, n_conditions: int) -> str:
    """Say that not every condition has figures."""
    return (
        f"Figures are drawn for the first {count_of(n_drawn, n_conditions)} conditions; every condition has "
        "its tables."
    )


def in_condition(heading: str, sentence: str) -> str:
    """Say a sentence of one condition; without a heading there is only one, and it is not named."""
    return f"{heading}: {sentence}" if heading else sentence[0].upper() + sentence[1:]


# --- notices ----------------------------------------------------------------------------------------------


def unfinished(facts: StudyFacts) -> str | None:
    """Say that runs are missing, or nothing."""
    if facts.n_done_runs >= facts.n_expected_runs:
        return None
    if facts.n_done_runs == 0:
        return (
            f"None of the {plural(facts.n_expected_runs, 'run')} of this plan is done yet: no answer so far."
        )
    return (
        f"The study is not finished: {count_of(facts.n_done_runs, facts.n_expected_runs)} runs are done, and "
        "everything below is about those."
    )


def too_few(n_units: int, unit: str, requirement: Requirement) -> str | None:
    """Say that no share could show the assurance with so few units, or nothing."""
    needed = least_n_to_show(requirement.assurance, requirement.confidence)
    if n_units >= needed:
        return None
    return (
        f"{plural(n_units, unit).capitalize()} cannot show a probability of {requirement.assurance:g}, even "
        f"if every run meets the requirement: at least {needed:,} are needed."
    )


def baseline_meets(answer: GridAnswer, where: str) -> str:
    """Warn that doing nothing meets the requirement."""
    return (
        f"The baseline {answer.label} reaches the assurance{where}: as it stands, the requirement can be met "
        "without learning anything."
    )


def mixed_versions() -> str:
    """Warn that sessions differ."""
    return (
        "Sessions ran under different versions: see the list of sessions before comparing runs across them."
    )


def other_runs(n: int) -> str:
    """Say that runs of other plans are left out."""
    return f"{plural(n, 'run')} in the ledger {'is' if n == 1 else 'are'} not of this plan and left out."


# --- assumptions ------------------------------------------------------------------------------------------


def truth(conditions: Sequence[Condition]) -> tuple[str, ...]:
    """Say where the networks come from, and what is done to their data."""
    said = []
    drawn = [condition for condition in conditions if not condition.is_given]
    given = [condition for condition in conditions if condition.is_given]
    if drawn:
        said.append(f"Networks are drawn at random: {_settings(drawn, 'networks')}.")
    if given:
        said.append(f"Networks are given: {_settings(given, 'networks')}.")
    distorted = _settings(conditions, "data", without=telling.KNOWLEDGE)
    said.append(
        f"Data: {distorted}."
        if distorted
        else "Data: independent rows from each network, all variables observed, nothing missing or "
        "misclassified."
    )
    if (told := telling.sentence(condition.data for condition in conditions)) is not None:
        said.append(told)
    return tuple(said)


def _settings(conditions: Sequence[Condition], table: str, without: str = "") -> str:
    """Return the settings of conditions, each with every level it takes."""
    levels: dict[str, list[str]] = {}
    for condition in conditions:
        for key, value in getattr(condition, table).items():
            if key == without:
                continue
            own = levels.setdefault(key, [])
            if str(value) not in own:
                own.append(str(value))
    return ", ".join(f"{key} = {joined(own, 'or')}" for key, own in levels.items())


def left_out(shares: Iterable[MetShare], heading: str) -> str | None:
    """Say for one condition how many networks the requirement leaves out, or nothing."""
    share = next((share for share in shares if share.n_left_out), None)
    if share is None:
        return None
    return in_condition(
        heading,
        f"{count_of(share.n_left_out, share.n_networks)} networks ({fixed(share.share_left_out, 2)}) are "
        "left out for every learner alike, because their truth leaves a bounded measure undefined.",
    )


def requirement_counts() -> str:
    """Say what counts as meeting the requirement."""
    return (
        "A run meets the requirement if it ends done and meets all bounds at once. Failed runs do not meet "
        "it, nor do runs without a value for a bounded measure, unless the truth itself leaves it undefined."
    )


def settings_text(settings: Mapping[str, Any]) -> str:
    """Return the settings of a learner in words."""
    return ", ".join(f"{key} = {value}" for key, value in settings.items()) or "defaults"


def limits_text(learner: Learner) -> str:
    """Return the limits of a learner in words."""
    limits = learner.limits
    return f"{limits.seconds:g} s, {limits.memory_mb:,} MB, {plural(limits.threads, 'thread')}"


# --- cautions ---------------------------------------------------------------------------------------------


def cautions(
    facts: StudyFacts, answers: Sequence[GridAnswer], left_out_lines: Sequence[str], where: Mapping[int, str]
) -> tuple[str, ...]:
    """Return the cautions that apply to this study.

    Parameters
    ----------
    facts : StudyFacts
    answers : sequence of GridAnswer
        Empty without a requirement.
    left_out_lines : sequence of str
        From `left_out`.
    where : mapping of int to str
        Condition -> " (variables = 12)", empty where there is only one.
    """
    drawn = any(not condition.is_given for condition in facts.conditions)
    given = any(condition.is_given for condition in facts.conditions)
    said = []
    if drawn:
        said.append(
            "The figures are about networks drawn by this generator. Yours is one network, perhaps of "
            "another kind; a share is an average over networks, not the chance for one of them."
        )
    if given:
        said.append("A given network's figures are about that network only.")
    said.append(
        "Unless the plan says otherwise the data are faithful to the network, without hidden common causes, "
        "with independent rows, the right categories and no missing cells. Real data that break any of these "
        "usually need more rows."
    )
    said.append(
        "Intervals and standard errors are Monte Carlo error only: how far more runs could move the figure. "
        "The doubt about the generator, and about the assumptions, is not in them."
    )
    if len(facts.rows) > 1:
        said.append(
            "More rows can lower a measure: look at the curve past the answer." + _seen(answers, where)
        )
    said.append(
        "Data identify a network only up to its Markov equivalence class: directions within it are "
        "arbitrary. An edge is not a cause."
    )
    if any(telling.KNOWLEDGE in condition.data for condition in facts.conditions):
        said.append(
            "Where knowledge is told, truth and answers are compared after it is applied to both, also to "
            "the answers of learners that take none; directions that follow from it alone are not counted. "
            "What you know may be wrong more often than what is told here."
        )
    if drawn:
        said.append(
            "Conditional probability tables drawn at random carry information about the order of variables "
            "in their entropies, which real data need not have."
        )
    said.append(
        "Failed and timed-out runs count as not meeting a requirement. Times are for the machine they were "
        "taken on."
    )
    if len(facts.learners) > 1:
        said.append(
            "A learner or row count picked because it looks best here was picked on these very runs: its own "
            "figure is optimistic until fresh networks confirm it."
        )
    said.extend(left_out_lines)
    said.append(
        "Where health or safety is at stake, a statistician and the rules of that field decide; this is "
        "evidence for planning only."
    )
    return tuple(said)


def _seen(answers: Sequence[GridAnswer], where: Mapping[int, str]) -> str:
    seen = [
        f"{answer.label}{where[answer.condition]} at {answer.falls_below[0].cell.rows:,} rows"
        for answer in answers
        if answer.falls_below
    ]
    if not seen:
        return ""
    listed = seen[:3] + ([f"{len(seen) - 3} more"] if len(seen) > 3 else [])
    return f" Here the share falls below the assurance again for {joined(listed)}."


# --- what is not there ------------------------------------------------------------------------------------


def not_run(facts: StudyFacts, labels_seen: Iterable[str], n_interrupted: int) -> tuple[str, ...]:
    """Say what the plan asks for and the runs do not show."""
    said = []
    lacking = facts.n_expected_runs - facts.n_done_runs
    if lacking > 0:
        said.append(f"{count_of(lacking, facts.n_expected_runs)} runs of the plan are not done.")
    if n_interrupted:
        said.append(f"{plural(n_interrupted, 'run')} interrupted from outside, to be run again.")
    seen = set(labels_seen)
    absent = [label for label in facts.labels if label not in seen]
    if absent:
        said.append(f"No run at all: {joined(absent)}.")
    said.append("Row counts between those of the plan were not tried, and no learner was picked by a test.")
    return tuple(said)


def uneven(heading: str, least: int, most: int, unit: str) -> str:
    """Say that the cells of a condition do not rest on equally many networks."""
    return in_condition(
        heading,
        f"the figures rest on {least:,} to {plural(most, unit)}, as not all learners and row counts have run "
        "on the same ones.",
    )
