"""An invented history with two slice columns, in memory."""

from __future__ import annotations

import random
from collections.abc import Iterable, Mapping, Sequence
from datetime import timedelta
from functools import cache
from pathlib import Path

from look.rows import RELEASED, text

from watcher import assembly, settings
from watcher.look import Watched
from watcher.records import Question, Tally
from watcher.sources.memory import MemorySource

COLUMNS = ("id", "revision", "time", "labelled_at", "depot", "carrier", "prediction", "label")
DAY = 86_400
START = int(RELEASED.timestamp())


def configuration(extra: str = "", columns: str = "") -> str:
    """A promise about these rows."""
    return f"""
[[source]]
name = "desk"
kind = "csv"
path = "rows.csv"
[source.columns]
id = "id"
revision = "revision"
time = "time"
labelled_at = "labelled_at"
prediction = "prediction"
label = "label"
{columns}
[[promise]]
name = "triage"
source = "desk"
tolerance = 0.03
risk = 0.01
released = 2026-01-05T00:00:00Z
label_lag = "3d"
{extra or 'slices = { depot = ["Alder", "Birch"], carrier = ["Plover", "Wren"] }'}
"""


def watched(extra: str = "", columns: str = "") -> list[Watched]:
    """The promise as records."""
    return assembly.watched(settings.parse(configuration(extra, columns), Path(), {}), "desk")


@cache
def rows(days: int = 20, a_day: int = 60, rate: float = 0.02, seed: int = 4) -> tuple[dict[str, str], ...]:
    """Samples with labels one hour to two days later, some corrected on the third day."""
    draw, found = random.Random(seed), []
    for day in range(days):
        for n in range(a_day):
            made = RELEASED + timedelta(days=day, seconds=draw.randrange(DAY))
            seen = made + timedelta(seconds=draw.randrange(3600, 2 * DAY))
            prediction = draw.choice(("yes", "no"))
            wrong = draw.random() < rate
            label = prediction if not wrong else ("no" if prediction == "yes" else "yes")
            row = {
                "id": f"{day}-{n}",
                "revision": "1",
                "time": text(made),
                "labelled_at": text(seen),
                "depot": draw.choice(("Alder", "Birch", "Cedar")),
                "carrier": draw.choice(("Plover", "Plover", "Wren")),
                "prediction": prediction,
                "label": label,
            }
            found.append(row)
            if draw.random() < 0.02:
                other = "no" if label == "yes" else "yes"
                late = text(seen + timedelta(hours=20))
                found.append(row | {"revision": "2", "label": other, "labelled_at": late})
    return tuple(found)


class Remembered(MemorySource):
    """A source that answers each question once: the rows never change, and counting them is what takes time."""

    def __init__(self, found: Iterable[Mapping[str, object]]) -> None:
        super().__init__("desk", COLUMNS, found)
        self._known: dict[Question, Tally] = {}

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """From memory where it is known."""
        for each in questions:
            if each not in self._known:
                [self._known[each]] = super().tally([each])
        return [self._known[each] for each in questions]


@cache
def source(**more: int) -> Remembered:
    """These rows."""
    return Remembered(rows(**more))


@cache
def uncorrected() -> Remembered:
    """The same without corrections."""
    return Remembered([row for row in rows() if row["revision"] == "1"])
