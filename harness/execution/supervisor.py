"""The process that watches runs from outside: it forks, waits, and at a limit kills.

Started by the main process with one end of a connection as an open file. It never calls a learner
itself, so nothing a learner does can keep it from watching. When the main process is gone, the
connection ends, and it takes its runners with it; runners in turn die with it. On Linux it also adopts
whatever a learner leaves behind, and ends it.
"""

from __future__ import annotations

import contextlib
import ctypes
import json
import os
import shutil
import signal
import sys
import tempfile
import time
from collections import deque
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, Pipe, wait
from pathlib import Path
from typing import Any

from generators import compiled
from generators.graph import Graph
from harness.execution import memory
from harness.execution.messages import Work
from harness.execution.runner import fork_runner, outcome_from, serve_many, serve_one
from harness.learners.builtin import built_in
from harness.learners.sources import needs_isolation
from harness.ledger.store import DrawnDataset, DrawnNetwork
from harness.records import Learner, Outcome, Status

POLL_SECONDS = 0.03  # how often a running learner's memory is looked at
GRACE_SECONDS = 0.2  # between the request to end and the end
MAX_OUTPUT_BYTES = 16 << 20
TAIL_BYTES = 2000
_SET_CHILD_SUBREAPER = 36  # PR_SET_CHILD_SUBREAPER of <sys/prctl.h>


class _MainIsGone(Exception):
    """The main process has closed its end, or died."""


class _CannotDraw(Exception):
    """A network or dataset could not be drawn: an error of the input, not of a learner."""


@dataclass(slots=True)
class _Runner:
    """A forked runner, seen from outside."""

    pid: int
    connection: Connection
    output: int
    folder: Path
    drawn: int | None = None  # the number of the work whose material it holds
    ended: bool = field(default=False)


