"""The local engine: a supervisor per worker, work handed out ahead, events handed back."""

from __future__ import annotations

import contextlib
import os
import secrets
import select
import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from math import ceil
from multiprocessing.connection import Connection
from pathlib import Path
from typing import IO, Any

from generators.errors import InputError
from harness.execution.messages import Drawn, Ended, Event, Work, outcome_from
from harness.execution.processes import end_marked
from harness.records import Learner, MachineStop

THREAD_VARIABLES = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMEXPR_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
    "NUMBA_NUM_THREADS",
)
# The folder of *this* package goes first: another `harness` may stand in the working folder.
_ROOT = Path(__file__).parents[2]
_START = """
import sys
sys.path.insert(0, sys.argv[1])
from harness.execution.supervisor import main
main(int(sys.argv[2]), int(sys.argv[3]))
"""
WORK_AHEAD = 2  # pieces of work per worker, so that none waits for the main process
MAX_BATCH = 500  # events handed back at once: what one commit of the ledger holds
GATHER_SECONDS = 0.1  # from the first of them: what kill -9 may cost, to be done again
LOOK_SECONDS = 0.2  # how soon a wish to stop is noticed
END_SECONDS = 5.0  # for a supervisor to end its runners
BUFFER_BYTES = 1 << 18  # holds all work that is handed out ahead, so that no sending has to wait
MAX_DEATHS = 5
MARK = "ARCASSAY_WORKER"  # in the environment of all that a worker starts


@dataclass(slots=True, eq=False)
class _Worker:
    """A supervisor, seen from the main process."""

    process: subprocess.Popen[bytes]
    connection: Connection
    errors: IO[bytes]
    mark: str
    folder: str | None = None  # known once it is ready
    is_over: bool = False
    open_work: dict[int, Work] = field(default_factory=dict)
    ended: dict[int, set[int]] = field(default_factory=dict)
    names: dict[int, tuple[str, ...]] = field(default_factory=dict)


