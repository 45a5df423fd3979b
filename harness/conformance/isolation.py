"""A call in a process of its own, watched from outside: what it took, and what it left.

Three processes, as when a plan is run: the caller forks a watcher, which forks the one that does the work
(in a session of its own, with an empty folder to work in) and adopts whatever that leaves behind. Forked,
not started anew: so a learner need not be importable by name, and nothing is imported or compiled twice.
"""

from __future__ import annotations

import contextlib
import json
import os
import random
import shutil
import signal
import sys
import tempfile
import time
import traceback
import warnings
from collections.abc import Callable
from dataclasses import asdict, dataclass, replace
from math import ceil
from multiprocessing.connection import Connection, Pipe
from pathlib import Path
from typing import Any, NoReturn, TextIO

import numpy as np

from harness.conformance.subject import what_it_raised
from harness.execution import memory, processes
from harness.execution.one_run import failed
from harness.execution.watched import Watched
from harness.records import Limits, Status

TELLS_THREADS = os.path.isdir("/proc/self/task")
GRACE_SECONDS = 1.0  # for what is asked to end, and for children that end by themselves
LOOK_SECONDS = 0.005
LOADING_SECONDS = 60.0  # for a rehearsal
# Those that Python itself does not show (documentation of the module warnings).
IGNORED_WARNINGS = (DeprecationWarning, PendingDeprecationWarning, ImportWarning, ResourceWarning)
_POOL_SIDE = 256  # of matrices whose product a linear algebra library shares among its threads


@dataclass(frozen=True, slots=True)
class Observed:
    """What was seen of one call.

    Parameters
    ----------
    status : Status
    cause : str
        Of every status but `done`, in one line.
    is_deaf : bool
        Whether its process was still there `GRACE_SECONDS` after it had been asked to end.
    n_running : tuple of int
        At each look, the threads that were running or waiting for a processor, in all its processes; those
        of the numerical libraries' own pools apart, which the harness holds to `threads` from outside.
        Empty where the system does not tell.
    survivors : tuple of str
        The processes that were left when its own had ended.
    files : tuple of str
        Those left in its working folder, which is also the one for temporary files.
    output : str
        The end of what it wrote to standard output and error.
    changed : tuple of str
        What of the process's surroundings was not as before.
    """

    status: Status
    cause: str = ""
    is_deaf: bool = False
    n_running: tuple[int, ...] = ()
    survivors: tuple[str, ...] = ()
    files: tuple[str, ...] = ()
    output: str = ""
    changed: tuple[str, ...] = ()


def observe(
    job: Callable[[], object], *, limits: Limits, rehearsal: Callable[[], object] | None = None
) -> Observed:
    """Do a job in a process of its own, and say what was seen of it.

    Parameters
    ----------
    job : callable
        What it raises becomes a status; what it returns is forgotten.
    limits : Limits
        At the limit of time or memory it is asked to end, and a second later ended.
    rehearsal : callable, optional
        Done there before, so that what only a first call does (import, compile) is not seen.
    """
    ours, theirs = Pipe()
    parent = os.getpid()
    with warnings.catch_warnings():
        # From Python 3.12 on of threads that the caller may have. None of them goes on in the child.
        warnings.simplefilter("ignore", DeprecationWarning)
        pid = os.fork()
    if not pid:
        ours.close()
        _watch_and_exit(_serve(job, rehearsal), limits, theirs, parent)
    theirs.close()
    try:
        fields = json.loads(ours.recv_bytes())
    except EOFError:
        raise RuntimeError("the process that watches a learner has died") from None
    finally:
        ours.close()
        os.waitpid(pid, 0)
    return _observed_from(fields)


def _observed_from(fields: dict[str, Any]) -> Observed:
    tuples = {name: tuple(value) for name, value in fields.items() if isinstance(value, list)}
    return Observed(**{**fields, **tuples, "status": Status(fields["status"])})


# The watcher ------------------------------------------------------------------------------------------


class _CallerIsGone(Exception):
    """Nobody waits for what is seen."""


