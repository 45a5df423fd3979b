"""Runs in real processes: every way a learner can end, and every way the work can be stopped.

What is checked against is the system: exit codes, signals, the processes that are left (by psutil, which
reads them for itself), files that are left; and, for what was stopped and resumed, the same plan undisturbed.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import psutil
import pytest

from generators.errors import InputError
from generators.graph import Graph
from generators.network import Cpt, Network
from harness.execution import local, supervisor, watched
from harness.ledger.store import Ledger
from harness.plan.schema import Plan, expected_runs, read_plan
from harness.records import MachineStop
from harness.studies.reading import read_study, runs_table
from harness.studies.running import RunSummary, Watcher, run_plan

slow = pytest.mark.slow
UNEQUAL = ["wall_seconds", "cpu_seconds", "peak_rss_mb", "session"]  # what no two starts share
TOKEN = "ARCASSAY_TEST_TOKEN"  # in the environment of all that one test starts
PATIENCE = 60.0  # for what must happen soon; the machine may be busy

LEARNERS = '''
import ctypes
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np

from generators.graph import Graph
from harness.learners.specification import learner
from harness.records import Declined


def empty(data):
    return Graph.from_edges(data.names)


def other(data):
    return Graph.from_edges(data.names)


def drawn(data, *, rng, pause: float = 0.0):
    """Make arcs of what the stream and the data give, so that any change of either shows."""
    time.sleep(pause)
    words = rng.integers(0, 1000, size=(len(data.names),) * 2) + int(data.codes.sum())
    return Graph(data.names, np.triu(words % 2 == 0, 1))


def raises(data):
    raise ValueError("a singular table\\nwith details")


class Unprintable(Exception):
    def __str__(self):
        raise RuntimeError("not even this")


def raises_unprintable(data):
    raise Unprintable


def raises_strange_text(data):
    raise ValueError("half a character: \\udcff and a NUL: \\0")


def interrupts_itself(data):
    raise KeyboardInterrupt


def declines(data):
    raise Declined("more than two variables are too many")


def says_no_memory(data):
    raise MemoryError("a table of 10 GB")


def exits(data):
    sys.exit(3)


def exits_at_once(data):
    os._exit(4)


def exits_as_if_well(data):
    os._exit(0)


def segfaults(data):
    print("about to fail", flush=True)
    os.kill(os.getpid(), signal.SIGSEGV)


def aborts(data):
    os.abort()


def reads_no_mans_memory(data):
    ctypes.string_at(0)


def kills_itself(data):
    os.kill(os.getpid(), signal.SIGKILL)


def returns_a_number(data):
    return 42


def returns_nothing(data):
    return None


def returns_other_names(data):
    return Graph.from_edges(["rain", "wet"])


@learner("cyclic", returns="dag")
def cyclic(data):
    a, b, c = data.names[:3]
    return Graph.from_edges(data.names, directed=[(a, b), (b, c), (c, a)])


@learner("half directed", returns="dag")
def half_directed(data):
    return Graph.from_edges(data.names, undirected=[data.names[:2]])


def hogs(data):
    blocks = []
    while True:
        blocks.append(np.ones(1 << 24, dtype=np.uint8))


def hogs_in_children(data):
    script = "import time; block = b'x' * (300 << 20); time.sleep(60)"
    children = [
        subprocess.Popen([sys.executable, "-c", script], start_new_session=True) for _ in range(3)
    ]
    time.sleep(60)


def sleeps(data):
    time.sleep(60)


def works_without_end(data):
    while True:
        pass


def holds_the_interpreter(data):
    sum(range(10**12))  # one C call, in which Python looks at no signal


def backtracks(data):
    import re

    re.match("(a+)+$", "a" * 60 + "b")  # exponential, in C


def ignores_the_request_to_end(data):
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    time.sleep(60)


def stops_itself(data):
    os.kill(os.getpid(), signal.SIGSTOP)


def prints_megabytes(data):
    for _ in range(40):
        print("x" * (1 << 20))
    return Graph.from_edges(data.names)


def prints_and_fails(data):
    print("y" * (1 << 20))
    print("the last words", file=sys.stderr)
    raise ValueError("after much talk")


def prints_and_dies(data):
    print("the last words", flush=True)
    os._exit(9)


def closes_its_streams(data):
    sys.stdout.close()
    sys.stderr.close()
    return Graph.from_edges(data.names)


def closes_every_file(data):
    os.closerange(3, 256)
    time.sleep(60)


def leaves_files(data):
    Path("left.bin").write_bytes(b"x" * 1000)
    Path("folder").mkdir()
    Path("folder", "left.txt").write_text("left")
    return Graph.from_edges(data.names)


def leaves_children(data):
    subprocess.Popen(["sleep", "600"])
    subprocess.Popen(["sleep", "600"], start_new_session=True)
    if not os.fork():  # a daemon as in Stevens (1992): fork, own session, fork again
        os.setsid()
        if not os.fork():
            signal.signal(signal.SIGTERM, signal.SIG_IGN)
            time.sleep(600)
        os._exit(0)
    os.wait()
    return Graph.from_edges(data.names)


def dies_before_its_child(data):
    if not os.fork():  # it holds all that its parent had open
        time.sleep(600)
        os._exit(0)
    os._exit(5)


def returns_twice(data):
    os.fork()
    return Graph.from_edges(data.names)


def leaves_a_thread(data):
    import threading

    threading.Thread(target=time.sleep, args=(600,)).start()
    return Graph.from_edges(data.names)


def spoils_what_it_uses(data):
    sys.excepthook = None
    sys.stdout = None
    return Graph.from_edges(data.names)
'''

# Label (the function's name) -> status, first line of the cause (or what it begins with).
ENDINGS = {
    "empty": ("done", ""),
    "raises": ("error", "ValueError: a singular table"),
    "raises_unprintable": ("error", "Unprintable: Unprintable"),
    "raises_strange_text": ("error", "ValueError: half a character: ? and a NUL: ?"),
    "interrupts_itself": ("error", "KeyboardInterrupt: KeyboardInterrupt"),
    "declines": ("declined", "more than two variables are too many"),
    "says_no_memory": ("out-of-memory", "a table of 10 GB"),
    "exits": ("crashed", "the learner ended the process (exit code 3)"),
    "exits_at_once": ("crashed", "the process ended with exit code 4"),
    "exits_as_if_well": ("crashed", "the process ended with exit code 0"),
    "segfaults": ("crashed", "the process died of signal SIGSEGV"),
    "aborts": ("crashed", "the process died of signal SIGABRT"),
    "reads_no_mans_memory": ("crashed", "the process died of signal SIGSEGV"),
    "kills_itself": ("crashed", "the process was killed twice (signal SIGKILL or SIGTERM)"),
    "returns_a_number": ("invalid", "a learner must return a Graph"),
    "returns_nothing": ("invalid", "a learner must return a Graph"),
    "returns_other_names": ("invalid", "the graph is not over the data's variables"),
    "cyclic": ("invalid", "the learner declares a DAG but returned a directed cycle"),
    "half_directed": ("invalid", "the learner declares a DAG but returned an undirected edge"),
    "prints_megabytes": ("done", ""),
    "prints_and_fails": ("error", "ValueError: after much talk"),
    "prints_and_dies": ("crashed", "the process ended with exit code 9"),
    "closes_its_streams": ("done", ""),
    "closes_every_file": ("crashed", "the process closed its connection to the harness"),
    "leaves_files": ("done", ""),
    "leaves_children": ("done", ""),
    "dies_before_its_child": ("crashed", "the process ended with exit code 5"),
    "returns_twice": ("done", ""),
    "leaves_a_thread": ("done", ""),
    "spoils_what_it_uses": ("done", ""),
}
OVER_TIME = (
    "sleeps",
    "works_without_end",
    "holds_the_interpreter",
    "backtracks",
    "ignores_the_request_to_end",
    "stops_itself",
)
OVER_MEMORY = ("hogs", "hogs_in_children")


def write_plan(
    folder: Path,
    learners: dict[str, dict[str, Any]] | tuple[str, ...],
    *,
    variables: int | str = 4,
    replicates: int = 1,
    rows: tuple[int, ...] = (40,),
    limits: str = "",
    networks: str | None = None,
    data: str = "",
) -> Path:
    """Write a plan of learners from learners.py, each labelled with its name, and return its path."""
    if not (folder / "learners.py").exists():
        (folder / "learners.py").write_text(LEARNERS)
    networks = networks or f"variables = {variables}\nreplicates = {replicates}"
    lines = ["seed = 7", "[networks]", networks, "[data]", f"rows = {list(rows)}", data, "[limits]", limits]
    for label in learners:
        own = learners[label] if isinstance(learners, dict) else {}
        keys = {"source": f"learners.py:{label}", "label": label, **own}
        lines += ["[[learner]]", *(f"{key} = {json.dumps(value)}" for key, value in keys.items())]
    path = folder / "plan.toml"
    path.write_text("\n".join(lines) + "\n")
    return path


def table(ledger: Path) -> pd.DataFrame:
    return runs_table(read_study(ledger))


def comparable(ledger: Path) -> pd.DataFrame:
    return table(ledger).drop(columns=UNEQUAL)


def statuses(ledger: Path) -> dict[str, str]:
    frame = table(ledger)
    return dict(zip(frame["label"], frame["status"], strict=True))


def marked(token: str) -> list[psutil.Process]:
    """Return the living processes that carry a token in their environment."""
    found = []
    for process in psutil.process_iter():
        try:
            if process.environ().get(TOKEN) == token and process.status() != psutil.STATUS_ZOMBIE:
                found.append(process)
        except psutil.Error:
            continue
    return found


def wait_until(claim: Callable[[], Any], what: str) -> Any:
    end = time.monotonic() + PATIENCE
    while time.monotonic() < end:
        if found := claim():
            return found
        time.sleep(0.02)
    raise AssertionError(f"waited {PATIENCE:g} s in vain until {what}")


def nothing_is_left(token: str, scratch: Path) -> None:
    wait_until(lambda: not marked(token), "no process is left")
    wait_until(lambda: not list(scratch.iterdir()), "no file is left")


@pytest.fixture
def token(monkeypatch: pytest.MonkeyPatch) -> str:
    """Give a mark that every process started by this test carries in its environment."""
    value = f"{os.getpid()}-{time.monotonic_ns()}"
    monkeypatch.setenv(TOKEN, value)
    return value


@pytest.fixture
def scratch(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Give the folder in which this test's processes put their temporary files."""
    folder = tmp_path / "scratch"
    folder.mkdir()
    monkeypatch.setenv("TMPDIR", str(folder))
    monkeypatch.setattr(tempfile, "tempdir", str(folder))
    return folder


