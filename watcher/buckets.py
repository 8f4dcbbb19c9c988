"""Buckets: spans of prediction time, half-open, aligned to the promise's zone.

A bucket is named by its start, epoch seconds. The first one runs from `released` to the next boundary, every later one from
boundary to boundary. A boundary is an instant at which the zone's wall clock passes a multiple of the width, counted from
local midnight; on the days the clocks change a day is 23 or 25 hours long, and an hour that the wall clock shows twice is
one bucket. Everything follows from one table of offsets, which the statement sends to the database as bound integers, so
that no engine needs to know a time zone and all agree.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterator
from datetime import UTC, datetime
from functools import lru_cache
from typing import Final
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

WIDTHS: Final = tuple(hours * 3600 for hours in (1, 2, 3, 4, 6, 8, 12, 24))
"""Seconds; each divides a day, so that local midnight is always a boundary."""
FIRST_SECOND: Final = 0
LAST_SECOND: Final = 4_133_980_799
"""2100-12-31T23:59:59Z; times outside the years 1970 to 2100 are not believed."""

_DAY: Final = 86_400
_STEP: Final = _DAY // 2


@lru_cache(maxsize=128)
def zone_of(name: str) -> ZoneInfo:
    """Return the IANA zone called `name`; ValueError says what is allowed."""
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError) as error:
        raise ValueError(
            f"time zone {name!r} is not known; give an IANA name such as 'Europe/Berlin' or 'UTC'"
        ) from error


def offset_at(epoch: int, zone: str) -> int:
    """Return the seconds that the wall clock of `zone` is ahead of UTC at `epoch`."""
    delta = datetime.fromtimestamp(epoch, zone_of(zone)).utcoffset()
    assert delta is not None
    return round(delta.total_seconds())


@lru_cache(maxsize=4096)
def _changes(zone: str, year: int) -> tuple[tuple[int, int], ...]:
    """Return (instant, offset from then on) of every change within a UTC year; two changes are never within half a day."""
    first = int(datetime(year, 1, 1, tzinfo=UTC).timestamp())
    last = int(datetime(year + 1, 1, 1, tzinfo=UTC).timestamp())
    found = []
    before = offset_at(first - 1, zone)
    low = first - 1
    while low < last - 1:
        high = min(low + _STEP, last - 1)
        after = offset_at(high, zone)
        if after != before:
            left, right = low, high
            while right - left > 1:
                middle = (left + right) // 2
                if offset_at(middle, zone) == before:
                    left = middle
                else:
                    right = middle
            found.append((right, after))
            before = after
        low = high
    return tuple(found)


def offsets(start: int, until: int, zone: str) -> tuple[tuple[int, int], ...]:
    """Return (from, offset) pieces of the zone's clock over [start, until]: the first begins at `start`, in order of time."""
    if zone == "UTC":
        return ((start, 0),)
    first, last = (datetime.fromtimestamp(epoch, UTC).year for epoch in (start, max(start, until)))
    changes = [change for year in range(first, last + 1) for change in _changes(zone, year)]
    return ((start, offset_at(start, zone)), *(change for change in changes if start < change[0] <= until))


def bucket_offsets(start: int, until: int, width: int, zone: str) -> tuple[tuple[int, int], ...]:
    """Return pieces like `offsets` such that (epoch + offset) // width never falls as time goes on.

    Clocks set back across a boundary (from 00:01 to 23:01 the day before, say) would revisit a bucket that was over; the
    old offset is kept until the new clock has caught up.
    """
    pieces: list[tuple[int, int]] = []
    for instant, offset in offsets(start - 2 * _DAY, until, zone):
        if pieces:
            reached = (instant - 1 + pieces[-1][1]) // width
            if (instant + offset) // width < reached:
                instant = reached * width - offset
        pieces.append((instant, offset))
    position = max(index for index, piece in enumerate(pieces) if index == 0 or piece[0] <= start)
    return ((start, pieces[position][1]), *pieces[position + 1 :])


def wall_offsets(start: int, until: int, zone: str) -> tuple[tuple[int, int | None], ...]:
    """Return (wall seconds from, offset) pieces that turn a wall clock reading into an instant: instant = wall - offset.

    None marks an hour that the clock skipped; an hour that it showed twice is taken as the first. Readings before the
    first piece belong to it.
    """
    (begin, offset), *changes = offsets(start, until, zone)
    pieces: list[tuple[int, int | None]] = [(begin + offset, offset)]
    for instant, after in changes:
        if after > offset:
            pieces.append((instant + offset, None))
            pieces.append((instant + after, after))
        else:
            pieces.append((instant + offset, after))
        offset = after
    return tuple(pieces)


def local_start(epoch: int, width: int, zone: str) -> int:
    """Return the wall clock seconds at which the bucket of `epoch` nominally starts: what the statement groups by."""
    offset = bucket_offsets(epoch, epoch, width, zone)[0][1]
    return (epoch + offset) // width * width


def bucket_starts(released: int, until: int, width: int, zone: str) -> list[int]:
    """Return the starts of all buckets that start before `until`, ascending; the first is `released`.

    `width` is one of `WIDTHS`, `zone` an IANA name; ValueError otherwise.
    """
    _check(width)
    return list(_starts(released, until, width, zone)) if until > released else []


def _starts(released: int, until: int, width: int, zone: str) -> Iterator[int]:
    pieces = bucket_offsets(released, until, width, zone)
    reached = (released + pieces[0][1]) // width
    yield released
    for index, (begin, offset) in enumerate(pieces):
        end = pieces[index + 1][0] if index + 1 < len(pieces) else until
        number = max(reached + 1, (begin + offset) // width)
        while (start := max(begin, number * width - offset)) < min(end, until):
            yield start
            reached, number = number, number + 1


def bucket_end(epoch: int, width: int, zone: str) -> int:
    """Return the end of the bucket that `epoch` lies in: the first later instant at which another bucket starts."""
    return bucket_starts(epoch, epoch + 3 * _DAY, width, zone)[1]


def bucket_of(epoch: int, released: int, width: int, zone: str) -> int:
    """Return the start of the bucket that `epoch` lies in; ValueError before `released`."""
    if epoch < released:
        raise ValueError(f"epoch = {epoch} lies before released = {released}; no bucket holds it")
    starts = bucket_starts(max(released, epoch - 3 * _DAY), epoch + 1, width, zone)
    return starts[bisect_right(starts, epoch) - 1]


def _check(width: int) -> None:
    if width not in WIDTHS:
        allowed = ", ".join(f"{seconds // 3600}h" for seconds in WIDTHS[:-1])
        raise ValueError(f"bucket width = {width} s is not allowed; give one of {allowed}, 1d")
