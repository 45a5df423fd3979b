"""The report: what it says, and that nothing from outside can change how it says it."""

from __future__ import annotations

import csv
import io
import json
import re
from dataclasses import replace
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np
import pytest

from harness.analysis.curves import Curve, Point
from harness.records import Bound, Condition, Requirement
from harness.report.answers import answers_json, build_answers
from harness.report.evidence import MAX_SERIES, FigureFacts
from harness.report.figures import draw, spread
from harness.report.page import render_page
from harness.report.tables import Table, table_csv
from harness.report.text import render_text

HOSTILE = (
    '<script>alert("1")</script>',
    "$\\frac{1}{0}$ & \x1b[31mred\u202e \x00 #0072b2",
    'x" style="fill:red" y="',
)


class _Page(HTMLParser):
    """Collects the tags, attributes and text of a page."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str | None]] = []
        self.words: list[str] = []
        self.feed(page)

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        self.attributes += attributes

    def handle_data(self, data):
        self.words += data.split()

    @property
    def text(self) -> str:
        return " ".join(self.words)


@pytest.fixture(scope="module")
def answers(make_study):
    return build_answers(*make_study(variables=(12, 24)))


@pytest.fixture(scope="module")
def page(answers):
    return render_page(answers)


def every_text(value) -> list[str]:
    """Return every text within a JSON value."""
    if isinstance(value, str):
        return [value]
    if isinstance(value, dict):
        return [text for each in value.values() for text in every_text(each)]
    return [text for each in value for text in every_text(each)] if isinstance(value, list) else []


# --- the three forms --------------------------------------------------------------------------------------


def test_text_page_and_json_say_the_same_sentences(answers, page):
    """Question, answers, notices, assumptions and cautions stand word for word in all three."""
    sentences = [
        answers.question,
        *answers.notices,
        *answers.reading,
        *answers.assumptions,
        *answers.cautions,
        *answers.not_run,
        *(line for condition in answers.conditions for line in condition.lines),
    ]

    text = " ".join(render_text(answers).split())
    said = _Page(page).text
    texts = every_text(answers_json(answers))

    assert len(sentences) > 15
    for sentence in sentences:
        assert sentence in text
        assert sentence in said
        assert sentence in texts


def test_json_is_strict(make_study):
    """No NaN or infinity is left, even where a mean has no error and a median is over the limit."""
    runs, facts = make_study(n_networks=1)
    runs.frame.loc[runs.frame["label"] == "hill-climbing", ["status", "wall_seconds"]] = ["timeout", 3.0]

    text = json.dumps(answers_json(build_answers(runs, facts)), allow_nan=False)

    assert json.loads(text)["answers"][0]["population"] == "one-network"
    assert '"over_limit": true' in text


@pytest.mark.parametrize("width", [40, 60, 80, 120])
def test_no_line_is_longer_than_the_terminal(make_study, width):
    """Labels wrap and tables turn into lists rather than run over."""
    labels = (
        "no-arcs",
        "a learner with a very long label that somebody gave it",
        "x" * 90,
        "短い名前のラベル",
    )
    answers = build_answers(*make_study(labels=labels, n_networks=5))

    text = render_text(answers, width, report="/a/report.html")

    from rich.cells import cell_len

    assert max(cell_len(line) for line in text.splitlines()) <= width
    assert "/a/report.html" in text.replace("\n", "")


def test_without_a_terminal_there_are_no_colour_codes(answers):
    """Plain text has no control characters; a terminal's has, and the same words."""
    plain, coloured = render_text(answers), render_text(answers, color=True)

    assert not re.search(r"[\x00-\x09\x0b-\x1f]", plain)
    assert "\x1b[" in coloured
    assert plain == re.sub(r"\x1b\[[0-9;]*m", "", coloured)


def test_nothing_prints_as_nan_or_infinity(make_study):
    """A study of one network and one dataset, all over the limit, prints no nan, inf or None."""
    runs, facts = make_study(n_networks=1)
    runs.frame.loc[:, "status"] = "timeout"
    answers = build_answers(runs, facts)

    for text in (render_text(answers), _Page(render_page(answers)).text):
        assert not re.search(r"\b(nan|inf|None|NaN)\b", text)