@pytest.fixture
def start(tmp_path: Path, token: str, scratch: Path) -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Give a function that starts `arcassay run` on a plan as a process of its own."""
    started = []

    def begin(plan: Path, *options: str) -> subprocess.Popen[str]:
        script = "from harness.cli.main import main; main()"
        process = subprocess.Popen(
            [sys.executable, "-c", script, "run", str(plan), "--quiet", *options],
            cwd=tmp_path,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.PIPE,
            text=True,
        )
        started.append(process)
        return process

    yield begin
    for process in started:
        process.kill()
        process.wait()
        process.stderr.close()
    for process in marked(token):
        process.kill()


def n_stored(ledger: Path) -> int:
    if not ledger.exists():
        return 0
    with Ledger.open(ledger) as opened:
        return opened.n_runs()


def wait_for_runs(ledger: Path, count: int) -> None:
    wait_until(lambda: n_stored(ledger) >= count, f"{count} runs are stored")


# One start ------------------------------------------------------------------------------------------


def test_plan_is_run_and_nothing_is_asked_twice(tmp_path: Path, scratch: Path, token: str) -> None:
    """A plan's runs are stored, a second start finds nothing to do, and nothing is left behind."""
    path = write_plan(tmp_path, ("empty", "raises"), rows=(20, 40))

    first = run_plan(path, n_workers=1)
    second = run_plan(path, n_workers=1)

    assert (first.n_asked, first.n_done, first.n_failed, first.was_stopped) == (4, 4, 2, False)
    assert (second.n_asked, second.n_done) == (0, 0)
    frame = table(first.ledger)
    assert dict(frame.groupby("label")["status"].unique().str[0]) == {"empty": "done", "raises": "error"}
    assert list((frame["wall_seconds"] > 0)[frame["label"] == "empty"].astype(float)) == [1.0, 1.0]
    nothing_is_left(token, scratch)


