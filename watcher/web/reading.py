"""What pages and API read from the ledger, in the shape they show it; kept for as long as the ledger stays as it is."""

from __future__ import annotations

import threading
from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Final

from markupsafe import Markup

from watcher.ledger.overview import PromiseOverview, cell_counts, overview
from watcher.ledger.store import Ledger
from watcher.records import Cell, Head, Standing, StoredEvent, StoredTerm, Terms
from watcher.report import charts
from watcher.report.snapshot import DayStanding
from watcher.web.places import slice_id
from watcher.web.problems import Refused

DAYS: Final = 400
"""Days of history that a chart shows."""
_DAY: Final = 86_400
Key = tuple[str, str]


class Board:
    """The overview, read again only when the head of the ledger has moved."""

    def __init__(self) -> None:
        self._kept: tuple[Head, tuple[PromiseOverview, ...]] | None = None
        self._lock = threading.Lock()

    def read(self, ledger: Ledger) -> tuple[Head, tuple[PromiseOverview, ...]]:
        """(head, every open promise version)."""
        head = ledger.head()
        kept = self._kept
        if kept is not None and kept[0] == head:
            return kept
        with self._lock:
            if self._kept is None or self._kept[0] != head:
                self._kept = overview(ledger)
            return self._kept


def find_term(ledger: Ledger, promise: str, version: str) -> StoredTerm:
    """A promise version, closed ones too. Raises Refused (404)."""
    for stored in ledger.terms(open_only=False):
        if stored.terms.promise == promise and stored.terms.version == version:
            return stored
    raise Refused(404, "no-such-promise", "There is no promise of this name and version in the ledger.")


def find_cell(cells: Sequence[Cell], name: str) -> Cell:
    """The slice with this id. Raises Refused (404)."""
    for cell in cells:
        if cell.column and slice_id(*cell.key) == name:
            return cell
    raise Refused(404, "no-such-slice", "This promise has no such slice.")


def find_key(cells: Sequence[Cell], column: str, value: str) -> Cell:
    """The cell of a column and value; both empty: the whole. Raises Refused (404)."""
    for cell in cells:
        if cell.key == (column, value):
            return cell
    raise Refused(404, "no-such-slice", "This promise has no such slice.")


def history(ledger: Ledger, terms: Terms, key: Key, limit: int = DAYS) -> tuple[DayStanding, ...]:
    """The last days of a cell, oldest first."""
    rows = ledger.history(terms.promise, terms.version, *key, limit=limit)
    return tuple(DayStanding(*row) for row in reversed(rows))


def day_counts(
    ledger: Ledger, stored: StoredTerm, key: Key, rows: Sequence[DayStanding]
) -> tuple[charts.DayCounts, ...]:
    """Predictions and labels by day, the last 400 days."""
    since = max(stored.terms.released, stored.sealed_until - DAYS * _DAY)
    counts = cell_counts(ledger, stored.id, *key, since=since)
    return charts.daily(counts, rows, stored.terms, stored.sealed_until, key)


def events_of(ledger: Ledger, terms: Terms, limit: int = 100, key: Key | None = None) -> list[StoredEvent]:
    """The newest events of a promise version, or of one of its cells."""
    found = ledger.events(promise=terms.promise, limit=limit)
    return [
        each
        for each in found
        if each.event.version == terms.version and (key is None or (each.event.column, each.event.value) == key)
    ]


def by_total(standings: Sequence[Standing]) -> list[Standing]:
    """The largest share of its threshold first, as the small multiples are ordered."""
    return sorted(standings, key=lambda s: (-s.total / s.threshold, s.column, s.value))


def spark(row: PromiseOverview) -> Markup:
    """The error rate of the last 28 days over the last 60 days, against the tolerance."""
    values = [day.rate for day in row.days if day.rate is not None]
    title = "no labels yet"
    if values:
        title = f"last 28 days: {values[0]:.2%} then, {values[-1]:.2%} now; tolerance {row.whole.tolerance:.2%}"
    return Markup(charts.sparkline(values, row.whole.tolerance, title=title))  # noqa: S704 - numbers, escaped there


def at(epoch: int) -> datetime | None:
    """The time of a look; None for "never"."""
    return datetime.fromtimestamp(epoch, UTC) if epoch else None
