"""From an earlier schema number to the present one, after a copy; and copies at any time."""

from __future__ import annotations

import contextlib
import os
import sqlite3
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final
from urllib.parse import quote

from sqlalchemy import Connection, inspect, select, update

from watcher.errors import LedgerDamaged, SchemaMismatch, UsageError, WatcherError
from watcher.ledger.engine import file_of, make_engine, parse_url, translated, writing
from watcher.ledger.lock import FileLock
from watcher.ledger.rows import SCHEMA_NUMBER
from watcher.ledger.tables import META, SCHEMA

Step = Callable[[Connection], None]
STEPS: Final[Mapping[int, Step]] = {}
"""Schema number -> what makes it the next one. The chain never changes: steps rebuild caches and add columns only."""


@dataclass(frozen=True, slots=True)
class Upgraded:
    """What an upgrade did; equal numbers: nothing."""

    found: int
    now: int
    copy: Path | None


def upgrade(url: str, *, copied: bool = False, steps: Mapping[int, Step] = STEPS, wanted: int = SCHEMA) -> Upgraded:
    """Bring a ledger to schema number `wanted`: copy first, then every step and its number in one transaction.

    A PostgreSQL ledger is copied by its own tools: say so with `copied`. Raises SchemaMismatch for a ledger of a newer
    program, LedgerBusy while another process holds it, UsageError when it is no ledger or the copy exists already.
    """
    parsed = parse_url(url)
    path = file_of(parsed)
    lock = FileLock(path) if path is not None else None
    engine = make_engine(parsed, write=True, create=False)
    try:
        if lock is not None:
            lock.take()
        with writing(engine) as connection:
            found = _schema_number(connection)
        if found > wanted:
            raise SchemaMismatch(found, wanted)
        if found == wanted:
            return Upgraded(found, wanted, None)
        target = _copied(path, found, copied=copied)
        with writing(engine) as connection:
            _climb(connection, found, wanted, steps)
        return Upgraded(found, wanted, target)
    finally:
        if lock is not None:
            lock.release()
        engine.dispose()


def backup(source: Path, target: Path) -> None:
    """A consistent copy of an SQLite ledger, also while it is being written: made beside the target, then renamed.

    Raises UsageError when the target exists, WatcherError when it cannot be written.
    """
    if target.exists():
        raise UsageError(f"the copy {str(target)!r} exists already: name another file, or move that one away")
    if not source.is_file():
        raise UsageError(f"there is no ledger at {str(source)!r}")
    part = target.with_name(f"{target.name}.part")
    try:
        reader = f"file:{quote(str(source.absolute()))}?mode=ro"
        with (
            translated(),
            contextlib.closing(sqlite3.connect(reader, uri=True)) as read,
            contextlib.closing(sqlite3.connect(part)) as write,
        ):
            read.backup(write)
        with part.open("rb+") as handle:
            os.fsync(handle.fileno())
        part.rename(target)
    except OSError as error:
        raise WatcherError(f"the copy {str(target)!r} cannot be written: {error.strerror}") from error
    finally:
        part.unlink(missing_ok=True)


def _schema_number(connection: Connection) -> int:
    if not inspect(connection).has_table(META.name):
        raise UsageError("this database holds no ledger: there is nothing to upgrade")
    found = connection.execute(select(META.c.value).where(META.c.name == SCHEMA_NUMBER)).scalar_one_or_none()
    if found is None or not found.isdecimal():
        raise LedgerDamaged(f"meta schema is {found!r}, no number: restore a backup")
    return int(found)


def _copied(path: Path | None, found: int, *, copied: bool) -> Path | None:
    if path is not None:
        target = path.with_name(f"{path.name}.schema-{found}")
        backup(path, target)
        return target
    if not copied:
        raise UsageError("a PostgreSQL ledger is copied by its own tools: run pg_dump, then `watcher upgrade --copied`")
    return None


def _climb(connection: Connection, found: int, wanted: int, steps: Mapping[int, Step]) -> None:
    for number in range(found, wanted):
        if number not in steps:
            raise UsageError(f"there is no way from schema number {number} to {number + 1}: use an older watcher first")
        steps[number](connection)
    connection.execute(update(META).where(META.c.name == SCHEMA_NUMBER).values(value=str(wanted)))
