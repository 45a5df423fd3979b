"""Find a ledger's file sound before anything touches it, connect to it, and name what goes wrong."""

from __future__ import annotations

import contextlib
import json
import os
import sqlite3
from collections.abc import Iterator
from importlib import resources
from pathlib import Path

from generators.errors import InputError
from harness.records import MachineStop

APPLICATION_ID = 0x41524359
FORMAT = 1
_HEADER_MAGIC = b"SQLite format 3\x00"
_HEADER_BYTES = 100
_WAIT_SECONDS = 60.0  # for a reader, where there is no write-ahead log
_MACHINE_CODES = {
    sqlite3.SQLITE_FULL,
    sqlite3.SQLITE_IOERR,
    sqlite3.SQLITE_READONLY,
    sqlite3.SQLITE_CANTOPEN,
    sqlite3.SQLITE_BUSY,
    sqlite3.SQLITE_LOCKED,
    sqlite3.SQLITE_PERM,
}
_DAMAGE_CODES = {sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB}


def refuse_what_is_no_ledger(path: Path) -> None:
    """Read a file's first bytes, and raise `InputError` if it is no ledger of a format that is known.

    SQLite is not asked: even opening a stranger's file through it could write beside it.
    """
    try:
        with path.open("rb") as file:
            header = file.read(_HEADER_BYTES)
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such ledger") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    if len(header) < _HEADER_BYTES or not header.startswith(_HEADER_MAGIC):
        raise InputError(f"{path}: is not a ledger, or its first bytes are damaged; it was left as it is")
    if int.from_bytes(header[68:72], "big") != APPLICATION_ID:
        raise InputError(f"{path}: is a database, but not a ledger of arcassay; it was left as it is")
    written = int.from_bytes(header[60:64], "big")
    if not 1 <= written <= FORMAT:
        raise InputError(
            f"{path}: was written by ledger format {written}; this version reads up to {FORMAT}. "
            "Upgrade the package; the ledger was left as it is"
        )


def connect(path: Path) -> sqlite3.Connection:
    """Connect to a ledger, for writing where that is allowed, or refuse a damaged one as it is.

    Damage is what SQLite's own check finds: its pages and their links. Text that was changed within a
    field is not noticed, unless it is read as JSON.

    Raises
    ------
    InputError
        If it is damaged. Neither the file nor its log has changed.
    """
    file = path.resolve()
    log = file.with_name(f"{file.name}-wal")
    has_log = log.exists() and log.stat().st_size > 0
    if has_log:
        # A connection that may write would move the log into the damaged file when it is closed.
        with contextlib.closing(_connect(path, "ro")) as connection:
            _refuse_damage(path, connection)
    # Where it may, a reader tidies up the log's files when it is the last to close. Where it may not, it
    # could not make them either: without a log, nobody writes, and the file can be read as it is.
    may_write = os.access(file, os.W_OK) and os.access(file.parent, os.W_OK)
    connection = _connect(path, "rw" if may_write else "ro" if has_log else "ro&immutable=1")
    if not has_log:
        try:
            _refuse_damage(path, connection)
        except BaseException:
            connection.close()
            raise
    return connection


def _refuse_damage(path: Path, connection: sqlite3.Connection) -> None:
    with naming(path):
        found = str(connection.execute("PRAGMA quick_check(1)").fetchone()[0])
    if found != "ok":
        raise InputError(_damage_message(path, found.splitlines()[-1]))


def _damage_message(path: Path, what: object) -> str:
    return f"{path}: the ledger is damaged ({what}); it was left as it is"


def create(path: Path) -> None:
    """Make an empty ledger, whole or not at all."""
    draft = path.with_name(f".{path.name}.{os.getpid()}.new")
    schema = resources.files("harness.ledger").joinpath("schema.sql").read_text(encoding="utf-8")
    with naming(path):
        try:
            with contextlib.closing(sqlite3.connect(draft, isolation_level=None)) as connection:
                connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
                connection.execute(f"PRAGMA user_version = {FORMAT}")
                connection.executescript(schema)
            os.replace(draft, path)
        finally:
            draft.unlink(missing_ok=True)


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    with naming(path):
        return sqlite3.connect(f"{path.resolve().as_uri()}?mode={mode}", uri=True, timeout=_WAIT_SECONDS)


def identity(path: Path) -> tuple[int, int] | None:
    """Return what tells a file from another one under the same name; None if there is none."""
    try:
        facts = os.stat(path)
    except OSError:
        return None
    return facts.st_dev, facts.st_ino


@contextlib.contextmanager
def naming(path: Path) -> Iterator[None]:
    """Name the ledger in what goes wrong: `MachineStop` for the machine's doing, `InputError` for damage."""
    try:
        yield
    except json.JSONDecodeError as error:
        raise InputError(_damage_message(path, f"a field is not JSON: {error}")) from error
    except sqlite3.DatabaseError as error:
        # The primary code; that text is not UTF-8 is found by Python, which gives none.
        code = getattr(error, "sqlite_errorcode", None)
        if code is None and isinstance(error, sqlite3.OperationalError):
            raise InputError(_damage_message(path, error)) from error
        primary = -1 if code is None else code & 0xFF
        if primary in _DAMAGE_CODES:
            raise InputError(_damage_message(path, error)) from error
        if primary in _MACHINE_CODES:
            raise MachineStop(_machine_message(path, error)) from error
        raise  # a bug of ours
    except OSError as error:
        raise MachineStop(_machine_message(path, error.strerror)) from error


def _machine_message(path: Path, what: object) -> str:
    return f"{path}: {what}. What was committed before is safe; run again to resume"
