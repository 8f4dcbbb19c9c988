"""What the overview of the board asks of the ledger: few statements, however many promises and however long the history."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

from sqlalchemy import Connection, func, select

from watcher.ledger import canon
from watcher.ledger.counts import counts_of
from watcher.ledger.read import terms as read_terms
from watcher.ledger.rows import read_head
from watcher.ledger.sheet import part_from
from watcher.ledger.standing import standing_from
from watcher.ledger.store import Ledger
from watcher.ledger.tables import BUCKET, CELL, TERM, VERDICT
from watcher.records import INTEGERS, Cell, CellCounts, Head, Standing, StoredTerm

DAYS: Final = 60
"""Days of history before the newest verdict that an overview reads of each promise."""


@dataclass(frozen=True, slots=True)
class Recent:
    """What a sparkline shows of one day."""

    rate: float | None
    """Of the last 28 days as of that day; None before the first label."""
    total: float


@dataclass(frozen=True, slots=True)
class PromiseOverview:
    """One promise version: where its whole stands, which slices are broken, and its last days."""

    stored: StoredTerm
    whole: Standing
    broken: tuple[tuple[str, str], ...]
    """(column, value) of the slices that are broken."""
    warned: tuple[tuple[str, str], ...]
    slices: int
    days: tuple[Recent, ...]
    """Oldest first; days without a look that changed something are not among them."""


def overview(ledger: Ledger, *, days: int = DAYS) -> tuple[Head, tuple[PromiseOverview, ...]]:
    """Every open promise version in the order of the first looks, and the head it was read at."""
    with ledger.reading() as connection:
        head = read_head(connection)
        stored = read_terms(connection, source=None, open_only=True)
        newest = _newest(connection)
        recent = _recent(connection, days)
        found = [_promise(each, newest.get(each.id, []), recent.get(each.id, ())) for each in stored]
        return head, tuple(each for each in found if each is not None)


def _promise(stored: StoredTerm, rows: list[Any], days: tuple[Recent, ...]) -> PromiseOverview | None:
    whole, broken, warned = None, [], []
    for row in rows:
        body = canon.parse(row.body)
        if not row.column:
            cell = Cell(row.column, row.value, part_from(row.part), row.discovered)
            whole = standing_from(body, terms=stored.terms, digest=stored.digest, cell=cell)
        elif body["state"] == "breached":
            broken.append((row.column, row.value))
        elif "warning" in body["flags"]:
            warned.append((row.column, row.value))
    if whole is None:
        return None
    return PromiseOverview(stored, whole, tuple(sorted(broken)), tuple(sorted(warned)), len(rows) - 1, days)


def _newest(connection: Connection) -> Mapping[int, list[Any]]:
    """Term -> the newest verdict row of each of its cells."""
    # A subquery for each cell is one step in the index (cell, day). Grouping, or a join, would read all of the history.
    body = (
        select(VERDICT.c.body)
        .where(VERDICT.c.cell == CELL.c.id)
        .order_by(VERDICT.c.day.desc())
        .limit(1)
        .correlate(CELL)
        .scalar_subquery()
    )
    statement = (
        select(CELL.c.term, CELL.c.column, CELL.c.value, CELL.c.part, CELL.c.discovered, body.label("body"))
        .join_from(CELL, TERM, TERM.c.id == CELL.c.term)
        .where(TERM.c.closed_by.is_(None))
    )
    found: dict[int, list[Any]] = {}
    for row in connection.execute(statement):
        if row.body is not None:
            found.setdefault(row.term, []).append(row)
    return found


def _recent(connection: Connection, days: int) -> Mapping[int, tuple[Recent, ...]]:
    """Term -> the last days of its whole."""
    newest = connection.execute(select(func.max(VERDICT.c.day))).scalar_one()
    if newest is None:
        return {}
    statement = (
        select(CELL.c.term, VERDICT.c.body)
        .join_from(VERDICT, CELL, CELL.c.id == VERDICT.c.cell)
        .join(TERM, TERM.c.id == CELL.c.term)
        .where(TERM.c.closed_by.is_(None), CELL.c.column == "", CELL.c.value == "", VERDICT.c.day > newest - days)
        .order_by(VERDICT.c.day)
    )
    found: dict[int, list[Recent]] = {}
    for row in connection.execute(statement):
        found.setdefault(row.term, []).append(_day(canon.parse(row.body)))
    return {term: tuple(each) for term, each in found.items()}


def _day(body: Mapping[str, Any]) -> Recent:
    recent = body.get("recent")
    labels, errors = (recent[1], canon.amount_from(recent[2])) if recent else (0, 0.0)
    total = body["total"]
    return Recent(errors / labels if labels else None, -99.0 if total is None else total / canon.MICRO)


def cell_counts(ledger: Ledger, term_id: int, column: str, value: str, *, since: int) -> list[CellCounts]:
    """Counts of one cell in the buckets that start at or after `since` (epoch), by bucket and level."""
    statement = (
        select(BUCKET)
        .join_from(CELL, BUCKET, BUCKET.c.cell == CELL.c.id)
        .where(CELL.c.term == term_id, CELL.c.column == column, CELL.c.value == value, BUCKET.c.start >= since)
        .order_by(BUCKET.c.start, BUCKET.c.level)
    )
    with ledger.reading() as connection:
        return [
            CellCounts(column, value, row.start, row.level, counts_of([getattr(row, n) for n in INTEGERS], row.newest))
            for row in connection.execute(statement)
        ]