class LocalEngine:
    """Runs work on this machine.

    Parameters
    ----------
    learners : tuple of Learner
    n_workers : int
        Runs at a time.
    threads : int
        What a learner may use; set before its process starts.

    Notes
    -----
    Use in a ``with`` block: leaving it ends every process.
    """

    def __init__(self, learners: tuple[Learner, ...], *, n_workers: int, threads: int = 1) -> None:
        self._learners = learners
        self._threads = threads
        self._n_workers = n_workers
        self._workers: list[_Worker] = []
        self._again: deque[Work] = deque()
        self._is_stopping = False
        self._is_exhausted = False
        self._deaths = 0
        self._was_ready = False
        self._fault: InputError | None = None

    def __enter__(self) -> LocalEngine:
        return self

    def __exit__(self, *_: object) -> None:
        for worker in self._workers:
            worker.connection.close()  # a supervisor that loses its main process ends its runners
            if worker.folder is None:
                worker.process.kill()  # it has none yet, and may be compiling for a minute
        for worker in self._workers:
            _clear_away(worker)

    def stop(self) -> None:
        """Finish what is running, and nothing more."""
        self._is_stopping = True

    def batches(
        self, works: Iterator[Work], on_ready: Callable[[], None] | None = None
    ) -> Iterator[list[Event]]:
        """Do all work and yield its events in batches, an empty one when there was nothing to wait for.

        Parameters
        ----------
        works : iterator of Work
            Taken as workers become free.
        on_ready : callable, optional
            Called once, when the first worker has everything loaded and compiled.

        Raises
        ------
        InputError
            If a network cannot be drawn.
        MachineStop
            If workers keep dying.
        """
        source = iter(works)
        self._workers += [self._start() for _ in range(self._n_workers)]
        told_to_stop = False
        while True:
            if self._is_stopping and not told_to_stop:
                told_to_stop = True
                self._tell_to_stop()
            if not told_to_stop:
                self._hand_out(source)
            if (self._is_exhausted or told_to_stop) and not self._is_working():
                return
            yield self._gather(source, on_ready)
            if self._fault is not None:
                raise self._fault

    def _is_working(self) -> bool:
        return any(worker.open_work for worker in self._workers if not worker.is_over)

    def _gather(self, source: Iterator[Work], on_ready: Callable[[], None] | None) -> list[Event]:
        """Return what happens within a short while of the first event; nothing if none comes soon."""
        live = {worker.connection.fileno(): worker for worker in self._workers if not worker.is_over}
        poll = select.poll()
        for file in live:
            poll.register(file, select.POLLIN)
        batch: list[Event] = []
        end = time.monotonic() + LOOK_SECONDS
        while len(batch) < MAX_BATCH:
            ready = poll.poll(ceil(1000 * max(0.0, end - time.monotonic())))
            for file, _ in ready:
                events = self._read(live[file], on_ready)
                if events and not batch:
                    end = time.monotonic() + GATHER_SECONDS
                batch += events
                if live[file].is_over:
                    poll.unregister(file)
            if not ready or not self._is_working():
                break
            if not self._is_stopping:
                self._hand_out(source)
        return batch

    def _hand_out(self, source: Iterator[Work]) -> None:
        for worker in self._workers:
            while worker.folder is not None and not worker.is_over and len(worker.open_work) < WORK_AHEAD:
                work = self._again.popleft() if self._again else next(source, None)
                if work is None:
                    self._is_exhausted = True
                    return
                worker.open_work[work.number] = work
                worker.ended[work.number] = set()
                with contextlib.suppress(BrokenPipeError):  # its death is noticed where it is read
                    worker.connection.send(work)

    def _read(self, worker: _Worker, on_ready: Callable[[], None] | None) -> list[Event]:
        try:
            message: Any = worker.connection.recv()
        except (EOFError, OSError):
            self._replace(worker)
            return []
        word, *rest = message
        if word == "drawn":
            number, network, dataset = rest
            worker.names[number] = network.graph.names
            return [Drawn(worker.open_work[number], network, dataset)]
        if word == "ended":
            number, position, fields, started, overhead = rest
            worker.ended[number].add(position)
            self._deaths = 0
            work = worker.open_work[number]
            outcome = outcome_from(fields, worker.names[number])
            return [Ended(work, work.requests[position], outcome, started, overhead)]
        self._note(worker, word, rest, on_ready)
        return []

    def _note(self, worker: _Worker, word: str, rest: list[Any], on_ready: Callable[[], None] | None) -> None:
        if word == "ready":
            worker.folder = rest[0]
            if not self._was_ready:
                self._was_ready = True
                if on_ready is not None:
                    on_ready()
        elif word == "finished":
            for kept in (worker.open_work, worker.ended, worker.names):
                kept.pop(rest[0], None)
        elif word == "stopped":
            worker.is_over = True
            worker.open_work.clear()
        elif word == "cannot-draw":
            worker.is_over = True
            worker.open_work.clear()
            self._fault = InputError(*rest[0].splitlines())

    def _tell_to_stop(self) -> None:
        for worker in self._workers:
            if worker.folder is not None and not worker.is_over:
                with contextlib.suppress(BrokenPipeError):
                    worker.connection.send(None)
            else:
                worker.is_over = True
                worker.open_work.clear()

    def _replace(self, worker: _Worker) -> None:
        """Start another supervisor for one that died, and have its unfinished work done again."""
        worker.is_over = True
        self._deaths += 1
        if self._deaths > MAX_DEATHS:
            worker.errors.seek(0)
            last = worker.errors.read().decode(errors="replace").strip().splitlines()[-1:]
            raise MachineStop(f"worker processes keep dying{': ' + last[0] if last else ''}")
        for number, work in worker.open_work.items():
            done = worker.ended[number]
            left = tuple(request for position, request in enumerate(work.requests) if position not in done)
            if left:
                self._again.append(replace(work, requests=left))
                self._is_exhausted = False
        worker.open_work.clear()
        self._workers.remove(worker)
        worker.connection.close()
        _clear_away(worker)
        if not self._is_stopping:
            self._workers.append(self._start())

    def _start(self) -> _Worker:
        ours, theirs = socket.socketpair()
        ours.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, BUFFER_BYTES)
        arguments = [str(_ROOT), str(theirs.fileno()), str(os.getpid())]
        try:
            errors = tempfile.TemporaryFile()  # noqa: SIM115 - open as long as the worker lives
            mark = secrets.token_hex(16)
            threads = dict.fromkeys(THREAD_VARIABLES, str(self._threads))
            environment = {**os.environ, **threads, MARK: mark}
            process = subprocess.Popen(
                [sys.executable, "-P", "-c", _START, *arguments],
                stdin=subprocess.DEVNULL,
                stdout=errors,
                stderr=errors,
                pass_fds=[theirs.fileno()],
                env=environment,
                start_new_session=True,  # the terminal's Ctrl-C is for the main process alone
            )
        except OSError as error:
            raise MachineStop(f"a worker process cannot be started ({error.strerror})") from error
        finally:
            theirs.close()
        connection = Connection(ours.detach())
        # Where this process finds a learner's module, so must that one.
        path = [os.path.abspath(place) for place in sys.path if os.path.exists(place or os.curdir)]
        connection.send((self._learners, path))
        return _Worker(process, connection, errors, mark)


def _clear_away(worker: _Worker) -> None:
    """See a supervisor end, and end what it leaves if it could not do so itself."""
    with contextlib.suppress(subprocess.TimeoutExpired):
        worker.process.wait(timeout=END_SECONDS)
    worker.process.kill()
    if worker.process.wait() != 0:
        end_marked(f"{MARK}={worker.mark}")
        if worker.folder is not None:
            shutil.rmtree(worker.folder, ignore_errors=True)
    worker.errors.close()
