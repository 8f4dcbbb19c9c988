"""The ledger as the other rooms see it: short transactions around the statements of this room."""

from __future__ import annotations

import secrets
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from datetime import date, datetime
from types import TracebackType
from typing import Any, Self

from sqlalchemy import Connection, Engine, insert, inspect, select

from watcher.errors import LedgerDamaged, SchemaMismatch, UsageError, WatcherError
from watcher.ledger import append, chain, outbox, read, rejects, source_states
from watcher.ledger.counts import CountTable, read_counts
from watcher.ledger.engine import file_of, make_engine, parse_url, reading, writing
from watcher.ledger.lease import Lease
from watcher.ledger.lock import FileLock
from watcher.ledger.reports import Reports
from watcher.ledger.rows import HEAD, LEDGER, SCHEMA_NUMBER, head_text, read_cells, read_head
from watcher.ledger.size import size_of
from watcher.ledger.tables import META, METADATA, SCHEMA
from watcher.ledger.tokens import Tokens
from watcher.records import (
    Cell,
    CellCounts,
    Entry,
    Head,
    Notice,
    RejectedRow,
    SourceState,
    Standing,
    StoredEvent,
    StoredTerm,
)


def _nowhere(point: str) -> None:
    """The point at which nothing happens."""


class Ledger:
    """A ledger in a file, on a server or in memory. Times come in as arguments; the machine's clock is never read."""

    def __init__(self, engine: Engine, ledger_id: str, *, lock: FileLock | None, write: bool) -> None:
        self._engine = engine
        self._lock = lock
        self._lease = Lease() if engine.dialect.name == "postgresql" else None
        self._write = write
        self._depth = 0
        self.id = ledger_id
        self.tokens = Tokens(self.reading, self.writing)
        self.reports = Reports(self.reading, self.writing)
        self.at_point: Callable[[str], None] = _nowhere
        """Called at named points of a commit: begun, terms, buckets, verdicts, events, look, head, committed."""

    @classmethod
    def open(cls, url: str, *, write: bool = True, create: bool = True, new_id: str | None = None) -> Self:
        """Open the ledger at `url`, making it if `write` and `create`; `new_id` names a made one (drawn otherwise).

        With write=False nothing is made and nothing is locked, so it may be read beside the process that writes it.
        Raises SchemaMismatch, UsageError when there is none, LedgerDamaged, LedgerBusy, WatcherError.
        """
        parsed = parse_url(url)
        engine = make_engine(parsed, write=write, create=create)
        try:
            ledger_id = _ledger_id(engine, make=write and create, new_id=new_id)
        except BaseException:
            engine.dispose()
            raise
        path = file_of(parsed)
        return cls(engine, ledger_id, lock=FileLock(path) if path is not None and write else None, write=write)

    @classmethod
    def memory(cls, *, new_id: str | None = None) -> Self:
        """A ledger that is gone when it is closed, for drafts and rehearsals."""
        return cls.open("sqlite://", new_id=new_id)

    def close(self) -> None:
        """Give back lock, lease and connections."""
        self._depth = 0
        self._release()
        self._engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # --- writing

    @contextmanager
    def writer(self) -> Iterator[Self]:
        """Be the one writer: file lock on SQLite, lease on PostgreSQL; may be entered again inside.

        Raises LedgerBusy, naming the holder if it is known.
        """
        self._must_write()
        if self._depth == 0:
            self._take()
        self._depth += 1
        try:
            yield self
        finally:
            self._depth -= 1
            if self._depth == 0:
                self._release()

    @property
    def held(self) -> bool:
        """Whether this object is the writer, as far as it knows."""
        return self._depth > 0

    def renew(self) -> None:
        """Extend the lease and make sure it is still ours: every few seconds, and before each request that goes out.

        Raises LedgerBusy when another took it over, or when this object is not the writer. With a file lock nothing can
        be lost.
        """
        if not self.held:
            raise UsageError("renew: this process is not the writer of the ledger")
        if self._lease is not None:
            with writing(self._engine) as connection:
                self._lease.check(connection)

    def commit(self, entry: Entry, *, state: SourceState | None = None) -> Head:
        """Add an entry, and the state of its source, in one transaction: all of it is kept, or nothing.

        An acknowledgement needs no writer's lock, so that it can be given beside the daemon. Raises LedgerBusy when
        another process writes or the source moved on since `entry.expected`, ValueError when the entry does not fit.
        """
        self._must_write()
        if entry.kind == "acknowledge":
            return self._commit(entry, state)
        with self.writer():
            return self._commit(entry, state)

    def _commit(self, entry: Entry, state: SourceState | None) -> Head:
        with self.writing() as connection:
            head = append.append(connection, self.id, entry, self.at_point)
            if state is not None:
                source_states.save(connection, state)
        self.at_point("committed")
        return head

    def save_source_state(self, state: SourceState) -> None:
        """Record how a pull went when it added nothing to the chain."""
        with self.writing() as connection:
            source_states.save(connection, state)

    def forget_rejects(self, promise: str | None = None) -> int:
        """Delete the stored raw rows of a promise, or of all; how many these were."""
        with self.writing() as connection:
            return rejects.forget(connection, promise)

    # --- reading

    def head(self) -> Head:
        """The newest look and the digest up to it; look 0 before the first."""
        with self.reading() as connection:
            return read_head(connection)

    def size_bytes(self) -> int:
        """What the ledger takes on disk (in memory: in pages)."""
        with self.reading() as connection:
            return size_of(connection)

    def newest_look(self, source: str) -> tuple[int, int]:
        """(number, epoch) of the newest look of a source; (0, 0) before the first."""
        with self.reading() as connection:
            return append.newest_look(connection, source)

    def newest_at(self) -> int:
        """Epoch of the newest look of all; 0 before the first."""
        with self.reading() as connection:
            return read.newest_at(connection)

    def terms(self, *, source: str | None = None, open_only: bool = True) -> list[StoredTerm]:
        """The promise versions, oldest first."""
        with self.reading() as connection:
            return read.terms(connection, source=source, open_only=open_only)

    def cells(self, term_id: int) -> list[Cell]:
        """The whole first, then by column and value."""
        with self.reading() as connection:
            return [cell for _, cell in read_cells(connection, term_id)]

    def count_table(self, term_id: int, *, since: int | None = None) -> CountTable:
        """The bucket cache of a term as columns; buckets starting at or after `since` (epoch; None: all)."""
        with self.reading() as connection:
            return read_counts(connection, term_id, read_cells(connection, term_id), since)

    def counts(self, term_id: int, *, since: int | None = None) -> list[CellCounts]:
        """The same as records, by (column, value, bucket, level). Buckets before the term's `sealed_until` are sealed."""
        return self.count_table(term_id, since=since).records()

    def memories(self, term_id: int) -> dict[tuple[str, str], Mapping[str, Any]]:
        """(column, value) -> what the newest look left for the next one."""
        with self.reading() as connection:
            return read.memories(connection, term_id)

    def standings(
        self, *, promise: str | None = None, version: str | None = None, open_only: bool = False
    ) -> list[Standing]:
        """The newest standing of every cell: promise by promise in the order of their first looks, the whole first."""
        with self.reading() as connection:
            wanted = [
                term
                for term in read.terms(connection, source=None, open_only=open_only)
                if promise in (None, term.terms.promise) and version in (None, term.terms.version)
            ]
            return read.standings(connection, wanted)

    def history(
        self,
        promise: str,
        version: str,
        column: str = "",
        value: str = "",
        *,
        since: date | None = None,
        until: date | None = None,
        before: date | None = None,
        limit: int = 400,
    ) -> list[tuple[date, int, Standing]]:
        """(UTC day, look, standing): the last of each day, newest first; the next page is `before` the last day of this."""
        with self.reading() as connection:
            return read.history(
                connection, promise, version, (column, value), since=since, until=until, before=before, limit=limit
            )

    def events(
        self,
        *,
        promise: str | None = None,
        kinds: Sequence[str] | None = None,
        limit: int = 100,
        before: tuple[int, int] | None = None,
    ) -> list[StoredEvent]:
        """Events, newest first; the next page is `before` the (look, n) of the last one of this."""
        with self.reading() as connection:
            return read.events(connection, promise=promise, kinds=kinds, before=before, limit=limit)

    def source_state(self, source: str) -> SourceState:
        """How the pulls of a source went; a fresh state when it was never tried."""
        with self.reading() as connection:
            return source_states.read(connection, source)

    def source_states(self) -> list[SourceState]:
        """Of every source that was ever tried, by name."""
        with self.reading() as connection:
            return source_states.read_all(connection)

    def rejects(self, promise: str) -> tuple[dict[str, int], list[RejectedRow]]:
        """(reason -> rows the newest look saw, samples). Samples are outside text."""
        with self.reading() as connection:
            return rejects.read(connection, promise)

    def reject_counts(self) -> dict[str, dict[str, int]]:
        """Promise -> reason -> rows the newest look saw, of all promises."""
        with self.reading() as connection:
            return rejects.counts(connection)

    # --- the outbox

    def waiting(self, route: str, now: datetime, *, limit: int = 1000) -> list[Notice]:
        """Notices of a route that are due, oldest look first."""
        with self.reading() as connection:
            return outbox.waiting(connection, route, now, limit)

    def undelivered(self, route: str, *, limit: int = 1000) -> list[Notice]:
        """All waiting notices of a route, due or not, oldest look first."""
        with self.reading() as connection:
            return outbox.undelivered(connection, route, limit)

    def notices(
        self, *, route: str | None = None, state: str | None = None, promise: str | None = None, limit: int = 100
    ) -> list[Notice]:
        """Notices, newest first."""
        with self.reading() as connection:
            return outbox.listed(connection, route=route, state=state, promise=promise, limit=limit)

    def notice(self, route: str, key: str) -> Notice | None:
        """One notice; None when there is none."""
        with self.reading() as connection:
            return outbox.find(connection, route, key)

    def notice_counts(self) -> dict[tuple[str, str], int]:
        """(route, state) -> notices."""
        with self.reading() as connection:
            return outbox.tally(connection)

    def record_answer(
        self, route: str, key: str, *, state: str, answer: str | None, next_at: datetime | None, tries: int
    ) -> None:
        """Write down what came of a try; `next_at` None leaves it. Raises UsageError for an unknown notice."""
        with self.writing() as connection:
            outbox.record(connection, route, key, state=state, answer=answer, next_at=next_at, tries=tries)

    def record_answers(self, notices: Iterable[Notice]) -> None:
        """Write down what came of a message, for all its notices at once. Raises UsageError for an unknown notice."""
        with self.writing() as connection:
            for one in notices:
                outbox.record(
                    connection,
                    one.route,
                    one.key,
                    state=one.state,
                    answer=one.answer,
                    next_at=one.next_at,
                    tries=one.tries,
                )

    def add_notices(self, notices: Iterable[Notice]) -> int:
        """Write heartbeats, reminders, reports (keys.period_key); one whose route and key is known is left out."""
        with self.writing() as connection:
            return outbox.add(connection, notices)

    def cancel_breach(self, promise: str, version: str, breach_number: int) -> int:
        """Cancel the waiting notices of a withdrawn breach; how many these were."""
        with self.writing() as connection:
            return outbox.cancel_breach(connection, promise, version, breach_number)

    # --- inside

    def _must_write(self) -> None:
        if not self._write:
            raise UsageError("the ledger was opened for reading only")

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A snapshot for this room's own files: other rooms use the methods above."""
        with reading(self._engine) as connection:
            yield connection

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """One transaction behind the head row, for this room's own files."""
        self._must_write()
        with writing(self._engine) as connection:
            # Everything that writes queues behind the head row, so no two writers see the same state.
            read_head(connection, lock=True)
            if self._lease is not None and self._lease.held:
                self._lease.check(connection)
            yield connection

    def _take(self) -> None:
        if self._lock is not None:
            self._lock.take()
        if self._lease is not None:
            with writing(self._engine) as connection:
                # Behind the head row, so that two who find no lease do not both insert one.
                read_head(connection, lock=True)
                self._lease.take(connection)

    def _release(self) -> None:
        if self._lock is not None:
            self._lock.release()
        if self._lease is not None and self._lease.held:
            # The database may be gone: the lease then runs out by itself.
            with suppress(WatcherError), writing(self._engine) as connection:
                self._lease.release(connection)
            self._lease.drop()


