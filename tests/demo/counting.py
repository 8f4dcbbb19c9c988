"""The scenario's rows counted by a plain loop: what each sealed day holds, for the whole and for every slice value."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable
from dataclasses import dataclass, field
from datetime import datetime
from functools import cache

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


@cache
def midnight(date: str) -> int:
    """Epoch seconds of the start of a day; ValueError for one that does not exist."""
    return int(datetime.fromisoformat(f"{date}T00:00:00Z").timestamp())


def epoch(text: str) -> int:
    """Epoch seconds of a time of the files, such as 2026-01-05T06:00:00Z."""
    return midnight(text[:10]) + 3600 * int(text[11:13]) + 60 * int(text[14:16]) + int(text[17:19])


def usable(rows: Iterable[Row]) -> list[Row]:
    """The row of highest revision of every parcel, without those that no look can use."""
    top: dict[str, Row] = {}
    conflicting = set()
    for row in rows:
        known = top.get(row.parcel)
        if known is None or row.revision > known.revision:
            top[row.parcel] = row
        elif row.revision == known.revision and row.observed != known.observed:
            conflicting.add(row.parcel)
    return [
        row
        for parcel, row in top.items()
        if parcel and parcel not in conflicting and row.observed in ("", *CLASSES) and "02-30" not in row.decided_at
    ]


def count(rows: Iterable[Row]) -> dict[tuple[str, str], Days]:
    """Counts of the whole ('', '') and of every depot and carrier, as if every day had been sealed in time."""
    cells: defaultdict[tuple[str, str], Days] = defaultdict(Days)
    for row in usable(rows):
        time = epoch(row.decided_at)
        day = (time - RELEASED) // DAY
        labelled = bool(row.observed) and epoch(row.inspected_at) < RELEASED + (day + 1) * DAY + LAG
        for key in (("", ""), ("depot", row.depot), ("carrier", row.carrier)):
            days = cells[key]
            days.predictions[day] += 1
            days.labels[day] += labelled
            days.errors[day] += labelled and row.predicted != row.observed
    return cells
