"""The ledger: what it refuses, what survives, and what it says about it.

What SQLite promises of its files: https://www.sqlite.org/fileformat2.html (the header's fields) and
https://www.sqlite.org/wal.html (what is committed survives the process).
"""

from __future__ import annotations

import contextlib
import hashlib
import itertools
import json
import os
import resource
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators.errors import InputError
from generators.graph import Graph
from generators.streams import digest
from harness.ledger.lock import is_on_network
from harness.ledger.opening import APPLICATION_ID, FORMAT
from harness.ledger.store import (
    MEASURE_COLUMNS,
    DrawnDataset,
    DrawnNetwork,
    KnownRun,
    Ledger,
    RunKey,
    edge_positions,
    graph_of,
    graph_text,
    named_edges,
)
from harness.records import Learner, Limits, MachineStop, Outcome, Status
from harness.scorers.registry import GRAPH_MEASURES

FORMAT_1 = Path(__file__).parent / "data" / "format-1.sqlite"
GRAPH = Graph.from_edges(["a", "b", "c"], directed=[("a", "b")], undirected=[("b", "c")])
PAGE = 4096  # SQLite's default page size


def make_learner(label: str = "PC, 1 %", *, seconds: float = 60.0, memory_mb: int = 2048) -> Learner:
    return Learner(
        label=label,
        method="pc",
        source=None,
        settings={"alpha": 0.01},
        returns="pdag",
        directions="class",
        revision=1,
        origin_digest="",
        limits=Limits(seconds, memory_mb),
        key=digest("learner", label),
    )


def drawn(
    number: int = 0, *, cpts: str = "as ever", view: str = "as ever"
) -> tuple[DrawnNetwork, DrawnDataset]:
    graph = Graph.from_edges(["a", "b", "c"], directed=[("a", "b"), ("b", "c")])
    network = DrawnNetwork(
        digest("network", number), {"variables": 3}, number, graph, digest("cpts", [cpts, number])
    )
    dataset = DrawnDataset(digest("dataset", number), 0, "{}", digest("view", [view, number]))
    return network, dataset


def begin(ledger: Ledger) -> int:
    return ledger.begin_session(host="alpha", cpu="a processor", versions={"numpy": "1.9.9"}, workers=1)


DONE = Outcome(
    Status.DONE,
    graph=GRAPH,
    extendable=True,
    measures={"class_shd": 1.0, "skeleton_recall": 0.5},
    undefined={"dag_shd": "learner: claims no causal directions"},
    wall_seconds=0.25,
    cpu_seconds=0.2,
    peak_rss_mb=90.0,
    load=0.5,
)


def store(ledger: Ledger, session: int, number: int = 0, outcome: Outcome = DONE, **limits: Any) -> None:
    dataset = ledger.store_material(*drawn(number))
    ledger.store_run(dataset, 100, make_learner(**limits), outcome, session=session, asked_by="run")


def filled(path: Path, n_runs: int = 300) -> Path:
    """Make a ledger of some fifty pages and close it."""
    with Ledger.open_to_write(path) as ledger:
        session = begin(ledger)
        for number in range(n_runs):
            store(ledger, session, number)
        ledger.commit()
    return path


def contents(folder: Path) -> dict[str, str]:
    return {
        path.name: hashlib.sha256(path.read_bytes()).hexdigest()
        for path in folder.iterdir()
        if path.is_file()
    }


