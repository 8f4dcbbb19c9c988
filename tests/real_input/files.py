"""The flights' predictions and labels as CSV file, SQLite table and PostgreSQL table, and a configuration for each."""

from __future__ import annotations

import csv
import sqlite3
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path

import psycopg
from real_input.oracle import Row

HEADER = ("flight", "decided_at", "reported_at", "origin", "predicted", "observed")
TOLERANCES = ("0.12", "0.16", "0.22", "0.45")
SLICED = "0.16-by-origin"
ORIGINS = ("EWR", "JFK", "LGA")


def text(time: int | None) -> str | None:
    """A time as RFC 3339, in UTC."""
    return None if time is None else datetime.fromtimestamp(time, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def lines(rows: Sequence[Row], origins: Sequence[str]) -> list[tuple[str | None, ...]]:
    """What is written, one tuple a row."""
    return [
        (row.id, text(row.time), text(row.labelled_at), origin, row.prediction, row.label)
        for row, origin in zip(rows, origins, strict=True)
    ]


def write_csv(path: Path, found: Sequence[tuple[str | None, ...]]) -> str:
    """The rows as one CSV file; returns the lines of the source for a configuration."""
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(HEADER)
        writer.writerows(found)
    return f'kind = "csv"\npath = "{path.name}"\n'


def write_sqlite(path: Path, found: Sequence[tuple[str | None, ...]]) -> str:
    """The rows as a table of a SQLite file, times as text; returns the lines of the source."""
    with sqlite3.connect(path) as connection:
        connection.execute(f"create table flights ({', '.join(f'{name} text' for name in HEADER)})")
        connection.executemany("insert into flights values (?, ?, ?, ?, ?, ?)", found)
    connection.close()
    return f'kind = "database"\nurl = "sqlite:///{path}"\ntable = "flights"\n'


def write_postgresql(url: str, found: Sequence[tuple[str | None, ...]]) -> str:
    """The rows as a table of a PostgreSQL database, times typed; returns the lines of the source."""
    with psycopg.connect(url.replace("+psycopg", "")) as connection:
        connection.execute(
            "create table flights (flight text, decided_at timestamptz, reported_at timestamptz,"
            " origin text, predicted text, observed text)"
        )
        with connection.cursor() as cursor, cursor.copy("copy flights from stdin") as copy:
            for line in found:
                copy.write_row(line)
    return f'kind = "database"\nurl = "{url}"\ntable = "flights"\n'


def configuration(source: str, tolerances: Sequence[str] = (*TOLERANCES, SLICED)) -> str:
    """A configuration with a promise for each tolerance, all about the same flights."""
    promises = "".join(_promise(name) for name in tolerances)
    return f"""\
[ledger]
url = "sqlite:///watcher.db"

[[source]]
name = "flights"
{source}
[source.columns]
id = "flight"
time = "decided_at"
labelled_at = "reported_at"
prediction = "predicted"
label = "observed"
{promises}"""


def _promise(name: str) -> str:
    slices = f"slices = {{ origin = {list(ORIGINS)} }}\n" if name == SLICED else ""
    return f"""
[[promise]]
name = "late-{name}"
source = "flights"
tolerance = {name.partition("-")[0]}
risk = 0.001
released = 2013-03-16T00:00:00Z
label_lag = "1d"
uncertified = true
{slices}"""
