"""Holding the ledger as its one writer, and holding the configuration to it."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass

from sqlalchemy import Connection, Engine

from watcher.daemon.parts import Parts
from watcher.errors import UsageError
from watcher.ledger import read
from watcher.ledger.lock import FileLock
from watcher.ledger.rows import find_term
from watcher.ledger.store import Ledger
from watcher.look import recognise
from watcher.records import Standing
from watcher.settings import Settings


@dataclass(frozen=True, slots=True)
class Held:
    """A ledger that this process alone writes, until it is closed."""

    ledger: Ledger
    _stack: ExitStack

    def close(self) -> None:
        """Give lock, lease and connections back."""
        self._stack.close()


class QueuedLedger(Ledger):
    """A ledger that several threads of this process write: they queue here, in order and as long as it takes, and not in the
    database, which gives up after five seconds.
    """

    def __init__(self, engine: Engine, ledger_id: str, *, lock: FileLock | None, write: bool) -> None:
        self._queue = threading.Lock()
        super().__init__(engine, ledger_id, lock=lock, write=write)

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """One transaction, after those of the other threads."""
        with self._queue, super().writing() as connection:
            yield connection

    def standings(
        self, *, promise: str | None = None, version: str | None = None, open_only: bool = False
    ) -> list[Standing]:
        """As `Ledger.standings`; of one version without reading the terms of all, of which a look would do so for each."""
        if promise is None or version is None:
            return super().standings(promise=promise, version=version, open_only=open_only)
        with self.reading() as connection:
            found = find_term(connection, promise, version)
            wanted = found is not None and (found.closed_by is None or not open_only)
            return read.standings(connection, [found]) if found is not None and wanted else []


def hold(settings: Settings, at_point: Callable[[str], None]) -> Held:
    """Open the ledger and become its writer. Raises SchemaMismatch, LedgerBusy while another writes, WatcherError."""
    with ExitStack() as stack:
        ledger = stack.enter_context(QueuedLedger.open(settings.ledger_url()))
        ledger.at_point = at_point
        stack.enter_context(ledger.writer())
        return Held(ledger, stack.pop_all())


def check_terms(ledger: Ledger, parts: Parts) -> None:
    """Compare the configuration with the frozen terms. Raises TermsChanged, and UsageError where a source is missing."""
    for name, watch in parts.watches.items():
        recognise(ledger, name, watch.promises)
    retired = {
        (promise.terms.promise, promise.terms.version)
        for watch in parts.watches.values()
        for promise in watch.promises
        if promise.retired
    }
    for term in ledger.terms():
        terms = term.terms
        if terms.source not in parts.watches and (terms.promise, terms.version) not in retired:
            raise UsageError(
                f"source {terms.source!r} is not in the configuration, and promise {terms.promise!r} version "
                f"{terms.version!r} rests on it: keep the source, or say retired = true for the promise first"
            )
