from __future__ import annotations

from datetime import date, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st
from wording.invented import utc

from watcher.errors import UsageError
from watcher.report.week import Week


@given(st.dates(date(1980, 1, 1), date(2090, 1, 1)))
def test_names_read_back(day: date) -> None:
    """The name of the week of any day reads back as that week, and the day lies in it."""
    week = Week.of(utc(day.year, day.month, day.day, 12), "UTC")

    assert Week.parse(week.name) == week
    assert week.monday <= day < week.monday + timedelta(days=7)
    assert week.name == f"{day.isocalendar().year}-W{day.isocalendar().week:02d}"


@pytest.mark.parametrize("text", ["2026-W54", "2025-W53", "2026-48", "2026-W00", "W48", "2026-W48 ", "9999-W60", ""])
def test_other_names_are_refused(text: str) -> None:
    """What is no ISO week is refused with the form that is wanted; 2025 has 52 weeks (ISO 8601)."""
    with pytest.raises(UsageError, match=r"for instance 2026-W48"):
        Week.parse(text)


def test_the_zone_moves_its_ends() -> None:
    """A week in Auckland starts on Sunday 11:00 UTC (UTC+13 in November), and one with a change of clocks has 169 hours."""
    week = Week.parse("2026-W48")
    changing = Week.parse("2026-W43")  # Berlin sets its clocks back on 25 October 2026

    assert week.start("Pacific/Auckland") == utc(2026, 11, 22, 11)
    assert changing.end("Europe/Berlin") - changing.start("Europe/Berlin") == timedelta(hours=169)


def test_weeks_are_counted() -> None:
    """Shifting and counting agree across a year's end."""
    week = Week.parse("2026-W52")

    assert week.shifted(3).name == "2027-W02"
    assert week.shifted(3).since(week) == 3