def test_the_same_answers_give_the_same_bytes(make_study):
    """Page, text and JSON are the same to the byte when everything is built again."""
    first, second = (build_answers(*make_study(n_networks=5)) for _ in range(2))

    assert render_page(first) == render_page(second)
    assert render_text(first) == render_text(second)
    assert answers_json(first) == answers_json(second)


# --- the page ---------------------------------------------------------------------------------------------


def test_a_page_needs_nothing_from_outside_and_runs_nothing(page):
    """There is no script, no link or source, no style attribute, no address; the policy forbids them too."""
    found = _Page(page)

    assert not {"script", "link", "img", "iframe", "object", "embed", "base", "form"} & set(found.tags)
    assert not {"src", "style", "action"} & {name for name, _ in found.attributes}
    assert not [name for name, _ in found.attributes if name.startswith("on")]
    assert all(value.startswith("#") for name, value in found.attributes if name == "href")
    assert not re.search(r"https?:|//[a-z]|@import|url\((?!#)", page)
    assert "default-src 'none'; style-src 'sha256-" in page


def test_identifiers_of_a_page_differ_and_references_meet_them(page):
    """Figures on one page share no identifier, and every reference points at one that is there."""
    names = re.findall(r'\bid="([^"]+)"', page)
    references = re.findall(r'href="#([^"]+)"|url\(#([^)]+)\)', page)

    assert len(set(names)) == len(names)
    assert {first or second for first, second in references} <= set(names)
    assert len(references) > 20


@pytest.mark.parametrize("label", HOSTILE)
def test_hostile_labels_are_shown_and_do_nothing(make_study, label):
    """A label, title, plan and cause with markup, mathematics or escape codes end up as text."""
    runs, facts = make_study(labels=("no-arcs", label), n_networks=4, plan_text=label, title=label)
    runs.frame["status"] = ["error" if i % 7 == 0 else each for i, each in enumerate(runs.frame["status"])]
    runs.frame["cause"] = label
    answers = build_answers(runs, facts)

    page, text = render_page(answers), render_text(answers)
    found = _Page(page)
    shown = label.replace("\x1b", "\ufffd").replace("\u202e", "\ufffd").replace("\x00", "\ufffd")

    assert "script" not in found.tags
    assert "style" not in {name for name, _ in found.attributes}
    assert found.text.count(" ".join(shown.split())) > 5
    assert not re.search("[\x00\x1b\u202e]", page + text)
    assert " ".join(shown.split()) in " ".join(text.split())


def test_every_figure_is_followed_by_its_table(answers, page):
    """After each figure stand its numbers; figures have a title and a description."""
    figures = [
        *answers.figures,
        *(figure for condition in answers.conditions for figure in condition.figures),
    ]
    followed = re.findall(r"</svg>\s*</div>\s*</figure>\s*<details>\s*<summary>The figure as a table", page)

    assert len(figures) == len(followed) == page.count("<svg ") == 11
    assert all(figure.table.rows for figure in figures)
    assert page.count("<desc ") == 11


@pytest.mark.slow
def test_a_page_of_ten_thousand_runs_is_below_two_megabytes(make_study):
    """Seven learners, seven row counts, 20 conditions of 10 networks: the most figures for that many runs."""
    labels = tuple(f"learner number {i}" for i in range(7))
    rows = (250, 500, 1000, 2000, 4000, 8000, 16000)
    runs, facts = make_study(labels=labels, rows=rows, variables=tuple(range(5, 25)), n_networks=10)

    page = render_page(build_answers(runs, facts))

    assert len(runs.frame) == 9800
    assert len(page.encode()) < 2_000_000


# --- what is said -----------------------------------------------------------------------------------------


