"""What a plan lacks, and in which order it is done."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from harness.execution import order
from harness.execution.messages import Work
from harness.execution.order import is_missing, missing_work, slots
from harness.ledger.store import KnownRun, RunKey
from harness.plan.recipes import dataset_key
from harness.plan.schema import Plan, expected_runs, parse_plan
from harness.records import Learner, Limits, Status
from harness.studies.running import network_keys

LEARNERS = """
from generators.graph import Graph


def one(data):
    return Graph.from_edges(data.names)


def other(data):
    return Graph.from_edges(data.names)
"""
DONE_AT_ONCE = KnownRun(Status.DONE, 0.1, Limits())


@pytest.fixture
def make_plan(tmp_path: Path) -> Callable[..., Plan]:
    (tmp_path / "learners.py").write_text(LEARNERS)

    def make(
        variables: str = "[3, 4]",
        replicates: int = 3,
        datasets: int = 2,
        rows: str = "[200, 100]",
        names: tuple[str, ...] = ("one", "other"),
    ) -> Plan:
        tables = "\n".join(f'[[learner]]\nsource = "learners.py:{name}"\nlabel = "{name}"' for name in names)
        text = (
            f"seed = 5\n[networks]\nvariables = {variables}\nreplicates = {replicates}\n"
            f"[data]\nrows = {rows}\ndatasets = {datasets}\n{tables}\n"
        )
        return parse_plan(text, tmp_path / "plan.toml")

    return make


def run_keys(works: list[Work], plan: Plan) -> list[RunKey]:
    return [
        RunKey(work.dataset_key, "{}", request.rows, plan.learners[request.learner].key)
        for work in works
        for request in work.requests
    ]


def all_work(plan: Plan, known: dict[RunKey, KnownRun] | None = None) -> list[Work]:
    return list(missing_work(plan, network_keys(plan), known or {}))


def test_an_empty_ledger_lacks_everything(make_plan: Callable[..., Plan]) -> None:
    """Every combination of dataset, row count and learner is asked for once."""
    plan = make_plan()

    keys = run_keys(all_work(plan), plan)

    assert expected_runs(plan) == 2 * 3 * 2 * 2 * 2
    assert len(keys) == expected_runs(plan)
    assert max(Counter(keys).values()) == 1


def test_work_goes_replicate_by_replicate_through_all_conditions(make_plan: Callable[..., Plan]) -> None:
    """Wherever it is stopped, no condition is more than one replicate ahead of another."""
    works = all_work(make_plan())

    assert [work.replicate for work in works] == sorted(work.replicate for work in works)
    for n_done in range(len(works) + 1):
        done = Counter((work.condition, work.replicate) for work in works[:n_done])
        per_condition = [sum(condition == place for condition, _ in done) for place in (0, 1)]
        assert max(per_condition) - min(per_condition) <= 1


def test_given_networks_take_turns_dataset_by_dataset(tmp_path: Path) -> None:
    """Where every condition has one network, the dataset is the unit, and conditions stay balanced too."""
    (tmp_path / "learners.py").write_text(LEARNERS)
    text = """
[networks]
published = ["sprinkler", "burglary"]
[data]
rows = 100
datasets = 3
[[learner]]
source = "learners.py:one"
"""
    plan = parse_plan(text, tmp_path / "plan.toml")

    works = all_work(plan)

    assert [(work.index, work.condition) for work in works] == [
        (0, 0),
        (0, 1),
        (1, 0),
        (1, 1),
        (2, 0),
        (2, 1),
    ]


def test_within_a_dataset_few_rows_come_first_and_learners_in_the_plans_order(
    make_plan: Callable[..., Plan],
) -> None:
    """Requests of one dataset are sorted by rows, then by learner."""
    requests = all_work(make_plan())[0].requests

    assert [(request.rows, request.learner) for request in requests] == [
        (100, 0),
        (100, 1),
        (200, 0),
        (200, 1),
    ]


def test_slots_carry_the_keys_of_their_recipes(make_plan: Callable[..., Plan]) -> None:
    """A slot's dataset is that of its network and index; no two slots share a dataset."""
    plan = make_plan()

    found = list(slots(plan, network_keys(plan)))

    assert [dataset_key(slot.network_key, slot.index) for slot in found] == [
        slot.dataset_key for slot in found
    ]
    assert len({slot.dataset_key for slot in found}) == len(found) == 2 * 3 * 2