def _ledger_id(engine: Engine, *, make: bool, new_id: str | None) -> str:
    if make:
        with writing(engine) as connection:
            if engine.dialect.name == "postgresql":
                # Two first starts at once: the second waits and finds the tables. The number is drawn once, for this use.
                connection.exec_driver_sql("SELECT pg_advisory_xact_lock(6920317448201)")
            if not inspect(connection).has_table(META.name):
                _make_tables(connection, new_id or secrets.token_hex(16))
    with reading(engine) as connection:
        if not inspect(connection).has_table(META.name):
            raise UsageError("this database holds no ledger: the first `watcher look CONFIG` makes it")
        meta = {row.name: row.value for row in connection.execute(select(META))}
    if SCHEMA_NUMBER not in meta or LEDGER not in meta:
        raise LedgerDamaged("meta schema or meta ledger is missing: restore a backup, then run `watcher audit`")
    found = int(meta[SCHEMA_NUMBER]) if meta[SCHEMA_NUMBER].isdecimal() else -1
    if found != SCHEMA:
        raise SchemaMismatch(found, SCHEMA)
    return str(meta[LEDGER])


def _make_tables(connection: Connection, ledger_id: str) -> None:
    METADATA.create_all(connection)
    head = Head(0, chain.genesis(ledger_id))
    rows = {SCHEMA_NUMBER: str(SCHEMA), LEDGER: ledger_id, HEAD: head_text(head)}
    connection.execute(insert(META), [{"name": name, "value": value} for name, value in rows.items()])
