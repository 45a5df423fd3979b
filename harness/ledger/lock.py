"""The advisory lock that lets one process write to a ledger."""

from __future__ import annotations

import contextlib
import fcntl
import os
import socket
from pathlib import Path

from harness.records import MachineStop


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
        self._path = ledger.with_name(f".{ledger.name}.lock")
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