def test_what_is_known_is_not_asked_again(make_plan: Callable[..., Plan]) -> None:
    """A full ledger lacks nothing; one run taken out is the only one that is asked for."""
    plan = make_plan()
    keys = run_keys(all_work(plan), plan)
    known = dict.fromkeys(keys, DONE_AT_ONCE)
    taken_out = keys[13]

    full = all_work(plan, known)
    del known[taken_out]
    lacking = all_work(plan, known)

    assert full == []
    assert run_keys(lacking, plan) == [taken_out]


@pytest.mark.parametrize(
    "larger",
    [
        {"rows": "[50, 100, 200]"},
        {"replicates": 4},
        {"datasets": 3},
        {"names": ("other", "one")},
        {"variables": "[3, 4, 5]"},
    ],
)
def test_a_larger_plan_asks_only_for_what_is_new(
    make_plan: Callable[..., Plan], larger: dict[str, object]
) -> None:
    """More rows, replicates, datasets or levels, or learners in another order, leave every old run alone."""
    small, large = make_plan(), make_plan(**larger)
    known = dict.fromkeys(run_keys(all_work(small), small), DONE_AT_ONCE)

    lacking = run_keys(all_work(large, known), large)

    assert len(lacking) == expected_runs(large) - expected_runs(small)
    assert not set(lacking) & set(known)


def test_much_work_on_one_dataset_is_handed_out_in_pieces(
    make_plan: Callable[..., Plan], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The pieces have numbers of their own and hold the same requests in the same order."""
    plan = make_plan()
    whole = all_work(plan)
    monkeypatch.setattr(order, "MAX_REQUESTS", 3)

    pieces = all_work(plan)

    assert run_keys(pieces, plan) == run_keys(whole, plan)
    assert [len(work.requests) for work in pieces[:4]] == [3, 1, 3, 1]
    assert [work.number for work in pieces] == list(range(len(pieces)))


# is_missing -----------------------------------------------------------------------------------------


def limited(seconds: float = 60.0, memory_mb: int = 2048) -> Learner:
    return Learner("one", "pc", None, {}, "pdag", "class", 1, "", Limits(seconds, memory_mb), b"key")


TIMED_OUT = KnownRun(Status.TIMEOUT, 60.0, Limits(60.0, 2048))
RAN_OUT = KnownRun(Status.OUT_OF_MEMORY, None, Limits(60.0, 2048))
FINISHED = KnownRun(Status.DONE, 30.0, Limits(60.0, 2048))


@pytest.mark.parametrize(
    ("known", "learner", "expected"),
    [
        (None, limited(), True),
        (replace(FINISHED, status=Status.INTERRUPTED), limited(), True),
        # A run that hit the time limit is asked again only if today's is higher.
        (TIMED_OUT, limited(seconds=60.0), False),
        (TIMED_OUT, limited(seconds=60.5), True),
        (TIMED_OUT, limited(seconds=10.0), False),
        (TIMED_OUT, limited(memory_mb=9999), False),
        # Likewise with memory.
        (RAN_OUT, limited(memory_mb=2048), False),
        (RAN_OUT, limited(memory_mb=2049), True),
        (RAN_OUT, limited(memory_mb=600), False),
        (RAN_OUT, limited(seconds=9999.0), False),
        # A run that finished is asked again only if it took longer than today's limit.
        (FINISHED, limited(seconds=60.0), False),
        (FINISHED, limited(seconds=600.0), False),
        (FINISHED, limited(seconds=30.0), False),
        (FINISHED, limited(seconds=29.0), True),
        # Every other ending is a result, whatever the limits.
        *(
            (replace(FINISHED, status=status), limited(seconds=seconds, memory_mb=memory_mb), False)
            for status in (Status.DECLINED, Status.CRASHED, Status.ERROR, Status.INVALID)
            for seconds, memory_mb in ((1.0, 600), (600.0, 9999))
        ),
    ],
)
def test_whether_a_run_is_asked_again(known: KnownRun | None, learner: Learner, expected: bool) -> None:
    """A raised limit asks again what it had cut off, a lowered one what it would cut off now."""
    assert is_missing(known, learner) == expected
