"""Notices on their way: written with the look that made them, answered one by one."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, func, insert, select, update

from watcher.errors import UsageError
from watcher.ledger.keys import event_key, retraining_key
from watcher.ledger.rows import epoch_of
from watcher.ledger.standing import instant
from watcher.ledger.tables import NOTICE
from watcher.records import Entry, Notice, NoticeDraft


def write_drafts(connection: Connection, ledger_id: str, entry: Entry, look: int) -> None:
    """Write the notices of an entry; one that starts retraining for a breach number known to its route is left out."""
    add(connection, [_notice(ledger_id, entry, look, draft) for draft in entry.notices])


def add(connection: Connection, notices: Iterable[Notice]) -> int:
    """Write notices whose (route, key) is new; how many these were."""
    fresh: dict[tuple[str, str], Notice] = {}
    for notice in notices:
        place = (notice.route, notice.key)
        if place not in fresh and find(connection, *place) is None:
            fresh[place] = notice
    if fresh:
        connection.execute(insert(NOTICE), [_row(n) for n in fresh.values()])
    return len(fresh)


def find(connection: Connection, route: str, key: str) -> Notice | None:
    """One notice."""
    row = connection.execute(select(NOTICE).where(NOTICE.c.route == route, NOTICE.c.key == key)).one_or_none()
    return None if row is None else _from_row(row)


def waiting(connection: Connection, route: str, now: datetime, limit: int) -> list[Notice]:
    """Notices of a route that are due at `now`, oldest look first."""
    due = (NOTICE.c.route == route, NOTICE.c.state == "waiting", NOTICE.c.next_at <= epoch_of(now))
    return _ordered(connection, due, limit)


def undelivered(connection: Connection, route: str, limit: int) -> list[Notice]:
    """All waiting notices of a route, due or not, oldest look first: what is in front of a later one."""
    return _ordered(connection, (NOTICE.c.route == route, NOTICE.c.state == "waiting"), limit)


def _ordered(connection: Connection, conditions: Sequence[Any], limit: int) -> list[Notice]:
    order = (NOTICE.c.look, func.coalesce(NOTICE.c.event, -1), NOTICE.c.created, NOTICE.c.key)
    rows = connection.execute(select(NOTICE).where(*conditions).order_by(*order).limit(limit))
    return [_from_row(row) for row in rows]


def listed(
    connection: Connection, *, route: str | None, state: str | None, promise: str | None, limit: int
) -> list[Notice]:
    """Notices, newest first."""
    statement = select(NOTICE).order_by(NOTICE.c.created.desc(), NOTICE.c.look.desc(), NOTICE.c.key).limit(limit)
    for column, wanted in ((NOTICE.c.route, route), (NOTICE.c.state, state), (NOTICE.c.promise, promise)):
        if wanted is not None:
            statement = statement.where(column == wanted)
    return [_from_row(row) for row in connection.execute(statement)]


def record(
    connection: Connection,
    route: str,
    key: str,
    *,
    state: str,
    answer: str | None,
    next_at: datetime | None,
    tries: int,
) -> None:
    """Write down what came of a try. Raises UsageError for a notice that does not exist."""
    values: dict[str, Any] = {"state": state, "answer": answer, "tries": tries}
    if next_at is not None:
        values["next_at"] = epoch_of(next_at)
    done = connection.execute(update(NOTICE).where(NOTICE.c.route == route, NOTICE.c.key == key).values(values))
    if done.rowcount != 1:
        raise UsageError(f"notice {key!r} on route {route!r} does not exist: `watcher notices CONFIG` lists them")


def cancel_breach(connection: Connection, promise: str, version: str, breach_number: int) -> int:
    """Cancel the waiting notices of a breach number that was withdrawn; how many these were."""
    where = (
        NOTICE.c.promise == promise,
        NOTICE.c.version == version,
        NOTICE.c.breach_number == breach_number,
        NOTICE.c.state == "waiting",
    )
    return connection.execute(update(NOTICE).where(*where).values(state="cancelled")).rowcount


def tally(connection: Connection) -> dict[tuple[str, str], int]:
    """(route, state) -> notices."""
    statement = select(NOTICE.c.route, NOTICE.c.state, func.count()).group_by(NOTICE.c.route, NOTICE.c.state)
    return {(route, state): int(count) for route, state, count in connection.execute(statement)}


def _notice(ledger_id: str, entry: Entry, look: int, draft: NoticeDraft) -> Notice:
    if not 0 <= draft.event < len(entry.events):
        raise ValueError(
            f"notice over {draft.route!r}: event {draft.event} is not among the {len(entry.events)} events"
        )
    event = entry.events[draft.event]
    key = event_key(ledger_id, draft.route, look, draft.event)
    if draft.breach_number is not None:
        key = retraining_key(ledger_id, draft.route, event.promise, event.version, draft.breach_number)
    at = instant(entry.at)
    return Notice(
        key=key,
        route=draft.route,
        kind=event.kind,
        promise=event.promise,
        version=event.version,
        look=look,
        event=draft.event,
        state="waiting",
        tries=0,
        next_at=at,
        created=at,
        answer=None,
        breach_number=draft.breach_number,
    )


def _row(notice: Notice) -> dict[str, Any]:
    row = {name: getattr(notice, name) for name in NOTICE.columns.keys()}  # noqa: SIM118 - SQLAlchemy's keys are its own
    row["next_at"] = epoch_of(notice.next_at)
    row["created"] = epoch_of(notice.created)
    return row


def _from_row(row: Any) -> Notice:
    values = {**row._mapping}  # noqa: SLF001 - the public way to a row's names
    return Notice(**{**values, "next_at": instant(row.next_at), "created": instant(row.created)})