@pytest.fixture(scope="module")
def ended(tmp_path_factory: pytest.TempPathFactory) -> tuple[pd.DataFrame, str, Path]:
    """Run one learner of every ending, once for all tests on them; give the runs, the token, the folder."""
    folder = tmp_path_factory.mktemp("endings")
    scratch = folder / "scratch"
    scratch.mkdir()
    token = f"endings-{os.getpid()}-{time.monotonic_ns()}"
    plan = write_plan(
        folder,
        {
            **{name: {} for name in ENDINGS},
            **{name: {"seconds": 0.5} for name in OVER_TIME},
            **{name: {"memory_mb": 700} for name in OVER_MEMORY},
        },
        limits="seconds = 30\nmemory_mb = 1500",
    )
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv(TOKEN, token)
        patch.setenv("TMPDIR", str(scratch))
        patch.setattr(tempfile, "tempdir", str(scratch))
        summary = run_plan(plan, n_workers=2)
    return table(summary.ledger).set_index("label"), token, scratch


@slow
@pytest.mark.parametrize("label", ENDINGS)
def test_every_ending_is_a_status_with_its_cause(ended: tuple[pd.DataFrame, str, Path], label: str) -> None:
    """However a learner ends, its run has the status that says so, and a cause in one line first."""
    run = ended[0].loc[label]
    status, beginning = ENDINGS[label]

    assert run["status"] == status
    assert run["cause"].partition("\n")[0].startswith(beginning)
    assert (run["cause"] == "") == (status == "done")