def in_child(action: Callable[[], None]) -> int:
    """Run an action in a forked child, and return its exit code: 0 unless it raised."""
    pid = os.fork()
    if not pid:
        try:
            action()
            os._exit(0)
        except BaseException as error:
            sys.stderr.write(f"{type(error).__name__}: {error}\n")
        finally:
            os._exit(1)
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """Give a folder that every user may reach, unlike those of pytest."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    yield folder
    shutil.rmtree(folder)


# Opening and creating -------------------------------------------------------------------------------


def test_new_ledger_is_empty_and_marked(tmp_path: Path) -> None:
    """A ledger is made where there is none, with our application id and format in its header."""
    path = tmp_path / "a.ledger"

    with Ledger.open_to_write(path) as ledger:
        n_runs = ledger.n_runs()
    header = path.read_bytes()[:100]

    assert n_runs == 0
    # https://www.sqlite.org/fileformat2.html: user version at offset 60, application id at 68.
    assert int.from_bytes(header[60:64], "big") == FORMAT
    assert int.from_bytes(header[68:72], "big") == APPLICATION_ID


def test_closing_leaves_the_ledger_alone_in_its_folder(tmp_path: Path) -> None:
    """After the writer has closed, neither a log nor a lock nor a draft stands beside the ledger."""
    filled(tmp_path / "a.ledger", 3)

    Ledger.open(tmp_path / "a.ledger").close()

    assert sorted(contents(tmp_path)) == ["a.ledger"]


def test_reading_what_is_not_there_is_refused(tmp_path: Path) -> None:
    """Opening for reading makes no ledger."""
    with pytest.raises(InputError, match=r"a\.ledger: there is no such ledger"):
        Ledger.open(tmp_path / "a.ledger")

    assert contents(tmp_path) == {}


def test_missing_folder_is_refused(tmp_path: Path) -> None:
    """A ledger in a folder that does not exist is a mistake of the user, who is told the folder."""
    with pytest.raises(InputError, match=r"the folder '.*/nowhere' does not exist"):
        Ledger.open_to_write(tmp_path / "nowhere" / "a.ledger")


@pytest.mark.parametrize("opening", [Ledger.open, Ledger.open_to_write])
def test_a_folder_is_refused(tmp_path: Path, opening: Callable[[Path], Ledger]) -> None:
    """A folder is not a ledger."""
    with pytest.raises(InputError, match="cannot be read"):
        opening(tmp_path)

    assert list(tmp_path.iterdir()) == []


def not_a_ledger(path: Path) -> None:
    path.write_bytes(b"rows,label\n100,PC\n" * 40)


def empty(path: Path) -> None:
    path.touch()


def of_another_program(path: Path) -> None:
    with contextlib.closing(sqlite3.connect(path)) as connection:
        connection.execute("PRAGMA application_id = 252006675")
        connection.execute("CREATE TABLE run (id INTEGER PRIMARY KEY)")


def of_a_newer_format(path: Path) -> None:
    filled(path, 3)
    with contextlib.closing(sqlite3.connect(path)) as connection:
        connection.execute(f"PRAGMA user_version = {FORMAT + 1}")


def cut_short(path: Path) -> None:
    filled(path)
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])


def cut_within_the_header(path: Path) -> None:
    filled(path, 3)
    path.write_bytes(path.read_bytes()[:50])


def flipped_in_the_middle(path: Path) -> None:
    """Invert the first bytes of every third page from the eighth on: a page's head says what it is."""
    content = bytearray(filled(path).read_bytes())
    for page in range(8 * PAGE, len(content), 3 * PAGE):
        content[page : page + 16] = bytes(byte ^ 0xFF for byte in content[page : page + 16])
    path.write_bytes(content)


REFUSED = [
    (not_a_ledger, "is not a ledger"),
    (empty, "is not a ledger"),
    (of_another_program, "is a database, but not a ledger"),
    (of_a_newer_format, f"was written by ledger format {FORMAT + 1}; this version reads up to {FORMAT}"),
    (cut_short, "the ledger is damaged"),
    (cut_within_the_header, "is not a ledger, or its first bytes are damaged"),
    (flipped_in_the_middle, "the ledger is damaged"),
]


@pytest.mark.parametrize("opening", [Ledger.open, Ledger.open_to_write])
@pytest.mark.parametrize(("make", "message"), REFUSED)
def test_refused_file_is_left_as_it_is(
    tmp_path: Path, opening: Callable[[Path], Ledger], make: Callable[[Path], None], message: str
) -> None:
    """What is refused is byte for byte what it was, nothing stands beside it, and the lock is free."""
    path = tmp_path / "a.ledger"
    make(path)
    before = contents(tmp_path)

    with pytest.raises(InputError, match=message):
        opening(path)

    assert before == contents(tmp_path)