class Supervisor:
    """Take work from the main process, have it run, and report every event.

    Parameters
    ----------
    main : Connection
        To the main process.
    learners : tuple of Learner
        All of the plan, in its order.
    """

    def __init__(self, main: Connection, learners: tuple[Learner, ...]) -> None:
        self._main = main
        self._learners = learners
        self._queue: deque[Work] = deque()
        self._stopping = False
        self._steady: _Runner | None = None
        self._last_event = time.monotonic()
        # Imported here, once: runners are forked with everything loaded and compiled.
        self._specifications = {
            i: built_in(learner.method) for i, learner in enumerate(learners) if not needs_isolation(learner)
        }
        compiled.warm_all()

    def serve(self) -> None:
        """Work until the main process asks to stop or is gone."""
        try:
            self._main.send(("ready", os.getpid()))
            while not self._stopping:
                if not self._queue:
                    self._take_message()
                    continue
                work = self._queue.popleft()
                try:
                    self._do(work)
                except _CannotDraw as error:
                    self._main.send(("cannot-draw", str(error)))
                    return
                self._main.send(("finished", work.number))
            self._main.send(("stopped",))
        except (_MainIsGone, BrokenPipeError, ConnectionResetError):
            pass
        finally:
            if self._steady is not None:
                self._end(self._steady)

    def _take_message(self) -> None:
        try:
            message = self._main.recv()
        except (EOFError, ConnectionResetError):
            raise _MainIsGone from None
        if message is None:
            self._stopping = True
        else:
            self._queue.append(message)

    # One piece of work ------------------------------------------------------------------------------

    def _do(self, work: Work) -> None:
        self._last_event = time.monotonic()
        names = self._draw(work).graph.names
        for position in range(len(work.requests)):
            if self._stopping:
                return
            # A runner that is killed from outside is not the learner's doing: once more, then it is.
            outcome = self._run(work, position, names) or self._run(work, position, names) or _KILLED_TWICE
            overhead = time.monotonic() - self._last_event - (outcome.wall_seconds or 0.0)
            self._main.send(("ended", work.number, position, outcome, overhead))
            self._last_event = time.monotonic()

    def _draw(self, work: Work) -> DrawnNetwork:
        for _ in range(2):
            runner = self._steady_runner()
            runner.connection.send(("draw", work))
            reply, _ = self._watch(runner, None)
            if reply is None:
                continue
            if reply["event"] == "cannot-draw":
                raise _CannotDraw(reply["message"])
            runner.drawn = work.number
            network, dataset = _drawn_from(work, reply)
            self._main.send(("drawn", work.number, network, dataset))
            return network
        raise _CannotDraw("the process that draws networks and datasets died twice; is there memory enough?")

    def _run(self, work: Work, position: int, names: tuple[str, ...]) -> Outcome | None:
        learner = self._learners[work.requests[position].learner]
        if needs_isolation(learner):
            return self._run_alone(work, position, learner, names)
        runner = self._runner_with(work)
        runner.connection.send(("learn", position))
        reply, outcome = self._watch(runner, learner)
        return outcome if reply is None else outcome_from(reply, names)

    def _run_alone(
        self, work: Work, position: int, learner: Learner, names: tuple[str, ...]
    ) -> Outcome | None:
        runner = self._fork(serve_one(learner, work, position))
        try:
            reply, outcome = self._watch(runner, learner)
        finally:
            self._end(runner)
        if reply is None:
            return outcome
        if reply["event"] == "outcome":
            return outcome_from(reply, names)
        # Scored by a process that no stranger's code has touched.
        judge = self._runner_with(work)
        judge.connection.send(("score", position, reply["timed"]))
        reply, outcome = self._watch(judge, None)
        return outcome if reply is None else outcome_from(reply, names)

    # Watching ---------------------------------------------------------------------------------------

    def _watch(
        self, runner: _Runner, learner: Learner | None
    ) -> tuple[dict[str, Any] | None, Outcome | None]:
        """Wait for a runner's answer, holding it to a learner's limits.

        Returns
        -------
        reply : dict or None
            What the runner said, or None if it is gone.
        outcome : Outcome or None
            Why it is gone; None if it was killed by neither itself nor us.
        """
        began = time.monotonic()
        load = os.getloadavg()[0]
        while True:
            left = None if learner is None else began + learner.limits.seconds - time.monotonic()
            if left is not None and learner is not None and left <= 0:
                return None, self._stop(
                    runner, Status.TIMEOUT, f"over {learner.limits.seconds:g} seconds", learner, load
                )
            ready = wait(
                [self._main, runner.connection], POLL_SECONDS if left is None else min(POLL_SECONDS, left)
            )
            if self._main in ready:
                self._take_message()
            if runner.connection in ready:
                try:
                    reply = json.loads(runner.connection.recv_bytes())
                except (EOFError, ConnectionResetError):
                    return None, self._obituary(runner, load)
                if reply["event"] == "calling":
                    began = time.monotonic()
                    continue
                return reply, None
            if not ready:
                self._trim_output(runner)
                if learner is not None and self._holds(runner) > learner.limits.memory_mb:
                    cause = f"over {learner.limits.memory_mb} MB of memory"
                    return None, self._stop(runner, Status.OUT_OF_MEMORY, cause, learner, load)

    def _holds(self, runner: _Runner) -> float:
        return memory.resident_mb(memory.session_members(runner.pid))

    def _stop(self, runner: _Runner, status: Status, cause: str, learner: Learner, load: float) -> Outcome:
        tail = self._tail(runner)
        self._end(runner)
        seconds = learner.limits.seconds if status == Status.TIMEOUT else None
        return Outcome(status, cause + tail, wall_seconds=seconds, load=load)

    def _obituary(self, runner: _Runner, load: float) -> Outcome | None:
        tail = self._tail(runner)
        code = self._end(runner)
        if code == -signal.SIGKILL:
            return None
        how = f"died of signal {signal.Signals(-code).name}" if code < 0 else f"ended with exit code {code}"
        return Outcome(Status.CRASHED, f"the process {how}{tail}", load=load)

    # Runners ----------------------------------------------------------------------------------------

    def _steady_runner(self) -> _Runner:
        if self._steady is None or self._steady.ended:
            self._steady = self._fork(serve_many(self._learners, self._specifications))
        return self._steady

    def _runner_with(self, work: Work) -> _Runner:
        runner = self._steady_runner()
        if runner.drawn != work.number:
            self._draw(work)
            runner = self._steady_runner()
        return runner

    def _fork(self, main: Any) -> _Runner:
        ours, theirs = Pipe()
        folder = Path(tempfile.mkdtemp(prefix="arcassay-"))
        output = os.open(folder / ".output", os.O_RDWR | os.O_CREAT | os.O_APPEND | os.O_CLOEXEC, 0o600)
        os.unlink(folder / ".output")
        pid = fork_runner(main, theirs, output, folder)
        theirs.close()
        return _Runner(pid, ours, output, folder)

    def _end(self, runner: _Runner) -> int:
        """End a runner with all it started, and return its exit code (minus the signal, if killed)."""
        if runner.ended:
            return 0
        runner.ended = True
        if not _has_exited(runner.pid, 0.0):
            _signal_group(runner.pid, signal.SIGTERM)
            _has_exited(runner.pid, GRACE_SECONDS)
        # Not yet reaped, the leader keeps the group's number from being given to anybody else.
        _signal_group(runner.pid, signal.SIGKILL)
        _, status = os.waitpid(runner.pid, 0)
        self._end_orphans()
        runner.connection.close()
        os.close(runner.output)
        shutil.rmtree(runner.folder, ignore_errors=True)
        return os.waitstatus_to_exitcode(status)

    def _end_orphans(self) -> None:
        keep = {self._steady.pid} if self._steady is not None and not self._steady.ended else set()
        while orphans := _children() - keep:
            for pid in orphans:
                with contextlib.suppress(ProcessLookupError):
                    os.kill(pid, signal.SIGKILL)
                with contextlib.suppress(ChildProcessError):
                    os.waitpid(pid, 0)

    def _trim_output(self, runner: _Runner) -> None:
        if os.fstat(runner.output).st_size > MAX_OUTPUT_BYTES:
            os.ftruncate(runner.output, 0)

    def _tail(self, runner: _Runner) -> str:
        size = os.fstat(runner.output).st_size
        text = os.pread(runner.output, TAIL_BYTES, max(0, size - TAIL_BYTES)).decode(errors="replace").strip()
        return f"\n{text}" if text else ""


