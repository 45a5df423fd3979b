"""The process that watches runs from outside: it forks, waits, and at a limit kills.

Started by the main process with one end of a connection as an open file. It never calls a learner
itself, so nothing a learner does can keep it from watching. When the main process is gone, the
connection ends, and it takes its runners with it; runners in turn die with it. On Linux it also adopts
whatever a learner leaves behind, and ends it.

Built-in learners are run by a *steady* runner, which lives on, draws for itself, and is asked for many
runs at once. Anybody else's learner gets a runner of its own for one run, forked when network and
dataset have been drawn here; its answer is scored here, where no stranger's code has been.
"""

from __future__ import annotations

import contextlib
import gc
import importlib
import os
import shutil
import signal
import sys
import tempfile
import time
from collections import deque
from collections.abc import Callable
from dataclasses import replace
from math import ceil, inf
from multiprocessing.connection import Connection
from types import FrameType
from typing import Any

from generators import compiled
from generators.errors import InputError
from harness.execution import memory, processes
from harness.execution.messages import Work, drawn_from, outcome_fields, outcome_from
from harness.execution.one_run import Material, MaterialSource, scored, timed_from
from harness.execution.runner import serve_many, serve_one
from harness.execution.watched import GRACE_SECONDS, Watched
from harness.learners.builtin import built_in
from harness.learners.sources import needs_isolation
from harness.ledger.store import now
from harness.records import Learner, Outcome, Status

SLACK_SECONDS = 0.01  # the learner's own clock starts a little after ours; it judges, ours only ends
POLL_SECONDS = 0.03  # how often a running learner's memory is looked at
LOADING_SECONDS = 120.0  # for importing somebody's learner, which its own limit does not cover
# What reads a learner's answer: imported before the fork, not within the time of the first call.
_PRELOADED = ("networkx", "pandas")


class _MainIsGone(Exception):
    """The main process has closed its end, or died."""