def _watch_and_exit(
    serve: Callable[[Connection], None], limits: Limits, connection: Connection, parent: int
) -> NoReturn:
    folder = None
    try:
        processes.die_with_parent(parent)
        processes.adopt_orphans()
        folder = tempfile.mkdtemp(prefix="arcassay-")
        runner = Watched.fork(serve, connection, folder)
        try:
            observed = _watch(runner, limits)
        finally:
            runner.end()
            _end_orphans()
        connection.send_bytes(json.dumps(asdict(observed)).encode())
    except (_CallerIsGone, KeyboardInterrupt):
        pass
    except BaseException:
        traceback.print_exc()
    finally:
        if folder is not None:
            shutil.rmtree(folder, ignore_errors=True)
        os._exit(0)  # not a line of the caller's is to be run here


def _watch(runner: Watched, limits: Limits) -> Observed:
    n_running: list[int] = []
    seen = _wait(runner, limits, n_running)
    if seen.status in (Status.TIMEOUT, Status.OUT_OF_MEMORY):
        processes.signal_group(runner.pid, signal.SIGTERM)
    else:
        runner.ask("end")
    has_ended = processes.has_exited(runner.pid, GRACE_SECONDS)
    survivors = _survivors(runner)
    files: list[str] = []
    with contextlib.suppress(OSError):  # it may have removed the folder itself
        files = sorted(os.listdir(runner.folder))
    return replace(
        seen,
        is_deaf=not has_ended,
        n_running=tuple(n_running),
        survivors=survivors,
        files=tuple(files),
        output=runner.tail().strip(),
    )


def _wait(runner: Watched, limits: Limits, n_running: list[int]) -> Observed:
    """Look at the runner until it has its answer, is gone, or is over a limit."""
    pool: set[int] | None = None  # known when the job begins
    held_before = memory.resident_mb([runner.pid])  # by the caller too: every fork shares it all
    end = time.monotonic() + LOADING_SECONDS
    while True:
        ready = {file for file, _ in runner.poll.poll(ceil(1000 * LOOK_SECONDS))}
        if runner.connection.fileno() in ready:
            reply = runner.answer()
            if reply is None:
                return _gone(runner)
            if reply["event"] == "called":
                return Observed(Status(reply["status"]), reply["cause"], changed=tuple(reply["changed"]))
            pool = set(reply["threads"])
            end = time.monotonic() + limits.seconds
        elif ready:
            raise _CallerIsGone
        elif runner.is_silent_for_good():
            return _gone(runner)
        else:
            family = processes.with_descendants([runner.pid])
            if pool is not None:
                n_running += _running(family, pool)
            if memory.resident_mb(family) - held_before * len(family) > limits.memory_mb:
                return Observed(Status.OUT_OF_MEMORY, f"it took more than {limits.memory_mb} MB of memory")
        if time.monotonic() > end:
            return Observed(Status.TIMEOUT, f"no answer within {limits.seconds:g} s")


def _gone(runner: Watched) -> Observed:
    if not processes.has_exited(runner.pid, GRACE_SECONDS):
        return Observed(Status.CRASHED, "it closed every open file of its process")
    status = os.waitid(os.P_PID, runner.pid, os.WEXITED | os.WNOWAIT)
    assert status is not None
    how = "exit code" if status.si_code == os.CLD_EXITED else "signal"
    return Observed(Status.CRASHED, f"its process ended with {how} {status.si_status}")


def _survivors(runner: Watched) -> tuple[str, ...]:
    """Return what goes on when the runner has ended, and does not end soon by itself."""
    import psutil

    end = time.monotonic() + GRACE_SECONDS
    while living := _living_orphans(runner.pid):
        if time.monotonic() > end:
            break
        time.sleep(LOOK_SECONDS)
    names = []
    for pid in sorted(living):
        with contextlib.suppress(psutil.Error):
            names.append(psutil.Process(pid).name())
    return tuple(names)


def _living_orphans(runner: int) -> set[int]:
    orphans = processes.children(os.getpid()) - {runner}
    return {pid for pid in orphans if not processes.has_exited(pid)}


