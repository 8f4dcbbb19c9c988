"""The scenario as files: one CSV file for each ISO week in which rows arrive, and a commented configuration beside them."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable
from datetime import UTC, datetime
from functools import cache
from itertools import groupby
from pathlib import Path
from typing import Final

from watcher.demo.scenario import CARRIERS, CLASSES, DAY, DEPOTS, RELEASED, TOLERANCE, Row, generate
from watcher.errors import UsageError

CONFIGURATION: Final = "watcher.toml"
LABELS: Final = "labels"
HEADER: Final = (
    "parcel",
    "revision",
    "decided_at",
    "depot",
    "carrier",
    "predicted",
    "observed",
    "inspected_at",
)


def _quoted(names: Iterable[str]) -> str:
    return ", ".join(f'"{name}"' for name in names)


def configuration() -> str:
    """The commented configuration that belongs to the scenario, as TOML."""
    released = datetime.fromtimestamp(RELEASED, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    return f"""\
# An invented parcel network. A classifier looks at a photo of every parcel and says "damaged" or "intact";
# an inspection desk opens most of the parcels 1 to 9 days later and writes down what it found.

[ledger]
url = "sqlite:///watcher.db"                # where the evidence is kept; relative to this file

[web]
listen = "127.0.0.1:8750"                   # page, API and metrics

[[source]]
name = "inspection-desk"
kind = "csv"
path = "{LABELS}/*.csv"                       # one file a week, rows are only ever added
every = "10m"                               # how often to look

[source.columns]                            # left: what it means; right: the name of the column
id = "parcel"                               # a row of the same parcel with a higher revision replaces it
revision = "revision"
time = "decided_at"                         # when the photo was judged
labelled_at = "inspected_at"                # when the label became known
prediction = "predicted"
label = "observed"                          # empty while nobody has looked

[[promise]]
name = "damage-photos"
source = "inspection-desk"
classes = [{_quoted(CLASSES)}]             # anything else is rejected and counted
tolerance = {TOLERANCE}                            # the promise: the error rate is at most this
risk = 0.001                                # the chance that a breach is ever raised wrongly
released = {released}             # evidence counts from here
label_lag = "10d"                           # a day is sealed, and counted, this long after its end
unit = "photo"

[promise.release_evidence]                  # what the tolerance was certified on
labels = 6000
errors = 126

[promise.slices]                            # the promise is also judged for each of these
depot = [{_quoted(name for name, _ in DEPOTS)}]
carrier = [{_quoted(name for name, _ in CARRIERS)}]
"""


def prepare(folder: Path) -> Path:
    """Create the folder with the configuration and no rows yet; returns the path of the configuration.

    Raises UsageError if the folder already holds a configuration or rows, which are never overwritten.
    """
    path, labels = folder / CONFIGURATION, folder / LABELS
    for taken in (path, labels):
        if taken.exists():
            raise UsageError(f"folder = {str(folder)!r}: {taken.name} exists there already; name an empty folder")
    labels.mkdir(parents=True)
    path.write_text(configuration(), encoding="utf-8", newline="\n")
    return path


def append(folder: Path, rows: Iterable[Row]) -> None:
    """Add rows, sorted by arrival, to the file of the week in which they arrive.

    Appending day by day leaves the same bytes as appending everything at once. Each call writes whole lines in one
    go, so that a reader never meets half a row.
    """
    for week, found in groupby(rows, key=_week):
        path = folder / LABELS / f"{week}.csv"
        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        if not path.exists():
            writer.writerow(HEADER)
        writer.writerows(_cells(row) for row in found)
        with path.open("a", encoding="utf-8", newline="") as file:
            file.write(text.getvalue())


def write(folder: Path, seed: int) -> Path:
    """Write the whole scenario of a seed into a folder; returns the path of the configuration.

    Raises UsageError if the folder already holds a configuration or rows. Two runs of one seed give the same bytes.
    """
    path = prepare(folder)
    append(folder, generate(seed))
    return path


def _week(row: Row) -> str:
    return _iso_week(row.arrived // DAY)


@cache
def _iso_week(day: int) -> str:
    return datetime.fromtimestamp(day * DAY, UTC).strftime("%G-W%V")


def _cells(row: Row) -> tuple[str | int, ...]:
    return (
        row.parcel,
        row.revision,
        row.decided_at,
        row.depot,
        row.carrier,
        row.predicted,
        row.observed,
        row.inspected_at,
    )
