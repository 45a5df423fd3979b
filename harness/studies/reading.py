"""From a ledger to what the analysis and the report read."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from generators.errors import InputError
from generators.streams import canonical_json, digest
from harness.analysis.runs import Runs
from harness.ledger.store import MEASURE_COLUMNS, Ledger, named_edges
from harness.plan.recipes import dataset_key
from harness.records import Bound, Condition, Learner, Limits, Requirement, Status
from harness.studies.facts import StudyFacts
from harness.studies.running import LEDGER_ENDING, ledger_path

if TYPE_CHECKING:
    import pandas as pd

SHORT_KEY = 12  # hexadecimal digits by which tables name networks and datasets


@dataclass(frozen=True, slots=True, eq=False)
class Study:
    """What a ledger holds of its newest plan.

    Parameters
    ----------
    ledger : Path
    facts : StudyFacts
    runs : Runs
        Those of the plan that are settled.
    """

    ledger: Path
    facts: StudyFacts
    runs: Runs


def find_ledger(study: Path | str, ledger: Path | str | None = None) -> Path:
    """Return the ledger of a study, which may be given as its plan or as its ledger.

    Raises
    ------
    InputError
        If there is none.
    """
    path = Path(study)
    found = (
        Path(ledger) if ledger is not None else path if path.suffix == LEDGER_ENDING else ledger_path(path)
    )
    if not found.exists():
        raise InputError(f"{found}: there is no such ledger; 'arcassay run {path}' makes it")
    return found


def read_study(path: Path | str) -> Study:
    """Read what a ledger holds of its newest plan.

    Raises
    ------
    InputError
        If it is no ledger, or no plan was ever started with it.
    """
    with Ledger.open(path) as ledger:
        newest = ledger.newest_plan()
        if newest is None:
            raise InputError(f"{path}: no plan has been started with this ledger")
        _, text, expansion = newest
        rows = ledger.run_rows()
        sessions = ledger.sessions()
    learners = tuple(_learner(fields) for fields in expansion["learners"])
    factors = tuple(expansion["factors"])
    conditions = tuple(_condition(fields, factors) for fields in expansion["conditions"])
    own = _own_runs(rows, expansion, learners, conditions)
    frame = _frame(own, conditions, factors)
    n_settled = int((frame["status"] != Status.INTERRUPTED.value).sum())
    facts = StudyFacts(
        title=expansion["title"],
        seed=expansion["seed"],
        requirement=_requirement(expansion["requirement"]),
        rows=tuple(expansion["rows"]),
        learners=learners,
        conditions=conditions,
        sessions=tuple(sessions),
        n_expected_runs=_n_datasets(conditions) * len(expansion["rows"]) * len(learners),
        n_done_runs=n_settled,
        plan_text=text,
        n_other_runs=len(rows) - len(own),
    )
    return Study(Path(path), facts, Runs(frame, factors))


def runs_table(study: Study) -> pd.DataFrame:
    """Return the runs as they are exported: one row per run, sorted, columns in a fixed order."""
    factors = list(study.runs.factors)
    front = ["run", *factors, "rows", "network", "replicate", "dataset", "label", "method", "settings"]
    back = ["status", "cause", "extendable", *MEASURE_COLUMNS, "wall_seconds", "cpu_seconds", "peak_rss_mb"]
    table = study.runs.frame[[*front, *back, "undefined", "session", "graph"]].copy()
    table["undefined"] = [canonical_json(reasons) for reasons in table["undefined"]]
    return table


def factor_column(values: list[Any]) -> pd.Series[Any]:
    """Return the levels of a factor as a column; whole numbers stay whole where some conditions have none."""
    import pandas as pd

    return pd.Series(values, dtype=object) if None in values else pd.Series(values)


def run_name(dataset: bytes, distortions: str, rows: int, learner: bytes) -> str:
    """Return the name of a run: 12 hexadecimal digits, the same in every ledger."""
    fields = {"dataset": dataset, "distortions": distortions, "rows": rows, "learner": learner}
    return digest("run", fields).hex()[:SHORT_KEY]


def _own_runs(
    rows: list[dict[str, Any]],
    expansion: Mapping[str, Any],
    learners: tuple[Learner, ...],
    conditions: tuple[Condition, ...],
) -> list[dict[str, Any]]:
    """Pick the runs of a plan, and say of each which condition, replicate and label it belongs to."""
    places = {}
    for position, fields in enumerate(expansion["conditions"]):
        distortions = canonical_json(conditions[position].data)
        for replicate, key in enumerate(fields["network_keys"]):
            for index in range(conditions[position].datasets):
                dataset = dataset_key(bytes.fromhex(key), index)
                places[dataset, distortions] = (position, replicate)
    labels = {learner.key: place for place, learner in enumerate(learners)}
    asked_rows = set(expansion["rows"])
    own = []
    for row in rows:
        place = places.get((row["dataset"], row["distortions"]))
        label = labels.get(row["learner"])
        if place is not None and label is not None and row["rows"] in asked_rows and row["asked_by"] == "run":
            own.append({**row, "condition": place[0], "replicate": place[1], "label_place": label})
    order = ("condition", "rows", "replicate", "dataset", "label_place")
    own.sort(key=lambda row: tuple(row[name] for name in order))
    return [{**row, "learner": learners[row["label_place"]]} for row in own]


def _frame(
    rows: list[dict[str, Any]], conditions: tuple[Condition, ...], factors: tuple[str, ...]
) -> pd.DataFrame:
    import pandas as pd

    names = {row["network"]: json.loads(row["network_graph"])["names"] for row in rows}
    columns: dict[str, Any] = {
        "run": [
            run_name(row["dataset"], row["distortions"], row["rows"], row["learner"].key) for row in rows
        ],
        "condition": [row["condition"] for row in rows],
        **{
            name: factor_column([conditions[row["condition"]].factors.get(name) for row in rows])
            for name in factors
        },
        "rows": [row["rows"] for row in rows],
        "network": [row["network"].hex()[:SHORT_KEY] for row in rows],
        "replicate": [row["replicate"] for row in rows],
        "dataset": [row["dataset"].hex()[:SHORT_KEY] for row in rows],
        "label": [row["learner"].label for row in rows],
        "method": [row["method"] for row in rows],
        "settings": [row["settings"] for row in rows],
        "baseline": [row["learner"].baseline for row in rows],
        "status": [row["status"] for row in rows],
        "cause": [row["cause"] for row in rows],
        "extendable": [None if row["extendable"] is None else bool(row["extendable"]) for row in rows],
        "undefined": [json.loads(row["undefined"]) if row["undefined"] else {} for row in rows],
        "session": [row["session"] for row in rows],
        "graph": [
            "" if row["graph"] is None else canonical_json(named_edges(row["graph"], names[row["network"]]))
            for row in rows
        ],
    }
    numbers = (*MEASURE_COLUMNS, "wall_seconds", "cpu_seconds", "peak_rss_mb")
    columns |= {name: pd.Series([row[name] for row in rows], dtype="float64") for name in numbers}
    return pd.DataFrame(columns)


def _learner(fields: Mapping[str, Any]) -> Learner:
    return Learner(**{**fields, "key": bytes.fromhex(fields["key"]), "limits": Limits(**fields["limits"])})


def _condition(fields: Mapping[str, Any], factors: Sequence[str]) -> Condition:
    plain = {name: value for name, value in fields.items() if name != "network_keys"}
    levels = {name: fields["factors"][name] for name in factors if name in fields["factors"]}
    return Condition(**{**plain, "factors": levels})


def _requirement(fields: Mapping[str, Any]) -> Requirement:
    return Requirement(**{**fields, "bounds": tuple(Bound(**bound) for bound in fields["bounds"])})


def _n_datasets(conditions: tuple[Condition, ...]) -> int:
    return sum(condition.replicates * condition.datasets for condition in conditions)