def study_with_shares(make_study, met_of_100: dict[int, int]):
    runs, facts = make_study(labels=("idle", "keen"), rows=tuple(met_of_100), n_networks=100)
    frame = runs.frame
    place = frame["replicate"].to_numpy()
    meets = place < np.array([met_of_100[rows] for rows in frame["rows"]])
    keen = (frame["label"] == "keen").to_numpy()
    frame["status"] = "done"
    frame["cause"] = ""
    frame["skeleton_recall"] = np.where(keen, 0.9, 0.0)
    frame["skeleton_precision"] = np.where(keen, np.where(meets, 0.9, 0.5), np.nan)
    return runs, facts


def test_the_answer_names_the_row_count_with_its_interval(make_study):
    """The line gives the sufficient row count, its share, runs and interval, and the best estimate."""
    answers = build_answers(*study_with_shares(make_study, {250: 30, 500: 84, 1000: 88, 2000: 60}))

    lines = answers.conditions[0].lines

    assert lines == (
        "keen: 1,000 rows are shown to suffice, share 0.88 (88 of 100 runs, 95 % interval 0.8019 to 0.93). "
        "Best estimate on the grid: 500 rows, share 0.84 (84 of 100 runs, 95 % interval 0.76 to 0.90). More "
        "rows fall below 0.8 again: 0.60 (60 of 100 runs, 95 % interval 0.50 to 0.69) at 2,000 rows; the "
        "whole interval lies below.",
        "Baseline idle: not reached on this grid up to 2,000 rows. The greatest share was 0.00 (0 of "
        "100 runs, 95 % interval 0.00 to 0.04).",
    )
    assert any(
        "Here the share falls below the assurance again for keen at 2,000 rows." in c
        for c in answers.cautions
    )


def test_what_is_not_reached_is_said_with_the_largest_row_count(make_study):
    """A requirement out of reach is said to be so only up to the last row count of the grid."""
    answers = build_answers(*study_with_shares(make_study, {250: 0, 500: 0}))

    assert answers.conditions[0].lines[0] == (
        "keen: not reached on this grid up to 500 rows. No run met the requirement: share 0.00 (0 of 100 "
        "runs, 95 % interval 0.00 to 0.04) at 250 rows."
    )


def test_two_decimals_never_hide_the_side_of_the_target(make_study):
    """A share of .79 against .792 is printed with more digits, not as the same number."""
    runs, facts = study_with_shares(make_study, {250: 79})
    close = replace(facts, requirement=replace(facts.requirement, assurance=0.792))

    line = build_answers(runs, close).conditions[0].lines[0]

    assert "share was 0.7900 (79 of 100 runs" in line


def test_too_few_networks_are_named(make_study):
    """Where even a full share could not show the assurance, the report says how many networks could."""
    answers = build_answers(*make_study(n_networks=15))

    assert any(
        "15 networks cannot show a probability of 0.8" in n and "at least 16" in n for n in answers.notices
    )
    assert not build_answers(*make_study(n_networks=16)).notices


def test_a_baseline_that_meets_the_requirement_is_a_warning(make_study):
    """A requirement that doing nothing meets asks for nothing, and the report says so first."""
    idle = Requirement((Bound("class_shd", "<=", 1000.0),), 0.8)

    answers = build_answers(*make_study(requirement=idle))

    assert any("The baseline no-arcs reaches the assurance" in notice for notice in answers.notices)


def test_an_unfinished_study_says_so(make_study):
    """Missing runs, absent learners and uneven cells are named."""
    runs, facts = make_study(n_networks=20)
    kept = runs.frame[
        (runs.frame["label"] != "PC, 1 %") & ((runs.frame["replicate"] < 18) | (runs.frame["rows"] > 250))
    ]
    partial = type(runs)(kept, runs.factors)

    answers = build_answers(partial, replace(facts, n_done_runs=len(kept)))

    assert f"{len(kept)} of {facts.n_expected_runs} runs are done" in answers.notices[0]
    assert "No run at all: PC, 1 %." in answers.not_run
    assert any("rest on 18 to 20 networks" in line for line in answers.not_run)


def test_a_study_without_runs_still_has_a_report(make_study):
    """Before the first run there is a page with assumptions and cautions, and no answer."""
    runs, facts = make_study()
    empty = type(runs)(runs.frame.iloc[:0], runs.factors)

    answers = build_answers(empty, replace(facts, n_done_runs=0))

    assert "no answer so far" in render_text(answers)
    assert "<h2" in render_page(answers)
    assert json.dumps(answers_json(answers), allow_nan=False)


