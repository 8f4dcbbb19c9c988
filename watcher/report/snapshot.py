"""What a report is made of: one frozen record, read from a ledger in one go, and nothing else."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, date, datetime
from typing import Final, Protocol

from watcher.records import Cell, CellCounts, Head, Standing, StoredEvent, StoredTerm, Terms

WHOLE: Final = ("", "")
"""Column and value of a promise as a whole."""
_EVENTS: Final = 2000
"""Events of a promise that a report reads, the newest ones."""
_DAYS: Final = 800
"""Days of history that a report reads of a cell; more than its charts can tell apart."""

Key = tuple[str, str]


@dataclass(frozen=True, slots=True)
class DayStanding:
    """Where a cell stood after the last look of a day."""

    day: date
    """UTC day of the look."""
    look: int
    standing: Standing


@dataclass(frozen=True, slots=True)
class Published:
    """The figures of one cell and week as an earlier report gave them."""

    promise: str
    version: str
    column: str
    value: str
    week: str
    """ISO week, "2026-W48"."""
    final: bool
    predictions: int
    labels: int
    errors: float
    look: int
    """The look as of which that report spoke."""


@dataclass(frozen=True, slots=True)
class PromiseSnapshot:
    """One promise version as the ledger knows it."""

    terms: Terms
    unit: str
    """The noun of the configuration, singular."""
    sealed_until: int
    """End of the newest sealed bucket, epoch seconds; `released` while none is."""
    cells: tuple[Cell, ...]
    """The whole first."""
    counts: tuple[CellCounts, ...]
    """Of every cell, bucket and level."""
    standings: tuple[Standing, ...]
    """The newest ones, in the order of the cells they belong to."""
    history: Mapping[Key, tuple[DayStanding, ...]]
    """By cell, the oldest day first."""
    events: tuple[StoredEvent, ...]
    """Newest first."""


@dataclass(frozen=True, slots=True)
class Snapshot:
    """A ledger as of its newest look."""

    head: Head
    at: datetime
    """Of the newest look; no clock is read."""
    promises: tuple[PromiseSnapshot, ...]
    published: tuple[Published, ...] = field(default=())
    """Figures of earlier reports, which are compared with today's."""


class LedgerReader(Protocol):
    """What a snapshot asks of a ledger (`watcher.ledger.store.Ledger` answers it)."""

    def head(self) -> Head:
        """The newest look and the digest up to it."""

    def newest_at(self) -> int:
        """Epoch of the newest look of all; 0 before the first."""

    def terms(self, *, source: str | None = None, open_only: bool = True) -> Sequence[StoredTerm]:
        """The promise versions, oldest first."""

    def cells(self, term_id: int) -> Sequence[Cell]:
        """The whole first."""

    def counts(self, term_id: int, *, since: int | None = None) -> Sequence[CellCounts]:
        """Counts by cell, bucket and level."""

    def standings(
        self, *, promise: str | None = None, version: str | None = None, open_only: bool = False
    ) -> Sequence[Standing]:
        """The newest standing of every cell."""

    def history(
        self, promise: str, version: str, column: str = "", value: str = "", *, limit: int = 400
    ) -> Sequence[tuple[date, int, Standing]]:
        """(UTC day, look, standing), newest first."""

    def events(self, *, promise: str | None = None, limit: int = 100) -> Sequence[StoredEvent]:
        """Events, newest first."""


def snapshot(
    ledger: LedgerReader,
    *,
    units: Mapping[str, str] | None = None,
    promises: Sequence[str] | None = None,
    published: Sequence[Published] = (),
    open_only: bool = True,
) -> Snapshot:
    """Read everything a report needs; the same ledger gives the same snapshot, whatever the clock says.

    `units`: promise -> noun of its configuration (default "sample"); `promises`: names wanted, None = all. A look that
    another process records meanwhile is noticed by its head, and everything is read again.
    """
    nouns = units or {}
    while True:
        head = ledger.head()
        found = tuple(
            _promise(ledger, stored, nouns.get(stored.terms.promise, "sample"))
            for stored in ledger.terms(open_only=open_only)
            if promises is None or stored.terms.promise in promises
        )
        at = datetime.fromtimestamp(ledger.newest_at(), UTC)
        if ledger.head() == head:
            return Snapshot(head, at, found, tuple(published))


def _promise(ledger: LedgerReader, stored: StoredTerm, unit: str) -> PromiseSnapshot:
    terms = stored.terms
    cells = tuple(ledger.cells(stored.id))
    history = {cell.key: _history(ledger, terms, cell) for cell in cells}
    events = ledger.events(promise=terms.promise, limit=_EVENTS)
    return PromiseSnapshot(
        terms=terms,
        unit=unit,
        sealed_until=stored.sealed_until,
        cells=cells,
        counts=tuple(ledger.counts(stored.id)),
        standings=tuple(ledger.standings(promise=terms.promise, version=terms.version)),
        history=history,
        events=tuple(each for each in events if each.event.version == terms.version),
    )


def _history(ledger: LedgerReader, terms: Terms, cell: Cell) -> tuple[DayStanding, ...]:
    rows = ledger.history(terms.promise, terms.version, cell.column, cell.value, limit=_DAYS)
    return tuple(DayStanding(*row) for row in reversed(rows))
