"""Seed -> rows: a parcel network whose damage photos a classifier judges, and whose inspection desk looks again later.

Everything here is invented. In the ninth week one depot gets a new camera and its errors triple; the other depots stay
as they were, so that the whole and both carriers stay below the tolerance.

Only `random.Random.random` is drawn from: Python keeps its sequence for a seed from version to version, which it does
not promise for the shaped distributions. The same seed gives the same rows, to the byte.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from functools import cache
from random import Random
from typing import Final

DAY: Final = 86_400
RELEASED: Final = int(datetime(2026, 1, 5, tzinfo=UTC).timestamp())
"""A Monday, midnight UTC."""
DAYS: Final = 24 * 7
"""Days on which photos are taken."""
TOLERANCE: Final = 0.03
ERROR_RATE: Final = 0.018
"""Everywhere, until the camera."""
CAMERA_ERROR_RATE: Final = 3 * ERROR_RATE
CAMERA_DEPOT: Final = "Cedar"
CAMERA_DAY: Final = 8 * 7 + 2
"""The Wednesday of the ninth week, counted from the release."""
DEPOTS: Final = (("Alder", 0.45), ("Birch", 0.35), (CAMERA_DEPOT, 0.20))
"""Share of the volume of every carrier."""
CARRIERS: Final = (("Plover", 0.60), ("Wren", 0.40))
CLASSES: Final = ("damaged", "intact")

_VOLUME: Final = 340
"""Photos on an average day."""
_RHYTHM: Final = (1.25, 1.15, 1.10, 1.10, 1.20, 0.75, 0.45)
"""Monday to Sunday; the mean is 1."""
_DAMAGED: Final = 0.08
_INSPECTED: Final = 0.88
_FIRST_LABEL: Final = 1 * DAY
_LAST_LABEL: Final = 9 * DAY
_CORRECTED: Final = 0.006
"""Of the labels: first noted wrongly, put right within the nine days."""
_REPEATED: Final = 0.004
"""Of the lines: exported twice."""
_UNUSABLE: Final = 0.2
"""Chance of one unusable row on a day."""


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the inspection desk's export, as text, with the second at which it appears there."""

    arrived: int
    """Epoch seconds."""
    parcel: str
    revision: int
    """0: the photo was judged; 1: the desk looked; 2: the desk corrected itself."""
    decided_at: str
    depot: str
    carrier: str
    predicted: str
    observed: str
    """Empty until the desk has looked."""
    inspected_at: str


@dataclass(frozen=True, slots=True)
class _Photo:
    """One judged photo and what is really on it."""

    parcel: str
    time: int
    decided_at: str
    depot: str
    carrier: str
    predicted: str
    truth: str

    def row(self, arrived: int, revision: int, observed: str) -> Row:
        inspected = _text(arrived) if observed else ""
        return Row(
            arrived,
            self.parcel,
            revision,
            self.decided_at,
            self.depot,
            self.carrier,
            self.predicted,
            observed,
            inspected,
        )


def error_rate(depot: str, day: int) -> float:
    """The classifier's true error rate in a depot on a day (0 = the day of the release)."""
    return CAMERA_ERROR_RATE if depot == CAMERA_DEPOT and day >= CAMERA_DAY else ERROR_RATE


def generate(seed: int) -> tuple[Row, ...]:
    """Every row of the scenario, in the order in which the export shows them: by arrival, parcel and revision.

    A photo appears unlabelled when it is judged and again, one revision higher, when the desk has looked: 1 to 9 days
    later, for 88% of the photos, whatever the outcome. A few rows are repeated, a few cannot be used; no usable label
    comes later than 9 days after its photo.
    """
    draw = Random(seed)
    rows: list[Row] = []
    for photo in _photos(draw):
        for row in _lines(draw, photo):
            rows.append(row)
            if draw.random() < _REPEATED:
                rows.append(row)
    for day in range(DAYS):
        if draw.random() < _UNUSABLE:
            rows += _unusable(draw, day)
    return tuple(sorted(rows, key=lambda row: (row.arrived, row.parcel, row.revision, row.observed)))


def _photos(draw: Random) -> Iterator[_Photo]:
    number = 0
    for day in range(DAYS):
        volume = round(_VOLUME * _RHYTHM[day % 7] * (0.9 + 0.2 * draw.random()))
        for second in sorted(_second(draw) for _ in range(volume)):
            number += 1
            yield _photo(draw, f"P{number:06d}", RELEASED + day * DAY + second, day)


def _second(draw: Random) -> int:
    """A second of the working day, 06:00 to 22:00."""
    return 6 * 3600 + int(16 * 3600 * draw.random())


def _photo(draw: Random, parcel: str, time: int, day: int) -> _Photo:
    depot = _pick(draw, DEPOTS)
    carrier = _pick(draw, CARRIERS)
    truth = CLASSES[0] if draw.random() < _DAMAGED else CLASSES[1]
    wrong = draw.random() < error_rate(depot, day)
    return _Photo(parcel, time, _text(time), depot, carrier, _other(truth) if wrong else truth, truth)


def _lines(draw: Random, photo: _Photo) -> Iterator[Row]:
    yield photo.row(photo.time, 0, "")
    if draw.random() >= _INSPECTED:
        return
    # Most labels come in the first days; the delay is drawn without a look at the outcome.
    looked = photo.time + _FIRST_LABEL + int((_LAST_LABEL - _FIRST_LABEL) * draw.random() ** 2)
    if draw.random() >= _CORRECTED:
        yield photo.row(looked, 1, photo.truth)
        return
    yield photo.row(looked, 1, _other(photo.truth))
    corrected = looked + int((photo.time + _LAST_LABEL - looked) * draw.random())
    yield photo.row(max(corrected, looked + 1), 2, photo.truth)


def _unusable(draw: Random, day: int) -> list[Row]:
    """Rows of a parcel that no look can use, each for one of the reasons that occur in real exports."""
    number = 900_000 + day
    photo = _photo(draw, f"P{number}", RELEASED + day * DAY + _second(draw), day)
    looked = photo.time + 2 * DAY
    found = photo.row(looked, 1, photo.truth)
    kind = int(4 * draw.random())
    if kind == 0:
        return [replace(found, parcel="")]
    if kind == 1:
        return [replace(found, decided_at="2026-02-30T09:00:00Z")]
    if kind == 2:
        return [photo.row(photo.time, 0, ""), photo.row(looked, 1, "wet")]
    return [photo.row(photo.time, 0, ""), found, photo.row(looked, 1, _other(photo.truth))]


def _pick(draw: Random, shares: tuple[tuple[str, float], ...]) -> str:
    left = draw.random()
    for name, share in shares[:-1]:
        left -= share
        if left < 0:
            return name
    return shares[-1][0]


def _other(label: str) -> str:
    return CLASSES[1] if label == CLASSES[0] else CLASSES[0]


def _text(time: int) -> str:
    day, second = divmod(time, DAY)
    return f"{_date(day)}T{second // 3600:02}:{second // 60 % 60:02}:{second % 60:02}Z"


@cache
def _date(day: int) -> str:
    return datetime.fromtimestamp(day * DAY, UTC).strftime("%Y-%m-%d")