@slow
@pytest.mark.parametrize("label", OVER_TIME)
def test_time_limit_ends_whatever_a_learner_does(ended: tuple[pd.DataFrame, str, Path], label: str) -> None:
    """Asleep, at work, in a C call that never returns, deaf to signals or stopped: time is up for all."""
    run = ended[0].loc[label]

    assert run["status"] == "timeout"
    assert run["cause"] == "over the limit of 0.5 s"
    assert run["wall_seconds"] == 0.5


@slow
@pytest.mark.parametrize("label", OVER_MEMORY)
def test_memory_limit_counts_all_that_a_learner_started(
    ended: tuple[pd.DataFrame, str, Path], label: str
) -> None:
    """A hog is ended, and so is one whose children in sessions of their own hold the memory."""
    run = ended[0].loc[label]

    assert run["status"] == "out-of-memory"
    assert run["cause"].partition("\n")[0] == "over the limit of 700 MB of memory"


@slow
def test_what_a_learner_printed_last_is_in_the_cause(ended: tuple[pd.DataFrame, str, Path]) -> None:
    """Of a process that died, the end of its output follows; of an exception, the traceback does."""
    frame = ended[0]

    assert "\nabout to fail" in frame.loc["segfaults", "cause"]
    assert "\nthe last words" in frame.loc["prints_and_dies", "cause"]
    assert 'learners.py", line' in frame.loc["raises", "cause"]
    assert frame["cause"].str.len().max() < 10_000


@slow
def test_only_finished_runs_have_a_graph_and_measures(ended: tuple[pd.DataFrame, str, Path]) -> None:
    """A run that failed has no graph, no measure and no reason why a measure is undefined."""
    frame = ended[0]
    failed = frame[frame["status"] != "done"]
    done = frame[frame["status"] == "done"]

    assert (failed["graph"] == "").all()
    assert failed["class_shd"].isna().all()
    assert (failed["undefined"] == "{}").all()
    assert (done["graph"] == "[]").all()
    assert done["class_shd"].notna().all()
    assert done["peak_rss_mb"].between(20, 1500).all()


@slow
def test_no_child_daemon_or_file_survives(ended: tuple[pd.DataFrame, str, Path]) -> None:
    """Children, daemons in their own sessions, threads and files of every learner are gone."""
    _, token, scratch = ended

    nothing_is_left(token, scratch)


# Built-in learners: run after run in one process --------------------------------------------------------


