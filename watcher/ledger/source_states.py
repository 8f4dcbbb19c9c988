"""How the pulls of each source went; not chained, rewritten at every try."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

from sqlalchemy import Connection, select

from watcher.ledger.rows import upsert
from watcher.ledger.tables import SOURCE_STATE
from watcher.records import SourceState

_TIMES = ("last_try", "last_success", "failing_since")


def read(connection: Connection, source: str) -> SourceState:
    """The state of a source; a fresh one when it was never tried."""
    row = connection.execute(select(SOURCE_STATE).where(SOURCE_STATE.c.source == source)).one_or_none()
    return SourceState(source) if row is None else _from_row(row)


def read_all(connection: Connection) -> list[SourceState]:
    """Of every source that was ever tried, by name."""
    return sorted((_from_row(row) for row in connection.execute(select(SOURCE_STATE))), key=lambda s: s.source)


def save(connection: Connection, state: SourceState) -> None:
    """Put a state in place of the earlier one."""
    row: dict[str, Any] = {name: getattr(state, name) for name in SOURCE_STATE.columns.keys()}  # noqa: SIM118
    for name in _TIMES:
        row[name] = _micros(row[name])
    upsert(connection, SOURCE_STATE, ("source",), [row])


def _from_row(row: Any) -> SourceState:
    values = {**row._mapping}  # noqa: SLF001 - the public way to a row's names
    for name in _TIMES:
        values[name] = None if values[name] is None else _moment(values[name])
    return SourceState(**values)


def _micros(moment: datetime | None) -> int | None:
    if moment is None:
        return None
    seconds = moment.replace(microsecond=0).timestamp()
    return int(seconds) * 1_000_000 + moment.microsecond


def _moment(micros: int) -> datetime:
    seconds, rest = divmod(micros, 1_000_000)
    return datetime.fromtimestamp(seconds, UTC).replace(microsecond=rest)
