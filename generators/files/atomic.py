"""Writing a file so that it is there whole or not at all."""

from __future__ import annotations

import errno
import os
import secrets
import stat

from generators.errors import InputError

# The machine's trouble, not the caller's: a full disk, a full quota, a failing device.
MACHINE_ERRORS = frozenset({errno.ENOSPC, errno.EDQUOT, errno.EIO})


def atomic_write(path: str | os.PathLike[str], content: str | bytes) -> None:
    """Write a file by way of a temporary one in the same folder and `os.replace`.

    A reader sees the old file or the new one, never a part; on any failure the old file stays and the
    temporary one goes. An existing file keeps its permissions, and a symbolic link keeps pointing at
    the file that is replaced.

    Parameters
    ----------
    path : str or path
    content : str or bytes
        Text is written in UTF-8, line ends as they are.

    Raises
    ------
    InputError
        If the path cannot be written: no such folder, a folder itself, not permitted, not a regular
        file; or if UTF-8 cannot hold the text.
    OSError
        If the machine fails (disk full, input/output error).

    Examples
    --------
    >>> import pathlib, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     atomic_write(pathlib.Path(folder, "note.txt"), "done")
    ...     pathlib.Path(folder, "note.txt").read_text()
    'done'
    """
    where = os.fspath(path)
    try:
        data = content.encode("utf-8") if isinstance(content, str) else content
    except UnicodeEncodeError as error:
        raise InputError(f"{where}: UTF-8 cannot hold the character {error.object[error.start]!r}.") from None
    try:
        _replace(os.path.realpath(where), data)
    except ValueError as error:  # a NUL in the path
        raise InputError(f"{where!r}: cannot be written: {error}.") from None
    except OSError as error:
        if error.errno in MACHINE_ERRORS:
            raise
        raise InputError(f"{where}: cannot be written: {error.strerror}.") from None


def _replace(target: str, data: bytes) -> None:
    mode = 0o666  # what `open` asks for, before the umask
    if os.path.exists(target):
        found = os.stat(target).st_mode
        if not stat.S_ISREG(found):
            # os.replace would put a regular file in the place of a device.
            code = errno.EISDIR if stat.S_ISDIR(found) else errno.EINVAL
            raise OSError(code, "it is a folder" if code == errno.EISDIR else "it is not a regular file")
        mode = stat.S_IMODE(found)
    temporary = os.path.join(os.path.dirname(target), f".{secrets.token_hex(8)}.part")
    descriptor = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL, mode)
    try:
        with os.fdopen(descriptor, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        if mode != 0o666:
            os.chmod(temporary, mode)  # the umask may have taken bits that the old file had
        os.replace(temporary, target)
    except BaseException:
        os.unlink(temporary)
        raise
