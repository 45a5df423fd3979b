"""Which processes a process has started, to measure them together and to leave none behind."""

from __future__ import annotations

import contextlib
import ctypes
import os
import signal
import sys
import time
from collections.abc import Iterable
from pathlib import Path

_IS_LINUX = sys.platform.startswith("linux")
_PROC = Path("/proc")
_HAS_CHILDREN_FILES = Path(f"/proc/self/task/{os.getpid()}/children").exists()
_SET_PARENT_DEATH_SIGNAL = 1  # PR_SET_PDEATHSIG of <sys/prctl.h>
_SET_CHILD_SUBREAPER = 36  # PR_SET_CHILD_SUBREAPER
_LOOK_SECONDS = 0.0005


def die_with_parent(parent: int) -> None:
    """Have the system kill this process when its parent ends, where the system can.

    Parameters
    ----------
    parent : int
        Who the parent was when this process began.
    """
    if _IS_LINUX:
        _prctl(_SET_PARENT_DEATH_SIGNAL, signal.SIGKILL)
        if os.getppid() != parent:  # it died before this line
            os._exit(1)


def survive_parent() -> None:
    """Take `die_with_parent` back."""
    if _IS_LINUX:
        _prctl(_SET_PARENT_DEATH_SIGNAL, 0)


def adopt_orphans() -> None:
    """Become the parent of whatever this process's descendants leave behind, where the system can."""
    if _IS_LINUX:
        _prctl(_SET_CHILD_SUBREAPER, 1)


def _prctl(option: int, value: int) -> None:
    ctypes.CDLL(None, use_errno=True).prctl(option, value, 0, 0, 0)


def children(pid: int) -> set[int]:
    """Return the children of a process, ended ones that nobody has waited for included."""
    if not _HAS_CHILDREN_FILES:
        import psutil

        with contextlib.suppress(psutil.Error):
            return {child.pid for child in psutil.Process(pid).children()}
        return set()
    found: set[int] = set()
    with contextlib.suppress(OSError):  # it has just ended
        for task in os.listdir(f"/proc/{pid}/task"):
            with open(f"/proc/{pid}/task/{task}/children", "rb") as file:
                found.update(map(int, file.read().split()))
    return found


def with_descendants(roots: Iterable[int]) -> set[int]:
    """Return some processes and all that descend from them, whatever session they have moved to."""
    found: set[int] = set()
    waiting = list(roots)
    while waiting:
        pid = waiting.pop()
        if pid not in found:
            found.add(pid)
            waiting.extend(children(pid))
    return found


def has_exited(pid: int, patience: float = 0.0) -> bool:
    """Whether a child ends within `patience` seconds; it is not waited for, so its number stays taken."""
    end = time.monotonic() + patience
    while os.waitid(os.P_PID, pid, os.WEXITED | os.WNOHANG | os.WNOWAIT) is None:
        if time.monotonic() >= end:
            return False
        time.sleep(_LOOK_SECONDS)
    return True


def signal_group(group: int, number: signal.Signals) -> None:
    """Send a signal to a process group that may have ended."""
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.killpg(group, number)


def end_marked(mark: str) -> None:
    """Kill every process that was started, at whatever remove, with `mark` in its environment.

    For what is left where the process that would have ended it has itself been killed; where there is no
    /proc, nothing is found.
    """
    wanted = mark.encode()
    for _ in range(3):  # one may start another while we look
        found = [pid for pid in _all_processes() if wanted in _environment(pid)]
        if not found:
            return
        for pid in found:
            with contextlib.suppress(ProcessLookupError, PermissionError):
                os.kill(pid, signal.SIGKILL)


def _all_processes() -> list[int]:
    with contextlib.suppress(OSError):
        return [int(name) for name in os.listdir(_PROC) if name.isdecimal()]
    return []


def _environment(pid: int) -> list[bytes]:
    with contextlib.suppress(OSError):
        return (_PROC / str(pid) / "environ").read_bytes().split(b"\0")
    return []
