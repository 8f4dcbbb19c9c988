"""Invented parcels with every column that an example maps, on every engine that one names."""

from __future__ import annotations

import csv
import random
import sqlite3
from datetime import UTC, datetime, timedelta
from functools import cache
from pathlib import Path

RELEASED = datetime(2026, 1, 5, tzinfo=UTC)
DAYS, A_DAY = 20, 30
COLUMNS = (
    "parcel", "revision", "decided_at", "inspected_at", "depot", "shipment", "weight", "chance", "selected", "predicted",
    "observed",
)  # fmt: skip
Row = dict[str, str]


def text(moment: datetime) -> str:
    """RFC 3339."""
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


@cache
def rows() -> tuple[Row, ...]:
    """Twenty days of thirty photos, three a shipment and hour; one in five is not labelled; one in fifty is wrong."""
    draw, found = random.Random(8), []
    for day in range(DAYS):
        for n in range(A_DAY):
            made = RELEASED + timedelta(days=day, hours=6 + n // 3, minutes=n)
            truth = "damaged" if draw.random() < 0.3 else "intact"
            wrong = draw.random() < 0.02
            labelled = draw.random() < 0.8
            found.append(
                {
                    "parcel": f"P{day:02}{n:02}",
                    "revision": "1",
                    "decided_at": text(made),
                    "inspected_at": text(made + timedelta(hours=draw.randrange(1, 200))) if labelled else "",
                    "depot": draw.choice(("Alder", "Birch", "Cedar")),
                    "shipment": f"S{day:02}{n // 3:02}",
                    "weight": draw.choice(("0.2", "1.8")),
                    "chance": draw.choice(("1", "0.1")),
                    "selected": "true" if labelled else "false",
                    "predicted": ("intact" if truth == "damaged" else "damaged") if wrong else truth,
                    "observed": truth if labelled else "",
                }
            )
    return tuple(found)


def write_csv(folder: Path) -> None:
    """labels/january.csv"""
    (folder / "labels").mkdir()
    with (folder / "labels" / "january.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, COLUMNS, lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows())


def write_sqlite(folder: Path) -> None:
    """Table inspections of labels.db."""
    with sqlite3.connect(folder / "labels.db") as connection:
        connection.execute(f"CREATE TABLE inspections ({', '.join(COLUMNS)})")
        marks = ", ".join(f":{name}" for name in COLUMNS)
        connection.executemany(f"INSERT INTO inspections VALUES ({marks})", rows())
    connection.close()


def write_postgresql(url: str) -> None:
    """Tables photos and inspections, with a second model whose photos are another promise's."""
    import psycopg

    with psycopg.connect(url.replace("+psycopg", "")) as connection:
        connection.execute(
            "CREATE TABLE photos (parcel text, decided_at timestamptz, model_version text, depot text, predicted text)"
        )
        connection.execute("CREATE TABLE inspections (parcel text, observed text, inspected_at timestamptz)")
        for row in rows():
            photo = (row["parcel"], row["decided_at"], "2026.01", row["depot"], row["predicted"])
            connection.execute("INSERT INTO photos VALUES (%s, %s, %s, %s, %s)", photo)
            connection.execute(
                "INSERT INTO photos VALUES (%s, %s, '2025.11', %s, %s)",
                ("old" + photo[0], photo[1], photo[3], photo[4]),
            )
            if row["observed"]:
                label = (row["parcel"], row["observed"], row["inspected_at"])
                connection.execute("INSERT INTO inspections VALUES (%s, %s, %s)", label)
