"""The advisory lock that lets one process write to a ledger, and what sort of place the ledger is in."""

from __future__ import annotations

import contextlib
import fcntl
import os
import socket
from pathlib import Path

from harness.records import MachineStop

MOUNTS = Path("/proc/self/mounts")
NETWORK_FILE_SYSTEMS = frozenset(
    {"9p", "afs", "beegfs", "ceph", "cifs", "gfs2", "glusterfs", "gpfs", "lustre", "ncpfs", "nfs", "nfs4"}
    | {"ocfs2", "orangefs", "panfs", "smb3", "smbfs", "sshfs", "virtiofs"}
)


class WriterLock:
    """Hold the right to write to a ledger until `release`, or until the process dies.

    The kernel drops the lock with the process, however that ends; the small file that stays behind
    after kill -9 only names who held it last.

    Raises
    ------
    MachineStop
        If another process holds it.
    """

    def __init__(self, ledger: Path) -> None:
        file = ledger.resolve()  # a ledger under two names has one lock
        self._path = file.with_name(f".{file.name}.lock")
        while True:
            try:
                self._file = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
            except OSError as error:
                raise MachineStop(f"{ledger}: cannot be written here ({error.strerror})") from None
            try:
                fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                holder = os.pread(self._file, 200, 0).decode(errors="replace").strip() or "another process"
                os.close(self._file)
                raise MachineStop(
                    f"{ledger}: is being written by {holder}; wait for it, or stop it"
                ) from None
            if self._is_the_file():
                break
            os.close(self._file)  # its last holder removed it between our two calls: take a fresh one
        with contextlib.suppress(OSError):  # a full disk: the lock holds without the note
            os.ftruncate(self._file, 0)
            os.pwrite(self._file, f"process {os.getpid()} on {socket.gethostname()}\n".encode(), 0)

    def _is_the_file(self) -> bool:
        try:
            there = os.stat(self._path)
        except FileNotFoundError:
            return False
        held = os.fstat(self._file)
        return (there.st_dev, there.st_ino) == (held.st_dev, held.st_ino)

    def release(self) -> None:
        """Give the right up and remove the file."""
        # Removed while still held: whoever comes next makes a file of its own.
        self._path.unlink(missing_ok=True)
        os.close(self._file)


def is_on_network(path: Path, mounts: Path = MOUNTS) -> bool:
    """Whether a file lies on a file system that other machines may have mounted too.

    Parameters
    ----------
    path : Path
    mounts : Path
        The table of mounted file systems (man 5 proc); without one, the answer is no.
    """
    file, best, kind = path.resolve(), Path("/"), ""
    try:
        lines = mounts.read_text(errors="replace").splitlines()
    except OSError:
        return False
    for line in lines:
        _, place, own_kind, *_ = line.split(" ")
        point = Path(place.replace("\\040", " "))  # the only escape that is common in names
        if file.is_relative_to(point) and len(point.parts) >= len(best.parts):
            best, kind = point, own_kind
    return kind.removeprefix("fuse.") in NETWORK_FILE_SYSTEMS
