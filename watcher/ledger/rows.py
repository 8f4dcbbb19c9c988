"""Rows of the tables as records, and the statements that several files share."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Table, bindparam, select, update
from sqlalchemy.dialects import postgresql, sqlite

from watcher.errors import LedgerDamaged
from watcher.ledger.sheet import part_from
from watcher.ledger.tables import CELL, META, TERM
from watcher.ledger.terms import terms_from
from watcher.records import Cell, Head, StoredTerm

HEAD = "head"
LEDGER = "ledger"
SCHEMA_NUMBER = "schema"


def head_text(head: Head) -> str:
    """The value of the meta row `head`."""
    return str(head)


def head_from(text: str) -> Head:
    """The inverse of `head_text`. Raises ValueError."""
    number, digest = text.split(":")
    return Head(int(number), digest)


def read_head(connection: Connection, *, lock: bool = False) -> Head:
    """The head of the chain; with `lock` its row is locked, as every append does first."""
    statement = select(META.c.value).where(META.c.name == HEAD)
    found = connection.execute(statement.with_for_update() if lock else statement).scalar_one_or_none()
    if found is None:
        raise LedgerDamaged("meta head is missing: run `watcher audit CONFIG`, restore a backup")
    try:
        return head_from(found)
    except ValueError as error:
        raise LedgerDamaged(
            f"meta head {found!r} is no NUMBER:DIGEST: run `watcher audit`, restore a backup"
        ) from error


def write_head(connection: Connection, head: Head) -> None:
    """Move the head."""
    connection.execute(update(META).where(META.c.name == HEAD).values(value=head_text(head)))


def stored_term(row: Any) -> StoredTerm:
    """A row of the term table."""
    try:
        terms = terms_from(row.terms)
    except (ValueError, TypeError) as error:
        raise LedgerDamaged(f"term {row.promise!r} version {row.version!r} cannot be read: {error}") from error
    return StoredTerm(row.id, terms, row.digest, row.first_look, row.closed_by, row.sealed_until)


def find_term(connection: Connection, promise: str, version: str) -> StoredTerm | None:
    """The term of a promise version."""
    where = (TERM.c.promise == promise, TERM.c.version == version)
    row = connection.execute(select(TERM).where(*where)).one_or_none()
    return None if row is None else stored_term(row)


def read_cells(connection: Connection, term_id: int) -> list[tuple[int, Cell]]:
    """The cells of a term with their ids: the whole first, then by column and value."""
    rows = connection.execute(select(CELL).where(CELL.c.term == term_id))
    # Sorted here, not by the database: its collation is not ours.
    cells = [(r.id, Cell(r.column, r.value, part_from(r.part), r.discovered)) for r in rows]
    return sorted(cells, key=lambda c: c[1].key)


def upsert(connection: Connection, table: Table, key: Sequence[str], rows: Sequence[dict[str, Any]]) -> None:
    """Insert rows or overwrite those of the same key; columns that a row does not give stay as they are."""
    if not rows:
        return
    dialect = postgresql if connection.dialect.name == "postgresql" else sqlite
    statement = dialect.insert(table)
    changed = {name: statement.excluded[name] for name in rows[0] if name not in key}
    connection.execute(statement.on_conflict_do_update(index_elements=list(key), set_=changed), list(rows))


def upsert_plain(
    connection: Connection, table: Table, key: int, names: Sequence[str], rows: Sequence[tuple[Any, ...]]
) -> None:
    """`upsert` for many rows of integers and plain text, handed to the driver as they are; the first `key` names are the
    key. No conversion of the column types takes place.
    """
    if not rows:
        return
    dialect = postgresql if connection.dialect.name == "postgresql" else sqlite
    statement = dialect.insert(table).values({name: bindparam(name) for name in names})
    changed = {name: statement.excluded[name] for name in names[key:]}
    compiled = statement.on_conflict_do_update(index_elements=names[:key], set_=changed).compile(
        dialect=connection.dialect
    )
    if compiled.positional:
        order = [names.index(name) for name in compiled.positiontup or ()]
        same = order == list(range(len(names)))
        given: Any = list(rows) if same else [tuple(row[i] for i in order) for row in rows]
    else:
        given = [dict(zip(names, row, strict=True)) for row in rows]
    connection.exec_driver_sql(str(compiled), given)


def epoch_of(moment: datetime | None) -> int | None:
    """Whole seconds since 1970."""
    return None if moment is None else int(moment.timestamp())
