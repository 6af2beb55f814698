"""Opening the database: where it may lie, how SQLite is set up, what its errors mean."""

from __future__ import annotations

import fcntl
import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TextIO
from urllib.parse import quote

from sqlalchemy import Connection, Engine, QueuePool, StaticPool, create_engine, event, make_url
from sqlalchemy.exc import ArgumentError, DBAPIError

from platewatch.adapters.storage_tables import (
    APPLICATION_ID,
    SCHEMA_NUMBER,
    metadata,
    refusal,
    schema_number,
)
from platewatch.errors import StorageError

BUSY_TIMEOUT_S = 5.0
_WAL_LIMIT_BYTES = 64 * 2**20
_MEMORY = ":memory:"
# WAL needs memory shared between processes, which these cannot give: the file would be damaged.
_NETWORK = ("nfs", "nfs4", "cifs", "smb3", "smbfs", "9p", "afs", "ceph", "lustre", "fuse.sshfs")


class DiskFullError(StorageError):
    """No room for the write; nothing of it was stored. Writing may work again later."""


class DatabaseBusyError(StorageError):
    """Another program held the database longer than the busy timeout; try again."""


def database_path(url: str) -> Path | None:
    """The file of a `sqlite:///…` URL or of a plain path; None for a database in memory."""
    if "://" not in url:
        return None if url == _MEMORY else Path(url)
    try:
        parsed = make_url(url)
    except ArgumentError:
        raise StorageError(
            f"{url!r} is no database URL; write sqlite:///folder/name.sqlite"
        ) from None
    if parsed.get_backend_name() != "sqlite":
        raise StorageError(
            f"database {parsed.get_backend_name()!r} is not supported by this release; "
            "write sqlite:///folder/name.sqlite"
        )
    return Path(parsed.database) if parsed.database not in (None, "", _MEMORY) else None


def open_engine(path: Path | None, *, create: bool, read_only: bool) -> Engine:
    """An engine on a file that was checked and, if allowed, created.

    Write transactions ask for `execution_options(write=True)` and begin IMMEDIATE.
    """
    if path is not None:
        _check_place(path, create=create and not read_only, read_only=read_only)
    engine = _engine(path, read_only)
    try:
        with storage_errors(path):
            if create and not read_only:
                _create(engine)
            with engine.begin() as connection:
                _check_schema(connection, path)
    except BaseException:
        engine.dispose()
        raise
    return engine


@contextmanager
def storage_errors(path: Path | None) -> Iterator[None]:
    """Turn what SQLite says into one line that says where and what to do."""
    try:
        yield
    except DBAPIError as error:
        raise _translated(error.orig, path) from error
    except sqlite3.Error as error:
        raise _translated(error, path) from error


@contextmanager
def held_alone(path: Path | None) -> Iterator[None]:
    """Hold the lock file beside the database; the system frees it even after a kill.

    Raises StorageError naming the process that holds it.
    """
    if path is None:
        yield
        return
    lock = path.with_name(path.name + ".lock")
    with open(lock, "a+", encoding="ascii") as file:
        try:
            _lock(file)
        except OSError:
            file.seek(0)
            raise StorageError(
                f"{path}: another daemon (process {file.read().strip() or 'unknown'}) writes to "
                "this database; stop it or give this one its own database"
            ) from None
        file.truncate(0)
        file.write(f"{os.getpid()}\n")
        file.flush()
        yield


def _lock(file: TextIO, tries: int = 5) -> None:
    """Someone who only looks (`is_held`) has the lock for an instant."""
    for left in reversed(range(tries)):
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            return
        except OSError:
            if not left:
                raise
            time.sleep(0.05)


