"""A runner as its supervisor sees it: a process that is asked, listened to, looked at and ended."""

from __future__ import annotations

import contextlib
import json
import os
import select
import shutil
import signal
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from multiprocessing.connection import Connection, Pipe
from pathlib import Path
from typing import Any

from harness.execution import processes
from harness.execution.runner import fork_runner

GRACE_SECONDS = 0.2  # between the request to end and the end
MAX_OUTPUT_BYTES = 16 << 20
MAX_ANSWER_BYTES = 1 << 30
TAIL_BYTES = 2000


@dataclass(slots=True)
class Watched:
    """A runner, seen from outside.

    Parameters
    ----------
    pid : int
        Also the number of its process group and session.
    connection : Connection
    poll : select.poll
        On the main process and on the runner.
    output : int
        An open file with what it has printed.
    folder : Path
        Its working folder, which goes with it.
    drawn : int or None
        The number of the work whose network and dataset it holds.
    has_ended : bool
    """

    pid: int
    connection: Connection
    poll: select.poll
    output: int
    folder: Path
    drawn: int | None = None
    has_ended: bool = False

    @classmethod
    def fork(cls, main: Callable[[Connection], None], supervised_for: Connection, parent: str) -> Watched:
        """Fork a runner.

        Parameters
        ----------
        main : callable
            What it does; takes its end of the connection.
        supervised_for : Connection
            To the main process, which is to be heard while the runner is waited for.
        parent : str
            The folder in which its working folder is made.
        """
        ours, theirs = Pipe()
        folder = Path(tempfile.mkdtemp(dir=parent))
        output = os.open(folder / ".output", os.O_RDWR | os.O_CREAT | os.O_APPEND | os.O_CLOEXEC, 0o600)
        os.unlink(folder / ".output")
        pid = fork_runner(main, theirs, output, folder)
        theirs.close()
        poll = select.poll()
        poll.register(supervised_for, select.POLLIN)
        poll.register(ours, select.POLLIN)
        return cls(pid, ours, poll, output, folder)

    def ask(self, *command: Any) -> None:
        """Send a command; that it is gone is noticed where its answer is awaited."""
        with contextlib.suppress(BrokenPipeError, ConnectionResetError):
            self.connection.send(command)

    def answer(self) -> dict[str, Any] | None:
        """Return what it says, or None if that is nothing of ours, or the end."""
        try:
            answer = json.loads(self.connection.recv_bytes(MAX_ANSWER_BYTES))
        except (EOFError, OSError, ValueError):
            return None
        return answer if isinstance(answer, dict) and "event" in answer else None

    def is_silent_for_good(self) -> bool:
        """Whether it is gone, with nothing left to say, though a child of it holds the connection open."""
        return processes.has_exited(self.pid) and not self.connection.poll()

    def trim_output(self) -> None:
        """Forget what was printed if it is too much."""
        if os.fstat(self.output).st_size > MAX_OUTPUT_BYTES:
            os.ftruncate(self.output, 0)

    def tail(self) -> str:
        """Return the end of what was printed, on a new line, or nothing."""
        size = os.fstat(self.output).st_size
        text = os.pread(self.output, TAIL_BYTES, max(0, size - TAIL_BYTES)).decode(errors="replace")
        text = text.replace("\0", "?").strip()
        return f"\n{text}" if text else ""

    def end(self) -> int:
        """End it with its process group, and return its exit code (minus the signal, if killed)."""
        self.has_ended = True
        if not processes.has_exited(self.pid):
            processes.signal_group(self.pid, signal.SIGTERM)
            processes.has_exited(self.pid, GRACE_SECONDS)
        # Not yet waited for, the leader keeps the group's number from being given to anybody else.
        processes.signal_group(self.pid, signal.SIGKILL)
        _, status = os.waitpid(self.pid, 0)
        self.connection.close()
        os.close(self.output)
        shutil.rmtree(self.folder, ignore_errors=True)
        return os.waitstatus_to_exitcode(status)
