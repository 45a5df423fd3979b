"""Write format-1.sqlite: three runs of two made-up learners; no learner runs for them."""

from __future__ import annotations

from pathlib import Path

from generators.graph import Graph
from generators.streams import digest
from harness.ledger.store import DrawnDataset, DrawnNetwork, Ledger
from harness.records import Learner, Limits, Outcome, Status

TEXT = 'title = "Format 1"\n'


def main() -> None:
    """Write the file beside this one."""
    path = Path(__file__).with_name("format-1.sqlite")
    truth = Graph.from_edges(["a", "b", "c"], directed=[("a", "b"), ("b", "c")])
    learned = Graph.from_edges(["a", "b", "c"], directed=[("a", "b")])
    learners = [
        Learner(label, "pc", None, {}, "pdag", "class", 1, "", Limits(), digest("learner", label))
        for label in ("one", "other")
    ]
    network = DrawnNetwork(digest("network", 1), {"variables": 3}, 0, truth, digest("cpts", 1))
    dataset = DrawnDataset(digest("dataset", 1), 0, "{}", digest("view", 1))
    outcomes = (
        Outcome(Status.DONE, graph=Graph.from_edges("abc"), extendable=True, measures={"class_shd": 3.0}),
        Outcome(Status.DONE, graph=learned, extendable=True, measures={"class_shd": 1.0}, wall_seconds=0.5),
        Outcome(Status.TIMEOUT, "over the limit of 60 s", wall_seconds=60.0),
    )
    with Ledger.open_to_write(path) as ledger:
        ledger.store_plan(TEXT, digest("plan", TEXT), {"title": "Format 1"}, learners)
        session = ledger.begin_session(
            host="alpha", cpu="a processor", versions={"numpy": "2.4.0"}, workers=1
        )
        place = ledger.store_material(network, dataset)
        for rows, learner, outcome in zip((100, 200, 200), (*learners, learners[0]), outcomes, strict=True):
            ledger.store_run(place, rows, learner, outcome, session=session, asked_by="run")
        ledger.end_session(session, "finished")


main()
