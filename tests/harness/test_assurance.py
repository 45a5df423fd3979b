"""The share of runs that meet a requirement, on runs with known answers."""

from __future__ import annotations

import math
from typing import Any

import pytest

from harness.analysis.assurance import grid_answers, met_shares
from harness.analysis.intervals import wilson
from harness.records import Bound, Requirement

BOTH = Requirement((Bound("skeleton_recall", ">=", 0.7), Bound("skeleton_precision", ">=", 0.8)), 0.8)
GOOD = {"skeleton_recall": 0.9, "skeleton_precision": 0.9}
BAD = {"skeleton_recall": 0.9, "skeleton_precision": 0.5}


def test_both_bounds_must_hold_in_the_same_run(make_runs):
    """Recall in one run and precision in another make no run that meets the requirement."""
    runs = make_runs([GOOD, BAD, {"skeleton_recall": 0.5, "skeleton_precision": 0.9}, GOOD])

    (share,) = met_shares(runs, BOTH)

    assert (share.n_met, share.n_runs) == (2, 4)
    assert wilson(0.5, 4) == share.interval


def test_a_bound_holds_at_its_own_value(make_runs):
    """The signs with "=" include the value, the others do not."""
    runs = make_runs([{"skeleton_recall": 0.7, "class_shd": 3.0}])

    counts = [
        met_shares(runs, Requirement((Bound(measure, relation, value),)))[0].n_met
        for measure, relation, value in (
            ("skeleton_recall", ">=", 0.7),
            ("skeleton_recall", ">", 0.7),
            ("class_shd", "<=", 3.0),
            ("class_shd", "<", 3.0),
        )
    ]

    assert counts == [1, 0, 1, 0]


def test_failed_runs_do_not_meet_it_and_stay_in_the_count(make_runs):
    """Every sort of failure counts against the learner; an interrupted run is none."""
    failures = [
        {"status": status, "cause": "x"}
        for status in ("declined", "timeout", "out-of-memory", "crashed", "error", "invalid")
    ]
    runs = make_runs([GOOD, GOOD, *failures, {"status": "interrupted"}])

    (share,) = met_shares(runs, BOTH)

    assert (share.n_runs, share.n_met, share.n_failed, share.n_undefined) == (8, 2, 6, 0)
    assert share.interval.value == 0.25


def test_a_run_cut_off_at_its_limit_does_not_meet_a_bound_on_time(make_runs):
    """A timed-out run has a wall time, below the bound even, and meets nothing all the same."""
    runs = make_runs([{"wall_seconds": 5.0}, {"status": "timeout", "cause": "limit", "wall_seconds": 10.0}])

    (share,) = met_shares(runs, Requirement((Bound("wall_seconds", "<=", 60.0),)))

    assert (share.n_met, share.n_runs) == (1, 2)


def test_an_answer_that_leaves_a_measure_undefined_does_not_meet_its_bound(make_runs):
    """Precision of nothing claimed meets no bound, not even one from above."""
    silent: dict[str, Any] = {
        "skeleton_recall": 0.9,
        "undefined": {"skeleton_precision": "answer: no edge was learned"},
    }
    runs = make_runs([GOOD, silent, silent])

    counts = [
        met_shares(runs, Requirement((Bound("skeleton_precision", relation, value),)))[0]
        for relation, value in ((">=", 0.8), ("<=", 1.0))
    ]

    assert [(each.n_met, each.n_undefined, each.n_runs) for each in counts] == [(1, 2, 3), (1, 2, 3)]


def test_a_network_without_a_truth_to_find_is_left_out_for_every_learner(make_runs):
    """One run that shows it leaves the network out everywhere: other learners, row counts, failed runs."""
    mute = {"undefined": {"skeleton_recall": "truth: the network has no arc"}}
    runs = make_runs(
        [
            {"network": "empty", "label": "a", "rows": 100, **mute},
            {"network": "empty", "label": "a", "rows": 200, "status": "error", "cause": "x"},
            {"network": "empty", "label": "b", "rows": 100, **GOOD},
            {"network": "full", "label": "a", "rows": 100, **GOOD},
            {"network": "full", "label": "a", "rows": 200, **GOOD},
            {"network": "full", "label": "b", "rows": 100, **BAD},
        ]
    )

    shares = met_shares(runs, BOTH)

    assert [share.n_runs for share in shares] == [1, 1, 1]
    assert [share.n_met for share in shares] == [1, 0, 1]
    assert {(1, 2, 0.5)} == {(share.n_left_out, share.n_networks, share.share_left_out) for share in shares}


