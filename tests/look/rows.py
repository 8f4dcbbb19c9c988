"""Rows of an invented year as CSV: labels that come late, corrections, repetitions; the same rows in any number of looks."""

from __future__ import annotations

import csv
import random
from datetime import UTC, datetime, timedelta
from pathlib import Path

RELEASED = datetime(2026, 1, 5, tzinfo=UTC)
HEADER = ("id", "revision", "time", "labelled_at", "site", "prediction", "label")


def text(moment: datetime) -> str:
    """RFC 3339."""
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def year(
    seed: int, days: int, a_day: int, *, late: bool, rate: float = 0.02, jump: int | None = None
) -> list[tuple[str, ...]]:
    """Rows in order of arrival; after day `jump` the error rate triples at site b. `late`: some labels and corrections come
    after the label lag of 5 days."""
    draw, rows = random.Random(seed), []
    for day in range(days):
        for n in range(a_day):
            made = RELEASED + timedelta(days=day, seconds=draw.randrange(86400))
            site = draw.choice("abc")
            wrong = draw.random() < (3 * rate if jump is not None and day >= jump and site == "b" else rate)
            prediction = draw.choice(("yes", "no"))
            label = prediction if not wrong else ("no" if prediction == "yes" else "yes")
            name = f"{day}-{n}"
            if draw.random() < 0.1:
                rows.append((made, (name, "0", text(made), "", site, prediction, "")))
                continue
            lag = timedelta(seconds=draw.randrange(3600, 9 * 86400 if late and draw.random() < 0.1 else 4 * 86400))
            seen = made + lag
            rows.append((seen, (name, "1", text(made), text(seen), site, prediction, label)))
            if draw.random() < 0.03:
                rows.append((seen, (name, "1", text(made), text(seen), site, prediction, label)))
            if draw.random() < 0.03:
                again = seen + timedelta(seconds=draw.randrange(3600, (8 if late else 1) * 86400))
                other = "no" if label == "yes" else "yes"
                rows.append((again, (name, "2", text(made), text(again), site, prediction, other)))
    rows.sort(key=lambda row: row[0])
    return [row for _, row in rows]


def write(path: Path, rows: list[tuple[str, ...]]) -> Path:
    """One CSV file."""
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(HEADER)
        writer.writerows(rows)
    return path


def configuration(*, labelled_at: bool = True, extra: str = "", tolerance: float = 0.03) -> str:
    """A configuration for these rows."""
    return f"""
[ledger]
url = "sqlite:///watcher.db"
[[source]]
name = "desk"
kind = "csv"
path = "rows.csv"
[source.columns]
id = "id"
revision = "revision"
time = "time"
{'labelled_at = "labelled_at"' if labelled_at else ""}
prediction = "prediction"
label = "label"
[[promise]]
name = "triage"
source = "desk"
tolerance = {tolerance}
risk = 0.01
released = 2026-01-05T00:00:00Z
label_lag = "5d"
slices = {{ site = ["a", "b"] }}
release_evidence = {{ labels = 6000, errors = 126 }}
{extra}
"""
