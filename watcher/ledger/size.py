"""What a ledger takes on disk."""

from __future__ import annotations

from pathlib import Path

from sqlalchemy import Connection, func, select, text

from watcher.ledger.tables import METADATA


def size_of(connection: Connection) -> int:
    """Bytes: file and write-ahead log of SQLite, pages in memory, tables with indexes on PostgreSQL."""
    if connection.dialect.name == "postgresql":
        sizes = (func.pg_total_relation_size(table.name) for table in METADATA.sorted_tables)
        return sum(int(connection.execute(select(size)).scalar_one()) for size in sizes)
    file = next((row[2] for row in connection.execute(text("PRAGMA database_list")) if row[1] == "main"), "")
    if not file:
        pages = connection.execute(text("PRAGMA page_count")).scalar_one()
        return int(pages) * int(connection.execute(text("PRAGMA page_size")).scalar_one())
    parts = (Path(file), Path(f"{file}-wal"))
    return sum(part.stat().st_size for part in parts if part.exists())