_KILLED_TWICE = Outcome(Status.CRASHED, "the process was killed twice from outside (signal SIGKILL)")


def _drawn_from(work: Work, reply: dict[str, Any]) -> tuple[DrawnNetwork, DrawnDataset]:
    names = tuple(reply["names"])
    graph = Graph.from_edges(names, directed=[(names[i], names[j]) for i, j, _ in reply["edges"]])
    network = DrawnNetwork(
        work.network_key, work.networks, work.replicate, graph, bytes.fromhex(reply["cpts_digest"])
    )
    view_digest = bytes.fromhex(reply["view_digest"])
    return network, DrawnDataset(work.dataset_key, work.index, reply["distortions"], view_digest)


def _has_exited(pid: int, patience: float) -> bool:
    """Whether a child ends within `patience` seconds; it is not reaped."""
    end = time.monotonic() + patience
    while os.waitid(os.P_PID, pid, os.WEXITED | os.WNOHANG | os.WNOWAIT) is None:
        if time.monotonic() >= end:
            return False
        time.sleep(0.001)
    return True


def _signal_group(group: int, number: signal.Signals) -> None:
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.killpg(group, number)


def _children() -> set[int]:
    try:
        text = Path(f"/proc/self/task/{os.getpid()}/children").read_text()
    except OSError:  # no such file on this system: orphans are left to it
        return set()
    return {int(word) for word in text.split()}


def main(file: int) -> None:
    """Serve the main process, whose connection's other end is the open file `file`."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    if sys.platform.startswith("linux"):
        ctypes.CDLL(None, use_errno=True).prctl(_SET_CHILD_SUBREAPER, 1)
    connection = Connection(file)
    learners: tuple[Learner, ...] = connection.recv()
    Supervisor(connection, learners).serve()
