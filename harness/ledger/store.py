"""Open, write and read a ledger.

The contract. A ledger is written by one process at a time (an advisory lock beside it says so) and read
by any number. What `Ledger.commit` has returned from survives kill -9 of everything. A file that is not
a ledger, is damaged, or was written by a newer version is refused before anything touches it. When the
disk is full or the file is gone, `MachineStop` is raised; what was committed before still opens (unless
the file is gone).
"""

from __future__ import annotations

import datetime
import json
import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np

from generators.errors import InputError
from generators.graph import Graph
from generators.streams import canonical_json
from harness.ledger.lock import WriterLock, is_on_network
from harness.ledger.opening import connect, create, identity, naming, refuse_what_is_no_ledger
from harness.records import Learner, Limits, MachineStop, Outcome, Status

MEASURE_COLUMNS = (
    "class_shd",
    "dag_shd",
    "shd_per_arc",
    "skeleton_precision",
    "skeleton_recall",
    "skeleton_f1",
    "direction_precision",
    "direction_recall",
    "collider_precision",
    "collider_recall",
    "imap",
    "minimal_imap",
    "perfect_map",
)
SCORER_REVISION = 1


@dataclass(frozen=True, slots=True)
class RunKey:
    """What identifies a run: dataset with distortions, rows, learner."""

    dataset: bytes
    distortions: str
    rows: int
    learner: bytes


@dataclass(frozen=True, slots=True)
class KnownRun:
    """What decides whether a stored run is asked again."""

    status: Status
    wall_seconds: float | None
    limits: Limits


@dataclass(frozen=True, slots=True)
class DrawnNetwork:
    """A network as a run's process drew it: what the ledger stores and compares on resume."""

    key: bytes
    factors: Mapping[str, Any]
    replicate: int
    graph: Graph
    cpts_digest: bytes


@dataclass(frozen=True, slots=True)
class DrawnDataset:
    """A dataset of a drawn network."""

    key: bytes
    index: int
    distortions: str
    view_digest: bytes


def now() -> str:
    """Return the time in UTC, ISO 8601, to the millisecond."""
    return datetime.datetime.now(datetime.UTC).isoformat(timespec="milliseconds")