def test_networks_left_out_are_a_caution_with_their_share(make_study):
    """Truths that leave a bounded measure undefined are counted in the cautions."""
    runs, facts = make_study(n_networks=20)
    first = runs.frame["network"].iloc[0]
    runs.frame["undefined"] = [
        {"skeleton_recall": "truth: the network has no arc"} if network == first else {}
        for network in runs.frame["network"]
    ]

    answers = build_answers(runs, facts)

    assert any("1 of 20 networks (0.05) are left out for every learner alike" in c for c in answers.cautions)


def test_failures_are_listed_by_cause(make_study):
    """What failed stands with its status, the first line of its cause and how often."""
    runs, facts = make_study(n_networks=10)
    runs.frame["status"] = "done"
    chosen = runs.frame["label"] == "hill-climbing"
    runs.frame.loc[chosen, "status"] = "error"
    runs.frame.loc[chosen, "cause"] = "ValueError: a   singular\ttable\nTraceback"

    answers = build_answers(runs, facts)

    assert answers.failures.rows == (
        ("hill-climbing", "error", "ValueError: a singular table", 40, "250 to 16,000"),
    )
    assert "hill-climbing: 40 error, ValueError: a singular table" in render_text(answers)


def test_a_given_network_is_reported_as_one(make_study):
    """With a network file the population is that network, and the cautions about generators stay away."""
    runs, facts = make_study(n_networks=1, n_datasets=20)
    given = replace(facts, conditions=(Condition(networks={"file": "farm.bif"}, datasets=20),))

    answers = build_answers(runs, given)

    assert answers.conditions[0].population == "one-network"
    assert "For this network only: 20 datasets" in answers.conditions[0].about
    assert not any("generator. Yours" in caution or "entropies" in caution for caution in answers.cautions)


def test_without_a_requirement_the_answer_is_what_each_learner_reached(make_study):
    """No requirement: measures at the largest row count, no share, no row count recommended."""
    answers = build_answers(*make_study(requirement=None))

    lines = answers.conditions[0].lines

    assert len(lines) == 3
    assert all(": at 16,000 rows class SHD " in line and "median time" in line for line in lines)
    assert answers_json(answers)["answers"] == []
    assert "met" not in [column.key for column in answers.conditions[0].learners.columns]


def test_health_and_safety_are_left_to_those_who_decide(make_study):
    """The last caution defers to a statistician and the field's own rules."""
    answers = build_answers(*make_study(n_networks=3))

    assert answers.cautions[-1].startswith("Where health or safety is at stake, a statistician and the rules")


# --- figures and tables -----------------------------------------------------------------------------------


def figure_of(curves: tuple[Curve, ...], kind: str = "measure", key: str = "k") -> FigureFacts:
    return FigureFacts(
        key, kind, "Title", "Words", "rows", "value", curves, None, False, Table(key, "", (), ())
    )


def test_a_figure_is_well_formed_and_names_its_learners():
    """The SVG parses as XML, has its title first, and writes each label as text."""
    curves = tuple(
        Curve(f"learner {i}", (Point(100, i, i, i), Point(200, i + 1, i, i + 2))) for i in range(8)
    )

    root = ElementTree.fromstring(draw(figure_of(curves)))

    texts = [element.text for element in root.iter("text")]
    assert root[0].text == "Title"
    assert set(texts) >= {f"learner {i}" for i in range(8)}


@pytest.mark.parametrize(
    "label", ["$x^2$", r"$\nonsense$", "<b>&amp;", "\N{SNOWMAN} \N{CJK UNIFIED IDEOGRAPH-540D}"]
)
def test_a_figure_writes_labels_as_they_are(label):
    """Labels are no mathematics and no markup, and need no glyph that the drawing library has."""
    root = ElementTree.fromstring(draw(figure_of((Curve(label, (Point(100, 1.0, 1, 1),)),))))

    assert label in [element.text for element in root.iter("text")]