@slow
def test_a_built_in_learner_over_time_does_not_harm_the_next(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """When the process that does run after run is killed at a limit, the next run gets a fresh one."""
    text = """
seed = 7
[networks]
variables = 60
mean_parents = 3.0
replicates = 2
[data]
rows = [50, 4000]
[[learner]]
method = "pc"
label = "hurried"
alpha = 0.9
seconds = 0.02
[[learner]]
method = "pc"
label = "calm"
alpha = 0.001
"""
    path = tmp_path / "plan.toml"
    path.write_text(text)

    summary = run_plan(path, n_workers=1)

    frame = table(summary.ledger)
    assert (frame[frame["label"] == "calm"]["status"] == "done").all()
    hurried = frame[frame["label"] == "hurried"]
    assert (hurried["status"] == "timeout").any()
    assert (hurried[hurried["status"] == "done"]["wall_seconds"] <= 0.02).all()


# The same runs, however they come about -----------------------------------------------------------------


@slow
def test_one_worker_and_two_give_the_same_runs(tmp_path: Path) -> None:
    """The number of workers changes no exported column but times, memory and session."""
    path = write_plan(tmp_path, ("drawn", "raises"), variables="[4, 6]", replicates=6, rows=(20, 40))

    one = run_plan(path, tmp_path / "one.ledger", n_workers=1)
    two = run_plan(path, tmp_path / "two.ledger", n_workers=2)

    assert one.n_done == two.n_done == 48
    pd.testing.assert_frame_equal(comparable(one.ledger), comparable(two.ledger))
    assert comparable(one.ledger)["graph"].nunique() > 10


@slow
def test_a_larger_plan_reruns_nothing(tmp_path: Path) -> None:
    """More rows, another learner, another label and more replicates leave every stored run as it was."""
    small = write_plan(tmp_path, ("drawn",), replicates=2, rows=(20, 40))
    first = run_plan(small, n_workers=1)
    before = table(first.ledger).set_index("run")
    large = write_plan(
        tmp_path, {"drawn": {"label": "renamed"}, "empty": {}}, replicates=3, rows=(20, 40, 80)
    )

    second = run_plan(large, n_workers=1)

    after = table(second.ledger).set_index("run")
    assert (first.n_done, second.n_done) == (4, 3 * 3 * 2 - 4)
    kept = after.loc[before.index]
    assert (kept["label"] == "renamed").all()
    pd.testing.assert_frame_equal(before.drop(columns="label"), kept.drop(columns="label"))


@slow
def test_a_run_over_time_is_asked_again_with_more_time_only(tmp_path: Path) -> None:
    """The same limit asks nothing, a higher one asks the run that hit it and no other."""
    learners: dict[str, dict[str, Any]] = {"drawn": {"pause": 0.6}, "empty": {}}
    low = run_plan(write_plan(tmp_path, learners, limits="seconds = 0.3"), n_workers=1)
    before = statuses(low.ledger)

    same = run_plan(write_plan(tmp_path, learners, limits="seconds = 0.3"), n_workers=1)
    high = run_plan(write_plan(tmp_path, learners, limits="seconds = 30"), n_workers=1)

    assert before == {"drawn": "timeout", "empty": "done"}
    assert (same.n_asked, high.n_asked) == (0, 1)
    assert statuses(high.ledger) == {"drawn": "done", "empty": "done"}


# Killed -------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, pd.DataFrame]:
    """Give a plan's folder whose runs take a while, and its runs when nobody disturbs them."""
    folder = tmp_path_factory.mktemp("undisturbed")
    plan = write_plan(folder, {"drawn": {"pause": 0.1}, "leaves_children": {}}, replicates=8, rows=(20, 40))
    return folder, comparable(run_plan(plan, folder / "whole.ledger", n_workers=2).ledger)


def resumed(plan: Path) -> pd.DataFrame:
    """Finish a plan whose work was cut off, and return all its runs."""
    summary = run_plan(plan, n_workers=2)
    assert not summary.was_stopped
    return comparable(summary.ledger)


def same_plan(undisturbed: tuple[Path, pd.DataFrame], folder: Path) -> Path:
    """Return the undisturbed plan with a ledger's place of its own. The learners stay where they are."""
    source = undisturbed[0] / "learners.py"
    text = (undisturbed[0] / "plan.toml").read_text()
    path = folder / "plan.toml"
    path.write_text(text.replace('"learners.py:', f'"{source}:'))
    return path


@slow
@pytest.mark.parametrize("n_runs", [1, 9, 17])
def test_kill_9_of_the_main_process(
    tmp_path: Path,
    undisturbed: tuple[Path, pd.DataFrame],
    start: Callable[..., subprocess.Popen[str]],
    token: str,
    scratch: Path,
    n_runs: int,
) -> None:
    """Nothing of it survives, the ledger opens, and resumed it has the runs of the undisturbed plan."""
    plan = same_plan(undisturbed, tmp_path)
    process = start(plan, "--workers", "2")
    wait_for_runs(plan.with_suffix(".ledger"), n_runs)

    process.kill()
    process.wait()

    nothing_is_left(token, scratch)
    assert n_runs <= n_stored(plan.with_suffix(".ledger")) < len(undisturbed[1])
    pd.testing.assert_frame_equal(resumed(plan), undisturbed[1])


@slow
def test_kill_9_of_the_main_process_while_it_loads(
    tmp_path: Path,
    undisturbed: tuple[Path, pd.DataFrame],
    start: Callable[..., subprocess.Popen[str]],
    token: str,
    scratch: Path,
) -> None:
    """A supervisor that is still importing or compiling does not outlive the main process."""
    plan = same_plan(undisturbed, tmp_path)
    process = start(plan)
    wait_until(lambda: len(marked(token)) > 1, "a supervisor is started")

    process.kill()
    process.wait()

    wait_until(lambda: not marked(token), "no process is left")
    pd.testing.assert_frame_equal(resumed(plan), undisturbed[1])


def supervisors_of(process: subprocess.Popen[str]) -> list[psutil.Process]:
    return psutil.Process(process.pid).children()


def runners_of(process: subprocess.Popen[str]) -> list[psutil.Process]:
    found = []
    for parent in supervisors_of(process):
        try:
            found += [child for child in parent.children() if child.name() != "sleep"]
        except psutil.Error:
            continue
    return found


@slow
@pytest.mark.parametrize("victims", [supervisors_of, runners_of])
@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGTERM])
def test_kill_of_a_supervisor_or_a_runner(
    tmp_path: Path,
    undisturbed: tuple[Path, pd.DataFrame],
    start: Callable[..., subprocess.Popen[str]],
    token: str,
    scratch: Path,
    victims: Callable[[subprocess.Popen[str]], list[psutil.Process]],
    number: signal.Signals,
) -> None:
    """The work goes on and ends by itself, no run is blamed, and nothing survives."""
    plan = same_plan(undisturbed, tmp_path)
    process = start(plan, "--workers", "2")
    ledger = plan.with_suffix(".ledger")
    for count in (2, 10, 18):
        wait_for_runs(ledger, count)
        for victim in wait_until(lambda: victims(process), "there is somebody to kill")[:1]:
            victim.send_signal(number)

    _, errors = process.communicate()

    assert (process.returncode, errors) == (0, "")
    pd.testing.assert_frame_equal(comparable(ledger), undisturbed[1])
    nothing_is_left(token, scratch)


