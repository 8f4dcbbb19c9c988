"""Opening a database and its transactions; a driver's errors become the errors of `watcher` here and nowhere else."""

from __future__ import annotations

import re
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from urllib.parse import quote

from sqlalchemy import URL, Connection, Engine, StaticPool, create_engine, event, make_url
from sqlalchemy.exc import ArgumentError, DBAPIError, SQLAlchemyError
from sqlalchemy.pool import QueuePool

from watcher.errors import LedgerBusy, LedgerDamaged, UsageError, WatcherError

BUSY_SECONDS = 5.0
"""How long a transaction waits for another before it gives up."""
WRITES = "watcher_writes"
_NAMES = re.compile(r'\b(user|role) "[^"]*"')
"""Where PostgreSQL repeats who wanted to come in."""


def parse_url(url: str) -> URL:
    """The parsed url. Raises UsageError for anything but SQLite and PostgreSQL; never prints a password."""
    try:
        parsed = make_url(url)
    except ArgumentError as error:
        raise UsageError(
            "ledger url cannot be read: give sqlite:///FILE or postgresql+psycopg://HOST/DATABASE"
        ) from error
    if parsed.get_backend_name() not in ("sqlite", "postgresql"):
        shown = parsed.render_as_string(hide_password=True)
        raise UsageError(f"ledger url {shown!r}: allowed are sqlite:///FILE and postgresql+psycopg://HOST/DATABASE")
    return parsed


def file_of(url: URL) -> Path | None:
    """The file of an SQLite url; None in memory and for a server."""
    if url.get_backend_name() != "sqlite" or url.database in (None, "", ":memory:"):
        return None
    return Path(str(url.database))


def make_engine(url: URL, *, write: bool, create: bool) -> Engine:
    """An engine whose transactions begin as this module wants them."""
    if url.get_backend_name() == "postgresql":
        return create_engine(url, pool_size=5, pool_pre_ping=True, connect_args={"connect_timeout": 10})
    path = file_of(url)
    if path is None:
        engine = create_engine("sqlite://", creator=_memory_connection, poolclass=StaticPool)
    else:
        _check_file(path, create=write and create)
        mode = ("rwc" if create else "rw") if write else "ro"
        engine = create_engine(
            "sqlite://", creator=lambda: _file_connection(path, mode), poolclass=QueuePool, pool_size=5
        )
    event.listen(engine, "begin", _begin)
    return engine


def _check_file(path: Path, *, create: bool) -> None:
    if path.is_dir():
        raise UsageError(f"ledger {str(path)!r} is a folder: name a file")
    if not path.exists() and not create:
        raise UsageError(f"there is no ledger at {str(path)!r}: the first `watcher look CONFIG` makes it")
    if not path.parent.is_dir():
        raise UsageError(f"ledger {str(path)!r}: its folder does not exist; make the folder first")


def _memory_connection() -> sqlite3.Connection:
    return sqlite3.connect(":memory:", isolation_level=None, check_same_thread=False)


def _file_connection(path: Path, mode: str) -> sqlite3.Connection:
    uri = f"file:{quote(str(path.absolute()))}?mode={mode}"
    connection = sqlite3.connect(uri, uri=True, timeout=BUSY_SECONDS, isolation_level=None, check_same_thread=False)
    try:
        if mode == "ro":
            connection = _readable(connection, path, uri)
            connection.execute("PRAGMA query_only = 1")
        else:
            connection.execute("PRAGMA journal_mode = WAL")
            connection.execute("PRAGMA synchronous = FULL")
    except BaseException:
        connection.close()
        raise
    return connection


def _readable(connection: sqlite3.Connection, path: Path, uri: str) -> sqlite3.Connection:
    """A reader needs the -shm file of the WAL; in a folder it may not write, and without a -wal, the file itself is whole."""
    try:
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except sqlite3.OperationalError as error:
        if "unable to open" not in str(error) and "readonly" not in str(error):
            raise
        if path.with_name(path.name + "-wal").exists():
            raise
        connection.close()
        return sqlite3.connect(f"{uri}&immutable=1", uri=True, isolation_level=None, check_same_thread=False)
    return connection


def _begin(connection: Connection) -> None:
    # IMMEDIATE takes the write lock at once: a reader that later wants to write could only fail half way.
    writes = connection.get_execution_options().get(WRITES, False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")


@contextmanager
def reading(engine: Engine) -> Iterator[Connection]:
    """A snapshot: everything read inside belongs to one state of the ledger."""
    with translated(), engine.connect() as connection:
        if engine.dialect.name == "postgresql":
            connection.execution_options(isolation_level="REPEATABLE READ", postgresql_readonly=True)
        with connection.begin():
            yield connection


@contextmanager
def writing(engine: Engine) -> Iterator[Connection]:
    """One transaction: all of it is kept, or nothing."""
    with translated(), engine.connect() as connection:
        connection.execution_options(**{WRITES: True})
        with connection.begin():
            if engine.dialect.name == "postgresql":
                connection.exec_driver_sql(f"SET LOCAL lock_timeout = {int(BUSY_SECONDS * 1000)}")
            yield connection


@contextmanager
def translated() -> Iterator[None]:
    """Turn the errors of the driver into `LedgerBusy`, `LedgerDamaged` or `WatcherError`, without urls or statements."""
    try:
        yield
    except DBAPIError as error:
        raise _named(str(error.orig)) from error
    except sqlite3.Error as error:
        raise _named(str(error)) from error
    except SQLAlchemyError as error:
        raise WatcherError(f"ledger: {type(error).__name__}: {error.args[0] if error.args else ''}") from error


def _named(said: str) -> WatcherError:
    said = _NAMES.sub(r'\1 "..."', said)
    low = said.lower()
    if "locked" in low or "lock timeout" in low or "deadlock" in low:
        return LedgerBusy(f"the ledger is locked by another process ({said}); nothing was written, try again")
    if "full" in low or "no space" in low:
        return WatcherError(f"the ledger's disk is full ({said}); nothing was written: free space and look again")
    if "readonly" in low or "read-only" in low:
        return WatcherError(
            f"the ledger cannot be written ({said}); nothing was written: check its file, folder and owner"
        )
    if "malformed" in low or "not a database" in low:
        return LedgerDamaged(f"the ledger's file is damaged ({said}): restore a backup, then run `watcher audit`")
    return WatcherError(f"the ledger cannot be used ({said}); nothing was written")
