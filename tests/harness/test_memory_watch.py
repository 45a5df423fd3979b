"""Measuring and ending processes: the system's own counts, and processes that try to get away."""

from __future__ import annotations

import os
import resource
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import psutil
import pytest

from harness.execution import memory, processes

linux_only = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="counts of /proc and prctl")


@contextmanager
def child(action: Callable[[], None]) -> Iterator[int]:
    """Fork a child that acts and then waits to be killed; it is ended and waited for at the end."""
    ready, tell = os.pipe()
    pid = os.fork()
    if not pid:
        action()
        os.write(tell, b"x")
        time.sleep(60)
        os._exit(0)
    os.read(ready, 1)
    os.close(ready)
    os.close(tell)
    try:
        yield pid
    finally:
        for member in processes.with_descendants([pid]):
            os.kill(member, signal.SIGKILL)
        os.waitpid(pid, 0)


def nothing() -> None:
    """Do nothing."""


def start_a_grandchild_in_its_own_session() -> None:
    subprocess.Popen(["sleep", "60"], start_new_session=True)


@linux_only
def test_peak_counts_from_the_reset() -> None:
    """Memory that was held and given back before the reset is not in the peak; what came after is."""
    before_reset = np.ones(200 * memory.MEBIBYTE, dtype=np.uint8)
    del before_reset

    memory.reset_peak()
    calm = memory.peak_mb()
    held = np.ones(100 * memory.MEBIBYTE, dtype=np.uint8)
    grown = memory.peak_mb() - calm
    del held
    kept = memory.peak_mb() - calm

    assert calm < psutil.Process().memory_info().rss / memory.MEBIBYTE + 20
    assert 95 < grown < 120
    assert 95 < kept < 120


def test_resident_memory_is_what_the_system_says() -> None:
    """The resident set of one process is what psutil reports, but for what changed between two looks."""
    expected = psutil.Process().memory_info().rss / memory.MEBIBYTE

    found = memory.resident_mb([os.getpid()])

    assert found == pytest.approx(expected, abs=5)


def test_a_process_that_is_gone_holds_nothing() -> None:
    """Processes may end between being listed and being measured."""
    ended = subprocess.Popen(["true"])
    ended.wait()

    assert memory.resident_mb([ended.pid]) == 0.0
    assert processes.with_descendants([ended.pid]) == {ended.pid}


def test_descendants_are_found_in_other_sessions() -> None:
    """A grandchild in a session of its own is still a descendant; psutil finds the same ones."""
    with child(start_a_grandchild_in_its_own_session) as pid:
        expected = {pid, *(found.pid for found in psutil.Process(pid).children(recursive=True))}

        found = processes.with_descendants([pid])

    assert len(found) == 2
    assert found == expected


def test_children_are_found_without_the_systems_lists(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where /proc lists no children, they are looked for among all processes."""
    with child(nothing) as pid:
        expected = processes.children(os.getpid())
        monkeypatch.setattr(processes, "_HAS_CHILDREN_FILES", False)

        found = processes.children(os.getpid())

    assert pid in found
    assert found == expected


def test_exit_is_noticed_without_waiting_for_it() -> None:
    """A child that has ended is seen to have, and its number stays taken until it is waited for."""
    pid = os.fork()
    if not pid:
        os._exit(7)

    has_exited = processes.has_exited(pid, 30.0)
    again = processes.has_exited(pid)

    assert (has_exited, again) == (True, True)
    assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 7


def test_a_living_child_has_not_exited() -> None:
    """Patience ends."""
    with child(nothing) as pid:
        assert not processes.has_exited(pid, 0.01)


@linux_only
def test_child_dies_with_its_parent() -> None:
    """After `die_with_parent`, kill -9 of the parent is the end of the child too."""
    ready, tell = os.pipe()
    parent = os.fork()
    if not parent:
        own = os.getpid()
        grandchild = os.fork()
        if not grandchild:
            processes.die_with_parent(own)
            os.write(tell, os.getpid().to_bytes(4, "big"))
            time.sleep(60)
            os._exit(0)
        time.sleep(60)
        os._exit(0)
    grandchild = int.from_bytes(os.read(ready, 4), "big")

    os.kill(parent, signal.SIGKILL)
    os.waitpid(parent, 0)

    assert is_gone(grandchild)


@linux_only
def test_marked_processes_are_ended_wherever_they_went() -> None:
    """What carries a mark in its environment is killed, orphans in other sessions too; nothing else is."""
    mark = f"ARCASSAY_TEST={os.getpid()}-{time.monotonic_ns()}"
    name, _, value = mark.partition("=")
    script = (
        "import subprocess\n"
        "print(subprocess.Popen(['sleep', '60'], stdout=subprocess.DEVNULL, start_new_session=True).pid)"
    )
    orphan = int(subprocess.check_output([sys.executable, "-c", script], env={**os.environ, name: value}))
    other = subprocess.Popen(["sleep", "60"], env={**os.environ, name: value + "0"})

    processes.end_marked(mark)

    assert is_gone(orphan)
    assert other.poll() is None
    other.kill()
    other.wait()


def test_crashes_leave_no_image_of_the_memory() -> None:
    """A runner's soft limit on core files is 0; its hard limit is left alone."""
    from harness.execution.runner import _offer_itself_first

    hard = resource.getrlimit(resource.RLIMIT_CORE)[1]
    ready, tell = os.pipe()
    pid = os.fork()
    if not pid:
        _offer_itself_first()
        os.write(tell, repr(resource.getrlimit(resource.RLIMIT_CORE)).encode())
        os._exit(0)
    os.waitpid(pid, 0)

    assert os.read(ready, 100).decode() == repr((0, hard))


def is_gone(pid: int, patience: float = 30.0) -> bool:
    """Whether a process, which may not be ours to wait for, ends within some seconds."""
    end = time.monotonic() + patience
    while time.monotonic() < end:
        try:
            if psutil.Process(pid).status() == psutil.STATUS_ZOMBIE:
                return True
        except psutil.NoSuchProcess:
            return True
        time.sleep(0.01)
    return False