@slow
def test_supervisors_that_keep_dying_stop_the_work(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, scratch: Path, token: str
) -> None:
    """After some tries the machine is blamed, with the last line of what was said; nothing survives."""
    monkeypatch.setattr(local, "_START", "import sys; sys.exit('no numpy to be had')")
    path = write_plan(tmp_path, ("empty",))

    with pytest.raises(MachineStop, match="worker processes keep dying: no numpy to be had"):
        run_plan(path, n_workers=1)

    nothing_is_left(token, scratch)


# Asked to stop --------------------------------------------------------------------------------------------


@slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_first_wish_to_stop_finishes_what_is_running(
    tmp_path: Path,
    undisturbed: tuple[Path, pd.DataFrame],
    start: Callable[..., subprocess.Popen[str]],
    token: str,
    scratch: Path,
    number: signal.Signals,
) -> None:
    """Exit code 130, a session that says that it was stopped, and a ledger that resumes."""
    plan = same_plan(undisturbed, tmp_path)
    ledger = plan.with_suffix(".ledger")
    process = start(plan, "--workers", "2")
    wait_for_runs(ledger, 4)

    process.send_signal(number)
    _, errors = process.communicate(timeout=PATIENCE)

    assert process.returncode == 130
    assert "Traceback" not in errors
    nothing_is_left(token, scratch)
    with Ledger.open(ledger) as opened:
        assert [session["ending"] for session in opened.sessions()] == ["stopped"]
        assert 4 <= opened.n_runs() < len(undisturbed[1])
    pd.testing.assert_frame_equal(resumed(plan), undisturbed[1])


@slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_second_wish_to_stop_stops_now(
    tmp_path: Path,
    start: Callable[..., subprocess.Popen[str]],
    token: str,
    scratch: Path,
    number: signal.Signals,
) -> None:
    """What runs is ended, whatever it does; exit code 130; the run that was cut off is asked again."""
    plan = write_plan(tmp_path, {"empty": {}, "drawn": {"pause": 600.0}}, limits="seconds = 900")
    ledger = plan.with_suffix(".ledger")
    process = start(plan, "--workers", "1")
    wait_for_runs(ledger, 1)
    time.sleep(0.3)  # the next one sleeps by now

    process.send_signal(number)
    time.sleep(1.0)
    still_waiting = process.poll() is None
    process.send_signal(number)
    _, errors = process.communicate(timeout=PATIENCE)

    assert still_waiting
    assert process.returncode == 130
    assert "Traceback" not in errors
    nothing_is_left(token, scratch)
    assert statuses(ledger) == {"empty": "done"}


class StopAtOnce(Watcher):
    """Send the first wish to stop before any worker is ready."""

    def advanced(self, progress: Any) -> None:
        """Interrupt this process, once."""
        if not progress.done and not getattr(self, "asked", False):
            self.asked = True
            os.kill(os.getpid(), signal.SIGINT)


def test_a_wish_to_stop_while_workers_load_does_not_wait_for_them(
    tmp_path: Path, scratch: Path, token: str
) -> None:
    """Before the first worker is ready nothing runs, so nothing is waited for."""
    path = write_plan(tmp_path, ("empty",))

    summary = run_plan(path, n_workers=1, watcher=StopAtOnce())

    assert (summary.was_stopped, summary.n_done) == (True, 0)
    nothing_is_left(token, scratch)


# Inputs that change under way -------------------------------------------------------------------------


def write_network(path: Path, *, p_yes: float = 0.4) -> None:
    from generators.files import write_network as write

    graph = Graph.from_edges(["a", "b", "c"], directed=[("a", "b"), ("b", "c")])
    rows = np.array([[0.9, 0.1], [0.2, 0.8]])
    cpts = {
        "a": Cpt("a", (), np.array([1 - p_yes, p_yes])),
        "b": Cpt("b", ("a",), rows),
        "c": Cpt("c", ("b",), rows),
    }
    write(Network(graph, (("no", "yes"),) * 3, cpts), path)


def plan_of_given_network(folder: Path, learners: dict[str, dict[str, Any]], n_datasets: int = 3) -> Plan:
    write_network(folder / "given.bif")
    return read_plan(
        write_plan(folder, learners, networks='file = "given.bif"', data=f"datasets = {n_datasets}")
    )


@slow
def test_network_file_that_is_deleted_is_an_error_of_the_input(
    tmp_path: Path, scratch: Path, token: str
) -> None:
    """When a given network cannot be read any more, the work stops and names the file; no run is blamed."""
    plan = plan_of_given_network(tmp_path, {"empty": {}})
    whole = run_plan(plan, tmp_path / "whole.ledger", n_workers=1)

    class Deletes(Watcher):
        def started(self, progress: Any, n_kept: int) -> None:
            (tmp_path / "given.bif").unlink()

    with pytest.raises(InputError, match=r"given\.bif: cannot be read"):
        run_plan(plan, tmp_path / "cut.ledger", n_workers=1, watcher=Deletes())

    assert whole.n_done == 3
    assert n_stored(tmp_path / "cut.ledger") == 0
    nothing_is_left(token, scratch)