def test_only_bounded_measures_leave_networks_out(make_runs):
    """A truth without colliders is no reason to leave a requirement on the skeleton."""
    runs = make_runs([{**GOOD, "undefined": {"collider_recall": "truth: no unshielded collider"}}])

    (share,) = met_shares(runs, BOTH)

    assert (share.n_met, share.n_left_out) == (1, 0)


def test_where_every_network_is_left_out_there_is_no_share(make_runs):
    """Nothing to ask about is no share, and the grid answer says so."""
    runs = make_runs([{"undefined": {"skeleton_recall": "truth: the network has no arc"}}])

    shares = met_shares(runs, BOTH)
    (answer,) = grid_answers(shares, 0.8)

    assert (shares[0].interval, shares[0].n_runs) == (None, 0)
    assert (answer.sufficient, answer.best, answer.largest) == (None, None, None)


def test_datasets_of_a_network_do_not_count_as_independent(make_runs):
    """Ten networks with five alike datasets each have the interval of ten runs."""
    runs = make_runs(
        [
            {"network": f"n{i}", "dataset": f"d{i}{j}", **(GOOD if i < 6 else BAD)}
            for i in range(10)
            for j in range(5)
        ]
    )

    (share,) = met_shares(runs, BOTH)

    assert (share.n_runs, share.n_units) == (50, 10)
    assert math.isclose(10, share.interval.n)
    assert math.isclose(wilson(0.6, 10).low, share.interval.low)


def curve(make_runs, met_of_100: dict[int, int]):
    rows = [
        {"rows": n_rows, "network": f"n{i}", "dataset": f"d{i}", **(GOOD if i < met else BAD)}
        for n_rows, met in met_of_100.items()
        for i in range(100)
    ]
    return grid_answers(met_shares(make_runs(rows), BOTH), 0.8)[0]


def test_the_grid_answer_is_the_smallest_row_count_that_is_shown(make_runs):
    """Shown to suffice: where the lower end reaches .8. Best estimate: where the share does."""
    answer = curve(make_runs, {250: 30, 500: 79, 1000: 80, 2000: 87, 4000: 88, 8000: 95})

    assert wilson(0.87, 100).low < 0.8 <= wilson(0.88, 100).low
    assert (answer.sufficient.cell.rows, answer.best.cell.rows) == (4000, 1000)
    assert answer.falls_below == ()
    assert (answer.checked_to, answer.is_at_smallest) == (8000, False)


def test_a_share_that_falls_again_is_said_to(make_runs):
    """Row counts beyond the first that reaches the assurance are named where the share is below it."""
    answer = curve(make_runs, {250: 30, 500: 85, 1000: 79, 2000: 90, 4000: 60})

    assert (answer.sufficient.cell.rows, answer.best.cell.rows) == (2000, 500)
    assert [share.cell.rows for share in answer.falls_below] == [1000, 4000]


@pytest.mark.parametrize(
    ("met", "sufficient", "best"), [({250: 10, 500: 79}, None, None), ({250: 10, 500: 82}, None, 500)]
)
def test_a_requirement_may_be_not_reached_or_not_shown(make_runs, met, sufficient, best):
    """Below the assurance everywhere: neither; reached by the share alone: a best estimate only."""
    answer = curve(make_runs, met)

    assert sufficient is answer.sufficient
    assert best == (None if answer.best is None else answer.best.cell.rows)
    assert 500 == answer.largest.cell.rows == answer.checked_to


def test_an_answer_at_the_smallest_row_count_is_marked(make_runs):
    """Where the smallest row count reaches the assurance already, fewer rows may do."""
    answer = curve(make_runs, {250: 99, 500: 100})

    assert answer.is_at_smallest
    assert 250 == answer.sufficient.cell.rows == answer.best.cell.rows


def test_every_learner_and_condition_has_an_answer_of_its_own(make_runs):
    """Answers come by condition, then labels as they first appear, whatever the order of the runs."""
    runs = make_runs(
        [
            {"condition": condition, "rows": rows, "label": label, **(GOOD if label == "b" else BAD)}
            for rows in (500, 250)
            for condition in (1, 0)
            for label in ("b", "a")
        ]
    )

    answers = grid_answers(met_shares(runs, BOTH), 0.8)

    assert [
        (each.condition, each.label, None if each.best is None else each.best.cell.rows) for each in answers
    ] == [(0, "b", 250), (0, "a", None), (1, "b", 250), (1, "a", None)]