def test_labels_of_a_figure_do_not_overlap():
    """Eight curves that end in one point have labels a line apart, within the figure."""
    curves = tuple(Curve(f"learner {i}", (Point(100, 1.0, 1, 1), Point(200, 5.0, 5, 5))) for i in range(8))

    root = ElementTree.fromstring(draw(figure_of(curves)))

    heights = sorted(float(e.get("y")) for e in root.iter("text") if (e.text or "").startswith("learner"))
    assert min(np.diff(heights)) > 9
    assert 0 < heights[0] < heights[-1] < float(root.get("viewBox").split()[3])


def test_times_over_the_limit_are_marked():
    """A median over the limit is drawn, at the longest time seen, with a mark of its own."""
    finished = Point(100, 2.0, 1.0, 3.0)
    over = Point(200, float("inf"), 3.0, float("inf"), 9, 60.0)

    figures = [draw(figure_of((Curve("a", (finished, last)),), "time")) for last in (over, finished)]

    open_marks = [len(re.findall(r'<use [^>]*fill-opacity="0"', figure)) for figure in figures]
    assert open_marks == [1, 0]


def test_a_figure_of_nothing_is_drawn_all_the_same():
    """Curves without a value that can be drawn leave the axes empty."""
    nothing = Curve("a", (Point(100, float("inf"), float("inf"), float("inf"), 3),))

    assert "<svg " in draw(figure_of((nothing,), "time"))


def test_a_learner_looks_alike_in_every_figure(answers):
    """Colours go with learners: one without a precision to show leaves its colour unused there."""
    figures = {figure.key: figure for figure in answers.conditions[0].figures}

    precision = draw(figures["condition-0-skeleton_precision"])
    recall = draw(figures["condition-0-skeleton_recall"])

    for text, labels in (
        (recall, ["no-arcs", "PC, 1 %", "hill-climbing"]),
        (precision, ["PC, 1 %", "hill-climbing"]),
    ):
        assert [label for label in ("no-arcs", "PC, 1 %", "hill-climbing") if f">{label}<" in text] == labels
        assert "var(--series-2," in text
        assert "var(--series-3," in text
        assert "var(--series-4," not in text


def test_more_learners_than_a_figure_can_tell_apart_make_more_figures(make_study):
    """Ten learners stand in two figures, each with the table of its own."""
    labels = tuple(f"learner {i}" for i in range(10))

    answers = build_answers(*make_study(labels=labels, rows=(250, 1000), n_networks=3))

    sizes = [len(figure.curves) for figure in answers.conditions[0].figures]
    assert max(sizes) == MAX_SERIES
    assert sizes[:2] == [8, 2]
    assert [len(figure.table.rows) for figure in answers.conditions[0].figures] == sizes


def test_labels_move_no_further_than_they_must():
    """Heights already apart stay; a pair in the way parts evenly; the limits hold."""
    assert spread(np.array([10.0, 50.0]), 12, 0, 100).tolist() == [10.0, 50.0]
    assert spread(np.array([50.0, 50.0]), 12, 0, 100).tolist() == [44.0, 56.0]
    assert spread(np.array([99.0, 98.0, 1.0]), 12, 0, 100).tolist() == [100.0, 88.0, 1.0]
    assert spread(np.array([5.0, 5.0, 5.0]), 12, 0, 10).tolist() == [0.0, 5.0, 10.0]


def test_every_number_of_a_table_has_a_column_in_csv(answers):
    """CSV spreads a mean with its error, an interval and a time over columns of plain numbers."""
    table = answers.conditions[0].learners

    rows = list(csv.DictReader(io.StringIO(table_csv(table))))

    assert [row["label"] for row in rows] == ["no-arcs", "PC, 1 %", "hill-climbing"]
    mean = table.rows[1][2]
    assert (mean.value, mean.mcse) == (float(rows[1]["class_shd.value"]), float(rows[1]["class_shd.mcse"]))
    assert 0 <= float(rows[1]["met.low"]) <= float(rows[1]["met.high"]) <= 1