class Ledger:
    """A ledger that is open for reading, or for reading and writing.

    Use `Ledger.open` and `Ledger.open_to_write`, best in a ``with`` block.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     with Ledger.open_to_write(Path(folder) / "a.ledger") as ledger:
    ...         ledger.n_runs()
    0
    """

    def __init__(self, path: Path, connection: sqlite3.Connection, lock: WriterLock | None) -> None:
        self.path = path
        self._connection = connection
        self._lock = lock
        self._file = identity(path)
        self._ids: dict[tuple[str, Any], int] = {}

    @classmethod
    def open(cls, path: Path | str) -> Ledger:
        """Open an existing ledger for reading.

        Raises
        ------
        InputError
            If there is no such file, or it is no ledger that this version reads.
        """
        path = Path(path)
        refuse_what_is_no_ledger(path)
        connection = connect(path)
        with naming(path):
            connection.execute("PRAGMA query_only = ON")
        return cls(path, connection, None)

    @classmethod
    def open_to_write(cls, path: Path | str) -> Ledger:
        """Open a ledger for writing, made where there is none.

        Raises
        ------
        InputError
            If the file is no ledger that this version reads.
        MachineStop
            If another process writes to it, or it cannot be made.
        """
        path = Path(path)
        if not path.parent.is_dir():
            raise InputError(f"{path}: the folder {str(path.parent)!r} does not exist")
        if path.exists():
            refuse_what_is_no_ledger(path)
        lock = WriterLock(path)
        try:
            if not path.exists():
                create(path)
            connection = connect(path)
            with naming(path):
                # The shared memory of a write-ahead log is not shared over a network.
                connection.execute(f"PRAGMA journal_mode = {'TRUNCATE' if is_on_network(path) else 'WAL'}")
                connection.execute("PRAGMA synchronous = FULL")
                connection.execute("PRAGMA foreign_keys = ON")
        except BaseException:
            lock.release()
            raise
        return cls(path, connection, lock)

    def close(self) -> None:
        """Close the file; what was not committed is dropped."""
        self._connection.close()
        if self._lock is not None:
            self._lock.release()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # Writing ---------------------------------------------------------------------------------------

    def begin_session(self, *, host: str, cpu: str, versions: Mapping[str, str], workers: int) -> int:
        """Store a session and return its number."""
        with naming(self.path):
            session = self._insert(
                "session",
                host=host,
                cpu=cpu,
                versions=canonical_json(versions),
                workers=workers,
                started=now(),
            )
        self.commit()
        return session

    def end_session(self, session: int, ending: str) -> None:
        """Note when and how a session ended."""
        with naming(self.path):
            self._execute("UPDATE session SET ended = ?, ending = ? WHERE id = ?", (now(), ending, session))
        self.commit()

    def store_plan(
        self, text: str, digest: bytes, expansion: Mapping[str, Any], learners: Sequence[Learner]
    ) -> int:
        """Store a plan's text, what it expands to and its labels; a known plan becomes the newest again."""
        started = now()
        with naming(self.path):
            row = self._execute("SELECT id FROM plan WHERE digest = ?", (digest,)).fetchone()
            if row is None:
                plan = self._insert(
                    "plan",
                    digest=digest,
                    text=text,
                    expansion=canonical_json(expansion),
                    first_started=started,
                    last_started=started,
                )
            else:
                plan = int(row[0])
                # A learner's code may have changed under the same text: the labels follow it.
                self._execute(
                    "UPDATE plan SET last_started = ?, expansion = ? WHERE id = ?",
                    (started, canonical_json(expansion), plan),
                )
                self._execute("DELETE FROM label WHERE plan = ?", (plan,))
            for learner in learners:
                self._insert("label", plan=plan, label=learner.label, learner=self._learner_id(learner))
        self.commit()
        return plan

    def store_material(self, network: DrawnNetwork, dataset: DrawnDataset) -> int:
        """Store a drawn network and dataset, or check that they are what was stored before.

        Returns
        -------
        int
            The dataset's row.

        Raises
        ------
        InputError
            If a network or view differs from the stored one: the random streams have changed between
            versions, and the old runs cannot be continued.
        """
        with naming(self.path):
            network_id = self._network_id(network)
            known = self._ids.get(("dataset", (dataset.key, dataset.distortions)))
            if known is not None:
                return known
            row = self._execute(
                "SELECT id, view_digest FROM dataset WHERE key = ? AND distortions = ?",
                (dataset.key, dataset.distortions),
            ).fetchone()
            if row is None:
                found = self._insert(
                    "dataset",
                    key=dataset.key,
                    network=network_id,
                    index=dataset.index,
                    distortions=dataset.distortions,
                    view_digest=dataset.view_digest,
                )
            else:
                found = int(row[0])
                if row[1] != dataset.view_digest:
                    raise InputError(self._redraw_message("the column order of a dataset"))
            self._ids["dataset", (dataset.key, dataset.distortions)] = found
            return found

    def dataset_id(self, key: bytes, distortions: str) -> int:
        """Return the row of a dataset that was stored in this session."""
        return self._ids["dataset", (key, distortions)]

    def store_run(
        self,
        dataset: int,
        rows: int,
        learner: Learner,
        outcome: Outcome,
        *,
        session: int,
        asked_by: str,
        started: str | None = None,
    ) -> None:
        """Store one outcome; an earlier one of the same run is moved to `attempt`.

        Parameters
        ----------
        dataset : int
            From `store_material` or `dataset_id`.
        rows : int
        learner : Learner
        outcome : Outcome
        session : int
            From `begin_session`.
        asked_by : str
            The command that asked for the run.
        started : str, optional
            As `now` gives it; by default the time of storing.
        """
        limits = canonical_json({"seconds": learner.limits.seconds, "memory_mb": learner.limits.memory_mb})
        fields = {
            "status": str(outcome.status),
            "cause": outcome.cause,
            "graph": None if outcome.graph is None else graph_text(outcome.graph),
            "extendable": None if outcome.extendable is None else int(outcome.extendable),
            "wall_seconds": outcome.wall_seconds,
            "cpu_seconds": outcome.cpu_seconds,
            "peak_rss_mb": outcome.peak_rss_mb,
            "limits": limits,
            "threads": learner.limits.threads,
            "load": outcome.load,
            "session": session,
            "started": started or now(),
            "asked_by": asked_by,
        }
        with naming(self.path):
            learner_id = self._learner_id(learner)
            row = self._execute(
                "SELECT id FROM run WHERE dataset = ? AND rows = ? AND learner = ?",
                (dataset, rows, learner_id),
            ).fetchone()
            if row is None:
                run = self._insert("run", dataset=dataset, rows=rows, learner=learner_id, **fields)
            else:
                run = int(row[0])
                self._execute(
                    "INSERT INTO attempt (run, status, cause, wall_seconds, limits, session, started) "
                    "SELECT id, status, cause, wall_seconds, limits, session, started FROM run WHERE id = ?",
                    (run,),
                )
                columns = ", ".join(f"{name} = ?" for name in fields)
                self._execute(f"UPDATE run SET {columns} WHERE id = ?", (*fields.values(), run))
                self._execute("DELETE FROM measure WHERE run = ?", (run,))
            if outcome.status == Status.DONE:
                measures = {name: outcome.measures.get(name) for name in MEASURE_COLUMNS}
                self._insert(
                    "measure",
                    run=run,
                    scorer_revision=SCORER_REVISION,
                    undefined=canonical_json(outcome.undefined),
                    **measures,
                )

    def commit(self) -> None:
        """Make everything stored so far durable.

        Raises
        ------
        MachineStop
            If the disk is full or fails, or the file is no longer where it was opened.
        """
        with naming(self.path):
            self._connection.commit()
        # SQLite writes on into a file that was deleted or moved, and nobody would find it again.
        if identity(self.path) != self._file:
            raise MachineStop(f"{self.path}: the ledger was deleted or moved while it was written")

    # Reading ---------------------------------------------------------------------------------------

    def n_runs(self) -> int:
        """Return how many runs are stored, of whatever plan."""
        with naming(self.path):
            return int(self._execute("SELECT count(*) FROM run").fetchone()[0])

    def known_runs(self) -> dict[RunKey, KnownRun]:
        """Return every stored run with what decides whether it is asked again."""
        query = (
            "SELECT dataset.key, distortions, rows, learner.key, status, wall_seconds, limits FROM run "
            "JOIN dataset ON dataset.id = run.dataset JOIN learner ON learner.id = run.learner"
        )
        known = {}
        with naming(self.path):
            for key, distortions, rows, learner, status, seconds, limits in self._execute(query):
                stored = json.loads(limits)
                known[RunKey(key, distortions, rows, learner)] = KnownRun(
                    Status(status), seconds, Limits(stored["seconds"], stored["memory_mb"])
                )
        return known

    def newest_plan(self) -> tuple[int, str, dict[str, Any]] | None:
        """Return the plan that was started last: its number, text and expansion."""
        with naming(self.path):
            row = self._execute(
                "SELECT id, text, expansion FROM plan ORDER BY last_started DESC, id DESC LIMIT 1"
            ).fetchone()
            return None if row is None else (int(row[0]), str(row[1]), json.loads(row[2]))

    def sessions(self) -> list[dict[str, Any]]:
        """Return all sessions, oldest first."""
        with naming(self.path):
            cursor = self._execute("SELECT * FROM session ORDER BY id")
            names = [column[0] for column in cursor.description]
            sessions = [dict(zip(names, row, strict=True)) for row in cursor]
            return [{**session, "versions": json.loads(session["versions"])} for session in sessions]

    def run_rows(self) -> list[dict[str, Any]]:
        """Return every run with its keys, measures and network, as plain dictionaries."""
        query = (
            "SELECT run.id AS run, network.key AS network, network.replicate AS replicate, "
            "network.graph AS network_graph, dataset.key AS dataset, dataset.distortions AS distortions, "
            "run.rows AS rows, learner.key AS learner, learner.method AS method, "
            "learner.settings AS settings, "
            "learner.returns AS returns, run.status AS status, run.cause AS cause, run.graph AS graph, "
            "run.extendable AS extendable, run.wall_seconds AS wall_seconds, run.cpu_seconds AS cpu_seconds, "
            "run.peak_rss_mb AS peak_rss_mb, run.limits AS limits, run.session AS session, "
            f"run.asked_by AS asked_by, {', '.join('measure.' + name for name in MEASURE_COLUMNS)}, "
            "measure.undefined AS undefined FROM run JOIN dataset ON dataset.id = run.dataset "
            "JOIN network ON network.id = dataset.network JOIN learner ON learner.id = run.learner "
            "LEFT JOIN measure ON measure.run = run.id"
        )
        with naming(self.path):
            cursor = self._execute(query)
            names = [column[0] for column in cursor.description]
            return [dict(zip(names, row, strict=True)) for row in cursor]

    # Inner -----------------------------------------------------------------------------------------

    def _network_id(self, network: DrawnNetwork) -> int:
        known = self._ids.get(("network", network.key))
        if known is not None:
            return known
        graph = canonical_json({"names": network.graph.names, "edges": edge_positions(network.graph)})
        row = self._execute(
            "SELECT id, graph, cpts_digest FROM network WHERE key = ?", (network.key,)
        ).fetchone()
        if row is None:
            found = self._insert(
                "network",
                key=network.key,
                factors=canonical_json(network.factors),
                replicate=network.replicate,
                graph=graph,
                cpts_digest=network.cpts_digest,
            )
        else:
            found = int(row[0])
            if (row[1], row[2]) != (graph, network.cpts_digest):
                raise InputError(self._redraw_message("a network"))
        self._ids["network", network.key] = found
        return found

    def _learner_id(self, learner: Learner) -> int:
        known = self._ids.get(("learner", learner.key))
        if known is not None:
            return known
        row = self._execute("SELECT id FROM learner WHERE key = ?", (learner.key,)).fetchone()
        found = (
            int(row[0])
            if row is not None
            else self._insert(
                "learner",
                key=learner.key,
                method=learner.method,
                settings=canonical_json(learner.settings),
                origin=learner.source or "",
                origin_digest=learner.origin_digest,
                revision=learner.revision,
                returns=learner.returns,
            )
        )
        self._ids["learner", learner.key] = found
        return found

    def _redraw_message(self, what: str) -> str:
        earlier = [session["versions"].get("numpy", "?") for session in self.sessions()[:1]]
        return (
            f"{self.path}: {what} is drawn differently today (numpy {np.__version__}) than when the ledger "
            "was "
            f"begun (numpy {', '.join(earlier) or '?'}). Continue with that version, or start a new ledger."
        )

    def _insert(self, table: str, **fields: Any) -> int:
        columns = ", ".join(f'"{name}"' for name in fields)
        marks = ", ".join("?" * len(fields))
        cursor = self._execute(f"INSERT INTO {table} ({columns}) VALUES ({marks})", tuple(fields.values()))
        return int(cursor.lastrowid or 0)

    def _execute(self, query: str, values: Sequence[Any] = ()) -> sqlite3.Cursor:
        return self._connection.execute(query, values)


def edge_positions(graph: Graph) -> list[list[int]]:
    """Return a graph's edges over positions: [[i, j, 1 directed or 0 undirected], ...], in a fixed order."""
    undirected = graph.undirected
    sources, targets = np.nonzero(graph.arrow & ~np.tril(undirected))
    kinds = 1 - undirected[sources, targets]
    return [list(edge) for edge in zip(sources.tolist(), targets.tolist(), kinds.tolist(), strict=True)]


def graph_of(edges: Sequence[Sequence[int]], names: tuple[str, ...]) -> Graph:
    """Return the graph of which `edge_positions` are given."""
    arrow = np.zeros((len(names), len(names)), dtype=np.bool_)
    for i, j, is_directed in edges:
        arrow[i, j] = True
        if not is_directed:
            arrow[j, i] = True
    return Graph(names, arrow)


def graph_text(graph: Graph) -> str:
    """Return a graph's edges as JSON over positions, as the ledger stores them."""
    return canonical_json(edge_positions(graph))


def named_edges(text: str, names: Sequence[str]) -> list[list[str]]:
    """Return stored edges with names: [[source, target, kind], ...]."""
    return [[names[i], names[j], "directed" if kind else "undirected"] for i, j, kind in json.loads(text)]
