"""The tables term, cell, bucket and event against what the sheets say."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from sqlalchemy import Connection, Table, select

from watcher.ledger.expected import Expected
from watcher.ledger.findings import Findings
from watcher.ledger.sheet import part_text
from watcher.ledger.tables import BUCKET, CELL, EVENT, TERM, VERDICT

Key = tuple[Any, ...]


def compare_tables(connection: Connection, found: Findings, expected: Expected) -> None:
    """Name every row that is missing, added or other than the sheets say."""
    terms = {(t.id,): t.row() for t in expected.terms.values()}
    _compare(connection, found, TERM, 1, terms, lambda row: f"{row[1]!r} version {row[2]!r}")
    cells = {
        (cell_id,): (cell_id, term.id, c.column, c.value, part_text(c.part), c.discovered)
        for cell_id, (term, c) in expected.cells.items()
    }
    _compare(connection, found, CELL, 1, cells, lambda row: f"{row[0]} of term {row[1]} {row[2]}={row[3]!r}")
    buckets = {
        (cell, start, level): (cell, start, level, *columns)
        for cell, starts in expected.buckets.items()
        for start, levels in starts.items()
        for level, columns in levels.items()
    }
    _compare(connection, found, BUCKET, 3, buckets, lambda row: expected.name(row[0], f"start {row[1]} {row[2]!r}"))
    _compare(connection, found, EVENT, 2, expected.events, lambda row: f"look {row[0]} number {row[1]}")
    looks = {key: (*key, look) for key, look in expected.verdicts.items()}
    _compare(connection, found, VERDICT, 2, looks, lambda row: expected.name(row[0], f"day {row[1]}"), width=3)


def _compare(
    connection: Connection,
    found: Findings,
    table: Table,
    key_width: int,
    expected: Mapping[Key, Key],
    name: Callable[[Key], str],
    width: int | None = None,
) -> None:
    columns = list(table.c)[:width]
    missing = dict(expected)
    for fetched in connection.execute(select(*columns)):
        row = tuple(fetched)
        wanted = missing.pop(row[:key_width], None)
        if wanted is None:
            found.add(table.name, name(row), "is in no sheet: added, or its key was changed")
        elif row != wanted or [type(x) for x in row] != [type(x) for x in wanted]:
            names = [c.name for c, x, y in zip(columns, row, wanted, strict=True) if x != y or type(x) is not type(y)]
            found.add(table.name, name(wanted), f"differs from the sheets in {', '.join(names)}")
    for wanted in missing.values():
        found.add(table.name, name(wanted), "is missing")