@pytest.mark.parametrize("opening", [Ledger.open, Ledger.open_to_write])
def test_damaged_ledger_with_a_log_is_left_as_it_is(
    tmp_path: Path, opening: Callable[[Path], Ledger]
) -> None:
    """The log that a killed writer left is not moved into a damaged file by refusing it."""
    copy = tmp_path / "copy"
    copy.mkdir()
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        session = begin(ledger)
        for number in range(300):
            store(ledger, session, number)
        ledger.commit()
        ledger._connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        for number in range(300, 320):
            store(ledger, session, number)
        ledger.commit()
        for name in ("a.ledger", "a.ledger-wal"):  # as kill -9 would leave them
            shutil.copy(tmp_path / name, copy)
    path = copy / "a.ledger"
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    before = contents(copy)

    with pytest.raises(InputError, match="damaged"):
        opening(path)

    assert before == {name: found for name, found in contents(copy).items() if not name.endswith("-shm")}


def test_log_of_a_killed_writer_is_read(tmp_path: Path) -> None:
    """What was committed to the log alone is there when the ledger is opened again."""
    copy = tmp_path / "copy"
    copy.mkdir()
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        store(ledger, begin(ledger))
        ledger.commit()
        for name in ("a.ledger", "a.ledger-wal"):
            shutil.copy(tmp_path / name, copy)

    with Ledger.open(copy / "a.ledger") as again:
        n_runs = again.n_runs()

    assert n_runs == 1
    assert sorted(contents(copy)) == ["a.ledger"]


def test_text_that_is_no_longer_json_is_damage(tmp_path: Path) -> None:
    """Damage within a field that SQLite cannot see is an error of the input when it is read, no traceback."""
    path = filled(tmp_path / "a.ledger", 1)
    with contextlib.closing(sqlite3.connect(path)) as connection:
        connection.execute("UPDATE session SET versions = 'numpy 2'")
        connection.execute("UPDATE run SET limits = CAST(x'7bff7d' AS TEXT)")
        connection.commit()

    with Ledger.open(path) as ledger:
        with pytest.raises(InputError, match="damaged"):
            ledger.sessions()
        with pytest.raises(InputError, match="damaged"):
            ledger.known_runs()


def test_format_1_opens() -> None:
    """A ledger that was written when the format was 1 is read by this version, and by every later one.

    Made by this program: see data/README.md.
    """
    with Ledger.open(FORMAT_1) as ledger:
        known = ledger.known_runs()
        rows = ledger.run_rows()
        newest = ledger.newest_plan()

    assert {
        status: sum(run.status == status for run in known.values()) for status in ("done", "timeout")
    } == {"done": 2, "timeout": 1}
    assert newest is not None
    assert newest[2]["title"] == "Format 1"
    assert [row["class_shd"] for row in rows if row["status"] == "done"] == [3.0, 1.0]


def test_format_1_can_be_written_to(tmp_path: Path) -> None:
    """A copy of the ledger of format 1 takes another run."""
    path = tmp_path / "a.ledger"
    path.write_bytes(FORMAT_1.read_bytes())

    with Ledger.open_to_write(path) as ledger:
        store(ledger, begin(ledger), 77)
        ledger.commit()
        n_runs = ledger.n_runs()

    assert n_runs == 4


# Schema ---------------------------------------------------------------------------------------------