def _end_orphans() -> None:
    while orphans := processes.children(os.getpid()):
        for pid in orphans:
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
            with contextlib.suppress(ChildProcessError):
                os.waitpid(pid, 0)


def _running(family: set[int], pool: set[int]) -> list[int]:
    """Return how many threads are running or ready to; nothing where the system does not tell."""
    if not TELLS_THREADS:
        return []
    count = 0
    for pid in family:
        try:
            threads = set(map(int, os.listdir(f"/proc/{pid}/task"))) - pool
        except OSError:
            continue
        for thread in threads:
            with contextlib.suppress(OSError):
                fields = Path(f"/proc/{pid}/task/{thread}/stat").read_bytes()
                # The name, in brackets, may hold anything (man 5 proc).
                count += fields.rpartition(b") ")[2][:1] == b"R"
    return [count]


# The process that does the job -------------------------------------------------------------------------


def _serve(job: Callable[[], object], rehearsal: Callable[[], object] | None) -> Callable[[Connection], None]:
    def main(connection: Connection) -> None:
        # Whatever the caller has made of its streams: here they are the open files 1 and 2.
        sys.stdout, sys.stderr = open(1, "w", closefd=False), open(2, "w", closefd=False)  # noqa: SIM115
        streams = sys.stdout, sys.stderr
        warnings.showwarning = _show_warning
        environment = {**os.environ, "TMPDIR": os.getcwd()}
        tempfile.tempdir = os.getcwd()
        if rehearsal is not None:
            _settle(environment)
            with contextlib.suppress(BaseException):
                rehearsal()
            _flush(streams)
            os.ftruncate(1, 0)
        _settle(environment)
        before = _surroundings()
        _say(connection, event="calling", threads=_start_pool())
        status, cause = _done(job)
        changed = [what for what, state in _surroundings().items() if state != before[what]]
        _flush(streams)
        _say(connection, event="called", status=status, cause=cause, changed=changed)
        connection.recv()

    return main


def _settle(environment: dict[str, str]) -> None:
    """Bring the surroundings into a known state."""
    os.chdir(environment["TMPDIR"])
    os.environ.clear()
    os.environ.update(environment)
    random.seed(0)
    np.random.seed(0)  # noqa: NPY002 - the state that is not to be touched
    np.seterr(all="warn", under="ignore")
    warnings.resetwarnings()
    for category in IGNORED_WARNINGS:
        warnings.simplefilter("ignore", category)


def _show_warning(
    message: Warning | str,
    category: type[Warning],
    filename: str,
    lineno: int,
    file: TextIO | None = None,
    line: str | None = None,
) -> None:
    # A caller such as pytest may record warnings; here they are written where Python itself writes them.
    (file or sys.stderr).write(warnings.formatwarning(message, category, filename, lineno, line))


def _flush(streams: tuple[TextIO, ...]) -> None:
    for stream in streams:
        with contextlib.suppress(OSError, ValueError):
            stream.flush()


def _done(job: Callable[[], object]) -> tuple[Status, str]:
    try:
        job()
    except BaseException as error:
        # A learner's way of ending is a status, whatever it is.
        return failed(error).status, what_it_raised(error)
    return Status.DONE, ""


def _surroundings() -> dict[str, Any]:
    kind, *state = np.random.get_state()  # noqa: NPY002
    return {
        "the working folder": os.getcwd(),
        "the environment": dict(os.environ),
        "numpy's global random state": repr((kind, [np.asarray(part).tolist() for part in state])),
        "Python's global random state": random.getstate(),
        "the warnings filters": list(warnings.filters),
        "numpy's way with floating-point errors": np.geterr(),
    }


def _start_pool() -> list[int]:
    """Have numpy's linear algebra library start its threads, and return all but the main one."""
    square = np.ones((_POOL_SIDE, _POOL_SIDE))
    square @ square
    with contextlib.suppress(OSError):
        return [int(name) for name in os.listdir("/proc/self/task") if int(name) != os.getpid()]
    return []


def _say(connection: Connection, **fields: Any) -> None:
    connection.send_bytes(json.dumps(fields).encode())