class _CannotDraw(Exception):
    """A network or dataset could not be drawn: an error of the input, not of a learner."""


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
        self._steady: Watched | None = None
        self._source = MaterialSource()
        self._material: Material | None = None
        self._last_event = time.monotonic()
        # Imported here, once: runners are forked with everything loaded and compiled.
        for name in _PRELOADED:
            importlib.import_module(name)
        self._specifications = {
            i: built_in(learner.method) for i, learner in enumerate(learners) if not needs_isolation(learner)
        }
        _warm_up()
        gc.collect()
        gc.freeze()  # a runner's collections would copy every page of this
        self._folder = tempfile.mkdtemp(prefix="arcassay-")  # holds the working folders of runners

    def serve(self) -> None:
        """Work until the main process asks to stop or is gone."""
        try:
            self._main.send(("ready", self._folder))
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
            shutil.rmtree(self._folder, ignore_errors=True)

    def _take_message(self) -> None:
        try:
            message = self._main.recv()
        except (EOFError, OSError):
            raise _MainIsGone from None
        if message is None:
            self._stopping = True
        else:
            self._queue.append(message)

    # One piece of work ------------------------------------------------------------------------------

    def _do(self, work: Work) -> None:
        self._last_event = time.monotonic()
        at = 0
        while at < len(work.requests) and not self._stopping:
            if needs_isolation(self._learner_at(work, at)):
                # A runner that is killed from outside is not the learner's doing: once more, then it is.
                started = now()
                outcome = self._run_alone(work, at) or self._run_alone(work, at) or _KILLED_TWICE
                self._report(work, at, outcome_fields(outcome), started)
                at += 1
            else:
                at = self._run_steadily(work, at)

    def _learner_at(self, work: Work, position: int) -> Learner:
        return self._learners[work.requests[position].learner]

    def _run_steadily(self, work: Work, first: int) -> int:
        """Have the runs of built-in learners done from one position on, and return where they end."""
        end = first
        while end < len(work.requests) and not needs_isolation(self._learner_at(work, end)):
            end += 1
        at, was_killed = first, False
        while at < end:
            runner = self._runner_with(work)
            runner.ask("learn", at, end)
            while at < end and not runner.has_ended:
                if self._stopping:
                    return end
                started = now()
                reply, outcome = self._watch(runner, self._learner_at(work, at))
                if reply is None and outcome is None and not was_killed:
                    was_killed = True
                    continue
                self._report(work, at, reply or outcome_fields(outcome or _KILLED_TWICE), started)
                at, was_killed = at + 1, False
        return end

    def _run_alone(self, work: Work, position: int) -> Outcome | None:
        learner = self._learner_at(work, position)
        material = self._material_of(work)
        runner = self._fork(serve_one(learner, material, position))
        try:
            reply, outcome = self._watch(runner, learner)
        finally:
            self._end(runner)
        if reply is None:
            return outcome
        if reply["event"] == "outcome":
            return outcome_from(reply, material.network.names)
        try:
            timed = timed_from(reply, material.network.names)
        except (KeyError, TypeError, ValueError, IndexError):
            return Outcome(Status.INVALID, "what the learner's process sent is no answer")
        return scored(material, learner, timed)

    def _report(self, work: Work, position: int, fields: dict[str, Any], started: str) -> None:
        learner = self._learner_at(work, position)
        if fields["status"] == Status.DONE and fields["wall_seconds"] > learner.limits.seconds:
            fields = outcome_fields(replace(_over_time(learner), load=fields["load"]))
        overhead = time.monotonic() - self._last_event - (fields["wall_seconds"] or 0.0)
        self._main.send(("ended", work.number, position, fields, started, overhead))
        self._last_event = time.monotonic()

    # Networks and datasets --------------------------------------------------------------------------

    def _material_of(self, work: Work) -> Material:
        """Return the network and dataset of some work, drawn in this process for the runners to come."""
        if self._material is None or self._material.work.number != work.number:
            self._material = None
            try:
                self._material = self._source.draw(work)
            except InputError as error:
                raise _CannotDraw(str(error)) from None
            except MemoryError:
                raise _CannotDraw("there is not memory enough for a network and its dataset") from None
            self._main.send(
                ("drawn", work.number, self._material.drawn_network, self._material.drawn_dataset)
            )
        return self._material

    def _runner_with(self, work: Work) -> Watched:
        """Return the steady runner, holding the network and dataset of some work."""
        for _ in range(2):
            if self._steady is None or self._steady.has_ended:
                self._steady = self._fork(serve_many(self._learners, self._specifications))
            runner = self._steady
            if runner.drawn == work.number:
                return runner
            runner.ask("draw", work)
            reply, _ = self._watch(runner, None)
            if reply is None:
                continue
            if reply["event"] == "cannot-draw":
                raise _CannotDraw(reply["message"])
            runner.drawn = work.number
            self._main.send(("drawn", work.number, *drawn_from(work, reply)))
            return runner
        raise _CannotDraw("the process that draws networks and datasets died twice; is there memory enough?")

    # Watching ---------------------------------------------------------------------------------------

    def _watch(
        self, runner: Watched, learner: Learner | None
    ) -> tuple[dict[str, Any] | None, Outcome | None]:
        """Wait for a runner's answer, holding it to a learner's limits.

        Returns
        -------
        reply : dict or None
            What the runner said, or None if it is gone.
        outcome : Outcome or None
            Why it is gone; None if it was killed by neither itself nor us.
        """
        load = os.getloadavg()[0]
        # A built-in learner is called at once; a stranger's is imported first, and says when it is called.
        is_called = learner is not None and not needs_isolation(learner)
        began = time.monotonic()
        while True:
            left = began + _time_allowed(learner, is_called) - time.monotonic()
            if learner is not None and left <= 0:
                return None, self._stop(runner, _over_time(learner, is_called), load)
            ready = [file for file, _ in runner.poll.poll(ceil(1000 * min(POLL_SECONDS, left)))]
            if self._main.fileno() in ready:
                self._take_message()
            if runner.connection.fileno() in ready:
                reply = runner.answer()
                if reply is None:
                    return None, self._obituary(runner, load)
                if reply["event"] != "calling":
                    return reply, None
                is_called, began = True, time.monotonic()
            elif not ready:
                if runner.is_silent_for_good():
                    return None, self._obituary(runner, load)
                runner.trim_output()
                if learner is not None and self._holds(runner) > learner.limits.memory_mb:
                    cause = f"over the limit of {learner.limits.memory_mb} MB of memory"
                    return None, self._stop(runner, Outcome(Status.OUT_OF_MEMORY, cause), load)

    def _holds(self, runner: Watched) -> float:
        """Return the memory of a runner and all that was started in it, adopted processes too."""
        if runner is self._steady:
            return memory.resident_mb(processes.with_descendants([runner.pid]))
        return memory.resident_mb(processes.with_descendants(processes.children(os.getpid()) - self._kept()))

    def _stop(self, runner: Watched, outcome: Outcome, load: float) -> Outcome:
        tail = runner.tail()
        self._end(runner)
        return replace(outcome, cause=outcome.cause + tail, load=load)

    def _obituary(self, runner: Watched, load: float) -> Outcome | None:
        tail = runner.tail()
        by_itself = processes.has_exited(runner.pid, GRACE_SECONDS)
        code = self._end(runner)
        if not by_itself:
            how = "closed its connection to the harness"
        elif code in (-signal.SIGKILL, -signal.SIGTERM):
            return None
        else:
            how = f"died of signal {_signal_name(-code)}" if code < 0 else f"ended with exit code {code}"
        return Outcome(Status.CRASHED, f"the process {how}{tail}", load=load)

    # Runners ----------------------------------------------------------------------------------------

    def _fork(self, main: Callable[[Connection], None]) -> Watched:
        return Watched.fork(main, self._main, self._folder)

    def _end(self, runner: Watched) -> int:
        """End a runner and whatever it left behind, and return its exit code."""
        if runner.has_ended:
            return 0
        code = runner.end()
        while orphans := processes.children(os.getpid()) - self._kept():
            for pid in orphans:
                with contextlib.suppress(ProcessLookupError):
                    os.kill(pid, signal.SIGKILL)
                with contextlib.suppress(ChildProcessError):
                    os.waitpid(pid, 0)
        return code

    def _kept(self) -> set[int]:
        return set() if self._steady is None or self._steady.has_ended else {self._steady.pid}