def is_held(path: Path | None) -> bool:
    """Does a process hold the lock file at this moment?"""
    lock = path.with_name(path.name + ".lock") if path is not None else None
    if lock is None or not lock.exists():
        return False
    try:
        with open(lock, encoding="ascii") as file:
            fcntl.flock(file, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except OSError:
        return False
    return False


def file_system_of(folder: Path, mounts: str) -> str:
    """Kind of file system a folder lies on, from the text of /proc/mounts."""
    best, kind = -1, ""
    for line in mounts.splitlines():
        fields = line.split(" ")
        if len(fields) < 3:
            continue
        point = Path(fields[1].replace("\\040", " ").replace("\\011", "\t"))
        # A later mount on the same point hides the earlier one.
        if folder.is_relative_to(point) and len(point.parts) >= best:
            best, kind = len(point.parts), fields[2]
    return kind


def _check_place(path: Path, *, create: bool, read_only: bool) -> None:
    folder = path.resolve().parent
    if not folder.is_dir():
        raise StorageError(f"{path}: folder {folder} does not exist; create it first")
    if path.is_dir():
        raise StorageError(f"{path}: is a folder; name a file in it")
    if not path.exists() and not create:
        raise StorageError(f"{path}: no such database; check the path")
    if not read_only and not os.access(folder, os.W_OK | os.X_OK, effective_ids=True):
        raise StorageError(f"{path}: folder {folder} is not writable for this user")
    if path.exists():
        _check_file(path, read_only)
    kind = file_system_of(folder, _mounts())
    if kind in _NETWORK and not read_only:
        raise StorageError(
            f"{path}: lies on a network share ({kind}), where SQLite files get damaged; "
            "use a local disk and `platewatch backup` for copies"
        )


def _check_file(path: Path, read_only: bool) -> None:
    wanted = os.R_OK if read_only else os.R_OK | os.W_OK
    if not os.access(path, wanted, effective_ids=True):
        what = "readable" if read_only else "readable and writable"
        raise StorageError(f"{path}: not {what} for this user; check its owner and mode")


def _mounts() -> str:
    try:
        return Path("/proc/mounts").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return ""


def _engine(path: Path | None, read_only: bool) -> Engine:
    def connect() -> sqlite3.Connection:
        # isolation_level None: we begin transactions ourselves, see `begin` below.
        return sqlite3.connect(
            _file_uri(path, read_only),
            timeout=BUSY_TIMEOUT_S,
            isolation_level=None,
            uri=True,
            check_same_thread=False,
        )

    pool = StaticPool if path is None else QueuePool
    engine = create_engine("sqlite://", creator=connect, poolclass=pool)

    @event.listens_for(engine, "connect")
    def set_up(connection: sqlite3.Connection, _: object) -> None:
        connection.execute("PRAGMA synchronous=FULL")
        connection.execute(f"PRAGMA journal_size_limit={_WAL_LIMIT_BYTES}")

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        write = connection.get_execution_options().get("write")
        connection.exec_driver_sql("BEGIN IMMEDIATE" if write else "BEGIN")

    return engine


def _file_uri(path: Path | None, read_only: bool) -> str:
    if path is None:
        return _MEMORY
    uri = "file:" + quote(str(path.resolve()))
    if not read_only:
        return uri
    # A WAL database whose folder we may not write cannot be opened unless nobody writes to
    # it, which is what immutable says.
    closed = not path.with_name(path.name + "-wal").exists()
    locked_folder = not os.access(path.resolve().parent, os.W_OK, effective_ids=True)
    return uri + ("?mode=ro&immutable=1" if closed and locked_folder else "?mode=ro")


def _create(engine: Engine) -> None:
    """Make the tables of a new file; auto_vacuum works only before the first of them."""
    with engine.connect() as connection:
        raw = connection.connection.driver_connection
        assert isinstance(raw, sqlite3.Connection)
        if raw.execute("PRAGMA page_count").fetchone()[0] == 0:
            raw.execute("PRAGMA auto_vacuum=INCREMENTAL")
            raw.execute(f"PRAGMA application_id={APPLICATION_ID}")
        elif raw.execute("PRAGMA application_id").fetchone()[0] != APPLICATION_ID:
            return
        raw.execute("PRAGMA journal_mode=WAL")
    with engine.execution_options(write=True).begin() as connection:
        if connection.exec_driver_sql("PRAGMA user_version").scalar() == 0:
            metadata.create_all(connection)
            connection.execute(schema_number.insert(), {"number": SCHEMA_NUMBER})
            connection.exec_driver_sql(f"PRAGMA user_version={SCHEMA_NUMBER}")
        elif connection.exec_driver_sql("PRAGMA user_version").scalar() == SCHEMA_NUMBER:
            # Nothing reads this table without asking whether it is there.
            refusal.create(connection, checkfirst=True)


def _check_schema(connection: Connection, path: Path | None) -> None:
    found = connection.exec_driver_sql("PRAGMA application_id").scalar()
    if found != APPLICATION_ID:
        raise StorageError(f"{path}: is a database, but not one of platewatch")
    number = int(connection.exec_driver_sql("PRAGMA user_version").scalar_one())
    if number == 0:
        raise StorageError(f"{path}: an empty database; start `platewatch run` on it first")
    if number != SCHEMA_NUMBER:
        remedy = "update platewatch" if number > SCHEMA_NUMBER else "run `platewatch db-upgrade`"
        raise StorageError(
            f"{path}: has schema number {number}, this platewatch needs {SCHEMA_NUMBER}; {remedy}"
        )


_MEANING = {
    "SQLITE_READONLY": "cannot be written; check the owner and mode of the file and its folder",
    "SQLITE_CANTOPEN": "cannot be opened; check that file and folder exist and are accessible",
    "SQLITE_PERM": "access denied; check the owner and mode of the file and its folder",
    "SQLITE_NOTADB": "is not a database; check the path",
    "SQLITE_CORRUPT": "is damaged; stop, keep the file and go back to the last backup",
    "SQLITE_IOERR": "could not be read or written by the disk; check the disk",
}


def _translated(error: BaseException | None, path: Path | None) -> StorageError:
    where = path or "database in memory"
    name = str(getattr(error, "sqlite_errorname", ""))
    if name.startswith("SQLITE_FULL"):
        return DiskFullError(f"{where}: disk full, nothing of this write was stored; make room")
    if name.startswith(("SQLITE_BUSY", "SQLITE_LOCKED")):
        return DatabaseBusyError(
            f"{where}: locked by another program for {BUSY_TIMEOUT_S:g} s; "
            "close programs that have it open for writing"
        )
    for prefix, text in _MEANING.items():
        if name.startswith(prefix):
            return StorageError(f"{where}: {text}")
    return StorageError(f"{where}: {error} ({name or type(error).__name__})")
