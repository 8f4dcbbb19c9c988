"""The scenario's rows counted by a plain loop: what each sealed day holds, for the whole and for every slice value."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np

from watcher.demo.scenario import CLASSES, DAY, DAYS, RELEASED, Row

LAG = 10 * DAY
"""The label lag of the configuration."""


@dataclass
class Days:
    """Integers per day since the release."""

    predictions: np.ndarray = field(default_factory=lambda: np.zeros(DAYS, int))
    labels: np.ndarray = field(default_factory=lambda: np.zeros(DAYS, int))
    errors: np.ndarray = field(default_factory=lambda: np.zeros(DAYS, int))


def epoch(text: str) -> int:
    """Epoch seconds of a time of the files; ValueError for a day that does not exist."""
    return int(datetime.fromisoformat(text).timestamp())


def usable(rows: Iterable[Row]) -> list[Row]:
    """The row of highest revision of every parcel, without those that no look can use."""
    top: dict[str, set[Row]] = {}
    for row in rows:
        known = top.get(row.parcel)
        if known is None or row.revision > next(iter(known)).revision:
            top[row.parcel] = {row}
        elif row.revision == next(iter(known)).revision:
            known.add(row)
    found = []
    for parcel, alike in top.items():
        row = next(iter(alike))
        if parcel and len(alike) == 1 and row.observed in ("", *CLASSES) and "02-30" not in row.decided_at:
            found.append(row)
    return found


def count(rows: Iterable[Row]) -> dict[tuple[str, str], Days]:
    """Counts of the whole ('', '') and of every depot and carrier, as if every day had been sealed in time."""
    cells: dict[tuple[str, str], Days] = {}
    for row in usable(rows):
        time = epoch(row.decided_at)
        day = (time - RELEASED) // DAY
        labelled = bool(row.observed) and epoch(row.inspected_at) < RELEASED + (day + 1) * DAY + LAG
        for key in (("", ""), ("depot", row.depot), ("carrier", row.carrier)):
            days = cells.setdefault(key, Days())
            days.predictions[day] += 1
            days.labels[day] += labelled
            days.errors[day] += labelled and row.predicted != row.observed
    return cells
