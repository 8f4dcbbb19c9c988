"""The same rows on each engine."""

from __future__ import annotations

import csv
import sqlite3
from collections.abc import Sequence
from pathlib import Path

import psycopg
from sources.rows import COLUMNS, Row

from watcher.sources import Source, SourceSpec, open_source


def write_csv(path: Path, rows: Sequence[Row], columns: Sequence[str] = COLUMNS) -> Path:
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows([[row[name] for name in columns] for row in rows])
    return path


def csv_source(path: Path, **more: object) -> Source:
    return open_source(SourceSpec("desk", "csv", path=path.name, base=path.parent, **more))  # type: ignore[arg-type]


def sqlite_source(path: Path, rows: Sequence[Row], **more: object) -> Source:
    path.unlink(missing_ok=True)
    with sqlite3.connect(path) as connection:
        connection.execute(f"CREATE TABLE samples ({', '.join(COLUMNS)})")
        marks = ", ".join("?" for _ in COLUMNS)
        connection.executemany(
            f"INSERT INTO samples VALUES ({marks})", [[row[name] for name in COLUMNS] for row in rows]
        )
    connection.close()
    return open_source(SourceSpec("desk", "database", url=f"sqlite:///{path}", table="samples", **more))  # type: ignore[arg-type]


TYPED = ("at", "seen")


def postgresql_source(url: str, rows: Sequence[Row], **more: object) -> Source:
    with psycopg.connect(url.replace("+psycopg", "")) as connection:
        columns = ", ".join(f"{name} {'timestamptz' if name in TYPED else 'text'}" for name in COLUMNS)
        connection.execute("DROP TABLE IF EXISTS samples")
        connection.execute(f"CREATE TABLE samples ({columns})")
        marks = ", ".join("%s" for _ in COLUMNS)
        connection.cursor().executemany(
            f"INSERT INTO samples VALUES ({marks})", [[row[name] for name in COLUMNS] for row in rows]
        )
    return open_source(SourceSpec("desk", "database", url=url, table="samples", **more))  # type: ignore[arg-type]
