"""Questions to the ledger that status, board, report, metrics and the next look ask."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import date, timedelta
from typing import Any

from sqlalchemy import Connection, Select, and_, func, or_, select

from watcher.ledger import canon
from watcher.ledger.rows import find_term, read_cells, stored_term
from watcher.ledger.standing import instant, standing_from
from watcher.ledger.tables import CELL, EVENT, LOOK, TERM, VERDICT
from watcher.records import Cell, Event, Standing, StoredEvent, StoredTerm

_FIRST_DAY = date(1970, 1, 1)


def terms(connection: Connection, *, source: str | None, open_only: bool) -> list[StoredTerm]:
    """The promise versions, oldest first."""
    statement = select(TERM).order_by(TERM.c.id)
    if source is not None:
        statement = statement.where(TERM.c.source == source)
    if open_only:
        statement = statement.where(TERM.c.closed_by.is_(None))
    return [stored_term(row) for row in connection.execute(statement)]


def _newest_rows(connection: Connection, term_id: int) -> list[Any]:
    # Every look of a term writes a row for each of its cells: the newest day of one cell is that of all.
    day = (
        select(func.max(VERDICT.c.day))
        .join_from(VERDICT, CELL, CELL.c.id == VERDICT.c.cell)
        .where(CELL.c.term == term_id, CELL.c.column == "", CELL.c.value == "")
        .scalar_subquery()
    )
    statement = (
        select(VERDICT, CELL.c.column, CELL.c.value)
        .join_from(CELL, VERDICT, CELL.c.id == VERDICT.c.cell)
        .where(CELL.c.term == term_id, VERDICT.c.day == day)
    )
    return list(connection.execute(statement))


def memories(connection: Connection, term_id: int) -> dict[tuple[str, str], Mapping[str, Any]]:
    """(column, value) -> what the newest look left for the next one."""
    return {(r.column, r.value): canon.parse(r.memory) for r in _newest_rows(connection, term_id)}


def standings(connection: Connection, wanted: Sequence[StoredTerm]) -> list[Standing]:
    """The newest standing of every cell: promise by promise, the whole first."""
    found = []
    for term in wanted:
        cells = {cell.key: cell for _, cell in read_cells(connection, term.id)}
        rows = sorted(_newest_rows(connection, term.id), key=lambda r: (r.column, r.value))
        found += [_standing(row.body, term, cells[row.column, row.value]) for row in rows]
    return found


def _standing(body: str, term: StoredTerm, cell: Cell) -> Standing:
    return standing_from(canon.parse(body), terms=term.terms, digest=term.digest, cell=cell)


def history(
    connection: Connection,
    promise: str,
    version: str,
    key: tuple[str, str],
    *,
    since: date | None,
    until: date | None,
    before: date | None,
    limit: int,
) -> list[tuple[date, int, Standing]]:
    """(UTC day, look, standing) of one cell, newest day first."""
    term = find_term(connection, promise, version)
    if term is None:
        return []
    found = {cell.key: (cell_id, cell) for cell_id, cell in read_cells(connection, term.id)}.get(key)
    if found is None:
        return []
    cell_id, cell = found
    statement = select(VERDICT).where(VERDICT.c.cell == cell_id).order_by(VERDICT.c.day.desc()).limit(limit)
    if since is not None:
        statement = statement.where(VERDICT.c.day >= _number(since))
    if until is not None:
        statement = statement.where(VERDICT.c.day <= _number(until))
    if before is not None:
        statement = statement.where(VERDICT.c.day < _number(before))
    return [
        (_FIRST_DAY + timedelta(days=row.day), row.look, _standing(row.body, term, cell))
        for row in connection.execute(statement)
    ]


def _number(day: date) -> int:
    return (day - _FIRST_DAY).days


def events(
    connection: Connection,
    *,
    promise: str | None,
    kinds: Sequence[str] | None,
    before: tuple[int, int] | None,
    limit: int,
) -> list[StoredEvent]:
    """Events, newest first, with who acknowledged them."""
    statement = _events(promise).order_by(EVENT.c.look.desc(), EVENT.c.n.desc()).limit(limit)
    if kinds is not None:
        statement = statement.where(EVENT.c.kind.in_(list(kinds)))
    if before is not None:
        look, n = before
        statement = statement.where(or_(EVENT.c.look < look, and_(EVENT.c.look == look, EVENT.c.n < n)))
    who = _acknowledged(connection, promise)
    return [
        StoredEvent(row.look, row.n, instant(row.at), event_of(row), who.get((row.look, row.n)))
        for row in connection.execute(statement)
    ]


def _events(promise: str | None) -> Select[Any]:
    statement = select(EVENT, LOOK.c.at).join_from(EVENT, LOOK, LOOK.c.number == EVENT.c.look)
    return statement if promise is None else statement.where(EVENT.c.promise == promise)


def event_of(row: Any) -> Event:
    """A row of the event table."""
    facts = canon.unplain(canon.parse(row.facts))
    return Event(row.kind, row.promise, row.version, row.column, row.value, row.bucket, facts)


def _acknowledged(connection: Connection, promise: str | None) -> dict[tuple[int, int], str]:
    """(look, n) -> who: an `acknowledged` event names the event it answers in its facts `look`, `event`, `who`."""
    who: dict[tuple[int, int], str] = {}
    for row in connection.execute(_events(promise).where(EVENT.c.kind == "acknowledged").order_by(EVENT.c.look)):
        facts = event_of(row).facts
        if isinstance(facts.get("look"), int) and isinstance(facts.get("event"), int):
            who.setdefault((facts["look"], facts["event"]), str(facts.get("who", "")))
    return who


def newest_at(connection: Connection) -> int:
    """The time of the newest look of any source; 0 without one."""
    return int(connection.execute(select(func.coalesce(func.max(LOOK.c.at), 0))).scalar_one())
