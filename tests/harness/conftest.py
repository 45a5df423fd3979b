"""Made-up runs, for tests of the analysis and the report: no learner runs for them."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from typing import Any

import numpy as np
import pandas as pd
import pytest

from generators.streams import digest
from harness.analysis.runs import Runs
from harness.records import Bound, Condition, Learner, Limits, Requirement
from harness.scorers.registry import MEASURES
from harness.studies.facts import StudyFacts

REQUIREMENT = Requirement((Bound("skeleton_recall", ">=", 0.7), Bound("skeleton_precision", ">=", 0.8)), 0.8)


@pytest.fixture(scope="session")
def make_runs() -> Callable[..., Runs]:
    """Give a function that makes `Runs` from one mapping per run, and fills in what it does not name."""
    return runs_from


@pytest.fixture(scope="session")
def make_study() -> Callable[..., tuple[Runs, StudyFacts]]:
    """Give a function that makes up a whole study: its runs and its facts."""
    return study_from


def runs_from(rows: Iterable[Mapping[str, Any]], factors: tuple[str, ...] = ()) -> Runs:
    filled = []
    for number, given in enumerate(rows):
        run: dict[str, Any] = {
            "run": number,
            "condition": 0,
            "rows": 1000,
            "network": f"{number:012x}",
            "replicate": 0,
            "dataset": f"{given.get('network', number)}/0",
            "label": "learner",
            "method": "learner",
            "settings": "{}",
            "baseline": False,
            "status": "done",
            "cause": "",
            **dict.fromkeys(MEASURES, math.nan),
            "undefined": {},
            "session": 1,
        }
        filled.append({**run, **given})
    return Runs(pd.DataFrame(filled), factors)


def study_from(
    labels: tuple[str, ...] = ("no-arcs", "PC, 1 %", "hill-climbing"),
    rows: tuple[int, ...] = (250, 1000, 4000, 16000),
    variables: tuple[int, ...] = (12,),
    n_networks: int = 30,
    n_datasets: int = 1,
    requirement: Requirement | None = REQUIREMENT,
    seed: int = 1,
    plan_text: str = 'title = "A study"\n',
    title: str = "Apiary winter-loss survey",
) -> tuple[Runs, StudyFacts]:
    rng = np.random.default_rng(seed)
    filled = []
    for condition, p in enumerate(variables):
        for network in range(n_networks):
            key = digest("network", [condition, network]).hex()[:12]
            luck = rng.normal(0, 0.05)
            for index in range(n_datasets):
                dataset = digest("dataset", [condition, network, index]).hex()[:12]
                for place, label in enumerate(labels):
                    for n_rows in rows:
                        filled.append(
                            {
                                "condition": condition,
                                "variables": p,
                                "rows": n_rows,
                                "network": key,
                                "replicate": network,
                                "dataset": dataset,
                                "label": label,
                                "baseline": place == 0,
                                **made_up_outcome(rng, place, n_rows, p, luck),
                            }
                        )
    factors = ("variables",) if len(variables) > 1 else ()
    facts = StudyFacts(
        title=title,
        seed=20261201,
        requirement=requirement,
        rows=rows,
        learners=tuple(
            Learner(
                label=label,
                method="no-arcs" if place == 0 else "pc",
                source=None,
                settings={} if place == 0 else {"alpha": 0.01},
                returns="cpdag",
                directions="class",
                revision=1,
                origin_digest="",
                limits=Limits(),
                key=digest("learner", label),
                baseline=place == 0,
            )
            for place, label in enumerate(labels)
        ),
        conditions=tuple(
            Condition(
                networks={
                    "variables": p,
                    "topology": "random-order",
                    "mean_parents": 1.5,
                    "max_parents": 3,
                    "states": "2-3",
                    "cpts": "dirichlet",
                    "concentration": 1.0,
                },
                factors={"variables": p} if len(variables) > 1 else {},
                replicates=n_networks,
                datasets=n_datasets,
            )
            for p in variables
        ),
        sessions=(
            {
                "host": "alpha",
                "cpu": "a processor, 2 cores",
                "versions": {"arcassay": "0.1.0", "numpy": "2.4.0"},
                "workers": 2,
                "started": "2026-12-01 09:00:00",
                "ended": "2026-12-01 09:12:30",
            },
        ),
        n_expected_runs=len(filled),
        n_done_runs=len(filled),
        plan_text=plan_text,
    )
    return runs_from(filled, factors), facts


def made_up_outcome(rng: np.random.Generator, place: int, n_rows: int, p: int, luck: float) -> dict[str, Any]:
    """Return the columns of one run; the later a learner, the better, and slower."""
    if place == 0:
        return {
            "class_shd": float(round(1.4 * p + 20 * luck)),
            "shd_per_arc": 1.0,
            "skeleton_recall": 0.0,
            "skeleton_f1": 0.0,
            "undefined": {"skeleton_precision": "answer: no edge was learned"},
            "wall_seconds": 1e-4,
            "cpu_seconds": 1e-4,
            "peak_rss_mb": 80.0,
        }
    seconds = 2e-4 * place * p**1.5 * (n_rows / 250) ** 0.7 * float(np.exp(rng.normal(0, 0.5)))
    if seconds > 1.0 * place:
        return {"status": "timeout", "cause": f"over the limit of {place} s", "wall_seconds": 1.0 * place}
    if rng.random() < 0.02:
        return {"status": "error", "cause": "ValueError: singular table\ndetails"}
    recall = float(np.clip(0.95 - 6 / np.sqrt(n_rows) - 0.01 * p / place + luck + rng.normal(0, 0.05), 0, 1))
    precision = float(np.clip(0.98 - 0.06 * place + rng.normal(0, 0.04), 0, 1))
    return {
        "class_shd": float(round(1.4 * p * (1.2 - recall * precision))),
        "shd_per_arc": 1.2 - recall * precision,
        "skeleton_precision": precision,
        "skeleton_recall": recall,
        "skeleton_f1": 2 * precision * recall / (precision + recall),
        "undefined": {"dag_shd": "learner: claims no causal directions"},
        "wall_seconds": seconds,
        "cpu_seconds": seconds,
        "peak_rss_mb": 90.0 + p,
    }
