"""What a look adds to the ledger, and what the ledger gives back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Literal

from watcher.records.counting import CellCounts, RejectedRow
from watcher.records.standing import Event, Standing
from watcher.records.terms import Cell, Terms


@dataclass(frozen=True, slots=True)
class Remarks:
    """What a look knows of a promise besides counts; part of the sheet, so that audit can repeat the look."""

    unlisted: bool = False
    uncertified: bool = False
    stale_after: int = 7 * 86400
    """Seconds; may change freely, hence recorded with every look."""
    late_labels: int = 0


@dataclass(frozen=True, slots=True)
class TermDraft:
    """One promise version inside an entry."""

    promise: str
    version: str
    new_terms: Terms | None
    """Given at the first look only."""
    new_cells: tuple[Cell, ...]
    """In order of discovery; the whole first."""
    counts: tuple[CellCounts, ...]
    """The counts that entered or changed since the newest look, whole new values (not differences)."""
    gone: tuple[tuple[str, str, int, str], ...]
    """(column, value, bucket, level) that had counts and have none any more."""
    sealed: tuple[int, ...]
    """Starts of the buckets sealed by this look, ascending."""
    sealed_until: int
    """End of the newest sealed bucket; `released` while none is."""
    remarks: Remarks
    standings: tuple[Standing, ...]
    """One for every cell, the whole first, then by (column, value)."""
    memories: tuple[Mapping[str, Any], ...]
    """Beside each standing: what the next look must know of it, JSON of strings, integers, booleans and None only."""
    closed: bool = False
    """Superseded by a newer version in this entry."""


@dataclass(frozen=True, slots=True)
class NoticeDraft:
    """One event on its way over one route; `event` is the position in the entry's events."""

    route: str
    event: int
    breach_number: int | None = None
    """Given for a route that starts retraining: at most one notice per route, promise version and breach number."""


@dataclass(frozen=True, slots=True)
class Entry:
    """What one look (or acknowledgement) adds to the ledger in one transaction."""

    source: str
    at: int
    """Epoch seconds."""
    kind: Literal["pull", "acknowledge", "supersede"]
    method: int
    """Number of the method of `bounds`; raised when a formula changes."""
    expected: int
    """Newest look number of this source when the look began (0: none); the entry is refused if it moved on."""
    terms: tuple[TermDraft, ...]
    events: tuple[Event, ...]
    notices: tuple[NoticeDraft, ...] = ()
    rejected: tuple[RejectedRow, ...] = ()
    """Samples, at most 20 a reason; replace the stored ones of the same promise and reason."""
    rejected_counts: Mapping[str, Mapping[str, int]] = field(default_factory=dict)
    """promise -> reason -> rows, of this look."""


@dataclass(frozen=True, slots=True)
class StoredTerm:
    """A promise version as the ledger knows it."""

    id: int
    terms: Terms
    digest: str
    first_look: int
    closed_by: int | None
    """Look number of the superseding entry."""
    sealed_until: int


@dataclass(frozen=True, slots=True)
class StoredEvent:
    """An event with its place in the chain."""

    look: int
    n: int
    at: datetime
    event: Event
    acknowledged_by: str | None = None


@dataclass(frozen=True, slots=True)
class SourceState:
    """How the pulls of a source went; not chained."""

    source: str
    last_try: datetime | None = None
    last_success: datetime | None = None
    failures: int = 0
    """In a row, up to now."""
    failures_total: int = 0
    reason: str | None = None
    detail: str | None = None
    failing_since: datetime | None = None
    duration: float | None = None
    """Seconds of the newest pull."""
    signature: str | None = None
    """Of the files at the newest success: unchanged files need no read until a bucket is due."""


@dataclass(frozen=True, slots=True)
class Notice:
    """A row of the outbox."""

    key: str
    route: str
    kind: str
    """The event's kind, or heartbeat, reminder, report."""
    promise: str
    version: str
    look: int
    event: int | None
    state: Literal["waiting", "delivered", "dead", "cancelled"]
    tries: int
    next_at: datetime
    created: datetime
    answer: str | None
    breach_number: int | None
