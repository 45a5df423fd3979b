"""How much memory some processes hold, and the peak of one call.

`ru_maxrss` of a forked child reports its parent's size, so on Linux the peak is VmHWM of
/proc/self/status, set back before the call by writing 5 to /proc/self/clear_refs (man 5 proc).
"""

from __future__ import annotations

import contextlib
import os
import resource
import sys
from collections.abc import Iterable

MEBIBYTE = 1 << 20
_PAGE = os.sysconf("SC_PAGE_SIZE")
_IS_LINUX = sys.platform.startswith("linux")


def reset_peak() -> None:
    """Set this process's peak back to what it holds now, where the system can."""
    if _IS_LINUX:
        with contextlib.suppress(OSError), open("/proc/self/clear_refs", "w") as file:
            file.write("5")


def peak_mb() -> float:
    """Return the most that this process has held since `reset_peak`, in units of 2^20 bytes."""
    if _IS_LINUX:
        with contextlib.suppress(OSError), open("/proc/self/status", "rb") as file:
            for line in file:
                if line.startswith(b"VmHWM:"):
                    return int(line.split()[1]) / 1024
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / MEBIBYTE if sys.platform == "darwin" else peak / 1024


def resident_mb(processes: Iterable[int]) -> float:
    """Return what some processes hold together; pages that they share count for each."""
    return sum(_resident_bytes(pid) for pid in processes) / MEBIBYTE


def _resident_bytes(pid: int) -> int:
    if _IS_LINUX:
        with contextlib.suppress(OSError, ValueError, IndexError), open(f"/proc/{pid}/statm", "rb") as file:
            return int(file.read().split()[1]) * _PAGE
        return 0
    import psutil

    with contextlib.suppress(psutil.Error):
        return int(psutil.Process(pid).memory_info().rss)
    return 0
