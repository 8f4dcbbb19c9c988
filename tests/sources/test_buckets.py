"""Buckets against the standard library's zones, instant by instant."""

from __future__ import annotations

import itertools
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import pytest
from sources.rows import epoch

from watcher.buckets import WIDTHS, bucket_end, bucket_of, bucket_starts, local_start, wall_offsets

ZONES = [
    "UTC",
    "Europe/Berlin",
    "America/New_York",
    "Australia/Lord_Howe",
    "Africa/Casablanca",
    "America/Nuuk",
    "Asia/Kolkata",
    "America/Havana",
]
FROM, UNTIL = epoch("2026-01-15T05:17:00Z"), epoch("2027-01-20T00:00:00Z")


def floored(at: int, width: int, zone: str) -> datetime:
    wall = datetime.fromtimestamp(at, ZoneInfo(zone)).replace(tzinfo=None, fold=0)
    return wall - (wall - wall.replace(hour=0, minute=0, second=0)) % timedelta(seconds=width)


@pytest.mark.parametrize("zone", ZONES)
@pytest.mark.parametrize("width", [3600, 4 * 3600, 86_400])
def test_a_bucket_starts_where_the_floored_wall_clock_changes(zone: str, width: int) -> None:
    """Every quarter of an hour of a year lies in the bucket whose start has the same floored wall clock reading."""
    changes = [FROM]
    for at in range(FROM + 60, UNTIL, 900):
        at -= at % 900
        if at > FROM and floored(at, width, zone) != floored(changes[-1], width, zone):
            changes.append(at)

    assert changes == bucket_starts(FROM, UNTIL, width, zone)


@pytest.mark.parametrize("zone", ZONES)
@pytest.mark.parametrize("width", WIDTHS)
def test_starts_ends_and_places_agree(zone: str, width: int) -> None:
    """Each bucket ends where the next starts, and holds its own first and last second."""
    starts = bucket_starts(FROM, FROM + 300 * 86_400, width, zone)
    for start, end in list(itertools.pairwise(starts))[:: max(1, len(starts) // 400)]:
        assert end == bucket_end(start, width, zone) == bucket_end(end - 1, width, zone)
        assert start == bucket_of(start, FROM, width, zone) == bucket_of(end - 1, FROM, width, zone)
        assert local_start(start, width, zone) == local_start(end - 1, width, zone) < local_start(end, width, zone)


def test_days_of_23_and_25_hours() -> None:
    """On the two days the clocks change a day is 23 and 25 hours long."""
    starts = bucket_starts(epoch("2026-03-01T00:00+01:00"), epoch("2026-12-01T00:00Z"), 86_400, "Europe/Berlin")
    lengths = {
        b - a: datetime.fromtimestamp(a, ZoneInfo("Europe/Berlin")).date() for a, b in itertools.pairwise(starts)
    }

    assert {length: str(day) for length, day in lengths.items() if length != 86_400} == {
        82_800: "2026-03-29",
        90_000: "2026-10-25",
    }


def test_a_clock_set_back_across_midnight_revisits_no_day() -> None:
    """St John's turned its clock from 00:01 to 23:01 of the day before until 2011: days stay spans without holes."""
    starts = bucket_starts(epoch("2010-10-01T12:00Z"), epoch("2010-12-01T00:00Z"), 86_400, "America/St_Johns")

    assert {86_400, 90_000} == {b - a for a, b in itertools.pairwise(starts[1:])}
    assert starts == sorted(set(starts))


def test_skipped_and_repeated_hours_of_a_wall_clock() -> None:
    """A skipped hour has no offset, a repeated one has the first."""
    pieces = wall_offsets(epoch("2026-01-01T00:00Z"), epoch("2026-12-31T00:00Z"), "Europe/Berlin")

    assert [offset for _, offset in pieces] == [3600, None, 7200, 3600]
    assert [epoch("2026-03-29T02:00Z"), epoch("2026-03-29T03:00Z"), epoch("2026-10-25T03:00Z")] == [
        wall for wall, _ in pieces[1:]
    ]


def test_nonsense_is_refused() -> None:
    """Widths that do not divide a day, unknown zones and times before the release are named."""
    with pytest.raises(ValueError, match="width = 5 s"):
        bucket_starts(0, 10, 5, "UTC")
    with pytest.raises(ValueError, match="'Mars/Olympus'"):
        bucket_starts(0, 10, 3600, "Mars/Olympus")
    with pytest.raises(ValueError, match="epoch = 5"):
        bucket_of(5, 10, 3600, "UTC")
    assert bucket_starts(10, 10, 3600, "UTC") == []