def test_measure_columns_are_the_registered_graph_measures(tmp_path: Path) -> None:
    """The measure table, the store and the registry of scorers name the same measures."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        columns = [row[1] for row in ledger._connection.execute("PRAGMA table_info(measure)")]

    assert ["run", "scorer_revision", *MEASURE_COLUMNS, "undefined"] == columns
    assert sorted(GRAPH_MEASURES) == sorted(MEASURE_COLUMNS)


def test_every_table_is_strict(tmp_path: Path) -> None:
    """SQLite itself refuses a value of another type, in every table (https://www.sqlite.org/stricttables.html)."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        tables = ledger._connection.execute("PRAGMA table_list").fetchall()
        store(ledger, begin(ledger))
        with pytest.raises(sqlite3.IntegrityError, match="cannot store TEXT value in REAL column"):
            ledger._connection.execute("UPDATE measure SET class_shd = 'many'")

    # Columns of the pragma: schema, name, type, ncol, wr, strict.
    assert [table[1] for table in tables if not table[5] and not table[1].startswith("sqlite_")] == []


def test_edges_are_stored_by_position_and_come_back_with_names() -> None:
    """A graph's text names positions, 1 for directed; named_edges puts the names back."""
    text = graph_text(GRAPH)

    assert json.loads(text) == [[0, 1, 1], [1, 2, 0]]
    assert named_edges(text, ["a", "b", "c"]) == [["a", "b", "directed"], ["b", "c", "undirected"]]


MARKS = st.sampled_from(["none", "forth", "back", "undirected"])


@given(
    marks=st.integers(1, 6).flatmap(
        lambda p: st.lists(MARKS, min_size=p * (p - 1) // 2, max_size=p * (p - 1) // 2)
    )
)
def test_any_graph_comes_back_from_its_positions(marks: list[str]) -> None:
    """What is stored of a graph gives the same graph again, with its edges in the graph's own order."""
    n = next(p for p in range(1, 7) if p * (p - 1) // 2 == len(marks))
    names = tuple("abcdef"[:n])
    pairs = dict(zip(itertools.combinations(names, 2), marks, strict=True))
    graph = Graph.from_edges(
        names,
        directed=[
            pair if mark == "forth" else pair[::-1]
            for pair, mark in pairs.items()
            if mark in ("forth", "back")
        ],
        undirected=[pair for pair, mark in pairs.items() if mark == "undirected"],
    )

    positions = edge_positions(graph)

    assert graph_of(positions, names) == graph
    assert named_edges(graph_text(graph), names) == [list(edge) for edge in graph.edges()]


# One writer -----------------------------------------------------------------------------------------


def test_second_writer_is_stopped_and_told_who_writes(tmp_path: Path) -> None:
    """Two processes, or two parts of one, do not write to a ledger at the same time."""
    with (
        Ledger.open_to_write(tmp_path / "a.ledger"),
        pytest.raises(MachineStop, match=rf"is being written by process {os.getpid()} on \S+"),
    ):
        Ledger.open_to_write(tmp_path / "a.ledger")


def test_a_ledger_under_two_names_has_one_writer(tmp_path: Path) -> None:
    """A symbolic link does not get round the lock."""
    (tmp_path / "link.ledger").symlink_to(tmp_path / "a.ledger")

    with Ledger.open_to_write(tmp_path / "a.ledger"), pytest.raises(MachineStop, match="is being written"):
        Ledger.open_to_write(tmp_path / "link.ledger")


def test_a_reader_and_a_writer_do_not_disturb_each_other(tmp_path: Path) -> None:
    """A reader sees what was committed when it looks, while the writer goes on."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as writer:
        session = begin(writer)
        with Ledger.open(tmp_path / "a.ledger") as reader:
            store(writer, session, 0)
            before = reader.n_runs()
            writer.commit()
            after = reader.n_runs()

    assert (before, after) == (0, 1)


def test_lock_of_a_killed_writer_is_free(tmp_path: Path) -> None:
    """A `kill -9` of the writer frees the lock with the process; the note that it leaves stops nobody."""
    path = tmp_path / "a.ledger"
    ready, tell = os.pipe()
    pid = os.fork()
    if not pid:
        ledger = Ledger.open_to_write(path)
        os.write(tell, b"x")
        time.sleep(60)
        ledger.close()
        os._exit(0)
    os.read(ready, 1)
    with pytest.raises(MachineStop, match=f"process {pid}"):
        Ledger.open_to_write(path)

    os.kill(pid, signal.SIGKILL)
    os.waitpid(pid, 0)

    Ledger.open_to_write(path).close()
    assert sorted(contents(tmp_path)) == ["a.ledger"]


# The machine ----------------------------------------------------------------------------------------


def fill_until_stopped(ledger: Ledger) -> int:
    """Store and commit runs until the machine says no; return how many commits came back."""
    session = begin(ledger)
    for number in range(100_000):
        try:
            store(ledger, session, number)
            ledger.commit()
        except MachineStop:
            return number
    raise AssertionError("the disk never became full")


def test_full_disk_keeps_all_that_was_committed(tmp_path: Path) -> None:
    """When no page can be added, the work stops; the ledger opens and holds every committed run.

    SQLite answers a database at its greatest size as it answers a full disk: SQLITE_FULL
    (https://www.sqlite.org/pragma.html#pragma_max_page_count).
    """
    path = tmp_path / "a.ledger"
    with Ledger.open_to_write(path) as ledger:
        ledger._connection.execute("PRAGMA max_page_count = 60")
        n_committed = fill_until_stopped(ledger)

    with Ledger.open_to_write(path) as again:
        n_runs = again.n_runs()

    assert n_committed > 10
    assert n_committed == n_runs


def test_file_that_may_not_grow_keeps_all_that_was_committed(tmp_path: Path) -> None:
    """A write that the system refuses stops the work; the ledger opens and holds every committed run."""
    path, count = tmp_path / "a.ledger", tmp_path / "count"

    def act() -> None:
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)  # the write then fails with EFBIG (man 2 setrlimit)
        ledger = Ledger.open_to_write(path)
        resource.setrlimit(resource.RLIMIT_FSIZE, (400_000, 400_000))
        n_committed = fill_until_stopped(ledger)
        ledger.close()
        count.write_text(str(n_committed))

    code = in_child(act)

    with Ledger.open_to_write(path) as again:
        n_runs = again.n_runs()
    assert code == 0
    assert int(count.read_text()) > 10
    assert int(count.read_text()) == n_runs


@pytest.mark.parametrize("going", ["deleted", "moved"])
def test_ledger_that_goes_while_it_is_written_stops_the_work(tmp_path: Path, going: str) -> None:
    """SQLite would write on into a file that nobody can find: a commit says that it is gone."""
    path = tmp_path / "a.ledger"
    with Ledger.open_to_write(path) as ledger:
        session = begin(ledger)
        path.unlink() if going == "deleted" else path.rename(tmp_path / "b.ledger")
        store(ledger, session)

        with pytest.raises(MachineStop, match="deleted or moved"):
            ledger.commit()


def as_nobody(action: Callable[[], None]) -> int:
    """Run an action as a user whom permission bits bind: the one running the tests may be root."""

    def act() -> None:
        if os.geteuid() == 0:
            os.setgroups([])
            os.setgid(65534)
            os.setuid(65534)
        action()

    return in_child(act)


def test_read_only_folder_is_a_stop_for_a_writer(open_folder: Path) -> None:
    """Where the folder may not be written, neither a new ledger nor an old one is opened for writing."""
    filled(open_folder / "a.ledger", 1)
    open_folder.chmod(0o555)
    before = contents(open_folder)

    def act() -> None:
        for name in ("a.ledger", "new.ledger"):
            with pytest.raises(MachineStop, match="cannot be written here"):
                Ledger.open_to_write(open_folder / name)

    assert as_nobody(act) == 0
    assert before == contents(open_folder)


def test_read_only_file_is_a_stop_for_a_writer(open_folder: Path) -> None:
    """A ledger that may not be written, in a folder that may, stops the first write."""
    path = filled(open_folder / "a.ledger", 1)
    path.chmod(0o444)
    open_folder.chmod(0o777)

    def act() -> None:
        with pytest.raises(MachineStop, match="readonly"), Ledger.open_to_write(path) as ledger:
            begin(ledger)

    assert as_nobody(act) == 0
    assert sorted(contents(open_folder)) == ["a.ledger"]


def test_read_only_ledger_is_read(open_folder: Path) -> None:
    """Who may read a ledger and nothing else can read it, and leaves nothing beside it."""
    path = filled(open_folder / "a.ledger", 5)
    path.chmod(0o444)
    open_folder.chmod(0o555)

    def act() -> None:
        with Ledger.open(path) as ledger:
            assert ledger.n_runs() == 5

    assert as_nobody(act) == 0
    assert sorted(contents(open_folder)) == ["a.ledger"]


def test_unreadable_ledger_is_refused(open_folder: Path) -> None:
    """A ledger that may not be read is named, with the system's reason."""
    path = filled(open_folder / "a.ledger", 1)
    path.chmod(0o000)

    def act() -> None:
        with pytest.raises(InputError, match="cannot be read"):
            Ledger.open(path)

    assert as_nobody(act) == 0


def test_network_file_systems_are_told_by_the_table_of_mounts(tmp_path: Path) -> None:
    """The longest mount point above the file decides, as man 5 proc describes the table."""
    mounts = tmp_path / "mounts"
    mounts.write_text(
        "/dev/vda / ext4 rw 0 0\n"
        "server:/home /home nfs4 rw 0 0\n"
        "/dev/vdb /home/own ext4 rw 0 0\n"
        "server: /mnt/far\\040away fuse.sshfs rw 0 0\n"
    )
    places = (
        "/etc/a.ledger",
        "/home/me/a.ledger",
        "/home/own/a.ledger",
        "/mnt/far away/a.ledger",
        "/homes/a",
    )

    found = [is_on_network(Path(place), mounts) for place in places]

    assert found == [False, True, False, True, False]
    assert not is_on_network(Path("/home/me/a.ledger"), tmp_path / "no such table")


def test_no_write_ahead_log_on_a_network_file_system(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """There, the ledger is written with a rollback journal: https://www.sqlite.org/wal.html, section 1."""
    monkeypatch.setattr("harness.ledger.store.is_on_network", lambda path: True)
    path = filled(tmp_path / "a.ledger", 1)

    with Ledger.open_to_write(path) as ledger:
        (mode,) = ledger._connection.execute("PRAGMA journal_mode").fetchone()
        with Ledger.open(path) as reader:
            n_runs = reader.n_runs()

    assert (mode, n_runs) == ("truncate", 1)


# Storing --------------------------------------------------------------------------------------------


def test_run_comes_back_as_it_was_stored(tmp_path: Path) -> None:
    """Status, graph, measures, reasons, times and limits of a run are read back."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        store(ledger, begin(ledger), seconds=9.0, memory_mb=700)
        ledger.commit()
        (row,) = ledger.run_rows()
        known = ledger.known_runs()

    assert {
        RunKey(drawn()[1].key, "{}", 100, make_learner().key): KnownRun(Status.DONE, 0.25, Limits(9.0, 700))
    } == known
    assert tuple(
        row[name] for name in ("status", "cause", "asked_by", "wall_seconds", "cpu_seconds", "peak_rss_mb")
    ) == ("done", "", "run", 0.25, 0.2, 90.0)
    assert (row["class_shd"], row["skeleton_recall"], row["dag_shd"]) == (1.0, 0.5, None)
    assert json.loads(row["undefined"]) == {"dag_shd": "learner: claims no causal directions"}
    assert json.loads(graph_text(GRAPH)) == json.loads(row["graph"])


def test_second_outcome_moves_the_first_to_the_attempts(tmp_path: Path) -> None:
    """A run that is asked again has one row with its newest outcome; the earlier one is kept beside it."""
    timeout = Outcome(Status.TIMEOUT, "over the limit of 1 s", wall_seconds=1.0)
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        session = begin(ledger)
        store(ledger, session, 0, timeout, seconds=1.0)
        store(ledger, session, 0, DONE, seconds=60.0)
        ledger.commit()
        rows = ledger.run_rows()
        attempts = ledger._connection.execute(
            "SELECT status, cause, wall_seconds, limits FROM attempt"
        ).fetchall()

    assert [row["status"] for row in rows] == ["done"]
    assert attempts == [("timeout", "over the limit of 1 s", 1.0, '{"memory_mb":2048,"seconds":1.0}')]


def test_measures_go_with_the_outcome_that_had_them(tmp_path: Path) -> None:
    """When a finished run ends otherwise the second time, its measures do not stay behind."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        session = begin(ledger)
        store(ledger, session, 0, DONE)
        store(ledger, session, 0, Outcome(Status.TIMEOUT, "over the limit of 1 s", wall_seconds=1.0))
        ledger.commit()
        (row,) = ledger.run_rows()

    assert (row["status"], row["class_shd"], row["graph"]) == ("timeout", None, None)


def test_same_draw_is_stored_once(tmp_path: Path) -> None:
    """A network and dataset that are drawn again, as when a plan is resumed, are those that are there."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        first = ledger.store_material(*drawn())
        ledger.commit()
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        second = ledger.store_material(*drawn())

    assert first == second


@pytest.mark.parametrize("differing", [{"cpts": "another"}, {"view": "another"}])
def test_a_different_redraw_stops_with_both_versions(tmp_path: Path, differing: dict[str, str]) -> None:
    """When numpy draws otherwise than at the ledger's beginning, both versions are named; nothing changes."""
    path = tmp_path / "a.ledger"
    filled(path, 2)
    before = contents(tmp_path)

    with (
        Ledger.open_to_write(path) as ledger,
        pytest.raises(InputError, match=rf"numpy {np.__version__}.*numpy 1\.9\.9"),
    ):
        ledger.store_material(*drawn(**differing))

    assert before == contents(tmp_path)


def test_what_was_not_committed_is_dropped(tmp_path: Path) -> None:
    """Closing without a commit leaves what the last commit left."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        store(ledger, begin(ledger), 0)

    with Ledger.open(tmp_path / "a.ledger") as again:
        n_runs = again.n_runs()

    assert n_runs == 0


def test_the_plan_started_last_is_the_newest(tmp_path: Path) -> None:
    """A plan that is started again becomes the newest one; its labels follow the learners of today."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        ledger.store_plan("first", digest("plan", 1), {"title": "first"}, [make_learner("x")])
        time.sleep(0.002)
        ledger.store_plan("second", digest("plan", 2), {"title": "second"}, [make_learner("x")])
        time.sleep(0.002)
        ledger.store_plan("first", digest("plan", 1), {"title": "again"}, [make_learner("y")])
        newest = ledger.newest_plan()
        labels = ledger._connection.execute("SELECT plan, label FROM label ORDER BY plan").fetchall()

    assert newest == (1, "first", {"title": "again"})
    assert labels == [(1, "y"), (2, "x")]


def test_sessions_say_how_they_ended(tmp_path: Path) -> None:
    """A session that did not end by itself has no end."""
    with Ledger.open_to_write(tmp_path / "a.ledger") as ledger:
        first, _ = begin(ledger), begin(ledger)
        ledger.end_session(first, "finished")
        sessions = ledger.sessions()

    assert [session["ending"] for session in sessions] == ["finished", None]
    assert sessions[0]["versions"] == {"numpy": "1.9.9"}
    assert [session["ended"] is None for session in sessions] == [False, True]


WRITER = """
import sys
from pathlib import Path
sys.path.insert(0, str(Path(sys.argv[1]).parent))
import importlib.util
spec = importlib.util.spec_from_file_location("ledger_tests", sys.argv[1])
tests = importlib.util.module_from_spec(spec)
spec.loader.exec_module(tests)
with tests.Ledger.open_to_write(sys.argv[2]) as ledger:
    session = tests.begin(ledger)
    n = ledger.n_runs()
    while True:
        tests.store(ledger, session, n)
        ledger.commit()
        n += 1
        print(n, flush=True)
"""


@pytest.mark.slow
def test_no_acknowledged_run_is_lost_to_kill_9(tmp_path: Path) -> None:
    """Whatever moment a writer is killed at, the ledger opens with every run whose commit came back."""
    path = tmp_path / "a.ledger"
    moments = np.random.default_rng(9).uniform(0.0, 0.25, size=12)
    for moment in moments.tolist():
        writer = subprocess.Popen(
            [sys.executable, "-c", WRITER, __file__, str(path)], stdout=subprocess.PIPE, text=True
        )
        assert writer.stdout is not None
        acknowledged = [writer.stdout.readline()]  # it is at work
        time.sleep(moment)

        writer.kill()
        acknowledged += writer.stdout.readlines()
        writer.wait()
        writer.stdout.close()

        complete = [line for line in acknowledged if line.endswith("\n")]
        with Ledger.open(path) as ledger:
            # One more may have been committed that could not be said any more.
            assert ledger.n_runs() - int(complete[-1]) in (0, 1)