@slow
def test_network_file_that_is_deleted_between_runs_leaves_what_was_done(tmp_path: Path) -> None:
    """What was run on the first network is kept when the second one cannot be read any more."""
    write_network(tmp_path / "first.bif")
    write_network(tmp_path / "second.bif", p_yes=0.3)
    plan = read_plan(
        write_plan(
            tmp_path,
            {"drawn": {"pause": 0.3}},
            networks='file = ["first.bif", "second.bif"]',
            data="datasets = 3",
        )
    )
    ledger = tmp_path / "cut.ledger"

    class DeletesLater(Watcher):
        def advanced(self, progress: Any) -> None:
            (tmp_path / "second.bif").unlink(missing_ok=True)

    with pytest.raises(InputError, match=r"second\.bif: cannot be read"):
        run_plan(plan, ledger, n_workers=1, watcher=DeletesLater())

    assert set(table(ledger)["status"]) == {"done"}
    assert 1 <= n_stored(ledger) < 6


@slow
def test_learner_that_changes_under_way_is_said_to_have(tmp_path: Path) -> None:
    """A run whose code is no longer that of its key does not happen; its status says why."""
    plan = read_plan(write_plan(tmp_path, ("empty", "drawn")))
    (tmp_path / "learners.py").write_text(LEARNERS + "\n# changed\n")

    summary = run_plan(plan, tmp_path / "a.ledger", n_workers=1)

    frame = table(summary.ledger)
    assert set(frame["status"]) == {"error"}
    assert frame["cause"].str.contains("has changed since the plan was read").all()


@slow
def test_learner_whose_import_never_ends(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Importing has a time of its own, not the learner's limit; when it is up, the run is an error."""
    (tmp_path / "learners.py").write_text(
        "import os, time\nif 'ARCASSAY_WORKER' in os.environ:\n    time.sleep(600)\ndef empty(data): ...\n"
    )
    start = local._START.replace(
        "main(int", "import harness.execution.supervisor as own; own.LOADING_SECONDS = 1.0; main(int"
    )
    monkeypatch.setattr(local, "_START", start)

    summary = run_plan(write_plan(tmp_path, ("empty",), limits="seconds = 0.2"), n_workers=1)

    (run,) = table(summary.ledger).to_dict("records")
    assert (run["status"], run["cause"]) == ("error", "importing the learner took over 1 s")


@slow
def test_modules_are_found_where_the_main_process_finds_them(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A learner in a module that only this process's path leads to is found by the workers too."""
    (tmp_path / "lib").mkdir()
    (tmp_path / "lib" / "own_learners_of_a_test.py").write_text(LEARNERS)
    monkeypatch.syspath_prepend(str(tmp_path / "lib"))
    plan = write_plan(tmp_path, {"empty": {"source": "own_learners_of_a_test:empty"}})

    summary = run_plan(plan, n_workers=1)

    assert statuses(summary.ledger) == {"empty": "done"}


@slow
def test_full_disk_stops_the_work_and_it_resumes(
    tmp_path: Path, undisturbed: tuple[Path, pd.DataFrame], scratch: Path, token: str
) -> None:
    """A ledger that cannot grow stops the work with MachineStop; all that was committed is kept.

    SQLite answers a database at its greatest size as it answers a full disk.
    """
    plan = same_plan(undisturbed, tmp_path)

    class FillsTheDisk(Watcher):
        def started(self, progress: Any, n_kept: int) -> None:
            original = Ledger.commit

            def commit(self: Ledger) -> None:
                self._connection.execute("PRAGMA max_page_count = 20")
                original(self)

            patch.setattr(Ledger, "commit", commit)

    with (
        pytest.MonkeyPatch.context() as patch,
        pytest.raises(MachineStop, match=r"full.*run again to resume"),
    ):
        run_plan(plan, n_workers=2, watcher=FillsTheDisk())

    nothing_is_left(token, scratch)
    pd.testing.assert_frame_equal(resumed(plan), undisturbed[1])


def test_limits_of_the_watch_are_consistent() -> None:
    """Looking is more frequent than the grace, which is shorter than what the main process waits."""
    assert 0 < supervisor.POLL_SECONDS < watched.GRACE_SECONDS < local.END_SECONDS


@slow
def test_summary_counts_what_the_plan_expects(tmp_path: Path) -> None:
    """`expected_runs` of a plan is what an empty ledger is asked for."""
    path = write_plan(tmp_path, ("empty",), replicates=2, rows=(20, 40))

    summary: RunSummary = run_plan(path, n_workers=1)

    assert summary.n_asked == expected_runs(read_plan(path)) == 4