_KILLED_TWICE = Outcome(
    Status.CRASHED,
    "the process was killed twice (signal SIGKILL or SIGTERM), though no limit was passed: by itself, by "
    "somebody, or by the system when memory ran out",
)


def _time_allowed(learner: Learner | None, is_called: bool) -> float:
    if learner is None:
        return inf
    return learner.limits.seconds + SLACK_SECONDS if is_called else LOADING_SECONDS


def _over_time(learner: Learner, is_called: bool = True) -> Outcome:
    if not is_called:
        return Outcome(Status.ERROR, f"importing the learner took over {LOADING_SECONDS:g} s")
    seconds = learner.limits.seconds
    return Outcome(Status.TIMEOUT, f"over the limit of {seconds:g} s", wall_seconds=seconds)


def _signal_name(number: int) -> str:
    try:
        return signal.Signals(number).name
    except ValueError:  # a real-time signal
        return str(number)


def _warm_up() -> None:
    """Compile what is not in the cache in a child, whose memory is not that of every runner to come."""
    if not compiled.is_warm():
        parent = os.getpid()
        pid = os.fork()
        if not pid:
            try:
                processes.die_with_parent(parent)
                compiled.warm_all()
            finally:
                os._exit(0)
        os.waitpid(pid, 0)
    compiled.warm_all()


def _end_in_order(number: int, frame: FrameType | None) -> None:
    raise SystemExit(1)  # so that the main process looks for what is left


def main(file: int, parent: int) -> None:
    """Serve the main process `parent`, whose connection's other end is the open file `file`."""
    processes.die_with_parent(parent)  # until its own end is looked for: loading may take minutes
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _end_in_order)
    connection = Connection(file)
    learners, path = connection.recv()
    sys.path += [place for place in path if place not in sys.path]
    supervisor = Supervisor(connection, learners)
    processes.adopt_orphans()
    processes.survive_parent()
    supervisor.serve()
